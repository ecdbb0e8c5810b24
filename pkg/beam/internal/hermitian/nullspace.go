package hermitian

import (
	"math"
	"math/cmplx"
)

// NullSpace sets basis to an orthonormal basis of the vectors that are
// orthogonal to the columns of c, by Householder reflections. c is n by l,
// c[i*l+j], l <= n, and is used as scratch; basis is n by n-l,
// basis[i*(n-l)+j]. Columns that depend on each other give a basis that is
// orthogonal to them all, but of a space that is too small.
func NullSpace(basis, c []complex128, n, l int) {
	mustLen("columns", len(c), n*l)
	mustLen("basis", len(basis), n*(n-l))
	reflectors := make([]complex128, l*n) // unit vectors, reflector j in j*n..
	for j := range l {
		v := reflectors[j*n : (j+1)*n]
		var norm float64
		for i := j; i < n; i++ {
			v[i] = c[i*l+j]
			norm = math.Hypot(norm, cmplx.Abs(v[i]))
		}
		if norm == 0 {
			continue
		}
		phase := complex(1, 0)
		if v[j] != 0 {
			phase = v[j] / complex(cmplx.Abs(v[j]), 0)
		}
		v[j] += phase * complex(norm, 0)
		size := 0.0
		for i := j; i < n; i++ {
			size = math.Hypot(size, cmplx.Abs(v[i]))
		}
		for i := j; i < n; i++ {
			v[i] /= complex(size, 0)
		}
		for k := j; k < l; k++ {
			reflect(c, v, j, n, l, k)
		}
	}
	m := n - l
	clear(basis)
	for j := range m {
		basis[(l+j)*m+j] = 1
	}
	for r := l - 1; r >= 0; r-- {
		for j := range m {
			reflect(basis, reflectors[r*n:(r+1)*n], r, n, m, j)
		}
	}
}

// reflect applies 1 - 2vvᴴ to column col of a, rows first..n-1, row length
// stride.
func reflect(a, v []complex128, first, n, stride, col int) {
	var dot complex128
	for i := first; i < n; i++ {
		dot += cmplx.Conj(v[i]) * a[i*stride+col]
	}
	dot *= 2
	for i := first; i < n; i++ {
		a[i*stride+col] -= v[i] * dot
	}
}
