package postfilter

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// Kind says which noise the gains are found against.
type Kind string

// The kinds.
const (
	White   Kind = "white"   // [Zelinski 1988]
	Diffuse Kind = "diffuse" // [McCowan & Bourlard 2003]
)

// Parameters of the gains.
const (
	// AverageS is the time constant of the recursive mean, seconds: about a
	// syllable's onset. Shorter makes the gains waver, longer makes them late.
	AverageS = 0.08
	// leastS is the shortest transform, seconds; its length is the smallest
	// power of two that holds it, and it moves on by a quarter.
	leastS = 0.02
	// mostCoherence limits the coherence of a pair.
	mostCoherence = 0.99
)

// Options say how the gains are found. Every field but Late must be set.
type Options struct {
	Kind      Kind
	FloorDB   float64     // smallest gain, dB, up to 0
	Mics      []rig.Point // the first channels of the source, metres
	Reference rig.Point
	Look      acoustics.Wave // where the target comes from
	Speed     float64        // of sound, m/s
	// Late is how much later than its place says each channel's sound is,
	// seconds; nil is not at all.
	Late []float64
}

// Validate reports everything that is wrong with the options.
func (o Options) Validate() error {
	var faults []error
	fault := func(format string, args ...any) {
		faults = append(faults, fmt.Errorf("postfilter: "+format, args...))
	}
	if o.Kind != White && o.Kind != Diffuse {
		fault("kind %q: want %s or %s", o.Kind, White, Diffuse)
	}
	if !(o.FloorDB <= 0 && o.FloorDB >= -200) {
		fault("floor of %g dB: want -200 to 0", o.FloorDB)
	}
	if len(o.Mics) < 2 {
		fault("%d microphone: coherence is of at least 2", len(o.Mics))
	}
	if !(o.Speed > 0) || math.IsInf(o.Speed, 0) {
		fault("speed of sound %g m/s", o.Speed)
	}
	if o.Look == nil {
		fault("no direction or point to steer to")
	}
	if o.Late != nil && len(o.Late) != len(o.Mics) {
		fault("lateness of %d channels for %d microphones", len(o.Late), len(o.Mics))
	}
	return errors.Join(faults...)
}

// form is the estimate of the target's power in a bin as a form in the spectra
// of the microphones: φ_s = Σ_{m<n} cross·Re φ_mn - Σ own·φ_mm.
type form struct {
	cross []float64 // at n(n-1)/2+m for m < n
	own   []float64
}

// newForm returns the form at hz, for the arrivals of the steered wave at the
// microphones, seconds.
func newForm(o Options, arrivals []float64, hz float64) form {
	mics := len(o.Mics)
	pairs := mics * (mics - 1) / 2
	f := form{cross: make([]float64, pairs), own: make([]float64, mics)}
	for n := range mics {
		for m := range n {
			coherence := 0.0
			if o.Kind == Diffuse {
				coherence = acoustics.DiffuseCoherence(o.Mics[m].Distance(o.Mics[n]), hz, o.Speed) * math.Cos(2*math.Pi*hz*(arrivals[m]-arrivals[n]))
				coherence = math.Min(coherence, mostCoherence)
			}
			c := 1 / ((1 - coherence) * float64(pairs))
			f.cross[n*(n-1)/2+m] = c
			f.own[m] += coherence * c / 2
			f.own[n] += coherence * c / 2
		}
	}
	return f
}

// New returns the channels of src beyond those of the microphones through the
// gains found on the microphones: the beam of a mix beside its microphones, or
// the beam of a part of it (shadow filtering). Channels of microphones are those
// that the beam is made of, gains and polarity corrected, in the order of
// Options.Mics. Output frame i is frame i of src, and as many come out; where
// every gain is 1 they are those of src within float32 rounding. It returns an
// error for options with faults, for a source without channels beyond the
// microphones, and for delays of more than a second.
func New(src audio.Source, o Options) (audio.Source, error) {
	if err := o.Validate(); err != nil {
		return nil, err
	}
	format := src.Format()
	if format.Channels <= len(o.Mics) {
		return nil, fmt.Errorf("postfilter: source of %d channels for %d microphones and a beam", format.Channels, len(o.Mics))
	}
	size := spectral.MinSize
	for float64(size) < leastS*float64(format.Rate) {
		size *= 2
	}
	hop := size / 4
	fft, err := spectral.NewFFT[float32](size)
	if err != nil {
		return nil, fmt.Errorf("postfilter: %w", err)
	}
	g := &gains{
		mics: len(o.Mics), beams: format.Channels - len(o.Mics), size: size, hop: hop, fft: fft,
		floor: math.Pow(10, o.FloorDB/20), keep: math.Exp(-float64(hop) / (AverageS * float64(format.Rate))),
		window: make([]float32, size), x: make([]float32, size),
		target: make([]float64, size/2+1), power: make([]float64, size/2+1), gain: make([]float32, size/2+1),
		white: o.Kind == White,
	}
	// The root of Hann's window before and after: their products, a quarter
	// apart, add up to 2.
	for i, w := range spectral.Periodic(size, spectral.Hann) {
		g.window[i] = float32(math.Sqrt(w))
	}
	arrivals := acoustics.Delays(nil, o.Look, o.Mics, o.Reference, o.Speed)
	for m, tau := range arrivals {
		if o.Late != nil {
			tau += o.Late[m]
		}
		frames := tau * float64(format.Rate)
		if !(math.Abs(tau) <= 1) {
			return nil, fmt.Errorf("postfilter: microphone %d: sound arrives %g s after the reference point: want at most 1 s", m+1, tau)
		}
		whole := math.Round(frames)
		g.shift = append(g.shift, int(whole))
		g.before, g.after = max(g.before, -int(whole)), max(g.after, int(whole))
		turn := make([]float32, 2*(size/2+1))
		for k := range size/2 + 1 {
			s, c := math.Sincos(2 * math.Pi * float64(k) / float64(size) * (frames - whole))
			turn[2*k], turn[2*k+1] = float32(c), float32(s)
		}
		g.turn = append(g.turn, turn)
		g.re, g.im = append(g.re, make([]float32, size/2+1)), append(g.im, make([]float32, size/2+1))
	}
	for k := range size/2 + 1 {
		g.forms = append(g.forms, newForm(o, arrivals, float64(k)*float64(format.Rate)/float64(size)))
	}
	for range g.beams {
		g.sum = append(g.sum, make([]float32, size))
	}
	g.before += size - hop
	g.after += size - hop
	return audio.Hops(src, audio.Hop{Channels: g.beams, Frames: hop, Before: g.before, After: g.after}, g.run), nil
}

// gains finds and applies the gains, transform by transform.
type gains struct {
	mics, beams, size, hop int
	before, after          int // frames in front of the first of the hop, and behind its last
	white                  bool
	floor, keep            float64
	fft                    *spectral.FFT[float32]
	window, x              []float32
	shift                  []int       // [m], frames by which the wave arrives later
	turn                   [][]float32 // [m], of the rest of that delay: real and imaginary part of every bin
	forms                  []form      // [k]
	re, im                 [][]float32 // [m][k], aligned
	target, power          []float64   // [k], recursive sums of φ_s and φ_x
	gain                   []float32
	sum                    [][]float32 // [beam], overlapping transforms from the first frame of the hop on
}

func (g *gains) run(out, in audio.Block, first int64) error {
	from := 0
	if first == 0 {
		from = -(g.size - g.hop) // the transforms that begin before the take
		for _, s := range g.sum {
			clear(s)
		}
	}
	for ; from <= 0; from += g.hop {
		g.find(in, g.before+from)
		for b := range g.beams {
			g.apply(g.sum[b], in.Channel(g.mics + b)[g.before+from:][:g.size], from)
		}
	}
	for b, s := range g.sum {
		copy(out.Channel(b), s[:g.hop])
		copy(s, s[g.hop:])
		clear(s[g.size-g.hop:])
	}
	return nil
}

// find takes the transform that begins at frame at of the window into the means
// and sets the gains.
func (g *gains) find(in audio.Block, at int) {
	for m := range g.mics {
		x := in.Channel(m)[at+g.shift[m]:][:g.size]
		for i, v := range x {
			g.x[i] = v * g.window[i]
		}
		re, im, turn := g.re[m], g.im[m], g.turn[m]
		g.fft.Forward(re, im, g.x)
		for k := range re {
			c, s := turn[2*k], turn[2*k+1]
			re[k], im[k] = re[k]*c-im[k]*s, re[k]*s+im[k]*c
		}
	}
	for k := range g.gain {
		target, power := g.instant(k)
		g.target[k] = g.keep*g.target[k] + target
		g.power[k] = g.keep*g.power[k] + power
		w := 1.0
		if g.power[k] > 0 {
			w = math.Max(g.floor, math.Min(1, g.target[k]/g.power[k]))
		}
		g.gain[k] = float32(w)
	}
}

// instant returns φ_s and φ_x of bin k in this transform alone.
func (g *gains) instant(k int) (target, power float64) {
	f := g.forms[k]
	if g.white {
		// Σ_{m<n} Re x_m x_n* = (|Σx|² - Σ|x|²)/2.
		var re, im float64
		for m := range g.mics {
			a, b := float64(g.re[m][k]), float64(g.im[m][k])
			re, im, power = re+a, im+b, power+a*a+b*b
		}
		return (re*re + im*im - power) / 2 * f.cross[0], power / float64(g.mics)
	}
	for n := range g.mics {
		a, b := float64(g.re[n][k]), float64(g.im[n][k])
		own := a*a + b*b
		power += own
		target -= own * f.own[n]
		var re, im float64
		for m, c := range f.cross[n*(n-1)/2:][:n] {
			re += c * float64(g.re[m][k])
			im += c * float64(g.im[m][k])
		}
		target += a*re + b*im
	}
	return target, power / float64(g.mics)
}

// apply adds the transform of x behind the gains to sum, at frame from of it;
// what lies before its start is left out.
func (g *gains) apply(sum, x []float32, from int) {
	for i, v := range x {
		g.x[i] = v * g.window[i]
	}
	re, im := g.re[0], g.im[0] // the microphones' spectra have been used
	g.fft.Forward(re, im, g.x)
	for k, w := range g.gain {
		re[k] *= w
		im[k] *= w
	}
	g.fft.Inverse(g.x, re, im)
	skip := max(0, -from)
	for i, v := range g.x[skip:] {
		sum[i] += 0.5 * v * g.window[skip+i]
	}
}
