package spectral

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	gdsp "github.com/mjibson/go-dsp/fft"
	"gonum.org/v1/gonum/dsp/fourier"
)

// noise64 is seeded white noise.
func noise64(n int, seed uint64) []float64 {
	rng := rand.New(rand.NewPCG(seed, 77))
	x := make([]float64, n)
	for i := range x {
		x[i] = rng.NormFloat64() * 0.3
	}
	return x
}

func to[T Float](x []float64) []T {
	y := make([]T, len(x))
	for i, v := range x {
		y[i] = T(v)
	}
	return y
}

// errorDB is the largest |got - want| against the largest |want|.
func errorDB[T Float](re, im []T, want []complex128) float64 {
	var err, ref float64
	for k, w := range want {
		err = math.Max(err, cmplx.Abs(complex(float64(re[k]), float64(im[k]))-w))
		ref = math.Max(ref, cmplx.Abs(w))
	}
	return 20 * math.Log10(err/ref+1e-30)
}

// Bounds on the relative error: rounding of float32 is 6e-8 = -144.5 dB, of
// float64 1.1e-16 = -319 dB; log2(n) steps add less than 20 dB to each.
const (
	bound32 = -125.0
	bound64 = -295.0
)

// directDFT is the definition, with the phase reduced in whole numbers before
// it becomes a float, and a compensated sum (Kahan 1965): a plain one of 1024
// terms would be no more accurate than the transform.
func directDFT(xr, xi []float64) []complex128 {
	n := len(xr)
	out := make([]complex128, n)
	for k := range out {
		var sum, lost complex128
		for i := range xr {
			s, c := math.Sincos(-2 * math.Pi * float64(k*i%n) / float64(n))
			term := complex(xr[i], xi[i])*complex(c, s) - lost
			next := sum + term
			lost = next - sum - term
			sum = next
		}
		out[k] = sum
	}
	return out
}

func testForward[T Float](t *testing.T, n int, x []float64, want []complex128, bound float64) {
	t.Helper()
	f, err := NewFFT[T](n)
	if err != nil {
		t.Fatal(err)
	}
	in := to[T](x)
	re, im := make([]T, f.Bins()), make([]T, f.Bins())
	f.Forward(re, im, in)
	if e := errorDB(re, im, want[:f.Bins()]); !(e < bound) {
		t.Errorf("n = %d, %T: forward error %.1f dB, want below %.0f", n, in[0], e, bound)
	}
	if im[0] != 0 || im[n/2] != 0 {
		t.Errorf("n = %d: bins 0 and n/2 have imaginary parts %v and %v", n, im[0], im[n/2])
	}
	back := make([]T, n)
	f.Inverse(back, re, im)
	for i := range back {
		if d := math.Abs(float64(back[i]) - x[i]); d > 4*math.Pow(10, bound/20) {
			t.Fatalf("n = %d, %T: value %d comes back as %v, want %v", n, in[0], i, back[i], x[i])
		}
		if in[i] != T(x[i]) {
			t.Fatalf("n = %d: value %d of the signal was changed", n, i)
		}
	}
}

func TestForwardIsTheDefinition(t *testing.T) {
	for n := MinSize; n <= 1024; n *= 2 {
		x := noise64(n, uint64(n))
		want := directDFT(x, make([]float64, n))
		testForward[float64](t, n, x, want, bound64)
		testForward[float32](t, n, x, want, bound32)
	}
}

func TestForwardAgreesWithTwoOtherTransforms(t *testing.T) {
	top := 1 << 16
	if testing.Short() {
		top = 1 << 12
	}
	for n := MinSize; n <= top; n *= 2 {
		x := noise64(n, uint64(n)+1)
		want := fourier.NewFFT(n).Coefficients(nil, x)
		testForward[float64](t, n, x, want, bound64)
		testForward[float32](t, n, x, want, bound32)
		if n <= 1<<13 {
			testForward[float64](t, n, x, gdsp.FFTReal(x), bound64)
		}
	}
}

func TestLargestSizeIsRight(t *testing.T) {
	if testing.Short() {
		t.Skip("a transform of 2^20 values")
	}
	x := noise64(MaxSize, 5)
	testForward[float64](t, MaxSize, x, fourier.NewFFT(MaxSize).Coefficients(nil, x), bound64)
}

func TestComplexIsTheDefinitionInPlaceAndOut(t *testing.T) {
	for n := 2; n <= 512; n *= 2 {
		xr, xi := noise64(n, 3), noise64(n, 4)
		want := directDFT(xr, xi)
		c, err := NewComplex[float64](n)
		if err != nil {
			t.Fatal(err)
		}
		re, im := make([]float64, n), make([]float64, n)
		c.Forward(re, im, xr, xi)
		if e := errorDB(re, im, want); !(e < bound64) {
			t.Errorf("n = %d: error %.1f dB", n, e)
		}
		ir, ii := append([]float64(nil), xr...), append([]float64(nil), xi...)
		c.Forward(ir, ii, ir, ii)
		for k := range ir {
			if ir[k] != re[k] || ii[k] != im[k] {
				t.Fatalf("n = %d: bin %d in place is %v%+vj, else %v%+vj", n, k, ir[k], ii[k], re[k], im[k])
			}
		}
		c.Inverse(ir, ii, ir, ii)
		for k := range ir {
			if math.Hypot(ir[k]-xr[k], ii[k]-xi[k]) > 1e-14 {
				t.Fatalf("n = %d: value %d comes back as %v%+vj", n, k, ir[k], ii[k])
			}
		}
	}
}

func TestCloneSharesNoScratch(t *testing.T) {
	const n = 256
	a, _ := NewFFT[float32](n)
	b := a.Clone()
	x := to[float32](noise64(n, 9))
	want, wanti := make([]float32, n/2+1), make([]float32, n/2+1)
	a.Forward(want, wanti, x)
	done := make(chan bool)
	for _, p := range []*FFT[float32]{a, b} {
		go func() {
			re, im, y := make([]float32, n/2+1), make([]float32, n/2+1), make([]float32, n)
			ok := true
			for range 200 {
				p.Forward(re, im, x)
				for k := range re {
					ok = ok && re[k] == want[k] && im[k] == wanti[k]
				}
				p.Inverse(y, re, im)
			}
			done <- ok
		}()
	}
	for range 2 {
		if !<-done {
			t.Error("two plans in two goroutines disturb each other")
		}
	}
}

func TestSizesThatAreNotPowersOfTwoAreRefused(t *testing.T) {
	for _, n := range []int{-4, 0, 1, 2, 3, 6, 100, MaxSize + 1, 2 * MaxSize} {
		if _, err := NewFFT[float32](n); err == nil {
			t.Errorf("NewFFT(%d) gave a plan", n)
		}
	}
	for _, n := range []int{-2, 0, 1, 3, 2 * MaxSize} {
		if _, err := NewComplex[float32](n); err == nil {
			t.Errorf("NewComplex(%d) gave a plan", n)
		}
	}
}

func TestTransformsDoNotAllocate(t *testing.T) {
	const n = 512
	f, _ := NewFFT[float32](n)
	re, im, x := make([]float32, n/2+1), make([]float32, n/2+1), make([]float32, n)
	if a := testing.AllocsPerRun(10, func() { f.Forward(re, im, x); f.Inverse(x, re, im) }); a != 0 {
		t.Errorf("%g allocations a transform, want 0", a)
	}
}

func BenchmarkFFT(b *testing.B) {
	for _, n := range []int{512, 2048, 4096, 8192, 32768} {
		b.Run(fmt.Sprintf("float32/%d", n), func(b *testing.B) { benchReal[float32](b, n) })
		b.Run(fmt.Sprintf("float64/%d", n), func(b *testing.B) { benchReal[float64](b, n) })
	}
}

func benchReal[T Float](b *testing.B, n int) {
	f, _ := NewFFT[T](n)
	re, im := pair[T](n/2 + 1)
	x := to[T](noise64(n, 1))
	b.SetBytes(int64(n))
	for b.Loop() {
		f.Forward(re, im, x)
	}
}

func BenchmarkComplex(b *testing.B) {
	for _, n := range []int{1024, 2048, 4096} {
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			c, _ := NewComplex[float32](n)
			re, im := pair[float32](n)
			xr, xi := pair[float32](n)
			b.SetBytes(int64(n))
			for b.Loop() {
				c.Forward(re, im, xr, xi)
			}
		})
	}
}
