package bearing

import (
	"math"

	"alidade/pkg/rig"
)

// maxDims is the largest number of unknowns of one source: three direction
// cosines and the curvature.
const maxDims = 4

// place is a direction with the curvature of its wavefront, in the
// coordinates the rig can measure: y[0] is the cosine to the axis for a line,
// y[0..1] the cosines in the plane for a flat rig, y[0..2] the unit vector for
// a solid one; kappa is 1/distance from the centre, 1/m, 0 for a plane wave.
type place struct {
	y     [3]float64
	kappa float64
}

// space maps places to directions and delays. The centre is the mean of the
// microphones, whatever the reference point is.
type space struct {
	geo   rig.Geometry
	dim   int          // 1, 2 or 3 direction cosines
	basis [3]rig.Point // unit vectors the cosines refer to
	side  rig.Point    // where a line points its front, or a flat rig its seen side
	at    []rig.Point  // microphones re the centre
	proj  [][3]float64 // at in the basis
	r2    []float64    // |at|²
	corr  []float64    // time corrections, seconds
	speed float64
	ref   rig.Point // reference point re the centre
}

func newSpace(mics []rig.Point, ref rig.Point, speed float64, corrections []float64) *space {
	s := &space{geo: rig.Spread(mics), speed: speed, corr: make([]float64, len(mics))}
	copy(s.corr, corrections)
	s.ref = ref.Sub(s.geo.Centre)
	for _, p := range mics {
		q := p.Sub(s.geo.Centre)
		s.at = append(s.at, q)
		s.r2 = append(s.r2, q.Dot(q))
	}
	switch s.geo.Shape {
	case rig.ShapeLine:
		s.dim = 1
		s.basis[0] = s.geo.Axis
		s.side = rig.Point{Z: 1}.Cross(s.geo.Axis)
		if n := s.side.Norm(); n > 1e-6 {
			s.side = s.side.Scale(1 / n)
		} else {
			s.side = rig.Point{Y: 1}
		}
	case rig.ShapeFlat:
		s.dim = 2
		s.side = s.geo.Normal
		s.basis[0] = s.geo.Axis
		s.basis[1] = s.side.Cross(s.geo.Axis)
	default:
		s.dim = 3
		s.basis = [3]rig.Point{{X: 1}, {Y: 1}, {Z: 1}}
	}
	for _, p := range s.at {
		var c [3]float64
		for a := range s.dim {
			c[a] = p.Dot(s.basis[a])
		}
		s.proj = append(s.proj, c)
	}
	return s
}

// unit returns the unit vector of direction cosines y. Cosines beyond the
// possible are brought back to the rim.
func (s *space) unit(y [3]float64) rig.Point {
	var u rig.Point
	sum := 0.0
	for a := range s.dim {
		u = u.Add(s.basis[a].Scale(y[a]))
		sum += y[a] * y[a]
	}
	if s.dim == 3 || sum >= 1 {
		if sum == 0 {
			return s.basis[0]
		}
		return u.Scale(1 / math.Sqrt(sum))
	}
	return u.Add(s.side.Scale(math.Sqrt(1 - sum)))
}

// clamp brings p back to possible cosines and curvatures.
func (s *space) clamp(p place, maxKappa float64) place {
	sum := 0.0
	for a := range s.dim {
		sum += p.y[a] * p.y[a]
	}
	if sum > 1 || (s.dim == 3 && sum > 0) {
		f := 1 / math.Sqrt(sum)
		for a := range s.dim {
			p.y[a] *= f
		}
	}
	p.kappa = math.Min(math.Max(p.kappa, 0), maxKappa)
	return p
}

// apart returns the distance between two sets of cosines.
func (s *space) apart(a, b [3]float64) float64 {
	sum := 0.0
	for i := range s.dim {
		sum += (a[i] - b[i]) * (a[i] - b[i])
	}
	return math.Sqrt(sum)
}

// delays puts the measured arrival time of p at each microphone against the
// centre, seconds, corrections included, into tau:
//
//	tau_m = (|s - p_m| - |s|)/c = (kappa·|p_m|² - 2 p_m·u) / ((1 + d) c)
//	d     = sqrt(1 - 2 kappa p_m·u + kappa² |p_m|²),  s = u/kappa
//
// which needs no special case at kappa = 0 (a plane wave).
func (s *space) delays(tau []float64, p place) {
	u := s.unit(p.y)
	k := p.kappa
	for m, q := range s.at {
		pu := q.Dot(u)
		d := math.Sqrt(math.Max(0, 1-2*k*pu+k*k*s.r2[m]))
		tau[m] = (k*s.r2[m]-2*pu)/((1+d)*s.speed) - s.corr[m]
	}
}

// slopes puts the derivatives of the delays with respect to the cosines and,
// in entry dim, to the curvature into jac[m]. For a solid rig the part along
// the direction itself, which no delay depends on, is taken out.
func (s *space) slopes(jac [][maxDims]float64, p place) {
	u := s.unit(p.y)
	k := p.kappa
	const h = 1e-4
	for m, q := range s.at {
		pu := q.Dot(u)
		r2 := s.r2[m]
		d := math.Sqrt(math.Max(1e-12, 1-2*k*pu+k*k*r2))
		var j [maxDims]float64
		for a := range s.dim {
			j[a] = -s.proj[m][a] / (d * s.speed)
		}
		if s.dim == 3 {
			along := j[0]*u.X + j[1]*u.Y + j[2]*u.Z
			j[0] -= along * u.X
			j[1] -= along * u.Y
			j[2] -= along * u.Z
		}
		at := func(k float64) float64 {
			d := math.Sqrt(math.Max(0, 1-2*k*pu+k*k*r2))
			return (k*r2 - 2*pu) / ((1 + d) * s.speed)
		}
		j[s.dim] = (at(k+h) - at(k-h)) / (2 * h)
		jac[m] = j
	}
}

// fix turns a place and the covariance of its coordinates into angles, seen
// from the reference point.
func (s *space) fix(p place, cov mat4, freedom float64) Fix {
	u := s.unit(p.y)
	f := Fix{Direction: rig.Toward(u), Freedom: freedom}
	if p.kappa > 0 {
		point := u.Scale(1 / p.kappa)
		seen := point.Sub(s.ref)
		r := seen.Norm()
		f.Direction = rig.Toward(seen)
		at := point.Add(s.geo.Centre)
		f.Point = &at
		f.Distance = &r
		se := math.Sqrt(math.Max(0, cov[s.dim][s.dim])) / (p.kappa * p.kappa)
		f.DistanceError = &se
	}
	if s.dim == 1 {
		// The spread of the angle itself, wide enough at the ends of the line,
		// where the cosine hardly moves.
		sd := math.Sqrt(math.Max(0, cov[0][0]))
		c := math.Min(1, math.Max(-1, p.y[0]))
		theta := math.Acos(c)
		low, high := math.Acos(math.Min(1, c+sd)), math.Acos(math.Max(-1, c-sd))
		switch {
		case c+sd > 1:
			f.StandardError = high - theta
		case c-sd < -1:
			f.StandardError = theta - low
		default:
			f.StandardError = (high - low) / 2
		}
		return f
	}
	// Spread over the principal axes of the direction part of cov: the change
	// of azimuth and elevation for one standard deviation each way.
	var azimuth, elevation float64
	values, vectors := eigen3(cov, s.dim)
	home := rig.Toward(u)
	for a := range s.dim {
		sd := math.Sqrt(math.Max(0, values[a]))
		var azA, elA float64
		for _, sign := range []float64{1, -1} {
			q := p
			for b := range s.dim {
				q.y[b] += sign * sd * vectors[a][b]
			}
			d := rig.Toward(s.unit(q.y))
			az := math.Abs(math.Remainder(d.Azimuth-home.Azimuth, 2*math.Pi))
			azA = math.Max(azA, az)
			elA = math.Max(elA, math.Abs(d.Elevation-home.Elevation))
		}
		azimuth += azA * azA
		elevation += elA * elA
	}
	// No angle is less certain than one drawn from the whole circle.
	f.StandardError = math.Min(math.Sqrt(azimuth), math.Pi/math.Sqrt(3))
	f.ElevationError = math.Min(math.Sqrt(elevation), math.Pi/math.Sqrt(12))
	return f
}
