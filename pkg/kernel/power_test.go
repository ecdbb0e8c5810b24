package kernel

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// Every number of sources and lines, at any alignment, against double precision;
// differences below -120 dB of the powers that the terms have.
func TestPowerOfSumsAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(4, 1))
		for _, sources := range []int{1, 2, 3, 16, 33} {
			for _, bins := range []int{0, 8, 16, 72} {
				pStride, xStride := bins+5, 2*sources*bins+3
				p, pOK := guarded(r, 3*pStride+bins)
				x, xOK := guarded(r, 3*xStride+2*sources*bins)
				w, wOK := guarded(r, 2*sources*bins)
				before := append([]float32(nil), p...)
				PowerOfSums(p, pStride, x, xStride, w, sources, bins)
				if !pOK() || !xOK() || !wOK() {
					t.Fatalf("%d sources, %d bins: written outside", sources, bins)
				}
				for i, v := range p {
					row, k := i/pStride, i%pStride
					if k >= bins {
						if v != before[i] {
							t.Fatalf("%d sources, %d bins: written between rows", sources, bins)
						}
						continue
					}
					var sum complex128
					size := 0.0
					for m := range sources {
						at := (k/Line*sources+m)*2*Line + k%Line
						a := complex(float64(x[row*xStride+at]), float64(x[row*xStride+at+Line]))
						b := complex(float64(w[at]), float64(w[at+Line]))
						sum += a * b
						size += real(a)*real(a) + imag(a)*imag(a) + real(b)*real(b) + imag(b)*imag(b)
					}
					want := real(sum)*real(sum) + imag(sum)*imag(sum)
					if math.Abs(float64(v)-want) > 1e-6*(want+size*size) {
						t.Errorf("%d sources, row %d, bin %d: %g, want %g", sources, row, k, v, want)
					}
				}
			}
		}
	})
}

func TestPowerOfSumsRefusesShortSlices(t *testing.T) {
	f := func(n int) []float32 { return make([]float32, n) }
	for name, call := range map[string]func(){
		"p": func() { PowerOfSums(f(31), 8, f(128), 32, f(32), 2, 8) }, "x": func() { PowerOfSums(f(32), 8, f(127), 32, f(32), 2, 8) },
		"w": func() { PowerOfSums(f(32), 8, f(128), 32, f(31), 2, 8) }, "bins": func() { PowerOfSums(f(32), 8, f(128), 32, f(32), 2, 7) },
		"stride": func() { PowerOfSums(f(32), 7, f(128), 32, f(32), 2, 8) }, "sources": func() { PowerOfSums(f(32), 8, f(128), 32, f(32), 0, 8) },
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

// A pair is two sources of PowerOfSums with conjugate weights.
func TestPowerOfPairsAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(4, 2))
		for _, pairs := range []int{1, 2, 7, 33} {
			for _, bins := range []int{0, 8, 16, 72} {
				pStride, xStride := bins+5, 4*pairs*bins+3
				p, pOK := guarded(r, 3*pStride+bins)
				x, xOK := guarded(r, 3*xStride+4*pairs*bins)
				w, wOK := guarded(r, 2*pairs*bins)
				PowerOfPairs(p, pStride, x, xStride, w, pairs, bins)
				if !pOK() || !xOK() || !wOK() {
					t.Fatalf("%d pairs, %d bins: written outside", pairs, bins)
				}
				for row := range 4 {
					for k := range bins {
						var sum complex128
						size := 0.0
						for q := range pairs {
							at := k/Line*pairs + q
							y := x[row*xStride+4*Line*at+k%Line:]
							v := w[2*Line*at+k%Line:]
							s, d := complex(float64(y[0]), float64(y[Line])), complex(float64(y[2*Line]), float64(y[3*Line]))
							a := complex(float64(v[0]), float64(v[Line]))
							sum += a*(s+d)/2 + cmplx.Conj(a)*(s-d)/2
							size += real(s*cmplx.Conj(s)+d*cmplx.Conj(d)+a*cmplx.Conj(a)) / 2
						}
						want := real(sum)*real(sum) + imag(sum)*imag(sum)
						if v := p[row*pStride+k]; math.Abs(float64(v)-want) > 1e-6*(want+size*size) {
							t.Errorf("%d pairs, row %d, bin %d: %g, want %g", pairs, row, k, v, want)
						}
					}
				}
			}
		}
	})
	f := func(n int) []float32 { return make([]float32, n) }
	for name, call := range map[string]func(){
		"p": func() { PowerOfPairs(f(31), 8, f(256), 64, f(32), 2, 8) }, "x": func() { PowerOfPairs(f(32), 8, f(255), 64, f(32), 2, 8) },
		"w": func() { PowerOfPairs(f(32), 8, f(256), 64, f(31), 2, 8) }, "bins": func() { PowerOfPairs(f(32), 8, f(256), 64, f(32), 2, 7) },
		"stride": func() { PowerOfPairs(f(32), 8, f(256), 63, f(32), 2, 8) }, "pairs": func() { PowerOfPairs(f(32), 8, f(256), 64, f(32), 0, 8) },
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

// The pairs that FoldPair makes are what PowerOfPairs takes: with weights w and
// their conjugates, a and k·b add up to what double precision says.
func TestFoldPairAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(4, 3))
		for _, n := range []int{0, 8, 40} {
			const stride = 4*Line + 5
			y, ok := guarded(r, max(0, (n/Line-1)*stride+4*Line))
			var v [6][]float32
			for i := range v {
				v[i], _ = guarded(r, n)
			}
			FoldPair(y, stride, v[0], v[1], v[2], v[3], v[4], v[5])
			if !ok() {
				t.Fatalf("%d bins: written outside", n)
			}
			for k := range n {
				c := func(i int) complex128 { return complex(float64(v[i][k]), float64(v[i+1][k])) }
				at := y[k/Line*stride+k%Line:]
				for i, want := range []complex128{c(0) + c(2)*c(4), c(0) - c(2)*c(4)} {
					got := complex(float64(at[2*i*Line]), float64(at[(2*i+1)*Line]))
					if cmplx.Abs(got-want) > 1e-6*(cmplx.Abs(c(0))+cmplx.Abs(c(2)*c(4))) {
						t.Errorf("%d bins, bin %d: %v, want %v", n, k, got, want)
					}
				}
			}
		}
	})
}

// Every number of lines, at any alignment, against double precision.
func TestWeightedSumsAgainstDoublePrecision(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(5, 1))
		for _, n := range []int{0, 8, 16, 72} {
			stride := n + 3
			p, pOK := guarded(r, 3*stride+n)
			w, wOK := guarded(r, n)
			var got [4]float32
			WeightedSums(&got, p, stride, w)
			if !pOK() || !wOK() {
				t.Fatalf("%d values: written outside", n)
			}
			for row, v := range got {
				want, size := 0.0, 0.0
				for k, x := range w {
					d := float64(x) * float64(p[row*stride+k])
					want += d
					size += math.Abs(d)
				}
				if math.Abs(float64(v)-want) > 1e-6*size {
					t.Errorf("%d values, row %d: %g, want %g", n, row, v, want)
				}
			}
		}
	})
	for name, call := range map[string]func(){
		"rows": func() { WeightedSums(new([4]float32), make([]float32, 31), 8, make([]float32, 8)) }, "values": func() { WeightedSums(new([4]float32), make([]float32, 64), 9, make([]float32, 9)) },
		"stride": func() { WeightedSums(new([4]float32), make([]float32, 64), 7, make([]float32, 8)) },
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

func BenchmarkPowerOfSums(b *testing.B) {
	for _, set := range []string{Plain, AVX2} {
		b.Run(set, func(b *testing.B) {
			if err := Use(set); err != nil {
				b.Skip(err)
			}
			defer func() { _ = Use("") }()
			const sources, bins = 16, 128
			p, x, w := make([]float32, 4*bins), make([]float32, 8*sources*bins), make([]float32, 2*sources*bins)
			for b.Loop() {
				PowerOfSums(p, bins, x, 2*sources*bins, w, sources, bins)
			}
		})
	}
}
