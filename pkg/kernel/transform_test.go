package kernel

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// steps are the steps of the transform as functions of four slices.
func steps[T Float](n int) map[string]func(yr, yi, xr, xi []T) {
	list := map[string]func(yr, yi, xr, xi []T){}
	if n%4 == 0 {
		tw := NewTwiddles[T](n, 1)
		list["first"] = func(yr, yi, xr, xi []T) { FirstStep(yr, yi, xr, xi, tw) }
		list["first real"] = func(yr, yi, xr, xi []T) {
			x := make([]T, 2*n)
			for i := range xr {
				x[2*i], x[2*i+1] = xr[i], xi[i]
			}
			FirstStepReal(yr, yi, x, tw)
		}
		list["last 4"] = LastStep4[T]
	}
	for _, s := range []int{4, 16, 64} {
		if n%(4*s) == 0 {
			tw := NewTwiddles[T](n/s, s)
			list[fmt.Sprintf("middle %d", s)] = func(yr, yi, xr, xi []T) { Step(yr, yi, xr, xi, tw) }
		}
	}
	if n%8 == 0 {
		list["last 8"] = LastStep8[T]
	}
	if n%2 == 0 {
		list["last 2"] = LastStep2[T]
	}
	return list
}

// under runs f with the set of that name.
func under(t testing.TB, name string, f func()) {
	t.Helper()
	if err := Use(name); err != nil {
		t.Fatal(err)
	}
	f()
	if err := Use(""); err != nil {
		t.Fatal(err)
	}
}

// bestSet skips where there is but the plain set.
func bestSet(t testing.TB) string {
	if Name() == Plain {
		t.Skip("this processor has no vector set")
	}
	return Name()
}

// Each step under the vector set against the plain one, at any alignment:
// the sums have at most eight terms, so that the sets differ by some roundings
// of 6e-8 of a value of about 1; -120 dB is asked for.
func TestStepsOfBothSetsAgree(t *testing.T) {
	best := bestSet(t)
	r := rand.New(rand.NewPCG(5, 1))
	for _, n := range []int{2, 4, 8, 16, 24, 32, 40, 64, 96, 128, 192, 256, 512, 1024, 4096} {
		for name, step := range steps[float32](n) {
			xr, okXR := guarded(r, n)
			xi, okXI := guarded(r, n)
			yr, okYR := guarded(r, n)
			yi, okYI := guarded(r, n)
			wr, wi := make([]float32, n), make([]float32, n)
			under(t, Plain, func() { step(wr, wi, xr, xi) })
			under(t, best, func() { step(yr, yi, xr, xi) })
			if !okXR() || !okXI() || !okYR() || !okYI() {
				t.Fatalf("%s step of %d: written outside", name, n)
			}
			if e := apart(yr, yi, wr, wi); e > -120 {
				t.Errorf("%s step of %d: sets differ by %.1f dB", name, n, e)
			}
		}
	}
}

// The same in double precision, to -280 dB.
func TestStepsOfBothSetsAgreeInDoublePrecision(t *testing.T) {
	best := bestSet(t)
	r := rand.New(rand.NewPCG(15, 1))
	for _, n := range []int{2, 4, 8, 16, 24, 32, 64, 96, 128, 256, 512, 1024} {
		for name, step := range steps[float64](n) {
			var v [4][]float64
			var ok [4]func() bool
			for k := range v {
				v[k], ok[k] = guarded64(r, n)
			}
			wr, wi := make([]float64, n), make([]float64, n)
			under(t, Plain, func() { step(wr, wi, v[2], v[3]) })
			under(t, best, func() { step(v[0], v[1], v[2], v[3]) })
			for k := range ok {
				if !ok[k]() {
					t.Fatalf("%s step of %d: written outside slice %d", name, n, k)
				}
			}
			for k := range wr {
				if math.Hypot(v[0][k]-wr[k], v[1][k]-wi[k]) > 1e-14 {
					t.Fatalf("%s step of %d: value %d is %g%+gj, plain %g%+gj", name, n, k, v[0][k], v[1][k], wr[k], wi[k])
				}
			}
		}
	}
	for _, h := range []int{2, 4, 10, 12, 16, 18, 32, 34, 64, 130} {
		cos, sin := make([]float64, h/2+1), make([]float64, h/2+1)
		for k := range cos {
			sin[k], cos[k] = math.Sincos(math.Pi * float64(k) / float64(h))
		}
		re, okR := guarded64(r, h+1)
		im, okI := guarded64(r, h+1)
		wr, wi := append([]float64(nil), re...), append([]float64(nil), im...)
		zr, okZR := guarded64(r, h)
		zi, okZI := guarded64(r, h)
		vr, vi := make([]float64, h), make([]float64, h)
		x, okX := guarded64(r, 2*h)
		under(t, Plain, func() { JoinHalves(vr, vi, re, im, cos, sin); SplitHalves(wr, wi, cos, sin) })
		under(t, best, func() {
			JoinHalves(zr, zi, re, im, cos, sin)
			SplitHalves(re, im, cos, sin)
			Alternate(x, zr, zi, 0.5)
		})
		if !okR() || !okI() || !okZR() || !okZI() || !okX() {
			t.Fatalf("halves of %d: written outside", h)
		}
		for k := range wr {
			if math.Hypot(re[k]-wr[k], im[k]-wi[k]) > 1e-14 {
				t.Fatalf("split of %d: bin %d is %g%+gj, plain %g%+gj", h, k, re[k], im[k], wr[k], wi[k])
			}
		}
		for k := range vr {
			if math.Hypot(zr[k]-vr[k], zi[k]-vi[k]) > 1e-14 || x[2*k] != zr[k]/2 || x[2*k+1] != zi[k]/2 {
				t.Fatalf("join of %d: value %d is %g%+gj, plain %g%+gj", h, k, zr[k], zi[k], vr[k], vi[k])
			}
		}
	}
}

// apart is the largest difference of complex values against their rms, in dB.
func apart(ar, ai, br, bi []float32) float64 {
	worst, power := 0.0, 0.0
	for k := range ar {
		worst = math.Max(worst, math.Hypot(float64(ar[k])-float64(br[k]), float64(ai[k])-float64(bi[k])))
		power += float64(br[k])*float64(br[k]) + float64(bi[k])*float64(bi[k])
	}
	return 20 * math.Log10(worst/math.Sqrt(power/float64(len(ar)))+1e-30)
}

// The plain steps in float32 against the same in float64, which the transforms
// of package spectral hold against the definition.
func TestPlainStepsAreThoseOfDoublePrecision(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 1))
	for _, n := range []int{8, 64, 128, 512} {
		wide := steps[float64](n)
		for name, step := range steps[float32](n) {
			var f [4][]float32
			var d [4][]float64
			for k := range f {
				f[k], d[k] = make([]float32, n), make([]float64, n)
				for i := range f[k] {
					f[k][i] = float32(r.NormFloat64())
					d[k][i] = float64(f[k][i])
				}
			}
			under(t, Plain, func() { step(f[0], f[1], f[2], f[3]) })
			wide[name](d[0], d[1], d[2], d[3])
			wr, wi := make([]float32, n), make([]float32, n)
			for i := range wr {
				wr[i], wi[i] = float32(d[0][i]), float32(d[1][i])
			}
			if e := apart(f[0], f[1], wr, wi); e > -120 {
				t.Errorf("%s step of %d: %.1f dB off double precision", name, n, e)
			}
		}
	}
}

// A value that is not a number reaches the same places under both sets.
func TestStepsCarryWhatIsNotANumberToTheSamePlaces(t *testing.T) {
	best := bestSet(t)
	r := rand.New(rand.NewPCG(7, 1))
	const n = 128
	for name, step := range steps[float32](n) {
		for _, bad := range []float32{float32(math.NaN()), float32(math.Inf(-1))} {
			xr, _ := guarded(r, n)
			xi, _ := guarded(r, n)
			xr[r.IntN(n)] = bad
			wr, wi, yr, yi := make([]float32, n), make([]float32, n), make([]float32, n), make([]float32, n)
			under(t, Plain, func() { step(wr, wi, xr, xi) })
			under(t, best, func() { step(yr, yi, xr, xi) })
			for k := range wr {
				// Whether it is infinite or no number depends on the order of sums.
				if (wr[k]-wr[k] == 0) != (yr[k]-yr[k] == 0) || (wi[k]-wi[k] == 0) != (yi[k]-yi[k] == 0) {
					t.Fatalf("%s step, %g: value %d is %g%+gj, plain %g%+gj", name, bad, k, yr[k], yi[k], wr[k], wi[k])
				}
			}
		}
	}
}

func TestHalvesOfBothSetsAgree(t *testing.T) {
	best := bestSet(t)
	r := rand.New(rand.NewPCG(8, 1))
	for _, h := range []int{2, 4, 14, 16, 18, 20, 32, 34, 36, 64, 130, 1024} {
		cos, sin := make([]float32, h/2+1), make([]float32, h/2+1)
		for k := range cos {
			s, c := math.Sincos(math.Pi * float64(k) / float64(h))
			cos[k], sin[k] = float32(c), float32(s)
		}
		re, okR := guarded(r, h+1)
		im, okI := guarded(r, h+1)
		wr, wi := append([]float32(nil), re...), append([]float32(nil), im...)
		zr, okZR := guarded(r, h)
		zi, okZI := guarded(r, h)
		vr, vi := make([]float32, h), make([]float32, h)
		under(t, Plain, func() { JoinHalves(vr, vi, re, im, cos, sin); SplitHalves(wr, wi, cos, sin) })
		under(t, best, func() { JoinHalves(zr, zi, re, im, cos, sin); SplitHalves(re, im, cos, sin) })
		if !okR() || !okI() || !okZR() || !okZI() {
			t.Fatalf("halves of %d: written outside", h)
		}
		if e := apart(re, im, wr, wi); e > -120 {
			t.Errorf("split of %d: sets differ by %.1f dB", h, e)
		}
		if e := apart(zr, zi, vr, vi); e > -120 {
			t.Errorf("join of %d: sets differ by %.1f dB", h, e)
		}
		// One undoes the other, but for the factor 2.
		JoinHalves(zr, zi, re, im, cos, sin)
		for k := range zr {
			zr[k], zi[k] = zr[k]/2, zi[k]/2
		}
		again, againI := append(zr[:h:h], 0), append(zi[:h:h], 0)
		SplitHalves(again, againI, cos, sin)
		if e := apart(again, againI, re, im); e > -120 {
			t.Errorf("split and join of %d: %.1f dB off", h, e)
		}
	}
}

func TestAlternate(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(9, 1))
		for _, n := range []int{0, 1, 7, 8, 9, 16, 25} {
			x, ok := guarded(r, 2*n)
			zr, _ := guarded(r, n)
			zi, _ := guarded(r, n)
			Alternate(x, zr, zi, 0.25)
			if !ok() {
				t.Fatalf("%d values: written outside", n)
			}
			for i := range zr {
				if x[2*i] != 0.25*zr[i] || x[2*i+1] != 0.25*zi[i] {
					t.Fatalf("%d values: pair %d is %g, %g, want %g, %g", n, i, x[2*i], x[2*i+1], zr[i]/4, zi[i]/4)
				}
			}
		}
	})
}

func TestStepsRefuseLengthsThatDoNotFit(t *testing.T) {
	v := func(n int) []float32 { return make([]float32, n) }
	first, middle := NewTwiddles[float32](32, 1), NewTwiddles[float32](32, 16)
	for what, f := range map[string]func(){
		"first":       func() { FirstStep(v(32), v(32), v(32), v(31), first) },
		"first of 16": func() { FirstStep(v(512), v(512), v(512), v(512), middle) },
		"first real":  func() { FirstStepReal(v(32), v(32), v(63), first) },
		"middle":      func() { Step(v(512), v(512), v(512), v(511), middle) },
		"middle of 8": func() { Step(v(256), v(256), v(256), v(256), NewTwiddles[float32](32, 8)) },
		"twiddles":    func() { NewTwiddles[float32](6, 1) },
		"last 2":      func() { LastStep2(v(3), v(3), v(3), v(3)) },
		"last 4":      func() { LastStep4(v(6), v(6), v(6), v(6)) },
		"last 8":      func() { LastStep8(v(12), v(12), v(12), v(12)) },
		"split":       func() { SplitHalves(v(17), v(17), v(8), v(9)) },
		"split odd":   func() { SplitHalves(v(16), v(16), v(8), v(8)) },
		"join":        func() { JoinHalves(v(16), v(16), v(16), v(17), v(9), v(9)) },
		"alternate":   func() { Alternate(v(16), v(8), v(7), 1) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", what)
				}
			}()
			f()
		}()
	}
}

func FuzzSteps(f *testing.F) {
	f.Add(uint64(1), uint8(8), uint8(0))
	f.Add(uint64(2), uint8(40), uint8(3))
	f.Fuzz(func(t *testing.T, seed uint64, eighths, which uint8) {
		best := bestSet(t)
		n := 8 * (1 + int(eighths))
		names := []string{"first", "first real", "middle 4", "middle 16", "middle 64", "last 2", "last 4", "last 8"}
		step := steps[float32](n)[names[int(which)%len(names)]]
		if step == nil {
			return
		}
		r := rand.New(rand.NewPCG(seed, 1))
		xr, _ := guarded(r, n)
		xi, _ := guarded(r, n)
		yr, okR := guarded(r, n)
		yi, okI := guarded(r, n)
		wr, wi := make([]float32, n), make([]float32, n)
		under(t, Plain, func() { step(wr, wi, xr, xi) })
		under(t, best, func() { step(yr, yi, xr, xi) })
		if !okR() || !okI() {
			t.Fatal("written outside")
		}
		if e := apart(yr, yi, wr, wi); e > -120 {
			t.Fatalf("sets differ by %.1f dB", e)
		}
	})
}
