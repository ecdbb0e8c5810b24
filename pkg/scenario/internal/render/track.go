package render

import (
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Track is where a source is over its own time.
type Track struct {
	Far    bool
	Polar  bool      // knots are azimuth, elevation, distance about Ref; else x, y, z
	Ref    rig.Point // the reference point
	Speed  float64   // of sound, m/s
	Times  []float64 // of the knots, ascending, seconds
	Knots  [][3]float64
	Origin float64 // distance at time 0, metres; sound given off then passes Ref at frame 0
}

// Moves reports whether the source is ever elsewhere.
func (tr *Track) Moves() bool {
	for _, k := range tr.Knots[1:] {
		if k != tr.Knots[0] {
			return true
		}
	}
	return false
}

// coordinates returns the knot values at time t of the source.
func (tr *Track) coordinates(t float64) [3]float64 {
	last := len(tr.Times) - 1
	if last == 0 || t <= tr.Times[0] {
		return tr.Knots[0]
	}
	if t >= tr.Times[last] {
		return tr.Knots[last]
	}
	low, high := 0, last
	for high-low > 1 {
		if mid := (low + high) / 2; t < tr.Times[mid] {
			high = mid
		} else {
			low = mid
		}
	}
	w := (t - tr.Times[low]) / (tr.Times[high] - tr.Times[low])
	a, b := tr.Knots[low], tr.Knots[high]
	for i := range a {
		a[i] += w * (b[i] - a[i])
	}
	return a
}

// Point returns where a source that is not far is at time t.
func (tr *Track) Point(t float64) rig.Point {
	k := tr.coordinates(t)
	if tr.Polar {
		return tr.Ref.Add(rig.Direction{Azimuth: k[0], Elevation: k[1]}.Unit().Scale(k[2]))
	}
	return rig.Point{X: k[0], Y: k[1], Z: k[2]}
}

// Wave returns the wavefront that the source gives off at time t.
func (tr *Track) Wave(t float64) acoustics.Wave {
	if tr.Far {
		k := tr.coordinates(t)
		return acoustics.Plane{From: rig.Direction{Azimuth: k[0], Elevation: k[1]}}
	}
	return acoustics.Spherical{At: tr.Point(t)}
}

// Reach returns how long sound given off at time t takes to p beyond what
// sound given off at time 0 takes to the reference point, seconds, and its
// amplitude against that at the reference point of sound given off at time 0.
func (tr *Track) Reach(t float64, p rig.Point) (delay, amplitude float64) {
	if tr.Far {
		k := tr.coordinates(t)
		u := rig.Direction{Azimuth: k[0], Elevation: k[1]}.Unit()
		return -p.Sub(tr.Ref).Dot(u) / tr.Speed, 1
	}
	r := tr.Point(t).Distance(p)
	return (r - tr.Origin) / tr.Speed, tr.Origin / r
}

// Emission returns when sound that passes p at time t was given off: the t0
// with t0 + reach(t0) = t. It starts from guess. The source moves far slower
// than sound, so the iteration contracts by at least a factor of 3 a step.
func (tr *Track) Emission(t, guess float64, p rig.Point) (t0, amplitude float64) {
	t0 = guess
	for range 60 {
		delay, a := tr.Reach(t0, p)
		next := t - delay
		if math.Abs(next-t0) < 1e-12 {
			return next, a
		}
		t0 = next
		amplitude = a
	}
	return t0, amplitude
}

// Fastest returns the largest speed of the source against the reference
// point, m/s: for a far source the speed of its wavefront's delay over the
// extent of the rig, metres.
func (tr *Track) Fastest(extent float64) float64 {
	var top float64
	for i := 1; i < len(tr.Times); i++ {
		dt := tr.Times[i] - tr.Times[i-1]
		a, b := tr.Knots[i-1], tr.Knots[i]
		length := math.Sqrt((a[0]-b[0])*(a[0]-b[0]) + (a[1]-b[1])*(a[1]-b[1]) + (a[2]-b[2])*(a[2]-b[2]))
		if tr.Polar {
			radius := math.Max(extent, math.Max(a[2], b[2]))
			length = radius*(math.Abs(a[0]-b[0])+math.Abs(a[1]-b[1])) + math.Abs(a[2]-b[2])
		}
		top = math.Max(top, length/dt)
	}
	return top
}
