package delay

import "fmt"

// Lagrange returns the taps h[0..order] of the interpolator that delays by a
// total of delaySamples, h[n] = Π_{k≠n} (D-k)/(n-k) [Laakso et al. 1996]. It is
// best where D is within half a sample of order/2. It panics if order is
// negative.
func Lagrange(order int, delaySamples float64) []float64 {
	if order < 0 {
		panic(fmt.Sprintf("delay: Lagrange interpolator of order %d", order))
	}
	h := make([]float64, order+1)
	for n := range h {
		h[n] = 1
		for k := range h {
			if k != n {
				h[n] *= (delaySamples - float64(k)) / float64(n-k)
			}
		}
	}
	return h
}

// Thiran returns the denominator a[0..order], a[0] = 1, of the all-pass that
// delays by a total of delaySamples with a maximally flat group delay at zero
// frequency [Thiran 1971]; its numerator is the denominator backwards:
//
//	a[k] = (-1)^k·C(N,k)·Π_{n=0}^{N} (D-N+n)/(D-N+k+n)
//
// It is stable for D > order-1. It returns an error otherwise, and for orders
// outside 1 to 64.
func Thiran(order int, delaySamples float64) ([]float64, error) {
	if order < 1 || order > 64 {
		return nil, fmt.Errorf("delay: all-pass of order %d: want 1 to 64", order)
	}
	if !(delaySamples > float64(order-1)) {
		return nil, fmt.Errorf("delay: all-pass of order %d for %g samples: stable only above %d", order, delaySamples, order-1)
	}
	a := make([]float64, order+1)
	binomial := 1.0
	for k := range a {
		v := binomial
		for n := 0; n <= order; n++ {
			x := delaySamples - float64(order) + float64(n)
			v *= x / (x + float64(k))
		}
		if k%2 == 1 {
			v = -v
		}
		a[k] = v
		binomial *= float64(order-k) / float64(k+1)
	}
	return a, nil
}
