package delay

import (
	"fmt"
	"math"
	"math/cmplx"
)

// Kernel makes filters that delay by fractions of a sample. Kernels do not
// change once made and may be shared between goroutines.
type Kernel interface {
	// Taps appends to dst[:0] the taps of the filter that delays by
	// delaySamples, of any sign, and returns them with the delay of the first
	// one, samples: y[i] = Σ_t taps[t]·x[i - start - t].
	Taps(dst []float64, delaySamples float64) (start int, taps []float64)
	// Len is the number of taps, the same for every delay.
	Len() int
}

// Response is the frequency response of the filter that k makes for a delay, at
// frequency f as a fraction of the rate: Σ_t taps[t]·e^{-j2πf(start+t)}.
func Response(k Kernel, delaySamples, f float64) complex128 {
	start, taps := k.Taps(nil, delaySamples)
	return response(start, taps, f)
}

func response(start int, taps []float64, f float64) complex128 {
	step := cmplx.Rect(1, -2*math.Pi*f)
	var sum complex128
	for t := len(taps) - 1; t >= 0; t-- {
		sum = sum*step + complex(taps[t], 0)
	}
	return sum * cmplx.Rect(1, -2*math.Pi*f*float64(start))
}

// WorstError is the largest |H(f) - e^{-j2πfD}| of a kernel as a factor, over
// 65 delays D from -0.5 to 0.5 sample and 513 frequencies from low to high,
// fractions of the rate.
func WorstError(k Kernel, low, high float64) float64 {
	worst := 0.0
	var taps []float64
	for j := range 65 {
		d := float64(j)/64 - 0.5
		var start int
		start, taps = k.Taps(taps, d)
		for i := range 513 {
			f := low + (high-low)*float64(i)/512
			worst = max(worst, cmplx.Abs(response(start, taps, f)-cmplx.Rect(1, -2*math.Pi*f*d)))
		}
	}
	return worst
}

// split returns the whole samples of a delay and the rest in [0, 1). A delay
// just below a whole number, whose rest rounds to 1, is that number.
func split(delaySamples float64) (whole int, frac float64) {
	w := math.Floor(delaySamples)
	if frac = delaySamples - w; frac == 1 {
		return int(w) + 1, 0
	}
	return int(w), frac
}

// grow returns dst[:0] with room for n numbers, as n zeros.
func grow(dst []float64, n int) []float64 {
	if cap(dst) < n {
		return make([]float64, n)
	}
	dst = dst[:n]
	clear(dst)
	return dst
}

// Limits of the number of taps of a kernel.
const (
	minTaps = 2
	maxTaps = 4096
)

func checkTaps(what string, taps int) error {
	if taps < minTaps || taps > maxTaps || taps%2 != 0 {
		return fmt.Errorf("delay: %s of %d taps: want an even number, %d to %d", what, taps, minTaps, maxTaps)
	}
	return nil
}
