package bearing

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"
)

func TestInverseAgreesWithGonum(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for n := 1; n <= maxDims; n++ {
		for range 50 {
			var m mat4
			for range n + 2 {
				var v vec4
				for a := range n {
					v[a] = r.NormFloat64() * math.Pow(10, 3*float64(a))
				}
				m.addOuter(1, v)
			}
			got, ok := m.invert(n, nil)
			if !ok {
				t.Fatalf("n %d: a positive definite matrix is refused", n)
			}
			dense := mat.NewDense(n, n, nil)
			for i := range n {
				for j := range n {
					dense.Set(i, j, m[i][j])
				}
			}
			var want mat.Dense
			if err := want.Inverse(dense); err != nil {
				if _, ok := err.(mat.Condition); !ok {
					t.Fatal(err)
				}
			}
			for i := range n {
				for j := range n {
					scale := math.Sqrt(got[i][i] * got[j][j])
					if math.Abs(got[i][j]-want.At(i, j)) > 1e-6*scale {
						t.Fatalf("n %d: inverse[%d][%d] = %g, want %g", n, i, j, got[i][j], want.At(i, j))
					}
				}
			}
		}
	}
}

func TestInverseLeavesTheLiftedDirectionOut(t *testing.T) {
	// Information about a unit vector along z: none along it.
	var m mat4
	m.addOuter(4, vec4{1, 0, 0})
	m.addOuter(25, vec4{0, 1, 0})
	inv, ok := m.invert(3, []float64{0, 0, 1})
	if !ok {
		t.Fatal("refused")
	}
	for i := range 3 {
		for j := range 3 {
			want := 0.0
			if i == j {
				want = []float64{0.25, 0.04, 0}[i]
			}
			if math.Abs(inv[i][j]-want) > 1e-12 {
				t.Errorf("inverse[%d][%d] = %g, want %g", i, j, inv[i][j], want)
			}
		}
	}
	for name, bad := range map[string]mat4{"zero": {}, "flat": {{1, 1}, {1, 1}}, "negative": {{-1, 0}, {0, 1}}, "no number": {{math.NaN(), 0}, {0, 1}}} {
		if _, ok := bad.invert(2, nil); ok {
			t.Errorf("%s: inverted", name)
		}
	}
}

func TestEigenvectorsRebuildTheMatrix(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 1))
	for n := 1; n <= 3; n++ {
		var m mat4
		for range n + 1 {
			var v vec4
			for a := range n {
				v[a] = r.NormFloat64()
			}
			m.addOuter(1, v)
		}
		values, vectors := eigen3(m, n)
		for i := range n {
			for j := range n {
				sum := 0.0
				for a := range n {
					sum += values[a] * vectors[a][i] * vectors[a][j]
				}
				if math.Abs(sum-m[i][j]) > 1e-12 {
					t.Errorf("n %d: rebuilt[%d][%d] = %g, want %g", n, i, j, sum, m[i][j])
				}
			}
		}
	}
}

// Abramowitz & Stegun 1964, table 26.10 (by gonum's distribution).
func TestStudentQuantile(t *testing.T) {
	for _, nu := range []float64{1, 2, 3, 4, 5, 7.5, 10, 30, 200} {
		want := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: nu}.Quantile(0.975)
		if got := studentQuantile975(nu); math.Abs(got/want-1) > 0.01 {
			t.Errorf("%g degrees: %.4f, want %.4f within 1 %%", nu, got, want)
		}
	}
	for _, nu := range []float64{0, -3, math.NaN(), 0.5} {
		if got := studentQuantile975(nu); got != 12.706204736432095 {
			t.Errorf("%g degrees: %g, want that of one", nu, got)
		}
	}
	if got := studentQuantile975(math.Inf(1)); math.Abs(got-1.959964) > 1e-6 {
		t.Errorf("infinity: %g", got)
	}
	last := math.Inf(1)
	for nu := 1.0; nu < 20; nu += 0.1 {
		if q := studentQuantile975(nu); q > last+1e-9 {
			t.Fatalf("the quantile grows at %g degrees", nu)
		} else {
			last = q
		}
	}
}

// Minimum statistics [Martin 2001]: of steady noise the floor is the mean
// power, within 1 dB on average over the lines; of noise with bursts it is that
// of the noise; it follows a rise within its span.
func TestFloorFollowsStationaryNoise(t *testing.T) {
	const bins, step = 200, 0.0213
	r := rand.New(rand.NewPCG(7, 7))
	f := newFloorTracker(bins, step)
	power := make([]float64, bins)
	level := func() float64 {
		sum := 0.0
		for _, v := range f.floor {
			sum += v / bins
		}
		return 10 * math.Log10(sum)
	}
	// Half-overlapped Hann frames correlate by 1/6: a moving sum of amplitudes.
	var old [bins][2]float64
	frame := func(gain float64) {
		for k := range power {
			a, b := r.NormFloat64(), r.NormFloat64()
			const c = 1.0 / 6
			old[k][0], old[k][1] = c*old[k][0]+math.Sqrt(1-c*c)*a, c*old[k][1]+math.Sqrt(1-c*c)*b
			power[k] = gain * (old[k][0]*old[k][0] + old[k][1]*old[k][1]) / 2
		}
		f.update(power)
	}
	for i := range 400 {
		frame(1)
		if i == 20 || i == 60 || i == 399 {
			if got := level(); math.Abs(got) > 1.5 || (i == 399 && math.Abs(got) > 1) {
				t.Errorf("frame %d: floor of steady noise %.2f dB, want 0 within 1 (1.5 early)", i, got)
			}
		}
	}
	for i := range 400 {
		g := 1.0
		if i%60 < 12 {
			g = 100
		}
		frame(g)
	}
	if got := level(); math.Abs(got) > 2.5 {
		t.Errorf("floor under bursts of 20 dB: %.2f dB, want 0 within 2.5", got)
	}
	for range 150 {
		frame(10)
	}
	if got := level(); math.Abs(got-10) > 1.2 {
		t.Errorf("floor after a rise of 10 dB: %.2f dB", got)
	}
}

func TestChosenPairsUseEveryMicrophoneAlike(t *testing.T) {
	for _, c := range []struct{ mics, limit, want int }{{2, 64, 1}, {8, 64, 28}, {16, 64, 64}, {16, 120, 120}, {64, 496, 448}, {256, 496, 256}, {1000, 496, 1000}} {
		pairs := choosePairs(c.mics, c.limit)
		if len(pairs) != c.want {
			t.Errorf("%d microphones, limit %d: %d pairs, want %d", c.mics, c.limit, len(pairs), c.want)
		}
		count := make([]int, c.mics)
		seen := map[pairIndex]bool{}
		for _, p := range pairs {
			if p.i >= p.j || seen[p] {
				t.Fatalf("%d microphones: pair %v is twice there or turned round", c.mics, p)
			}
			seen[p] = true
			count[p.i]++
			count[p.j]++
		}
		for m := range count {
			if count[m] != count[0] {
				t.Fatalf("%d microphones: microphone %d stands in %d pairs, the first in %d", c.mics, m+1, count[m], count[0])
			}
		}
	}
}
