package beam

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// maxCovariance bounds the numbers that a Covariance holds: 256 MiB.
const maxCovariance = 1 << 25

// CovarianceOptions say what a Covariance is taken from.
type CovarianceOptions struct {
	// Stretches of the stream, frames from its start, half-open, ascending and
	// without overlap. Nil is the whole stream. Transforms never reach over the
	// end of a stretch; one shorter than a transform gives nothing.
	Stretches [][2]int64
	// Forget is the time constant, seconds, with which old frames lose weight;
	// 0 weighs all alike.
	Forget float64
}

// Covariance is an audio.Sink that averages R[k][m*M+n] = E[x_m·x_n*] over
// Hann-weighted transforms that overlap by half [Welch 1967].
type Covariance struct {
	rate, mics, size int
	stretches        [][2]int64
	keep             float64 // weight that is left of the past after one transform

	fft    *spectral.FFT[float64]
	window []float64
	ring   [][]float64 // the last size frames of every microphone, oldest first
	filled int         // frames in ring
	x      []float64
	re, im [][]float64 // spectra [m][k]
	sumRe  []float64   // sum[pair*bins+k], pair of m >= n at m(m+1)/2+n
	sumIm  []float64
	weight float64
	centre float64 // weight times the middle of every transform, frames
	frames int
	at     int64 // frame of the stream that the next block begins at
	from   int64 // and that comes after the ring
	next   int   // stretch that at lies in or before
}

var _ audio.Sink = (*Covariance)(nil)

// NewCovariance returns a covariance of nothing for streams of mics channels at
// rate frames per second, by transforms of size points, a power of two from 16.
// It returns an error for a shape outside of that or too large to hold, and for
// stretches out of order.
func NewCovariance(rate, mics, size int, o CovarianceOptions) (*Covariance, error) {
	if rate <= 0 || mics < 1 || mics > 4096 {
		return nil, fmt.Errorf("beam: covariance of %d microphones at %d frames per second", mics, rate)
	}
	if size < 16 || size > maxFFTSize || size&(size-1) != 0 {
		return nil, fmt.Errorf("beam: covariance of %d points: want a power of two from 16 to %d", size, maxFFTSize)
	}
	bins, pairs := size/2+1, mics*(mics+1)/2
	if 2*bins*pairs > maxCovariance {
		return nil, fmt.Errorf("beam: covariance of %d microphones in %d points is %d numbers, above %d: take fewer points", mics, size, 2*bins*pairs, maxCovariance)
	}
	if !(o.Forget >= 0) || math.IsInf(o.Forget, 0) {
		return nil, fmt.Errorf("beam: covariance: time constant of %g s", o.Forget)
	}
	last := int64(0)
	for i, s := range o.Stretches {
		if s[0] < last || s[1] <= s[0] {
			return nil, fmt.Errorf("beam: covariance: stretch %d is frames %d to %d: stretches must be ascending, not empty, and not overlap", i+1, s[0], s[1])
		}
		last = s[1]
	}
	fft, err := spectral.NewFFT[float64](size)
	if err != nil {
		return nil, fmt.Errorf("beam: covariance: %w", err)
	}
	c := &Covariance{rate: rate, mics: mics, size: size, fft: fft, keep: 1}
	if o.Stretches == nil {
		c.stretches = [][2]int64{{0, math.MaxInt64}}
	} else {
		c.stretches = append(c.stretches, o.Stretches...)
	}
	if o.Forget > 0 {
		c.keep = math.Exp(-float64(size/2) / (o.Forget * float64(rate)))
	}
	c.window = spectral.Periodic(size, spectral.Hann)
	c.x = make([]float64, size)
	c.sumRe, c.sumIm = make([]float64, bins*pairs), make([]float64, bins*pairs)
	for range mics {
		c.ring = append(c.ring, make([]float64, size))
		c.re, c.im = append(c.re, make([]float64, bins)), append(c.im, make([]float64, bins))
	}
	return c, nil
}

// Write implements audio.Sink. It returns an error if src has not the channels
// of the covariance.
func (c *Covariance) Write(src audio.Block) error {
	if src.Channels() != c.mics {
		return fmt.Errorf("beam: covariance of %d microphones: block of %d channels", c.mics, src.Channels())
	}
	for i := 0; i < src.Frames(); {
		if c.next == len(c.stretches) {
			break
		}
		s := c.stretches[c.next]
		switch here := c.at + int64(i); {
		case here < s[0]:
			i = int(min(int64(src.Frames()), int64(i)+s[0]-here))
		case here >= s[1]:
			c.next++
			c.filled = 0
		default:
			n := int(min(int64(src.Frames()-i), s[1]-here, int64(c.size-c.filled)))
			for m := range c.mics {
				from := src.Channel(m)[i : i+n]
				to := c.ring[m][c.filled : c.filled+n]
				for j, v := range from {
					to[j] = float64(v)
				}
			}
			c.filled += n
			i += n
			if c.filled == c.size {
				c.from = c.at + int64(i)
				c.add()
			}
		}
	}
	c.at += int64(src.Frames())
	return nil
}

// add takes the full ring into the averages and keeps its second half.
func (c *Covariance) add() {
	for m, ring := range c.ring {
		for i, v := range ring {
			c.x[i] = v * c.window[i]
		}
		c.fft.Forward(c.re[m], c.im[m], c.x)
		copy(ring, ring[c.size/2:])
	}
	c.filled = c.size / 2
	bins, pair := c.size/2+1, 0
	for m := range c.mics {
		for n := range m + 1 {
			sumRe, sumIm := c.sumRe[pair*bins:(pair+1)*bins], c.sumIm[pair*bins:(pair+1)*bins]
			ar, ai, br, bi := c.re[m][:bins], c.im[m][:bins], c.re[n][:bins], c.im[n][:bins]
			kernel.AddCross(sumRe, sumIm, ar, ai, br, bi, nil, c.keep)
			pair++
		}
	}
	c.weight = c.keep*c.weight + 1
	c.centre = c.keep*c.centre + float64(c.from) - float64(c.size)/2
	c.frames++
}

// Frames is the number of transforms taken in. Neighbours overlap by half, so
// that they count for about as many independent ones as 0.95 times their
// number, for noise [Welch 1967].
func (c *Covariance) Frames() int { return c.frames }

// Effective is the number of transforms that the weights of forgetting leave:
// their sum.
func (c *Covariance) Effective() float64 { return c.weight }

// Powers appends to dst[:0] the mean square of what was taken in of every
// microphone, re full scale squared, and returns it; zero before the first
// transform.
func (c *Covariance) Powers(dst []float64) []float64 {
	dst = dst[:0]
	scale := 0.0
	for _, v := range c.window {
		scale += v * v
	}
	scale *= c.weight * float64(c.size)
	bins, pair := c.size/2+1, 0
	for m := range c.mics {
		pair += m
		sum := 0.0
		for k, v := range c.sumRe[pair*bins : (pair+1)*bins] {
			if k > 0 && k < bins-1 {
				v *= 2 // the bin of the negative frequency
			}
			sum += v
		}
		pair++
		if scale > 0 {
			sum /= scale
		}
		dst = append(dst, sum)
	}
	return dst
}

// Centre is where in the stream the transforms taken in lie on the mean, frames
// from its start; NaN before the first.
func (c *Covariance) Centre() float64 { return c.centre / c.weight }

// Reset forgets the transforms taken in. The stream goes on where it is, and
// frames that were in no whole transform yet are in the next one.
func (c *Covariance) Reset() {
	clear(c.sumRe)
	clear(c.sumIm)
	c.weight, c.centre, c.frames = 0, 0, 0
}

// Matrix sets dst, of M² elements, to R of bin k, in powers of a bin of the
// transform re full scale; zero before the first transform.
func (c *Covariance) Matrix(dst []complex128, k int) {
	if len(dst) != c.mics*c.mics {
		panic(fmt.Sprintf("beam: covariance of %d microphones into %d elements", c.mics, len(dst)))
	}
	scale := 0.0
	for _, v := range c.window {
		scale += v * v
	}
	scale *= c.weight
	if scale == 0 {
		clear(dst)
		return
	}
	bins, pair := c.size/2+1, 0
	for m := range c.mics {
		for n := range m + 1 {
			v := complex(c.sumRe[pair*bins+k]/scale, c.sumIm[pair*bins+k]/scale)
			dst[m*c.mics+n], dst[n*c.mics+m] = v, conj(v)
			pair++
		}
	}
}
