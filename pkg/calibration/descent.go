package calibration

import (
	"math"

	"alidade/pkg/rig"
)

// soundCost is what sound e adds to the cost.
func (s *survey) soundCost(e int) float64 {
	sum := 0.0
	for _, m := range s.heard(e) {
		r := s.residual(e, m) / s.std(e, m)
		sum += s.weight[e][m] * r * r
	}
	if !s.affine {
		d := rig.Toward(s.u[e])
		if b := s.known[e]; b.Elevation != nil {
			x := (*b.Elevation - d.Elevation) / math.Max(b.ElevationStd, 1e-6)
			sum += x * x
		}
		if b := s.known[e]; b.Azimuth != nil {
			x := math.Remainder(*b.Azimuth-d.Azimuth, 2*math.Pi) * math.Cos(d.Elevation) / math.Max(b.AzimuthStd*math.Cos(d.Elevation), 1e-6)
			sum += x * x
		}
	}
	return sum
}

// cost is twice the negative logarithm of what is maximised.
func (s *survey) cost() float64 {
	sum := 0.0
	for e := range s.a {
		sum += s.soundCost(e)
	}
	for m, p := range s.p {
		d := p.Distance(s.prior[m]) / s.o.Places
		sum += d * d
	}
	return sum
}

// stepSound moves direction and time of sound e to the places at hand.
func (s *survey) stepSound(e int) {
	tangents := s.tangents(e)
	n := len(tangents) + 1
	h, g := newMatrix(n, n), make([]float64, n)
	for _, m := range s.heard(e) {
		_, d := s.slopes(e, m)
		w := s.weight[e][m] / (s.std(e, m) * s.std(e, m))
		r := s.residual(e, m)
		for i := range n {
			g[i] += w * d[i] * r
			for j := range n {
				h.add(i, j, w*d[i]*d[j])
			}
		}
	}
	info, pull := s.aside(e, tangents)
	for k := range tangents {
		if !s.affine {
			h.add(k, k, info[k])
			g[k] += pull[k]
		}
	}
	for i := range n {
		h.add(i, i, 1e-9*h.at(i, i)+1e-9)
	}
	l, ok := h.cholesky()
	if !ok {
		return
	}
	x := l.solveLower(g)
	limit := 0.3
	size := 0.0
	for k := range tangents {
		size = math.Max(size, math.Abs(x[k]))
	}
	if size > limit {
		for i := range x {
			x[i] *= limit / size
		}
	}
	s.turn(e, tangents, x)
	s.t[e] += x[n-1]
}

// normal returns the information about the places, in the coordinates along
// axes, with directions and times taken out, the pull on them, and what brings
// directions and times after them. The information is that of the arrivals and
// of what is known of directions alone.
func (s *survey) normal(damp float64) (info *matrix, pull []float64, follow func(step []float64)) {
	d := len(s.axes)
	n := d * len(s.p)
	info, pull = newMatrix(n, n), make([]float64, n)
	type part struct {
		tangents []rig.Point
		inverse  *matrix
		cross    *matrix // sound by places
		g        []float64
	}
	parts := make([]*part, len(s.a))
	for e := range s.a {
		q := &part{tangents: s.tangents(e)}
		k := len(q.tangents) + 1
		h := newMatrix(k, k)
		q.cross, q.g = newMatrix(k, n), make([]float64, k)
		for _, m := range s.heard(e) {
			place, sound := s.slopes(e, m)
			w := s.weight[e][m] / (s.std(e, m) * s.std(e, m))
			r := s.residual(e, m)
			var along [3]float64
			for i, a := range s.axes {
				along[i] = place.Dot(a)
			}
			for i := range d {
				pull[m*d+i] += w * along[i] * r
				for j := range d {
					info.add(m*d+i, m*d+j, w*along[i]*along[j])
				}
				for a := range k {
					q.cross.add(a, m*d+i, w*sound[a]*along[i])
				}
			}
			for a := range k {
				q.g[a] += w * sound[a] * r
				for b := range k {
					h.add(a, b, w*sound[a]*sound[b])
				}
			}
		}
		about, toward := s.aside(e, q.tangents)
		for a := range q.tangents {
			if !s.affine {
				h.add(a, a, about[a])
				q.g[a] += toward[a]
			}
		}
		for a := range k {
			h.add(a, a, (damp+1e-12)*h.at(a, a)+1e-12)
		}
		inverse, ok := h.inverse()
		if !ok {
			continue // a sound that says nothing of itself says nothing of places
		}
		q.inverse = inverse
		weighted := inverse.times(q.cross)
		for a := range k {
			for i := range n {
				x := q.cross.at(a, i)
				if x == 0 {
					continue
				}
				for j := range n {
					info.add(i, j, -x*weighted.at(a, j))
				}
				for b := range k {
					pull[i] -= x * inverse.at(a, b) * q.g[b]
				}
			}
		}
		parts[e] = q
	}
	follow = func(step []float64) {
		for e, q := range parts {
			if q == nil {
				continue
			}
			k := len(q.g)
			rhs := append([]float64(nil), q.g...)
			for a := range k {
				for i := range n {
					rhs[a] -= q.cross.at(a, i) * step[i]
				}
			}
			x := make([]float64, k)
			for a := range k {
				for b := range k {
					x[a] += q.inverse.at(a, b) * rhs[b]
				}
			}
			s.turn(e, q.tangents, x)
			s.t[e] += x[k-1]
		}
	}
	return info, pull, follow
}

// solve finds places and directions together.
func (s *survey) solve() {
	d := len(s.axes)
	damp := 1e-3
	for round := range 60 {
		if round%4 == 3 && round < 40 {
			s.reweigh()
		}
		before := s.cost()
		info, pull, follow := s.normal(damp)
		w := 1 / (s.o.Places * s.o.Places)
		for m := range s.p {
			off := s.prior[m].Sub(s.p[m])
			for i, a := range s.axes {
				k := m*d + i
				info.set(k, k, info.at(k, k)*(1+damp)+w)
				pull[k] += w * off.Dot(a)
			}
		}
		l, ok := info.cholesky()
		if !ok {
			damp = math.Max(10*damp, 1e-3)
			continue
		}
		step := l.solveLower(pull)
		old := s.copy()
		for m := range s.p {
			for i, a := range s.axes {
				s.p[m] = s.p[m].Add(a.Scale(step[m*d+i]))
			}
		}
		follow(step)
		after := s.cost()
		if !(after <= before) {
			s.p, s.u, s.t = old.p, old.u, old.t
			if damp = 10 * math.Max(damp, 1e-4); damp > 1e6 {
				break
			}
			continue
		}
		damp = math.Max(damp/5, 1e-9)
		if before-after < 1e-9*before && round > 12 {
			break
		}
	}
}

// huber is where an arrival's residual begins to lose weight, in standard
// deviations [Huber 1964].
const huber = 2.5

// reweigh gives arrivals far off less weight.
func (s *survey) reweigh() {
	var sizes []float64
	for e := range s.a {
		for _, m := range s.heard(e) {
			sizes = append(sizes, math.Abs(s.residual(e, m))/s.std(e, m))
		}
	}
	scale := math.Max(1, 1.4826*median(sizes))
	for e := range s.a {
		for _, m := range s.heard(e) {
			s.weight[e][m] = 1
			if r := math.Abs(s.residual(e, m)) / (s.std(e, m) * scale); r > huber {
				s.weight[e][m] = huber / r
			}
		}
	}
}
