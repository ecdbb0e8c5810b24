package audio

import (
	"fmt"
	"io"
)

// Memory is a source over a block that is held in memory, and can be rewound.
type Memory struct {
	rate  int
	block Block
	at    int
}

// FromBlock returns a source that yields the frames of b, which it shares.
func FromBlock(rate int, b Block) *Memory { return &Memory{rate: rate, block: b} }

// Format implements Source.
func (m *Memory) Format() Format { return Format{Rate: m.rate, Channels: m.block.Channels()} }

// Read implements Source.
func (m *Memory) Read(dst Block) (int, error) {
	if m.at >= m.block.Frames() && dst.Frames() > 0 {
		return 0, io.EOF
	}
	n := min(dst.Frames(), m.block.Frames()-m.at)
	dst.Slice(0, n).CopyFrom(m.block.Slice(m.at, m.at+n))
	m.at += n
	return n, nil
}

// Rewind puts the source back to its first frame.
func (m *Memory) Rewind() { m.at = 0 }

// Collect is a sink that keeps every frame. Use Block for what was collected.
// It panics if the channel count changes from one Write to the next. The zero
// value is ready for use.
type Collect struct {
	chunks []Block
	frames int
}

// Write implements Sink.
func (c *Collect) Write(src Block) error {
	if len(c.chunks) > 0 && c.chunks[0].Channels() != src.Channels() {
		panic(fmt.Sprintf("audio: collect: %d channels after %d", src.Channels(), c.chunks[0].Channels()))
	}
	kept := NewBlock(src.Channels(), src.Frames())
	kept.CopyFrom(src)
	c.chunks = append(c.chunks, kept)
	c.frames += src.Frames()
	return nil
}

// Block returns all frames written so far as one block, and an empty block
// before the first Write.
func (c *Collect) Block() Block {
	if len(c.chunks) == 0 {
		return Block{}
	}
	all := NewBlock(c.chunks[0].Channels(), c.frames)
	at := 0
	for _, k := range c.chunks {
		all.Slice(at, at+k.Frames()).CopyFrom(k)
		at += k.Frames()
	}
	return all
}

// ReadAll reads src to its end, in blocks of 4096 frames. If src fails, it
// returns the frames that were good before with the error.
func ReadAll(src Source) (Block, error) {
	var c Collect
	if _, err := Copy(src, 4096, &c); err != nil {
		return c.Block(), err
	}
	if c.frames == 0 {
		return NewBlock(src.Format().Channels, 0), nil
	}
	return c.Block(), nil
}
