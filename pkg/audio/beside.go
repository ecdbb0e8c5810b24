package audio

import (
	"errors"
	"fmt"
	"io"
)

// Beside returns a source of the channels of a followed by those of b, frame by
// frame. It returns an error if their rates differ. Sources that are not as
// long as each other fail where the shorter one ends.
func Beside(a, b Source) (Source, error) {
	f, g := a.Format(), b.Format()
	if f.Rate != g.Rate {
		return nil, fmt.Errorf("audio: sources of %d and %d frames per second beside each other", f.Rate, g.Rate)
	}
	return &beside{a: a, b: b, format: Format{Rate: f.Rate, Channels: f.Channels + g.Channels}}, nil
}

type beside struct {
	a, b     Source
	format   Format
	inA, inB Block
	taken    int64
	err      error
}

func (s *beside) Format() Format { return s.format }

func (s *beside) Read(dst Block) (int, error) {
	if dst.Channels() != s.format.Channels {
		panic(fmt.Sprintf("audio: read of %d channels into a block of %d", dst.Channels(), s.format.Channels))
	}
	if s.err != nil || dst.Frames() == 0 {
		return 0, s.err
	}
	if s.inA.Frames() < dst.Frames() {
		s.inA, s.inB = NewBlock(s.a.Format().Channels, dst.Frames()), NewBlock(s.b.Format().Channels, dst.Frames())
	}
	n, err := s.a.Read(s.inA.Slice(0, dst.Frames()))
	if n == 0 && errors.Is(err, io.EOF) {
		// The other has to end here too.
		k, other := s.b.Read(s.inB.Slice(0, 1))
		if k > 0 {
			err = fmt.Errorf("audio: source of %d frames beside a longer one", s.taken)
		} else if !errors.Is(other, io.EOF) {
			err = other
		}
		s.err = err
		return 0, err
	}
	k := 0
	if n > 0 {
		var other error
		k, other = s.b.Read(s.inB.Slice(0, n))
		switch {
		case k == n:
		case other == nil || errors.Is(other, io.EOF):
			err = fmt.Errorf("audio: source of %d frames beside a longer one", s.taken+int64(k))
		default:
			err = other
		}
	}
	dst.Part(0, s.inA.Channels()).Slice(0, k).CopyFrom(s.inA.Slice(0, k))
	dst.Part(s.inA.Channels(), s.format.Channels).Slice(0, k).CopyFrom(s.inB.Slice(0, k))
	s.taken += int64(k)
	if err != nil && !errors.Is(err, io.EOF) {
		s.err = err
	}
	if errors.Is(err, io.EOF) {
		err = nil // told with the next Read, once b has ended as well
	}
	return k, err
}

// With returns a source of the channels of src followed by those that stage
// makes of it, frame by frame: what goes into a stage beside what comes out. It
// holds as many frames as the stage reads ahead. It returns the error of stage.
func With(src Source, stage func(Source) (Source, error)) (Source, error) {
	k := &kept{src: src}
	y, err := stage(k)
	if err != nil {
		return nil, err
	}
	f, g := src.Format(), y.Format()
	if f.Rate != g.Rate {
		return nil, fmt.Errorf("audio: stage of %d frames per second on a source of %d", g.Rate, f.Rate)
	}
	return &with{kept: k, y: y, format: Format{Rate: f.Rate, Channels: f.Channels + g.Channels}}, nil
}

type with struct {
	kept   *kept
	y      Source
	format Format
	err    error
}

func (w *with) Format() Format { return w.format }

func (w *with) Read(dst Block) (int, error) {
	if dst.Channels() != w.format.Channels {
		panic(fmt.Sprintf("audio: read of %d channels into a block of %d", dst.Channels(), w.format.Channels))
	}
	if w.err != nil {
		return 0, w.err
	}
	own := w.kept.src.Format().Channels
	n, err := w.y.Read(dst.Part(own, w.format.Channels))
	if have := w.kept.to - w.kept.from; n > have {
		n, err = have, fmt.Errorf("audio: stage gave %d frames more than it read", n-have)
	}
	w.kept.take(dst.Part(0, own).Slice(0, n))
	w.err = err
	return n, err
}

// kept is a source that keeps what was read from it until it is taken.
type kept struct {
	src      Source
	held     Block
	from, to int // frames of held that are kept
}

func (k *kept) Format() Format { return k.src.Format() }

func (k *kept) Read(dst Block) (int, error) {
	n, err := k.src.Read(dst)
	if n == 0 {
		return n, err
	}
	if k.to+n > k.held.Frames() {
		count := k.to - k.from
		old := k.held.Slice(k.from, k.to)
		if 2*(count+n) > k.held.Frames() {
			k.held = NewBlock(k.src.Format().Channels, 4*(count+n))
			if count > 0 {
				k.held.CopyFrom(old)
			}
		} else {
			for ch := range old.Channels() {
				copy(k.held.Channel(ch), old.Channel(ch))
			}
		}
		k.from, k.to = 0, count
	}
	k.held.Slice(k.to, k.to+n).CopyFrom(dst)
	k.to += n
	return n, err
}

// take moves the oldest frames to dst.
func (k *kept) take(dst Block) {
	if dst.Frames() == 0 {
		return
	}
	dst.CopyFrom(k.held.Slice(k.from, k.from+dst.Frames()))
	if k.from += dst.Frames(); k.from == k.to {
		k.from, k.to = 0, 0
	}
}
