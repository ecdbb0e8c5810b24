package scenario

import (
	"fmt"
	"math"
	"math/rand/v2"

	"alidade/pkg/spectral"
)

// stream returns the random stream for one purpose: streams of different
// labels are independent. The mixing is that of splitmix64 [Steele, Lea &
// Flood 2014].
func stream(seed uint64, label string, index int) *rand.Rand {
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

// gaussian is white noise of unit power.
type gaussian struct{ rng *rand.Rand }

func (g *gaussian) next(dst []float64) {
	for i := range dst {
		dst[i] = g.rng.NormFloat64()
	}
}

// noiseSignal returns unit-power noise of a spectrum.
func noiseSignal(spectrum string, rate int, rng *rand.Rand) mono {
	if taps := shape(spectrum, rate); taps != nil {
		return newFiltered(taps, &gaussian{rng})
	}
	return &gaussian{rng}
}

// periodic is a signal given by a function of its frame number.
type indexed struct {
	frame int64
	value func(frame int64) float64
}

func (s *indexed) next(dst []float64) {
	for i := range dst {
		dst[i] = s.value(s.frame)
		s.frame++
	}
}

// scaled is a signal times a factor.
type scaled struct {
	in   mono
	gain float64
}

func (s *scaled) next(dst []float64) {
	s.in.next(dst)
	for i := range dst {
		dst[i] *= s.gain
	}
}

// delayedStart gives zeros for the frames before a signal that starts at
// frame 0.
type delayedStart struct {
	zeros int64
	in    mono
}

func (s *delayedStart) next(dst []float64) {
	n := min(s.zeros, int64(len(dst)))
	clear(dst[:n])
	s.zeros -= n
	if n < int64(len(dst)) {
		s.in.next(dst[n:])
	}
}

// gated is a signal that is on at some times only, with raised-cosine edges
// inside them.
type gated struct {
	in    mono
	frame int64
	on    [][2]int64 // frames, ascending, apart
	edge  int64
}

func (g *gated) next(dst []float64) {
	g.in.next(dst)
	for i := range dst {
		dst[i] *= g.gain(g.frame + int64(i))
	}
	g.frame += int64(len(dst))
}

func (g *gated) gain(frame int64) float64 {
	for _, on := range g.on {
		if frame < on[0] || frame >= on[1] {
			continue
		}
		edge := min(g.edge, (on[1]-on[0])/2)
		if d := min(frame-on[0], on[1]-1-frame); d < edge {
			return 0.5 - 0.5*math.Cos(math.Pi*(float64(d)+0.5)/float64(edge))
		}
		return 1
	}
	return 0
}

// chirpValue returns exponential sweeps from one frequency to another, hertz,
// one after the other, each with raised-cosine ends of 10 ms [Farina 2000].
func chirpValue(from, to, every float64, rate int) func(int64) float64 {
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

// claps is short bursts of noise that rise in 0.2 ms and decay with a time
// constant of 4 ms, roughly a pair of hands.
type claps struct {
	rng    *rand.Rand
	rate   float64
	period int64
	frame  int64
	last   float64
}

func (c *claps) next(dst []float64) {
	for i := range dst {
		at := c.frame % c.period
		t := float64(at) / c.rate
		if at == 0 {
			c.last = 0
		}
		v := 0.0
		if t < 0.06 { // 15 time constants: -130 dB
			white := c.rng.NormFloat64()
			// A difference takes the bass out of the burst.
			v = (white - 0.7*c.last) * (1 - math.Exp(-t/2e-4)) * math.Exp(-t/4e-3)
			c.last = white
		}
		dst[i] = v
		c.frame++
	}
}

// samples is a recording, silence before and after it.
type samples struct {
	x     []float64
	frame int64
}

func (s *samples) next(dst []float64) {
	for i := range dst {
		dst[i] = 0
		if s.frame >= 0 && s.frame < int64(len(s.x)) {
			dst[i] = s.x[s.frame]
		}
		s.frame++
	}
}

// resample returns x at another rate by windowed-sinc interpolation, cut off
// at the lower Nyquist frequency of the two.
func resample(x []float32, from, to int) []float64 {
	if from == to {
		y := make([]float64, len(x))
		for i, v := range x {
			y[i] = float64(v)
		}
		return y
	}
	step := float64(from) / float64(to) // input frames an output frame
	cut := math.Min(1, 1/step)
	half := int(math.Ceil(float64(kernelTaps/2) / cut))
	// The kernel at 2048 points a zero crossing, interpolated linearly.
	const fine = 2048
	points := make([]float64, kernelTaps/2*fine+2)
	norm := 1 / spectral.BesselI0(kernelBeta)
	for i := range points {
		v := float64(i) / fine
		u := v / (kernelTaps / 2)
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

// signal returns the dry signal of source i from frame first on, before its
// level; calibrated reports that its power is 1 in the mean already.
func (p *plan) signal(i int, seed uint64, first int64) (sig mono, calibrated bool, err error) {
	s := &p.sc.Sources[i]
	rate := p.sc.RateHz
	rng := stream(seed, "source", i)
	switch s.Kind {
	case KindNoise:
		sig, calibrated = noiseSignal(s.Spectrum, rate, rng), true
	case KindTone:
		omega := 2 * math.Pi * or(s.Hz, 1000) / float64(rate)
		sig = &indexed{first, func(frame int64) float64 { return math.Sqrt2 * math.Sin(omega*float64(frame)) }}
		calibrated = true
	case KindChirp:
		sig = &indexed{first, chirpValue(or(s.FromHz, 100), or(s.ToHz, 0.4*float64(rate)), or(s.EveryS, 1), rate)}
	case KindClaps:
		sig = starting(first, &claps{rng: rng, rate: float64(rate), period: max(1, int64(or(s.EveryS, 1)*float64(rate)))})
	case KindTalker:
		sig = starting(first, newTalker(rate, or(s.Hz, 115), rng))
	case KindFile:
		sig = &samples{x: p.recordings[i], frame: first}
	default:
		return nil, false, fmt.Errorf("source %q: kind %q is not known", s.Name, s.Kind)
	}
	if s.OnS != nil {
		g := &gated{in: sig, frame: first, edge: int64(0.005 * float64(rate))}
		for _, on := range s.OnS {
			g.on = append(g.on, [2]int64{int64(math.Round(on[0] * float64(rate))), int64(math.Round(on[1] * float64(rate)))})
		}
		sig = g
	}
	return sig, calibrated, nil
}

// starting returns a signal that starts at frame 0, from frame first on.
func starting(first int64, s mono) mono {
	if first >= 0 {
		return s
	}
	return &delayedStart{zeros: -first, in: s}
}
