package bearing

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sync"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"

	"gonum.org/v1/gonum/dsp/fourier"
)

const testSpeed = 343.2

func lineMics(n int, spacing float64) []rig.Point {
	var at []rig.Point
	for m := range n {
		at = append(at, rig.Point{X: (float64(m) - float64(n-1)/2) * spacing})
	}
	return at
}

func ringMics(n int, radius float64) []rig.Point {
	var at []rig.Point
	for m := range n {
		s, c := math.Sincos(2 * math.Pi * float64(m) / float64(n))
		at = append(at, rig.Point{X: radius * c, Y: radius * s})
	}
	return at
}

// solidMics are eight microphones on the corners of a twisted cube.
func solidMics(radius float64) []rig.Point {
	var at []rig.Point
	for m := range 8 {
		z := -0.7 + 1.4*float64(m)/7
		s, c := math.Sincos(2.4 * float64(m))
		r := math.Sqrt(1 - z*z)
		at = append(at, rig.Point{X: radius * r * c, Y: radius * r * s, Z: radius * z})
	}
	return at
}

// white is Gaussian noise of variance 1, repeatable by its seed.
func white(n int, seed uint64) []float64 {
	r := rand.New(rand.NewPCG(seed, 0x9e3779b97f4a7c15))
	x := make([]float64, n)
	for i := range x {
		x[i] = r.NormFloat64()
	}
	return x
}

// plans are the transforms that planOf has made, by size.
var plans sync.Map

// spectrum returns the transform of x with zeros behind.
func spectrum(t *spectral.FFT[float64], x []float64) (re, im []float64) {
	padded := make([]float64, t.Len())
	copy(padded, x)
	re, im = make([]float64, t.Bins()), make([]float64, t.Bins())
	t.Forward(re, im, padded)
	return re, im
}

// planOf returns a transform of n values or more, a power of two.
func planOf(n int) *spectral.FFT[float64] {
	size := spectral.MinSize
	for size < n {
		size *= 2
	}
	p, ok := plans.Load(size)
	if !ok {
		t, err := spectral.NewFFT[float64](size)
		if err != nil {
			panic(err)
		}
		p, _ = plans.LoadOrStore(size, t)
	}
	return p.(*spectral.FFT[float64]).Clone()
}

// shifted returns x later by each of the delays, exactly, as if it were silent
// before and after; delayed has x go round.
func shifted(x []float64, delays []float64, rate float64) [][]float64 {
	longest := 0.0
	for _, d := range delays {
		longest = math.Max(longest, math.Abs(d))
	}
	f := planOf(len(x) + int(longest*rate) + 64)
	n := f.Len()
	re, im := spectrum(f, x)
	out := make([][]float64, len(delays))
	a, b := make([]float64, len(re)), make([]float64, len(re))
	for m, d := range delays {
		clear(a)
		clear(b)
		addTurned(a, b, re, im, -2*math.Pi*rate/float64(n)*d)
		b[n/2] = 0
		y := make([]float64, n)
		f.Inverse(y, a, b)
		out[m] = y[:len(x)]
	}
	return out
}

// addTurned adds re, im, bin k of them turned by k·step rad, to a, b.
func addTurned(a, b, re, im []float64, step float64) {
	stepSin, stepCos := math.Sincos(step)
	var sin, cos float64
	for k := range re {
		if k%64 == 0 { // anew, so that rounding does not add up
			sin, cos = math.Sincos(float64(k) * step)
		}
		a[k] += re[k]*cos - im[k]*sin
		b[k] += re[k]*sin + im[k]*cos
		sin, cos = sin*stepCos+cos*stepSin, cos*stepCos-sin*stepSin
	}
}

// delayed returns x later by each of the delays, exactly, as if x went round
// for ever: a linear phase on its whole spectrum.
func delayed(x []float64, delays []float64, rate float64) [][]float64 {
	n := len(x)
	f := fourier.NewFFT(n)
	spec := f.Coefficients(nil, x)
	out := make([][]float64, len(delays))
	turned := make([]complex128, len(spec))
	for m, d := range delays {
		step := -2 * math.Pi * rate / float64(n) * d
		by, turn := cmplx.Rect(1, step), complex128(0)
		for k, c := range spec {
			if k%64 == 0 { // anew, so that rounding does not add up
				turn = cmplx.Rect(1, float64(k)*step)
			}
			turned[k] = c * turn
			turn *= by
		}
		if n%2 == 0 {
			turned[n/2] = complex(real(turned[n/2]), 0)
		}
		y := f.Sequence(nil, turned)
		for i := range y {
			y[i] /= float64(n)
		}
		out[m] = y
	}
	return out
}

// mixture adds waves and noise into a block at -20 dB re full scale.
type mixture struct {
	mics []rig.Point
	rate float64
	x    [][]float64
}

func newMixture(mics []rig.Point, rate float64, frames int) *mixture {
	m := &mixture{mics: mics, rate: rate}
	for range mics {
		m.x = append(m.x, make([]float64, frames))
	}
	return m
}

// plane adds signal s from a far direction.
func (m *mixture) plane(s []float64, from rig.Direction, gain float64) *mixture {
	u := from.Unit()
	var d []float64
	for _, p := range m.mics {
		d = append(d, -p.Dot(u)/testSpeed)
	}
	return m.add(shifted(s, d, m.rate), gain)
}

// planes adds as many signals from far directions at once as wave gives.
func (m *mixture) planes(waves int, wave func(w int) ([]float64, rig.Direction), gain float64) *mixture {
	frames, longest := len(m.x[0]), 0.0
	for _, p := range m.mics {
		longest = math.Max(longest, math.Sqrt(p.Dot(p))/testSpeed)
	}
	f := planOf(frames + int(longest*m.rate) + 64)
	n := f.Len()
	re, im := make([][]float64, len(m.mics)), make([][]float64, len(m.mics))
	for c := range m.mics {
		re[c], im[c] = make([]float64, f.Bins()), make([]float64, f.Bins())
	}
	for w := range waves {
		s, from := wave(w)
		a, b := spectrum(f, s)
		for c, p := range m.mics {
			addTurned(re[c], im[c], a, b, 2*math.Pi*m.rate/float64(n)*p.Dot(from.Unit())/testSpeed)
		}
	}
	var y [][]float64
	for c := range m.mics {
		im[c][n/2] = 0
		sum := make([]float64, n)
		f.Inverse(sum, re[c], im[c])
		y = append(y, sum[:frames])
	}
	return m.add(y, gain)
}

func (m *mixture) add(y [][]float64, gain float64) *mixture {
	for c := range m.x {
		for i := range m.x[c] {
			m.x[c][i] += gain * y[c][i]
		}
	}
	return m
}

// noise adds independent white noise of the given standard deviation.
func (m *mixture) noise(sd float64, seed uint64) *mixture {
	for c := range m.x {
		for i, v := range white(len(m.x[c]), seed*1000+uint64(c)+1) {
			m.x[c][i] += sd * v
		}
	}
	return m
}

func (m *mixture) block() audio.Block {
	b := audio.NewBlock(len(m.x), len(m.x[0]))
	for c, x := range m.x {
		to := b.Channel(c)
		for i, v := range x {
			to[i] = float32(0.1 * v)
		}
	}
	return b
}

// find runs a finder over b.
func find(t testing.TB, mics []rig.Point, rate int, b audio.Block, o Options) *Result {
	t.Helper()
	if o.Speed == 0 {
		o.Speed = testSpeed
	}
	f, err := NewFinder(mics, rig.Spread(mics).Centre, rate, o)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.Copy(audio.FromBlock(rate, b), 4096, f); err != nil {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	return f.Result()
}

const deg = math.Pi / 180
