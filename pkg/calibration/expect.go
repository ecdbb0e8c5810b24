package calibration

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Doubt is how well the circumstances of a take are known, as standard
// uncertainties (one standard deviation). A zero field says that the value is
// exact.
type Doubt struct {
	Direction float64 // of azimuth and of elevation, radians
	Distance  float64 // of the distance of a source, metres
	Speed     float64 // of the speed of sound, a share of it
	Placement float64 // of every microphone in every axis, metres
}

// Expected is what the geometry says about the arrival of a sound at the
// microphones, and what it would say if the circumstances were a little other.
type Expected struct {
	At      []rig.Point // of the microphones, metres
	Ref     rig.Point   // reference point, metres
	Speed   float64     // m/s
	Delay   []float64   // arrival against the reference point, seconds
	LevelDB []float64   // level against the reference point, dB: spreading
	Moves   []Move      // one for each circumstance in doubt

	placement float64 // seconds
}

// Move is how the expected arrivals change when one circumstance is wrong by
// its standard uncertainty.
type Move struct {
	Name    string // azimuth, elevation, distance or speed of sound
	Delay   []float64
	LevelDB []float64
}

// Expect returns what to expect of a sound from the direction d at a distance,
// metres, seen from ref; +Inf is a far source, a plane wave. It returns an
// error for a source nearer than 10 mm to the reference point or a microphone,
// and for a speed of sound that is not positive.
func Expect(at []rig.Point, ref rig.Point, d rig.Direction, distance, speed float64, doubt Doubt) (*Expected, error) {
	const nearest = 0.01
	if !(speed > 0) || math.IsInf(speed, 0) {
		return nil, fmt.Errorf("calibration: speed of sound of %g m/s", speed)
	}
	if !(distance >= nearest) {
		return nil, fmt.Errorf("calibration: a source %g m from the reference point: want at least %g m", distance, nearest)
	}
	arrivals := func(d rig.Direction, distance, speed float64) (delay, level []float64) {
		w := acoustics.Wave(acoustics.Plane{From: d})
		if !math.IsInf(distance, 1) {
			w = acoustics.Spherical{At: ref.Add(d.Unit().Scale(distance))}
		}
		delay = acoustics.Delays(nil, w, at, ref, speed)
		for _, p := range at {
			level = append(level, 20*math.Log10(w.Spreading(p, ref)))
		}
		return delay, level
	}
	e := &Expected{At: at, Ref: ref, Speed: speed, placement: doubt.Placement / speed}
	if !math.IsInf(distance, 1) {
		s := ref.Add(d.Unit().Scale(distance))
		for m, p := range at {
			if r := p.Distance(s); r < nearest {
				return nil, fmt.Errorf("calibration: a source %.1f mm from microphone %d of %d: want at least %g mm", 1000*r, m+1, len(at), 1000*nearest)
			}
		}
	}
	e.Delay, e.LevelDB = arrivals(d, distance, speed)
	// The elevation is turned on the great circle, across the azimuth, so that
	// a source overhead has two directions of doubt as any other has.
	move := func(name string, up, down func() ([]float64, []float64)) {
		a, la := up()
		b, lb := down()
		mv := Move{Name: name}
		for m := range at {
			mv.Delay = append(mv.Delay, (a[m]-b[m])/2)
			mv.LevelDB = append(mv.LevelDB, (la[m]-lb[m])/2)
		}
		e.Moves = append(e.Moves, mv)
	}
	if doubt.Direction > 0 {
		u := d.Unit()
		sa, ca := math.Sincos(d.Azimuth)
		across := rig.Point{X: -sa, Y: ca}
		for k, t := range []rig.Point{across, u.Cross(across)} {
			turned := func(sign float64) func() ([]float64, []float64) {
				return func() ([]float64, []float64) {
					s, c := math.Sincos(sign * doubt.Direction)
					return arrivals(rig.Toward(u.Scale(c).Add(t.Scale(s))), distance, speed)
				}
			}
			move([]string{"azimuth", "elevation"}[k], turned(1), turned(-1))
		}
	}
	if doubt.Distance > 0 && !math.IsInf(distance, 1) {
		step := math.Min(doubt.Distance, 0.5*distance)
		move("distance", func() ([]float64, []float64) { return arrivals(d, distance+step, speed) },
			func() ([]float64, []float64) { return arrivals(d, distance-step, speed) })
	}
	if doubt.Speed > 0 {
		move("speed of sound", func() ([]float64, []float64) { return arrivals(d, distance, speed*(1+doubt.Speed)) },
			func() ([]float64, []float64) { return arrivals(d, distance, speed*(1-doubt.Speed)) })
	}
	return e, nil
}

// doubts returns the standard uncertainty of each microphone's delay, seconds,
// and level, dB, against the mean over the microphones listed in among, or
// against the microphone against where that is not negative.
func (e *Expected) doubts(among []int, against int) (delay, level []float64) {
	delay, level = make([]float64, len(e.At)), make([]float64, len(e.At))
	n := float64(len(among))
	for _, mv := range e.Moves {
		var md, ml float64
		for _, m := range among {
			md += mv.Delay[m] / n
			ml += mv.LevelDB[m] / n
		}
		if against >= 0 {
			md, ml = mv.Delay[against], mv.LevelDB[against]
		}
		for m := range e.At {
			delay[m] += (mv.Delay[m] - md) * (mv.Delay[m] - md)
			level[m] += (mv.LevelDB[m] - ml) * (mv.LevelDB[m] - ml)
		}
	}
	for m := range e.At {
		share := 1 - 1/n
		switch {
		case m == against:
			share = 0
		case against >= 0:
			share = 2 // one place and the other
		}
		delay[m] = math.Sqrt(delay[m] + e.placement*e.placement*share)
		level[m] = math.Sqrt(level[m])
	}
	return delay, level
}

// Slowness is the plane wave that fits a set of arrivals.
type Slowness struct {
	// K is the slowness towards the source, seconds per metre: arrivals are
	// -(p - ref)·K. Its part across a line or a plane that holds all
	// microphones is not measured and is 0.
	K rig.Point
	// Dims is how many of its components are measured: 1 for a line rig, 2 for
	// a flat one, 3.
	Dims int
	// Share is the part of the square of what was to be explained that the wave
	// explains, 0..1, and Chance how often arrivals at random would be
	// explained as well by so many components.
	Share, Chance float64
	Residual      float64 // root mean square of what is left, seconds
}

// fitSlowness fits a plane wave to arrivals t at the places at, seconds, of the
// microphones listed in among.
func fitSlowness(at []rig.Point, t []float64, among []int) Slowness {
	n := float64(len(among))
	var mean rig.Point
	mt := 0.0
	for _, m := range among {
		mean = mean.Add(at[m].Scale(1 / n))
		mt += t[m] / n
	}
	// Normal equations along the main axes of the rig.
	cov := newMatrix(3, 3)
	rhs := [3]float64{}
	total := 0.0
	for _, m := range among {
		p := at[m].Sub(mean)
		v := [3]float64{p.X, p.Y, p.Z}
		for i := range 3 {
			for j := range 3 {
				cov.add(i, j, v[i]*v[j])
			}
			rhs[i] -= v[i] * (t[m] - mt)
		}
		total += (t[m] - mt) * (t[m] - mt)
	}
	values, vectors := cov.eigen()
	var s Slowness
	k := [3]float64{}
	for i := range values {
		// 1 mm root mean square across counts as no extent in that direction.
		if values[i] < 1e-6*n || values[i] < 1e-6*values[0] {
			continue
		}
		s.Dims++
		along := 0.0
		for j := range 3 {
			along += vectors.at(j, i) * rhs[j]
		}
		for j := range 3 {
			k[j] += vectors.at(j, i) * along / values[i]
		}
	}
	s.K = rig.Point{X: k[0], Y: k[1], Z: k[2]}
	left := 0.0
	for _, m := range among {
		r := t[m] - mt + at[m].Sub(mean).Dot(s.K)
		left += r * r
	}
	s.Residual = math.Sqrt(left / n)
	if total > 0 {
		s.Share = math.Max(0, 1-left/total)
	}
	s.Chance = 1
	if free := len(among) - 1 - s.Dims; free > 0 && s.Dims > 0 {
		s.Chance = betaTail(s.Share, float64(s.Dims)/2, float64(free)/2)
	}
	return s
}

// betaTail is the probability that a variable of the beta distribution with the
// parameters a and b, multiples of one half, exceeds x. The density is
// integrated over the angle θ of x = sin²θ, where it is smooth.
func betaTail(x, a, b float64) float64 {
	if x <= 0 {
		return 1
	}
	if x >= 1 {
		return 0
	}
	const n = 2000
	part := func(from, to float64) float64 {
		sum := 0.0
		h := (to - from) / n
		for i := range n {
			s, c := math.Sincos(from + (float64(i)+0.5)*h)
			sum += math.Pow(s, 2*a-1) * math.Pow(c, 2*b-1)
		}
		return sum * h
	}
	cut := math.Asin(math.Sqrt(x))
	above := part(cut, math.Pi/2)
	return above / (above + part(0, cut))
}
