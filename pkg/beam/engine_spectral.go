package beam

import (
	"errors"
	"fmt"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// NewOverlapSave returns the beam that f makes of src, one channel, by
// overlap-save in the frequency domain. Output frame i is the sound at the
// reference point at frame i; the length is that of src. It returns an error if
// f does not fit src.
func NewOverlapSave(src audio.Source, f *Filters) (audio.Source, error) {
	return NewOverlapSaveMany(src, []*Filters{f})
}

// NewOverlapSaveMany returns as many beams as there are sets of filters, one a
// channel, from one analysis of src. The rounding of a beam depends on the
// longest span of all sets, through the size of the transforms; nothing else
// does.
func NewOverlapSaveMany(src audio.Source, sets []*Filters) (audio.Source, error) {
	if len(sets) == 0 {
		return nil, errors.New("beam: no filters")
	}
	first, last := 0, 0
	for j, f := range sets {
		if err := runnable(src, f); err != nil {
			return nil, fmt.Errorf("beam %d of %d: %w", j+1, len(sets), err)
		}
		from, to := f.Span()
		if j == 0 || from < first {
			first = from
		}
		if j == 0 || to > last {
			last = to
		}
	}
	shape, err := spectral.NewOverlap(last - first)
	if err != nil {
		return nil, err
	}
	plan, err := spectral.NewComplex[float32](shape.Size)
	if err != nil {
		return nil, err
	}
	o := &overlapSave{shape: shape, plan: plan}
	design, err := newDesigner(shape.Size)
	if err != nil {
		return nil, err
	}
	for _, f := range sets {
		weights := newSpectra(f.Mics(), shape.Size)
		pairWeights(weights, design, f, first)
		o.weights = append(o.weights, weights)
		o.sum = append(o.sum, newSpectrum(shape.Size))
	}
	o.z = newSpectrum(shape.Size)
	o.silent = make([]float32, shape.Size)

	// Output frame i needs the frames i-last+1 to i-first.
	hop := audio.Hop{Channels: len(sets), Frames: shape.Hop, Before: max(0, shape.Size-shape.Hop+first), After: max(0, -first)}
	o.from = hop.Before - (shape.Size - shape.Hop + first)
	return audio.Hops(src, hop, o.run), nil
}

// spectrum is a complex signal or spectrum in split format.
type spectrum struct{ re, im []float32 }

// newSpectrum staggers the two parts, see NOTES in package spectral: on page
// boundaries they would fall on the same cache sets.
func newSpectrum(n int) spectrum {
	const stagger = 144
	b := make([]float32, 2*n+3*stagger)
	return spectrum{b[stagger : stagger+n : stagger+n], b[n+3*stagger:]}
}

// overlapSave runs two microphones a and b as one complex signal a + jb. With
// the transform of h_a - j·h_b as weight, the real part of the product's
// inverse is a*h_a + b*h_b: one transform and one product for two microphones.
type overlapSave struct {
	shape   spectral.Overlap
	from    int // where in the window the transform begins
	plan    *spectral.Complex[float32]
	weights [][]spectrum // [beam][pair], with 1/Size
	sum     []spectrum   // [beam]
	z       spectrum
	silent  []float32
}

// newSpectra returns spectra of n points for every pair of mics microphones.
func newSpectra(mics, n int) []spectrum {
	list := make([]spectrum, (mics+1)/2)
	for i := range list {
		list[i] = newSpectrum(n)
	}
	return list
}

// designer transforms filters.
type designer struct {
	plan   *spectral.Complex[float64]
	re, im []float64
}

func newDesigner(n int) (*designer, error) {
	plan, err := spectral.NewComplex[float64](n)
	if err != nil {
		return nil, err
	}
	return &designer{plan, make([]float64, n), make([]float64, n)}, nil
}

// pairWeights sets dst to the weights of f for taps that start at delay first.
func pairWeights(dst []spectrum, design *designer, f *Filters, first int) {
	n := design.plan.Len()
	re, im := design.re, design.im
	for i, w := range dst {
		m := 2 * i
		clear(re)
		clear(im)
		copy(re[f.Start[m]-first:], f.H[m])
		if m+1 < f.Mics() {
			for t, v := range f.H[m+1] {
				im[f.Start[m+1]-first+t] = -v
			}
		}
		design.plan.Forward(re, im, re, im)
		for k := range re {
			w.re[k], w.im[k] = float32(re[k]/float64(n)), float32(im[k]/float64(n))
		}
	}
}

func (o *overlapSave) run(out, in audio.Block, _ int64) error {
	n := o.shape.Size
	for _, s := range o.sum {
		clear(s.re)
		clear(s.im)
	}
	for pair := 0; 2*pair < in.Channels(); pair++ {
		o.transform(in, pair)
		for j, s := range o.sum {
			w := o.weights[j][pair]
			kernel.AddProduct(s.re, s.im, o.z.re, o.z.im, w.re, w.im)
		}
	}
	for j, s := range o.sum {
		o.plan.InverseUnscaled(s.re, s.im, s.re, s.im)
		copy(out.Channel(j), s.re[n-o.shape.Hop:])
	}
	return nil
}

// transform sets z to the spectrum of a pair of microphones in the window.
func (o *overlapSave) transform(in audio.Block, pair int) {
	n := o.shape.Size
	a, b := in.Channel(2 * pair)[o.from:][:n], o.silent
	if 2*pair+1 < in.Channels() {
		b = in.Channel(2*pair + 1)[o.from:][:n]
	}
	o.plan.Forward(o.z.re, o.z.im, a, b)
}
