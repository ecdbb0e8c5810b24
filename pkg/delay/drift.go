package delay

import (
	"errors"
	"fmt"
	"io"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

// driftHop is how many frames a Drift computes at once.
const driftHop = 1024

// NewDrift returns a source whose channels are those of src as one clock would
// have recorded them. The clock of channel ch runs fast by ppm[ch] parts per
// million: what it calls frame n·(1 + ppm·1e-6) of the take is frame n of the
// true clock, so that
//
//	y[n] = x[n·(1 + ppm·1e-6)],
//
// by a Farrow delay that moves from frame to frame. All clocks agree at frame 0
// of the take; first is the frame of the take that src begins with. The length
// is that of src, and outside src is silence. Memory grows with how far the
// clocks have run apart, not with the length.
//
// It returns an error unless there is one finite number a channel, within
// ±10000 ppm. Clocks that run apart by 2^20 frames or more become the error of
// Read.
func NewDrift(src audio.Source, k *Farrow, ppm []float64, first int64) (audio.Source, error) {
	f := src.Format()
	if len(ppm) != f.Channels || f.Channels == 0 {
		return nil, fmt.Errorf("delay: %d clocks for %d channels", len(ppm), f.Channels)
	}
	if first < 0 {
		return nil, fmt.Errorf("delay: drift from frame %d", first)
	}
	d := &drift{src: src, kernel: k, first: first, format: f, factor: make([]float64, len(ppm)), out: audio.NewBlock(f.Channels, driftHop)}
	for ch, p := range ppm {
		if !(math.Abs(p) <= 1e4) {
			return nil, fmt.Errorf("delay: channel %d: clock of %g ppm: want -10000 to 10000", ch+1, p)
		}
		d.factor[ch] = p * 1e-6
	}
	for _, c := range k.Branches() {
		reversed := make([]float32, len(c))
		for n, v := range c {
			reversed[len(c)-1-n] = float32(v)
		}
		d.reversed = append(d.reversed, reversed)
		d.branch = append(d.branch, make([]float32, driftHop+64))
	}
	return d, nil
}

type drift struct {
	src      audio.Source
	kernel   *Farrow
	format   audio.Format
	factor   []float64 // of each clock, 1e-6·ppm
	first    int64
	reversed [][]float32 // the kernel's branches
	branch   [][]float32 // what they make of a stretch of one channel

	in      audio.Block // frames base..base+filled of src
	base    int64
	filled  int
	started bool
	length  int64 // of src, once it has ended
	ended   error // why src gives no more
	out     audio.Block
	at, end int   // frames of out that are still to be given
	done    int64 // frames computed
	err     error
}

// Format implements audio.Source.
func (d *drift) Format() audio.Format { return d.format }

// Read implements audio.Source.
func (d *drift) Read(dst audio.Block) (int, error) {
	n := 0
	for n < dst.Frames() {
		if d.at == d.end {
			if d.err == nil {
				d.err = d.compute()
			}
			if d.at == d.end {
				if n > 0 && errors.Is(d.err, io.EOF) {
					return n, nil
				}
				return n, d.err
			}
		}
		got := dst.Slice(n, dst.Frames()).CopyFrom(d.out.Slice(d.at, d.end))
		n += got
		d.at += got
	}
	return n, nil
}

// delay of channel ch at a frame of the output, frames.
func (d *drift) delay(ch int, frame int64) float64 {
	return -d.factor[ch] * float64(d.first+frame)
}

// compute fills out with the next frames.
func (d *drift) compute() error {
	taps := d.kernel.Len()
	// Delays move one way, so that a hop's ends are its extremes.
	last := d.done + driftHop - 1
	low, high := int64(math.MaxInt64), int64(math.MinInt64)
	for ch := range d.factor {
		for _, frame := range []int64{d.done, last} {
			start, _ := d.kernel.Place(d.delay(ch, frame))
			if start >= largestDelay || start <= -largestDelay {
				return fmt.Errorf("delay: channel %d: its clock is %d frames away from the others at frame %d: want less than %d", ch+1, start, d.first+frame, largestDelay)
			}
			low = min(low, d.done-int64(start)-int64(taps-1))
			high = max(high, last-int64(start)+1)
		}
	}
	if err := d.fill(low, high); err != nil {
		return err
	}
	n := int64(driftHop)
	if d.ended != nil {
		if n = min(n, d.length-d.done); n <= 0 {
			return d.ended
		}
	}
	for ch := range d.factor {
		d.channel(ch, int(n))
	}
	d.done += n
	d.at, d.end = 0, int(n)
	return nil
}

// fill makes in hold the frames low..high of src, with silence around it.
func (d *drift) fill(low, high int64) error {
	if !d.started {
		d.started = true
		d.base = min(low, 0)
		d.grow(int(-d.base))
		d.filled = int(-d.base)
	}
	if drop := int(min(low-d.base, int64(d.filled))); drop > 0 {
		for ch := range d.format.Channels {
			x := d.in.Channel(ch)
			copy(x, x[drop:d.filled])
		}
		d.base += int64(drop)
		d.filled -= drop
	}
	d.grow(int(high - d.base))
	for d.base+int64(d.filled) < high {
		room := d.in.Slice(d.filled, int(high-d.base))
		if d.ended != nil {
			room.Clear()
			d.filled = int(high - d.base)
			break
		}
		n, err := d.src.Read(room)
		d.filled += n
		if err == nil && n == 0 {
			err = io.ErrNoProgress
		}
		if err != nil {
			d.ended, d.length = err, d.base+int64(d.filled)
			if !errors.Is(err, io.EOF) {
				return err
			}
		}
	}
	return nil
}

// grow gives in room for so many frames.
func (d *drift) grow(frames int) {
	if frames <= d.in.Frames() {
		return
	}
	bigger := audio.NewBlock(d.format.Channels, frames+frames/2+driftHop)
	if d.filled > 0 {
		bigger.CopyFrom(d.in.Slice(0, d.filled))
	}
	d.in = bigger
}

// channel computes n frames of a channel.
func (d *drift) channel(ch, n int) {
	y, x := d.out.Channel(ch)[:n], d.in.Channel(ch)
	if d.factor[ch] == 0 {
		copy(y, x[d.done-d.base:])
		return
	}
	taps := d.kernel.Len()
	a, _ := d.kernel.Place(d.delay(ch, d.done))
	b, _ := d.kernel.Place(d.delay(ch, d.done+int64(n)-1))
	most, least := max(a, b), min(a, b)
	// Frame i with a filter that starts at s takes x[i-s-t], t < taps: the
	// branches are indexed by i - s, from the largest start on.
	count := n + most - least
	from := int(d.done-d.base) - most - (taps - 1)
	for k, c := range d.reversed {
		if len(d.branch[k]) < count {
			d.branch[k] = make([]float32, count+64)
		}
		v := d.branch[k][:count]
		clear(v)
		kernel.AddFIR(v, x[from:], c)
	}
	for i := range y {
		start, t := d.kernel.Place(d.delay(ch, d.done+int64(i)))
		at := i + most - start
		t32 := float32(t)
		var v float32
		for k := len(d.branch) - 1; k >= 0; k-- {
			v = v*t32 + d.branch[k][at]
		}
		y[i] = v
	}
}
