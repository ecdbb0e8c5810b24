package beam

import (
	"math"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

// noiseFilters are random filters of different lengths and starts.
func noiseFilters(r *rand.Rand, rate, mics, taps int) *Filters {
	f := &Filters{Rate: rate}
	for range mics {
		h := make([]float64, taps+r.IntN(20))
		for t := range h {
			h[t] = r.NormFloat64() / math.Sqrt(float64(mics*taps))
		}
		f.H, f.Start = append(f.H, h), append(f.Start, -taps/2+r.IntN(9)-4)
	}
	return f
}

// direct returns the sums of filters by their definition.
func directSums(f *Filters, x audio.Block) []float64 {
	y := make([]float64, x.Frames())
	for i := range y {
		for m, h := range f.H {
			for t, v := range h {
				if j := i - f.Start[m] - t; j >= 0 && j < x.Frames() {
					y[i] += v * float64(x.Channel(m)[j])
				}
			}
		}
	}
	return y
}

// Filters that take over from each other, against sums by their definition, with
// several sets within one hop; the contract of a stage, and the same bits from
// blocks of any size.
func TestChangingFiltersAgainstTheirDefinition(t *testing.T) {
	const rate, mics, taps, frames = 16000, 3, 120, 5000
	r := rand.New(rand.NewPCG(8, 8))
	in := audio.NewBlock(mics, frames)
	for m := range mics {
		for i := range frames {
			in.Channel(m)[i] = float32(r.NormFloat64())
		}
	}
	for _, fade := range []int64{0, 300} {
		list := []Handover{{noiseFilters(r, rate, mics, taps), 0}}
		var sums [][]float64
		for _, at := range []int64{900, 1800, 2200, 3001, 4999} {
			list = append(list, Handover{noiseFilters(r, rate, mics, taps), at})
		}
		for _, h := range list {
			sums = append(sums, directSums(h.Filters, in))
		}
		want := audio.NewBlock(1, frames)
		for i := range frames {
			y := sums[0][i]
			for j := 1; j < len(list); j++ {
				share := 0.0
				switch x := float64(int64(i)-list[j].At) / float64(max(fade, 1)); {
				case fade == 0 && int64(i) >= list[j].At, fade > 0 && x >= 0.5:
					share = 1
				case fade > 0 && x > -0.5:
					share = math.Pow(math.Sin(math.Pi*(x+0.5)/2), 2)
				}
				y = (1-share)*y + share*sums[j][i]
			}
			want.Channel(0)[i] = float32(y)
		}
		stage := func(up audio.Source) audio.Source {
			s, err := NewChanging(up, list, fade)
			if err != nil {
				t.Fatal(err)
			}
			return s
		}
		// Rounding of float32 transforms: -115 dB of signals up to 5.
		audiotest.TestStage(t, rate, in, stage, want, audiotest.Options{Tolerance: 1e-5, Sizes: []int{1000}, Lookahead: 4096})
	}
}

// One set alone is the fixed beam, to the bit.
func TestChangingFiltersThatDoNotChange(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 8))
	in := audio.NewBlock(5, 9000)
	for m := range 5 {
		for i := range 9000 {
			in.Channel(m)[i] = float32(r.NormFloat64())
		}
	}
	f := noiseFilters(r, 48000, 5, 300)
	fixed, err := NewOverlapSave(audio.FromBlock(48000, in), f)
	if err != nil {
		t.Fatal(err)
	}
	want, err := audio.ReadAll(fixed)
	if err != nil {
		t.Fatal(err)
	}
	for _, list := range [][]Handover{{{f, 0}}, {{f, 0}, {f, 5000}}} {
		s, err := NewChanging(audio.FromBlock(48000, in), list, 100)
		if err != nil {
			t.Fatal(err)
		}
		got, err := audio.ReadAll(s)
		if err != nil {
			t.Fatal(err)
		}
		for i, x := range got.Channel(0) {
			if x != want.Channel(0)[i] {
				t.Fatalf("%d sets: frame %d is %g, want %g of the fixed beam", len(list), i, x, want.Channel(0)[i])
			}
		}
	}
}

func TestChangingFiltersThatCannotBe(t *testing.T) {
	r := rand.New(rand.NewPCG(10, 8))
	in := audio.FromBlock(48000, audio.NewBlock(2, 100))
	f, other := noiseFilters(r, 48000, 2, 50), noiseFilters(r, 44100, 2, 50)
	for name, c := range map[string]struct {
		list []Handover
		fade int64
	}{
		"none":              {nil, 0},
		"negative fade":     {[]Handover{{f, 0}}, -1},
		"other rate":        {[]Handover{{f, 0}, {other, 500}}, 10},
		"before the start":  {[]Handover{{f, 0}, {f, 20}}, 100},
		"fades overlap":     {[]Handover{{f, 0}, {f, 500}, {f, 590}}, 100},
		"out of order":      {[]Handover{{f, 0}, {f, 500}, {f, 400}}, 0},
		"two at one moment": {[]Handover{{f, 0}, {f, 500}, {f, 500}}, 0},
	} {
		if _, err := NewChanging(in, c.list, c.fade); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

// A covariance that is reset goes on as one that began there; its centre is the
// mean middle of its transforms.
func TestCovarianceResetAndCentre(t *testing.T) {
	const size, frames = 64, 2000
	r := rand.New(rand.NewPCG(11, 8))
	x := audio.NewBlock(2, frames)
	for m := range 2 {
		for i := range frames {
			x.Channel(m)[i] = float32(r.NormFloat64())
		}
	}
	c, err := NewCovariance(16000, 2, size, CovarianceOptions{Stretches: [][2]int64{{100, 500}, {900, 1700}}})
	if err != nil {
		t.Fatal(err)
	}
	if !math.IsNaN(c.Centre()) {
		t.Errorf("centre of nothing is %g", c.Centre())
	}
	if err := c.Write(x.Slice(0, 800)); err != nil {
		t.Fatal(err)
	}
	// Transforms of 64 frames from 100, 132, ... to 420.
	if want := (100.0 + 420 + 64) / 2; c.Centre() != want || c.Frames() != 11 {
		t.Errorf("%d transforms around %g, want 11 around %g", c.Frames(), c.Centre(), want)
	}
	c.Reset()
	for at := 800; at < frames; at += 7 {
		if err := c.Write(x.Slice(at, min(at+7, frames))); err != nil {
			t.Fatal(err)
		}
	}
	d, err := NewCovariance(16000, 2, size, CovarianceOptions{Stretches: [][2]int64{{900, 1700}}})
	if err != nil {
		t.Fatal(err)
	}
	if err := d.Write(x); err != nil {
		t.Fatal(err)
	}
	if c.Frames() != d.Frames() || c.Centre() != d.Centre() || c.Centre() != 1300 {
		t.Errorf("%d transforms around %g after a reset, want %d around %g", c.Frames(), c.Centre(), d.Frames(), d.Centre())
	}
	// Powers are mean squares: of white noise of variance 1 over a 64-point window
	// 50 times, within its spread (a standard deviation of 5 %).
	for m, p := range d.Powers(nil) {
		if math.Abs(p-1) > 0.2 {
			t.Errorf("microphone %d: mean square %g, want 1", m+1, p)
		}
	}
	got, want := make([]complex128, 4), make([]complex128, 4)
	for k := range size/2 + 1 {
		c.Matrix(got, k)
		d.Matrix(want, k)
		for i := range got {
			if got[i] != want[i] {
				t.Fatalf("bin %d: %v after a reset, want %v", k, got, want)
			}
		}
	}
}
