package beam

import (
	"fmt"
	"math"
)

// Filters are the impulse responses that make a beam, one a microphone:
//
//	y[i] = Σ_m Σ_t H[m][t] · x_m[i - Start[m] - t]
//
// with x_m the (corrected) signal of microphone m and silence outside the
// take. Start may be negative: then the filter looks ahead. Output frame i is
// the sound at the reference point at frame i, so a filter holds no latency.
//
// The frequency response of filter m is G_m(f) = Σ_t H[m][t]·e^{-jω(Start[m]+t)},
// the conjugate of the weight w_m of y = wᴴx.
type Filters struct {
	Rate  int         // frames per second
	Start []int       // Start[m], frames; the delay of the first tap
	H     [][]float64 // H[m][t]
}

// Mics is the number of microphones.
func (f *Filters) Mics() int { return len(f.H) }

// Span returns the smallest delay of any tap and one more than the largest,
// frames: taps of all filters lie in from..to.
func (f *Filters) Span() (from, to int) {
	for m, h := range f.H {
		if m == 0 || f.Start[m] < from {
			from = f.Start[m]
		}
		if m == 0 || f.Start[m]+len(h) > to {
			to = f.Start[m] + len(h)
		}
	}
	return from, to
}

// Response appends to dst[:0] the frequency response G_m at frequency hz of
// every filter and returns it. dst may be nil.
func (f *Filters) Response(dst []complex128, hz float64) []complex128 {
	dst = dst[:0]
	omega := 2 * math.Pi * hz / float64(f.Rate)
	// Horner's rule in e^{-jω} from the last tap down, four filters side by side:
	// each step waits for the one before.
	s, c := math.Sincos(-omega)
	m := 0
	for ; m+4 <= len(f.H); m += 4 {
		dst = horner4(dst, (*[4][]float64)(f.H[m:]), c, s)
	}
	for ; m < len(f.H); m++ {
		dst = append(dst, horner(f.H[m], c, s))
	}
	for m, start := range f.Start {
		s, c := math.Sincos(-omega * float64(start))
		dst[m] *= complex(c, s)
	}
	return dst
}

// horner returns Σ_t h[t]·(c+js)^t.
func horner(h []float64, c, s float64) complex128 {
	var re, im float64
	for t := len(h) - 1; t >= 0; t-- {
		re, im = re*c-im*s+h[t], re*s+im*c
	}
	return complex(re, im)
}

// horner4 appends horner of four filters to dst.
func horner4(dst []complex128, h *[4][]float64, c, s float64) []complex128 {
	n := len(h[0])
	if len(h[1]) != n || len(h[2]) != n || len(h[3]) != n {
		return append(dst, horner(h[0], c, s), horner(h[1], c, s), horner(h[2], c, s), horner(h[3], c, s))
	}
	var r0, i0, r1, i1, r2, i2, r3, i3 float64
	h0, h1, h2, h3 := h[0], h[1][:n], h[2][:n], h[3][:n]
	for t := n - 1; t >= 0; t-- {
		r0, i0 = r0*c-i0*s+h0[t], r0*s+i0*c
		r1, i1 = r1*c-i1*s+h1[t], r1*s+i1*c
		r2, i2 = r2*c-i2*s+h2[t], r2*s+i2*c
		r3, i3 = r3*c-i3*s+h3[t], r3*s+i3*c
	}
	return append(dst, complex(r0, i0), complex(r1, i1), complex(r2, i2), complex(r3, i3))
}

// Validate reports filters that cannot be run: no microphones, no taps, or a
// tap that is not a finite number.
func (f *Filters) Validate() error {
	if len(f.H) == 0 || len(f.Start) != len(f.H) {
		return fmt.Errorf("beam: filters of %d microphones with %d starts", len(f.H), len(f.Start))
	}
	for m, h := range f.H {
		if len(h) == 0 {
			return fmt.Errorf("beam: filter of microphone %d has no taps", m+1)
		}
		for t, v := range h {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				return fmt.Errorf("beam: filter of microphone %d: tap %d is %g", m+1, t, v)
			}
		}
	}
	return nil
}
