package calibration

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"alidade/pkg/audio"
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

// A calibrator that sits eight times as long costs little more than eight times
// the time: n·log n. That of n² would be 64 times, that of n³ 512.
func TestLongToneCostsInProportion(t *testing.T) {
	took := func(n int) time.Duration {
		rng := rand.New(rand.NewPCG(5, 6))
		frames := [][]toneFrame{make([]toneFrame, n)}
		for j := range n {
			frames[0][j] = toneFrame{db: -26 + 0.02*float32(rng.NormFloat64()), purity: 0.99, hz: 1000, peak: 0.1}
		}
		begun := time.Now()
		tone := stretch(frames, 0, Calibrator{LevelDB: 94, Hz: 1000}, 0.05, 0.1, true)
		if !tone.Found || tone.To < 0.049*float64(n) {
			t.Fatalf("%d frames: tone %+v", n, tone)
		}
		return time.Since(begun)
	}
	// The least of a few: the machine may be busy in either.
	least := math.Inf(1)
	for range 5 {
		least = min(least, 1/took(10_000).Seconds()*took(80_000).Seconds())
	}
	t.Logf("eight times the length takes %.1f times the time", least)
	if least > 24 {
		t.Errorf("eight times the length takes %.1f times the time, want at most 24", least)
	}
}

// Stretches come out as they lie in the stream, with silence outside it, and
// only those that overlap are kept at a time; claps beyond the first 200 are
// counted.
func TestCutterHandsOutStretches(t *testing.T) {
	const frames = 20_000
	b := audio.NewBlock(2, frames)
	for i := range frames {
		b.Channel(0)[i], b.Channel(1)[i] = float32(i+1), -float32(i+1)
	}
	firsts := []int64{-30, 10, 60, 5000, 8100, 19_950}
	next, most := 0, 0
	c := &cutter{first: firsts, length: 100}
	c.emit = func(j int, part audio.Block) error {
		if j != next || part.Frames() != 100 {
			t.Fatalf("stretch %d of %d frames, want stretch %d", j, part.Frames(), next)
		}
		next, most = next+1, max(most, len(c.open)+len(c.spare))
		for i := range 100 {
			want := float32(0)
			if at := firsts[j] + int64(i); at >= 0 && at < frames {
				want = float32(at + 1)
			}
			if part.Channel(0)[i] != want || part.Channel(1)[i] != -want {
				t.Fatalf("stretch %d, frame %d: %g, want %g", j, i, part.Channel(0)[i], want)
			}
		}
		return nil
	}
	if err := c.cut(audio.FromBlock(48000, b)); err != nil {
		t.Fatal(err)
	}
	if next != len(firsts) || most > 4 {
		t.Errorf("%d stretches, %d kept at a time", next, most)
	}

	clicks := audio.NewBlock(1, 48000*21)
	for k := range 205 {
		clicks.Channel(0)[4800*(k+1)] = 0.5
	}
	found, left, err := claps(audio.FromBlock(48000, clicks))
	if err != nil || len(found) != MaxClaps || left != 5 || !slices.IsSorted(found) {
		t.Errorf("%d claps, %d left out (%v), want 200 and 5", len(found), left, err)
	}
}
