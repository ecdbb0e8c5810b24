package bearing

import (
	"math"
	"sort"

	"alidade/pkg/rig"
)

// Knot is the smoothed direction of a source at one time.
type Knot struct {
	Time          float64 // seconds from the first frame: the middle of a window
	Direction     rig.Direction
	StandardError float64 // of the azimuth (cone angle for a line rig), radians
	Heard         bool    // false where the source was silent and the path is carried over
}

// Track is the path of one source over time.
type Track struct {
	Knots []Knot // at least one, in order of time, one a window
	Heard int    // windows that heard the source
	// Span is the largest angle between two directions of the track, radians.
	Span       float64
	Confidence float64 // mean over the windows that heard it
}

// At returns the direction at time seconds: on the great circle between the
// knots around it, that of the first or last knot before or after all of them.
func (t Track) At(time float64) rig.Direction {
	n := len(t.Knots)
	i := sort.Search(n, func(i int) bool { return t.Knots[i].Time > time })
	switch {
	case n == 0:
		return rig.Direction{}
	case i == 0:
		return t.Knots[0].Direction
	case i == n:
		return t.Knots[n-1].Direction
	}
	a, b := t.Knots[i-1], t.Knots[i]
	f := (time - a.Time) / (b.Time - a.Time)
	u, v := a.Direction.Unit(), b.Direction.Unit()
	angle := rig.AngleBetween(a.Direction, b.Direction)
	if angle < 1e-9 || angle > math.Pi-1e-6 {
		return a.Direction
	}
	s := math.Sin(angle)
	return rig.Toward(u.Scale(math.Sin((1-f)*angle) / s).Add(v.Scale(math.Sin(f*angle) / s)))
}

// Constants of the motion: direction cosines with a velocity that fades and is
// driven by white noise (an Ornstein-Uhlenbeck velocity [Singer 1970]).
const (
	trackDrive   = 0.02 // spectral density of the acceleration, 1/s³
	trackFade    = 3.0  // time constant of the velocity, seconds
	trackRate0   = 0.3  // standard deviation of the velocity at birth, 1/s
	trackFloor   = 0.01 // least standard deviation of a sighting, cosines
	trackGate    = 4.0  // standard deviations within which a sighting belongs
	trackReach   = 0.30 // nor farther than this, cosines
	trackLife    = 4.0  // seconds without a sighting until a track ends
	trackBirth   = 3    // sightings among the first five windows make a track
	trackWithin  = 5
	trackMerge   = 0.25 // two tracks that follow one another this close are one
	trackOutlier = 3.0  // standard deviations from which a sighting counts less
)

// state is a track's cosines and their rates, with the covariance that all of
// them share.
type state struct {
	x, v          [3]float64
	pxx, pxv, pvv float64
}

// predict moves s on by dt seconds. It returns the transition
// [1 b; 0 e] that it used.
func (s state) predict(dt float64) (next state, b, e float64) {
	e = math.Exp(-dt / trackFade)
	b = trackFade * (1 - e)
	next = s
	for a := range s.x {
		next.x[a] += b * s.v[a]
		next.v[a] *= e
	}
	// Process noise of a fading velocity, to the order that matters here.
	qvv := trackDrive * trackFade / 2 * (1 - e*e)
	qxv := trackDrive * b * b / 2
	qxx := trackDrive * trackFade * trackFade * (dt - 2*b + trackFade*(1-e*e)/2)
	next.pxx = s.pxx + 2*b*s.pxv + b*b*s.pvv + math.Max(qxx, 0)
	next.pxv = e*(s.pxv+b*s.pvv) + qxv
	next.pvv = e*e*s.pvv + qvv
	return next, b, e
}

// update takes a sighting at y with variance r.
func (s state) update(y [3]float64, r float64) state {
	k, g := s.pxx/(s.pxx+r), s.pxv/(s.pxx+r)
	next := s
	for a := range s.x {
		d := y[a] - s.x[a]
		next.x[a] += k * d
		next.v[a] += g * d
	}
	next.pxx = (1 - k) * s.pxx
	next.pxv = (1 - k) * s.pxv
	next.pvv = s.pvv - g*s.pxv
	return next
}

// trail is a track in the making: the sightings that belong to it.
type trail struct {
	state
	last   float64 // time of state
	heard  []int   // indices of sightings
	first  int     // first and last window
	latest int
	dead   bool
}

// variance is that of a sighting's cosines: the mean over the cosines, with a
// floor for what reverberation does to single windows.
func (f *Finder) variance(s *sighting) float64 {
	inv, ok := s.info.invert(f.look.unknowns(), f.space.lift(s.at))
	if !ok {
		inv, ok = s.info.invert(f.space.dim, f.space.lift(s.at))
	}
	if !ok {
		return 1
	}
	sum := 0.0
	for a := range f.space.dim {
		sum += inv[a][a]
	}
	n := float64(f.space.dim)
	if f.space.dim == 3 {
		n = 2 // a direction has two unknowns
	}
	return sum/n + trackFloor*trackFloor
}

// associate deals the sightings out to trails, window by window: the nearest
// first, within the gate.
func (f *Finder) associate() []*trail {
	var open, done []*trail
	middle := func(w int) float64 { return (f.windows[w].Start + f.windows[w].End) / 2 }
	for from := 0; from < len(f.sightings); {
		w := f.sightings[from].window
		to := from
		for to < len(f.sightings) && f.sightings[to].window == w {
			to++
		}
		now := middle(w)
		predicted := make([]state, len(open))
		type match struct {
			track, sight int
			cost         float64
		}
		var matches []match
		for i, t := range open {
			predicted[i], _, _ = t.predict(now - t.last)
			for s := from; s < to; s++ {
				g := &f.sightings[s]
				r := f.variance(g)
				d := f.space.apart(predicted[i].x, g.at.y)
				sd := math.Sqrt(predicted[i].pxx + r)
				if d < trackGate*sd && d < trackReach {
					matches = append(matches, match{i, s, d*d/(sd*sd) + 2*math.Log(sd)})
				}
			}
		}
		sort.SliceStable(matches, func(a, b int) bool { return matches[a].cost < matches[b].cost })
		usedT, usedS := map[int]bool{}, map[int]bool{}
		for _, m := range matches {
			if usedT[m.track] || usedS[m.sight] {
				continue
			}
			usedT[m.track], usedS[m.sight] = true, true
			t := open[m.track]
			t.state = predicted[m.track].update(f.sightings[m.sight].at.y, f.variance(&f.sightings[m.sight]))
			t.last, t.latest = now, w
			t.heard = append(t.heard, m.sight)
		}
		for s := from; s < to; s++ {
			if usedS[s] {
				continue
			}
			r := f.variance(&f.sightings[s])
			open = append(open, &trail{
				state: state{x: f.sightings[s].at.y, pxx: r, pvv: trackRate0 * trackRate0},
				last:  now, heard: []int{s}, first: w, latest: w,
			})
		}
		keep := open[:0]
		for _, t := range open {
			young := len(t.heard) < trackBirth && w-t.first >= trackWithin
			switch {
			case young: // a chance sighting
			case now-t.last > trackLife:
				done = append(done, t)
			default:
				keep = append(keep, t)
			}
		}
		open = keep
		from = to
	}
	for _, t := range open {
		if len(t.heard) >= trackBirth {
			done = append(done, t)
		}
	}
	sort.SliceStable(done, func(a, b int) bool { return done[a].first < done[b].first })
	// Join what follows on: the same source after a long silence.
	for i, a := range done {
		if a.dead {
			continue
		}
		for again := true; again; {
			again = false
			for _, b := range done[i+1:] {
				if b.dead || b.first <= a.latest {
					continue
				}
				y := f.sightings[b.heard[0]].at.y
				if f.space.apart(f.sightings[a.heard[len(a.heard)-1]].at.y, y) < trackMerge {
					a.heard = append(a.heard, b.heard...)
					a.latest = b.latest
					b.dead = true
					again = true
					break
				}
			}
		}
	}
	var alive []*trail
	for _, t := range done {
		if !t.dead {
			alive = append(alive, t)
		}
	}
	return alive
}

// smoothTrail runs a Kalman filter forward and the smoother of
// [Rauch, Tung & Striebel 1965] back over the trail, one knot a window from
// its first sighting to its last.
func (f *Finder) smoothTrail(t *trail) Track {
	n := t.latest - t.first + 1
	filtered, predicted := make([]state, n), make([]state, n)
	bs, es := make([]float64, n), make([]float64, n)
	heard := make([]int, n)
	for i := range heard {
		heard[i] = -1
	}
	for _, s := range t.heard {
		heard[f.sightings[s].window-t.first] = s
	}
	middle := func(i int) float64 { w := f.windows[t.first+i]; return (w.Start + w.End) / 2 }
	// Overlapping windows share their sound: their errors are counted up.
	overlap := float64(f.set.sections)
	confidence := 0.0
	for i := range n {
		var p state
		if i == 0 {
			s := &f.sightings[heard[0]]
			p = state{x: s.at.y, pxx: 4 * f.variance(s) * overlap, pvv: trackRate0 * trackRate0}
		} else {
			p, bs[i], es[i] = filtered[i-1].predict(middle(i) - middle(i-1))
		}
		predicted[i] = p
		if s := heard[i]; s >= 0 {
			g := &f.sightings[s]
			r := f.variance(g) * overlap
			// A sighting far out counts as a worse one (Huber's weights).
			d := f.space.apart(p.x, g.at.y) / math.Sqrt(p.pxx+r)
			if d > trackOutlier {
				r *= d / trackOutlier * d / trackOutlier
			}
			p = p.update(g.at.y, r)
			confidence += peakConfidence(g.value, g.rest) * agreementFactor(g.fit)
		}
		filtered[i] = p
	}
	smooth := make([]state, n)
	smooth[n-1] = filtered[n-1]
	for i := n - 2; i >= 0; i-- {
		a, p := filtered[i], predicted[i+1]
		b, e := bs[i+1], es[i+1]
		// Gain C = P Fᵀ inverse(P') with F = [1 b; 0 e].
		m00, m01 := a.pxx+b*a.pxv, e*a.pxv
		m10, m11 := a.pxv+b*a.pvv, e*a.pvv
		det := p.pxx*p.pvv - p.pxv*p.pxv
		if !(det > 1e-30) {
			smooth[i] = a
			continue
		}
		c00, c01 := (m00*p.pvv-m01*p.pxv)/det, (m01*p.pxx-m00*p.pxv)/det
		c10, c11 := (m10*p.pvv-m11*p.pxv)/det, (m11*p.pxx-m10*p.pxv)/det
		s := a
		for d := range s.x {
			dx, dv := smooth[i+1].x[d]-p.x[d], smooth[i+1].v[d]-p.v[d]
			s.x[d] += c00*dx + c01*dv
			s.v[d] += c10*dx + c11*dv
		}
		dxx, dxv, dvv := smooth[i+1].pxx-p.pxx, smooth[i+1].pxv-p.pxv, smooth[i+1].pvv-p.pvv
		s.pxx += c00*c00*dxx + 2*c00*c01*dxv + c01*c01*dvv
		s.pxv += c00*c10*dxx + (c00*c11+c01*c10)*dxv + c01*c11*dvv
		s.pvv += c10*c10*dxx + 2*c10*c11*dxv + c11*c11*dvv
		smooth[i] = s
	}
	track := Track{Heard: len(t.heard), Confidence: confidence / float64(len(t.heard))}
	for i, s := range smooth {
		var cov mat4
		for a := range f.space.dim {
			cov[a][a] = math.Max(s.pxx, 0)
		}
		fix := f.space.fix(place{y: f.space.clamp(place{y: s.x}, 0).y}, cov, math.Inf(1))
		track.Knots = append(track.Knots, Knot{Time: middle(i), Direction: fix.Direction, StandardError: fix.StandardError, Heard: heard[i] >= 0})
	}
	for _, k := range track.Knots {
		track.Span = math.Max(track.Span, rig.AngleBetween(track.Knots[0].Direction, k.Direction))
	}
	return track
}
