package spectral

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
)

// Overlap is the shape of an overlap-save convolution: transforms of Size
// samples of which Hop are new.
type Overlap struct{ Size, Hop int }

// largestSpan is the longest span of taps that NewOverlap takes, samples.
const largestSpan = MaxSize / 4

// NewOverlap returns the shape that costs least a sample for filters whose taps
// span the given number of samples, at least one. Hop is a multiple of 16 and
// at most Size-span+1. The cost of a transform and its products is taken as
// Size·(log2 Size + 2.5), and a third more from 4096 points on, which no longer
// fit into the first-level cache, as measured with either set of kernels; where
// two sizes are within 3 % the smaller one is taken. It returns an error for spans of
// more than 262144 samples.
func NewOverlap(span int) (Overlap, error) {
	if span < 1 || span > largestSpan {
		return Overlap{}, fmt.Errorf("spectral: taps that span %d samples: want 1 to %d", span, largestSpan)
	}
	var best Overlap
	least := math.Inf(1)
	for e := 8; 1<<e <= MaxSize; e++ {
		size := 1 << e
		hop := (size - span + 1) / 16 * 16
		if hop <= 0 {
			continue
		}
		cost := float64(size) * (float64(e) + 2.5) / float64(hop)
		if size >= 4096 {
			cost *= 1.35
		}
		if cost < 0.97*least {
			best, least = Overlap{size, hop}, cost
		}
	}
	return best, nil
}

// NewFilter returns a source that is every channel of src filtered with the
// same taps:
//
//	y[i] = Σ_t taps[t]·x[i + centre - t]
//
// centre is the tap that stands for no delay: (len(taps)-1)/2 for a symmetric
// filter, 0 for a causal one. Outside src is silence; the length is that of
// src. The convolution is overlap-save in float32; rounding is below -125 dB of
// the largest output sample's neighbourhood.
func NewFilter(src audio.Source, taps []float64, centre int) (audio.Source, error) {
	if len(taps) == 0 {
		return nil, fmt.Errorf("spectral: filter without taps")
	}
	if centre < 0 || centre >= len(taps) {
		return nil, fmt.Errorf("spectral: filter of %d taps with its centre at tap %d", len(taps), centre)
	}
	for t, v := range taps {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return nil, fmt.Errorf("spectral: tap %d is %g", t, v)
		}
	}
	shape, err := NewOverlap(len(taps))
	if err != nil {
		return nil, err
	}
	plan, err := NewComplex[float32](shape.Size)
	if err != nil {
		return nil, err
	}
	f := &filter{shape: shape, plan: plan}
	f.gr, f.gi = pair[float32](shape.Size)
	f.zr, f.zi = pair[float32](shape.Size)
	f.silent = make([]float32, shape.Size)

	design, err := NewComplex[float64](shape.Size)
	if err != nil {
		return nil, err
	}
	hr, hi := make([]float64, shape.Size), make([]float64, shape.Size)
	copy(hr, taps)
	design.Forward(hr, hi, hr, hi)
	for k := range hr {
		f.gr[k], f.gi[k] = float32(hr[k]/float64(shape.Size)), float32(hi[k]/float64(shape.Size))
	}
	// The window has room for one whole transform before the last new sample.
	hop := audio.Hop{Channels: src.Format().Channels, Frames: shape.Hop, Before: shape.Size - shape.Hop - centre, After: centre}
	if hop.Channels < 1 {
		return nil, fmt.Errorf("spectral: filter of a source of %d channels", hop.Channels)
	}
	return audio.Hops(src, hop, f.run), nil
}

type filter struct {
	shape  Overlap
	plan   *Complex[float32]
	gr, gi []float32 // response, with 1/Size
	zr, zi []float32
	silent []float32
}

// run filters two channels as the real and imaginary part of one signal: the
// taps are real, so the two stay apart.
func (f *filter) run(out, in audio.Block, _ int64) error {
	valid := f.shape.Size - f.shape.Hop // samples of the result that wrapped
	for ch := 0; ch < in.Channels(); ch += 2 {
		second := f.silent
		if ch+1 < in.Channels() {
			second = in.Channel(ch + 1)
		}
		f.plan.Forward(f.zr, f.zi, in.Channel(ch), second)
		zr, zi := f.zr, f.zi[:len(f.zr)]
		gr, gi := f.gr[:len(zr)], f.gi[:len(zr)]
		for k := range zr {
			r, i := zr[k], zi[k]
			zr[k] = r*gr[k] - i*gi[k]
			zi[k] = r*gi[k] + i*gr[k]
		}
		f.plan.InverseUnscaled(zr, zi, zr, zi)
		copy(out.Channel(ch), zr[valid:])
		if ch+1 < in.Channels() {
			copy(out.Channel(ch+1), zi[valid:])
		}
	}
	return nil
}
