package beam

import (
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/spectral"
)

// New returns the beam that f makes of src, one channel, by NewConvolver or by
// NewOverlapSave, whichever costs less for so many taps and microphones. Either
// is the same beam but for its rounding, below -115 dB. It returns an error if f
// does not fit src.
func New(src audio.Source, f *Filters) (audio.Source, error) {
	if cheaperInFrequency(f) {
		return NewOverlapSave(src, f)
	}
	return NewConvolver(src, f)
}

// What overlap-save costs in taps of a convolver, as measured with either set of
// kernels (BenchmarkChoice): a point of a transform and level of it for each new
// frame, and a product. They choose the faster engine, or one at most a tenth
// slower, for 2 to 64 microphones and 32 to 128 taps.
const (
	levelTaps   = 3.6
	productTaps = 4
)

// cheaperInFrequency says whether overlap-save costs less than a convolver.
func cheaperInFrequency(f *Filters) bool {
	from, to := f.Span()
	shape, err := spectral.NewOverlap(to - from)
	if err != nil {
		return false // the taps lie too far apart
	}
	taps := 0
	for _, h := range f.H {
		taps += len(h)
	}
	// A transform for two microphones, and one back.
	transforms := float64((f.Mics()+1)/2 + 1)
	points := float64(shape.Size) / float64(shape.Hop)
	cost := points * (transforms*levelTaps*math.Log2(float64(shape.Size)) + productTaps*float64(f.Mics()))
	return cost < float64(taps)
}
