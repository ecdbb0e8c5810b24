package delay

import (
	"fmt"
	"math"
)

// Farrow is a delay whose taps are polynomials of the fraction [Farrow 1988]:
// with L taps and t = 2·frac - 1 in [-1, 1),
//
//	h[n] = Σ_k c[k][n]·t^k,   delay L/2 - 1 + frac
//
// so that a delay that changes from sample to sample costs a polynomial each.
type Farrow struct {
	taps int
	c    [][]float64 // c[k][n]
}

// NewFarrow returns a Farrow delay of the given taps (even, 2 to 64) and order
// (1 to 12) that is designed for 0 to 0.4 of the rate: the delay e^{-jωt/2} is
// expanded in Chebyshev polynomials of t, whose factors are Bessel functions,
//
//	e^{-jωt/2} = J0(ω/2) + 2·Σ_k (-j)^k·Jk(ω/2)·Tk(t),
//
// and each factor is a symmetric or antisymmetric filter fitted to the band with
// the least largest error (least squares, reweighted after [Lawson 1961]). With
// 32 taps and order 6 the error is below -85 dB; the package comment has the
// figure.
func NewFarrow(taps, order int) (*Farrow, error) {
	if err := checkTaps("polynomial delay", taps); err != nil {
		return nil, err
	}
	if taps > 64 || order < 1 || order > 12 {
		return nil, fmt.Errorf("delay: polynomial delay of %d taps and order %d: want up to 64 taps and order 1 to 12", taps, order)
	}
	// Fits to the Chebyshev terms, then powers of t by Tk = 2t·Tk-1 - Tk-2.
	f := &Farrow{taps: taps, c: make([][]float64, order+1)}
	for k := range f.c {
		f.c[k] = make([]float64, taps)
	}
	before, poly := []float64{}, []float64{1}
	for k := 0; k <= order; k++ {
		branch := fitBranch(taps, k)
		for power, a := range poly {
			for n, b := range branch {
				f.c[power][n] += a * b
			}
		}
		next := make([]float64, len(poly)+1)
		factor := 2.0
		if k == 0 {
			factor = 1
		}
		for i, a := range poly {
			next[i+1] += factor * a
		}
		for i, a := range before {
			next[i] -= a
		}
		before, poly = poly, next
	}
	return f, nil
}

// NewLagrange returns the Lagrange interpolator of odd order 1 to 31, the delay
// that is maximally flat at zero frequency [Laakso et al. 1996], as a Farrow
// delay of order+1 taps.
func NewLagrange(order int) (*Farrow, error) {
	if order < 1 || order > 31 || order%2 == 0 {
		return nil, fmt.Errorf("delay: Lagrange interpolator of order %d: want an odd order, 1 to 31", order)
	}
	taps := order + 1
	f := &Farrow{taps: taps, c: make([][]float64, taps)}
	for k := range f.c {
		f.c[k] = make([]float64, taps)
	}
	// h[n] = Π_{k≠n} (D-k)/(n-k), with D = (order-1)/2 + (t+1)/2 = (t + order)/2.
	for n := range taps {
		poly := []float64{1}
		for k := range taps {
			if k == n {
				continue
			}
			scale := 1 / float64(n-k)
			next := make([]float64, len(poly)+1)
			for i, a := range poly {
				next[i] += a * (float64(order)/2 - float64(k)) * scale
				next[i+1] += a / 2 * scale
			}
			poly = next
		}
		for k, a := range poly {
			f.c[k][n] = a
		}
	}
	return f, nil
}

// Len implements Kernel.
func (f *Farrow) Len() int { return f.taps }

// Order is the order of the polynomials.
func (f *Farrow) Order() int { return len(f.c) - 1 }

// Branches returns the filters c[k][n] that are multiplied with t^k, shared and
// not to be changed.
func (f *Farrow) Branches() [][]float64 { return f.c }

// Matrix returns the coefficients of frac^k in [0, 1) instead of those of t^k:
// h[n] = Σ_k m[n][k]·frac^k.
func (f *Farrow) Matrix() [][]float64 {
	m := make([][]float64, f.taps)
	for n := range m {
		// Horner's rule in (2·frac - 1).
		poly := make([]float64, len(f.c))
		for k := len(f.c) - 1; k >= 0; k-- {
			for i := len(poly) - 1; i >= 0; i-- {
				v := -poly[i]
				if i > 0 {
					v += 2 * poly[i-1]
				}
				poly[i] = v
			}
			poly[0] += f.c[k][n]
		}
		m[n] = poly
	}
	return m
}

// Place returns where the filter for a delay starts and its t, see Farrow.
func (f *Farrow) Place(delaySamples float64) (start int, t float64) {
	whole, frac := split(delaySamples)
	return whole - f.taps/2 + 1, 2*frac - 1
}

// Taps implements Kernel.
func (f *Farrow) Taps(dst []float64, delaySamples float64) (start int, taps []float64) {
	start, t := f.Place(delaySamples)
	taps = grow(dst, f.taps)
	for k := len(f.c) - 1; k >= 0; k-- {
		for n, c := range f.c[k] {
			taps[n] = taps[n]*t + c
		}
	}
	return start, taps
}

// bandEdge is the edge of the band that NewFarrow designs for, rad/sample.
const bandEdge = 2 * math.Pi * 0.4

// fitBranch returns the filter that stands for the factor of Tk: with x the
// distance from the middle in samples, its response is Σ_n b[n]·cos(ωx) for
// even k, and -j times Σ_n b[n]·sin(ωx) for odd ones.
func fitBranch(taps, k int) []float64 {
	half := taps / 2
	points := 16 * half
	// Chebyshev points, denser towards the band edge, where the error peaks.
	rows := make([][]float64, points)
	want := make([]float64, points)
	weight := make([]float64, points)
	for i := range rows {
		omega := bandEdge * math.Sin(math.Pi/2*(float64(i)+0.5)/float64(points))
		rows[i] = make([]float64, half)
		for n := range half {
			x := float64(n) + 0.5
			if k%2 == 0 {
				rows[i][n] = 2 * math.Cos(omega*x)
			} else {
				rows[i][n] = 2 * math.Sin(omega*x)
			}
		}
		want[i] = math.Jn(k, omega/2)
		if k > 0 {
			want[i] *= 2
		}
		// (-j)^k is 1, -j, -1, j: the filter's own factor is 1 or -j.
		if k%4 >= 2 {
			want[i] = -want[i]
		}
		weight[i] = 1
	}
	a := leastMaximum(rows, want, weight, 60)
	b := make([]float64, taps)
	for n, v := range a {
		b[half+n] = v
		b[half-1-n] = v
		if k%2 == 1 {
			b[half-1-n] = -v
		}
	}
	return b
}
