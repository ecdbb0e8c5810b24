package spectral

import (
	"fmt"
	"math"
)

// Shape is a window as a function of the place u, -1 at its left end, 0 at its
// middle, 1 at its right end.
type Shape func(u float64) float64

// Periodic returns the n samples shape(2i/n - 1), i = 0..n-1: the window for
// averaging spectra. It panics if n is not positive.
func Periodic(n int, shape Shape) []float64 {
	if n < 1 {
		panic(fmt.Sprintf("spectral: window of %d samples", n))
	}
	w := make([]float64, n)
	for i := range w {
		w[i] = shape(float64(2*i-n) / float64(n))
	}
	return w
}

// Symmetric returns the n samples shape(2i/(n-1) - 1), i = 0..n-1: the window
// for designing filters. One sample is shape(0). It panics if n is not
// positive.
func Symmetric(n int, shape Shape) []float64 {
	if n < 1 {
		panic(fmt.Sprintf("spectral: window of %d samples", n))
	}
	if n == 1 {
		return []float64{shape(0)}
	}
	w := make([]float64, n)
	for i := range w {
		w[i] = shape(float64(2*i-n+1) / float64(n-1))
	}
	return w
}

// Rectangle is 1 everywhere.
func Rectangle(float64) float64 { return 1 }

// Hann is 0.5 + 0.5·cos(πu) [Harris 1978, eq. 27b].
func Hann(u float64) float64 { return 0.5 + 0.5*math.Cos(math.Pi*u) }

// SqrtHann is the root of Hann: used before a transform and after its inverse
// it adds up to one at a hop of half the size.
func SqrtHann(u float64) float64 { return math.Cos(math.Pi / 2 * u) }

// Hamming is 0.54 + 0.46·cos(πu) [Harris 1978, eq. 30b].
func Hamming(u float64) float64 { return 0.54 + 0.46*math.Cos(math.Pi*u) }

// Blackman is 0.42 + 0.5·cos(πu) + 0.08·cos(2πu) [Harris 1978, eq. 32].
func Blackman(u float64) float64 {
	return 0.42 + 0.5*math.Cos(math.Pi*u) + 0.08*math.Cos(2*math.Pi*u)
}

// BlackmanHarris is the four-term window with side lobes below -92 dB
// [Harris 1978, eq. 33 and table].
func BlackmanHarris(u float64) float64 {
	return 0.35875 + 0.48829*math.Cos(math.Pi*u) + 0.14128*math.Cos(2*math.Pi*u) + 0.01168*math.Cos(3*math.Pi*u)
}

// Kaiser is I0(β·√(1-u²))/I0(β) [Kaiser 1974]. β = 0 is the rectangle.
func Kaiser(beta float64) Shape {
	scale := 1 / BesselI0(beta)
	return func(u float64) float64 {
		return BesselI0(beta*math.Sqrt(max(0, 1-u*u))) * scale
	}
}

// BesselI0 is the modified Bessel function of the first kind and order zero,
// Σ ((x/2)^k/k!)², to 15 digits for |x| up to 700.
func BesselI0(x float64) float64 {
	sum, term := 1.0, 1.0
	square := x * x / 4
	for k := 1.0; term > sum*1e-17; k++ {
		term *= square / (k * k)
		sum += term
	}
	return sum
}
