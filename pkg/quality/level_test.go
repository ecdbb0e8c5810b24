package quality

import (
	"math"
	"slices"
	"testing"

	"alidade/pkg/audio"
)

// F16: a full-scale sine reads 0 dBFS (AES17-2020), -3.0103 dB re 1.0; a
// full-scale square wave reads +3.0103 dBFS.
func TestLevelsAreThoseOfAES17(t *testing.T) {
	const rate, frames = 48000, 48000
	b := audio.NewBlock(2, frames)
	for i := range frames {
		// 997 Hz, whole periods in a second.
		s := math.Sin(2 * math.Pi * 997 * (float64(i) + 0.25) / rate)
		b.Channel(0)[i] = float32(s)
		b.Channel(1)[i] = float32(math.Copysign(1, s))
	}
	r := inspected(t, line8()[:2], rate, b)
	for ch, want := range []float64{0, 3.0103} {
		if got := r.Channels[ch].RMSDBFS; math.Abs(got-want) > 1e-4 {
			t.Errorf("channel %d: %.4f dBFS, want %.4f", ch+1, got, want)
		}
	}
}

// The capsules of the ring of seven lie 4.9 to 8.8 dB below channel 7 (the data
// set's notes: direct sound from the front); the levels that the inspection
// gives of the direct sound are those within 0.5 dB.
func TestRealRingOfSevenLevels(t *testing.T) {
	rate, h := recorded(t, "ring7-room-responses/RLRVarAcLab_Absorptive_100_S000-200_R1_FRL10cm.wav")
	from, to := rate*9/1000, rate*125/10000 // the direct sound stands at 10 ms
	for ch := range h.Channels() {
		clear(h.Channel(ch)[:from])
		clear(h.Channel(ch)[to:])
	}
	r := inspected(t, ring7(t, false), rate, played(t, h, 5))
	var below []float64
	for ch := range 6 {
		below = append(below, r.Channels[6].RMSDBFS-r.Channels[ch].RMSDBFS)
	}
	t.Logf("below channel 7, dB: %.2f", below)
	if least, most := slices.Min(below), slices.Max(below); math.Abs(least-4.9) > 0.5 || math.Abs(most-8.8) > 0.5 {
		t.Errorf("%.2f to %.2f dB below channel 7, want 4.9 to 8.8 within 0.5", least, most)
	}
}
