package audiotest

import (
	"testing"

	"alidade/pkg/audio"
)

// Options say what is checked and how closely. The zero value asks for the
// wanted samples exactly.
type Options struct {
	// Tolerance is the largest |difference| to the wanted samples, full scale
	// 1.0. Whatever it is, blocks of every size must give the same bits.
	Tolerance float64

	// Sizes are sizes inside the source, in frames: its inner block, its hop,
	// its filter length. Blocks one frame shorter, as long, and one frame
	// longer are read.
	Sizes []int

	// Lookahead is how many of the frames that upstream gave before it failed
	// a stage may keep to itself, because they depend on frames that never
	// came. TestStage uses it.
	Lookahead int

	// Rate is the frames per second that Format must state. 0 takes any
	// positive one.
	Rate int
}

// TestSource checks that the source that open returns keeps the contract of
// audio.Source and yields the frames of want. Open is called many times and
// must return a source at its first frame each time.
func TestSource(t *testing.T, open func() audio.Source, want audio.Block, opt Options) {
	t.Helper()
	for _, fault := range checkSource(open, want, opt) {
		t.Error(fault)
	}
}

// TestStage checks that stage, a source made from a source, keeps the contract
// of audio.Source, turns in (at rate frames per second) into want, and passes
// on a failure of its upstream: at once, with no frame that the failure could
// have spoilt, and for ever. Stage is called many times and must not keep
// anything from one call to the next.
func TestStage(t *testing.T, rate int, in audio.Block, stage func(up audio.Source) audio.Source, want audio.Block, opt Options) {
	t.Helper()
	open := func() audio.Source { return stage(audio.FromBlock(rate, in)) }
	for _, fault := range checkSource(open, want, opt) {
		t.Error(fault)
	}
	for _, fault := range checkFailure(rate, in, stage, want, opt) {
		t.Error(fault)
	}
}

// TestSink checks that the sink that open returns keeps the contract of
// audio.Sink when in is written to it: src is neither changed nor kept, Write
// allocates nothing once warm, and result, called after the last Write, returns
// the same bits whatever the block size. A sink that has to keep what it is
// given allocates and is checked with keeps set.
func TestSink(t *testing.T, open func() (sink audio.Sink, result func() []float64), in audio.Block, keeps bool, opt Options) {
	t.Helper()
	for _, fault := range checkSink(open, in, keeps, opt) {
		t.Error(fault)
	}
}

// Failing returns a source that yields the first after frames of src and then
// fails with err, in the same Read as the last good frames unless they fill
// the block. If src ends before that, it ends.
func Failing(src audio.Source, after int64, err error) audio.Source {
	return &failing{src: src, left: after, err: err}
}

type failing struct {
	src  audio.Source
	left int64
	err  error
}

func (f *failing) Format() audio.Format { return f.src.Format() }

func (f *failing) Read(dst audio.Block) (int, error) {
	if f.left <= 0 {
		return 0, f.err
	}
	n, err := f.src.Read(dst.Slice(0, int(min(int64(dst.Frames()), f.left))))
	f.left -= int64(n)
	if err == nil && f.left <= 0 && n < dst.Frames() {
		err = f.err
	}
	return n, err
}
