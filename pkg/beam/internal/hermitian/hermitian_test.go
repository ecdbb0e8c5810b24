package hermitian

import (
	"errors"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// random returns an n by k matrix of complex normal numbers.
func random(r *rand.Rand, n, k int) []complex128 {
	a := make([]complex128, n*k)
	for i := range a {
		a[i] = complex(r.NormFloat64(), r.NormFloat64())
	}
	return a
}

// gram returns x·xᴴ + shift·1 for x of n by k.
func gram(x []complex128, n, k int, shift float64) []complex128 {
	a := make([]complex128, n*n)
	for i := range n {
		for j := range n {
			for t := range k {
				a[i*n+j] += x[i*k+t] * cmplx.Conj(x[j*k+t])
			}
		}
		a[i*n+i] += complex(shift, 0)
	}
	return a
}

// twice embeds a Hermitian matrix in a real symmetric one of twice the size,
// [Re -Im; Im Re], whose eigenvalues are those of a, each twice.
func twice(a []complex128, n int) *mat.SymDense {
	s := mat.NewSymDense(2*n, nil)
	for i := range n {
		for j := range n {
			if j <= i {
				s.SetSym(i, j, real(a[i*n+j]))
				s.SetSym(n+i, n+j, real(a[i*n+j]))
			}
			s.SetSym(n+i, j, imag(a[i*n+j]))
		}
	}
	return s
}

func TestSolveAgainstTheSystem(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	var c Cholesky
	for _, n := range []int{1, 2, 3, 7, 16, 5} {
		a := gram(random(r, n, n+3), n, n+3, 0.1)
		b, x := random(r, n, 1), make([]complex128, n)
		if err := c.Factor(a, n); err != nil {
			t.Fatal(err)
		}
		c.Solve(x, b)
		for i := range n {
			sum := -b[i]
			for j := range n {
				sum += a[i*n+j] * x[j]
			}
			if cmplx.Abs(sum) > 1e-11 {
				t.Errorf("n = %d: row %d misses by %.2g", n, i, cmplx.Abs(sum))
			}
		}
		same := append([]complex128(nil), b...)
		c.Solve(same, same)
		for i := range n {
			if same[i] != x[i] {
				t.Errorf("n = %d: in place %v, apart %v", n, same[i], x[i])
			}
		}
	}
}

// Witness: gonum's Cholesky of the real matrix of twice the size.
func TestSolveAgainstGonum(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	const n = 9
	a := gram(random(r, n, 2*n), n, 2*n, 0)
	b, x := random(r, n, 1), make([]complex128, n)
	var c Cholesky
	if err := c.Factor(a, n); err != nil {
		t.Fatal(err)
	}
	c.Solve(x, b)
	var witness mat.Cholesky
	if !witness.Factorize(twice(a, n)) {
		t.Fatal("witness finds it indefinite")
	}
	rhs := mat.NewVecDense(2*n, nil)
	for i := range n {
		rhs.SetVec(i, real(b[i]))
		rhs.SetVec(n+i, imag(b[i]))
	}
	var want mat.VecDense
	if err := witness.SolveVecTo(&want, rhs); err != nil {
		t.Fatal(err)
	}
	for i := range n {
		if w := complex(want.AtVec(i), want.AtVec(n+i)); cmplx.Abs(x[i]-w) > 1e-12*(1+cmplx.Abs(w)) {
			t.Errorf("x[%d] = %v, want %v", i, x[i], w)
		}
	}
}

func TestFactorRefusesIndefinite(t *testing.T) {
	var c Cholesky
	err := c.Factor([]complex128{1, 0, 2i, 1}, 2)
	var bad *NotDefiniteError
	if !errors.As(err, &bad) || bad.Row != 1 || bad.Pivot != -3 {
		t.Errorf("Factor of an indefinite matrix: %v, want pivot 2 of -3", err)
	}
	if err := c.Factor([]complex128{cmplx.NaN()}, 1); !errors.As(err, &bad) {
		t.Errorf("Factor of NaN: %v", err)
	}
}

// The Hilbert matrix of order 10 has the condition number 3.535e13 in the
// 1-norm (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed.,
// section 28.1; from memory), the one of order 5 has 943656.
func TestConditionOfHilbertMatrices(t *testing.T) {
	hilbert := func(n int) []complex128 {
		a := make([]complex128, n*n)
		for i := range n {
			for j := range n {
				a[i*n+j] = complex(1/float64(i+j+1), 0)
			}
		}
		return a
	}
	var c Cholesky
	err := c.Factor(hilbert(10), 10)
	var cond Condition
	if !errors.As(err, &cond) || math.Abs(float64(cond)/3.535e13-1) > 0.01 {
		t.Errorf("Hilbert 10: %v, want condition 3.535e13", err)
	}
	if err := c.Factor(hilbert(5), 5); err != nil {
		t.Errorf("Hilbert 5: %v", err)
	}
	if got := c.condition(hilbert(5)); math.Abs(got/943656-1) > 1e-6 {
		t.Errorf("condition of Hilbert 5: %.1f, want 943656", got)
	}
}

func TestEigenAgainstGonumAndItsDefinition(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	for _, n := range []int{1, 2, 3, 8, 15} {
		a := gram(random(r, n, n), n, n, 0)
		a[0] -= 3 // indefinite
		values, vectors := make([]float64, n), make([]complex128, n*n)
		Eigen(values, vectors, append([]complex128(nil), a...), n)
		for j := range n {
			for k := range n {
				var dot complex128
				for i := range n {
					dot += cmplx.Conj(vectors[i*n+j]) * vectors[i*n+k]
				}
				if want := map[bool]complex128{true: 1}[j == k]; cmplx.Abs(dot-want) > 1e-12 {
					t.Errorf("n = %d: vectors %d and %d have the product %v", n, j, k, dot)
				}
			}
			for i := range n {
				sum := -complex(values[j], 0) * vectors[i*n+j]
				for k := range n {
					sum += a[i*n+k] * vectors[k*n+j]
				}
				if cmplx.Abs(sum) > 1e-11 {
					t.Errorf("n = %d: value %d misses by %.2g", n, j, cmplx.Abs(sum))
				}
			}
		}
		var witness mat.EigenSym
		if !witness.Factorize(twice(a, n), false) {
			t.Fatal("witness fails")
		}
		for _, w := range witness.Values(nil) {
			best := math.Inf(1)
			for _, v := range values {
				best = math.Min(best, math.Abs(v-w))
			}
			if best > 1e-11 {
				t.Errorf("n = %d: gonum's value %g is %g from ours", n, w, best)
			}
		}
	}
}

// Small eigenvalues keep their relative accuracy: a diagonal scaled by eleven
// decades around a well-conditioned core (Demmel & Veselić 1992).
func TestEigenOfGradedMatrix(t *testing.T) {
	scale := []float64{1, 1e-4, 1e-8, 1e-11}
	core := gram(random(rand.New(rand.NewPCG(7, 8)), 4, 12), 4, 12, 1)
	a := make([]complex128, 16)
	for i := range 4 {
		for j := range 4 {
			a[i*4+j] = core[i*4+j] * complex(scale[i]*scale[j], 0)
		}
	}
	values, vectors := make([]float64, 4), make([]complex128, 16)
	Eigen(values, vectors, append([]complex128(nil), a...), 4)
	// The product of the eigenvalues is the determinant, here from the factor.
	var c Cholesky
	_ = c.Factor(a, 4) // near singular by design: the factors are wanted all the same
	want, got := 1.0, 1.0
	for i := range 4 {
		want *= real(c.l[i*5]) * real(c.l[i*5])
		got *= values[i]
	}
	if math.Abs(got/want-1) > 1e-10 {
		t.Errorf("product of the eigenvalues %.12g, determinant %.12g", got, want)
	}
}

func TestEigenOfZeroAndDiagonal(t *testing.T) {
	values, vectors := make([]float64, 3), make([]complex128, 9)
	Eigen(values, vectors, make([]complex128, 9), 3)
	if values[0] != 0 || values[1] != 0 || values[2] != 0 || vectors[4] != 1 {
		t.Errorf("zero matrix: %v, %v", values, vectors)
	}
	Eigen(values, vectors, []complex128{2, 0, 0, 0, -1, 0, 0, 0, 5}, 3)
	if values[0] != 2 || values[1] != -1 || values[2] != 5 {
		t.Errorf("diagonal matrix: %v", values)
	}
}

func TestNullSpaceIsOrthonormalAndOrthogonal(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 10))
	for _, v := range []struct{ n, l int }{{2, 1}, {5, 1}, {8, 3}, {4, 4}, {3, 0}} {
		c := random(r, v.n, v.l)
		m := v.n - v.l
		basis := make([]complex128, v.n*m)
		NullSpace(basis, append([]complex128(nil), c...), v.n, v.l)
		for j := range m {
			for k := range m {
				var dot complex128
				for i := range v.n {
					dot += cmplx.Conj(basis[i*m+j]) * basis[i*m+k]
				}
				if want := map[bool]complex128{true: 1}[j == k]; cmplx.Abs(dot-want) > 1e-13 {
					t.Errorf("%d by %d: basis vectors %d and %d have the product %v", v.n, v.l, j, k, dot)
				}
			}
			for k := range v.l {
				var dot complex128
				for i := range v.n {
					dot += cmplx.Conj(c[i*v.l+k]) * basis[i*m+j]
				}
				if cmplx.Abs(dot) > 1e-13 {
					t.Errorf("%d by %d: basis vector %d leaks %.2g into column %d", v.n, v.l, j, cmplx.Abs(dot), k)
				}
			}
		}
	}
}

func TestNullSpaceOfDependentColumns(t *testing.T) {
	c := []complex128{1, 2, 1i, 2i, 0, 0} // the second column is twice the first
	basis := make([]complex128, 3)
	NullSpace(basis, append([]complex128(nil), c...), 3, 2)
	var dot complex128
	for i := range 3 {
		dot += cmplx.Conj(c[i*2]) * basis[i]
	}
	if cmplx.Abs(dot) > 1e-13 {
		t.Errorf("basis leaks %.2g", cmplx.Abs(dot))
	}
}

func TestWrongLengthsPanic(t *testing.T) {
	for name, call := range map[string]func(){
		"factor": func() { _ = new(Cholesky).Factor(make([]complex128, 3), 2) },
		"eigen":  func() { Eigen(make([]float64, 2), make([]complex128, 4), make([]complex128, 5), 2) },
		"basis":  func() { NullSpace(make([]complex128, 3), make([]complex128, 2), 2, 1) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			call()
		}()
	}
}
