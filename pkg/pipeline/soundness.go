package pipeline

import (
	"errors"
	"fmt"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/quality"
	"alidade/pkg/rig"
)

// What a steer run inspects of a take: stretches of stretchS seconds in the
// middle of equal parts of it, a twentieth of its length in all, but at least
// leastInspectedS and at most mostInspectedS. A short take is inspected whole.
const (
	stretchS        = 2
	leastInspectedS = 4
	mostInspectedS  = 60
)

// stretches are the frames from..to of a take that are inspected, in order.
func inspected(frames int64, rate int) [][2]int64 {
	second := int64(rate)
	if frames <= leastInspectedS*second {
		return [][2]int64{{0, frames}}
	}
	total := min(max(frames/20, leastInspectedS*second), mostInspectedS*second)
	count := total / (stretchS * second)
	var list [][2]int64
	for k := range count {
		from := (2*k+1)*frames/(2*count) - stretchS*second/2
		list = append(list, [2]int64{from, from + stretchS*second})
	}
	return list
}

// limits of the inspection: those of the run over those of the rig.
func (r *run) limits() quality.Limits {
	return r.spec.Limits.Over(quality.Limits(r.rig.Limits))
}

// inspector looks at stretches of the take with the used microphones of the rig.
// The take's first frame is the next one read afterwards.
func (r *run) inspector(stretches [][2]int64, how inspection) (*quality.Inspector, error) {
	var mics []rig.Mic
	var order []int
	for _, m := range r.rig.Used() {
		mic := r.rig.Mics[m]
		order = append(order, mic.Channel-1)
		if how == inspectAligned {
			mic.ClockPPM = 0
		}
		mics = append(mics, mic)
	}
	h := r.take.header
	q, err := quality.New(mics, h.Rate, quality.Options{Speed: r.rig.speed, Limits: r.limits(), LevelsOnly: how == inspectLevels, SamplesOnly: how == inspectSamples})
	if err != nil {
		return nil, &UsageError{Err: err, Hint: "limits stand in the rig file and in the job file"}
	}
	// What is read for each stretch: with several clocks more than the stretch.
	read := slices.Clone(stretches)
	var total int64
	for i, s := range stretches {
		if how == inspectAligned {
			read[i][0], read[i][1] = r.rig.clockReach(s[0], s[1], h.Frames)
		}
		total += read[i][1] - read[i][0]
	}
	stage := "checking"
	if how == inspectAligned {
		stage = "comparing clocks"
	}
	watch := &watched{Source: r.take.source(), ctx: r.ctx, tell: r.tell(stage, total)}
	var at, position int64 // of what was inspected, of the reader
	for i, s := range stretches {
		from, to := read[i][0], read[i][1]
		if from != position {
			if err := r.take.reader.SeekFrame(from); err != nil {
				return nil, fmt.Errorf("%s: %w", r.take.path(), err)
			}
		}
		position = to
		if err := q.Gap(s[0] - at); err != nil {
			return nil, err
		}
		at = s[1]
		src, err := audio.Map(audio.Section(watch, 0, to-from), order, nil)
		if err != nil {
			return nil, err
		}
		if how == inspectAligned {
			if src, err = r.rig.onOneClock(src, from); err != nil {
				return nil, err
			}
			src = audio.Section(src, s[0]-from, s[1]-from)
		}
		if _, err := audio.Copy(src, blockFrames(r.spec.Options.BlockFrames, h.Channels), q); err != nil {
			return nil, err
		}
	}
	if err := q.Close(); err != nil {
		return nil, err
	}
	return q, r.take.rewind()
}

// sound inspects the take before it is steered, leaves dead microphones out of
// the beam, measures the clocks if that is asked for, and reports the rest.
// With --no-measure nothing but the levels is looked at, for dead channels.
func (r *run) sound() error {
	stretches := inspected(r.take.header.Frames, r.take.header.Rate)
	if r.set.NoMeasure || r.set.AlignClocks {
		if !r.set.KeepDead {
			q, err := r.inspector(stretches, inspectLevels)
			if err != nil {
				return err
			}
			if err := r.inspectedFindings(q.Result()); err != nil {
				return err
			}
		}
		if r.set.AlignClocks {
			if err := r.alignClocks(); err != nil {
				return err
			}
		}
		if r.set.NoMeasure {
			return nil
		}
	}
	found, err := r.inspectAll(stretches)
	if err != nil {
		return err
	}
	return r.inspectedFindings(found)
}

// inspectedFindings reports what an inspection found and leaves out of the beam
// what is dead.
func (r *run) inspectedFindings(found *quality.Result) error {
	used := r.rig.Used()
	alive := len(used) - len(found.Dead)
	silence := alive == 0
	for _, k := range found.Dead {
		if !slices.Contains(r.dead, used[k]) {
			r.dead = append(r.dead, used[k])
		}
	}
	if !r.set.KeepDead && len(found.Dead) > 0 && !silence {
		if alive < 2 {
			return &HintedError{
				Err:  fmt.Errorf("%s: %d of %d microphones hold sound: a beam needs two", r.take.path(), alive, len(used)),
				Hint: "look at cables, plugs and power; --keep-dead steers with all of them all the same",
			}
		}
		for _, k := range found.Dead {
			r.left = append(r.left, used[k])
		}
		r.rig = r.rig.without(r.left)
	}
	if r.flags == nil {
		r.flags = map[int][]string{}
	}
	for _, c := range found.Channels {
		for _, flag := range c.Flags {
			if !slices.Contains(r.flags[c.Channel], flag) {
				r.flags[c.Channel] = append(r.flags[c.Channel], flag)
			}
		}
	}
	for _, f := range found.Findings {
		g := Finding{Code: f.Code, Severity: Severity(f.Severity), Message: f.Message(), Channels: f.Channels}
		if f.Code == quality.CodeDead {
			// What was mended is no error any more, and what is asked for none either.
			g.Severity = Warning
			switch {
			case silence:
				continue // channel-silent says it of the whole take
			case r.set.KeepDead:
				g.Message = f.Measured + ", and is still part of the beam (--keep-dead)"
			default:
				g.Message = f.Measured + ", and was left out of the beam: look at its cable, plug and power (--keep-dead steers with it all the same)"
			}
		}
		r.report(g)
	}
	return nil
}

// ofThoseLeft is an error of a beam: of the options, unless microphones were left
// out on the way, which is the take's affair.
func (r *run) ofThoseLeft(err error) error {
	var usage *UsageError
	if len(r.left) == 0 || !errors.As(err, &usage) {
		return err
	}
	return &HintedError{
		Err:  fmt.Errorf("%s: without its dead microphones: %w", r.take.path(), usage.Err),
		Hint: "mend the microphones, or --keep-dead steers with all of them",
	}
}
