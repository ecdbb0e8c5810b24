package quality

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/rig"
)

// Options are what an inspection goes by.
type Options struct {
	Speed  float64 // of sound, m/s; 343.2 if 0
	Limits Limits
	// LevelsOnly looks for dead channels by their level and at nothing else.
	LevelsOnly bool
	// SamplesOnly looks for what single samples show (WithSamplesOf takes it), and
	// neither at spectra nor at the geometry.
	SamplesOnly bool
}

// Inspector is a sink that looks at a take: channel m of what is written is
// microphone m, without corrections. Create one with New.
type Inspector struct {
	mics   []rig.Mic
	at     []rig.Point
	rate   int
	speed  float64
	limits Limits
	strips []*strip
	lines  *lines
	cross  *crossing // nil with fewer than two microphones
	frames int64
	only   bool  // the levels
	single bool  // samples only: lines and cross are nil
	gaps   int64 // frames left out
	closed bool
	err    error
	result *Result
}

// New returns an inspector of takes of rate frames per second by the given
// microphones, at least one and at most 256.
func New(mics []rig.Mic, rate int, o Options) (*Inspector, error) {
	if len(mics) == 0 || len(mics) > 256 {
		return nil, fmt.Errorf("quality: %d microphones: want 1 to 256", len(mics))
	}
	if rate < 8000 || rate > 384000 {
		return nil, fmt.Errorf("quality: rate %d Hz: want 8000 to 384000", rate)
	}
	if o.Speed == 0 {
		o.Speed = 343.2
	}
	if !(o.Speed >= 100 && o.Speed <= 2000) {
		return nil, fmt.Errorf("quality: speed of sound %g m/s: want 100 to 2000", o.Speed)
	}
	if err := o.Limits.Validate(); err != nil {
		return nil, err
	}
	q := &Inspector{mics: slices.Clone(mics), rate: rate, speed: o.Speed, limits: o.Limits.withDefaults()}
	for _, m := range mics {
		q.at = append(q.at, m.At)
		q.strips = append(q.strips, newStrip(rate))
	}
	q.only, q.single = o.LevelsOnly, o.SamplesOnly && !o.LevelsOnly
	if q.only || q.single {
		return q, nil
	}
	var err error
	if q.lines, err = newLines(q.at, rate); err != nil {
		return nil, err
	}
	if len(mics) > 1 {
		if q.cross, err = newCrossing(q.at, rate, q.speed); err != nil {
			return nil, err
		}
	}
	return q, nil
}

// Write implements audio.Sink. It returns an error for another number of
// channels than microphones, for a sample that is not a finite number, and
// after Close.
func (q *Inspector) Write(src audio.Block) error {
	switch {
	case q.err != nil:
		return q.err
	case q.closed:
		return errors.New("quality: write after close")
	case src.Channels() != len(q.mics):
		q.err = fmt.Errorf("quality: block of %d channels for %d microphones", src.Channels(), len(q.mics))
		return q.err
	}
	for m, s := range q.strips {
		x := src.Channel(m)
		if !(kernel.Peak(x) <= math.MaxFloat32) {
			i := slices.IndexFunc(x, func(v float32) bool { return v-v != 0 })
			q.err = fmt.Errorf("quality: channel %d: frame %d: sample is %g", q.mics[m].Channel, q.frames+int64(i), x[i])
			return q.err
		}
		if q.only {
			s.addLevel(x)
		} else {
			s.add(x)
		}
	}
	q.frames += int64(src.Frames())
	if q.lines == nil {
		return nil
	}
	if q.err = q.lines.stft.Write(src); q.err == nil && q.cross != nil {
		q.err = q.cross.stft.Write(src)
	}
	return q.err
}

// Gap says that the next block begins so many frames after the end of the last:
// a take may be inspected in stretches, of which those of 2 s and more tell
// most. Frames of the result are those written.
func (q *Inspector) Gap(frames int64) error {
	switch {
	case q.err != nil:
		return q.err
	case q.closed:
		return errors.New("quality: gap after close")
	case frames < 0:
		return fmt.Errorf("quality: gap of %d frames", frames)
	case frames == 0:
		return nil
	}
	q.gaps += frames
	if q.only {
		return nil
	}
	for _, s := range q.strips {
		s.gap()
	}
	if q.lines == nil {
		return nil
	}
	if q.err = q.lines.begin(); q.err == nil && q.cross != nil {
		q.err = q.cross.begin(q.frames + q.gaps)
	}
	return q.err
}

// Close ends the take and judges it. It may be called more than once.
func (q *Inspector) Close() error {
	if q.closed || q.err != nil {
		return q.err
	}
	q.closed = true
	for _, s := range q.strips {
		s.close()
	}
	if q.cross != nil {
		q.cross.endWindow()
	}
	q.result = q.judge()
	return nil
}

// Result returns what was found, closing the inspector if need be. It is nil if
// writing failed.
func (q *Inspector) Result() *Result {
	if q.Close() != nil {
		return nil
	}
	return q.result
}

// judge brings everything together.
func (q *Inspector) judge() *Result {
	j := &judgement{Inspector: q, result: &Result{Frames: q.frames, Findings: []Finding{}}}
	j.channels()
	j.deadOnes()
	if q.only {
		j.result.NotJudged = "only levels were looked at"
		return j.finish()
	}
	j.tops()
	j.stills()
	if q.single {
		j.result.NotJudged = "only single samples were looked at"
		return j.finish()
	}
	j.noises()
	if q.cross != nil {
		j.between()
	} else {
		j.result.NotJudged = "one microphone has no geometry"
	}
	j.floors()
	return j.finish()
}

// finish puts what was found in order.
func (j *judgement) finish() *Result {
	slices.Sort(j.result.Dead)
	j.result.settle()
	return j.result
}

// judgement is a result in the making.
type judgement struct {
	*Inspector
	result *Result
	dead   []bool
}

// add adds a finding about the microphones of the given indices, if there are
// any; none at all is about the take.
func (j *judgement) add(code string, severity Severity, mics []int, measured, expected, do string) {
	f := Finding{Code: code, Severity: severity, Measured: measured, Expected: expected, Do: do}
	for _, m := range mics {
		f.Channels = append(f.Channels, j.mics[m].Channel)
	}
	slices.Sort(f.Channels)
	j.result.Findings = append(j.result.Findings, f)
}

// names puts microphones in words: "channel 3 (M3)".
func (j *judgement) names(mics []int) string {
	mics = slices.Clone(mics)
	slices.SortFunc(mics, func(a, b int) int { return j.mics[a].Channel - j.mics[b].Channel })
	text := "channel "
	if len(mics) > 1 {
		text = "channels "
	}
	for i, m := range mics {
		switch {
		case i == 0:
		case i == len(mics)-1:
			text += " and "
		default:
			text += ", "
		}
		text += fmt.Sprint(j.mics[m].Channel)
		if j.mics[m].Name != "" {
			text += " (" + j.mics[m].Name + ")"
		}
	}
	return text
}

// alive are the indices of the microphones that are not dead.
func (j *judgement) alive() []int {
	var list []int
	for m, d := range j.dead {
		if !d {
			list = append(list, m)
		}
	}
	return list
}

// channels fills in what every channel holds by itself.
func (j *judgement) channels() {
	for m, s := range j.strips {
		c := Channel{Channel: j.mics[m].Channel, Name: j.mics[m].Name, RMSDBFS: math.Inf(-1), DropOuts: 0}
		if s.frames > 0 {
			c.DC = s.sums.Sum() / float64(s.frames)
			c.RMSDBFS = audio.PowerDB(2 * s.sums.Square() / float64(s.frames))
		}
		c.PeakDBFS = audio.AmplitudeDB(float64(s.peak))
		c.TruePeakDBFS = audio.AmplitudeDB(math.Max(float64(s.peak), s.true4))
		c.ClippedFrames = max(s.full, s.flat())
		if s.moments >= 10 {
			c.NoiseDBFS = known(momentLevel(&s.levels, 0.1))
		}
		j.result.Channels = append(j.result.Channels, c)
	}
}

// median returns the middle value, the mean of two for an even number, NaN for
// none. It sorts its argument.
func median(v []float64) float64 {
	if len(v) == 0 {
		return math.NaN()
	}
	slices.Sort(v)
	n := len(v)
	return (v[(n-1)/2] + v[n/2]) / 2
}
