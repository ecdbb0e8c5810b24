package calibration

import (
	"math"
	"math/cmplx"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
	"alidade/pkg/scenario"
)

// coloured filters a channel of a block with taps, the first at no delay.
func coloured(x []float32, taps []float64) {
	y := make([]float32, len(x))
	for i := range x {
		sum := 0.0
		for t, v := range taps {
			if i >= t {
				sum += v * float64(x[i-t])
			}
		}
		y[i] = float32(sum)
	}
	copy(x, y)
}

// transferOf is the response of causal taps at hz.
func transferOf(taps []float64, hz, rate float64) complex128 {
	var sum complex128
	for t, v := range taps {
		sum += complex(v, 0) * cmplx.Rect(1, -2*math.Pi*hz/rate*float64(t))
	}
	return sum
}

// Microphones that differ over frequency: the response of each against the mean
// of all is that of the filters that make it, octave by octave, and what the
// correction filters leave is small. Gain and delay of a filtered channel are
// what its broad band says, so level and phase are compared after a gain and a
// delay are taken out, by their differences between octaves.
func TestResponsesOfChannels(t *testing.T) {
	filters := map[int][]float64{1: {0.9, 0.25, 0.1}, 4: {1, -0.3, 0.05, 0.02}, 6: {0.8, 0, 0, 0.15, 0.1}}
	f := makeFaulty(t, solid8(0.08), 31, wideband(40, 0), -50, 3, func(s *scenario.Scenario) { s.Faults = nil })
	for m := range f.gainDB {
		f.gainDB[m], f.delay[m], f.inverse[m] = 0, 0, false
	}
	for ch, taps := range filters {
		coloured(f.block.Channel(ch), taps)
	}
	r, err := f.compare(t, 40, 0, nil, Options{Responses: true})
	if err != nil {
		t.Fatal(err)
	}
	rate := float64(f.rate)
	// The truth at a frequency: each channel against the mean of the logarithms.
	truth := func(hz float64) []complex128 {
		var list []complex128
		mean := complex(0, 0)
		for ch := range 8 {
			h := complex(1, 0)
			if taps := filters[ch]; taps != nil {
				h = transferOf(taps, hz, rate)
			}
			list = append(list, cmplx.Log(h))
			mean += list[ch] / 8
		}
		for ch := range list {
			list[ch] -= mean
		}
		return list
	}
	const dB = 20 / math.Ln10
	worst, before, after := 0.0, 0.0, 0.0
	for m, c := range r.Channels {
		if c.Response == nil {
			t.Fatalf("channel %d has no response", m+1)
		}
		if len(c.Response.Bands) < 4 || len(c.Response.Taps)%2 == 0 {
			t.Fatalf("channel %d: %d octaves, %d taps", m+1, len(c.Response.Bands), len(c.Response.Taps))
		}
		for _, b := range c.Response.Bands {
			// Mean over the octave of the truth, the channel's gain taken out.
			want, n := 0.0, 0.0
			for hz := b.CentreHz * math.Pow(10, -0.15); hz < b.CentreHz*math.Pow(10, 0.15); hz += 25 {
				want += dB * real(truth(hz)[m])
				n++
			}
			worst = math.Max(worst, math.Abs(b.LevelDB-(want/n-c.LevelDB)))
		}
		// With gain, delay and filter corrected the channel agrees with the others:
		// what is left at single frequencies, against the mean over the channels.
		half := (len(c.Response.Taps) - 1) / 2
		for hz := 500.0; hz < 14000; hz *= 1.1 {
			left := truth(hz)[m] - complex(c.LevelDB/dB, -2*math.Pi*hz*c.Late)
			before = math.Max(before, cmplx.Abs(left))
			left += cmplx.Log(transferOf(c.Response.Taps, hz, rate) * cmplx.Rect(1, 2*math.Pi*hz/rate*float64(half)))
			after = math.Max(after, cmplx.Abs(left))
		}
	}
	t.Logf("octaves within %.3f dB; error of a channel, re 1: %.3f before, %.3f after correction", worst, before, after)
	if worst > 0.1 {
		t.Errorf("octaves within %.3f dB, want 0.1 dB", worst)
	}
	if after > 0.03 || before < 0.1 {
		t.Errorf("error of a channel %.3f before and %.3f after correction, want above 0.1 and below 0.03", before, after)
	}
}

func TestTakesWithoutResponses(t *testing.T) {
	f := makeFaulty(t, solid8(0.08), 32, wideband(40, 0), -22, 0.2, nil)
	_, err := f.compare(t, 40, 0, nil, Options{Responses: true})
	refused(t, "short and noisy", err, "does not carry responses")
}

// Undo is a stage like any other, is exact for single taps, and leaves channels
// without taps alone.
func TestUndoIsAStage(t *testing.T) {
	in := audio.NewBlock(3, 5000)
	for ch := range 3 {
		for i := range in.Channel(ch) {
			in.Channel(ch)[i] = float32(math.Sin(float64(i*(ch+3)) * 0.37))
		}
	}
	taps := [][]float64{nil, {0.25, 0.5, -0.125}, {1, 0, 0, 0, 0}}
	s, err := Undo(audio.FromBlock(48000, in), taps)
	if err != nil {
		t.Fatal(err)
	}
	out, err := audio.ReadAll(s)
	if err != nil {
		t.Fatal(err)
	}
	at := func(ch, i int) float64 {
		if i < 0 || i >= in.Frames() {
			return 0
		}
		return float64(in.Channel(ch)[i])
	}
	for i := range out.Frames() {
		want := []float64{at(0, i), 0.25*at(1, i+1) + 0.5*at(1, i) - 0.125*at(1, i-1), at(2, i+2)}
		for ch, w := range want {
			if d := math.Abs(float64(out.Channel(ch)[i]) - w); d > 1e-6 {
				t.Fatalf("channel %d, frame %d: %g, want %g", ch, i, out.Channel(ch)[i], w)
			}
		}
	}
	audiotest.TestSource(t, func() audio.Source {
		s, err := Undo(audio.FromBlock(48000, in), taps)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}, out, audiotest.Options{})
	if _, err := Undo(audio.FromBlock(48000, in), [][]float64{nil, {1, 2}, nil}); err == nil {
		t.Error("an even number of taps has no middle")
	}
}
