package calibration

import (
	"fmt"
	"math"

	"alidade/pkg/rig"
)

// maxSurveyed bounds the microphones whose places are found together: the
// information about them is a matrix of three rows a microphone.
const maxSurveyed = 64

// Bearing is what is known of the direction of one sound before.
type Bearing struct {
	// Elevation, and Azimuth, radians, with their standard uncertainties; nil
	// where nothing is known.
	Elevation, Azimuth *float64
	ElevationStd       float64
	AzimuthStd         float64
	// Distance from the reference point, metres; 0 is far, a plane wave.
	Distance float64
}

// SurveyOptions say what is known before a survey.
type SurveyOptions struct {
	// Places is the standard uncertainty of every microphone in every axis,
	// metres, before the survey; it must be positive.
	Places float64
	// Delays is the standard uncertainty of an arrival beside what Arrival.Std
	// says: channels' delays, claps that are not quite far; seconds, positive.
	Delays float64
	// Speed is the standard uncertainty of the speed of sound, a share.
	Speed float64
}

// Mode is one way in which all microphones could move together.
type Mode struct {
	Name string
	// Known is the share of it that the arrivals determine, 0..1; below one half
	// it is not observable, and the rig file's value stands.
	Known float64
}

// Survey is the places of microphones found from sounds of unknown directions.
type Survey struct {
	At []rig.Point // metres
	// Std is the standard uncertainty of each microphone in each axis, metres,
	// what is not observable included.
	Std [][3]float64
	// ShapeStd is the same with shift and turn of the whole rig left out.
	ShapeStd   [][3]float64
	Directions []rig.Direction // of the sounds; only about right where Affine is set
	Residual   float64         // root mean square of the arrivals that is left, seconds
	Before     float64         // the same with the places before, directions fitted
	Chi2       float64         // residual over its standard uncertainty, squared, a degree of freedom
	Rank       int             // dimensions of the rig that the arrivals show: 1 a line, 2 a plane, 3
	// Affine says that a rig of less than three dimensions was heard from
	// directions of which nothing is known: its places are then found but for a
	// linear map of the line or plane, which the rig file settles.
	Affine     bool
	Observable int    // independent ways to move microphones that the arrivals determine
	Ways       int    // of so many
	Modes      []Mode // the named ones
	Outliers   int    // arrivals that were given less weight
}

// Unobservable lists the named modes that the arrivals do not determine.
func (s *Survey) Unobservable() []string {
	var list []string
	for _, m := range s.Modes {
		if m.Known < 0.5 {
			list = append(list, m.Name)
		}
	}
	return list
}

// survey is one on its way.
type survey struct {
	prior  []rig.Point
	p      []rig.Point
	ref    rig.Point
	speed  float64
	a      []Arrival
	known  []Bearing
	o      SurveyOptions
	u      []rig.Point // unit vectors to the sounds; slowness times speed where affine
	t      []float64   // when each passed the reference point, seconds
	affine bool
	axes   []rig.Point // along which places move: three, or those of a line or plane
	weight [][]float64 // of each arrival beside its variance, 0..1
}

// Locate finds the places of microphones from arrivals of sounds whose
// directions are not known, from the places before: maximum a posteriori by
// Gauss and Newton's method with Levenberg's damping, places and directions
// together, Huber weights against claps that a reflection spoiled. Where the
// arrivals show three dimensions it starts from the factorisation of their
// matrix too [Thrun 2005], and keeps what fits better.
func Locate(before []rig.Point, ref rig.Point, arrivals []Arrival, bearings []Bearing, speed float64, o SurveyOptions) (*Survey, error) {
	if bearings != nil && len(bearings) != len(arrivals) {
		panic(fmt.Sprintf("calibration: %d bearings of %d arrivals", len(bearings), len(arrivals)))
	}
	if !(o.Places > 0) || !(o.Delays > 0) || !(speed > 0) {
		return nil, fmt.Errorf("calibration: survey with uncertainties of %g m and %g s at %g m/s: want positive ones", o.Places, o.Delays, speed)
	}
	if len(before) > maxSurveyed {
		return nil, &RefusedError{Why: fmt.Sprintf("%d microphones, places are found for at most %d together", len(before), maxSurveyed), Help: "survey parts of the rig, with use: false on the rest"}
	}
	if bearings == nil {
		bearings = make([]Bearing, len(arrivals))
	}
	s := &survey{prior: before, ref: ref, speed: speed, a: arrivals, known: bearings, o: o}
	for _, a := range arrivals {
		w := make([]float64, len(before))
		for m := range w {
			if !math.IsNaN(a.Late[m]) {
				w[m] = 1
			}
		}
		s.weight = append(s.weight, w)
	}
	rank := s.rank()
	elevations := 0
	for _, b := range bearings {
		if b.Elevation != nil {
			elevations++
		}
	}
	s.affine = rank < 3 && elevations < 3
	s.axes = []rig.Point{{X: 1}, {Y: 1}, {Z: 1}}
	if s.affine {
		s.axes = s.principal(rank)
	}
	if need := s.least(); len(arrivals) < need {
		return nil, &RefusedError{
			Why:  fmt.Sprintf("%d sounds, places need at least %d from different directions", len(arrivals), need),
			Help: "clap from more directions, all around and from above and below",
		}
	}
	s.reset(before)
	out := &Survey{Rank: rank, Affine: s.affine}
	out.Before = s.directions()
	s.solve()
	best := s.copy()
	if rank == 3 && !s.affine && len(arrivals) >= 6 {
		if at, ok := s.factorise(); ok {
			s.reset(at)
			s.directions()
			s.solve()
			if s.cost() >= best.cost() {
				s = best
			}
		}
	}
	s.sum(out)
	return out, nil
}

// least is how many sounds there must be for more equations than unknowns.
func (s *survey) least() int {
	mics, d := len(s.prior), len(s.axes)
	each := d // time and direction
	gauge := d + d*(d-1)/2
	if s.affine {
		each, gauge = 1+d, d+d*d
	}
	n := 3
	for n < 100 && n*(mics-each) < d*mics-gauge+1 {
		n++
	}
	return n
}

// reset puts the places back and the weights to one.
func (s *survey) reset(at []rig.Point) {
	s.p = append([]rig.Point(nil), at...)
	s.u, s.t = make([]rig.Point, len(s.a)), make([]float64, len(s.a))
	for e := range s.weight {
		for m := range s.weight[e] {
			if !math.IsNaN(s.a[e].Late[m]) {
				s.weight[e][m] = 1
			}
		}
	}
}

func (s *survey) copy() *survey {
	c := *s
	c.p, c.u, c.t = append([]rig.Point(nil), s.p...), append([]rig.Point(nil), s.u...), append([]float64(nil), s.t...)
	c.weight = nil
	for _, w := range s.weight {
		c.weight = append(c.weight, append([]float64(nil), w...))
	}
	return &c
}

// std is the standard uncertainty of an arrival.
func (s *survey) std(e, m int) float64 { return math.Hypot(s.o.Delays, s.a[e].Std[m]) }

// heard lists the microphones with an arrival of sound e.
func (s *survey) heard(e int) []int {
	var list []int
	for m, v := range s.a[e].Late {
		if !math.IsNaN(v) {
			list = append(list, m)
		}
	}
	return list
}

// rank is how many dimensions the matrix of arrivals has above its noise, at
// least 1 and at most 3: centred arrivals of plane waves are places times
// slownesses.
func (s *survey) rank() int {
	mics := len(s.prior)
	gram := newMatrix(mics, mics)
	events := 0.0
	for e := range s.a {
		list := s.heard(e)
		if len(list) < mics {
			continue // a row with gaps does not factor
		}
		mean, noise := 0.0, 0.0
		for m := range mics {
			mean += s.a[e].Late[m] / float64(mics)
			noise += s.std(e, m) * s.std(e, m) / float64(mics)
		}
		for m := range mics {
			for n := range mics {
				gram.add(m, n, (s.a[e].Late[m]-mean)*(s.a[e].Late[n]-mean)/noise)
			}
		}
		events++
	}
	values, _ := gram.eigen()
	// The largest eigenvalue of noise alone lies about here [Marchenko & Pastur
	// 1967]; three quarters more keep chance out.
	edge := 1.75 * (math.Sqrt(events) + math.Sqrt(float64(mics))) * (math.Sqrt(events) + math.Sqrt(float64(mics)))
	rank := 0
	for k := 0; k < 3 && k < len(values); k++ {
		if values[k] > edge {
			rank++
		}
	}
	return max(rank, 1)
}

// principal returns the first n main axes of the places before.
func (s *survey) principal(n int) []rig.Point {
	cov := newMatrix(3, 3)
	c := centroid(s.prior)
	for _, p := range s.prior {
		v := coordinates(p.Sub(c))
		for i := range 3 {
			for j := range 3 {
				cov.add(i, j, v[i]*v[j])
			}
		}
	}
	_, vectors := cov.eigen()
	var axes []rig.Point
	for k := range n {
		axes = append(axes, rig.Point{X: vectors.at(0, k), Y: vectors.at(1, k), Z: vectors.at(2, k)})
	}
	return axes
}

// directions fits direction and time of every sound to the places at hand, and
// returns the root mean square residual, seconds.
func (s *survey) directions() float64 {
	sum, n := 0.0, 0.0
	for e := range s.a {
		list := s.heard(e)
		k := fitSlowness(s.p, s.a[e].Late, list).K.Scale(s.speed)
		best := math.Inf(1)
		var bestU rig.Point
		var bestT float64
		for _, u := range s.starts(e, k) {
			s.u[e], s.t[e] = u, 0
			for range 20 {
				s.stepSound(e)
			}
			if c := s.soundCost(e); c < best {
				best, bestU, bestT = c, s.u[e], s.t[e]
			}
		}
		s.u[e], s.t[e] = bestU, bestT
		for _, m := range list {
			r := s.residual(e, m)
			sum += r * r
			n++
		}
	}
	return math.Sqrt(sum / n)
}

// starts are the unit vectors from which the direction of sound e is looked
// for, given the slowness k that fits it, times the speed.
func (s *survey) starts(e int, k rig.Point) []rig.Point {
	if s.affine {
		along := rig.Point{}
		for _, a := range s.axes {
			along = along.Add(a.Scale(k.Dot(a)))
		}
		return []rig.Point{along}
	}
	b := s.known[e]
	var list []rig.Point
	add := func(d rig.Direction) {
		if b.Elevation != nil {
			d.Elevation = *b.Elevation
		}
		if b.Azimuth != nil {
			d.Azimuth = *b.Azimuth
		}
		list = append(list, d.Unit())
	}
	g := rig.Spread(s.p)
	if k.Norm() > 0 {
		add(rig.Toward(k))
	}
	// What a line or plane leaves open: out of it, to either side.
	if out := 1 - k.Dot(k); out > 0 && g.Shape != rig.ShapeLine {
		add(rig.Toward(k.Add(g.Normal.Scale(math.Sqrt(out)))))
		add(rig.Toward(k.Sub(g.Normal.Scale(math.Sqrt(out)))))
	}
	if g.Shape == rig.ShapeLine {
		for i := range 4 {
			add(rig.Degrees(float64(i)*90+45, 0))
		}
	}
	return list
}

// arrival is when sound e reaches place p, seconds.
func (s *survey) arrival(e int, p rig.Point) float64 {
	q := p.Sub(s.ref)
	if r := s.known[e].Distance; r > 0 && !s.affine {
		return (s.u[e].Scale(r).Sub(q).Norm()-r)/s.speed + s.t[e]
	}
	return -q.Dot(s.u[e])/s.speed + s.t[e]
}

func (s *survey) residual(e, m int) float64 { return s.a[e].Late[m] - s.arrival(e, s.p[m]) }

// slopes returns the derivatives of an arrival by place, by the coordinates of
// the direction along the tangents and by time.
func (s *survey) slopes(e, m int) (place rig.Point, sound []float64) {
	q := s.p[m].Sub(s.ref)
	tangents := s.tangents(e)
	sound = make([]float64, len(tangents)+1)
	sound[len(tangents)] = 1
	if r := s.known[e].Distance; r > 0 && !s.affine {
		v := s.u[e].Scale(r).Sub(q)
		v = v.Scale(1 / (v.Norm() * s.speed))
		for k, t := range tangents {
			sound[k] = v.Dot(t) * r
		}
		return v.Scale(-1), sound
	}
	for k, t := range tangents {
		sound[k] = -q.Dot(t) / s.speed
	}
	return s.u[e].Scale(-1 / s.speed), sound
}

// tangents are the directions in which the direction of sound e can move.
func (s *survey) tangents(e int) []rig.Point {
	if s.affine {
		return s.axes
	}
	u := s.u[e]
	d := rig.Toward(u)
	sin, cos := math.Sincos(d.Azimuth)
	across := rig.Point{X: -sin, Y: cos}
	return []rig.Point{across, u.Cross(across)}
}

// turn moves the direction of sound e along its tangents.
func (s *survey) turn(e int, tangents []rig.Point, by []float64) {
	u := s.u[e]
	for k, t := range tangents {
		u = u.Add(t.Scale(by[k]))
	}
	if !s.affine {
		u = u.Scale(1 / u.Norm())
	}
	s.u[e] = u
}

// aside returns what is known of the direction of sound e before: for each of
// the tangents the information, and the pull towards what is known.
func (s *survey) aside(e int, tangents []rig.Point) (info [2]float64, pull [2]float64) {
	if s.affine {
		return info, pull
	}
	// Nothing at all is a direction within a radian or two.
	info[0], info[1] = 0.1, 0.1
	d := rig.Toward(s.u[e])
	if b := s.known[e]; b.Elevation != nil {
		w := 1 / math.Max(b.ElevationStd*b.ElevationStd, 1e-12)
		info[1] += w
		pull[1] = w * (*b.Elevation - d.Elevation)
	}
	if b := s.known[e]; b.Azimuth != nil {
		cos := math.Cos(d.Elevation)
		w := 1 / math.Max(b.AzimuthStd*b.AzimuthStd*cos*cos, 1e-12)
		info[0] += w
		pull[0] = w * cos * math.Remainder(*b.Azimuth-d.Azimuth, 2*math.Pi)
	}
	return info, pull
}

func centroid(at []rig.Point) (c rig.Point) {
	for _, p := range at {
		c = c.Add(p.Scale(1 / float64(len(at))))
	}
	return c
}

func coordinates(p rig.Point) [3]float64 { return [3]float64{p.X, p.Y, p.Z} }
