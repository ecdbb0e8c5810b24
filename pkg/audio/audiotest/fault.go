package audiotest

import (
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"testing"

	"alidade/pkg/audio"
)

// errBroken is the failure of the upstream in checkFailure.
var errBroken = errors.New("audiotest: the upstream failed on purpose")

// checkFailure returns every way in which stage mistreats a failing upstream.
func checkFailure(rate int, in audio.Block, stage func(up audio.Source) audio.Source, want audio.Block, opt Options) (faults []error) {
	if want.Frames() != in.Frames() {
		return []error{fmt.Errorf("%d frames in, %d wanted: a stage keeps the length (check a source that does not with TestSource)", in.Frames(), want.Frames())}
	}
	places := []int{0, 1, in.Frames() / 3, in.Frames() - 1}
	for _, s := range opt.Sizes {
		places = append(places, s-1, s, s+1)
	}
	slices.Sort(places)
	for _, after := range slices.Compact(places) {
		if after < 0 || after >= in.Frames() {
			continue
		}
		for _, size := range []int{1, 7, 1024, in.Frames() + 1} {
			src := stage(Failing(audio.FromBlock(rate, in), int64(after), errBroken))
			if err := readFailing(src, size, after, want, opt); err != nil {
				faults = append(faults, fmt.Errorf("upstream fails after %d frames, blocks of %d: %w", after, size, err))
			}
		}
	}
	return faults
}

// readFailing reads a stage whose upstream fails after the given frames.
func readFailing(src audio.Source, size, after int, want audio.Block, opt Options) error {
	var f fenced
	at := 0
	for {
		f.lay(want.Channels(), size)
		n, err := src.Read(f.dst)
		where := fmt.Sprintf("read at frame %d", at)
		if n < 0 || n > size {
			return fmt.Errorf("%s: n = %d of %d", where, n, size)
		}
		if ch, i, ok := f.intact(n); !ok {
			return fmt.Errorf("%s: n = %d, but channel %d was written at frame %d of the block", where, n, ch, i)
		}
		if at+n > after {
			return fmt.Errorf("%s: frame %d came out, after the failure", where, at+n-1)
		}
		if cerr := compare(f.dst.Slice(0, n), want.Slice(at, at+n), opt.Tolerance); cerr != nil {
			return fmt.Errorf("%s: %w", where, cerr)
		}
		at += n
		if err == nil {
			if n < size {
				return fmt.Errorf("%s: n = %d of %d and no error", where, n, size)
			}
			continue
		}
		if errors.Is(err, io.EOF) {
			return fmt.Errorf("%s: the failure came out as the end of the stream", where)
		}
		if !errors.Is(err, errBroken) {
			return fmt.Errorf("%s: the failure came out as another one: %w", where, err)
		}
		break
	}
	if least := after - opt.Lookahead; at < least {
		return fmt.Errorf("%d good frames came out, want at least %d (a stage that looks ahead states Lookahead)", at, least)
	}
	for range 3 {
		f.lay(want.Channels(), size)
		n, err := src.Read(f.dst)
		if n != 0 || !errors.Is(err, errBroken) {
			return fmt.Errorf("after the failure: n = %d, error %v, want 0 and the same failure", n, err)
		}
		if ch, i, ok := f.intact(0); !ok {
			return fmt.Errorf("after the failure: channel %d was written at frame %d of the block", ch, i)
		}
	}
	return nil
}

// checkSink returns every way in which the sink breaks the contract.
func checkSink(open func() (audio.Sink, func() []float64), in audio.Block, keeps bool, opt Options) (faults []error) {
	var first []float64
	list := append([]schedule{{"blocks of 1024", repeat(1024)}}, schedules(in.Frames(), opt.Sizes)...)
	for k, c := range list {
		sink, result := open()
		if err := writeBlocks(sink, c.next, in); err != nil {
			faults = append(faults, fmt.Errorf("%s: %w", c.name, err))
			continue
		}
		got := result()
		if k == 0 {
			first = got
			if len(first) == 0 {
				return append(faults, errors.New("the result is empty: nothing to compare"))
			}
			continue
		}
		if len(got) != len(first) {
			faults = append(faults, fmt.Errorf("%s: %d numbers in the result, but %d from blocks of 1024", c.name, len(got), len(first)))
			continue
		}
		for i := range first {
			if math.Float64bits(got[i]) != math.Float64bits(first[i]) {
				faults = append(faults, fmt.Errorf("%s: number %d of the result is %v, but %v from blocks of 1024", c.name, i, got[i], first[i]))
				break
			}
		}
	}
	if keeps || len(faults) > 0 {
		return faults
	}
	for _, size := range allocSizes(in.Frames(), opt.Sizes) {
		if n := writeAllocations(open, in, size); n > 0 {
			faults = append(faults, fmt.Errorf("blocks of %d: %g allocations in a third of the stream after warm-up, want 0", size, n))
		}
	}
	return faults
}

// writeBlocks writes in to sink, each block from memory that is guarded before
// and after the call and scribbled over in between.
func writeBlocks(sink audio.Sink, next func() int, in audio.Block) error {
	var f fenced
	for at := 0; at < in.Frames(); {
		size := min(next(), in.Frames()-at)
		part := in.Slice(at, at+size)
		f.lay(in.Channels(), size)
		f.dst.CopyFrom(part)
		if err := sink.Write(f.dst); err != nil {
			return fmt.Errorf("write of %d frames at frame %d: %w", size, at, err)
		}
		if ch, i, ok := f.intact(size); !ok {
			return fmt.Errorf("write of %d frames at frame %d: channel %d was written at frame %d, outside the block", size, at, ch, i)
		}
		for ch := range in.Channels() {
			for i, v := range f.dst.Channel(ch) {
				if math.Float32bits(v) != math.Float32bits(part.Channel(ch)[i]) {
					return fmt.Errorf("write of %d frames at frame %d: channel %d, frame %d of the block was changed", size, at, ch+1, i)
				}
			}
		}
		at += size
	}
	return nil
}

// writeAllocations is allocations for a sink.
func writeAllocations(open func() (audio.Sink, func() []float64), in audio.Block, size int) float64 {
	least := math.Inf(1)
	writes := in.Frames() / 3 / size
	for range 3 {
		sink, _ := open()
		at := 0
		least = min(least, testing.AllocsPerRun(1, func() {
			for range writes {
				sink.Write(in.Slice(at, at+size))
				at += size
			}
		}))
		if least == 0 {
			break
		}
	}
	return least
}
