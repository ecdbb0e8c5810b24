package quality

import (
	"math"

	"alidade/pkg/rig"
)

// placing holds arrival times against places: which source, far or near,
// explains them best.
type placing struct {
	p     [][3]float64 // coordinates within the span of the rig, metres
	dim   int
	near  bool // whether a curved wavefront can be told from errors
	speed float64
}

func newPlacing(at []rig.Point, speed float64) *placing {
	g := rig.Spread(at)
	axes := []rig.Point{g.Axis}
	switch g.Shape {
	case rig.ShapeFlat:
		axes = []rig.Point{g.Axis, g.Normal.Cross(g.Axis)}
	case rig.ShapeSolid:
		axes = []rig.Point{{X: 1}, {Y: 1}, {Z: 1}}
	case rig.ShapePoint:
		axes = nil
	}
	pl := &placing{dim: len(axes), speed: speed, near: len(at) >= len(axes)+4}
	for _, q := range at {
		var v [3]float64
		for a, e := range axes {
			v[a] = q.Sub(g.Centre).Dot(e)
		}
		pl.p = append(pl.p, v)
	}
	return pl
}

// place is a source: direction cosines along the axes of the span times the
// scale of the delays, and the curvature of the wavefront, 1/m.
type place struct {
	y     [3]float64
	kappa float64
}

// scale is the length of y: 1 for a source in the span of a rig whose places
// and speed of sound are right.
func (s place) scale() float64 { return math.Sqrt(s.y[0]*s.y[0] + s.y[1]*s.y[1] + s.y[2]*s.y[2]) }

// delay is the arrival at microphone m against the centre, seconds:
// (|r·u - p| - r)/c with κ = 1/r, written so that κ = 0 is the plane wave.
func (pl *placing) delay(s place, m int) float64 {
	p := pl.p[m]
	pu := p[0]*s.y[0] + p[1]*s.y[1] + p[2]*s.y[2]
	pp := p[0]*p[0] + p[1]*p[1] + p[2]*p[2]
	q := 1 - 2*s.kappa*pu + s.kappa*s.kappa*pp
	return (pp*s.kappa - 2*pu) / (1 + math.Sqrt(math.Max(q, 1e-6))) / pl.speed
}

// nearness is the level at microphone m against that at the centre by the
// distance to the source, dB: -10·log10(|r·u - p|²/r²).
func (pl *placing) nearness(s place, m int) float64 {
	p := pl.p[m]
	pu := p[0]*s.y[0] + p[1]*s.y[1] + p[2]*s.y[2]
	pp := p[0]*p[0] + p[1]*p[1] + p[2]*p[2]
	return -10 * math.Log10(math.Max(1-2*s.kappa*pu+s.kappa*s.kappa*pp, 0.01))
}

// fit finds the source that explains the times t best; microphone m stands at
// place at[m] of the rig, and w[m] is 0 where it does not count. It returns the
// weighted mean square of what is left, s², the residuals in rest, and false
// if too few microphones count.
func (pl *placing) fit(t, w []float64, at []int, rest []float64) (place, float64, bool) {
	var s place
	n := pl.dim + 1
	counted := 0
	for _, v := range w {
		if v > 0 {
			counted++
		}
	}
	if counted < pl.dim+2 {
		return s, 0, false
	}
	near := pl.near && counted >= pl.dim+4
	// Gauss-Newton over the offset, y and, once those are there, κ.
	limit := 1 / math.Max(0.8*pl.reach(), 1e-3)
	offset := 0.0
	for round := range 7 {
		size := n
		if near && round > 0 {
			size++
		}
		var a [5][6]float64
		for m, v := range t {
			if w[m] <= 0 {
				continue
			}
			var row [5]float64
			base := pl.delay(s, at[m])
			row[0] = 1
			for d := range size - 1 {
				q := s
				h := 1e-5
				if d < pl.dim {
					q.y[d] += h
				} else {
					q.kappa += h
				}
				row[d+1] = (pl.delay(q, at[m]) - base) / h
			}
			e := v - offset - base
			for i := range size {
				for j := range size {
					a[i][j] += w[m] * row[i] * row[j]
				}
				a[i][5] += w[m] * row[i] * e
			}
		}
		step, ok := eliminate(&a, size)
		if !ok {
			break
		}
		offset += step[0]
		for d := range pl.dim {
			s.y[d] += step[d+1]
		}
		if size > n {
			s.kappa = math.Min(math.Max(s.kappa+step[n], -0.05*limit), limit)
		}
		for d := range pl.dim {
			s.y[d] = math.Min(math.Max(s.y[d], -3), 3)
		}
	}
	sum, total := 0.0, 0.0
	for m, v := range t {
		e := math.NaN()
		if !math.IsNaN(v) {
			e = v - offset - pl.delay(s, at[m])
		}
		if rest != nil {
			rest[m] = e
		}
		if w[m] > 0 {
			sum += w[m] * e * e
			total += w[m]
		}
	}
	return s, sum / total, true
}

// reach is the largest distance of a microphone from the centre, metres.
func (pl *placing) reach() float64 {
	r := 0.0
	for _, p := range pl.p {
		r = math.Max(r, math.Sqrt(p[0]*p[0]+p[1]*p[1]+p[2]*p[2]))
	}
	return r
}

// eliminate solves the first n of the equations in a, whose right side is the
// last column, by elimination with pivots; false if they are singular.
func eliminate(a *[5][6]float64, n int) ([5]float64, bool) {
	var x [5]float64
	var scale [5]float64
	for i := range n {
		scale[i] = math.Sqrt(math.Abs(a[i][i]))
		if scale[i] == 0 {
			return x, false
		}
	}
	for i := range n {
		for j := range n {
			a[i][j] /= scale[i] * scale[j]
		}
		a[i][5] /= scale[i]
	}
	for c := range n {
		best := c
		for r := c + 1; r < n; r++ {
			if math.Abs(a[r][c]) > math.Abs(a[best][c]) {
				best = r
			}
		}
		if math.Abs(a[best][c]) < 1e-10 {
			return x, false
		}
		a[c], a[best] = a[best], a[c]
		for r := c + 1; r < n; r++ {
			f := a[r][c] / a[c][c]
			for k := c; k < n; k++ {
				a[r][k] -= f * a[c][k]
			}
			a[r][5] -= f * a[c][5]
		}
	}
	for c := n - 1; c >= 0; c-- {
		v := a[c][5]
		for k := c + 1; k < n; k++ {
			v -= a[c][k] * x[k]
		}
		x[c] = v / a[c][c]
	}
	for i := range n {
		x[i] /= scale[i]
	}
	return x, true
}
