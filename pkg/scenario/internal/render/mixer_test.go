package render

import (
	"math"
	"math/rand/v2"
	"testing"
)

// recordingOf returns a recording whose frame 0 is x[0], from frame first on.
func recordingOf(x []float64, first int64) Mono { return &Recording{X: x, Frame: first} }

func randomBank(rng *rand.Rand, outputs, inputs, length, start int) *Bank {
	b := &Bank{Start: start, Taps: make([][][]float64, outputs)}
	for m := range outputs {
		for range inputs {
			h := make([]float64, length)
			for t := range h {
				h[t] = rng.NormFloat64()
			}
			b.Taps[m] = append(b.Taps[m], h)
		}
	}
	return b
}

// Overlap-save against the defining sum, over lengths on both sides of the
// block sizes.
func TestMixerIsTheDefiningSum(t *testing.T) {
	for _, v := range []struct{ outputs, inputs, length, start int }{
		{1, 1, 1, 0}, {2, 3, 5, -3}, {3, 2, 128, -70}, {1, 1, 1023, 4}, {2, 1, 1025, -1025}, {1, 2, 3000, -9000},
	} {
		rng := rand.New(rand.NewPCG(uint64(v.length), 9))
		bank := randomBank(rng, v.outputs, v.inputs, v.length, v.start)
		x := make([][]float64, v.inputs)
		in := make([]Mono, v.inputs)
		const first = -100
		for j := range x {
			x[j] = make([]float64, 7000)
			for i := range x[j] {
				x[j][i] = rng.NormFloat64()
			}
			in[j] = recordingOf(x[j], first-bank.Lead())
		}
		mixer := NewMixer(bank, in)
		got := make([][]float64, v.outputs)
		const frames = 2 * HopFrames
		for m := range got {
			got[m] = make([]float64, frames)
		}
		for at := 0; at < frames; at += HopFrames {
			rows := make([][]float64, v.outputs)
			for m := range rows {
				rows[m] = got[m][at : at+HopFrames]
			}
			mixer.Add(rows)
		}
		var worst, scale float64
		for m := range got {
			for i := 0; i < frames; i += 37 {
				var want float64
				for j := range x {
					for s, h := range bank.Taps[m][j] {
						if k := first + i - v.start - s; k >= 0 && k < len(x[j]) {
							want += h * x[j][k]
						}
					}
				}
				worst = math.Max(worst, math.Abs(got[m][i]-want))
				scale = math.Max(scale, math.Abs(want))
			}
		}
		if scale == 0 || worst > 1e-12*scale*10 {
			t.Errorf("%+v: largest difference %g of %g", v, worst, scale)
		}
	}
}

func TestSumOfBanksRespondsLikeBoth(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	a, b := randomBank(rng, 3, 1, 20, -7), randomBank(rng, 3, 1, 90, 11)
	s := Sum(a, b)
	for m := range 3 {
		for _, omega := range []float64{0, 0.3, 1.7, math.Pi} {
			got, want := s.Response(m, 0, omega), a.Response(m, 0, omega)+b.Response(m, 0, omega)
			if d := got - want; math.Hypot(real(d), imag(d)) > 1e-11 {
				t.Errorf("response %d at %g = %v, want %v", m, omega, got, want)
			}
		}
	}
}

func TestMixerDoesNotAllocateOnceWarm(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 8))
	bank := randomBank(rng, 4, 1, 200, 0)
	m := NewMixer(bank, []Mono{&Gaussian{rng}})
	rows := make([][]float64, 4)
	for i := range rows {
		rows[i] = make([]float64, HopFrames)
	}
	if n := testing.AllocsPerRun(20, func() { m.Add(rows) }); n != 0 {
		t.Errorf("%g allocations a hop, want 0", n)
	}
}
