package delay

import (
	"math"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

func farrow(t *testing.T) *Farrow {
	t.Helper()
	k, err := NewFarrow(32, 6)
	if err != nil {
		t.Fatal(err)
	}
	return k
}

// A tone that a clock has recorded ppm too fast comes out at its own frequency
// and phase: the error is that of the Farrow delay, -85 dB, at 0.3 of the rate.
func TestDriftIsUndone(t *testing.T) {
	const rate, frames, first = 48000, 40000, 3 * 48000
	ppm := []float64{0, 20, -20, 300, -1000}
	w := 2 * math.Pi * 0.3
	x := audio.NewBlock(len(ppm), frames)
	for ch, p := range ppm {
		for i := range frames {
			n := float64(first + i)
			x.Channel(ch)[i] = float32(0.5 * math.Sin(w*n/(1+p*1e-6)+float64(ch)))
		}
	}
	src, err := NewDrift(audio.FromBlock(rate, x), farrow(t), ppm, first)
	if err != nil {
		t.Fatal(err)
	}
	y, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	if y.Frames() != frames {
		t.Fatalf("%d frames, want %d", y.Frames(), frames)
	}
	for ch := range ppm {
		sum := 0.0
		const from, to = 1000, frames - 1000 // within what every clock has recorded
		for i := from; i < to; i++ {
			e := float64(y.Channel(ch)[i]) - 0.5*math.Sin(w*float64(first+i)+float64(ch))
			sum += e * e
		}
		if db := 10 * math.Log10(sum/(to-from)/0.125); !(db < -85) {
			t.Errorf("%g ppm: error %.1f dB, want below -85", ppm[ch], db)
		}
	}
}

// The stage against its definition, frame by frame in double precision, in
// blocks of every size.
func TestDriftKeepsTheContract(t *testing.T) {
	const rate, frames, first = 48000, 3000, 20000
	in := noise(3, frames, 4)
	ppm := []float64{0, 900, -900}
	k := farrow(t)
	want := audio.NewBlock(3, frames)
	var taps []float64
	for ch, p := range ppm {
		for i := range frames {
			var start int
			start, taps = k.Taps(taps, -p*1e-6*float64(first+i))
			sum := 0.0
			for n, h := range taps {
				if j := i - start - n; j >= 0 && j < frames {
					sum += h * float64(in.Channel(ch)[j])
				}
			}
			if p == 0 {
				sum = float64(in.Channel(ch)[i])
			}
			want.Channel(ch)[i] = float32(sum)
		}
	}
	stage := func(up audio.Source) audio.Source {
		s, err := NewDrift(up, k, ppm, first)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	audiotest.TestStage(t, rate, in, stage, want, audiotest.Options{Tolerance: 1e-5, Sizes: []int{driftHop}, Lookahead: 2048, Rate: rate})
}

func TestDriftRefuses(t *testing.T) {
	src := audio.FromBlock(48000, noise(2, 100, 1))
	for _, c := range []struct {
		ppm   []float64
		first int64
	}{{[]float64{1}, 0}, {[]float64{1, math.NaN()}, 0}, {[]float64{1, 10001}, 0}, {[]float64{1, 2}, -1}} {
		if _, err := NewDrift(src, farrow(t), c.ppm, c.first); err == nil {
			t.Errorf("%+v: no error", c)
		}
	}
	s, err := NewDrift(src, farrow(t), []float64{0, 1000}, 1<<40)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.ReadAll(s); err == nil || !strings.Contains(err.Error(), "channel 2: its clock is") {
		t.Errorf("clocks far apart: %v", err)
	}
}
