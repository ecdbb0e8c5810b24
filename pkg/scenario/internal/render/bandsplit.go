package render

import "math"

// bandSplit joins responses that hold for single octaves into one. Between two
// mid-band frequencies the weights are cos² and sin² of the logarithm of
// frequency, which add up to 1; below the first and above the last octave its
// Response holds. Filters have no phase: they ring before a reflection as
// after it.
type bandSplit struct {
	rate int
	ring int // frames that the filters are given to ring, on either side
}

// weight returns the weight of octave b of bands at a frequency, hertz.
func (s *bandSplit) weight(b, bands int, hz float64) float64 {
	at := math.Inf(-1) // octaves above the first
	if hz > 0 {
		at = math.Log10(hz/OctaveHz(0)) / 0.3
	}
	at = math.Min(math.Max(at, 0), float64(bands-1))
	d := math.Abs(at - float64(b))
	if d >= 1 {
		return 0
	}
	c := math.Cos(math.Pi / 2 * d)
	return c * c
}

// weights returns the weights of every octave at the bins that responses of a
// length are joined in, and the number of frames transformed.
func (s *bandSplit) weights(bands, length int) (w [][]float64, n int) {
	n = 1024
	for n < length+s.ring {
		n *= 2
	}
	w = make([][]float64, bands)
	for b := range w {
		w[b] = make([]float64, n/2+1)
		for k := range w[b] {
			w[b][k] = s.weight(b, bands, float64(k)*float64(s.rate)/float64(n))
		}
	}
	return w, n
}

// join returns the joined response, as long as each of bands, with the weights
// of its length.
func join(bands, weights [][]float64, n int) []float64 {
	length := len(bands[0])
	fft := plan64(n)
	bins := n/2 + 1
	re, im := make([]float64, bins), make([]float64, bins)
	sumRe, sumIm := make([]float64, bins), make([]float64, bins)
	x := make([]float64, n)
	for b, h := range bands {
		clear(x)
		copy(x, h)
		fft.Forward(re, im, x)
		for k, w := range weights[b] {
			sumRe[k] += w * re[k]
			sumIm[k] += w * im[k]
		}
	}
	fft.Inverse(x, sumRe, sumIm)
	return x[:length:length]
}
