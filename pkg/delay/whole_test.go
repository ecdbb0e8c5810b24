package delay

import (
	"math"
	"testing"
)

// A delay a rounding error away from a whole number is that whole number: as
// the steering delays of a line steered to its side come out.
func TestDelayNextToAWholeNumber(t *testing.T) {
	for _, taps := range []int{16, 64, 128} {
		s, err := NewSinc(taps)
		if err != nil {
			t.Fatal(err)
		}
		for _, d := range []float64{0, 1e-17, -1e-17, 1e-15, -1e-15, -1e-12, 3 - 4e-16, 3 + 4e-16, -2 - 4e-16} {
			whole := math.Round(d)
			start, h := s.Taps(nil, d)
			for n, v := range h {
				want := 0.0
				if start+n == int(whole) {
					want = 1
				}
				if !(math.Abs(v-want) < 1e-11) {
					t.Errorf("%d taps, delay %g: tap of delay %d is %g, want %g", taps, d, start+n, v, want)
				}
			}
		}
	}
}
