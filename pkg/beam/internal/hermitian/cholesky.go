package hermitian

import (
	"fmt"
	"math"
	"math/cmplx"
)

// MaxCondition is the condition number, in the 1-norm, from which on Factor
// returns it as a Condition.
const MaxCondition = 1e12

// Condition is the condition number of a matrix that is too close to singular
// for its solutions to be trusted. The factors exist all the same.
type Condition float64

// Error implements error.
func (c Condition) Error() string {
	return fmt.Sprintf("matrix is near singular, condition %.2g above %.0g", float64(c), float64(MaxCondition))
}

// NotDefiniteError says that a matrix is not positive definite.
type NotDefiniteError struct {
	Row   int     // 0-based row at which it shows
	Pivot float64 // what should have been positive
}

// Error implements error.
func (e *NotDefiniteError) Error() string {
	return fmt.Sprintf("matrix is not positive definite: pivot %d is %.3g", e.Row+1, e.Pivot)
}

// Cholesky is the factor L of a positive definite matrix L·Lᴴ. The zero value
// is ready for Factor and takes the size it needs.
type Cholesky struct {
	n int
	l []complex128
}

// Factor factors a, n by n. The error is a *NotDefiniteError, after which the
// factor is not usable, or a Condition, after which it is. a is not changed.
func (c *Cholesky) Factor(a []complex128, n int) error {
	mustLen("matrix", len(a), n*n)
	if cap(c.l) < n*n {
		c.l = make([]complex128, n*n)
	}
	c.n, c.l = n, c.l[:n*n]
	for i := range n {
		for j := range i + 1 {
			sum := a[i*n+j]
			for k := range j {
				sum -= c.l[i*n+k] * cmplx.Conj(c.l[j*n+k])
			}
			if i != j {
				c.l[i*n+j] = sum / c.l[j*n+j]
				continue
			}
			pivot := real(sum)
			if !(pivot > 0) || math.IsInf(pivot, 1) {
				c.n = 0
				return &NotDefiniteError{Row: i, Pivot: pivot}
			}
			c.l[i*n+i] = complex(math.Sqrt(pivot), 0)
		}
	}
	if cond := c.condition(a); !(cond <= MaxCondition) {
		return Condition(cond)
	}
	return nil
}

// condition returns the condition number in the 1-norm from the explicit
// inverse.
func (c *Cholesky) condition(a []complex128) float64 {
	n := c.n
	unit, column := make([]complex128, n), make([]complex128, n)
	var normA, normInv float64
	for j := range n {
		clear(unit)
		unit[j] = 1
		c.Solve(column, unit)
		var sumA, sumInv float64
		for i := range n {
			sumInv += cmplx.Abs(column[i])
			if i >= j {
				sumA += cmplx.Abs(a[i*n+j])
			} else {
				sumA += cmplx.Abs(a[j*n+i])
			}
		}
		normA, normInv = math.Max(normA, sumA), math.Max(normInv, sumInv)
	}
	return normA * normInv
}

// Solve sets dst to the solution x of a·x = b. dst and b have n elements and
// may be the same slice.
func (c *Cholesky) Solve(dst, b []complex128) {
	n := c.n
	mustLen("solution", len(dst), n)
	mustLen("right side", len(b), n)
	for i := range n {
		sum := b[i]
		for k := range i {
			sum -= c.l[i*n+k] * dst[k]
		}
		dst[i] = sum / c.l[i*n+i]
	}
	for i := n - 1; i >= 0; i-- {
		sum := dst[i]
		for k := i + 1; k < n; k++ {
			sum -= cmplx.Conj(c.l[k*n+i]) * dst[k]
		}
		dst[i] = sum / c.l[i*n+i]
	}
}

func mustLen(what string, got, want int) {
	if got != want {
		panic(fmt.Sprintf("hermitian: %s of %d elements, want %d", what, got, want))
	}
}
