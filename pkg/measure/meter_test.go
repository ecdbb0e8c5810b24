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

func TestWhiteNoiseRisesAndThirdsMakeOctaves(t *testing.T) {
	// G10: white noise through constant-percentage bands rises by 1.000 dB a
	// third and 3.000 dB an octave; an octave is the sum of its thirds.
	const rate, sigma = 48000, 0.1
	m := metered(t, rate, noiseBlock(2, 40*rate, sigma, 3), 10000, MeterOptions{})
	thirds, octaves := m.Thirds(), m.Octaves()
	level := thirds.Level(nil)
	for b, p := range level {
		band := thirds.Tracks[b].Band
		// White noise of variance σ² has 2σ² re a full-scale sine over rate/2.
		want := audio.PowerDB(2 * sigma * sigma * band.Width() / (rate / 2))
		// Standard deviation 4.343/√(B·T·channels) (J3), 4 of them, and 6 %
		// fewer samples through windows overlapped by half.
		limit := 4 * 1.03 * 4.343 / math.Sqrt(band.Width()*40*2)
		if got := audio.PowerDB(p); math.Abs(got-want) > limit {
			t.Errorf("band %g Hz: white noise reads %.3f dBFS, want %.3f within %.3f", band.NominalHz, got, want, limit)
		}
	}
	for i, p := range octaves.Level(nil) {
		if 3*i+2 >= len(level) {
			continue
		}
		sum := level[3*i] + level[3*i+1] + level[3*i+2]
		// Thirds may come from other windows than the octave.
		if d := audio.PowerDB(p / sum); math.Abs(d) > 0.15 {
			t.Errorf("octave %g Hz is %.3f dB off the sum of its thirds", octaves.Tracks[i].Band.NominalHz, d)
		}
	}
}

func TestMeterIsTheSameForAnyBlockSize(t *testing.T) {
	const rate = 16000
	b := noiseBlock(3, 3*rate+123, 0.2, 8)
	o := MeterOptions{Used: []int{2, 0}, PerChannel: true}
	want := metered(t, rate, b, b.Frames(), o)
	for _, size := range []int{1, 7, 255, 256, 257, 512, 4096} {
		got := metered(t, rate, b, size, o)
		for ch, l := range got.Levels() {
			w := want.Levels()[ch]
			if l != w && !(math.IsNaN(l.AWeightedDBFS) && math.IsNaN(w.AWeightedDBFS) && l.RMSDBFS == w.RMSDBFS && l.DC == w.DC) {
				t.Fatalf("blocks of %d: channel %d: %+v, want %+v", size, ch+1, l, w)
			}
		}
		all := append([]*Series{got.Thirds(), got.Octaves()}, append(got.ChannelThirds(), got.ChannelOctaves()...)...)
		ref := append([]*Series{want.Thirds(), want.Octaves()}, append(want.ChannelThirds(), want.ChannelOctaves()...)...)
		for s := range all {
			for i := range all[s].Tracks {
				a, r := all[s].Tracks[i], ref[s].Tracks[i]
				if len(a.Power) != len(r.Power) || len(a.Power) == 0 {
					t.Fatalf("blocks of %d: band %g Hz: %d entries, want %d", size, a.Band.NominalHz, len(a.Power), len(r.Power))
				}
				for j := range a.Power {
					if a.Power[j] != r.Power[j] {
						t.Fatalf("blocks of %d: band %g Hz entry %d: %g, want %g", size, a.Band.NominalHz, j, a.Power[j], r.Power[j])
					}
				}
			}
		}
	}
}

func TestReferenceIsTheMeanOverUsedChannels(t *testing.T) {
	const rate = 16000
	b := noiseBlock(4, 2*rate, 0.1, 5)
	for i, x := range b.Channel(1) {
		b.Channel(1)[i] = 9 * x
	}
	m := metered(t, rate, b, 1000, MeterOptions{Used: []int{3, 0, 2}, PerChannel: true})
	each := m.ChannelThirds()
	for i, tr := range m.Thirds().Tracks {
		for j, p := range tr.Power {
			if each[0].Tracks[i].HopS != tr.HopS {
				break // channels of short windows are kept in longer entries
			}
			sum := 0.0
			for _, s := range each {
				sum += float64(s.Tracks[i].Power[j])
			}
			if math.Abs(sum/3/float64(p)-1) > 1e-6 {
				t.Fatalf("band %g Hz entry %d: mean %g, want %g", tr.Band.NominalHz, j, p, sum/3)
			}
		}
	}
	for i, ch := range []int{3, 0, 2} {
		one := metered(t, rate, b, 1000, MeterOptions{Used: []int{ch}})
		for k, p := range one.BandPower(0) {
			if q := m.BandPower(i)[k]; p != q {
				t.Fatalf("channel %d band %d: %g among others, %g alone", ch+1, k, q, p)
			}
		}
	}
}

func TestMemoryIsBoundedByMergingPairs(t *testing.T) {
	const rate = 8000
	b := noiseBlock(2, 60*rate, 0.1, 6)
	fine := metered(t, rate, b, 4096, MeterOptions{PerChannel: true})
	small := MeterOptions{PerChannel: true, SeriesBytes: 30000, ChannelBytes: 20000}
	coarse := metered(t, rate, b, 4096, small)
	count := func(list ...*Series) (bytes int) {
		for _, s := range list {
			for _, tr := range s.Tracks {
				bytes += 4 * len(tr.Power)
			}
		}
		return bytes
	}
	// A store keeps 64 entries at least.
	least := 4 * 64 * (len(ThirdOctaves(rate)) + len(Octaves(rate)))
	if got := count(coarse.Thirds(), coarse.Octaves()); got > max(30000, least) {
		t.Errorf("%d bytes, want at most %d", got, max(30000, least))
	}
	if got := count(append(coarse.ChannelThirds(), coarse.ChannelOctaves()...)...); got > max(20000, 2*least) {
		t.Errorf("%d bytes of channels, want at most %d", got, max(20000, 2*least))
	}
	merged := false
	for i, c := range coarse.Thirds().Tracks {
		f := fine.Thirds().Tracks[i]
		m := int(math.Round(c.HopS / f.HopS))
		merged = merged || m > 1
		if want := float64(m-1)*f.HopS + f.LengthS; math.Abs(c.LengthS-want) > 1e-12 {
			t.Errorf("band %g Hz: %d entries merged last %g s, want %g", c.Band.NominalHz, m, c.LengthS, want)
		}
		for j, p := range c.Power {
			sum := 0.0
			for _, q := range f.Power[j*m : (j+1)*m] {
				sum += float64(q)
			}
			if math.Abs(float64(p)/(sum/float64(m))-1) > 1e-5 {
				t.Fatalf("band %g Hz entry %d: %g, want %g", c.Band.NominalHz, j, p, sum/float64(m))
			}
		}
	}
	if !merged {
		t.Error("nothing was merged: the test shows nothing")
	}
}

func TestLevelsOfAChannel(t *testing.T) {
	// F16: full-scale sine 0 dBFS, square wave +3.01 dBFS (AES17); RMS re 1.0 of
	// the sine is -3.0103 dB.
	const rate, n = 48000, 48000
	b := audio.NewBlock(5, n)
	for i := range n {
		s := math.Sin(2 * math.Pi * 997 / rate * float64(i))
		b.Channel(0)[i] = float32(s)
		b.Channel(1)[i] = float32(math.Copysign(1, s))
		b.Channel(2)[i] = float32(0.25 + 0.1*s)
		b.Channel(4)[i] = float32(0.001 * s)
	}
	// Full scale: one sample, two, then three and five in a row.
	at := 100
	for _, run := range []int{1, 2, 3, 5} {
		for i := range run {
			b.Channel(4)[at+i] = -32767.0 / 32768
		}
		at += 50
	}
	l := metered(t, rate, b, 777, MeterOptions{}).Levels()
	for _, c := range []struct {
		name              string
		got, want, within float64
	}{
		{"sine RMS", l[0].RMSDBFS, 0, 1e-4},
		{"sine RMS re 1", l[0].RMSDBFS - 3.0103, -3.0103, 1e-4},
		{"square RMS", l[1].RMSDBFS, 3.0103, 1e-4},
		{"sine peak", l[0].PeakDBFS, 0, 1e-3},
		{"offset", l[2].DC, 0.25, 1e-6},
		{"peak with offset", l[2].PeakDBFS, 20 * math.Log10(0.35), 1e-3},
		{"clipped", float64(l[4].ClippedFrames), 8, 0},
		{"frames", float64(l[3].Frames), n, 0},
	} {
		if math.Abs(c.got-c.want) > c.within {
			t.Errorf("%s: got %.5f, want %.5f", c.name, c.got, c.want)
		}
	}
	if !math.IsInf(l[3].RMSDBFS, -1) || !math.IsInf(l[3].PeakDBFS, -1) || l[3].ClippedFrames != 0 {
		t.Errorf("silence: %+v", l[3])
	}
	// 997 Hz: the A-weighting of the 1 kHz band is 0 dB.
	if math.Abs(l[0].AWeightedDBFS) > 0.02 {
		t.Errorf("A-weighted full-scale sine at 997 Hz: %.3f dBFS, want 0", l[0].AWeightedDBFS)
	}
}

func TestWriteAllocatesNothing(t *testing.T) {
	m, err := NewMeter(audio.Format{Rate: 48000, Channels: 4}, MeterOptions{PerChannel: true})
	if err != nil {
		t.Fatal(err)
	}
	b := noiseBlock(4, 1500, 0.1, 1)
	if n := testing.AllocsPerRun(200, func() {
		if err := m.Write(b); err != nil {
			t.Fatal(err)
		}
	}); n != 0 {
		t.Errorf("%g allocations a block, want 0", n)
	}
}

func TestMeterRefusesWhatItCannotMeasure(t *testing.T) {
	f := audio.Format{Rate: 48000, Channels: 2}
	bad := audio.NewBlock(2, 5000)
	bad.Channel(1)[2500] = float32(math.NaN())
	inf := audio.NewBlock(2, 100)
	inf.Channel(0)[7] = float32(math.Inf(1))
	write := func(b audio.Block, thenClose bool) func() error {
		return func() error {
			m, err := NewMeter(f, MeterOptions{})
			if err != nil {
				t.Fatal(err)
			}
			if err := m.Write(b); err != nil || !thenClose {
				return err
			}
			return m.Close()
		}
	}
	for name, run := range map[string]func() error{
		"rate too low":      func() error { _, err := NewMeter(audio.Format{Rate: 4000, Channels: 1}, MeterOptions{}); return err },
		"rate too high":     func() error { _, err := NewMeter(audio.Format{Rate: 400000, Channels: 1}, MeterOptions{}); return err },
		"no channels":       func() error { _, err := NewMeter(audio.Format{Rate: 48000}, MeterOptions{}); return err },
		"nothing used":      func() error { _, err := NewMeter(f, MeterOptions{Used: []int{}}); return err },
		"unknown channel":   func() error { _, err := NewMeter(f, MeterOptions{Used: []int{2}}); return err },
		"channel twice":     func() error { _, err := NewMeter(f, MeterOptions{Used: []int{1, 1}}); return err },
		"three channels":    write(audio.NewBlock(3, 10), false),
		"not a number":      write(bad, false),
		"infinite, at rest": write(inf, true),
		"after close": func() error {
			m, err := NewMeter(f, MeterOptions{})
			if err != nil {
				t.Fatal(err)
			}
			if err := m.Close(); err != nil {
				t.Fatal(err)
			}
			return m.Write(audio.NewBlock(2, 1))
		},
	} {
		if err := run(); err == nil {
			t.Errorf("%s: no error", name)
		} else {
			t.Logf("%s: %v", name, err)
		}
	}
	if err := write(bad, false)(); err == nil || err.Error() != "measure: channel 2: frame 2500: sample is NaN" {
		t.Errorf("error is %v", err)
	}
}

func TestShortSignalsHaveNoBandPower(t *testing.T) {
	for _, frames := range []int{0, 1, 2047, 2048, 2049} {
		m := metered(t, 48000, noiseBlock(1, frames, 0.1, 2), 512, MeterOptions{})
		p := m.BandPower(0)
		if high := !math.IsNaN(p[len(p)-1]); high != (frames >= 2048) {
			t.Errorf("%d frames: 16 kHz measured is %t", frames, high)
		}
		if !math.IsNaN(p[0]) {
			t.Errorf("%d frames: 50 Hz reads %g, want none", frames, p[0])
		}
		if got := m.Levels()[0].Frames; got != int64(frames) {
			t.Errorf("%d frames counted as %d", frames, got)
		}
	}
}

func TestTracksStandWhereTheSoundIs(t *testing.T) {
	// A burst from 1.0 to 1.5 s: entries wholly before and after it are silent,
	// entries wholly inside hold its level.
	const rate = 44100
	b := audio.NewBlock(1, 3*rate)
	r := rand.New(rand.NewPCG(1, 2))
	for i := rate; i < rate*3/2; i++ {
		b.Channel(0)[i] = float32(0.1 * r.NormFloat64())
	}
	m := metered(t, rate, b, 1000, MeterOptions{})
	for _, tr := range m.Thirds().Tracks {
		loud := mean(tr.Power, tr.inside([]Stretch{{1, 1.5}}))
		for _, s := range []Stretch{{0, 1}, {1.5, 3}} {
			for _, j := range tr.inside([]Stretch{s}) {
				// The decimation filter reaches 2 ms over the edge, where the
				// window is below -48 dB.
				if d := audio.PowerDB(float64(tr.Power[j]) / loud); d > -40 {
					t.Errorf("band %g Hz: entry %d beside the burst reads %.0f dB re the burst", tr.Band.NominalHz, j, d)
				}
			}
		}
	}
}

func BenchmarkMeter16Channels(b *testing.B) {
	const rate = 48000
	x := noiseBlock(16, rate, 0.1, 1)
	m, err := NewMeter(audio.Format{Rate: rate, Channels: 16}, MeterOptions{PerChannel: true})
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if err := m.Write(x); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "x-realtime")
}
