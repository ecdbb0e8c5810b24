package calibration

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"alidade/pkg/rig"
)

// Against gonum 0.16 (mat.EigenSym, mat.Cholesky), random matrices of all sizes
// to 12.
func TestMatricesAgainstALibrary(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 2))
	for n := 1; n <= 12; n++ {
		a := newMatrix(n, n)
		for i := range n {
			for j := range i + 1 {
				x := rng.NormFloat64()
				a.set(i, j, x)
				a.set(j, i, x)
			}
		}
		values, vectors := a.eigen()
		var want mat.EigenSym
		if !want.Factorize(mat.NewSymDense(n, a.v), false) {
			t.Fatal("no eigenvalues")
		}
		w := want.Values(nil)
		for i, v := range values {
			if math.Abs(v-w[n-1-i]) > 1e-12 {
				t.Errorf("n=%d: eigenvalue %d is %g, want %g", n, i, v, w[n-1-i])
			}
			for r := range n {
				sum := -v * vectors.at(r, i)
				for k := range n {
					sum += a.at(r, k) * vectors.at(k, i)
				}
				if math.Abs(sum) > 1e-12 {
					t.Errorf("n=%d: eigenvector %d is off by %g", n, i, sum)
				}
			}
		}
		spd := a.times(a.transposed())
		for i := range n {
			spd.add(i, i, 1)
		}
		inv, ok := spd.inverse()
		if !ok {
			t.Fatal("not positive definite")
		}
		for i, x := range inv.times(spd).v {
			want := 0.0
			if i/n == i%n {
				want = 1
			}
			if math.Abs(x-want) > 1e-11 {
				t.Errorf("n=%d: inverse times matrix has %g at %d, want %g", n, x, i, want)
			}
		}
		spd.set(0, 0, -1)
		if _, ok := spd.inverse(); ok {
			t.Errorf("n=%d: an indefinite matrix has an inverse by Cholesky", n)
		}
	}
}

// Against gonum's beta distribution.
func TestBetaTailAgainstALibrary(t *testing.T) {
	for _, a := range []float64{0.5, 1, 1.5} {
		for _, b := range []float64{0.5, 1, 2.5, 6, 30} {
			for _, x := range []float64{0.01, 0.3, 0.8, 0.96, 0.999} {
				want := 1 - distuv.Beta{Alpha: a, Beta: b}.CDF(x)
				if got := betaTail(x, a, b); math.Abs(got-want) > 1e-5 {
					t.Errorf("betaTail(%g, %g, %g) = %g, want %g", x, a, b, got, want)
				}
			}
		}
	}
}

// A plane wave is its own best fit; on a line and a plane only its part along
// them is measured.
func TestSlownessOfAPlaneWave(t *testing.T) {
	u := rig.Degrees(40, 25).Unit().Scale(1 / 343.2)
	for dims, at := range map[int][]rig.Point{3: solid8(0.1), 2: rig.Ring(6, 0.05), 1: rig.Line(5, 0.04)} {
		var d []float64
		var all []int
		for m, p := range at {
			d = append(d, -p.Dot(u)+1e-3)
			all = append(all, m)
		}
		s := fitSlowness(at, d, all)
		want := u
		if dims < 3 {
			want.Z = 0
		}
		if dims < 2 {
			want.Y = 0
		}
		if s.Dims != dims || s.K.Distance(want) > 1e-9 || s.Residual > 1e-12 || s.Share < 1-1e-9 {
			t.Errorf("%d dimensions: %+v, want slowness %v", dims, s, want)
		}
	}
}
