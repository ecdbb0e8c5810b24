package response

import (
	"fmt"
	"math"
	"math/rand/v2"
	"sort"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Errors are standard deviations of what a rig differs from its file by,
// independent from microphone to microphone but for the air.
type Errors struct {
	Gain         float64 // relative amplitude; 1 dB is 0.115
	PhaseRad     float64
	PlacementM   float64 // along each axis
	TemperatureC float64 // of the air, the same for all microphones
}

// phase returns the variance of the phase errors at hz, rad²: placement moves
// the phase by k times its part along the wave.
func (e Errors) phase(hz, speed float64) float64 {
	k := 2 * math.Pi * hz / speed * e.PlacementM
	return e.PhaseRad*e.PhaseRad + k*k
}

// Expected returns the mean power of the response to a wave at hz over all
// rigs with such errors, in closed form [Gilbert & Morgan 1955]:
//
//	E|B|² = e^{-σφ²}|B0|² + (1 + σg² - e^{-σφ²}) Σ|w_m a_m|²
//
// with a_m the level of the wave at the microphones. Temperature, which moves
// all microphones together, is not part of it: see Trials.
func (b Beam) Expected(e Errors, w acoustics.Wave, hz float64) float64 {
	g := b.Transfer.Response(nil, hz)
	keep := math.Exp(-e.phase(hz, b.Speed))
	sum := 0.0
	for m, p := range b.Mics {
		a := w.Spreading(p, b.Reference)
		sum += power(g[m]) * a * a
	}
	return keep*power(b.to(g, w, hz)) + (1+e.Gain*e.Gain-keep)*sum
}

// ErrorFloor returns the mean power that such errors alone leave in every
// direction at hz, re the mean power in the steered direction, without the error
// of the temperature:
//
//	(1 + σg² - e^{-σφ²}) Σ|w_m|² / (e^{-σφ²}|B0|²)
//
// with B0 the response to the steered wave [Gilbert & Morgan 1955].
func (b Beam) ErrorFloor(e Errors, hz float64) float64 {
	g := b.Transfer.Response(nil, hz)
	keep := math.Exp(-e.phase(hz, b.Speed))
	return (1 + e.Gain*e.Gain - keep) * sumSquares(g) / (keep * power(b.to(g, b.Look, hz)))
}

// maxTrials bounds the trials of one call.
const maxTrials = 100000

// Trials draws n rigs with such errors, normally distributed and from the seed,
// and returns for each wave the levels of its response at hz, dB re the
// response to the steered wave without errors, ascending. It returns an error
// for n outside of 1 to 100,000 and for negative or undefined errors.
func (b Beam) Trials(e Errors, waves []acoustics.Wave, hz float64, n int, seed uint64) ([][]float64, error) {
	if n < 1 || n > maxTrials {
		return nil, fmt.Errorf("response: %d trials: want 1 to %d", n, maxTrials)
	}
	for _, v := range []float64{e.Gain, e.PhaseRad, e.PlacementM, e.TemperatureC} {
		if !(v >= 0) || math.IsInf(v, 0) {
			return nil, fmt.Errorf("response: standard deviation of %g", v)
		}
	}
	r := rand.New(rand.NewPCG(seed, 0x616c6964616465)) // a stream of its own for each seed
	g := b.Transfer.Response(nil, hz)
	reference := power(b.to(g, b.Look, hz))
	out := make([][]float64, len(waves))
	for d := range out {
		out[d] = make([]float64, n)
	}
	moved := b
	moved.Mics = make([]rig.Point, len(b.Mics))
	faulty := make([]complex128, len(g))
	for t := range n {
		// The square root law of the speed of sound about 20 °C.
		moved.Speed = b.Speed * math.Sqrt(math.Max(0.5, 1+e.TemperatureC*r.NormFloat64()/293.15))
		for m, p := range b.Mics {
			moved.Mics[m] = p.Add(rig.Point{X: r.NormFloat64(), Y: r.NormFloat64(), Z: r.NormFloat64()}.Scale(e.PlacementM))
			s, c := math.Sincos(e.PhaseRad * r.NormFloat64())
			a := 1 + e.Gain*r.NormFloat64()
			faulty[m] = g[m] * complex(a*c, a*s)
		}
		for d, w := range waves {
			out[d][t] = decibels(power(moved.to(faulty, w, hz)) / reference)
		}
	}
	for d := range out {
		sort.Float64s(out[d])
	}
	return out, nil
}

// Percentile returns the p-th percentile, 0 to 100, of ascending values, linear
// between neighbours; NaN for no values.
func Percentile(ascending []float64, p float64) float64 {
	if len(ascending) == 0 {
		return math.NaN()
	}
	x := math.Max(0, math.Min(1, p/100)) * float64(len(ascending)-1)
	i := int(x)
	if i+1 == len(ascending) {
		return ascending[i]
	}
	return ascending[i] + (x-float64(i))*(ascending[i+1]-ascending[i])
}
