package wav

import (
	"errors"
	"fmt"
	"io"
	"sort"

	"alidade/pkg/audio"
)

// Take is one recording: a source of known length that can be put to any of
// its frames. A Reader is one, and so is what Join and Chain make of several.
type Take interface {
	audio.Source
	Frames() int64
	SeekFrame(frame int64) error
	NonFinite() NonFinite
}

var (
	_ Take = (*Reader)(nil)
	_ Take = (*joined)(nil)
	_ Take = (*chained)(nil)
)

// Part is a file, or a take made from files, as a part of a take. Its name is
// that of error messages.
type Part struct {
	Name string
	Take Take
}

// joinFrames is how many frames of each part are read at a time.
const joinFrames = 2048

// Join returns the take whose channels are those of the parts, side by side in
// the order given. Parts of unequal rate or length are an error that names
// them all.
func Join(parts []Part) (Take, error) {
	if len(parts) == 0 {
		return nil, errors.New("join of no files")
	}
	j := &joined{parts: parts, format: audio.Format{Rate: parts[0].Take.Format().Rate}, frames: parts[0].Take.Frames()}
	var faults []error
	for _, p := range parts {
		f := p.Take.Format()
		if f.Rate != j.format.Rate {
			faults = append(faults, fmt.Errorf("%s: %d Hz, but %s has %d Hz", p.Name, f.Rate, parts[0].Name, j.format.Rate))
		}
		if n := p.Take.Frames(); n != j.frames {
			faults = append(faults, fmt.Errorf("%s: %d frames, but %s has %d", p.Name, n, parts[0].Name, j.frames))
		}
		j.format.Channels += f.Channels
		j.blocks = append(j.blocks, audio.NewBlock(f.Channels, joinFrames))
	}
	if j.format.Channels > MaxChannels {
		faults = append(faults, fmt.Errorf("%d files with %d channels in all: up to %d are read", len(parts), j.format.Channels, MaxChannels))
	}
	if err := errors.Join(faults...); err != nil {
		return nil, err
	}
	return j, j.SeekFrame(0)
}

type joined struct {
	parts  []Part
	blocks []audio.Block
	format audio.Format
	frames int64
	err    error
}

func (j *joined) Format() audio.Format { return j.format }
func (j *joined) Frames() int64        { return j.frames }

func (j *joined) SeekFrame(frame int64) error {
	j.err = nil
	for _, p := range j.parts {
		if err := p.Take.SeekFrame(frame); err != nil {
			return fmt.Errorf("%s: %w", p.Name, err)
		}
	}
	return nil
}

func (j *joined) NonFinite() (all NonFinite) {
	first := 0
	for _, p := range j.parts {
		bad := p.Take.NonFinite()
		if bad.Samples > 0 && (all.Samples == 0 || bad.Frame < all.Frame) {
			all.Frame, all.Channel = bad.Frame, first+bad.Channel
		}
		all.Samples += bad.Samples
		first += p.Take.Format().Channels
	}
	return all
}

// Read implements audio.Source.
func (j *joined) Read(dst audio.Block) (int, error) {
	if dst.Channels() != j.format.Channels {
		panic(fmt.Sprintf("wav: read of %d channels into a block of %d", j.format.Channels, dst.Channels()))
	}
	if dst.Frames() == 0 {
		return 0, nil
	}
	done := 0
	for j.err == nil && done < dst.Frames() {
		n := min(joinFrames, dst.Frames()-done)
		good := n
		for k, p := range j.parts {
			got, err := p.Take.Read(j.blocks[k].Slice(0, n))
			good = min(good, got)
			if err != nil && (j.err == nil || j.err == io.EOF) {
				j.err = err
				if err != io.EOF {
					j.err = fmt.Errorf("%s: %w", p.Name, err)
				}
			}
		}
		ch := 0
		for _, b := range j.blocks {
			for k := range b.Channels() {
				copy(dst.Channel(ch)[done:done+good], b.Channel(k))
				ch++
			}
		}
		done += good
		if good < n && j.err == nil {
			break // the end, which the next read finds
		}
	}
	if done > 0 && j.err == io.EOF {
		return done, nil // the end comes alone
	}
	return done, j.err
}

// Chain returns the take that the parts make one after the other, in the order
// given. Nothing is put in or left out between them: Seams says where they do
// not meet. Parts of unequal rate or channels are an error that names them all.
func Chain(parts []Part) (Take, error) {
	if len(parts) == 0 {
		return nil, errors.New("chain of no files")
	}
	c := &chained{parts: parts, format: parts[0].Take.Format(), starts: []int64{0}}
	var faults []error
	for _, p := range parts {
		f := p.Take.Format()
		if f.Rate != c.format.Rate {
			faults = append(faults, fmt.Errorf("%s: %d Hz, but %s has %d Hz", p.Name, f.Rate, parts[0].Name, c.format.Rate))
		}
		if f.Channels != c.format.Channels {
			faults = append(faults, fmt.Errorf("%s: %d channels, but %s has %d", p.Name, f.Channels, parts[0].Name, c.format.Channels))
		}
		c.starts = append(c.starts, c.Frames()+p.Take.Frames())
	}
	if err := errors.Join(faults...); err != nil {
		return nil, err
	}
	return c, c.SeekFrame(0)
}

type chained struct {
	parts  []Part
	starts []int64 // frame at which each part starts, and the end
	format audio.Format
	part   int   // read from now
	at     int64 // next frame
	err    error
	bad    NonFinite // of the parts left behind
}

func (c *chained) Format() audio.Format { return c.format }
func (c *chained) Frames() int64        { return c.starts[len(c.starts)-1] }

func (c *chained) SeekFrame(frame int64) error {
	if frame < 0 || frame > c.Frames() {
		return fmt.Errorf("seek to frame %d of %d", frame, c.Frames())
	}
	// The part that holds the frame: the last that starts at or before it.
	k := min(sort.Search(len(c.parts), func(k int) bool { return c.starts[k+1] > frame }), len(c.parts)-1)
	c.part, c.at, c.err, c.bad = k, frame, nil, NonFinite{}
	return c.enter(frame - c.starts[k])
}

// enter puts the part in turn to a frame of its own.
func (c *chained) enter(frame int64) error {
	if err := c.parts[c.part].Take.SeekFrame(frame); err != nil {
		return fmt.Errorf("%s: %w", c.parts[c.part].Name, err)
	}
	return nil
}

func (c *chained) NonFinite() NonFinite { return c.with(c.bad) }

// with adds what the part in turn has found to all.
func (c *chained) with(all NonFinite) NonFinite {
	bad := c.parts[c.part].Take.NonFinite()
	if bad.Samples > 0 && all.Samples == 0 {
		all.Frame, all.Channel = c.starts[c.part]+bad.Frame, bad.Channel
	}
	all.Samples += bad.Samples
	return all
}

// Read implements audio.Source.
func (c *chained) Read(dst audio.Block) (int, error) {
	if dst.Channels() != c.format.Channels {
		panic(fmt.Sprintf("wav: read of %d channels into a block of %d", c.format.Channels, dst.Channels()))
	}
	done := 0
	for c.err == nil && done < dst.Frames() {
		if c.at == c.starts[c.part+1] { // the part is through
			if c.part == len(c.parts)-1 {
				if done == 0 {
					c.err = io.EOF
				}
				break
			}
			c.bad = c.with(c.bad)
			c.part++
			c.err = c.enter(0)
			continue
		}
		n := min(int64(dst.Frames()-done), c.starts[c.part+1]-c.at)
		got, err := c.parts[c.part].Take.Read(dst.Slice(done, done+int(n)))
		done += got
		c.at += int64(got)
		if err == io.EOF {
			err = io.ErrUnexpectedEOF
		}
		if err != nil {
			c.err = fmt.Errorf("%s: %w", c.parts[c.part].Name, err)
		}
	}
	if dst.Frames() == 0 {
		return 0, nil
	}
	return done, c.err
}
