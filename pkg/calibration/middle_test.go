package calibration

import (
	"math/rand/v2"
	"testing"
	"time"
)

// The running median is the median of all so far, by sorting them.
func TestRunningMedian(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	var r runningMedian
	var all []float64
	for range 500 {
		v := float64(rng.IntN(60)) // with many that are alike
		r.add(v)
		if all = append(all, v); r.median() != median(all) || r.count() != len(all) {
			t.Fatalf("median of %d numbers %g, want %g", len(all), r.median(), median(all))
		}
	}
}

// A calibrator that sits twice as long costs little more than twice the time:
// n·log n. That of n² would be four times, that of n³ eight.
func TestLongToneCostsInProportion(t *testing.T) {
	took := func(n int) time.Duration {
		rng := rand.New(rand.NewPCG(5, 6))
		frames := [][]toneFrame{make([]toneFrame, n)}
		for j := range n {
			frames[0][j] = toneFrame{db: -26 + 0.02*float32(rng.NormFloat64()), purity: 0.99, hz: 1000, peak: 0.1}
		}
		best := time.Hour
		for range 5 {
			begun := time.Now()
			tone := stretch(frames, 0, Calibrator{LevelDB: 94, Hz: 1000}, 0.05, 0.1, true)
			best = min(best, time.Since(begun))
			if !tone.Found || tone.To < 0.049*float64(n) {
				t.Fatalf("%d frames: tone %+v", n, tone)
			}
		}
		return best
	}
	short, long := took(40_000), took(80_000)
	t.Logf("40000 frames in %s, 80000 in %s: %.2f times", short, long, long.Seconds()/short.Seconds())
	if long > 3*short {
		t.Errorf("twice the length takes %.2f times the time, want at most 3", long.Seconds()/short.Seconds())
	}
}
