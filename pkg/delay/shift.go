package delay

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

// shiftHop is how many frames a Shift computes at once.
const shiftHop = 1024

// largestDelay bounds what a stage holds in memory, frames.
const largestDelay = 1 << 20

// NewShift returns a source whose channel ch is that of src delayed by
// delays[ch] seconds, of any sign. The length is that of src, and outside src
// is silence. It returns an error unless there is one delay a channel, each
// less than 2^20 frames.
func NewShift(src audio.Source, kernel Kernel, delays []float64) (audio.Source, error) {
	f := src.Format()
	if len(delays) != f.Channels || f.Channels == 0 {
		return nil, fmt.Errorf("delay: %d delays for %d channels", len(delays), f.Channels)
	}
	s := &shift{reversed: make([][]float32, len(delays)), from: make([]int, len(delays))}
	starts := make([]int, len(delays))
	hop := audio.Hop{Channels: f.Channels, Frames: shiftHop}
	var taps []float64
	for ch, d := range delays {
		frames := d * float64(f.Rate)
		if !(math.Abs(frames) < largestDelay) {
			return nil, fmt.Errorf("delay: channel %d: delay of %g s: want less than %g s either way", ch+1, d, largestDelay/float64(f.Rate))
		}
		starts[ch], taps = kernel.Taps(taps, frames)
		s.reversed[ch] = make([]float32, len(taps))
		for t, v := range taps {
			s.reversed[ch][len(taps)-1-t] = float32(v)
		}
		hop.Before = max(hop.Before, starts[ch]+len(taps)-1)
		hop.After = max(hop.After, -starts[ch])
	}
	for ch := range delays {
		// The last tap is the earliest sample.
		s.from[ch] = hop.Before - (starts[ch] + len(s.reversed[ch]) - 1)
	}
	return audio.Hops(src, hop, s.run), nil
}

type shift struct {
	reversed [][]float32
	from     []int // where in the window the first sample lies
}

func (s *shift) run(out, in audio.Block, _ int64) error {
	for ch, taps := range s.reversed {
		y := out.Channel(ch)
		clear(y)
		kernel.AddFIR(y, in.Channel(ch)[s.from[ch]:], taps)
	}
	return nil
}
