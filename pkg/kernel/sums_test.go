package kernel

import (
	"math"
	"math/rand/v2"
	"testing"
)

// guarded64 is guarded in double precision.
func guarded64(r *rand.Rand, n int) (v []float64, untouched func() bool) {
	const guard = 1e300
	at := 1 + r.IntN(5)
	all := make([]float64, at+n+5)
	for i := range all {
		all[i] = guard
	}
	v = all[at : at+n]
	for i := range v {
		v[i] = r.NormFloat64()
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

// lengths stand around the widths of the vector loops.
var lengths = []int{0, 1, 3, 4, 5, 7, 8, 9, 15, 16, 17, 31, 32, 33, 63, 64, 65, 100, 257}

func TestDotAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(21, 1))
		for _, n := range lengths {
			a, _ := guarded(r, n)
			b, _ := guarded(r, n)
			want, size := 0.0, 0.0
			for i := range a {
				want += float64(a[i]) * float64(b[i])
				size += math.Abs(float64(a[i]) * float64(b[i]))
			}
			if got := Dot(a, b); math.Abs(float64(got)-want) > 1e-6*size {
				t.Errorf("%d values: %g, want %g", n, got, want)
			}
		}
	})
}

func TestPeakIsTheLargestMagnitudeWhereverItStands(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(22, 1))
		if Peak(nil) != 0 {
			t.Error("nothing has a peak")
		}
		for _, n := range lengths[1:] {
			for i := range n {
				x, _ := guarded(r, n)
				x[i] = -7 - r.Float32()
				if got := Peak(x); got != -x[i] {
					t.Fatalf("%d values: %g, want %g from place %d", n, got, -x[i], i)
				}
				x[(i+n/2)%n] = float32(math.Inf(-1))
				if n > 1 && !math.IsInf(float64(Peak(x)), 1) {
					t.Fatalf("%d values with an infinity: %g", n, Peak(x))
				}
				x[i] = float32(math.NaN())
				if got := Peak(x); got == got {
					t.Fatalf("%d values, one is no number: %g", n, got)
				}
			}
		}
	})
}

// The same bits under each set, however the stream is cut, and right.
func TestSquaresDependNeitherOnTheCutNorOnTheSet(t *testing.T) {
	r := rand.New(rand.NewPCG(23, 1))
	x, _ := guarded(r, 1000)
	sum, square := 0.0, 0.0
	for _, v := range x {
		sum += float64(v)
		square += float64(v) * float64(v)
	}
	var want Squares
	under(t, Plain, func() { want.Add(x) })
	if math.Abs(want.Sum()-sum) > 1e-11 || math.Abs(want.Square()-square) > 1e-10 {
		t.Errorf("sums %g and %g, want %g and %g", want.Sum(), want.Square(), sum, square)
	}
	bothSets(t, func(t *testing.T) {
		for range 20 {
			var got Squares
			for rest := x; len(rest) > 0; {
				n := min(len(rest), r.IntN(40))
				got.Add(rest[:n])
				rest = rest[n:]
			}
			if got != want {
				t.Fatalf("cut: %v, want %v", got, want)
			}
		}
	})
}

func TestPowersAndMultiply(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(24, 1))
		for _, n := range lengths {
			a, okA := guarded(r, n)
			b, okB := guarded(r, n)
			p, okP := guarded(r, n)
			y, okY := guarded(r, n)
			Powers(p, a, b)
			Multiply(y, a, b)
			for i := range a {
				e := float64(a[i])*float64(a[i]) + float64(b[i])*float64(b[i])
				if math.Abs(float64(p[i])-e) > 2e-7*e {
					t.Fatalf("%d values: power %d is %g, want %g", n, i, p[i], e)
				}
				if y[i] != a[i]*b[i] {
					t.Fatalf("%d values: product %d is %g, want %g", n, i, y[i], a[i]*b[i])
				}
			}
			Multiply(a, a, b)
			for i := range a {
				if a[i] != y[i] {
					t.Fatalf("%d values: in place, product %d is %g, want %g", n, i, a[i], y[i])
				}
			}
			if !okA() || !okB() || !okP() || !okY() {
				t.Fatalf("%d values: written outside", n)
			}
		}
	})
}

// The rounding of IEEE 754: ties to even; full scale clips.
func TestQuantiseIsTheDefinition(t *testing.T) {
	const full = 1 << 23
	special := []float32{0, 1, -1, 2, -2, 1 - 1.0/full, 0.5 / full, 1.5 / full, 2.5 / full, -0.5 / full, -1.5 / full, -2.5 / full, float32(math.Inf(1)), float32(math.Inf(-1)), 1e-40}
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(25, 1))
		for _, n := range lengths {
			x, _ := guarded(r, n)
			for i := range x {
				if r.IntN(3) == 0 {
					x[i] = special[r.IntN(len(special))]
				} else {
					x[i] *= 0.4
				}
			}
			q := make([]int32, n+2)
			q[0], q[n+1] = -77, -77
			Quantise(q[1:n+1], x, full)
			if q[0] != -77 || q[n+1] != -77 {
				t.Fatalf("%d values: written outside", n)
			}
			for i, v := range x {
				want := math.Max(-full, math.Min(full-1, math.RoundToEven(float64(v)*full)))
				if float64(q[i+1]) != want {
					t.Fatalf("%d values: %g becomes %d, want %g", n, v, q[i+1], want)
				}
			}
		}
	})
}

func TestAddCrossAgainstTheDefinition(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(26, 1))
		for _, n := range lengths {
			for _, weighted := range []bool{false, true} {
				var v [7][]float64
				var ok [7]func() bool
				for k := range v {
					v[k], ok[k] = guarded64(r, n)
				}
				w := v[6]
				if !weighted {
					w = nil
				}
				wr, wi := append([]float64(nil), v[0]...), append([]float64(nil), v[1]...)
				for k := range wr {
					g := 1.0
					if weighted {
						g = w[k]
					}
					p := complex(v[2][k], v[3][k]) * complex(v[4][k], -v[5][k])
					wr[k], wi[k] = 0.75*wr[k]+g*real(p), 0.75*wi[k]+g*imag(p)
				}
				AddCross(v[0], v[1], v[2], v[3], v[4], v[5], w, 0.75)
				for k := range ok {
					if !ok[k]() {
						t.Fatalf("%d bins: written outside slice %d", n, k)
					}
				}
				for k := range wr {
					if math.Hypot(v[0][k]-wr[k], v[1][k]-wi[k]) > 1e-14*(1+math.Hypot(wr[k], wi[k])) {
						t.Fatalf("%d bins: bin %d is %g%+gj, want %g%+gj", n, k, v[0][k], v[1][k], wr[k], wi[k])
					}
				}
			}
		}
	})
}

// Two signals with filters of their own in one set of sums, against AddFIR in
// double precision; and nothing outside is read that is not promised.
func TestPhasesAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(27, 1))
		for _, n := range []int{8, 16, 24, 40, 64, 88, 760} {
			for _, taps := range []int{0, 8, 16, 64} {
				p := NewPhases(n)
				p.Add(make([]float32, n+8), []float32{1, 2, 3, 4, 5, 6, 7, 8}) // silence adds nothing
				want := make([]float64, n)
				for range 2 {
					x, okX := guarded(r, n+taps)
					h, okH := guarded(r, taps)
					for i := range want {
						for k, v := range h {
							want[i] += float64(v) * float64(x[i+k])
						}
					}
					p.Add(x, h)
					if !okX() || !okH() {
						t.Fatal("the signal or the taps were written")
					}
				}
				y, ok := guarded(r, n)
				p.Join(y)
				if !ok() {
					t.Fatalf("%d samples: written outside", n)
				}
				e := make([]float64, n)
				for i := range e {
					e[i] = float64(y[i]) - want[i]
				}
				if rms(e) > 1e-6*math.Max(rms(want), 1e-3) {
					t.Errorf("%d samples, %d taps: error %g of %g", n, taps, rms(e), rms(want))
				}
				p.Clear()
				p.Join(y)
				if Peak(y) != 0 {
					t.Errorf("%d samples: cleared sums hold %g", n, Peak(y))
				}
			}
		}
	})
}

func TestSumsRefuseLengthsThatDoNotFit(t *testing.T) {
	v := func(n int) []float32 { return make([]float32, n) }
	d := func(n int) []float64 { return make([]float64, n) }
	for what, f := range map[string]func(){
		"dot":            func() { Dot(v(8), v(9)) },
		"powers":         func() { Powers(v(8), v(8), v(7)) },
		"multiply":       func() { Multiply(v(8), v(7), v(8)) },
		"quantise":       func() { Quantise(make([]int32, 8), v(9), 1) },
		"cross":          func() { AddCross(d(8), d(8), d(8), d(8), d(8), d(7), nil, 1) },
		"cross weights":  func() { AddCross(d(8), d(8), d(8), d(8), d(8), d(8), d(4), 1) },
		"phases":         func() { NewPhases(12) },
		"phases taps":    func() { NewPhases(16).Add(v(40), v(7)) },
		"phases samples": func() { NewPhases(16).Add(v(23), v(8)) },
		"phases join":    func() { NewPhases(16).Join(v(24)) },
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

func TestSumsDoNotAllocate(t *testing.T) {
	a, b, q := make([]float32, 100), make([]float32, 100), make([]int32, 100)
	p := NewPhases(40)
	var s Squares
	if n := testing.AllocsPerRun(10, func() {
		Dot(a, b)
		Peak(a)
		s.Add(a)
		Quantise(q, a, 1)
		p.Add(a, b[:8])
		p.Join(b[:40])
	}); n != 0 {
		t.Errorf("%g allocations", n)
	}
}

func FuzzSums(f *testing.F) {
	f.Add(uint64(1), uint16(40), uint8(1))
	f.Fuzz(func(t *testing.T, seed uint64, length uint16, taps uint8) {
		best := bestSet(t)
		r := rand.New(rand.NewPCG(seed, 5))
		n := int(length) % 700
		a, _ := guarded(r, n)
		b, _ := guarded(r, n)
		size := 0.0
		for i := range a {
			size += math.Abs(float64(a[i]) * float64(b[i]))
		}
		under(t, best, func() {
			if d := math.Abs(float64(Dot(a, b) - dot(a, b))); d > 1e-6*size {
				t.Fatalf("dot differs by %g of %g", d, size)
			}
			if Peak(a) != math.Float32frombits(peak(a)) {
				t.Fatalf("peak %g", Peak(a))
			}
			n := 8 * (1 + n/8)
			k := 8 * int(taps%16)
			x, _ := guarded(r, n+k)
			h, _ := guarded(r, k)
			p, q := NewPhases(n), NewPhases(n)
			p.Add(x, h)
			if k > 0 {
				q.add(x, h)
			}
			y, ok := guarded(r, n)
			z := make([]float32, n)
			p.Join(y)
			q.join(z)
			if !ok() {
				t.Fatal("written outside")
			}
			for i := range y {
				if math.Abs(float64(y[i]-z[i])) > 1e-5*float64(k+1) {
					t.Fatalf("sample %d: %g and %g", i, y[i], z[i])
				}
			}
		})
	})
}

// Sums of products of small whole numbers are exact in any order.
func TestDot64(t *testing.T) {
	for n := range 14 {
		a, b, want := make([]float64, n), make([]float64, n), 0.0
		for i := range n {
			a[i], b[i] = float64(3*i-7), float64(i*i+1)
			want += a[i] * b[i]
		}
		if got := Dot64(a, b); got != want {
			t.Errorf("%d values: %g, want %g", n, got, want)
		}
	}
	defer func() {
		if recover() == nil {
			t.Error("lengths that differ do not panic")
		}
	}()
	Dot64(make([]float64, 3), make([]float64, 4))
}
