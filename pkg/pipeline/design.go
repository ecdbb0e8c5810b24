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
		if r.set.ReestimateEvery > 0 {
			return r.designOverTime(task, nulls)
		}
		if r.learned == nil {
			var err error
			if r.learned, err = r.noiseCovariance(task); err != nil {
				return err
			}
		}
		d = beam.MVDR{Noise: r.learned, FloorDB: r.set.floorDB, Nulls: nulls}
	default:
		d = beam.LCMV{Taper: r.set.taper, FloorDB: r.set.floorDB, Nulls: nulls}
	}
	w, err := d.Weights(task)
	if err != nil {
		return refusedWeights(r.set.Weights, err)
	}
	filters, fit, err := w.Filters(0)
	if err != nil {
		return &UsageError{Err: fmt.Errorf("--weights %s: %w", r.set.Weights, err)}
	}
	b.filters, b.model, b.fit = filters, filters, &fit
	if len(nulls) > 0 {
		var ok bool
		if b.nullsFrom, ok = w.HeldFrom(); !ok {
			b.nullsFrom = math.Inf(1)
		}
	}
	return nil
}

// nullsHeld says where the nulls of the beam are not exact.
func (r *run) nullsHeld() {
	switch from := r.line.nullsFrom; {
	case math.IsInf(from, 1):
		r.report(Finding{Code: "nulls-not-held", Severity: Warning, Message: fmt.Sprintf(
			"the nulls are exact at no frequency: they would cost more white noise gain than the floor of %g dB allows; lower --white-noise-gain-floor-db or move them away from the steered direction", r.set.floorDB)})
	case from > 0:
		r.report(Finding{Code: "nulls-held-from", Severity: Info, Message: fmt.Sprintf(
			"the nulls are exact from %.0f Hz up: below, they would cost more white noise gain than the floor of %g dB allows", from, r.set.floorDB)})
	}
}

// noiseCovariance is the covariance of the noise that minimum variance is to
// keep out: of the stretches given, else of the isolated noise, or of stretches
// found in a first pass by delay-and-sum.
func (r *run) noiseCovariance(task beam.Task) (*beam.Covariance, error) {
	if path := r.set.IsolatedNoise; path != "" && len(r.set.noise) == 0 && r.set.NoiseCue == "" {
		r.report(Finding{Code: "weights-from-measured-noise", Severity: Info, Message: "the weights were found on the isolated noise that the gain is measured in: the noise reduction there is better than in noise they have not heard; --noise A..B finds them on the take itself"})
		t, err := openTake([]string{path}, r.isolatedJoining(), false)
		if err != nil {
			return nil, err
		}
		c, err := r.covariance(task, t, nil)
		return c, joinErrors(err, t.close())
	}
	stretches, err := r.noiseStretches(task.Rate)
	if err != nil {
		return nil, err
	}
	c, err := r.covariance(task, r.take, stretches)
	if err != nil {
		return nil, err
	}
	return c, r.take.rewind()
}

// noiseStretches are where noise alone sounds in the take: as given, or as found
// in a first pass by delay-and-sum.
func (r *run) noiseStretches(rate int) ([]measure.Stretch, error) {
	stretches, source, err := r.knownNoise()
	if err != nil {
		return nil, err
	}
	if source != SegmentsNone {
		if r.set.IsolatedNoise == "" {
			r.report(Finding{Code: "weights-from-measured-noise", Severity: Info, Message: "the weights were found on the noise stretches that the gain is measured in: the noise reduction there is better than in noise they have not heard; --isolated-noise and --isolated-target of another time tell the rest"})
		}
		return stretches, nil
	}
	src := audio.Source(&watched{Source: r.take.source(), ctx: r.ctx, tell: r.tell("listening for noise", r.take.header.Frames)})
	heard, err := r.drive(src, r.line.steered)
	if err != nil {
		return nil, err
	}
	found, err := measure.FindSegments(heard.in.Thirds(), heard.out.Thirds(), measure.SegmentOptions{ExpectedReductionDB: speechDiffuse(r.line.predict(measure.ThirdOctaves(rate), r.take.header.Frames))})
	if err != nil {
		return nil, err
	}
	if stretches = found.Noise; len(stretches) == 0 {
		return nil, &HintedError{
			Err:  fmt.Errorf("%s: --weights %s: no stretch with noise alone was found: %s", r.take.path(), WeightsMinimumVariance, found.Explanation),
			Hint: "give --noise A..B or --isolated-noise TAKE",
		}
	}
	if r.set.IsolatedNoise == "" {
		r.report(Finding{Code: "weights-from-measured-noise", Severity: Info, Message: "the weights were found on noise stretches of this take: the noise reduction measured there is better than in noise they have not heard"})
	}
	return stretches, r.take.rewind()
}

// frameStretches are stretches in frames.
func frameStretches(stretches []measure.Stretch, rate float64) [][2]int64 {
	var frames [][2]int64
	for _, s := range stretches {
		frames = append(frames, [2]int64{frameAt(s.From, rate), frameAt(s.To, rate)})
	}
	return frames
}

// covariance is that of the corrected microphones of a take over stretches,
// nil for all of it.
func (r *run) covariance(task beam.Task, t *take, stretches []measure.Stretch) (*beam.Covariance, error) {
	src, err := r.line.corrected(&watched{Source: t.source(), ctx: r.ctx, tell: r.tell("learning the noise", t.header.Frames)})
	if err != nil {
		return nil, err
	}
	c, err := beam.NewCovariance(task.Rate, len(task.Mics), task.FFTSize, beam.CovarianceOptions{Stretches: frameStretches(stretches, float64(task.Rate))})
	if err != nil {
		return nil, &UsageError{Err: err}
	}
	src, stop := r.ahead(src)
	defer stop()
	if _, err := audio.Copy(src, blockFrames(r.spec.Options.BlockFrames, t.header.Channels), c); err != nil {
		return nil, err
	}
	if c.Frames() < len(task.Mics) {
		return nil, tooLittleNoise(t.path(), c.Frames(), task)
	}
	return c, r.line.live(c)
}

// live refuses noise in which a microphone hears nothing: of least variance is
// to listen to that one alone.
func (b *beamline) live(c *beam.Covariance) error {
	var levels []float64
	for _, p := range c.Powers(nil) {
		levels = append(levels, audio.PowerDB(p))
	}
	typical := median(levels)
	var silent []int
	for i, l := range levels {
		if l < typical-silentBelowDB {
			silent = append(silent, b.rig.Mics[b.used[i]].Channel)
		}
	}
	if len(silent) == 0 || math.IsInf(typical, -1) {
		return nil
	}
	return &UsageError{
		Err: fmt.Errorf("--weights %s: %s in the noise more than %d dB below the others: the weights of least variance would listen to silence and lose the target",
			WeightsMinimumVariance, plural(silent, "channel %s is", "channels %s are"), silentBelowDB),
		Hint: "leave out dead channels with use: false in the rig file",
	}
}

// refusedWeights says what helps where a design cannot be.
func refusedWeights(weights string, err error) error {
	hint := ""
	switch {
	case errors.Is(err, beam.ErrFloorOutOfReach):
		hint = "lower --white-noise-gain-floor-db, or use more microphones"
	case errors.Is(err, beam.ErrTooManyConstraints):
		hint = "leave out nulls, or use more microphones"
	case errors.Is(err, beam.ErrNullsNotHeld):
		hint = "move the nulls away from the steered direction and from one another (a line hears the whole cone around itself alike), or lower --white-noise-gain-floor-db"
	}
	if weights == WeightsDelayAndSum { // given by default: the nulls are what was asked for
		return &UsageError{Err: fmt.Errorf("--null: %w", err), Hint: hint}
	}
	return &UsageError{Err: fmt.Errorf("--weights %s: %w", weights, err), Hint: hint}
}

// tooLittleNoise says that noise is too short for weights.
func tooLittleNoise(path string, transforms int, task beam.Task) error {
	return &UsageError{Err: fmt.Errorf("%s: --weights %s: the noise holds %d transforms of %.0f ms, fewer than its %d microphones: give longer noise",
		path, WeightsMinimumVariance, transforms, 1000*float64(task.FFTSize)/float64(task.Rate), len(task.Mics))}
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
