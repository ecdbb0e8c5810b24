package quality

import (
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
)

// BenchmarkInspector inspects eight channels; the figure is the time of a
// second of sound.
func BenchmarkInspector(b *testing.B) {
	const frames = 1 << 17
	x := audio.NewBlock(8, frames)
	rng := rand.New(rand.NewPCG(1, 2))
	for ch := range 8 {
		for i := range x.Channel(ch) {
			x.Channel(ch)[i] = float32(0.05 * rng.NormFloat64())
		}
	}
	for b.Loop() {
		q, err := New(line8(), 48000, Options{})
		if err != nil {
			b.Fatal(err)
		}
		for at := 0; at < frames; at += 4096 {
			if err := q.Write(x.Slice(at, at+4096)); err != nil {
				b.Fatal(err)
			}
		}
		q.Result()
	}
	b.ReportMetric(float64(b.Elapsed().Milliseconds())/float64(b.N)*48000/frames, "ms/s")
}
