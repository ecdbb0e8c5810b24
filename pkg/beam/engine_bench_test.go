package beam

import (
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/delay"
)

// noiseBlock is seeded white noise, different on every channel.
func noiseBlock(channels, frames int, seed uint64) audio.Block {
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		rng := rand.New(rand.NewPCG(seed, uint64(ch)))
		x := b.Channel(ch)
		for i := range x {
			x[i] = float32(rng.NormFloat64() * 0.2)
		}
	}
	return b
}

// lineDelays are the delays of a line of microphones, at most largest seconds
// either way.
func lineDelays(mics int, largest float64) []float64 {
	d := make([]float64, mics)
	for m := range d {
		d[m] = largest * (2*float64(m)/float64(max(1, mics-1)) - 1)
	}
	return d
}

func even(mics int) []float64 {
	a := make([]float64, mics)
	for m := range a {
		a[m] = 1 / float64(mics)
	}
	return a
}

// BenchmarkChoice compares the two engines that New chooses from.
func BenchmarkChoice(b *testing.B) {
	for _, mics := range []int{2, 4, 8, 16, 64} {
		delays := lineDelays(mics, 0.0009)
		for _, taps := range []int{16, 32, 64, 128} {
			kernel, _ := delay.NewSinc(taps)
			f, _ := DelayAndSum(kernel, 48000, delays, even(mics))
			name := fmt.Sprintf("%dmics%dtaps", mics, taps)
			b.Run("convolver"+name, func(b *testing.B) {
				benchmarkEngineOf(b, mics, func(s audio.Source) (audio.Source, error) { return NewConvolver(s, f) })
			})
			b.Run("overlapsave"+name, func(b *testing.B) {
				benchmarkEngineOf(b, mics, func(s audio.Source) (audio.Source, error) { return NewOverlapSave(s, f) })
			})
		}
	}
}

func benchmarkEngine(b *testing.B, open func(src audio.Source) (audio.Source, error)) {
	benchmarkEngineOf(b, 16, open)
}

func benchmarkEngineOf(b *testing.B, mics int, open func(src audio.Source) (audio.Source, error)) {
	const rate, seconds = 48000, 4
	take := audio.FromBlock(rate, noiseBlock(mics, rate*seconds, 1))
	src, err := open(take)
	if err != nil {
		b.Fatal(err)
	}
	dst := audio.NewBlock(src.Format().Channels, 4096)
	b.ReportAllocs()
	for b.Loop() {
		take.Rewind()
		src, _ = open(take)
		for {
			if _, err := src.Read(dst); errors.Is(err, io.EOF) {
				break
			}
		}
	}
	perRun := b.Elapsed().Seconds() / float64(b.N)
	b.ReportMetric(seconds/perRun, "x-realtime")
	b.ReportMetric(perRun*1e9/float64(mics*rate*seconds), "ns/sample")
}

func BenchmarkEngine(b *testing.B) {
	sinc64, _ := delay.NewSinc(64)
	sinc128, _ := delay.NewSinc(128)
	farrow, _ := delay.NewFarrow(32, 6)
	delays := lineDelays(16, 0.0009)
	f64, _ := DelayAndSum(sinc64, 48000, delays, even(16))
	f128, _ := DelayAndSum(sinc128, 48000, delays, even(16))
	f32, _ := DelayAndSum(farrow, 48000, delays, even(16))
	b.Run("convolver64", func(b *testing.B) {
		benchmarkEngine(b, func(s audio.Source) (audio.Source, error) { return NewConvolver(s, f64) })
	})
	b.Run("convolver32", func(b *testing.B) {
		benchmarkEngine(b, func(s audio.Source) (audio.Source, error) { return NewConvolver(s, f32) })
	})
	b.Run("overlapsave128", func(b *testing.B) {
		benchmarkEngine(b, func(s audio.Source) (audio.Source, error) { return NewOverlapSave(s, f128) })
	})
	b.Run("overlapsave128x8", func(b *testing.B) {
		benchmarkEngine(b, func(s audio.Source) (audio.Source, error) {
			return NewOverlapSaveMany(s, []*Filters{f128, f64, f128, f64, f128, f64, f128, f64})
		})
	})
	b.Run("glide", func(b *testing.B) {
		benchmarkEngine(b, func(s audio.Source) (audio.Source, error) {
			return NewGlide(s, Glide{Kernel: farrow, Amplitudes: even(16), Every: 64, LargestDelay: 0.002, Delays: func(_ int64, d []float64) { copy(d, delays) }})
		})
	})
}
