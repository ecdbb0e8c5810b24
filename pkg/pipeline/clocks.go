package pipeline

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/delay"
	"alidade/pkg/quality"
)

// What --align-clocks listens to: the first alignedS seconds of the take, and of
// a longer one as many stretches again over all of it, once what the first tell
// has been undone.
const alignedS = 64

// clocks are the clocks of the microphones in use, parts per million, and nil
// if none is stated or measured.
func (l *loadedRig) clocks() []float64 {
	var ppm []float64
	some := false
	for _, m := range l.Used() {
		ppm = append(ppm, l.Mics[m].ClockPPM)
		some = some || l.Mics[m].ClockPPM != 0
	}
	if !some {
		return nil
	}
	return ppm
}

// onOneClock returns the channels of the used microphones, in rig order, as one
// clock would have recorded them; first is the frame of the take that src
// begins with.
func (l *loadedRig) onOneClock(src audio.Source, first int64) (audio.Source, error) {
	ppm := l.clocks()
	if ppm == nil {
		return src, nil
	}
	kernel, err := farrowKernel()
	if err != nil {
		return nil, err
	}
	out, err := delay.NewDrift(src, kernel, ppm, first)
	if err != nil {
		return nil, &UsageError{Err: fmt.Errorf("rig %s: clock_ppm: %w", l.Name, err)}
	}
	return out, nil
}

// clockReach is the stretch of a take, half-open, that onOneClock needs to make
// the frames from..to of it: longer by how far the clocks have run apart, and by
// the ends of the kernel, as far as the take goes.
func (l *loadedRig) clockReach(from, to, frames int64) (low, high int64) {
	ppm := l.clocks()
	if ppm == nil {
		return from, to
	}
	const kernel = 128 // frames: longer than any Farrow kernel that is used
	slow, fast := min(0, slices.Min(ppm))*1e-6, max(0, slices.Max(ppm))*1e-6
	low = from + int64(math.Floor(slow*float64(from))) - kernel
	high = to + int64(math.Ceil(fast*float64(to))) + kernel
	return max(0, low), max(to, min(frames, high))
}

// clocked is the rig with so much added to the clocks of its used microphones.
func (l *loadedRig) clocked(ppm []float64) *loadedRig {
	out, changed := *l, *l.Rig
	changed.Mics = slices.Clone(l.Mics)
	for k, m := range l.Used() {
		if ppm[k] == ppm[k] {
			changed.Mics[m].ClockPPM += ppm[k]
		}
	}
	out.Rig = &changed
	return &out
}

// alignClocks measures the clocks of the take and states them in the rig in
// force. What cannot be measured stays as the rig file has it, with a finding.
func (r *run) alignClocks() error {
	h := r.take.header
	second := int64(h.Rate)
	r.aligned = &Clocks{}
	q, err := r.inspector([][2]int64{{0, min(h.Frames, alignedS*second)}}, inspectAligned)
	if err != nil {
		return err
	}
	first, why := q.Clocks()
	if first == nil {
		r.report(Finding{Code: "clocks-not-measured", Severity: Warning, Message: "the clocks of the channels could not be measured (--align-clocks): " + why +
			"; the channels were taken as the rig file has them: record a clap or a steady sound from one side in the first minute, or state clock_ppm in the rig file"})
		return nil
	}
	r.rig = r.rig.clocked(first.PPM)
	c := first
	if h.Frames > 2*alignedS*second {
		var list [][2]int64
		for k := range int64(alignedS) {
			from := (2*k+1)*h.Frames/(2*alignedS) - second
			list = append(list, [2]int64{from, from + stretchS*second})
		}
		if q, err = r.inspector(list, inspectAligned); err != nil {
			return err
		}
		rest, why := q.Clocks()
		if rest != nil && len(rest.Groups) <= len(first.Groups) {
			// What is left of the groups is small, and may look like one clock.
			rest, why = q.ClocksOf(first.Groups, first.Moved)
		} else {
			rest = nil
		}
		if rest != nil {
			r.rig = r.rig.clocked(rest.PPM)
			c.ErrorPPM, c.SpanS = rest.ErrorPPM, rest.SpanS
		} else {
			if why == "" {
				why = "it found other groups"
			}
			r.report(Finding{Code: "clocks-from-the-start", Severity: Warning, Message: fmt.Sprintf(
				"the clocks were measured in the first %.0f s only (%s): at the end of the take they may be apart by %.0f µs", c.SpanS, why, 2*c.ErrorPPM*float64(h.Frames)/float64(h.Rate))})
		}
	}
	used := r.rig.Used()
	r.aligned = &Clocks{StandardErrorPPM: number(c.ErrorPPM), SpanS: number(c.SpanS), SourceMoved: c.Moved}
	text := ""
	for k, group := range first.Groups {
		g := ClockGroup{PPM: r.rig.Mics[used[group[0]]].ClockPPM}
		for _, m := range group {
			g.Channels = append(g.Channels, r.rig.Mics[used[m]].Channel)
		}
		slices.Sort(g.Channels)
		r.aligned.Groups = append(r.aligned.Groups, g)
		if k > 0 {
			text += fmt.Sprintf("; %s by %+.3f ppm", plural(g.Channels, "channel %s", "channels %s"), g.PPM-r.aligned.Groups[0].PPM)
		}
	}
	if text == "" {
		r.report(Finding{Code: "clocks-agree", Severity: Info, Message: fmt.Sprintf("all channels run on one clock, measured over %.0f s", c.SpanS)})
		return nil
	}
	r.report(Finding{Code: "clocks-aligned", Severity: Info, Message: fmt.Sprintf("%s run on one clock%s (± %.3f, measured over %.0f s): resampled to the first",
		plural(r.aligned.Groups[0].Channels, "channel %s", "channels %s"), text, 2*c.ErrorPPM, c.SpanS)})
	return nil
}

// inspection is how a take is inspected.
type inspection int

const (
	inspectLevels  inspection = iota // the levels alone
	inspectRaw                       // as it was recorded
	inspectSamples                   // single samples of that alone
	inspectAligned                   // as one clock would have recorded it
)

// inspectAll inspects the take as it was recorded, and where several clocks
// are known also as one would have recorded it: single samples are looked at in
// the one, sound in the other.
func (r *run) inspectAll(stretches [][2]int64) (*quality.Result, error) {
	clocks := r.rig.clocks() != nil
	how := inspectRaw
	if clocks {
		how = inspectSamples
	}
	q, err := r.inspector(stretches, how)
	if err != nil {
		return nil, err
	}
	raw := q.Result()
	if !clocks {
		return raw, nil
	}
	if q, err = r.inspector(stretches, inspectAligned); err != nil {
		return nil, err
	}
	return q.Result().WithSamplesOf(raw), nil
}
