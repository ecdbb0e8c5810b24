package audio

import "fmt"

// strideStagger is added between the channels of a new block, in samples
// (1 kB), so that channels of a power-of-two length do not fall on the same
// cache sets.
const strideStagger = 256

// Block is a run of frames, planar: channel ch is a slice of float32. A Block
// is a small value that refers to one backing array; copying it or slicing it
// allocates nothing and shares the samples. The zero value has no channels and
// no frames.
type Block struct {
	data     []float32
	channels int
	stride   int
	first    int
	frames   int
	lowest   int // channel of data that channel 0 is
}

// NewBlock returns a block of silence. It panics if channels or frames is
// negative.
func NewBlock(channels, frames int) Block {
	if channels < 0 || frames < 0 {
		panic(fmt.Sprintf("audio: block of %d channels and %d frames", channels, frames))
	}
	stride := frames
	if channels > 1 && frames >= strideStagger {
		stride += strideStagger
	}
	return Block{data: make([]float32, channels*stride), channels: channels, stride: stride, frames: frames}
}

// Channels is the number of channels.
func (b Block) Channels() int { return b.channels }

// Frames is the number of frames.
func (b Block) Frames() int { return b.frames }

// Channel returns the samples of channel ch, 0-based, with len and cap equal
// to Frames. The samples are shared with the block.
func (b Block) Channel(ch int) []float32 {
	if ch < 0 || ch >= b.channels {
		panic(fmt.Sprintf("audio: channel %d of a block of %d channels", ch, b.channels))
	}
	from := (b.lowest+ch)*b.stride + b.first
	return b.data[from : from+b.frames : from+b.frames]
}

// Slice returns the frames from..to (half-open) of every channel, shared with
// b. It panics unless 0 <= from <= to <= Frames.
func (b Block) Slice(from, to int) Block {
	if from < 0 || to < from || to > b.frames {
		panic(fmt.Sprintf("audio: slice %d:%d of a block of %d frames", from, to, b.frames))
	}
	b.first += from
	b.frames = to - from
	return b
}

// Part returns the channels from..to (half-open), shared with b. It panics
// unless 0 <= from <= to <= Channels.
func (b Block) Part(from, to int) Block {
	if from < 0 || to < from || to > b.channels {
		panic(fmt.Sprintf("audio: channels %d:%d of a block of %d", from, to, b.channels))
	}
	b.lowest += from
	b.channels = to - from
	return b
}

// Clear sets every sample to zero.
func (b Block) Clear() {
	for ch := range b.channels {
		clear(b.Channel(ch))
	}
}

// CopyFrom copies the frames of src into b from b's first frame on and returns
// how many frames were copied: the smaller of the two lengths. It panics if
// the channel counts differ.
func (b Block) CopyFrom(src Block) int {
	if b.channels != src.channels {
		panic(fmt.Sprintf("audio: copy of %d channels into %d", src.channels, b.channels))
	}
	n := min(b.frames, src.frames)
	for ch := range b.channels {
		copy(b.Channel(ch)[:n], src.Channel(ch)[:n])
	}
	return n
}
