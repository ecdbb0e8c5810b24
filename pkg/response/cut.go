package response

import (
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// Cut is a way through the directions, along which beamwidth and lobes are
// taken: an angle and the direction that belongs to it.
type Cut struct {
	Name   string  // what the angle is, in words
	Low    float64 // smallest angle, radians
	High   float64 // largest angle
	Closed bool    // a full circle: High is Low again
	At     float64 // angle of the steered direction
	Toward func(angle float64) rig.Direction

	uniform float64 // spacing of a uniform line along whose axis the cut is taken, else 0
}

// NewCut returns the cut that suits the shape of a rig steered to look: for a
// line the angle from its axis (0 to π; for a line along x and level, that is
// the azimuth); for other rigs the azimuth at the elevation of look, or the
// elevation through the zenith at the azimuth of look where look is steeper
// than 60°; for a level flat rig, which cannot tell above from below, on look's
// side of the rig only, 0 to π or -π to 0.
func NewCut(mics []rig.Point, look rig.Direction) Cut {
	g := rig.Spread(mics)
	switch {
	case g.Shape == rig.ShapeLine:
		return axisCut(g.Axis, look, mics)
	case math.Abs(look.Elevation) > math.Pi/3:
		c := ElevationCut(look)
		if g.Shape == rig.ShapeFlat && math.Abs(g.Normal.Z) > 0.999 {
			// The other side of a level rig is the image of this one.
			c.Closed, c.Low, c.High = false, 0, math.Pi
			if look.Elevation < 0 {
				c.Low, c.High = -math.Pi, 0
			}
		}
		return c
	}
	return AzimuthCut(look)
}

// AzimuthCut is the full circle of azimuths at the elevation of look, from -π
// to π about look's azimuth.
func AzimuthCut(look rig.Direction) Cut {
	return Cut{Name: "azimuth", Low: look.Azimuth - math.Pi, High: look.Azimuth + math.Pi, Closed: true, At: look.Azimuth,
		Toward: func(a float64) rig.Direction { return rig.Direction{Azimuth: a, Elevation: look.Elevation} }}
}

// ElevationCut is the full vertical circle through look. The angle is the
// elevation on look's side; beyond π/2 it is over the zenith on the other side.
func ElevationCut(look rig.Direction) Cut {
	forward := rig.Direction{Azimuth: look.Azimuth}.Unit()
	return Cut{Name: "elevation", Low: look.Elevation - math.Pi, High: look.Elevation + math.Pi, Closed: true, At: look.Elevation,
		Toward: func(a float64) rig.Direction {
			s, c := math.Sincos(a)
			return rig.Toward(forward.Scale(c).Add(rig.Point{Z: s}))
		}}
}

// axisCut is the half circle from one end of the axis to the other on look's
// side.
func axisCut(axis rig.Point, look rig.Direction, mics []rig.Point) Cut {
	u := look.Unit()
	along := math.Max(-1, math.Min(1, u.Dot(axis)))
	side := u.Sub(axis.Scale(along))
	if side.Norm() < 1e-9 {
		// Steered along the axis: any side will do, the front first.
		for _, p := range []rig.Point{{Y: 1}, {Z: 1}, {X: 1}} {
			if side = p.Sub(axis.Scale(p.Dot(axis))); side.Norm() > 0.1 {
				break
			}
		}
	}
	side = side.Scale(1 / side.Norm())
	c := Cut{Name: "angle from the axis of the line", Low: 0, High: math.Pi, At: math.Acos(along),
		Toward: func(a float64) rig.Direction {
			s, c := math.Sincos(a)
			return rig.Toward(axis.Scale(c).Add(side.Scale(s)))
		}}
	if _, spacing, ok := beam.UniformLine(mics); ok {
		c.uniform = spacing
	}
	return c
}

// CutDistance returns the distance from the reference point, metres, of the
// sources that the figures of b along a cut are for: that of the point it is
// steered to. ok is false for far sources: for a beam steered to a direction,
// and for one steered to a point among its microphones, where a circle through
// it would touch some.
func (b Beam) CutDistance() (metres float64, ok bool) {
	near, ok := b.Look.(acoustics.Spherical)
	if !ok {
		return 0, false
	}
	metres = near.At.Distance(b.Reference)
	for _, p := range b.Mics {
		if p.Distance(b.Reference) > 0.95*metres {
			return 0, false
		}
	}
	return metres, true
}

// CutWave returns the wave of a source at an angle of a cut: at CutDistance, or
// far away.
func (b Beam) CutWave(cut Cut, angle float64) acoustics.Wave {
	return b.cutWaves(cut)(angle)
}

// cutWaves returns CutWave for many angles of a cut.
func (b Beam) cutWaves(cut Cut) func(angle float64) acoustics.Wave {
	metres, near := b.CutDistance()
	return func(angle float64) acoustics.Wave {
		from := cut.Toward(angle)
		if near {
			return acoustics.Spherical{At: b.Reference.Add(from.Unit().Scale(metres))}
		}
		return acoustics.Plane{From: from}
	}
}
