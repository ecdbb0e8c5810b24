package audiotest

import (
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
)

// noise is a block of seeded noise, different on each channel.
func noise(channels, frames int) audio.Block {
	rng := rand.New(rand.NewPCG(uint64(channels), uint64(frames)))
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		x := b.Channel(ch)
		for i := range x {
			x[i] = float32(rng.Float64()*2 - 1)
		}
	}
	return b
}

// broken is a source whose Read is a function, so that each test can break one
// promise.
type broken struct {
	*audio.Memory
	read   func(m *audio.Memory, dst audio.Block) (int, error)
	format func() audio.Format
}

func (b broken) Read(dst audio.Block) (int, error) { return b.read(b.Memory, dst) }

func (b broken) Format() audio.Format {
	if b.format != nil {
		return b.format()
	}
	return b.Memory.Format()
}

var sinkhole []float32 // what an allocation is assigned to, so that it happens

func TestAGoodSourcePasses(t *testing.T) {
	for _, frames := range []int{0, 1, 2, 6, 1000, 1023, 1024, 1025, 5000} {
		b := noise(3, frames)
		TestSource(t, func() audio.Source { return audio.FromBlock(44100, b) }, b, Options{Sizes: []int{64}, Rate: 44100})
	}
}

func TestEveryBrokenPromiseIsFoundOut(t *testing.T) {
	const frames = 3000
	b := noise(2, frames)
	for _, c := range []struct {
		name, fault string
		open        func() audio.Source
		opt         Options
	}{
		{name: "short read in the middle", fault: "no error before the end",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				return m.Read(dst.Slice(0, min(dst.Frames(), 500)))
			})},
		{name: "end together with frames", fault: "together with io.EOF",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				n, err := m.Read(dst)
				if n < dst.Frames() {
					err = io.EOF
				}
				return n, err
			})},
		{name: "wrapped end", fault: "wrapped io.EOF",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				n, err := m.Read(dst)
				if err != nil {
					err = fmt.Errorf("source: %w", err)
				}
				return n, err
			})},
		{name: "no end", fault: "0 frames and no error at the end",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				n, _ := m.Read(dst)
				return n, nil
			})},
		{name: "starts again after the end", fault: "n = ",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				n, err := m.Read(dst)
				if err != nil {
					m.Rewind()
				}
				return n, err
			})},
		{name: "one frame short", fault: "n = 951 and no error before the end",
			open: func() audio.Source { return audio.FromBlock(48000, b.Slice(0, frames-1)) }},
		{name: "ends at a full block", fault: "the stream ended",
			open: func() audio.Source { return audio.FromBlock(48000, b.Slice(0, 2048)) }},
		{name: "too long a stream", fault: "but the stream has 3000 frames",
			open: func() audio.Source { return audio.FromBlock(48000, noise(2, frames+1)) }},
		{name: "writes past n", fault: "was written at frame",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				n, err := m.Read(dst)
				for ch := range dst.Channels() {
					clear(dst.Channel(ch)[n:])
				}
				return n, err
			})},
		{name: "keeps dst", fault: "block of the read before was written",
			open: func() audio.Source {
				var kept audio.Block
				m := audio.FromBlock(48000, b)
				return broken{Memory: m, read: func(m *audio.Memory, dst audio.Block) (int, error) {
					if kept.Frames() > 0 {
						kept.Channel(1)[0] = 0.5
					}
					kept = dst
					return m.Read(dst)
				}}
			}},
		{name: "adds to what was in dst", fault: "further than",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				was := dst.Channels() > 0 && dst.Frames() > 0
				var x float32
				if was {
					x = dst.Channel(0)[0]
				}
				n, err := m.Read(dst)
				if was && n > 0 {
					dst.Channel(0)[0] += x
				}
				return n, err
			})},
		{name: "forgets at the seam of blocks", fault: "from blocks of 1024",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				n, err := m.Read(dst)
				if n > 0 && dst.Frames() == 7 {
					dst.Channel(1)[0] *= 1.001
				}
				return n, err
			})},
		{name: "wrong samples", fault: "further than 0.001", opt: Options{Tolerance: 1e-3},
			open: func() audio.Source { return audio.Gain(audio.FromBlock(48000, b), 0.99) }},
		{name: "wrong channels", fault: "format says 1 channels, want 2",
			open: func() audio.Source { return audio.FromBlock(48000, noise(1, frames)) }},
		{name: "wrong rate", fault: "format says 48000 frames per second", opt: Options{Rate: 44100},
			open: func() audio.Source { return audio.FromBlock(48000, b) }},
		{name: "no rate", fault: "format says 0 frames per second",
			open: func() audio.Source { return audio.FromBlock(0, b) }},
		{name: "changing format", fault: "format changed",
			open: func() audio.Source {
				rate := 48000
				return broken{Memory: audio.FromBlock(48000, b),
					read:   func(m *audio.Memory, dst audio.Block) (int, error) { rate++; return m.Read(dst) },
					format: func() audio.Format { return audio.Format{Rate: rate, Channels: 2} }}
			}},
		{name: "end at a zero-length read", fault: "the stream ended",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				if dst.Frames() == 0 {
					return 0, io.EOF
				}
				return m.Read(dst)
			})},
		{name: "frame lost at a zero-length read", fault: "0, 1, 5",
			open: with(b, func(m *audio.Memory, dst audio.Block) (int, error) {
				if dst.Frames() == 0 {
					m.Read(audio.NewBlock(2, 1))
				}
				return m.Read(dst)
			})},
		{name: "impossible n", fault: "n = -1",
			open: with(b, func(*audio.Memory, audio.Block) (int, error) { return -1, nil })},
		{name: "failure of its own", fault: "upstream failed on purpose",
			open: func() audio.Source { return Failing(audio.FromBlock(48000, b), 2000, errBroken) }},
		{name: "allocation now and then", fault: "allocations in a third",
			open: func() audio.Source {
				reads := 0
				return broken{Memory: audio.FromBlock(48000, b), read: func(m *audio.Memory, dst audio.Block) (int, error) {
					if reads++; reads%100 == 0 {
						sinkhole = make([]float32, 10)
					}
					return m.Read(dst)
				}}
			}},
	} {
		t.Run(c.name, func(t *testing.T) {
			found(t, checkSource(c.open, b, c.opt), c.fault)
		})
	}
}

func with(b audio.Block, read func(*audio.Memory, audio.Block) (int, error)) func() audio.Source {
	return func() audio.Source { return broken{Memory: audio.FromBlock(48000, b), read: read} }
}

// found fails unless one of the faults holds the text.
func found(t *testing.T, faults []error, text string) {
	t.Helper()
	for _, f := range faults {
		if strings.Contains(f.Error(), text) {
			return
		}
	}
	t.Errorf("no fault says %q, the faults found are %v", text, faults)
}

// later is a stage that looks ahead one frame: y[i] = x[i] + x[i+1], silence
// after the end. swallow and mask make it mistreat failures.
type later struct {
	up            audio.Source
	next, one     audio.Block
	primed, ended bool
	err           error
	swallow, mask bool
}

func (l *later) Format() audio.Format { return l.up.Format() }

func (l *later) Read(dst audio.Block) (int, error) {
	if l.err != nil && !l.mask {
		return 0, l.err
	}
	if l.one.Channels() == 0 {
		l.one, l.next = audio.NewBlock(dst.Channels(), 1), audio.NewBlock(dst.Channels(), 1)
	}
	for i := range dst.Frames() {
		for !l.primed || !l.ended {
			n, err := l.up.Read(l.one)
			if n == 0 {
				if err != io.EOF && !l.swallow {
					l.err = err
					if l.mask {
						err = errors.New("later: the upstream broke")
					}
					return i, err
				}
				l.ended = true
				l.one.Clear()
			}
			if l.primed {
				break
			}
			l.next.CopyFrom(l.one)
			l.primed = true
			if l.ended {
				l.err = io.EOF
				return 0, io.EOF
			}
		}
		if l.ended && l.one.Channel(0)[0] == 0 && l.next.Channel(0)[0] == 0 {
			if i > 0 {
				return i, nil
			}
			l.err = io.EOF
			return 0, io.EOF
		}
		for ch := range dst.Channels() {
			dst.Channel(ch)[i] = l.next.Channel(ch)[0] + l.one.Channel(ch)[0]
		}
		l.next.CopyFrom(l.one)
		l.one.Clear()
	}
	return dst.Frames(), nil
}

func TestAStageThatLooksAheadPassesIfItSaysSo(t *testing.T) {
	in := noise(2, 2500)
	want := sumWithNext(in)
	stage := func(up audio.Source) audio.Source { return &later{up: up} }
	TestStage(t, 48000, in, stage, want, Options{Lookahead: 1, Sizes: []int{16}})

	found(t, checkFailure(48000, in, stage, want, Options{}), "want at least")
}

func sumWithNext(in audio.Block) audio.Block {
	want := audio.NewBlock(in.Channels(), in.Frames())
	for ch := range in.Channels() {
		x, y := in.Channel(ch), want.Channel(ch)
		for i := range x {
			y[i] = x[i]
			if i+1 < len(x) {
				y[i] += x[i+1]
			}
		}
	}
	return want
}

func TestEveryMistreatedFailureIsFoundOut(t *testing.T) {
	in := noise(2, 2500)
	for _, c := range []struct {
		name, fault string
		stage       func(up audio.Source) audio.Source
		want        audio.Block
	}{
		{"taken for silence", "samples are further than", func(up audio.Source) audio.Source { return &later{up: up, swallow: true} }, sumWithNext(in)},
		{"replaced by another", "came out as another one", func(up audio.Source) audio.Source { return &later{up: up, mask: true} }, sumWithNext(in)},
		{"turned into the end", "as the end of the stream", func(up audio.Source) audio.Source {
			return broken{Memory: audio.FromBlock(48000, in), read: func(_ *audio.Memory, dst audio.Block) (int, error) {
				n, err := up.Read(dst)
				if err != nil {
					return n, io.EOF
				}
				return n, nil
			}}
		}, in},
		{"forgotten after once", "after the failure: n = 0", func(up audio.Source) audio.Source {
			told := false
			return broken{Memory: audio.FromBlock(48000, in), read: func(_ *audio.Memory, dst audio.Block) (int, error) {
				n, err := up.Read(dst)
				if told && errors.Is(err, errBroken) {
					return n, io.EOF
				}
				told = told || err != nil
				return n, err
			}}
		}, in},
		{"told one read later", "and no error", func(up audio.Source) audio.Source {
			var kept error
			return broken{Memory: audio.FromBlock(48000, in), read: func(_ *audio.Memory, dst audio.Block) (int, error) {
				if kept != nil {
					return 0, kept
				}
				n, err := up.Read(dst)
				kept = err
				return n, nil
			}}
		}, in},
		{"length changed", "a stage keeps the length", func(up audio.Source) audio.Source { return up }, in.Slice(0, 10)},
	} {
		t.Run(c.name, func(t *testing.T) {
			found(t, checkFailure(48000, in, c.stage, c.want, Options{Lookahead: 1}), c.fault)
		})
	}
}

func TestFailingFailsAtOnceAndForEver(t *testing.T) {
	in := noise(2, 100)
	dst := audio.NewBlock(2, 30)
	src := Failing(audio.FromBlock(48000, in), 45, errBroken)
	for k, want := range []struct {
		n   int
		err error
	}{{30, nil}, {15, errBroken}, {0, errBroken}, {0, errBroken}} {
		if n, err := src.Read(dst); n != want.n || err != want.err {
			t.Errorf("read %d = %d, %v, want %d, %v", k, n, err, want.n, want.err)
		}
	}
	// A stream that ends before the place of the failure ends.
	src = Failing(audio.FromBlock(48000, in.Slice(0, 10)), 45, errBroken)
	if n, err := src.Read(dst); n != 10 || err != nil {
		t.Errorf("read = %d, %v, want 10, nil", n, err)
	}
	if n, err := src.Read(dst); n != 0 || err != io.EOF {
		t.Errorf("read at the end = %d, %v, want 0, EOF", n, err)
	}
	if f := src.Format(); f.Channels != 2 || f.Rate != 48000 {
		t.Errorf("format = %+v", f)
	}
}

// total is a sink that sums the samples, and can break a promise.
type total struct {
	sum                            float64
	perBlock, scribbles, allocates bool
	fails                          error
}

func (s *total) Write(src audio.Block) error {
	for i := range src.Frames() {
		for ch := range src.Channels() {
			s.sum += float64(src.Channel(ch)[i])
		}
	}
	if s.perBlock {
		s.sum *= 1.0001
	}
	if s.scribbles && src.Frames() > 0 {
		src.Channel(0)[0]++
	}
	if s.allocates {
		sinkhole = make([]float32, 10)
	}
	return s.fails
}

func TestSinksAreHeldToTheirContract(t *testing.T) {
	in := noise(2, 3000)
	open := func(proto total) func() (audio.Sink, func() []float64) {
		return func() (audio.Sink, func() []float64) {
			s := proto
			return &s, func() []float64 { return []float64{s.sum} }
		}
	}
	TestSink(t, open(total{}), in, false, Options{Sizes: []int{128}})
	TestSink(t, open(total{allocates: true}), in, true, Options{})

	found(t, checkSink(open(total{perBlock: true}), in, false, Options{}), "number 0 of the result")
	found(t, checkSink(open(total{scribbles: true}), in, false, Options{}), "was changed")
	found(t, checkSink(open(total{allocates: true}), in, false, Options{}), "allocations")
	found(t, checkSink(open(total{fails: errBroken}), in, false, Options{}), "failed on purpose")
	found(t, checkSink(func() (audio.Sink, func() []float64) {
		return &total{}, func() []float64 { return nil }
	}, in, false, Options{}), "nothing to compare")
}
