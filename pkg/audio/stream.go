package audio

import (
	"fmt"
	"io"
	"math"
)

// Format is what a stream of frames looks like.
type Format struct {
	Rate     int // frames per second
	Channels int
}

// Source yields frames. See the package comment for the contract.
type Source interface {
	Format() Format
	Read(dst Block) (n int, err error)
}

// Sink takes frames. See the package comment for the contract.
type Sink interface {
	Write(src Block) error
}

// Copy reads src to its end in blocks of blockFrames and writes each block to
// every sink in the order given. It returns the number of frames that every
// sink took and the first error of either side, nil at the end of the stream;
// frames that come together with a failure are written before it is returned.
// Only io.EOF itself is the end: an error that wraps it is a failure. A source
// that yields neither a frame nor an error is stopped with io.ErrNoProgress.
// It panics if blockFrames is not positive.
func Copy(src Source, blockFrames int, sinks ...Sink) (frames int64, err error) {
	if blockFrames <= 0 {
		panic(fmt.Sprintf("audio: copy in blocks of %d frames", blockFrames))
	}
	block := NewBlock(src.Format().Channels, blockFrames)
	for {
		n, rerr := src.Read(block)
		if n > 0 {
			part := block.Slice(0, n)
			for _, s := range sinks {
				if err := s.Write(part); err != nil {
					return frames, err
				}
			}
			frames += int64(n)
		}
		switch {
		case rerr == io.EOF:
			return frames, nil
		case rerr != nil:
			return frames, rerr
		case n == 0:
			return frames, fmt.Errorf("audio: copy: frame %d: %w", frames, io.ErrNoProgress)
		}
	}
}

// Tee returns a source that yields what src yields and writes it to sink on
// the way. An error of sink becomes the error of the Read that gave it the
// frames, together with those frames, and stays. A failure of src comes before
// one of sink.
func Tee(src Source, sink Sink) Source { return &tee{src: src, sink: sink} }

type tee struct {
	src  Source
	sink Sink
	err  error
}

func (t *tee) Format() Format { return t.src.Format() }

func (t *tee) Read(dst Block) (int, error) {
	if t.err != nil {
		return 0, t.err
	}
	n, err := t.src.Read(dst)
	if n > 0 {
		if werr := t.sink.Write(dst.Slice(0, n)); err == nil {
			err = werr
		}
	}
	t.err = err
	return n, err
}

// Map returns a source whose channel j is channel order[j] of src (0-based)
// times gain[j]. A nil gain is all ones. Channels of src may be left out or
// used more than once. It returns an error if an entry of order is not a
// channel of src, and panics if the lengths of order and a non-nil gain
// differ.
func Map(src Source, order []int, gain []float64) (Source, error) {
	if gain != nil && len(gain) != len(order) {
		panic(fmt.Sprintf("audio: map of %d channels with %d gains", len(order), len(gain)))
	}
	f := src.Format()
	for j, ch := range order {
		if ch < 0 || ch >= f.Channels {
			return nil, fmt.Errorf("audio: map: output channel %d wants input channel %d, the source has %d", j+1, ch+1, f.Channels)
		}
	}
	m := &mapped{src: src, format: Format{Rate: f.Rate, Channels: len(order)}, order: append([]int(nil), order...)}
	m.gain = make([]float32, len(order))
	for j := range m.gain {
		m.gain[j] = 1
		if gain != nil {
			m.gain[j] = float32(gain[j])
		}
	}
	m.same = len(order) == f.Channels
	for j, ch := range order {
		m.same = m.same && j == ch
	}
	return m, nil
}

type mapped struct {
	src    Source
	format Format
	order  []int
	gain   []float32
	in     Block
	same   bool // every channel in its place: what is read needs no copy
}

func (m *mapped) Format() Format { return m.format }

func (m *mapped) Read(dst Block) (int, error) {
	if dst.Channels() != len(m.order) {
		panic(fmt.Sprintf("audio: read of %d channels into a block of %d", len(m.order), dst.Channels()))
	}
	if m.same {
		n, err := m.src.Read(dst)
		for j, g := range m.gain {
			if g != 1 {
				x := dst.Channel(j)[:n]
				for i := range x {
					x[i] *= g
				}
			}
		}
		return n, err
	}
	if m.in.Channels() == 0 || m.in.Frames() < dst.Frames() {
		m.in = NewBlock(m.src.Format().Channels, dst.Frames())
	}
	n, err := m.src.Read(m.in.Slice(0, dst.Frames()))
	for j, ch := range m.order {
		from, to, g := m.in.Channel(ch)[:n], dst.Channel(j)[:n], m.gain[j]
		if g == 1 {
			copy(to, from)
			continue
		}
		for i, x := range from {
			to[i] = g * x
		}
	}
	return n, err
}

// Gain returns a source that yields src times gain, a factor.
func Gain(src Source, gain float64) Source { return &scaled{src: src, gain: float32(gain)} }

type scaled struct {
	src  Source
	gain float32
}

func (s *scaled) Format() Format { return s.src.Format() }

func (s *scaled) Read(dst Block) (int, error) {
	n, err := s.src.Read(dst)
	for ch := range dst.Channels() {
		x := dst.Channel(ch)[:n]
		for i := range x {
			x[i] *= s.gain
		}
	}
	return n, err
}

// Section returns a source of the frames from..to (half-open) of src, which
// must stand at its first frame. Frames before from are read and dropped at
// the first Read. If src ends before to, the section ends there; what src holds
// from to on is not read. It panics unless 0 <= from <= to.
func Section(src Source, from, to int64) Source {
	if from < 0 || to < from {
		panic(fmt.Sprintf("audio: section %d..%d", from, to))
	}
	return &section{src: src, skip: from, left: to - from}
}

type section struct {
	src        Source
	skip, left int64
	err        error
}

func (s *section) Format() Format { return s.src.Format() }

func (s *section) Read(dst Block) (int, error) {
	if s.err != nil {
		return 0, s.err
	}
	if s.skip > 0 {
		scratch := NewBlock(s.src.Format().Channels, int(min(s.skip, 4096)))
		for s.skip > 0 {
			n, err := s.src.Read(scratch.Slice(0, int(min(s.skip, int64(scratch.Frames())))))
			s.skip -= int64(n)
			if err == nil && n == 0 {
				err = fmt.Errorf("audio: section: %d frames before its start: %w", s.skip, io.ErrNoProgress)
			}
			if err != nil {
				s.err = err
				return 0, err
			}
		}
	}
	if s.left == 0 {
		s.err = io.EOF
		return 0, io.EOF
	}
	n, err := s.src.Read(dst.Slice(0, int(min(int64(dst.Frames()), s.left))))
	s.left -= int64(n)
	if err != nil {
		s.err = err
	}
	return n, err
}

// PowerDB returns 10·log10(power). Zero gives -Inf.
func PowerDB(power float64) float64 { return 10 * math.Log10(power) }

// AmplitudeDB returns 20·log10(|amplitude|). Zero gives -Inf.
func AmplitudeDB(amplitude float64) float64 { return 20 * math.Log10(math.Abs(amplitude)) }

// FromPowerDB returns the power ratio of db: 10^(db/10).
func FromPowerDB(db float64) float64 { return math.Pow(10, db/10) }

// FromAmplitudeDB returns the amplitude ratio of db: 10^(db/20).
func FromAmplitudeDB(db float64) float64 { return math.Pow(10, db/20) }
