// Package hermitian solves small Hermitian problems: positive definite systems
// and eigenvalues, up to some hundred unknowns.
//
// Matrices are row-major, a[i*n+j], of n by n complex numbers; only the lower
// triangle and the real part of the diagonal of a Hermitian matrix are read.
// Slices given as results must have the right length, else the functions panic:
// that is a programmer's mistake. Trouble with the numbers is an error with the
// number in it.
//
// # Use
//
//	var c hermitian.Cholesky
//	if err := c.Factor(a, n); err != nil { // not definite, or a Condition
//		return err
//	}
//	c.Solve(x, b) // a x = b
//
// # Sources
//
// [Golub & Van Loan 2013] G. H. Golub, C. F. Van Loan, Matrix Computations, 4th
// edition, Johns Hopkins 2013: algorithm 4.2.1 (Cholesky), section 5.2
// (Householder), section 8.5 (Jacobi); section numbers from memory.
package hermitian
