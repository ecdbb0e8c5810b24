package audio

import (
	"errors"
	"fmt"
	"io"
)

// Hop is the shape of a stage made by Hops, in frames.
type Hop struct {
	Channels int // channels out
	Frames   int // frames computed at once
	Before   int // how far back a frame depends on the frames in
	After    int // how far ahead
}

// Hops returns a source that computes its frames in hops of a fixed size from
// a window that slides over src, so that whatever run computes does not depend
// on the sizes of the blocks read. For hop j, run gets
//
//	out  shape.Channels channels, shape.Frames frames: the frames from
//	     first = j·Frames on, to be written whole;
//	in   all channels of src, Before+Frames+After frames, of which the first
//	     is frame first-Before of src. Outside src it is silence.
//
// Both blocks are reused and must not be kept, in must not be written. The
// result is as long as src. If src fails after k frames, k-After frames come
// out before the failure (and none if k < After); an error of run becomes the
// error of the source. It panics if Channels or Frames is not positive or
// Before or After is negative.
func Hops(src Source, shape Hop, run func(out, in Block, first int64) error) Source {
	if shape.Channels <= 0 || shape.Frames <= 0 || shape.Before < 0 || shape.After < 0 {
		panic(fmt.Sprintf("audio: hops of shape %+v", shape))
	}
	f := src.Format()
	return &hops{
		src: src, shape: shape, run: run,
		format: Format{Rate: f.Rate, Channels: shape.Channels},
		in:     NewBlock(f.Channels, shape.Before+shape.Frames+shape.After),
		out:    NewBlock(shape.Channels, shape.Frames),
		filled: shape.Before,
	}
}

type hops struct {
	src     Source
	shape   Hop
	run     func(out, in Block, first int64) error
	format  Format
	in, out Block
	filled  int   // frames of in that are there, from its first on
	first   int64 // frame of the next hop
	got     int64 // frames that came from src
	at, end int   // frames of out that are still to be given
	ended   error // why src gives no more, io.EOF at its end
	err     error // what Read returns once out is given
}

// Format implements Source.
func (h *hops) Format() Format { return h.format }

// Read implements Source.
func (h *hops) Read(dst Block) (int, error) {
	if dst.Channels() != h.format.Channels {
		panic(fmt.Sprintf("audio: read of %d channels into a block of %d", h.format.Channels, dst.Channels()))
	}
	n := 0
	for n < dst.Frames() {
		if h.at == h.end {
			if h.err == nil {
				h.next()
			}
			if h.at == h.end {
				if n > 0 && h.err == io.EOF {
					return n, nil
				}
				return n, h.err
			}
		}
		k := dst.Slice(n, dst.Frames()).CopyFrom(h.out.Slice(h.at, h.end))
		h.at += k
		n += k
	}
	return n, nil
}

// next computes one hop: then there are frames to give, or an error is set, or
// both.
func (h *hops) next() {
	size := h.in.Frames()
	for idle := 0; h.ended == nil && h.filled < size; {
		n, err := h.src.Read(h.in.Slice(h.filled, size))
		h.filled += n
		h.got += int64(n)
		if idle++; n > 0 {
			idle = 0
		}
		switch {
		case errors.Is(err, io.EOF):
			h.ended = io.EOF
		case err != nil:
			h.ended = err
		case idle == 100:
			h.ended = io.ErrNoProgress
		}
	}
	h.in.Slice(h.filled, size).Clear()
	h.at, h.end = 0, h.shape.Frames
	if h.ended != nil {
		last := h.got // one past the last frame that can be computed
		if h.ended != io.EOF {
			last = max(0, h.got-int64(h.shape.After))
		}
		if left := last - h.first; left <= int64(h.end) {
			h.end = int(max(0, left))
			h.err = h.ended
		}
		if h.end == 0 {
			return
		}
	}
	if err := h.run(h.out, h.in, h.first); err != nil {
		h.end, h.err = 0, err
		return
	}
	for ch := range h.in.Channels() {
		x := h.in.Channel(ch)
		copy(x, x[h.shape.Frames:])
	}
	h.filled = max(0, h.filled-h.shape.Frames)
	h.first += int64(h.shape.Frames)
}
