package measure

import (
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

func TestSinksKeepTheContract(t *testing.T) {
	in := noiseBlock(3, 12345, 0.2, 17)
	format := audio.Format{Rate: 16000, Channels: 3}
	numbers := func(list []*Series, levels []Level) (out []float64) {
		for _, s := range list {
			for _, tr := range s.Tracks {
				for _, p := range tr.Power {
					out = append(out, float64(p))
				}
			}
		}
		for _, l := range levels {
			out = append(out, l.RMSDBFS, l.PeakDBFS, l.DC, float64(l.ClippedFrames))
		}
		return out
	}
	t.Run("meter", func(t *testing.T) {
		audiotest.TestSink(t, func() (audio.Sink, func() []float64) {
			m, err := NewMeter(format, MeterOptions{PerChannel: true})
			if err != nil {
				t.Fatal(err)
			}
			return m, func() []float64 {
				if err := m.Close(); err != nil {
					t.Fatal(err)
				}
				return numbers(append([]*Series{m.Thirds(), m.Octaves()}, m.ChannelThirds()...), m.Levels())
			}
		}, in, false, audiotest.Options{Sizes: []int{255, 256, 257, 512}})
	})
	t.Run("totals", func(t *testing.T) {
		audiotest.TestSink(t, func() (audio.Sink, func() []float64) {
			all := NewTotals(3)
			return all, func() []float64 { return numbers(nil, all.Levels()) }
		}, in, false, audiotest.Options{})
	})
	t.Run("coherence", func(t *testing.T) {
		audiotest.TestSink(t, func() (audio.Sink, func() []float64) {
			c, err := NewCoherence(format, [][2]int{{0, 2}}, 512)
			if err != nil {
				t.Fatal(err)
			}
			return c, func() (out []float64) {
				for _, v := range c.Of(nil, 0) {
					out = append(out, real(v), imag(v))
				}
				return out
			}
		}, in, false, audiotest.Options{Sizes: []int{512}})
	})
}
