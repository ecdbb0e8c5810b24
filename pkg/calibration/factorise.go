package calibration

import (
	"math"

	"alidade/pkg/rig"
)

// factorise returns places from the matrix of arrivals alone, turned and
// shifted onto the places before [Thrun 2005]: centred arrivals are
// -P·U/c with places P and unit vectors U; the three largest singular vectors
// give P but for a linear map, which is the one that makes the columns of U
// unit vectors. It reports false where the arrivals do not settle the map.
func (s *survey) factorise() ([]rig.Point, bool) {
	mics := len(s.prior)
	var events []int
	for e := range s.a {
		if len(s.heard(e)) == mics {
			events = append(events, e)
		}
	}
	if len(events) < 6 {
		return nil, false
	}
	d := newMatrix(mics, len(events))
	for j, e := range events {
		mean := 0.0
		for _, v := range s.a[e].Late {
			mean += v / float64(mics)
		}
		for m, v := range s.a[e].Late {
			d.set(m, j, -s.speed*(v-mean)) // metres
		}
	}
	values, vectors := d.times(d.transposed()).eigen()
	if !(values[2] > 0) {
		return nil, false
	}
	left := newMatrix(mics, 3)
	for m := range mics {
		for k := range 3 {
			left.set(m, k, vectors.at(m, k)*math.Sqrt(values[k]))
		}
	}
	// d = left·right; the rows of right are scaled like unit vectors.
	right := newMatrix(3, len(events))
	for k := range 3 {
		for j := range events {
			sum := 0.0
			for m := range mics {
				sum += vectors.at(m, k) * d.at(m, j)
			}
			right.set(k, j, sum/math.Sqrt(values[k]))
		}
	}
	// right_j·Q·right_j = 1 for every sound: linear in the symmetric Q = AᵀA.
	rows, ones := newMatrix(len(events), 6), make([]float64, len(events))
	for j := range events {
		x, y, z := right.at(0, j), right.at(1, j), right.at(2, j)
		for k, v := range []float64{x * x, y * y, z * z, 2 * x * y, 2 * x * z, 2 * y * z} {
			rows.set(j, k, v)
		}
		ones[j] = 1
	}
	q, ok := rows.solveLeast(ones)
	if !ok {
		return nil, false
	}
	sym := newMatrix(3, 3)
	for k, at := range [][2]int{{0, 0}, {1, 1}, {2, 2}, {0, 1}, {0, 2}, {1, 2}} {
		sym.set(at[0], at[1], q[k])
		sym.set(at[1], at[0], q[k])
	}
	l, ok := sym.cholesky() // Q = L·Lᵀ, A = Lᵀ: U = A·right, P = left·A⁻¹
	if !ok {
		return nil, false
	}
	inverse, ok := sym.inverse()
	if !ok {
		return nil, false
	}
	places := left.times(inverse).times(l) // A⁻¹ = Q⁻¹·L
	return onto(places, s.prior), true
}

// onto turns, mirrors if need be, and shifts the rows of places, centred, onto
// the points of to: orthogonal Procrustes [Schönemann 1966].
func onto(places *matrix, to []rig.Point) []rig.Point {
	c := centroid(to)
	target := newMatrix(len(to), 3)
	for m, p := range to {
		v := coordinates(p.Sub(c))
		for i := range 3 {
			target.set(m, i, v[i])
		}
	}
	h := places.transposed().times(target)
	// The polar factor of h, h·(hᵀh)^(-1/2), a little lifted where h is flat.
	values, vectors := h.transposed().times(h).eigen()
	root := newMatrix(3, 3)
	for k, v := range values {
		f := 1 / math.Sqrt(math.Max(v, 1e-12*values[0]))
		for i := range 3 {
			for j := range 3 {
				root.add(i, j, f*vectors.at(i, k)*vectors.at(j, k))
			}
		}
	}
	turned := places.times(h.times(root))
	var out []rig.Point
	for m := range to {
		out = append(out, c.Add(rig.Point{X: turned.at(m, 0), Y: turned.at(m, 1), Z: turned.at(m, 2)}))
	}
	return out
}
