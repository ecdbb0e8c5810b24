package beam

import (
	"alidade/pkg/audio"
	"alidade/pkg/delay"
)

// convolverHop is how many frames a convolver computes at once: 16 channels of
// input and their sum stay in the first-level cache one at a time.
const convolverHop = 1024

// NewConvolver returns the beam that f makes of src, one channel, by
// convolution in the time domain. It costs one product a tap and frame of each
// microphone. Output frame i is the sound at the reference point at frame i;
// the length is that of src. It returns an error if f does not fit src.
func NewConvolver(src audio.Source, f *Filters) (audio.Source, error) {
	if err := runnable(src, f); err != nil {
		return nil, err
	}
	from, to := f.Span()
	hop := audio.Hop{Channels: 1, Frames: convolverHop, Before: max(0, to-1), After: max(0, -from)}
	c := &convolver{reversed: make([][]float32, f.Mics()), from: make([]int, f.Mics())}
	for m, h := range f.H {
		c.reversed[m] = make([]float32, len(h))
		for t, v := range h {
			c.reversed[m][len(h)-1-t] = float32(v)
		}
		c.from[m] = hop.Before - (f.Start[m] + len(h) - 1)
	}
	return audio.Hops(src, hop, c.run), nil
}

type convolver struct {
	reversed [][]float32
	from     []int // where in the window the earliest sample lies
}

func (c *convolver) run(out, in audio.Block, _ int64) error {
	y := out.Channel(0)
	clear(y)
	for m, taps := range c.reversed {
		delay.AddFIR(y, in.Channel(m)[c.from[m]:], taps)
	}
	return nil
}
