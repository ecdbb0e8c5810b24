package pipeline

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/beam"
)

// Parameters of weights that are found again and again.
const (
	// crossFadeS is how long one set takes to hand over to the next, seconds,
	// or half of the time between them if that is shorter.
	crossFadeS = 0.5
	// snapshotsAMic is how many transforms of noise stand behind a set at least,
	// a microphone: with twice as many as microphones the expected gain is within
	// 3 dB of the best (Reed, Mallett and Brennan 1974, Rapid convergence rate in
	// adaptive arrays, IEEE Trans. AES-10, p. 853).
	snapshotsAMic = 2
	// mostFilterBytes bounds the memory of all sets.
	mostFilterBytes = 256 << 20
	// mostPredicted is how many of the sets predictions are means over.
	mostPredicted = 32
)

// Changes are weights that change with time.
type Changes struct {
	EveryS     float64   `json:"every_s"`
	CrossFadeS float64   `json:"cross_fade_s"` // from each set to the next
	NoiseAtS   []float64 `json:"noise_at_s"`   // where the noise behind each set lies, the mean
	FromS      []float64 `json:"from_s"`       // from when on each set is in force, the middle of its fade; the first from 0
}

// changes are the sets of a beamline, in force one after the other.
type changes struct {
	list   []beam.Handover
	fade   int64
	report Changes
}

// designOverTime finds minimum-variance weights again for every stretch of
// ReestimateEvery seconds that holds enough noise; one that does not is joined
// with the next. Each set is in force from half-way between its noise and that
// of the set before.
func (r *run) designOverTime(task beam.Task, nulls []acoustics.Wave) error {
	stretches, err := r.noiseStretches(task.Rate)
	if err != nil {
		return err
	}
	rate := float64(task.Rate)
	l := &learner{
		line: r.line, task: task, every: int64(math.Round(r.set.ReestimateEvery * rate)), need: snapshotsAMic * len(task.Mics),
		design: beam.MVDR{FloorDB: r.set.floorDB, Nulls: nulls},
	}
	frames := frameStretches(stretches, rate)
	if l.noise, err = beam.NewCovariance(task.Rate, len(task.Mics), task.FFTSize, beam.CovarianceOptions{Stretches: frames}); err != nil {
		return &UsageError{Err: err}
	}
	if err := l.room(frames); err != nil {
		return err
	}
	src, err := r.line.corrected(&watched{Source: r.take.source(), ctx: r.ctx, tell: r.tell("learning the noise", r.take.header.Frames)})
	if err != nil {
		return err
	}
	src, stop := r.ahead(src)
	defer stop()
	if _, err := audio.Copy(src, blockFrames(r.spec.Options.BlockFrames, r.take.header.Channels), l); err != nil {
		return err
	}
	if len(l.sets) == 0 {
		// Too little for one set by that rule: then by that of fixed weights.
		if l.noise.Frames() < len(task.Mics) {
			return tooLittleNoise(r.take.path(), l.noise.Frames(), task)
		}
		if err := l.learn(); err != nil {
			return err
		}
	}
	if err := r.take.rewind(); err != nil {
		return err
	}
	b := r.line
	c := &changes{list: l.sets, fade: int64(math.Round(math.Min(crossFadeS, r.set.ReestimateEvery/2) * rate))}
	c.report = Changes{EveryS: r.set.ReestimateEvery, CrossFadeS: float64(c.fade) / rate}
	for j := range l.sets {
		if j > 0 {
			l.sets[j].At = int64(math.Round((l.centres[j-1] + l.centres[j]) / 2))
		}
		c.report.NoiseAtS = append(c.report.NoiseAtS, l.centres[j]/rate)
		c.report.FromS = append(c.report.FromS, float64(l.sets[j].At)/rate)
	}
	b.changes, b.fit = c, &l.fit
	b.filters, b.model = l.sets[0].Filters, l.sets[0].Filters
	if len(l.sets) == 1 {
		r.report(Finding{Code: "weights-not-reestimated", Severity: Warning, Message: fmt.Sprintf(
			"the noise is enough for one set of weights only, which is in force all the time: %d transforms of %.0f ms are wanted for each; give more of the noise or leave out --reestimate-every",
			l.need, 1000*float64(task.FFTSize)/rate)})
		return nil
	}
	predicted := ""
	if len(l.sets) > mostPredicted {
		predicted = fmt.Sprintf(", of %d of them", mostPredicted)
	}
	r.report(Finding{Code: "weights-reestimated", Severity: Info, Message: fmt.Sprintf(
		"the weights were found %d times on the noise of %g s or more each and hand over in %g s: gain figures are means over the time that they were measured in, predicted ones means over the sets%s",
		len(l.sets), r.set.ReestimateEvery, c.report.CrossFadeS, predicted)})
	return nil
}

// learner is a sink that designs weights from the noise of stretch after
// stretch.
type learner struct {
	line   *beamline
	task   beam.Task
	every  int64 // frames
	need   int   // transforms a set
	design beam.MVDR
	noise  *beam.Covariance

	at      int64
	sets    []beam.Handover
	centres []float64 // frames, of the noise of each set
	fit     beam.Fit  // the worst of all sets
}

// room refuses sets that would outgrow memory, before any is found.
func (l *learner) room(noise [][2]int64) error {
	hop := int64(l.task.FFTSize / 2)
	var transforms, end int64
	for _, s := range noise {
		transforms += max(0, (s[1]-s[0])/hop-1)
		end = s[1]
	}
	sets := min(end/l.every+1, transforms/int64(l.need))
	each := int64(len(l.task.Mics)) * int64(l.task.FFTSize+256) * 8
	if most := mostFilterBytes / each; sets > most {
		return &UsageError{
			Err:  fmt.Errorf("--reestimate-every %g: up to %d sets of weights, %d MB: want at most %d MB", float64(l.every)/float64(l.task.Rate), sets, sets*each>>20, mostFilterBytes>>20),
			Hint: fmt.Sprintf("give --reestimate-every %.0f or more", math.Ceil(float64(end)/float64(most-1)/float64(l.task.Rate))),
		}
	}
	return nil
}

// Write implements audio.Sink.
func (l *learner) Write(src audio.Block) error {
	for src.Frames() > 0 {
		n := int(min(int64(src.Frames()), l.every-l.at%l.every))
		if err := l.noise.Write(src.Slice(0, n)); err != nil {
			return err
		}
		l.at += int64(n)
		src = src.Slice(n, src.Frames())
		if l.at%l.every == 0 && l.noise.Frames() >= l.need {
			if err := l.learn(); err != nil {
				return err
			}
		}
	}
	return nil
}

// learn designs a set from the noise heard and forgets it.
func (l *learner) learn() error {
	if err := l.line.live(l.noise); err != nil {
		return err
	}
	l.design.Noise = l.noise
	w, err := l.design.Weights(l.task)
	if err != nil {
		return refusedWeights(WeightsMinimumVariance, err)
	}
	filters, fit, err := w.Filters(0)
	if err != nil {
		return &UsageError{Err: fmt.Errorf("--weights %s: %w", WeightsMinimumVariance, err)}
	}
	l.fit = beam.Fit{
		Taps: max(l.fit.Taps, fit.Taps), TruncationDB: worse(l.fit.TruncationDB, fit.TruncationDB, len(l.sets)),
		ConstraintDB: worse(l.fit.ConstraintDB, fit.ConstraintDB, len(l.sets)),
	}
	l.sets = append(l.sets, beam.Handover{Filters: filters})
	l.centres = append(l.centres, l.noise.Centre())
	l.noise.Reset()
	return nil
}

// worse is the larger of a figure of n sets and that of one more.
func worse(of, one float64, n int) float64 {
	if n == 0 {
		return one
	}
	return math.Max(of, one)
}

// model is filters with the part of the take that they are in force.
type model struct {
	filters *beam.Filters
	share   float64
}

// models are what predictions are about: the filters, or the sets of them by
// the time that each is in force.
func (b *beamline) models(frames int64) []model {
	if b.changes == nil {
		return []model{{b.model, 1}}
	}
	list := b.changes.list
	step := (len(list) + mostPredicted - 1) / mostPredicted
	var out []model
	all := 0.0
	for j := 0; j < len(list); j += step {
		end := frames
		if j+step < len(list) {
			end = list[j+step].At
		}
		share := math.Max(0, float64(end-list[j].At))
		out = append(out, model{list[min(j+step/2, len(list)-1)].Filters, share})
		all += share
	}
	for i := range out {
		out[i].share /= all
	}
	return out
}
