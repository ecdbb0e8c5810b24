package measure

import (
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

// FullScaleSamples is how many samples in a row have to stand at full scale to
// count as clipped: single ones are peaks that just reach it.
const FullScaleSamples = 3

// fullScale is the least magnitude that counts as full scale: the largest
// positive value of 16 bit.
const fullScale = 32767.0 / 32768

// total adds up one channel.
type total struct {
	frames  int64
	sums    kernel.Squares
	peak    float32
	run     int64 // samples at full scale just before
	clipped int64
}

// add takes samples and returns -1, or the place of the first one that is not
// a finite number. The sums do not depend on how a signal is cut.
func (t *total) add(x []float32) int {
	peak := kernel.Peak(x)
	if !(peak <= math.MaxFloat32) {
		for i, v := range x {
			if v-v != 0 {
				return i
			}
		}
	}
	if peak >= fullScale {
		t.clip(x)
	} else if len(x) > 0 {
		t.run = 0
	}
	t.peak = max(t.peak, peak)
	t.sums.Add(x)
	t.frames += int64(len(x))
	return -1
}

// clip counts the samples of x in runs at full scale.
func (t *total) clip(x []float32) {
	for _, v := range x {
		if v < fullScale && v > -fullScale {
			t.run = 0
			continue
		}
		t.run++
		switch {
		case t.run == FullScaleSamples:
			t.clipped += FullScaleSamples
		case t.run > FullScaleSamples:
			t.clipped++
		}
	}
}

// Level is what one channel holds as a whole.
type Level struct {
	Frames        int64
	RMSDBFS       float64 // a full-scale sine reads 0 (AES17); -Inf for silence
	PeakDBFS      float64 // largest magnitude re 1.0; -Inf for silence
	DC            float64 // mean, re 1.0
	ClippedFrames int64   // in runs of at least FullScaleSamples at full scale
	// AWeightedDBFS is the level of the one-third octaves, each with the
	// A-weighting at its mid-band frequency; NaN where the signal is too short
	// for bands or the channel is not used.
	AWeightedDBFS float64
}

// level returns what was added up so far, without the A-weighted level.
func (t *total) level() Level {
	l := Level{Frames: t.frames, ClippedFrames: t.clipped, AWeightedDBFS: math.NaN(), RMSDBFS: math.Inf(-1)}
	l.PeakDBFS = audio.AmplitudeDB(float64(t.peak))
	if t.frames > 0 {
		l.DC = t.sums.Sum() / float64(t.frames)
		l.RMSDBFS = audio.PowerDB(2 * t.sums.Square() / float64(t.frames))
	}
	return l
}

// Levels returns the totals of every channel, used or not. Call it after
// Close.
func (m *Meter) Levels() []Level {
	list := make([]Level, len(m.totals))
	for ch := range list {
		l := m.totals[ch].level()
		if i := m.slot[ch]; i >= 0 {
			l.AWeightedDBFS = audio.PowerDB(weighted(m.layout.bands[:m.layout.thirds], m.BandPower(i)))
		}
		list[ch] = l
	}
	return list
}

// weighted is the sum of band powers under A-weighting.
func weighted(bands []Band, power []float64) float64 {
	sum := 0.0
	for b, p := range power {
		sum += p * audio.FromPowerDB(AWeightingDB(bands[b].CentreHz))
	}
	return sum
}
