package calibration

import "math"

// matrix is a dense matrix of float64, row after row.
type matrix struct {
	rows, cols int
	v          []float64
}

func newMatrix(rows, cols int) *matrix {
	return &matrix{rows: rows, cols: cols, v: make([]float64, rows*cols)}
}

func (a *matrix) at(i, j int) float64     { return a.v[i*a.cols+j] }
func (a *matrix) set(i, j int, x float64) { a.v[i*a.cols+j] = x }
func (a *matrix) add(i, j int, x float64) { a.v[i*a.cols+j] += x }

// clone returns a copy.
func (a *matrix) clone() *matrix {
	return &matrix{rows: a.rows, cols: a.cols, v: append([]float64(nil), a.v...)}
}

// times returns a·b.
func (a *matrix) times(b *matrix) *matrix {
	out := newMatrix(a.rows, b.cols)
	for i := range a.rows {
		to := out.v[i*b.cols : (i+1)*b.cols]
		for k := range a.cols {
			if f := a.at(i, k); f != 0 {
				for j, x := range b.v[k*b.cols : (k+1)*b.cols] {
					to[j] += f * x
				}
			}
		}
	}
	return out
}

// transposed returns aᵀ.
func (a *matrix) transposed() *matrix {
	out := newMatrix(a.cols, a.rows)
	for i := range a.rows {
		for j := range a.cols {
			out.set(j, i, a.at(i, j))
		}
	}
	return out
}

// eigen returns the eigenvalues of the symmetric matrix a, largest first, and
// the unit eigenvectors as the columns of a matrix, by cyclic Jacobi rotations
// [Golub & Van Loan 2013, section 8.5].
func (a *matrix) eigen() (values []float64, vectors *matrix) {
	n := a.rows
	m, v := a.clone(), newMatrix(n, n)
	for i := range n {
		v.set(i, i, 1)
	}
	for range 60 {
		off, diag := 0.0, 0.0
		for p := range n {
			diag += m.at(p, p) * m.at(p, p)
			for q := p + 1; q < n; q++ {
				off += m.at(p, q) * m.at(p, q)
			}
		}
		if off <= 1e-28*diag {
			break
		}
		for p := range n {
			for q := p + 1; q < n; q++ {
				x := m.at(p, q)
				if x == 0 {
					continue
				}
				theta := (m.at(q, q) - m.at(p, p)) / (2 * x)
				t := 1 / (math.Abs(theta) + math.Hypot(theta, 1))
				if theta < 0 {
					t = -t
				}
				c := 1 / math.Hypot(t, 1)
				s := t * c
				for k := range n {
					kp, kq := m.at(k, p), m.at(k, q)
					m.set(k, p, c*kp-s*kq)
					m.set(k, q, s*kp+c*kq)
				}
				for k := range n {
					pk, qk := m.at(p, k), m.at(q, k)
					m.set(p, k, c*pk-s*qk)
					m.set(q, k, s*pk+c*qk)
				}
				for k := range n {
					kp, kq := v.at(k, p), v.at(k, q)
					v.set(k, p, c*kp-s*kq)
					v.set(k, q, s*kp+c*kq)
				}
			}
		}
	}
	order := make([]int, n)
	for i := range order {
		order[i] = i
	}
	for i := 1; i < n; i++ { // few or sorted already: insertion keeps ties in order
		for j := i; j > 0 && m.at(order[j], order[j]) > m.at(order[j-1], order[j-1]); j-- {
			order[j], order[j-1] = order[j-1], order[j]
		}
	}
	vectors = newMatrix(n, n)
	for j, from := range order {
		values = append(values, m.at(from, from))
		for i := range n {
			vectors.set(i, j, v.at(i, from))
		}
	}
	return values, vectors
}

// cholesky returns the lower triangle L with a = L·Lᵀ, and false where a is not
// positive definite to a reciprocal condition of about 1e-14.
func (a *matrix) cholesky() (*matrix, bool) {
	n := a.rows
	l := newMatrix(n, n)
	for j := range n {
		sum := a.at(j, j)
		lj := l.v[j*n : j*n+j]
		for _, x := range lj {
			sum -= x * x
		}
		if !(sum > 1e-14*a.at(j, j)) {
			return nil, false
		}
		d := math.Sqrt(sum)
		l.set(j, j, d)
		for i := j + 1; i < n; i++ {
			sum := a.at(i, j)
			for k, x := range l.v[i*n : i*n+j] {
				sum -= x * lj[k]
			}
			l.set(i, j, sum/d)
		}
	}
	return l, true
}

// solveLower returns x with L·Lᵀ·x = b for a lower triangle L.
func (l *matrix) solveLower(b []float64) []float64 {
	n := l.rows
	x := append([]float64(nil), b...)
	for i := range n {
		for k := range i {
			x[i] -= l.at(i, k) * x[k]
		}
		x[i] /= l.at(i, i)
	}
	for i := n - 1; i >= 0; i-- {
		for k := i + 1; k < n; k++ {
			x[i] -= l.at(k, i) * x[k]
		}
		x[i] /= l.at(i, i)
	}
	return x
}

// inverse returns the inverse of the symmetric positive definite matrix a, and
// false where it is not.
func (a *matrix) inverse() (*matrix, bool) {
	l, ok := a.cholesky()
	if !ok {
		return nil, false
	}
	n := a.rows
	out := newMatrix(n, n)
	unit := make([]float64, n)
	for j := range n {
		clear(unit)
		unit[j] = 1
		for i, x := range l.solveLower(unit) {
			out.set(i, j, x)
		}
	}
	return out, true
}

// solveLeast returns the x of least squares of a·x = b, a of full column rank,
// by the normal equations with columns scaled, and false where a column depends
// on the others.
func (a *matrix) solveLeast(b []float64) ([]float64, bool) {
	scale := make([]float64, a.cols)
	for j := range a.cols {
		for i := range a.rows {
			scale[j] += a.at(i, j) * a.at(i, j)
		}
		if scale[j] == 0 {
			return nil, false
		}
		scale[j] = 1 / math.Sqrt(scale[j])
	}
	normal, rhs := newMatrix(a.cols, a.cols), make([]float64, a.cols)
	for i := range a.rows {
		for j := range a.cols {
			f := a.at(i, j) * scale[j]
			rhs[j] += f * b[i]
			for k := range a.cols {
				normal.add(j, k, f*a.at(i, k)*scale[k])
			}
		}
	}
	l, ok := normal.cholesky()
	if !ok {
		return nil, false
	}
	x := l.solveLower(rhs)
	for j := range x {
		x[j] *= scale[j]
	}
	return x, true
}
