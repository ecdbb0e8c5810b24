package measure

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/spectral"
)

// Coherence is a sink that estimates the coherence of pairs of channels, bin by
// bin:
//
//	γ_k = Σ_j X_jk·conj(Y_jk) / √(Σ_j |X_jk|² · Σ_j |Y_jk|²)
//
// over Hann windows j that do not overlap, so that as many windows are as many
// independent averages [Carter Knapp Nuttall 1973].
type Coherence struct {
	rate, size, channels int
	pairs                [][2]int
	stft                 *spectral.STFT
	xx, yy               [][]float64 // [pair][bin]
	re, im               [][]float64
	averages             int
}

// NewCoherence returns an estimator for pairs of channels, 0-based, with
// windows of size frames, a power of two from 16 to 65536.
func NewCoherence(format audio.Format, pairs [][2]int, size int) (*Coherence, error) {
	if size < 16 || size > 1<<16 || size&(size-1) != 0 {
		return nil, fmt.Errorf("measure: coherence over windows of %d frames: want a power of two from 16 to 65536", size)
	}
	if len(pairs) == 0 {
		return nil, fmt.Errorf("measure: coherence of no pair of channels")
	}
	c := &Coherence{rate: format.Rate, size: size, channels: format.Channels, pairs: append([][2]int(nil), pairs...)}
	for _, p := range pairs {
		for _, ch := range p {
			if ch < 0 || ch >= format.Channels {
				return nil, fmt.Errorf("measure: coherence of channels %d and %d: there are %d", p[0]+1, p[1]+1, format.Channels)
			}
		}
		bins := size/2 + 1
		c.xx, c.yy = append(c.xx, make([]float64, bins)), append(c.yy, make([]float64, bins))
		c.re, c.im = append(c.re, make([]float64, bins)), append(c.im, make([]float64, bins))
	}
	window := make([]float64, size)
	for i := range window {
		window[i] = 0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/float64(size))
	}
	stft, err := spectral.NewSTFT(format.Channels, size, size, window, c.frame)
	if err != nil {
		return nil, fmt.Errorf("measure: coherence: %w", err)
	}
	c.stft = stft
	return c, nil
}

func (c *Coherence) frame(_ int64, s *spectral.Spectra) error {
	for i, p := range c.pairs {
		xr, xi, yr, yi := s.Re[p[0]], s.Im[p[0]], s.Re[p[1]], s.Im[p[1]]
		for k := range c.xx[i] {
			a, b, u, v := float64(xr[k]), float64(xi[k]), float64(yr[k]), float64(yi[k])
			c.xx[i][k] += a*a + b*b
			c.yy[i][k] += u*u + v*v
			c.re[i][k] += a*u + b*v
			c.im[i][k] += b*u - a*v
		}
	}
	c.averages++
	return nil
}

// Write implements audio.Sink.
func (c *Coherence) Write(src audio.Block) error {
	if src.Channels() != c.channels {
		return fmt.Errorf("measure: block of %d channels, the coherence has %d", src.Channels(), c.channels)
	}
	return c.stft.Write(src)
}

// Averages is the number of windows so far.
func (c *Coherence) Averages() int { return c.averages }

// BinHz is the distance of bins, hertz.
func (c *Coherence) BinHz() float64 { return float64(c.rate) / float64(c.size) }

// Of appends the coherence of pair i in every bin, 0 to half the rate, to
// dst[:0] and returns it. It is 0 where one of the channels is silent or no
// window is complete.
func (c *Coherence) Of(dst []complex128, i int) []complex128 {
	dst = dst[:0]
	for k, xx := range c.xx[i] {
		n := math.Sqrt(xx * c.yy[i][k])
		if !(n > 0) {
			dst = append(dst, 0)
			continue
		}
		dst = append(dst, complex(c.re[i][k]/n, c.im[i][k]/n))
	}
	return dst
}

// CoherenceLimit is the value that the magnitude-squared coherence estimated
// from as many averages stays below with the given probability if the true one
// is 0: 1 - (1-p)^(1/(averages-1)) [Carter Knapp Nuttall 1973]. It is 1 for
// fewer than two averages.
func CoherenceLimit(averages int, probability float64) float64 {
	if averages < 2 {
		return 1
	}
	return 1 - math.Pow(1-probability, 1/float64(averages-1))
}
