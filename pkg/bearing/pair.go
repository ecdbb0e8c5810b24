package bearing

import (
	"fmt"
	"math"

	"alidade/pkg/spectral"
)

// Weighting is how the lines of a cross-spectrum are weighted before it is
// turned into a correlation.
type Weighting int

// Weightings of the generalised cross-correlation [Knapp & Carter 1976].
const (
	PhaseTransform Weighting = iota // every line has the same weight: 1/|G|
	CrossPower                      // plain cross-correlation
)

// String returns "phase transform" or "cross-power".
func (w Weighting) String() string {
	switch w {
	case PhaseTransform:
		return "phase transform"
	case CrossPower:
		return "cross-power"
	}
	return fmt.Sprintf("Weighting(%d)", int(w))
}

// Pair measures the delay between two channels by generalised
// cross-correlation [Knapp & Carter 1976] over one circular stretch of samples.
// It holds scratch memory and is for one goroutine at a time.
type Pair struct {
	size      int
	weighting Weighting
	from, to  int // lines used, half-open
	fft       *spectral.FFT[float64]
	long      *spectral.FFT[float64]
	x         []float64
	ar, ai    []float64
	br, bi    []float64
	gr, gi    []float64 // weighted cross-spectrum, zero outside from..to
	zr, zi    []float64
	fine      []float64
}

// pairOversampling is how much finer than the samples the first search is.
const pairOversampling = 4

// NewPair returns a Pair for stretches of size samples, a power of two from 16
// to 2^18, that uses the frequencies fromHz..toHz at rate frames per second;
// toHz = 0 means up to half the rate. Line 0 and the line at half the rate,
// whose phases say little, are used only where the range includes them.
func NewPair(size int, rate, fromHz, toHz float64, w Weighting) (*Pair, error) {
	if size < 16 || size > 1<<18 || size&(size-1) != 0 {
		return nil, fmt.Errorf("bearing: pair over %d samples: want a power of two, 16 to %d", size, 1<<18)
	}
	if w != PhaseTransform && w != CrossPower {
		return nil, fmt.Errorf("bearing: pair: no weighting %d", int(w))
	}
	if toHz == 0 {
		toHz = rate / 2
	}
	if !(rate > 0) || math.IsInf(rate, 0) || !(fromHz >= 0) || !(toHz > fromHz) || toHz > rate/2 {
		return nil, fmt.Errorf("bearing: pair: frequencies from %g to %g Hz at %g samples per second: want a range within 0 to half the rate", fromHz, toHz, rate)
	}
	p := &Pair{size: size, weighting: w}
	df := rate / float64(size)
	p.from = int(math.Ceil(fromHz/df - 1e-9))
	p.to = min(size/2+1, int(math.Floor(toHz/df+1e-9))+1)
	if p.to-p.from < 2 {
		return nil, fmt.Errorf("bearing: pair: fewer than 2 lines, %g Hz apart, lie between %g and %g Hz", df, fromHz, toHz)
	}
	var err error
	if p.fft, err = spectral.NewFFT[float64](size); err != nil {
		return nil, err
	}
	if p.long, err = spectral.NewFFT[float64](size * pairOversampling); err != nil {
		return nil, err
	}
	n, long := size/2+1, size*pairOversampling
	p.x = make([]float64, size)
	for _, s := range []*[]float64{&p.ar, &p.ai, &p.br, &p.bi, &p.gr, &p.gi} {
		*s = make([]float64, n)
	}
	p.zr, p.zi = make([]float64, long/2+1), make([]float64, long/2+1)
	p.fine = make([]float64, long)
	return p, nil
}

// cross fills gr, gi with the weighted cross-spectrum A*·B.
func (p *Pair) cross(a, b []float32) {
	if len(a) != p.size || len(b) != p.size {
		panic(fmt.Sprintf("bearing: pair of %d samples given %d and %d", p.size, len(a), len(b)))
	}
	for i, v := range a {
		p.x[i] = float64(v)
	}
	p.fft.Forward(p.ar, p.ai, p.x)
	for i, v := range b {
		p.x[i] = float64(v)
	}
	p.fft.Forward(p.br, p.bi, p.x)
	clear(p.gr)
	clear(p.gi)
	for k := p.from; k < p.to; k++ {
		re := p.ar[k]*p.br[k] + p.ai[k]*p.bi[k]
		im := p.ar[k]*p.bi[k] - p.ai[k]*p.br[k]
		if p.weighting == PhaseTransform {
			mag := math.Hypot(re, im)
			if mag == 0 {
				continue
			}
			re, im = re/mag, im/mag
		}
		p.gr[k], p.gi[k] = re, im
	}
}

// Correlation appends to dst[:0] the generalised cross-correlation of a and b
// at the size circular lags of whole samples, entry l for b later than a by l
// samples (entry size-l for earlier), and returns it. With the phase transform
// over all lines, two copies that are a whole number of samples apart give 1
// at that lag and 0 elsewhere. dst may be nil; it panics unless a and b have
// size samples.
func (p *Pair) Correlation(dst []float64, a, b []float32) []float64 {
	p.cross(a, b)
	p.fft.Inverse(p.x, p.gr, p.gi)
	return append(dst[:0], p.x...)
}

// Delay returns by how many samples b is later than a, and the height of the
// correlation there re all lines in phase, 0..1. Lags beyond maxLag samples are
// not looked at. The peak of the band-limited correlation is found exactly, by
// Newton's method from the best of four points a sample, not by a parabola,
// whose bias reaches 0.12 sample [Jacovitti & Scarano 1993]. ok is false if one
// of the two is silent. It panics unless a and b have size samples.
func (p *Pair) Delay(a, b []float32, maxLag float64) (delay, height float64, ok bool) {
	p.cross(a, b)
	total := 0.0
	for k := p.from; k < p.to; k++ {
		total += p.lineWeight(k) * math.Hypot(p.gr[k], p.gi[k])
	}
	if total == 0 {
		return 0, 0, false
	}
	clear(p.zr)
	clear(p.zi)
	copy(p.zr, p.gr)
	copy(p.zi, p.gi)
	// The line at half the rate stands once in the short transform and twice,
	// for either sign of frequency, in the long one.
	if p.to == p.size/2+1 {
		p.zr[p.size/2] /= 2
		p.zi[p.size/2] /= 2
	}
	p.long.Inverse(p.fine, p.zr, p.zi)
	long := len(p.fine)
	reach := int(math.Min(math.Ceil(math.Max(maxLag, 0)*pairOversampling), float64(long/2-1)))
	best, at := math.Inf(-1), 0
	for l := -reach; l <= reach; l++ {
		if v := p.fine[(l+long)%long]; v > best {
			best, at = v, l
		}
	}
	x := float64(at) / pairOversampling
	low, high := x-1.0/pairOversampling, x+1.0/pairOversampling
	for range 30 {
		value, slope, bend := p.evaluate(x)
		height = value / total
		step := 0.0
		if bend < 0 {
			step = -slope / bend
		} else {
			step = math.Copysign(0.05, slope)
		}
		next := math.Min(math.Max(x+step, low), high)
		if math.Abs(next-x) < 1e-12 {
			break
		}
		x = next
	}
	return x, height, true
}

// lineWeight is 2 for a line that stands for both signs of frequency.
func (p *Pair) lineWeight(k int) float64 {
	if k == 0 || k == p.size/2 {
		return 1
	}
	return 2
}

// evaluate returns the correlation at a lag of x samples, with its first and
// second derivatives.
func (p *Pair) evaluate(x float64) (value, slope, bend float64) {
	for k := p.from; k < p.to; k++ {
		w := 2 * math.Pi * float64(k) / float64(p.size)
		s, c := math.Sincos(w * x)
		f := p.lineWeight(k)
		re := f * (p.gr[k]*c - p.gi[k]*s)
		im := f * (p.gr[k]*s + p.gi[k]*c)
		value += re
		slope -= w * im
		bend -= w * w * re
	}
	return value, slope, bend
}
