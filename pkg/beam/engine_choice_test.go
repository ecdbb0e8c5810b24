package beam

import (
	"fmt"
	"math"
	"testing"

	"alidade/pkg/delay"
)

// TestTheEngineIsChosenByCost holds that both engines are the same beam, and
// that long filters for many microphones go through transforms, short ones for
// few do not (as BenchmarkChoice measures), nor do taps that lie far
// apart.
func TestTheEngineIsChosenByCost(t *testing.T) {
	for _, c := range []struct {
		mics, taps int
		frequency  bool
	}{{2, 16, false}, {2, 32, false}, {16, 16, false}, {16, 32, true}, {4, 64, true}, {16, 64, true}, {64, 64, true}, {2, 128, true}} {
		t.Run(fmt.Sprintf("%d microphones, %d taps", c.mics, c.taps), func(t *testing.T) {
			kernel, err := delay.NewSinc(c.taps)
			if err != nil {
				t.Fatal(err)
			}
			f, err := DelayAndSum(kernel, 48000, lineDelays(c.mics, 0.0009), even(c.mics))
			if err != nil {
				t.Fatal(err)
			}
			if got := cheaperInFrequency(f); got != c.frequency {
				t.Errorf("in the frequency domain: %v, want %v", got, c.frequency)
			}
			x := noiseBlock(c.mics, 5000, 9)
			a, b, chosen := beamOf(t, NewConvolver, f, x), beamOf(t, NewOverlapSave, f, x), beamOf(t, New, f, x)
			var e2, s2 float64
			for i := range a {
				e2 += float64(a[i]-b[i]) * float64(a[i]-b[i])
				s2 += float64(a[i]) * float64(a[i])
			}
			if db := 10 * math.Log10(e2/s2); db > -115 {
				t.Errorf("the engines are %.1f dB apart", db)
			}
			want := a
			if c.frequency {
				want = b
			}
			for i := range want {
				if chosen[i] != want[i] {
					t.Fatalf("frame %d: %g, want %g", i, chosen[i], want[i])
				}
			}
		})
	}
	far, err := delay.NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	f, err := DelayAndSum(far, 384000, []float64{0, 0.3}, even(2))
	if err != nil {
		t.Fatal(err)
	}
	if cheaperInFrequency(f) {
		t.Error("taps 115,200 frames apart go through a transform")
	}
}
