package kernel

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// bothSets runs f under each set that the processor has.
func bothSets(t *testing.T, f func(t *testing.T)) {
	t.Helper()
	for _, name := range []string{Plain, AVX2} {
		t.Run(name, func(t *testing.T) {
			if err := Use(name); err != nil {
				t.Skip(err)
			}
			defer func() {
				if err := Use(""); err != nil {
					t.Error(err)
				}
			}()
			f(t)
		})
	}
}

// guarded returns n random values at an odd place of a larger slice, and a
// check that nothing around them was written.
func guarded(r *rand.Rand, n int) (v []float32, untouched func() bool) {
	const guard = float32(1e30)
	at := 1 + r.IntN(9)
	all := make([]float32, at+n+9)
	for i := range all {
		all[i] = guard
	}
	v = all[at : at+n]
	for i := range v {
		v[i] = float32(r.NormFloat64())
	}
	return v, func() bool {
		for i, x := range all {
			if (i < at || i >= at+n) && x != guard {
				return false
			}
		}
		return true
	}
}

func rms(v []float64) float64 {
	sum := 0.0
	for _, x := range v {
		sum += x * x
	}
	return math.Sqrt(sum / float64(len(v)))
}

// Every length around the widths of the vector loops, at any alignment, against
// double precision; differences below -120 dB of the result.
func TestAddFIRAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(1, 1))
		for _, n := range []int{0, 1, 7, 8, 9, 15, 16, 31, 32, 33, 40, 63, 64, 65, 95, 96, 97, 104, 136, 257} {
			for _, taps := range []int{0, 1, 2, 4, 7, 8, 9, 64, 65} {
				y, yOK := guarded(r, n)
				x, xOK := guarded(r, n+max(taps, 1)-1)
				h, hOK := guarded(r, taps)
				want := make([]float64, n)
				for i := range want {
					want[i] = float64(y[i])
					for k, v := range h {
						want[i] += float64(v) * float64(x[i+k])
					}
				}
				AddFIR(y, x, h)
				if !yOK() || !xOK() || !hOK() {
					t.Fatalf("%d samples, %d taps: written outside", n, taps)
				}
				e := make([]float64, n)
				for i := range e {
					e[i] = float64(y[i]) - want[i]
				}
				if n > 0 && rms(e) > 1e-6*math.Max(rms(want), 1) {
					t.Errorf("%d samples, %d taps: error %g of %g", n, taps, rms(e), rms(want))
				}
			}
		}
	})
}

func TestAddProductAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(2, 1))
		for _, n := range []int{0, 1, 7, 8, 9, 16, 17, 100, 1025} {
			var v [6][]float32
			var ok [6]func() bool
			for k := range v {
				v[k], ok[k] = guarded(r, n)
			}
			wr, wi := make([]float64, n), make([]float64, n)
			for k := range n {
				p := complex(float64(v[2][k]), float64(v[3][k])) * complex(float64(v[4][k]), float64(v[5][k]))
				wr[k], wi[k] = float64(v[0][k])+real(p), float64(v[1][k])+imag(p)
			}
			AddProduct(v[0], v[1], v[2], v[3], v[4], v[5])
			for k := range ok {
				if !ok[k]() {
					t.Fatalf("%d bins: slice %d: written outside", n, k)
				}
			}
			for k := range n {
				if math.Abs(float64(v[0][k])-wr[k]) > 2e-6 || math.Abs(float64(v[1][k])-wi[k]) > 2e-6 {
					t.Errorf("%d bins: bin %d is %g%+gj, want %g%+gj", n, k, v[0][k], v[1][k], wr[k], wi[k])
				}
			}
		}
	})
}

// The same values give the same bits wherever they lie in memory.
func TestSameBitsAtAnyAlignment(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(3, 1))
		x, h := make([]float32, 80), make([]float32, 9)
		for i := range x {
			x[i] = float32(r.NormFloat64())
		}
		for i := range h {
			h[i] = float32(r.NormFloat64())
		}
		var want []float32
		for at := range 17 {
			y := make([]float32, 120)[at : at+70]
			moved := append(make([]float32, at), x...)[at:]
			AddFIR(y, moved, h)
			if want == nil {
				want = y
			}
			for i := range y {
				if y[i] != want[i] {
					t.Fatalf("offset %d: sample %d differs", at, i)
				}
			}
		}
	})
}

// What is not a number comes out where it goes in and nowhere else.
func TestNotANumberStaysWhereItIs(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		for _, bad := range []float32{float32(math.NaN()), float32(math.Inf(1))} {
			y, x, h := make([]float32, 50), make([]float32, 57), []float32{1, 1, 1, 1, 1, 1, 1, 1}
			x[20] = bad
			AddFIR(y, x, h)
			for i, v := range y {
				finite := v-v == 0
				if inside := i <= 20 && i+7 >= 20; inside == finite {
					t.Errorf("%g: sample %d is %g", bad, i, v)
				}
			}
		}
	})
}

func TestSetsAreNamed(t *testing.T) {
	defer func() {
		if err := Use(""); err != nil {
			t.Error(err)
		}
	}()
	if err := Use("sse9"); err == nil {
		t.Error("an unknown set: accepted")
	}
	if err := Use(Plain); err != nil || Name() != Plain {
		t.Errorf("plain: %v, %s", err, Name())
	}
}

func TestLengthsThatDoNotFitPanic(t *testing.T) {
	for what, f := range map[string]func(){
		"fir":     func() { AddFIR(make([]float32, 8), make([]float32, 8), make([]float32, 2)) },
		"product": func() { v := make([]float32, 8); AddProduct(v, v, v, v, v, v[:7]) },
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

func FuzzAddFIR(f *testing.F) {
	f.Add(uint64(1), uint16(40), uint8(9))
	f.Fuzz(func(t *testing.T, seed uint64, n uint16, taps uint8) {
		r := rand.New(rand.NewPCG(seed, 4))
		count := int(n) % 600
		y, ok := guarded(r, count)
		x, _ := guarded(r, count+int(taps))
		h, _ := guarded(r, int(taps))
		plain := append([]float32(nil), y...)
		addFIR(plain, x, h)
		AddFIR(y, x, h)
		if !ok() {
			t.Fatal("written outside")
		}
		for i := range y {
			if d := math.Abs(float64(y[i] - plain[i])); d > 1e-5*float64(taps+1) {
				t.Fatalf("sample %d: %g and %g", i, y[i], plain[i])
			}
		}
	})
}

func BenchmarkAddFIR(b *testing.B) {
	for _, set := range []string{Plain, AVX2} {
		for _, taps := range []int{8, 64} {
			b.Run(fmt.Sprintf("%s/%d", set, taps), func(b *testing.B) {
				if err := Use(set); err != nil {
					b.Skip(err)
				}
				defer Use("")
				y, x, h := make([]float32, 2048), make([]float32, 2048+taps), make([]float32, taps)
				b.SetBytes(int64(4 * len(y) * taps))
				for b.Loop() {
					AddFIR(y, x, h)
				}
			})
		}
	}
}
