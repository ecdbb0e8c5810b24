package measure

import (
	"math"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
)

// noiseBlock is Gaussian noise, another one in every channel.
func noiseBlock(channels, frames int, sigma float64, seed uint64) audio.Block {
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		r := rand.New(rand.NewPCG(seed, uint64(ch)))
		x := b.Channel(ch)
		for i := range x {
			x[i] = float32(sigma * r.NormFloat64())
		}
	}
	return b
}

// metered runs b through a meter in blocks of the given size.
func metered(t testing.TB, rate int, b audio.Block, size int, o MeterOptions) *Meter {
	t.Helper()
	m, err := NewMeter(audio.Format{Rate: rate, Channels: b.Channels()}, o)
	if err != nil {
		t.Fatal(err)
	}
	for at := 0; at < b.Frames(); at += size {
		if err := m.Write(b.Slice(at, min(at+size, b.Frames()))); err != nil {
			t.Fatal(err)
		}
	}
	if err := m.Close(); err != nil {
		t.Fatal(err)
	}
	return m
}

func TestFullScaleSineReadsZero(t *testing.T) {
	// F16: AES17, a full-scale sine is 0 dBFS.
	const rate = 48000
	for _, band := range append(ThirdOctaves(rate), Octaves(rate)...) {
		b := audio.NewBlock(1, 2*rate)
		x := b.Channel(0)
		for i := range x {
			x[i] = float32(math.Sin(2*math.Pi*band.CentreHz/rate*float64(i) + 0.3))
		}
		m := metered(t, rate, b, 5000, MeterOptions{})
		series := m.Thirds()
		if band.HighHz > 1.5*band.LowHz {
			series = m.Octaves()
		}
		for i, p := range series.Level(nil) {
			if series.Tracks[i].Band == band {
				// 0.4 dB is the class 1 limit at mid-band; the narrowest bands
				// lose 0.02 dB of the sine in their skirts.
				if db := audio.PowerDB(p); math.Abs(db) > 0.03 {
					t.Errorf("band %g Hz: full-scale sine at mid-band reads %.3f dBFS", band.NominalHz, db)
				}
			}
		}
	}
}
