package beam

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// Handover is filters that take over from those before.
type Handover struct {
	Filters *Filters
	At      int64 // frame in the middle of the cross-fade; the first ones are there from the start
}

// Share is the part that the filters which take over at frame at have in the
// output of frame i: with x = (i - at)/fade + 1/2,
//
//	0 for x <= 0,   (1 - cos πx)/2,   1 for x >= 1.
//
// The rest is that of the filters before. A fade of 0 frames is a switch.
func Share(i, at, fade int64) float64 {
	if fade == 0 {
		if i < at {
			return 0
		}
		return 1
	}
	x := float64(i-at)/float64(fade) + 0.5
	switch {
	case x <= 0:
		return 0
	case x >= 1:
		return 1
	}
	return 0.5 - 0.5*math.Cos(math.Pi*x)
}

// NewChanging returns the beam of filters that take over from each other, one
// channel, by overlap-save: every set runs by itself and their outputs
// cross-fade over fade frames, as Share says. The shares add up to one, so that
// what all sets pass without distortion passes without distortion during the
// fades too. Output frame i is the sound at the reference point at frame i; the
// length is that of src. The output does not depend on how src is read. It
// returns an error if a set does not fit src, for frames At that do not ascend,
// and for fades that overlap or lie before the start.
func NewChanging(src audio.Source, list []Handover, fade int64) (audio.Source, error) {
	if len(list) == 0 {
		return nil, errors.New("beam: no filters")
	}
	if fade < 0 {
		return nil, fmt.Errorf("beam: cross-fade of %d frames", fade)
	}
	first, last := 0, 0
	for j, h := range list {
		if err := runnable(src, h.Filters); err != nil {
			return nil, fmt.Errorf("filters %d of %d: %w", j+1, len(list), err)
		}
		from, to := h.Filters.Span()
		if j == 0 || from < first {
			first = from
		}
		if j == 0 || to > last {
			last = to
		}
		if j == 1 && h.At < fade/2 {
			return nil, fmt.Errorf("beam: filters 2 take over at frame %d in %d frames: before the start", h.At, fade)
		}
		if j > 1 && (h.At <= list[j-1].At || h.At-list[j-1].At < fade) {
			return nil, fmt.Errorf("beam: filters %d take over at frame %d, those before at %d: want at least the cross-fade of %d frames between them", j+1, h.At, list[j-1].At, fade)
		}
	}
	shape, err := spectral.NewOverlap(last - first)
	if err != nil {
		return nil, err
	}
	c := &changing{list: list, fade: fade, first: first}
	c.shape = shape
	if c.plan, err = spectral.NewComplex[float32](shape.Size); err != nil {
		return nil, err
	}
	if c.design, err = newDesigner(shape.Size); err != nil {
		return nil, err
	}
	most := 1
	for j := range list {
		// The sets that sound in one hop at most: from the one before j on.
		n := 2
		for i := j + 1; i < len(list) && list[i].At-list[j].At <= int64(shape.Hop)+fade+1; i++ {
			n++
		}
		most = max(most, min(n, len(list)))
	}
	for range most {
		c.slots = append(c.slots, slot{set: -1, weights: newSpectra(list[0].Filters.Mics(), shape.Size), sum: newSpectrum(shape.Size)})
	}
	c.z = newSpectrum(shape.Size)
	c.silent = make([]float32, shape.Size)
	hop := audio.Hop{Channels: 1, Frames: shape.Hop, Before: max(0, shape.Size-shape.Hop+first), After: max(0, -first)}
	c.from = hop.Before - (shape.Size - shape.Hop + first)
	return audio.Hops(src, hop, c.run), nil
}

// changing runs the sets that sound in a hop; their weights are made when they
// begin to.
type changing struct {
	overlapSave
	list   []Handover
	fade   int64
	first  int // delay of the first tap of all sets
	design *designer
	slots  []slot
	lowest int // set that sounds first in the hop
}

type slot struct {
	set     int // -1 for none
	weights []spectrum
	sum     spectrum
}

func (c *changing) run(out, in audio.Block, first int64) error {
	end := first + int64(out.Frames())
	for c.lowest+1 < len(c.list) && Share(first, c.list[c.lowest+1].At, c.fade) == 1 {
		c.lowest++
	}
	highest := c.lowest
	for highest+1 < len(c.list) && Share(end-1, c.list[highest+1].At, c.fade) > 0 {
		highest++
	}
	for set := c.lowest; set <= highest; set++ {
		s := c.slot(set)
		if s.set != set {
			pairWeights(s.weights, c.design, c.list[set].Filters, c.first)
			s.set = set
		}
		clear(s.sum.re)
		clear(s.sum.im)
	}
	for pair := 0; 2*pair < in.Channels(); pair++ {
		c.transform(in, pair)
		for set := c.lowest; set <= highest; set++ {
			s := c.slot(set)
			w := s.weights[pair]
			kernel.AddProduct(s.sum.re, s.sum.im, c.z.re, c.z.im, w.re, w.im)
		}
	}
	y := out.Channel(0)
	for set := c.lowest; set <= highest; set++ {
		s := c.slot(set)
		c.plan.InverseUnscaled(s.sum.re, s.sum.im, s.sum.re, s.sum.im)
		x := s.sum.re[c.shape.Size-c.shape.Hop:][:len(y)]
		if set == c.lowest {
			copy(y, x)
			continue
		}
		for i := range y {
			switch share := Share(first+int64(i), c.list[set].At, c.fade); share {
			case 0:
			case 1:
				y[i] = x[i]
			default:
				y[i] += float32(share) * (x[i] - y[i])
			}
		}
	}
	return nil
}

// slot is where a set sounds: sets that sound together follow each other.
func (c *changing) slot(set int) *slot { return &c.slots[set%len(c.slots)] }
