package audiotest

import (
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"alidade/pkg/audio"
)

// guard is what memory that a source must not touch is filled with: a NaN that
// no computation makes, compared by its bits. It also stands in dst before a
// Read, so that a source that reads what it should write is found out.
const guard = 0x7fc5a11d

// margin is how many guard frames lie before and after dst in each channel.
const margin = 5

// checkSource returns every way in which the source breaks the contract.
func checkSource(open func() audio.Source, want audio.Block, opt Options) (faults []error) {
	first, err := readBlocks(open(), repeat(1024), want, opt)
	if err != nil {
		return []error{fmt.Errorf("blocks of 1024: %w", err)}
	}
	if err := compare(first, want, opt.Tolerance); err != nil {
		faults = append(faults, fmt.Errorf("blocks of 1024: %w", err))
	}
	for _, c := range schedules(want.Frames(), opt.Sizes) {
		got, err := readBlocks(open(), c.next, want, opt)
		if err == nil {
			err = compareBits(got, first)
		}
		if err != nil {
			faults = append(faults, fmt.Errorf("%s: %w", c.name, err))
		}
	}
	if len(faults) == 0 {
		for _, size := range allocSizes(want.Frames(), opt.Sizes) {
			if n := allocations(open, want, size); n > 0 {
				faults = append(faults, fmt.Errorf("blocks of %d: %g allocations in a third of the stream after warm-up, want 0", size, n))
			}
		}
	}
	return faults
}

// schedule is a rule for the sizes of the blocks of one pass.
type schedule struct {
	name string
	next func() int
}

func repeat(size int) func() int { return func() int { return size } }

// schedules are the passes over a stream of the given frames.
func schedules(frames int, inner []int) []schedule {
	sizes := []int{1, 2, 7, 1023, 1025, frames - 1, frames, frames + 1, 2*frames + 7}
	for _, s := range inner {
		sizes = append(sizes, s-1, s, s+1)
	}
	slices.Sort(sizes)
	var list []schedule
	for _, s := range slices.Compact(sizes) {
		if s > 0 {
			list = append(list, schedule{fmt.Sprintf("blocks of %d", s), repeat(s)})
		}
	}
	at := 0
	mixed := []int{0, 1, 5, 0, 0, 64, 3, 200}
	list = append(list, schedule{"blocks of 0, 1, 5, 0, 0, 64, 3, 200 in turn", func() int {
		at++
		return mixed[(at-1)%len(mixed)]
	}})
	rng := rand.New(rand.NewPCG(5, 17))
	list = append(list, schedule{"blocks of random size", func() int { return rng.IntN(2000) }})
	return list
}

// readBlocks reads src to its end in blocks of the sizes that next gives, and
// checks all of the contract that one pass can show.
func readBlocks(src audio.Source, next func() int, want audio.Block, opt Options) (audio.Block, error) {
	format := src.Format()
	if format.Channels != want.Channels() {
		return audio.Block{}, fmt.Errorf("format says %d channels, want %d", format.Channels, want.Channels())
	}
	if format.Rate <= 0 || opt.Rate > 0 && format.Rate != opt.Rate {
		return audio.Block{}, fmt.Errorf("format says %d frames per second, want %d", format.Rate, opt.Rate)
	}
	all := audio.NewBlock(want.Channels(), want.Frames())
	// Two blocks take turns: what a source writes into the dst of an earlier
	// Read shows up as a broken guard there.
	var turn, other fenced
	at, ended, empty := 0, 0, 0
	for ended < 3 {
		size := next()
		if ended > 0 {
			size = max(size, 1)
		}
		if size > 0 {
			empty = 0
		} else if empty++; empty > 1000 {
			return all, errors.New("the sizes asked for are zero for ever")
		}
		turn, other = other, turn
		turn.lay(want.Channels(), size)
		n, err := src.Read(turn.dst)
		where := fmt.Sprintf("read of %d frames at frame %d", size, at)
		if n < 0 || n > size {
			return all, fmt.Errorf("%s: n = %d", where, n)
		}
		if ch, i, ok := turn.intact(n); !ok {
			return all, fmt.Errorf("%s: n = %d, but channel %d was written at frame %d of the block", where, n, ch, i)
		}
		if ch, i, ok := other.intact(0); !ok {
			return all, fmt.Errorf("%s: the block of the read before was written, channel %d, frame %d of it", where, ch, i)
		}
		if f := src.Format(); f != format {
			return all, fmt.Errorf("%s: format changed from %+v to %+v", where, format, f)
		}
		if at+n > want.Frames() {
			return all, fmt.Errorf("%s: n = %d, but the stream has %d frames", where, n, want.Frames())
		}
		all.Slice(at, at+n).CopyFrom(turn.dst.Slice(0, n))
		at += n
		turn.refill(n)

		switch {
		case err == nil && at < want.Frames() && n < size:
			return all, fmt.Errorf("%s: n = %d and no error before the end at frame %d", where, n, want.Frames())
		case err == nil && n == 0 && size > 0:
			return all, fmt.Errorf("%s: 0 frames and no error at the end, want io.EOF", where)
		case err == nil:
		case !errors.Is(err, io.EOF):
			return all, fmt.Errorf("%s: %w", where, err)
		case err != io.EOF:
			return all, fmt.Errorf("%s: the end is a wrapped io.EOF (%v), want io.EOF itself", where, err)
		case n > 0:
			return all, fmt.Errorf("%s: n = %d together with io.EOF, want the end on its own", where, n)
		case at < want.Frames():
			return all, fmt.Errorf("%s: the stream ended, want %d frames", where, want.Frames())
		case size > 0:
			ended++
		}
		if ended > 0 && n > 0 {
			return all, fmt.Errorf("%s: %d frames after the end", where, n)
		}
	}
	return all, nil
}

// fenced is a block with guard frames all around it.
type fenced struct{ whole, dst audio.Block }

// lay makes f a block of the given size, filled with guards.
func (f *fenced) lay(channels, frames int) {
	if f.whole.Frames() < frames+2*margin || f.whole.Channels() != channels {
		f.whole = audio.NewBlock(channels, frames+2*margin)
	}
	f.dst = f.whole.Slice(margin, margin+frames)
	fill(f.whole)
}

// refill puts the guards back over the n frames that were read.
func (f *fenced) refill(n int) { fill(f.dst.Slice(0, n)) }

func fill(b audio.Block) {
	for ch := range b.Channels() {
		x := b.Channel(ch)
		for i := range x {
			x[i] = math.Float32frombits(guard)
		}
	}
}

// intact reports whether every guard but those of the first n frames of dst
// stands, and where not: channel from 1, frame of dst, negative before it.
func (f *fenced) intact(n int) (channel, frame int, ok bool) {
	for ch := range f.whole.Channels() {
		for i, v := range f.whole.Channel(ch) {
			if i >= margin && i < margin+n {
				continue
			}
			if math.Float32bits(v) != guard {
				return ch + 1, i - margin, false
			}
		}
	}
	return 0, 0, true
}

// compare holds got against want, sample by sample.
func compare(got, want audio.Block, tolerance float64) error {
	worst, count, channel, frame := -1.0, 0, 0, 0
	for ch := range want.Channels() {
		g, w := got.Channel(ch), want.Channel(ch)
		for i := range w {
			d := math.Abs(float64(g[i]) - float64(w[i]))
			if d <= tolerance {
				continue
			}
			count++
			if math.IsNaN(d) {
				d = math.Inf(1)
			}
			if d > worst {
				worst, channel, frame = d, ch, i
			}
		}
	}
	if count == 0 {
		return nil
	}
	return fmt.Errorf("%d samples are further than %g from the wanted ones, most of all channel %d, frame %d: got %v, want %v",
		count, tolerance, channel+1, frame, got.Channel(channel)[frame], want.Channel(channel)[frame])
}

// compareBits holds a pass against the first one.
func compareBits(got, first audio.Block) error {
	for ch := range first.Channels() {
		g, f := got.Channel(ch), first.Channel(ch)
		for i := range f {
			if math.Float32bits(g[i]) != math.Float32bits(f[i]) {
				return fmt.Errorf("channel %d, frame %d: %v, but %v from blocks of 1024", ch+1, i, g[i], f[i])
			}
		}
	}
	return nil
}

// allocSizes are the block sizes for counting allocations: a small one, and
// the inner ones, where a third of the stream holds at least two blocks.
func allocSizes(frames int, inner []int) []int {
	var sizes []int
	for _, s := range append([]int{1, 256}, inner...) {
		if s > 0 && frames/3 >= 2*s && !slices.Contains(sizes, s) {
			sizes = append(sizes, s)
		}
	}
	return sizes
}

// allocations returns how often reading the middle third of the stream in
// blocks of size allocates, once the first third has been read. AllocsPerRun
// counts the whole process, so the least of three tries is taken.
func allocations(open func() audio.Source, want audio.Block, size int) float64 {
	least := math.Inf(1)
	dst := audio.NewBlock(want.Channels(), size)
	reads := want.Frames() / 3 / size
	for range 3 {
		src := open()
		least = min(least, testing.AllocsPerRun(1, func() {
			for range reads {
				src.Read(dst)
			}
		}))
		if least == 0 {
			break
		}
	}
	return least
}
