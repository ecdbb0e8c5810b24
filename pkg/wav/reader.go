package wav

import (
	"errors"
	"fmt"
	"io"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

// readBytes is how much is read of a file at a time.
const readBytes = 128 << 10

// Reader is an audio.Source over the samples of one file. It reads ahead by up
// to 128 KiB and allocates nothing in Read. It is not safe for use by several
// goroutines; two readers of one file are.
type Reader struct {
	r        io.ReaderAt
	head     Header
	meta     *Metadata
	chunks   []Chunk
	warnings []Warning
	decode   decoder
	dataAt   int64 // byte of the data chunk

	at     int64 // next frame
	buf    []byte
	planes [][]float32 // of a tile, see deal
	bufAt  int64       // frame at buf[0]
	bufLen int64       // whole frames in buf
	err    error
	bad    NonFinite
}

// NonFinite tells of samples of a float file that are not finite numbers, or
// not below kernel.LargestSample, beyond which no sound reaches.
type NonFinite struct {
	Samples int64 // how many
	Frame   int64 // of the first of them
	Channel int   // of the first of them, 0-based
}

// Open reads the header and the metadata of a file of size bytes. It reads no
// samples and keeps r. The errors are *FormatError, *UnsupportedError and those
// of r.
func Open(r io.ReaderAt, size int64) (*Reader, error) {
	s := &scan{r: r, size: size, riffSize: -1}
	pos, err := s.header()
	if err != nil {
		return nil, err
	}
	if err := s.walk(pos); err != nil {
		return nil, err
	}
	if err := s.finish(); err != nil {
		return nil, err
	}
	meta, err := s.metadata()
	if err != nil {
		return nil, err
	}
	frame := int64(s.head.FrameBytes())
	return &Reader{
		r: r, head: s.head, meta: meta, chunks: s.chunks, warnings: s.warnings, decode: decoderOf(s.head.Encoding), dataAt: s.data.Offset,
		buf:    make([]byte, max(1, min(readBytes/frame, s.head.Frames))*frame),
		planes: make([][]float32, s.head.Channels),
	}, nil
}

// Format implements audio.Source.
func (r *Reader) Format() audio.Format {
	return audio.Format{Rate: r.head.Rate, Channels: r.head.Channels}
}

// Frames is the number of frames of the file.
func (r *Reader) Frames() int64 { return r.head.Frames }

// Header returns what the file says about its samples.
func (r *Reader) Header() Header { return r.head }

// Metadata returns what else the file carries. It is shared, never nil.
func (r *Reader) Metadata() *Metadata { return r.meta }

// Chunks lists the chunks in the order of the file.
func (r *Reader) Chunks() []Chunk { return slices.Clone(r.chunks) }

// Warnings returns what was odd about the file, in the order found; the last
// one tells of the samples that were not numbers, as far as read.
func (r *Reader) Warnings() []Warning {
	list := slices.Clone(r.warnings)
	if r.bad.Samples > 0 {
		list = append(list, Warning{Code: WarnNonFinite, Offset: r.head.DataOffset + r.bad.Frame*int64(r.head.FrameBytes()),
			Message: fmt.Sprintf("%d samples are not finite numbers, or 2^32 times full scale and more, and were read as 0, the first in channel %d at frame %d", r.bad.Samples, r.bad.Channel+1, r.bad.Frame)})
	}
	return list
}

// NonFinite returns how many samples since Open or the last SeekFrame were not
// finite numbers. Read gives 0 for them; what to do about it is the caller's.
func (r *Reader) NonFinite() NonFinite { return r.bad }

// SeekFrame makes frame the next one read, 0 to Frames. It clears NonFinite and a
// failure of an earlier Read.
func (r *Reader) SeekFrame(frame int64) error {
	if frame < 0 || frame > r.head.Frames {
		return fmt.Errorf("seek to frame %d of %d", frame, r.head.Frames)
	}
	r.at, r.err, r.bad = frame, nil, NonFinite{}
	return nil
}

// Read implements audio.Source. It panics if dst has another number of
// channels than the file. Full scale is 1.0: an integer is divided by
// 2^(bits-1) (less 128 first for pcm8), so samples of up to 24 bits are exact;
// float64 is rounded to float32.
func (r *Reader) Read(dst audio.Block) (int, error) {
	if dst.Channels() != r.head.Channels {
		panic(fmt.Sprintf("wav: read of %d channels into a block of %d", r.head.Channels, dst.Channels()))
	}
	if dst.Frames() == 0 {
		return 0, nil
	}
	if r.err != nil {
		return 0, r.err
	}
	done := 0
	for done < dst.Frames() {
		if r.at == r.head.Frames {
			if done > 0 {
				return done, nil
			}
			return 0, io.EOF
		}
		if r.at < r.bufAt || r.at >= r.bufAt+r.bufLen {
			if err := r.fill(); err != nil {
				r.err = err
				return done, err
			}
		}
		from := r.at - r.bufAt
		n := min(int64(dst.Frames()-done), r.bufLen-from)
		r.deal(dst.Slice(done, done+int(n)), from)
		done += int(n)
		r.at += n
	}
	return done, nil
}

// fill reads as many frames as the buffer holds from r.at on, at least one.
func (r *Reader) fill() error {
	frame := int64(r.head.FrameBytes())
	want := min(int64(len(r.buf)), (r.head.Frames-r.at)*frame)
	got, err := r.r.ReadAt(r.buf[:want], r.head.DataOffset+r.at*frame)
	r.bufAt, r.bufLen = r.at, int64(got)/frame
	if r.bufLen > 0 {
		return nil // what comes after it fails when it is asked for
	}
	if err == nil || errors.Is(err, io.EOF) {
		err = io.ErrUnexpectedEOF
	}
	return fmt.Errorf("data chunk at byte %d: frame %d of %d: %w", r.dataAt, r.at, r.head.Frames, err)
}

// deal spreads frames of the buffer, from the given one on, over the channels
// of dst, in tiles that stay in the nearest cache.
func (r *Reader) deal(dst audio.Block, from int64) {
	frame := r.head.FrameBytes()
	tile := max(16, 12<<10/frame&^7)
	raw := r.buf[from*int64(frame):]
	layout, known := layoutOf(r.head.Encoding)
	for at := 0; at < dst.Frames(); at += tile {
		n := min(tile, dst.Frames()-at)
		part := raw[at*frame : (at+n)*frame]
		done := 0
		if known {
			for ch := range r.planes {
				r.planes[ch] = dst.Channel(ch)[at : at+n]
			}
			done = kernel.Deinterleave(r.planes, part, frame, layout)
			if done == n {
				continue
			}
		}
		r.dealSlowly(dst.Slice(at+done, at+n), part[done*frame:], from+int64(at+done))
	}
}

// dealSlowly is deal for a part in which the first frame is the given one of the
// buffer.
func (r *Reader) dealSlowly(dst audio.Block, part []byte, from int64) {
	frame := r.head.FrameBytes()
	width := frame / r.head.Channels
	for ch := range r.head.Channels {
		bad, first := r.decode(dst.Channel(ch), part[ch*width:], frame)
		if bad > 0 {
			where := r.bufAt + from + int64(first)
			if r.bad.Samples == 0 || where < r.bad.Frame {
				r.bad.Frame, r.bad.Channel = where, ch
			}
			r.bad.Samples += int64(bad)
		}
	}
}

// layoutOf returns how the kernels call an encoding that they know.
func layoutOf(e Encoding) (kernel.Layout, bool) {
	switch e {
	case PCM16:
		return kernel.Int16, true
	case PCM24:
		return kernel.Int24, true
	case PCM32:
		return kernel.Int32, true
	case Float32:
		return kernel.Float32, true
	}
	return 0, false
}
