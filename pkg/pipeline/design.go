package pipeline

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/measure"
)

// leastDesignHz is the finest spacing of bins that a design may have; the
// transform is the smallest power of two below it.
const leastDesignHz = 24

// correctTimes moves the delay corrections of the rig from the filters to the
// channels themselves: a design knows the geometry and nothing of them.
func (b *beamline) correctTimes() {
	shift := make([]float64, len(b.used))
	some := false
	for i, m := range b.used {
		shift[i] = b.rig.Mics[m].Delay
		some = some || shift[i] != 0
	}
	if some {
		b.shift = shift
	}
}

// task is what the designs are asked for.
func (b *beamline) task(rate int) beam.Task {
	size := 1 << int(math.Ceil(math.Log2(float64(rate)/leastDesignHz)))
	return beam.Task{
		Mics: b.at, Reference: b.ref, Look: b.look, Speed: b.rig.speed, Rate: rate, FFTSize: size,
		UndoSpreading: b.set.UndoSpreading,
	}
}

// design puts weights that depend on frequency in place of delay-and-sum.
func (r *run) design() error {
	b := r.line
	task := b.task(r.take.header.Rate)
	var nulls []acoustics.Wave
	for _, d := range r.set.nulls {
		nulls = append(nulls, acoustics.Plane{From: d})
	}
	var d beam.Design
	switch r.set.Weights {
	case WeightsConstantBeamwidth:
		d = beam.ConstantBeamwidth{Taper: r.set.taper, FloorDB: r.set.floorDB}
	case WeightsSuperdirective:
		d = beam.Superdirective{FloorDB: r.set.floorDB, Nulls: nulls}
	case WeightsMinimumVariance:
		noise, err := r.noiseCovariance(task)
		if err != nil {
			return err
		}
		d = beam.MVDR{Noise: noise, FloorDB: r.set.floorDB, Nulls: nulls}
	default:
		d = beam.LCMV{Taper: r.set.taper, FloorDB: r.set.floorDB, Nulls: nulls}
	}
	w, err := d.Weights(task)
	if err != nil {
		return &UsageError{Err: fmt.Errorf("--weights %s: %w", r.set.Weights, err)}
	}
	filters, fit, err := w.Filters(0)
	if err != nil {
		return &UsageError{Err: fmt.Errorf("--weights %s: %w", r.set.Weights, err)}
	}
	b.filters, b.model, b.fit = filters, filters, &fit
	if from, ok := w.HeldFrom(); len(nulls) > 0 {
		switch {
		case !ok:
			r.report(Finding{Code: "nulls-not-held", Severity: Warning, Message: fmt.Sprintf(
				"the nulls are exact at no frequency: they would cost more white noise gain than the floor of %g dB allows; lower --white-noise-gain-floor-db or move them away from the steered direction", r.set.floorDB)})
		case from > 0:
			r.report(Finding{Code: "nulls-held-from", Severity: Info, Message: fmt.Sprintf(
				"the nulls are exact from %.0f Hz up: below, they would cost more white noise gain than the floor of %g dB allows", from, r.set.floorDB)})
		}
	}
	return nil
}

// noiseCovariance is the covariance of the noise that minimum variance is to
// keep out: of the isolated noise, of the stretches given, or of those found
// in a first pass by delay-and-sum.
func (r *run) noiseCovariance(task beam.Task) (*beam.Covariance, error) {
	if path := r.set.IsolatedNoise; path != "" {
		t, err := openTake([]string{path}, r.isolatedJoining(), false)
		if err != nil {
			return nil, err
		}
		c, err := r.covariance(task, t, nil)
		return c, joinErrors(err, t.close())
	}
	stretches, source, err := r.knownNoise()
	if err != nil {
		return nil, err
	}
	if source != SegmentsNone {
		r.report(Finding{Code: "weights-from-measured-noise", Severity: Info, Message: "the weights were found on the noise stretches that the gain is measured in: the noise reduction there is better than in noise they have not heard; --isolated-noise and --isolated-target of another time tell the rest"})
	} else {
		src := audio.Source(&watched{Source: r.take.source(), ctx: r.ctx, tell: r.tell("listening for noise", r.take.header.Frames)})
		in, out, err := r.drive(src)
		if err != nil {
			return nil, err
		}
		found, err := measure.FindSegments(in.Thirds(), out.Thirds(), measure.SegmentOptions{ExpectedReductionDB: speechDiffuse(r.line.predict(measure.ThirdOctaves(task.Rate)))})
		if err != nil {
			return nil, err
		}
		if stretches = found.Noise; len(stretches) == 0 {
			return nil, &HintedError{
				Err:  fmt.Errorf("%s: --weights %s: no stretch with noise alone was found: %s", r.take.path(), WeightsMinimumVariance, found.Explanation),
				Hint: "give --noise A..B or --isolated-noise TAKE",
			}
		}
		r.report(Finding{Code: "weights-from-measured-noise", Severity: Info, Message: "the weights were found on noise stretches of this take: the noise reduction measured there is better than in noise they have not heard"})
		if err := r.take.rewind(); err != nil {
			return nil, err
		}
	}
	c, err := r.covariance(task, r.take, stretches)
	if err != nil {
		return nil, err
	}
	return c, r.take.rewind()
}

// covariance is that of the corrected microphones of a take over stretches,
// nil for all of it.
func (r *run) covariance(task beam.Task, t *take, stretches []measure.Stretch) (*beam.Covariance, error) {
	var frames [][2]int64
	for _, s := range stretches {
		frames = append(frames, [2]int64{frameAt(s.From, float64(task.Rate)), frameAt(s.To, float64(task.Rate))})
	}
	src, err := r.line.corrected(&watched{Source: t.source(), ctx: r.ctx, tell: r.tell("learning the noise", t.header.Frames)})
	if err != nil {
		return nil, err
	}
	c, err := beam.NewCovariance(task.Rate, len(task.Mics), task.FFTSize, beam.CovarianceOptions{Stretches: frames})
	if err != nil {
		return nil, &UsageError{Err: err}
	}
	if _, err := audio.Copy(src, blockFrames(r.spec.Options.BlockFrames, t.header.Channels), c); err != nil {
		return nil, err
	}
	if c.Frames() < len(task.Mics) {
		return nil, &UsageError{Err: errors.Join(fmt.Errorf("%s: --weights %s: the noise holds %d transforms of %.0f ms, fewer than its %d microphones: give longer noise",
			t.path(), WeightsMinimumVariance, c.Frames(), 1000*float64(task.FFTSize)/float64(task.Rate), len(task.Mics)))}
	}
	return c, nil
}

// duration is the take's length in seconds.
func (t *take) duration() float64 { return float64(t.header.Frames) / float64(t.header.Rate) }

// rewind makes the take's first frame the next one read.
func (t *take) rewind() error {
	if err := t.reader.SeekFrame(0); err != nil {
		return fmt.Errorf("%s: %w", t.path(), err)
	}
	return nil
}
