package measure

import (
	"math"

	"alidade/pkg/audio"
)

// FullScaleSamples is how many samples in a row have to stand at full scale to
// count as clipped: single ones are peaks that just reach it.
const FullScaleSamples = 3

// fullScale is the least magnitude that counts as full scale: the largest
// positive value of 16 bit.
const fullScale = 32767.0 / 32768

// total adds up one channel.
type total struct {
	frames      int64
	sum, square [2]float64 // of even and of odd frames
	peak        float32
	run         int64 // samples at full scale just before
	clipped     int64
}

// add takes samples and returns -1, or the place of the first one that is not
// a finite number. Even and odd frames are added up apart, which is faster, and
// in the order of frames, so the sums do not depend on how a signal is cut.
func (t *total) add(x []float32) int {
	var top uint32 // magnitudes compare like their bits; no number is above infinity
	for _, v := range x {
		top = max(top, math.Float32bits(v)&^(1<<31))
	}
	peak := math.Float32frombits(top)
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
	y := x
	if t.frames%2 == 1 && len(y) > 0 {
		v := float64(y[0])
		t.sum[1] += v
		t.square[1] += v * v
		y = y[1:]
	}
	s0, s1, q0, q1 := t.sum[0], t.sum[1], t.square[0], t.square[1]
	for ; len(y) >= 2; y = y[2:] {
		a, b := float64(y[0]), float64(y[1])
		s0 += a
		s1 += b
		q0 += a * a
		q1 += b * b
	}
	if len(y) == 1 {
		v := float64(y[0])
		s0 += v
		q0 += v * v
	}
	t.sum, t.square = [2]float64{s0, s1}, [2]float64{q0, q1}
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
		l.DC = (t.sum[0] + t.sum[1]) / float64(t.frames)
		l.RMSDBFS = audio.PowerDB(2 * (t.square[0] + t.square[1]) / float64(t.frames))
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
