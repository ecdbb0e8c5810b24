package response

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Transfer is what stands between the microphones and the output: *beam.Filters
// as they were built.
type Transfer interface {
	// Mics is the number of microphones.
	Mics() int
	// Response appends to dst[:0] the frequency response of every microphone's
	// path at hz and returns it.
	Response(dst []complex128, hz float64) []complex128
}

// Beam is a transfer on the microphones of a rig, pointed somewhere.
type Beam struct {
	Transfer  Transfer
	Mics      []rig.Point
	Reference rig.Point
	Look      acoustics.Wave // where it points
	Speed     float64        // of sound, m/s
}

// Validate reports everything that keeps the beam from being predicted.
func (b Beam) Validate() error {
	var faults []error
	switch {
	case b.Transfer == nil:
		faults = append(faults, errors.New("response: no filters"))
	case b.Transfer.Mics() != len(b.Mics):
		faults = append(faults, fmt.Errorf("response: %d filters for %d microphones", b.Transfer.Mics(), len(b.Mics)))
	}
	if len(b.Mics) == 0 {
		faults = append(faults, errors.New("response: no microphones"))
	}
	if b.Look == nil {
		faults = append(faults, errors.New("response: no direction or point that the beam is steered to"))
	}
	if !(b.Speed > 0) || math.IsInf(b.Speed, 0) {
		faults = append(faults, fmt.Errorf("response: speed of sound %g m/s", b.Speed))
	}
	return errors.Join(faults...)
}

// To returns the response of the beam to a wave at frequency hz, relative to
// that wave at the reference point: complex, 1 is distortionless.
func (b Beam) To(w acoustics.Wave, hz float64) complex128 {
	return b.to(b.Transfer.Response(nil, hz), w, hz)
}

// to is To for the path responses g at hz.
func (b Beam) to(g []complex128, w acoustics.Wave, hz float64) complex128 {
	var y complex128
	if far, ok := w.(acoustics.Plane); ok { // the direction's vector once, not once a microphone
		k := far.From.Unit().Scale(2 * math.Pi * hz / b.Speed)
		for m, p := range b.Mics {
			s, c := math.Sincos(p.Sub(b.Reference).Dot(k))
			y += g[m] * complex(c, s)
		}
		return y
	}
	for m, p := range b.Mics {
		s, c := math.Sincos(-2 * math.Pi * hz * w.Delay(p, b.Reference, b.Speed))
		a := w.Spreading(p, b.Reference)
		y += g[m] * complex(a*c, a*s)
	}
	return y
}

// WhiteNoiseGain returns |wᴴd|²/(wᴴw) at hz as a power ratio [Van Trees 2002,
// section 2.6].
func (b Beam) WhiteNoiseGain(hz float64) float64 {
	g := b.Transfer.Response(nil, hz)
	return power(b.to(g, b.Look, hz)) / sumSquares(g)
}

// Directivity returns the directivity factor |wᴴd|²/(wᴴΓw) at hz as a power
// ratio, Γ = sin(kd)/(kd): the mean over the sphere in closed form [Van Trees
// 2002, section 2.6]. 10·log10 of it is the directivity index.
func (b Beam) Directivity(hz float64) float64 {
	g := b.Transfer.Response(nil, hz)
	return power(b.to(g, b.Look, hz)) / diffusePower(g, distances(b.Mics), hz, b.Speed)
}

// CylindricalGain returns the gain in noise that arrives evenly from all
// azimuths in the horizontal plane, as a power ratio; its coherence is J0(kd)
// with d the horizontal distance [Cron & Sherman 1962].
func (b Beam) CylindricalGain(hz float64) float64 {
	g := b.Transfer.Response(nil, hz)
	k := 2 * math.Pi * hz / b.Speed
	noise := 0.0
	for m, p := range b.Mics {
		for n, q := range b.Mics {
			d := p.Sub(q)
			noise += (real(g[m])*real(g[n]) + imag(g[m])*imag(g[n])) * math.J0(k*math.Hypot(d.X, d.Y))
		}
	}
	return power(b.to(g, b.Look, hz)) / noise
}

func power(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }

// decibels returns 10·log10 of a power ratio.
func decibels(ratio float64) float64 { return 10 * math.Log10(ratio) }

// Pattern is the response over directions or points, and frequency.
type Pattern struct {
	Hz       []float64
	Response [][]complex128 // Response[f][d] to wave d, re the response to the steered wave
}

// Pattern returns the responses to waves at frequencies hz, each relative to
// the response to the steered wave at that frequency. Where that is zero the
// responses are NaN.
func (b Beam) Pattern(waves []acoustics.Wave, hz []float64) *Pattern {
	p := &Pattern{Hz: append([]float64(nil), hz...)}
	var g []complex128
	for _, f := range hz {
		g = b.Transfer.Response(g, f)
		look := b.to(g, b.Look, f)
		row := make([]complex128, len(waves))
		for d, w := range waves {
			row[d] = b.to(g, w, f) / look
		}
		p.Response = append(p.Response, row)
	}
	return p
}

// LevelDB returns 20·log10 of the response to wave d at frequency f of the
// pattern.
func (p *Pattern) LevelDB(f, d int) float64 { return decibels(power(p.Response[f][d])) }
