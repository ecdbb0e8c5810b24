package calibration

import (
	"math"

	"alidade/pkg/rig"
)

// sum fills in what came of the survey.
func (s *survey) sum(out *Survey) {
	mics, d := len(s.p), len(s.axes)
	out.At = s.p
	for _, u := range s.u {
		out.Directions = append(out.Directions, rig.Toward(u))
	}
	sum, n, chi := 0.0, 0.0, 0.0
	for e := range s.a {
		for _, m := range s.heard(e) {
			r := s.residual(e, m)
			sum += r * r
			chi += s.weight[e][m] * r * r / (s.std(e, m) * s.std(e, m))
			n++
			if s.weight[e][m] < 0.5 {
				out.Outliers++
			}
		}
	}
	out.Residual = math.Sqrt(sum / n)

	info, _, _ := s.normal(0)
	values, vectors := info.eigen()
	out.Ways = 3 * mics
	known := make([]bool, d*mics)
	for k, v := range values {
		// Determined where the arrivals tell more than the rig file: their
		// standard error is below half of what was assumed before.
		if known[k] = v > 4/(s.o.Places*s.o.Places); known[k] {
			out.Observable++
		}
	}
	free := n - float64(len(s.a)*(len(s.tangents(0))+1)) - float64(out.Observable)
	for _, b := range s.known {
		if !s.affine && b.Elevation != nil {
			free++
		}
		if !s.affine && b.Azimuth != nil {
			free++
		}
	}
	out.Chi2 = math.NaN()
	if free > 0 {
		out.Chi2 = chi / free
	}
	grow := 1.0
	if out.Chi2 > 1 {
		grow = out.Chi2
	}

	// The covariance after: what the arrivals tell, and what was known before.
	cov := newMatrix(d*mics, d*mics)
	for k, v := range values {
		f := 1 / (math.Max(v, 0)/grow + 1/(s.o.Places*s.o.Places))
		for i := range d * mics {
			x := f * vectors.at(i, k)
			for j := range d * mics {
				cov.add(i, j, x*vectors.at(j, k))
			}
		}
	}
	full := s.whole(cov)
	c := centroid(s.p)
	for m := range mics {
		for i := range 3 {
			for n := range mics {
				for j := range 3 {
					full.add(3*m+i, 3*n+j, s.o.Speed*s.o.Speed*coordinates(s.p[m].Sub(c))[i]*coordinates(s.p[n].Sub(c))[j])
				}
			}
		}
	}
	shape := without(full, orthonormal(s.rigid()))
	for m := range mics {
		var a, b [3]float64
		for i := range 3 {
			a[i] = math.Sqrt(math.Max(0, full.at(3*m+i, 3*m+i)))
			b[i] = math.Sqrt(math.Max(0, shape.at(3*m+i, 3*m+i)))
		}
		out.Std, out.ShapeStd = append(out.Std, a), append(out.ShapeStd, b)
	}
	for _, mode := range s.modes() {
		share := 0.0
		basis := orthonormal(mode.moves)
		for _, v := range basis {
			for k := range values {
				if !known[k] {
					continue
				}
				dot := 0.0
				for m := range mics {
					for i, a := range s.axes {
						dot += vectors.at(m*d+i, k) * rig.Point{X: v[3*m], Y: v[3*m+1], Z: v[3*m+2]}.Dot(a)
					}
				}
				share += dot * dot / float64(len(basis))
			}
		}
		if len(basis) > 0 {
			out.Modes = append(out.Modes, Mode{Name: mode.name, Known: share})
		}
	}
}

// whole brings a covariance along the axes into x, y, z; across the axes it is
// that of before.
func (s *survey) whole(cov *matrix) *matrix {
	mics, d := len(s.p), len(s.axes)
	full := newMatrix(3*mics, 3*mics)
	for m := range mics {
		for n := range mics {
			for i := range d {
				for j := range d {
					x := cov.at(m*d+i, n*d+j)
					a, b := coordinates(s.axes[i]), coordinates(s.axes[j])
					for p := range 3 {
						for q := range 3 {
							full.add(3*m+p, 3*n+q, x*a[p]*b[q])
						}
					}
				}
			}
		}
		for p := range 3 {
			for q := range 3 {
				across := 0.0
				if p == q {
					across = 1
				}
				for _, axis := range s.axes {
					a := coordinates(axis)
					across -= a[p] * a[q]
				}
				full.add(3*m+p, 3*m+q, across*s.o.Places*s.o.Places)
			}
		}
	}
	return full
}

// rigid are shift and turn of all microphones, as moves of 3 numbers each.
func (s *survey) rigid() [][]float64 {
	var list [][]float64
	for _, m := range s.modes()[:6] {
		list = append(list, m.moves...)
	}
	return list
}

// namedMode is a set of moves of all microphones with a name.
type namedMode struct {
	name  string
	moves [][]float64
}

// modes are the named ways in which all microphones can move together: the
// first six are shift and turn.
func (s *survey) modes() []namedMode {
	c := centroid(s.p)
	axes := []rig.Point{{X: 1}, {Y: 1}, {Z: 1}}
	each := func(move func(q rig.Point) rig.Point) []float64 {
		var v []float64
		for _, p := range s.p {
			w := coordinates(move(p.Sub(c)))
			v = append(v, w[:]...)
		}
		return v
	}
	var list []namedMode
	for k, name := range []string{"shift along x", "shift along y", "shift along z"} {
		list = append(list, namedMode{name, [][]float64{each(func(rig.Point) rig.Point { return axes[k] })}})
	}
	for k, name := range []string{"turn about x", "turn about y", "turn about z"} {
		list = append(list, namedMode{name, [][]float64{each(axes[k].Cross)}})
	}
	// What was heard settles the shape, where it shows fewer dimensions than the
	// places before.
	g := rig.Spread(s.prior)
	if s.affine {
		g.Axis = s.axes[0]
		if g.Shape = rig.ShapeLine; len(s.axes) == 2 {
			g.Shape, g.Normal = rig.ShapeFlat, s.axes[0].Cross(s.axes[1])
		}
	}
	switch g.Shape {
	case rig.ShapeLine:
		a := g.Axis
		list = append(list, namedMode{"distances along the line, all in proportion", [][]float64{each(func(q rig.Point) rig.Point { return a.Scale(q.Dot(a)) })}})
		inner := s.inside([]rig.Point{a})
		list = append(list, namedMode{"distances along the line, against each other", inner})
		list = append(list, namedMode{"places across the line", s.outside([]rig.Point{a})})
	case rig.ShapeFlat:
		n := g.Normal
		a := g.Axis
		b := n.Cross(a)
		plane := []rig.Point{a, b}
		list = append(list,
			namedMode{"size in the plane", [][]float64{each(func(q rig.Point) rig.Point { return q.Sub(n.Scale(q.Dot(n))) })}},
			namedMode{"stretch and shear in the plane", [][]float64{
				each(func(q rig.Point) rig.Point { return a.Scale(q.Dot(a)).Sub(b.Scale(q.Dot(b))) }),
				each(func(q rig.Point) rig.Point { return a.Scale(q.Dot(b)).Add(b.Scale(q.Dot(a))) }),
			}},
			namedMode{"places in the plane, against each other", s.inside(plane)},
			namedMode{"places out of the plane, against each other", s.outside(plane)})
	default:
		list = append(list, namedMode{"size", [][]float64{each(func(q rig.Point) rig.Point { return q })}})
		var linear [][]float64
		for i := range 3 {
			for j := range 3 {
				linear = append(linear, each(func(q rig.Point) rig.Point { return axes[i].Scale(q.Dot(axes[j])) }))
			}
		}
		// What is no turn and no change of size of all linear moves.
		taken := orthonormal(append(append([][]float64{}, turns(list)...), list[6].moves...))
		list = append(list, namedMode{"stretch and shear", remaining(linear, taken)})
		list = append(list, namedMode{"places against each other", s.inside(axes)})
	}
	return list
}

// turns are the moves of the three turns of a list of modes.
func turns(list []namedMode) (moves [][]float64) {
	for _, m := range list[3:6] {
		moves = append(moves, m.moves...)
	}
	return moves
}

// inside are the moves of single microphones along the axes that are no linear
// map of the whole and no shift.
func (s *survey) inside(axes []rig.Point) [][]float64 {
	return remaining(s.single(axes), orthonormal(append(s.linear(axes), s.shifts(axes)...)))
}

// outside are the moves of single microphones across the axes that are neither
// shift nor turn.
func (s *survey) outside(axes []rig.Point) [][]float64 {
	var across []rig.Point
	for _, e := range []rig.Point{{X: 1}, {Y: 1}, {Z: 1}} {
		for _, a := range axes {
			e = e.Sub(a.Scale(e.Dot(a)))
		}
		for _, a := range across {
			e = e.Sub(a.Scale(e.Dot(a)))
		}
		if e.Norm() > 1e-6 {
			across = append(across, e.Scale(1/e.Norm()))
		}
	}
	c := centroid(s.p)
	var rigid [][]float64
	for _, o := range across {
		for _, a := range axes { // what a turn makes of small places across
			v := make([]float64, 3*len(s.p))
			for m, p := range s.p {
				w := coordinates(o.Scale(p.Sub(c).Dot(a)))
				copy(v[3*m:], w[:])
			}
			rigid = append(rigid, v)
		}
	}
	return remaining(s.single(across), orthonormal(append(rigid, s.shifts(across)...)))
}

// single are the moves of one microphone each along each of the axes.
func (s *survey) single(axes []rig.Point) (moves [][]float64) {
	for m := range s.p {
		for _, a := range axes {
			v := make([]float64, 3*len(s.p))
			w := coordinates(a)
			copy(v[3*m:], w[:])
			moves = append(moves, v)
		}
	}
	return moves
}

// shifts are the moves of all microphones along each of the axes.
func (s *survey) shifts(axes []rig.Point) (moves [][]float64) {
	for _, a := range axes {
		v := make([]float64, 3*len(s.p))
		w := coordinates(a)
		for m := range s.p {
			copy(v[3*m:], w[:])
		}
		moves = append(moves, v)
	}
	return moves
}

// linear are the linear maps of the rig within the axes.
func (s *survey) linear(axes []rig.Point) (moves [][]float64) {
	c := centroid(s.p)
	for _, a := range axes {
		for _, b := range axes {
			v := make([]float64, 3*len(s.p))
			for m, p := range s.p {
				w := coordinates(a.Scale(p.Sub(c).Dot(b)))
				copy(v[3*m:], w[:])
			}
			moves = append(moves, v)
		}
	}
	return moves
}

// orthonormal returns unit vectors at right angles that span the given ones
// (Gram and Schmidt, twice).
func orthonormal(list [][]float64) [][]float64 { return remaining(list, nil) }

// remaining returns unit vectors at right angles that span what of list lies
// at right angles to taken, whose vectors are so already.
func remaining(list, taken [][]float64) (basis [][]float64) {
	for _, v := range list {
		w := append([]float64(nil), v...)
		size := norm(w)
		for range 2 {
			for _, set := range [][][]float64{taken, basis} {
				for _, b := range set {
					dot := 0.0
					for i := range w {
						dot += w[i] * b[i]
					}
					for i := range w {
						w[i] -= dot * b[i]
					}
				}
			}
		}
		if left := norm(w); size > 0 && left > 1e-6*size {
			for i := range w {
				w[i] /= left
			}
			basis = append(basis, w)
		}
	}
	return basis
}

func norm(v []float64) float64 {
	sum := 0.0
	for _, x := range v {
		sum += x * x
	}
	return math.Sqrt(sum)
}

// without returns a covariance with the moves of basis, unit vectors at right
// angles, taken out.
func without(cov *matrix, basis [][]float64) *matrix {
	n := cov.rows
	keep := newMatrix(n, n)
	for i := range n {
		keep.set(i, i, 1)
	}
	for _, v := range basis {
		for i := range n {
			for j := range n {
				keep.add(i, j, -v[i]*v[j])
			}
		}
	}
	return keep.times(cov).times(keep)
}
