package measure

import (
	"fmt"
	"math"

	"alidade/pkg/kernel"
)

// The analysis: short-time spectra under a periodic Hann window, half
// overlapped, whose bin powers are added with the weights of weigh. Bands from
// about 600 Hz up are taken from the signal itself, the lower ones from the
// signal decimated to about 2.8 kHz, in four window lengths. A band is taken
// from the shortest window that holds at least leastPeriods periods of its
// mid-band frequency: with 18 every band keeps to the class 1 limits of
// IEC 61260-1:2014 by 0.05 dB and more, with 16 by less. Window lengths go down
// in steps of two: where a long window met one four times shorter, the sum of
// the two bands would rise above the limit of 0.8 dB at their edge.
const leastPeriods = 18

// lowSizes are the window lengths on the decimated signal, longest first.
var lowSizes = [...]int{1024, 512, 256, 128}

// firstHigh is the mid-band frequency from which on, at the latest, bands are
// taken from the undecimated signal: 800 Hz, the lowest third of an octave.
var firstHigh = third(-1, 800)

// topLow is the upper edge of the highest band of the decimated signal.
var topLow = octave(-1, 500).HighHz

// grid is one window length with the bands that are taken from it.
type grid struct {
	size, hop int // samples of its signal
	decimated bool
	seconds   float64 // hop
	window    []float32
	scale     float64 // from the sum of bin powers to power re a full-scale sine
	bands     []int   // indices into layout.bands
	first     []int   // first[i]: first bin of bands[i]
	weights   [][]float32
}

// layout is the whole analysis for one frame rate.
type layout struct {
	rate    int
	thirds  int    // how many of bands are thirds; octaves follow
	bands   []Band // thirds, then octaves
	factor  int    // of the decimation
	taps    []float32
	grids   []grid // the undecimated one first
	longest int    // samples of the decimated signal
}

func newLayout(rate int) (*layout, error) {
	if rate < 8000 || rate > 384000 {
		return nil, fmt.Errorf("measure: %d frames per second: bands are measured from 8000 to 384000", rate)
	}
	l := &layout{rate: rate, bands: ThirdOctaves(rate)}
	l.thirds = len(l.bands)
	l.bands = append(l.bands, Octaves(rate)...)

	size := 4
	for float64(size)*firstHigh.CentreHz < leastPeriods*float64(rate) {
		size *= 2
	}
	l.factor = int(math.Ceil(leastPeriods * float64(rate) / (third(-13, 50).CentreHz * float64(lowSizes[0]))))
	lowRate := float64(rate) / float64(l.factor)
	l.taps = lowpass(topLow/float64(rate), (lowRate-topLow)/float64(rate))
	l.grids = append(l.grids, grid{size: size, hop: size / 2, seconds: float64(size/2) / float64(rate)})
	for _, n := range lowSizes {
		l.grids = append(l.grids, grid{size: n, hop: n / 2, decimated: true, seconds: float64(n/2) / lowRate})
	}
	l.longest = lowSizes[0]
	for i := range l.grids {
		g := &l.grids[i]
		g.window = make([]float32, g.size)
		energy := 0.0
		for n := range g.window {
			w := 0.5 - 0.5*math.Cos(2*math.Pi*float64(n)/float64(g.size))
			g.window[n] = float32(w)
			energy += w * w
		}
		// Σ_k |X_k|² over the positive bins is size·energy/4 for a full-scale
		// sine, by Parseval's relation.
		g.scale = 4 / (float64(g.size) * energy)
	}
	for b, band := range l.bands {
		// An octave goes where its lowest third goes.
		lowest := band
		if b >= l.thirds {
			lowest = l.bands[3*(b-l.thirds)]
		}
		i := l.gridOf(lowest)
		g := &l.grids[i]
		r := float64(rate)
		if g.decimated {
			r = lowRate
		}
		first, weights := band.Cells(r / float64(g.size))
		g.bands = append(g.bands, b)
		g.first = append(g.first, first)
		g.weights = append(g.weights, weights)
	}
	return l, nil
}

// gridOf returns the grid with the shortest window that band may be taken
// from.
func (l *layout) gridOf(band Band) int {
	if band.CentreHz*2*l.grids[0].seconds >= leastPeriods {
		return 0
	}
	for i := len(l.grids) - 1; i > 1; i-- {
		if band.CentreHz*2*l.grids[i].seconds >= leastPeriods*(1-1e-9) {
			return i
		}
	}
	return 1
}

// Cells returns the first bin that the band has a part in, and of that and each
// of the following ones the part of the bin's cell, k-1/2 to k+1/2, that lies
// inside the band. spacing is the distance of bins, hertz. The parts add up to
// the width of the band over the spacing, so the effective bandwidth is exact.
func (b Band) Cells(spacing float64) (first int, weights []float32) {
	low, high := b.LowHz/spacing, b.HighHz/spacing
	first = int(math.Floor(low + 0.5))
	for k := first; float64(k)-0.5 < high; k++ {
		weights = append(weights, float32(math.Min(high, float64(k)+0.5)-math.Max(low, float64(k)-0.5)))
	}
	return first, weights
}

// lowpass returns a symmetric filter of odd length, windowed by Kaiser's
// window for 90 dB, that passes frequencies to pass and stops those from stop
// on, both re the frame rate (Kaiser 1974).
func lowpass(pass, stop float64) []float32 {
	const atten, beta = 90, 0.1102 * (90 - 8.7)
	half := int(math.Ceil((atten - 7.95) / (14.36 * (stop - pass)) / 2))
	cut := (pass + stop) / 2
	taps := make([]float64, 2*half+1)
	sum := 0.0
	for i := range taps {
		t := float64(i - half)
		v := 2 * cut
		if t != 0 {
			v = math.Sin(2*math.Pi*cut*t) / (math.Pi * t)
		}
		r := t / float64(half+1)
		taps[i] = v * besselI0(beta*math.Sqrt(1-r*r))
		sum += taps[i]
	}
	out := make([]float32, len(taps))
	for i, v := range taps {
		out[i] = float32(v / sum)
	}
	return out
}

// besselI0 is the modified Bessel function of the first kind and order 0, by
// its power series.
func besselI0(x float64) float64 {
	sum, term := 1.0, 1.0
	for k := 1.0; term > 1e-17*sum; k++ {
		term *= x * x / (4 * k * k)
		sum += term
	}
	return sum
}

// powers adds up the bin powers of one spectrum into the bands of g; dst is
// indexed like layout.bands. p is scratch of size/2+1.
func (g *grid) powers(dst []float64, p, re, im []float32) {
	kernel.Powers(p, re[:len(p)], im[:len(p)])
	for i, b := range g.bands {
		w := g.weights[i]
		dst[b] = g.scale * float64(kernel.Dot(w, p[g.first[i]:g.first[i]+len(w)]))
	}
}
