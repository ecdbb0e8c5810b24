package hermitian

import (
	"math"
	"math/cmplx"
)

// maxSweeps bounds the Jacobi sweeps; ten are enough in practice.
const maxSweeps = 40

// Eigen finds the eigenvalues of the Hermitian matrix a, n by n, by cyclic
// Jacobi rotations, with small eigenvalues of definite matrices to nearly full
// relative accuracy. values takes n of them, in no order; column j of vectors,
// n by n, is the unit eigenvector of value j. a is used as scratch.
func Eigen(values []float64, vectors, a []complex128, n int) {
	mustLen("values", len(values), n)
	mustLen("vectors", len(vectors), n*n)
	mustLen("matrix", len(a), n*n)
	clear(vectors)
	for i := range n {
		vectors[i*n+i] = 1
		a[i*n+i] = complex(real(a[i*n+i]), 0)
		for j := range i {
			a[j*n+i] = cmplx.Conj(a[i*n+j])
		}
	}
	for range maxSweeps {
		rotated := false
		for p := 0; p < n-1; p++ {
			for q := p + 1; q < n; q++ {
				rotated = rotate(a, vectors, n, p, q) || rotated
			}
		}
		if !rotated {
			break
		}
	}
	for i := range n {
		values[i] = real(a[i*n+i])
	}
}

// rotate makes a[p][q] zero by a unitary rotation of rows and columns p and q,
// and reports whether there was anything to do.
func rotate(a, vectors []complex128, n, p, q int) bool {
	off := a[p*n+q]
	size := math.Hypot(real(off), imag(off))
	app, aqq := real(a[p*n+p]), real(a[q*n+q])
	// The stopping rule of Demmel & Veselić 1992, relative to both diagonals.
	if size <= 1e-16*math.Sqrt(math.Abs(app*aqq)) || size < math.SmallestNonzeroFloat64*1e16 {
		a[p*n+q], a[q*n+p] = 0, 0
		return false
	}
	phase := off / complex(size, 0)
	theta := (aqq - app) / (2 * size)
	t := 1 / (math.Abs(theta) + math.Sqrt(theta*theta+1))
	if theta < 0 {
		t = -t
	}
	c := 1 / math.Sqrt(t*t+1)
	cc, s := complex(c, 0), complex(t*c, 0)
	// Columns: p' = c·p - s·conj(phase)·q, q' = s·phase·p + c·q.
	sp, sq := s*cmplx.Conj(phase), s*phase
	for k := range n {
		x, y := a[k*n+p], a[k*n+q]
		a[k*n+p], a[k*n+q] = cc*x-sp*y, sq*x+cc*y
		x, y = vectors[k*n+p], vectors[k*n+q]
		vectors[k*n+p], vectors[k*n+q] = cc*x-sp*y, sq*x+cc*y
	}
	for k := range n {
		x, y := a[p*n+k], a[q*n+k]
		a[p*n+k], a[q*n+k] = cc*x-sq*y, sp*x+cc*y
	}
	a[p*n+q], a[q*n+p] = 0, 0
	a[p*n+p] = complex(real(a[p*n+p]), 0)
	a[q*n+q] = complex(real(a[q*n+q]), 0)
	return true
}
