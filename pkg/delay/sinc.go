package delay

import (
	"errors"
	"math"
)

// Sinc is the windowed ideal delay [Laakso et al. 1996, "windowing"]: with L
// taps (even) and D = L/2 - 1 + frac,
//
//	h[n] = w((n-D)/(L/2))·sin(π(n-D))/(π(n-D)),   n = 0..L-1
//
// where the window w is a continuous function that moves along with the delay.
// The taps are computed for the delay at hand, not looked up.
type Sinc struct {
	taps   int
	window func(u float64) float64
}

// NewSinc returns a windowed sinc with a Kaiser window fitted to the number of
// taps: up to 40 taps with the least error up to 0.4 of the rate, more with β = 13
// (-123 dB) and the wider a band. The package comment has the errors. Taps is
// even, 2 to 4096.
func NewSinc(taps int) (*Sinc, error) {
	if err := checkTaps("sinc", taps); err != nil {
		return nil, err
	}
	// The window's spectrum may reach from the band edge at 0.5 of the rate down
	// to 0.4: its first null lies at √(1+(β/π)²)/L. The 0.14 lets the foot of
	// the main lobe in as far as the side lobes are high.
	beta := 0.0
	if edge := 0.1*float64(taps) + 0.14; edge > 1 {
		beta = math.Pi * math.Sqrt(edge*edge-1)
	}
	beta = min(beta, 13)
	return NewSincWindow(taps, Kaiser(beta))
}

// NewSincWindow returns a windowed sinc with another window, a function of -1
// to 1 that is 1 at 0. Taps is even, 2 to 4096.
func NewSincWindow(taps int, window func(u float64) float64) (*Sinc, error) {
	if err := checkTaps("sinc", taps); err != nil {
		return nil, err
	}
	if window == nil {
		return nil, errors.New("delay: sinc without a window")
	}
	return &Sinc{taps: taps, window: window}, nil
}

// Len implements Kernel.
func (s *Sinc) Len() int { return s.taps }

// Taps implements Kernel.
func (s *Sinc) Taps(dst []float64, delaySamples float64) (start int, taps []float64) {
	whole, frac := split(delaySamples)
	half := s.taps / 2
	taps = grow(dst, s.taps)
	start = whole - half + 1
	if frac == 0 {
		taps[half-1] = s.window(0)
		return start, taps
	}
	// sin(π(n-D)) is ±sin(π·frac): one sine, and no loss near whole numbers.
	sine := math.Sin(math.Pi*min(frac, 1-frac)) / math.Pi
	for n := range taps {
		u := float64(n-half+1) - frac
		v := s.window(u/float64(half)) * sine / u
		if (n-half)%2 != 0 {
			v = -v
		}
		taps[n] = v
	}
	return start, taps
}

// Kaiser is the window I0(β·√(1-u²))/I0(β) [Kaiser 1974].
func Kaiser(beta float64) func(u float64) float64 {
	scale := 1 / besselI0(beta)
	return func(u float64) float64 { return besselI0(beta*math.Sqrt(max(0, 1-u*u))) * scale }
}

// besselI0 is Σ ((x/2)^k/k!)².
func besselI0(x float64) float64 {
	sum, term := 1.0, 1.0
	for k := 1.0; term > sum*1e-17; k++ {
		term *= x / (2 * k) * (x / (2 * k))
		sum += term
	}
	return sum
}
