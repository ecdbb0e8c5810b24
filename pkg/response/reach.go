package response

import (
	"math"

	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// Aperture is how large a rig is to sound.
type Aperture struct {
	// Extent is the largest distance between two microphones, metres.
	Extent float64
	// Effective is the length that the rig samples: N·d for a line of N
	// microphones with equal spacings d, one spacing more than Extent; else
	// Extent.
	Effective float64
	// LowerUsefulHz is the frequency at which Effective is one wavelength.
	// Below it the rig hears little direction; how little, the diffuse gain
	// says. 0 where there is no aperture.
	LowerUsefulHz float64
	// HalfWavelengthHz is c/(2d) for a line of equal spacings, up to which no
	// steering brings a grating lobe into the visible region; nil for other
	// rigs.
	HalfWavelengthHz *float64
}

// ApertureOf returns the aperture of the microphones for a speed of sound in
// m/s.
func ApertureOf(mics []rig.Point, speed float64) Aperture {
	a := Aperture{Extent: rig.Spread(mics).Extent}
	a.Effective = a.Extent
	if _, spacing, ok := beam.UniformLine(mics); ok {
		half := speed / (2 * spacing)
		a.Effective, a.HalfWavelengthHz = spacing*float64(len(mics)), &half
	}
	if a.Effective > 0 {
		a.LowerUsefulHz = speed / a.Effective
	}
	return a
}

// NearFieldReach returns the distance, metres, within which a source in
// direction toward has to be steered to as a point: 2L²/λ, with L the extent of
// the rig across that direction, at which the wavefront's curvature is π/8 of
// phase at the ends (the Fraunhofer distance; common practice).
func NearFieldReach(mics []rig.Point, toward rig.Direction, hz, speed float64) float64 {
	u := toward.Unit()
	across := 0.0
	for i, p := range mics {
		for _, q := range mics[:i] {
			d := p.Sub(q)
			across = math.Max(across, d.Sub(u.Scale(d.Dot(u))).Norm())
		}
	}
	return 2 * across * across * hz / speed
}
