package scenario

import (
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// track is where a source is over its own time.
type track struct {
	far    bool
	polar  bool // knots are azimuth, elevation, distance about ref; else x, y, z
	ref    rig.Point
	speed  float64
	times  []float64
	knots  [][3]float64
	origin float64 // distance at time 0, metres; sound given off then passes ref at frame 0
}

// newTrack returns the track of a valid source.
func newTrack(s *Source, ref rig.Point, speed float64) *track {
	tr := &track{ref: ref, speed: speed}
	stops := s.Path
	if s.At != nil {
		stops = []Waypoint{{Place: *s.At}}
	}
	for i, w := range stops {
		tr.times = append(tr.times, w.AtS)
		if w.PointM != nil {
			tr.knots = append(tr.knots, [3]float64{w.PointM[0], w.PointM[1], w.PointM[2]})
			continue
		}
		tr.polar = true
		tr.far = w.DistanceM == 0
		azimuth := *w.AzimuthDeg
		if i > 0 {
			last := tr.knots[i-1][0] * 180 / math.Pi
			azimuth = last + rig.WrapDeg(azimuth-last)
		}
		tr.knots = append(tr.knots, [3]float64{azimuth * math.Pi / 180, w.ElevationDeg * math.Pi / 180, w.DistanceM})
	}
	if !tr.far {
		tr.origin = tr.point(0).Distance(ref)
	}
	return tr
}

// moves reports whether the source is ever elsewhere.
func (tr *track) moves() bool {
	for _, k := range tr.knots[1:] {
		if k != tr.knots[0] {
			return true
		}
	}
	return false
}

// coordinates returns the knot values at time t of the source.
func (tr *track) coordinates(t float64) [3]float64 {
	last := len(tr.times) - 1
	if last == 0 || t <= tr.times[0] {
		return tr.knots[0]
	}
	if t >= tr.times[last] {
		return tr.knots[last]
	}
	low, high := 0, last
	for high-low > 1 {
		if mid := (low + high) / 2; t < tr.times[mid] {
			high = mid
		} else {
			low = mid
		}
	}
	w := (t - tr.times[low]) / (tr.times[high] - tr.times[low])
	a, b := tr.knots[low], tr.knots[high]
	for i := range a {
		a[i] += w * (b[i] - a[i])
	}
	return a
}

// point returns where a source that is not far is at time t.
func (tr *track) point(t float64) rig.Point {
	k := tr.coordinates(t)
	if tr.polar {
		return tr.ref.Add(rig.Direction{Azimuth: k[0], Elevation: k[1]}.Unit().Scale(k[2]))
	}
	return rig.Point{X: k[0], Y: k[1], Z: k[2]}
}

// wave returns the wavefront that the source gives off at time t.
func (tr *track) wave(t float64) acoustics.Wave {
	if tr.far {
		k := tr.coordinates(t)
		return acoustics.Plane{From: rig.Direction{Azimuth: k[0], Elevation: k[1]}}
	}
	return acoustics.Spherical{At: tr.point(t)}
}

// reach returns how long sound given off at time t takes to p beyond what
// sound given off at time 0 takes to the reference point, seconds, and its
// amplitude against that at the reference point of sound given off at time 0.
func (tr *track) reach(t float64, p rig.Point) (delay, amplitude float64) {
	if tr.far {
		k := tr.coordinates(t)
		u := rig.Direction{Azimuth: k[0], Elevation: k[1]}.Unit()
		return -p.Sub(tr.ref).Dot(u) / tr.speed, 1
	}
	r := tr.point(t).Distance(p)
	return (r - tr.origin) / tr.speed, tr.origin / r
}

// emission returns when sound that passes p at time t was given off: the t0
// with t0 + reach(t0) = t. It starts from guess. The source moves far slower
// than sound, so the iteration contracts by at least a factor of 3 a step.
func (tr *track) emission(t, guess float64, p rig.Point) (t0, amplitude float64) {
	t0 = guess
	for range 60 {
		delay, a := tr.reach(t0, p)
		next := t - delay
		if math.Abs(next-t0) < 1e-12 {
			return next, a
		}
		t0 = next
		amplitude = a
	}
	return t0, amplitude
}

// fastest returns the largest speed of the source against the reference
// point, m/s: for a far source the speed of its wavefront's delay over the
// extent of the rig, metres.
func (tr *track) fastest(extent float64) float64 {
	var top float64
	for i := 1; i < len(tr.times); i++ {
		dt := tr.times[i] - tr.times[i-1]
		a, b := tr.knots[i-1], tr.knots[i]
		length := math.Sqrt((a[0]-b[0])*(a[0]-b[0]) + (a[1]-b[1])*(a[1]-b[1]) + (a[2]-b[2])*(a[2]-b[2]))
		if tr.polar {
			radius := math.Max(extent, math.Max(a[2], b[2]))
			length = radius*(math.Abs(a[0]-b[0])+math.Abs(a[1]-b[1])) + math.Abs(a[2]-b[2])
		}
		top = math.Max(top, length/dt)
	}
	return top
}
