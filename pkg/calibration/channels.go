package calibration

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// RefusedError says that a take cannot carry a calibration, and why.
type RefusedError struct {
	Why  string
	Help string // what would carry it, or empty
}

// Error implements error.
func (e *RefusedError) Error() string { return e.Why }

// Options say how a take is listened to. The zero value is for a steady sound.
type Options struct {
	// Claps takes the direct sound of short sounds alone: the first 2 ms of
	// each, before the reflections of a room. Measured impulse responses are
	// claps too.
	Claps bool
	// FromHz and ToHz bound the frequencies used; 0 means 300 Hz and 16 kHz (8
	// kHz for claps, which are short, and heard in rooms by rigs with bodies),
	// or 0.4 of the rate where that is lower.
	FromHz, ToHz float64
	// MaxDelay is the largest error of a delay that is looked for, seconds; 0
	// means 1 ms.
	MaxDelay float64
	// Against is the microphone that the others are compared with, counted from
	// 1; 0 is the mean of those that were heard, which stands in too where that
	// one was not.
	Against  int
	anywhere bool // the direction is not known
	// Responses asks for the channels' differences over frequency too.
	Responses bool
}

// The defaults of Options, and what a result must keep under.
const (
	DefaultFromHz   = 300.0
	DefaultToHz     = 16000.0
	DefaultClapToHz = 8000.0
	DefaultMaxDelay = 1e-3

	maxGainStdDB = 0.5    // standard error of a gain in the median channel, dB
	maxDelayStd  = 10e-6  // standard error of a delay in the median channel, seconds
	minBandRatio = 1.2    // highest over lowest frequency of the information
	turnChance   = 1e-3   // of arrivals at random looking like another direction
	turnShare    = 0.8    // of the misfit explained by another direction
	turnLeast    = 0.0262 // 1.5°, radians
	turnDoubts   = 2.5    // standard uncertainties of the direction
	misfitLeast  = 5e-6   // root mean square misfit that is not looked into, seconds
	clearMisfit  = 20e-6  // one from which less of chance is asked,
	clearShare   = 0.96   // where so much of it is explained:
	clearChance  = 0.025
)

// Channel is what the take says about one microphone's channel against the
// mean of those that were heard, or against one of them (Options.Against), after
// what the geometry explains.
type Channel struct {
	Heard bool
	// LevelDB is how much louder the channel is than the others, dB, and Late
	// how much later it is, seconds: the corrections are their opposites.
	LevelDB, Late float64
	// PowerDB is the level of all that the channel carries in the band, noise
	// and all, as LevelDB is given: what a meter would compare.
	PowerDB  float64
	Inverted bool
	// Opposite is the height of the best correlation of the other polarity over
	// that of the one found, 0..1: near 1 the polarity is not certain.
	Opposite float64
	// LevelStd and LateStd are combined standard uncertainties, dB and seconds:
	// the noise of the take, the spread over frequency, and the doubt about
	// direction, distance, speed of sound and places.
	LevelStd, LateStd float64
	// LevelNoise and LateNoise are the standard errors of the take itself.
	LevelNoise, LateNoise float64
	// LevelBands is by how much the level differs from octave to octave, dB, one
	// standard deviation beyond what noise explains; 0 where noise explains it.
	LevelBands float64
	SNRDB      float64
	Response   *Response // nil where none was asked for or the take does not carry one
}

// Relative is a calibration of channels against each other.
type Relative struct {
	Channels      []Channel
	Heard         int
	Frames        int     // transforms, or claps
	LeftOut       int     // claps that were not looked at: there were too many
	Loud          float64 // share of the take in which the source sounds; 1 for claps
	LowHz, HighHz float64 // where the middle 90 % of the information lies
	// Fitted is the plane wave that fits what the rig's own corrections leave of
	// the arrivals best, and Turned how far its direction lies from the one
	// expected, radians; nil where no direction fits better.
	Fitted *Slowness
	Turned float64
	Misfit float64 // root mean square of what was expected less what was heard, seconds
}

// listening is a take and the band in which it is listened to.
type listening struct {
	open         func() (audio.Source, error)
	format       audio.Format
	fromHz, toHz float64
	level        []float64 // of every frame of a steady sound, once it has been looked at
}

// Channels compares the channels of a take of one sound, whose arrivals e
// foretells. open gives the take from its first frame each time it is called:
// channel m is microphone m of e, raw. known are the microphones with the
// corrections that the rig has so far, in the order of e; nil is none. All
// polarities may be wrong alike: the most are taken to be as known. The error
// is a *RefusedError where the take does not carry it.
func Channels(open func() (audio.Source, error), e *Expected, known []rig.Mic, o Options) (*Relative, error) {
	src, err := open()
	if err != nil {
		return nil, err
	}
	l := &listening{open: open, format: src.Format()}
	mics := len(e.At)
	if l.format.Channels != mics || known != nil && len(known) != mics {
		panic(fmt.Sprintf("calibration: %d channels and %d known delays for %d microphones", l.format.Channels, len(known), mics))
	}
	if mics < 2 {
		return nil, &RefusedError{Why: "one microphone has nothing to be compared with"}
	}
	if l.fromHz, l.toHz, err = o.band(float64(l.format.Rate)); err != nil {
		return nil, err
	}
	maxDelay := o.MaxDelay
	if maxDelay == 0 {
		maxDelay = DefaultMaxDelay
	}
	late := append([]float64(nil), e.Delay...)
	for m := range known {
		late[m] -= known[m].Delay
	}
	r := &Relative{Loud: 1}
	var f *factor
	// Channels that prove to lie apart are lined up and listened to again: the
	// windows then lie over the same sound.
	for try := range 3 {
		var c *cross
		if o.Claps {
			c, r.Frames, r.LeftOut, err = l.impulsive(late)
		} else if c, r.Loud, err = l.steady(late); err == nil {
			r.Frames = c.frames
		}
		if err != nil {
			return nil, err
		}
		search := maxDelay
		if try > 0 {
			search = 4 / c.rate
		}
		if f, err = newFactor(c, search); err != nil {
			return nil, err
		}
		if len(f.heard) < 2 {
			return nil, &RefusedError{Why: "no two channels hear the same sound", Help: "play noise, a sweep, speech or claps from one place, well above the noise"}
		}
		apart := 0.0
		for _, m := range f.heard {
			apart = math.Max(apart, math.Abs(f.d[m]))
		}
		if apart < 0.25/c.rate || try == 2 {
			f.converge(mostSweeps)
			break
		}
		for _, m := range f.heard {
			late[m] += f.d[m]
		}
	}
	for _, m := range f.heard {
		late[m] += f.d[m]
	}
	return r, r.gather(f, e, late, known, o)
}

// band returns the band in force.
func (o Options) band(rate float64) (from, to float64, err error) {
	from, to = o.FromHz, o.ToHz
	if from == 0 {
		from = DefaultFromHz
	}
	if to == 0 {
		to = math.Min(DefaultToHz, 0.4*rate)
		if o.Claps {
			to = math.Min(DefaultClapToHz, to)
		}
	}
	if !(from > 0 && to > from) || to > 0.45*rate {
		return 0, 0, fmt.Errorf("calibration: frequencies from %g to %g Hz at %g frames per second: want a range within 0 to 0.45 of the rate", from, to, rate)
	}
	return from, to, nil
}

// gather fills in the result and refuses what cannot be relied on.
func (r *Relative) gather(f *factor, e *Expected, late []float64, known []rig.Mic, o Options) error {
	mics := len(e.At)
	r.Channels, r.Heard = make([]Channel, mics), len(f.heard)
	errs, bands := f.errors(), f.overBands()
	r.LowHz, r.HighHz = errs[0].lowHz, errs[0].highHz
	doubtLate, doubtLevel := e.doubts(f.heard, -1)
	n := float64(len(f.heard))
	var meanLate, meanLevel, meanPower float64
	for i, m := range f.heard {
		c := &r.Channels[m]
		c.Heard, c.Inverted = true, f.g[m] < 0
		c.Late = late[m] - e.Delay[m]
		c.LevelDB = 20*math.Log10(math.Abs(f.g[m])/f.scale[m]) - e.LevelDB[m]
		c.PowerDB = -20*math.Log10(f.scale[m]) - e.LevelDB[m]
		c.Opposite = math.Min(1, f.rival[m]/f.peak[m])
		c.LevelNoise, c.LateNoise = errs[i].gain*20/math.Ln10, errs[i].delay
		c.LevelBands = bands[i] * 20 / math.Ln10
		if len(f.heard) == 2 {
			doubtLevel[m] = math.Hypot(doubtLevel[m], splitDoubt(errs[i].snr))
		}
		c.doubted(doubtLevel[m], doubtLate[m])
		c.SNRDB = 10 * math.Log10(math.Max(errs[i].snr, 1e-12))
		meanLate += c.Late / n
		meanLevel += c.LevelDB / n
		meanPower += c.PowerDB / n
	}
	against := 0
	for _, m := range f.heard {
		if r.Channels[m].Inverted != (known != nil && known[m].Inverted) {
			against++
		}
	}
	for _, m := range f.heard {
		if 2*against > len(f.heard) {
			r.Channels[m].Inverted = !r.Channels[m].Inverted
		}
		r.Channels[m].Late -= meanLate
		r.Channels[m].LevelDB -= meanLevel
		r.Channels[m].PowerDB -= meanPower
	}
	if err := r.reliable(f); err != nil {
		return err
	}
	if !o.anywhere {
		if err := r.direction(f.heard, e, known); err != nil {
			return err
		}
	}
	if o.Responses {
		if err := f.responses(r); err != nil {
			return err
		}
	}
	if ref := o.Against - 1; ref >= 0 && r.Channels[ref].Heard {
		r.against(ref, f.heard, e)
	}
	return nil
}

// against turns what was found against the mean of those heard into what it is
// against one of them, which then is exact.
func (r *Relative) against(ref int, heard []int, e *Expected) {
	doubtLate, doubtLevel := e.doubts(heard, ref)
	n := float64(len(heard))
	// The variance against the mean of n is v = t·(1 - 2/n) + T of an own variance
	// t, with T = Σt/n² = Σv/(n·(n - 1)): that of a difference is t + t of the
	// other. It is not taken for less than it would be were all alike.
	difference := func(of func(*Channel) float64) func(m int) float64 {
		shared := 0.0
		for _, m := range heard {
			shared += sqr(of(&r.Channels[m])) / (n * (n - 1))
		}
		other := sqr(of(&r.Channels[ref]))
		return func(m int) float64 {
			both := sqr(of(&r.Channels[m])) + other
			v := both * n / (n - 1)
			if n > 2 {
				v = math.Max(v, (both-2*shared)/(1-2/n))
			}
			return math.Sqrt(v)
		}
	}
	level := difference(func(c *Channel) float64 { return c.LevelNoise })
	between := difference(func(c *Channel) float64 { return c.LevelBands })
	late := difference(func(c *Channel) float64 { return c.LateNoise })
	base := r.Channels[ref]
	for _, m := range heard {
		c := &r.Channels[m]
		c.Late -= base.Late
		c.LevelDB -= base.LevelDB
		c.PowerDB -= base.PowerDB
		if m == ref {
			continue
		}
		c.LevelNoise, c.LevelBands, c.LateNoise = level(m), between(m), late(m)
		if len(heard) == 2 {
			doubtLevel[m] = math.Hypot(doubtLevel[m], 2*splitDoubt(math.Pow(10, c.SNRDB/10)))
		}
		c.doubted(doubtLevel[m], doubtLate[m])
	}
	own := &r.Channels[ref]
	own.LevelNoise, own.LevelBands, own.LateNoise, own.LevelStd, own.LateStd = 0, 0, 0, 0, 0
}

// splitDoubt is the standard uncertainty, dB, of the level of one of two channels
// against their mean because the noise in both, known together, may lie in
// either: uniform between all in one and all in the other [JCGM 100:2008, 4.3.7].
func splitDoubt(snr float64) float64 {
	return 10 / math.Ln10 / math.Max(snr, 1e-3) / math.Sqrt(3)
}

// doubted combines what the take says with the doubt about what was expected,
// standard uncertainties in dB and seconds.
func (c *Channel) doubted(level, late float64) {
	c.LevelStd = math.Hypot(math.Hypot(c.LevelNoise, c.LevelBands), level)
	c.LateStd = math.Hypot(c.LateNoise, late)
}

func sqr(x float64) float64 { return x * x }

// reliable refuses what is too noisy or too narrow.
func (r *Relative) reliable(f *factor) error {
	var gain, delay []float64
	for _, m := range f.heard {
		gain = append(gain, r.Channels[m].LevelNoise)
		delay = append(delay, r.Channels[m].LateNoise)
	}
	switch g, d := median(gain), median(delay); {
	case r.HighHz < minBandRatio*r.LowHz:
		return &RefusedError{
			Why:  fmt.Sprintf("what the channels share lies between %.0f and %.0f Hz alone: a tone has no delay but for whole periods", r.LowHz, r.HighHz),
			Help: "play noise, a sweep, speech or claps",
		}
	case !(g <= maxGainStdDB):
		return &RefusedError{
			Why:  fmt.Sprintf("the take is too noisy, too short or too reverberant: gains would be good to %.2f dB (one standard error), want %.2g dB", g, maxGainStdDB),
			Help: "go nearer, play louder or longer; in a room, record claps and give --sound claps",
		}
	case !(d <= maxDelayStd):
		return &RefusedError{
			Why:  fmt.Sprintf("the take is too noisy, too short or too reverberant: delays would be good to %.1f µs (one standard error), want %.0f µs", 1e6*d, 1e6*maxDelayStd),
			Help: "go nearer, play louder or longer; in a room, record claps and give --sound claps",
		}
	}
	return nil
}

// direction refuses arrivals that another direction explains much better than
// the one given: corrections from them would turn the rig.
func (r *Relative) direction(heard []int, e *Expected, known []rig.Mic) error {
	rest := make([]float64, len(e.At))
	var mean float64
	for _, m := range heard {
		rest[m] = r.Channels[m].Late
		if known != nil {
			rest[m] += known[m].Delay
		}
		mean += rest[m] / float64(len(heard))
	}
	for _, m := range heard {
		r.Misfit += (rest[m] - mean) * (rest[m] - mean) / float64(len(heard))
	}
	r.Misfit = math.Sqrt(r.Misfit)
	s := fitSlowness(e.At, rest, heard)
	// Few microphones leave chance much room; there only a large misfit that goes
	// away almost whole counts.
	limit := turnChance
	if r.Misfit >= clearMisfit && s.Share >= clearShare {
		limit = clearChance
	}
	if r.Misfit < misfitLeast || s.Chance > limit || s.Share < turnShare {
		return nil
	}
	// The slowness heard is the one expected plus what is left over.
	expected := fitSlowness(e.At, e.Delay, heard)
	k := expected.K.Add(s.K)
	length := k.Norm() * e.Speed
	angle := 0.0
	if a, b := expected.K.Norm(), k.Norm(); a > 0 && b > 0 {
		angle = math.Acos(math.Max(-1, math.Min(1, expected.K.Dot(k)/(a*b))))
	}
	// On a line or a plane the length of the slowness turns with the direction.
	if s.Dims < 3 {
		angle = math.Max(angle, math.Abs(math.Acos(math.Min(1, length))-math.Acos(math.Min(1, expected.K.Norm()*e.Speed))))
	}
	r.Fitted, r.Turned = &s, angle
	doubt := 0.0
	for _, mv := range e.Moves {
		if mv.Name == "azimuth" || mv.Name == "elevation" {
			// A turn by the doubt moves the slowness by that much.
			doubt = math.Max(doubt, fitSlowness(e.At, mv.Delay, heard).K.Norm()*e.Speed)
		}
	}
	if angle < math.Max(turnLeast, turnDoubts*doubt) {
		return nil
	}
	d := rig.Toward(k)
	where := fmt.Sprintf("azimuth %.1f°, elevation %.1f°", d.AzimuthDeg(), d.ElevationDeg())
	if s.Dims == 1 {
		axis := rig.Spread(e.At).Axis
		where = fmt.Sprintf("%.1f° from the line's axis", math.Acos(math.Max(-1, math.Min(1, k.Dot(axis)*e.Speed)))*180/math.Pi)
	}
	if length < 0.5 && s.Dims == 3 {
		where = "no direction at all: it comes from many sides, or from among the microphones"
	}
	return &RefusedError{
		Why: fmt.Sprintf("the sound does not come from where it is said to: arrivals differ by %.1f µs (root mean square), and by %.1f µs from a sound that comes from %s",
			1e6*r.Misfit, 1e6*s.Residual, where),
		Help: "look at --toward, the order of the channels and the places in the rig file; a near source needs its distance or --focus",
	}
}

// median returns the middle of x, the upper one of two.
func median(x []float64) float64 {
	if len(x) == 0 {
		return math.NaN()
	}
	s := slices.Clone(x)
	slices.Sort(s)
	return s[len(s)/2]
}
