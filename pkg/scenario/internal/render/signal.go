package render

import (
	"math"
	"math/rand/v2"

	"alidade/pkg/spectral"
)

// Stream returns the random stream for one purpose: streams of different
// labels are independent. The mixing is that of splitmix64 [Steele, Lea &
// Flood 2014].
func Stream(seed uint64, label string, index int) *rand.Rand {
	mix := func(z uint64) uint64 {
		z += 0x9e3779b97f4a7c15
		z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
		z = (z ^ z>>27) * 0x94d049bb133111eb
		return z ^ z>>31
	}
	h := mix(seed)
	for _, c := range []byte(label) {
		h = mix(h ^ uint64(c))
	}
	h = mix(h ^ uint64(index)<<8)
	return rand.New(rand.NewPCG(h, mix(h)))
}

// Gaussian is white noise of unit power.
type Gaussian struct{ Rng *rand.Rand }

// Next implements Mono.
func (g *Gaussian) Next(dst []float64) {
	for i := range dst {
		dst[i] = g.Rng.NormFloat64()
	}
}

// Noise returns unit-power noise of a spectrum.
func Noise(spectrum string, rate int, rng *rand.Rand) Mono {
	if taps := Shape(spectrum, rate); taps != nil {
		return NewFiltered(taps, &Gaussian{rng})
	}
	return &Gaussian{rng}
}

// Indexed is a signal given by a function of its frame number.
type Indexed struct {
	Frame int64
	Value func(frame int64) float64
}

// Next implements Mono.
func (s *Indexed) Next(dst []float64) {
	for i := range dst {
		dst[i] = s.Value(s.Frame)
		s.Frame++
	}
}

// Scaled is a signal times a factor.
type Scaled struct {
	In   Mono
	Gain float64
}

// Next implements Mono.
func (s *Scaled) Next(dst []float64) {
	s.In.Next(dst)
	for i := range dst {
		dst[i] *= s.Gain
	}
}

// delayedStart gives zeros for the frames before a signal that starts at
// frame 0.
type delayedStart struct {
	zeros int64
	in    Mono
}

// Next implements Mono.
func (s *delayedStart) Next(dst []float64) {
	n := min(s.zeros, int64(len(dst)))
	clear(dst[:n])
	s.zeros -= n
	if n < int64(len(dst)) {
		s.in.Next(dst[n:])
	}
}

// Gated is a signal that is on at some times only, with raised-cosine edges
// inside them.
type Gated struct {
	In    Mono
	Frame int64      // of the next sample of In
	On    [][2]int64 // frames, ascending, apart
	Edge  int64      // frames

	over int // of On, those that are over
}

// Next implements Mono.
func (g *Gated) Next(dst []float64) {
	g.In.Next(dst)
	for i := range dst {
		dst[i] *= g.gain(g.Frame + int64(i))
	}
	g.Frame += int64(len(dst))
}

func (g *Gated) gain(frame int64) float64 {
	for g.over < len(g.On) && frame >= g.On[g.over][1] {
		g.over++
	}
	if g.over == len(g.On) || frame < g.On[g.over][0] {
		return 0
	}
	on := g.On[g.over]
	edge := min(g.Edge, (on[1]-on[0])/2)
	if d := min(frame-on[0], on[1]-1-frame); d < edge {
		return 0.5 - 0.5*math.Cos(math.Pi*(float64(d)+0.5)/float64(edge))
	}
	return 1
}

// Chirp returns exponential sweeps from one frequency to another, hertz,
// one after the other, each with raised-cosine ends of 10 ms [Farina 2000].
func Chirp(from, to, every float64, rate int) func(int64) float64 {
	period := max(1, int64(every*float64(rate)))
	span := float64(period) / float64(rate)
	ratio := math.Log(to / from)
	edge := math.Min(0.010, span/4)
	return func(frame int64) float64 {
		i := frame % period
		if frame < 0 {
			return 0
		}
		t := float64(i) / float64(rate)
		a := 1.0
		if d := math.Min(t, span-t); d < edge {
			a = 0.5 - 0.5*math.Cos(math.Pi*d/edge)
		}
		phase := 2 * math.Pi * from * span
		if math.Abs(ratio) < 1e-9 {
			phase *= t / span
		} else {
			phase *= (math.Exp(ratio*t/span) - 1) / ratio
		}
		return a * math.Sin(phase)
	}
}

// Claps is short bursts of noise that rise in 0.2 ms and decay with a time
// constant of 4 ms, roughly a pair of hands.
type Claps struct {
	Rng    *rand.Rand
	Rate   float64 // frames per second
	Period int64   // frames from one to the next
	frame  int64
	last   float64
}

// Next implements Mono.
func (c *Claps) Next(dst []float64) {
	for i := range dst {
		at := c.frame % c.Period
		t := float64(at) / c.Rate
		if at == 0 {
			c.last = 0
		}
		v := 0.0
		if t < 0.06 { // 15 time constants: -130 dB
			white := c.Rng.NormFloat64()
			// A difference takes the bass out of the burst.
			v = (white - 0.7*c.last) * (1 - math.Exp(-t/2e-4)) * math.Exp(-t/4e-3)
			c.last = white
		}
		dst[i] = v
		c.frame++
	}
}

// Recording is a recording, silence before and after it.
type Recording struct {
	X     []float64
	Frame int64 // of the next sample, 0 being the first of X
}

// Next implements Mono.
func (s *Recording) Next(dst []float64) {
	for i := range dst {
		dst[i] = 0
		if s.Frame >= 0 && s.Frame < int64(len(s.X)) {
			dst[i] = s.X[s.Frame]
		}
		s.Frame++
	}
}

// Resample returns x at another rate by windowed-sinc interpolation, cut off
// at the lower Nyquist frequency of the two.
func Resample(x []float32, from, to int) []float64 {
	if from == to {
		y := make([]float64, len(x))
		for i, v := range x {
			y[i] = float64(v)
		}
		return y
	}
	step := float64(from) / float64(to) // input frames an output frame
	cut := math.Min(1, 1/step)
	half := int(math.Ceil(float64(KernelTaps/2) / cut))
	// The kernel at 2048 points a zero crossing, interpolated linearly.
	const fine = 2048
	points := make([]float64, KernelTaps/2*fine+2)
	norm := 1 / spectral.BesselI0(kernelBeta)
	for i := range points {
		v := float64(i) / fine
		u := v / (KernelTaps / 2)
		if u >= 1 {
			break
		}
		s := 1.0
		if i > 0 {
			s = math.Sin(math.Pi*v) / (math.Pi * v)
		}
		points[i] = s * spectral.BesselI0(kernelBeta*math.Sqrt(1-u*u)) * norm
	}
	y := make([]float64, int(float64(len(x))/step))
	for i := range y {
		at := float64(i) * step
		centre := int(at)
		var sum float64
		for j := max(0, centre-half+1); j <= min(len(x)-1, centre+half); j++ {
			v := math.Abs(at-float64(j)) * cut * fine
			if k := int(v); k < len(points)-1 {
				sum += float64(x[j]) * (points[k] + (v-float64(k))*(points[k+1]-points[k]))
			}
		}
		y[i] = sum * cut
	}
	return y
}

// Skip takes the next frames of a signal away and returns it.
func Skip(s Mono, frames int64) Mono {
	var scratch [256]float64
	for frames > 0 {
		n := min(frames, int64(len(scratch)))
		s.Next(scratch[:n])
		frames -= n
	}
	return s
}

// Starting returns a signal that starts at frame 0, from frame first on.
func Starting(first int64, s Mono) Mono {
	if first >= 0 {
		return s
	}
	return &delayedStart{zeros: -first, in: s}
}
