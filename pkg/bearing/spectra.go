package bearing

import (
	"math"

	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// pairIndex is two microphones, i < j.
type pairIndex struct{ i, j int }

// maxPairs bounds the pairs of a rig with very many microphones.
const maxPairs = 496

// choosePairs returns all pairs of mics microphones if they are at most limit,
// else pairs a fixed number of places apart in the order of the microphones,
// spread evenly over those numbers, so that each microphone stands in equally
// many.
func choosePairs(mics, limit int) []pairIndex {
	var pairs []pairIndex
	if all := mics * (mics - 1) / 2; all <= limit {
		for i := range mics {
			for j := i + 1; j < mics; j++ {
				pairs = append(pairs, pairIndex{i, j})
			}
		}
		return pairs
	}
	offsets := max(1, limit/mics)
	half := (mics - 1) / 2
	last := 0
	for n := range offsets {
		s := 1 + n*(half-1)/max(1, offsets-1)
		if s == last {
			continue
		}
		last = s
		for i := range mics {
			j := (i + s) % mics
			pairs = append(pairs, pairIndex{min(i, j), max(i, j)})
		}
	}
	return pairs
}

// crossSum is a weighted sum of auto- and cross-spectra over frames.
// Shapes: weight[k], auto[m*K+k], re[p*K+k].
type crossSum struct {
	bins     int
	frames   int
	weight   []float64 // sum of the weights
	weightSq []float64 // sum of their squares
	auto     []float64
	re, im   []float64
}

func newCrossSum(mics, pairs, bins int) *crossSum {
	return &crossSum{
		bins: bins, weight: make([]float64, bins), weightSq: make([]float64, bins),
		auto: make([]float64, mics*bins), re: make([]float64, pairs*bins), im: make([]float64, pairs*bins),
	}
}

func (c *crossSum) clear() {
	c.frames = 0
	for _, s := range [][]float64{c.weight, c.weightSq, c.auto, c.re, c.im} {
		clear(s)
	}
}

// plus adds d.
func (c *crossSum) plus(d *crossSum) {
	c.frames += d.frames
	addTo(c.weight, d.weight)
	addTo(c.weightSq, d.weightSq)
	addTo(c.auto, d.auto)
	addTo(c.re, d.re)
	addTo(c.im, d.im)
}

func addTo(dst, src []float64) {
	src = src[:len(dst)]
	for i := range dst {
		dst[i] += src[i]
	}
}

// fade multiplies everything by f.
func (c *crossSum) fade(f float64) {
	for _, s := range [][]float64{c.weight, c.weightSq, c.auto, c.re, c.im} {
		for i := range s {
			s[i] *= f
		}
	}
}

// frameSpectra is one frame of the transform, cut to the bins in use.
// Shape: re[m*K+k].
type frameSpectra struct {
	re, im []float64
	power  []float64 // mean over the microphones
}

// add adds one frame with weight w[k]; a nil w is all ones.
func (c *crossSum) add(f *frameSpectra, pairs []pairIndex, w []float64) {
	K := c.bins
	c.frames++
	for k := range K {
		g := 1.0
		if w != nil {
			g = w[k]
		}
		c.weight[k] += g
		c.weightSq[k] += g * g
	}
	for m := 0; m*K < len(c.auto); m++ {
		dst := c.auto[m*K : m*K+K]
		re, im := f.re[m*K:m*K+K], f.im[m*K:m*K+K]
		for k := range dst {
			e := re[k]*re[k] + im[k]*im[k]
			if w != nil {
				e *= w[k]
			}
			dst[k] += e
		}
	}
	for p, q := range pairs {
		at := func(x []float64, m int) []float64 { return x[m*K : m*K+K] }
		kernel.AddCross(at(c.re, p), at(c.im, p), at(f.re, q.i), at(f.im, q.i), at(f.re, q.j), at(f.im, q.j), w, 1)
	}
}

// framer cuts the stream into overlapping Hann-windowed frames of spectra.
type framer struct {
	size, hop int
	from, to  int // bins
	fft       *spectral.FFT[float32]
	window    []float32
	hold      [][]float32 // the last size samples of each microphone
	fill      int
	x, re, im []float32
	spectra   frameSpectra

	micPower []float64
}

func newFramer(mics, size, hop, from, to int) (*framer, error) {
	fft, err := spectral.NewFFT[float32](size)
	if err != nil {
		return nil, err
	}
	f := &framer{size: size, hop: hop, from: from, to: to, fft: fft}
	f.window = make([]float32, size)
	for i := range f.window {
		f.window[i] = float32(0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/float64(size)))
	}
	for range mics {
		f.hold = append(f.hold, make([]float32, size))
	}
	f.x, f.re, f.im = make([]float32, size), make([]float32, size/2+1), make([]float32, size/2+1)
	K := to - from
	f.spectra = frameSpectra{re: make([]float64, mics*K), im: make([]float64, mics*K), power: make([]float64, K)}
	f.micPower = make([]float64, mics)
	return f, nil
}

// transform makes the spectra of the frame that is held. The scale is that of
// a mean square: 1/(size·3/8) on powers, so that white noise of variance v has
// power v in every bin.
func (f *framer) transform() {
	K := f.to - f.from
	scale := 1 / math.Sqrt(0.375*float64(f.size))
	clear(f.spectra.power)
	for m, h := range f.hold {
		kernel.Multiply(f.x, h, f.window)
		f.fft.Forward(f.re, f.im, f.x)
		re, im := f.spectra.re[m*K:m*K+K], f.spectra.im[m*K:m*K+K]
		sum := 0.0
		for k := range re {
			r, i := float64(f.re[f.from+k])*scale, float64(f.im[f.from+k])*scale
			re[k], im[k] = r, i
			e := r*r + i*i
			f.spectra.power[k] += e
			sum += e
		}
		f.micPower[m] = sum / float64(K)
	}
	for k := range f.spectra.power {
		f.spectra.power[k] /= float64(len(f.hold))
	}
}
