package measure

import (
	"math"
	"math/cmplx"
	"sort"
	"testing"

	"alidade/pkg/audio"
)

func TestCoherenceLimitIsTheClosedForm(t *testing.T) {
	// J7: Carter, Knapp & Nuttall 1973, IEEE Trans. AU-21:337; 95 % points.
	for nd, want := range map[int]float64{4: 0.6315969, 8: 0.3481637, 16: 0.1810363, 32: 0.09211406, 64: 0.04643845, 128: 0.02331241} {
		if got := CoherenceLimit(nd, 0.95); math.Abs(got-want) > 1e-6 {
			t.Errorf("CoherenceLimit(%d, 0.95) = %.7f, want %.7f", nd, got, want)
		}
	}
	if got := CoherenceLimit(1, 0.95); got != 1 {
		t.Errorf("CoherenceLimit(1) = %g, want 1", got)
	}
}

func TestCoherenceOfIndependentNoiseHasItsDistribution(t *testing.T) {
	// J7, J8: mean 1/nd and 95 % point 0.1810363 for nd = 16, 20000 trials,
	// tolerance 0.004.
	const nd, size = 16, 4096
	var all []float64
	sum := 0.0
	for seed := uint64(1); len(all) < 20000; seed++ {
		b := noiseBlock(2, nd*size, 0.1, seed)
		c, err := NewCoherence(audio.Format{Rate: 48000, Channels: 2}, [][2]int{{0, 1}}, size)
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Write(b); err != nil {
			t.Fatal(err)
		}
		if c.Averages() != nd {
			t.Fatalf("%d averages, want %d", c.Averages(), nd)
		}
		// Every fourth bin: Hann couples neighbours.
		g := c.Of(nil, 0)
		for k := 4; k < size/2; k += 4 {
			v := cmplx.Abs(g[k])
			all = append(all, v*v)
			sum += v * v
		}
	}
	sort.Float64s(all)
	if m := sum / float64(len(all)); math.Abs(m-1.0/nd) > 0.004 {
		t.Errorf("mean %.4f, want %.4f", m, 1.0/nd)
	}
	if q := all[len(all)*95/100]; math.Abs(q-0.1810363) > 0.004 {
		t.Errorf("95 %% point %.4f, want 0.1810", q)
	}
}

func TestCoherenceOfMixedNoiseIsItsMixture(t *testing.T) {
	// y = a·x + b·n has coherence a/√(a²+b²) with x by definition; a delayed
	// copy turns its phase.
	const a, b, size = 0.8, 0.6, 256
	src := noiseBlock(2, 400*size+1, 0.1, 9)
	x, y := src.Channel(0), src.Channel(1)
	for i := len(x) - 1; i > 0; i-- {
		y[i] = a*x[i-1] + b*y[i]
	}
	c, err := NewCoherence(audio.Format{Rate: 16000, Channels: 2}, [][2]int{{0, 1}, {1, 0}}, size)
	if err != nil {
		t.Fatal(err)
	}
	if err := c.Write(src); err != nil {
		t.Fatal(err)
	}
	g, h := c.Of(nil, 0), c.Of(nil, 1)
	for _, k := range []int{5, 40, 100} {
		// X·conj(Y) with Y late by one frame: phase +2πk/size. Standard error of
		// the magnitude is (1-γ²)/√(2·400) = 0.013; 4 of them are allowed.
		want := cmplx.Rect(a, 2*math.Pi*float64(k)/size)
		if cmplx.Abs(g[k]-want) > 0.06 {
			t.Errorf("bin %d: coherence %.3f, want %.3f", k, g[k], want)
		}
		if cmplx.Abs(g[k]-cmplx.Conj(h[k])) > 1e-12 {
			t.Errorf("bin %d: the pair turned round is not the conjugate: %.3f and %.3f", k, g[k], h[k])
		}
	}
	if got := c.BinHz(); got != 62.5 {
		t.Errorf("BinHz() = %g, want 62.5", got)
	}
}

func TestCoherenceOfSilenceIsZero(t *testing.T) {
	c, err := NewCoherence(audio.Format{Rate: 16000, Channels: 2}, [][2]int{{0, 1}}, 16)
	if err != nil {
		t.Fatal(err)
	}
	if err := c.Write(audio.NewBlock(2, 64)); err != nil {
		t.Fatal(err)
	}
	for k, v := range c.Of(nil, 0) {
		if v != 0 {
			t.Errorf("bin %d: %v, want 0", k, v)
		}
	}
}

func TestCoherenceRefusesWhatItCannotDo(t *testing.T) {
	two := audio.Format{Rate: 16000, Channels: 2}
	for name, f := range map[string]func() error{
		"odd window":     func() error { _, err := NewCoherence(two, [][2]int{{0, 1}}, 1000); return err },
		"no pair":        func() error { _, err := NewCoherence(two, nil, 1024); return err },
		"channel 3 of 2": func() error { _, err := NewCoherence(two, [][2]int{{0, 2}}, 1024); return err },
		"other channels": func() error {
			c, err := NewCoherence(two, [][2]int{{0, 1}}, 1024)
			if err != nil {
				t.Fatal(err)
			}
			return c.Write(audio.NewBlock(3, 10))
		},
	} {
		if f() == nil {
			t.Errorf("%s: no error", name)
		}
	}
}
