package wav

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

const (
	writeBytes = 128 << 10
	// patchSeconds is how much sound lies between two updates of the sizes in
	// the header: what a loss of power may leave unaccounted for.
	patchSeconds = 10
	// riffLimit is the largest RIFF size a plain header can state: 0xFFFFFFFF
	// says that the size is elsewhere.
	riffLimit = unset32 - 1
	ds64Bytes = 28
)

// Format is what a Writer makes.
type Format struct {
	Rate     int // frames per second, MinRate to MaxRate
	Channels int // 1 to MaxChannels
	Encoding Encoding
}

// validate returns everything that is wrong with f.
func (f Format) validate() error {
	var faults []error
	if f.Rate < MinRate || f.Rate > MaxRate {
		faults = append(faults, fmt.Errorf("wav: sample rate %d Hz: %d to %d Hz are written", f.Rate, MinRate, MaxRate))
	}
	if f.Channels < 1 || f.Channels > MaxChannels {
		faults = append(faults, fmt.Errorf("wav: %d channels: 1 to %d are written", f.Channels, MaxChannels))
	}
	if f.Encoding != PCM16 && f.Encoding != PCM24 && f.Encoding != Float32 {
		faults = append(faults, fmt.Errorf("wav: encoding %q: pcm16, pcm24 and float32 are written", f.Encoding))
	}
	return errors.Join(faults...)
}

// FrameBytes is the size of a frame in the file.
func (f Format) FrameBytes() int { return f.Channels * f.Encoding.Bits() / 8 }

// SizeBound returns an upper bound of the bytes that a file of the given
// frames and metadata takes, for a look at the free room before writing.
func SizeBound(f Format, meta *Metadata, frames int64) int64 {
	n := int64(256) + frames*int64(f.FrameBytes())
	for _, c := range append(meta.before(), meta.behind()...) {
		n += 9 + int64(len(c.body))
	}
	return n
}

// Writer is an audio.Sink that makes one file. The caller owns the file: Close
// finishes the WAV in it and neither syncs nor closes it.
type Writer struct {
	f      io.WriterAt
	format Format
	seed   uint64
	meta   *Metadata
	limit  int64 // RIFF sizes above it make an RF64

	buf        []byte
	fill       int   // bytes in buf
	off        int64 // byte of the file where buf goes
	dataAt     int64
	factAt     int64 // 0 is none
	patchEvery int64
	patchNext  int64
	done       bool
	err        error
	out        Written
}

// Written is what a Writer has written.
type Written struct {
	Format    Format
	Container Container // RF64 where RIFF was outgrown
	Frames    int64
	Bytes     int64   // of the file, after Close
	Peak      float64 // largest |sample| before rounding and clipping, re 1.0
	PeakFrame int64   // the first frame that has it
	Over      int64   // frames with a sample beyond ±1.0: clipped, but in float32
	FirstOver int64   // the first of them
	Seed      uint64  // of the dither (pcm16)

	sums []uint64 // of each channel's integers, see mix
}

// Option says how a Writer writes. The zero value is ready for use.
type Option struct {
	// Metadata is written with the samples, nil is none. See Metadata.Derive.
	Metadata *Metadata
	// Seed of the dither of pcm16.
	Seed uint64
}

// NewWriter writes a header to f, which must be empty, and returns a sink of
// the samples. Files start as RIFF with room for the sizes of an RF64, and
// become one when they outgrow 4 GiB (EBU Tech 3306).
//
// pcm24 is rounded, pcm16 is dithered and rounded; both clip at full scale,
// and Written counts the frames beyond it, so that it is never silent. A
// sample of exactly 1.0 becomes the largest integer and does not count.
func NewWriter(f io.WriterAt, format Format, opt Option) (*Writer, error) {
	if err := format.validate(); err != nil {
		return nil, err
	}
	w := &Writer{f: f, format: format, seed: opt.Seed, meta: opt.Metadata, limit: riffLimit}
	w.buf = make([]byte, max(1, writeBytes/format.FrameBytes())*format.FrameBytes())
	w.patchEvery = patchSeconds * int64(format.Rate)
	w.patchNext = w.patchEvery
	w.out = Written{Format: format, Container: RIFF, Seed: opt.Seed, sums: make([]uint64, format.Channels)}
	head := w.header()
	if _, err := f.WriteAt(head, 0); err != nil {
		return nil, fmt.Errorf("header: %w", err)
	}
	w.dataAt = int64(len(head))
	w.off = w.dataAt
	w.out.Bytes = w.off
	return w, nil
}

// header is everything before the first sample, with sizes of an empty file.
func (w *Writer) header() []byte {
	h := sizes(RIFF, 8, 0, 0)
	for _, c := range w.meta.before() {
		h = appendChunk(h, c)
	}
	h = appendChunk(h, rawChunk{"fmt ", fmtBody(w.format)})
	// Asked for with every tag but plain PCM; readers complain without it.
	if len(fmtBody(w.format)) > 16 {
		w.factAt = int64(len(h)) + 8
		h = appendChunk(h, rawChunk{"fact", make([]byte, 4)})
	}
	h = append(h, "data\x00\x00\x00\x00"...)
	binary.LittleEndian.PutUint32(h[4:], uint32(len(h)-8))
	return h
}

// fmtBody is the body of the fmt chunk. The extensible form is asked for with
// more than 2 channels or 16 bits of PCM. Microphones have no place among the
// loudspeakers: the channel mask is 0, but for one channel the centre.
func fmtBody(f Format) []byte {
	le := binary.LittleEndian
	bits := f.Encoding.Bits()
	tag := uint16(tagPCM)
	if f.Encoding.Float() {
		tag = tagFloat
	}
	extensible := f.Channels > 2 || tag == tagPCM && bits > 16
	head := tag
	if extensible {
		head = tagExtensible
	}
	b := le.AppendUint16(nil, head)
	b = le.AppendUint16(b, uint16(f.Channels))
	b = le.AppendUint32(b, uint32(f.Rate))
	b = le.AppendUint32(b, uint32(f.Rate*f.FrameBytes()))
	b = le.AppendUint16(b, uint16(f.FrameBytes()))
	b = le.AppendUint16(b, uint16(bits))
	switch {
	case extensible:
		mask := uint32(0)
		if f.Channels == 1 {
			mask = 0x4
		}
		b = le.AppendUint16(b, 22)
		b = le.AppendUint16(b, uint16(bits))
		b = le.AppendUint32(b, mask)
		b = le.AppendUint16(b, tag)
		b = append(b, guidTail[:]...)
	case tag == tagFloat:
		b = le.AppendUint16(b, 0)
	}
	return b
}

// rawChunk is a chunk as bytes.
type rawChunk struct {
	id   string
	body []byte
}

// appendChunk appends a chunk with its pad byte.
func appendChunk(b []byte, c rawChunk) []byte {
	b = append(b, c.id...)
	b = binary.LittleEndian.AppendUint32(b, uint32(len(c.body)))
	b = append(b, c.body...)
	if len(c.body)%2 == 1 {
		b = append(b, 0)
	}
	return b
}

// Write implements audio.Sink. A sample that is not a finite number is an
// error. It panics if src has another number of channels than the file.
func (w *Writer) Write(src audio.Block) error {
	if src.Channels() != w.format.Channels {
		panic(fmt.Sprintf("wav: write of %d channels to a file of %d", src.Channels(), w.format.Channels))
	}
	if w.err != nil {
		return w.err
	}
	if w.done {
		return errors.New("wav: write after close")
	}
	frame := w.format.FrameBytes()
	for at := 0; at < src.Frames(); {
		n := min(src.Frames()-at, (len(w.buf)-w.fill)/frame)
		if w.err = w.pack(src.Slice(at, at+n)); w.err != nil {
			return w.err
		}
		at += n
		if w.fill == len(w.buf) {
			if w.err = w.flush(); w.err != nil {
				return w.err
			}
		}
	}
	return nil
}

// pack appends the frames of part, which fit, to the buffer.
func (w *Writer) pack(part audio.Block) error {
	if err := w.measure(part); err != nil {
		return err
	}
	frame, channels := w.format.FrameBytes(), w.format.Channels
	width := frame / channels
	for ch := range channels {
		dst, x, sum := w.buf[w.fill+ch*width:], part.Channel(ch), w.out.sums[ch]
		switch w.format.Encoding {
		case PCM16:
			sum = encode16(dst, x, frame, sum, w.seed, uint64(w.out.Frames)*uint64(channels)+uint64(ch), uint64(channels))
		case PCM24:
			sum = encode24(dst, x, frame, sum)
		default:
			sum = encodeFloat32(dst, x, frame, sum)
		}
		w.out.sums[ch] = sum
	}
	w.fill += part.Frames() * frame
	w.out.Frames += int64(part.Frames())
	return nil
}

// measure keeps the peak and counts the frames that are out of range.
func (w *Writer) measure(part audio.Block) error {
	const infinity = 0x7f800000
	peak := uint32(math.Float32bits(float32(w.out.Peak)))
	was, top := peak, uint32(0)
	for ch := range part.Channels() {
		// Without its sign, a float32 is ordered like its bits.
		top = max(top, math.Float32bits(kernel.Peak(part.Channel(ch))))
	}
	if top <= was && top <= math.Float32bits(1) {
		return nil
	}
	for i := range part.Frames() {
		over := false
		for ch := range part.Channels() {
			u := math.Float32bits(part.Channel(ch)[i]) &^ (1 << 31)
			if u >= infinity {
				return fmt.Errorf("wav: frame %d, channel %d: the sample %g is not a finite number", w.out.Frames+int64(i), ch+1, part.Channel(ch)[i])
			}
			over = over || u > math.Float32bits(1)
			if u > peak {
				peak = u
				w.out.PeakFrame = w.out.Frames + int64(i)
			}
		}
		if over {
			if w.out.Over == 0 {
				w.out.FirstOver = w.out.Frames + int64(i)
			}
			w.out.Over++
		}
	}
	w.out.Peak = float64(math.Float32frombits(peak))
	return nil
}

// flush writes the buffer out, and now and then the sizes.
func (w *Writer) flush() error {
	if w.fill > 0 {
		if _, err := w.f.WriteAt(w.buf[:w.fill], w.off); err != nil {
			return fmt.Errorf("data chunk at byte %d: frame %d: %w", w.dataAt-8, (w.off-w.dataAt)/int64(w.format.FrameBytes()), err)
		}
		w.off += int64(w.fill)
		w.fill = 0
	}
	if w.out.Frames >= w.patchNext {
		w.patchNext = w.out.Frames + w.patchEvery
		return w.patch(w.off)
	}
	return nil
}

// sizes is the start of a file that ends at byte end, up to the end of the
// JUNK or ds64 chunk.
func sizes(c Container, end, data, frames int64) []byte {
	le := binary.LittleEndian
	head := append([]byte("RIFF\x00\x00\x00\x00WAVEJUNK"), ds64Bytes, 0, 0, 0)
	head = append(head, make([]byte, ds64Bytes)...)
	le.PutUint32(head[4:], uint32(end-8))
	if c == RF64 {
		copy(head, "RF64\xff\xff\xff\xffWAVEds64")
		le.PutUint64(head[20:], uint64(end-8))
		le.PutUint64(head[28:], uint64(data))
		le.PutUint64(head[36:], uint64(frames))
	}
	return head
}

// patch makes the header tell of a file that ends at byte end and of the
// frames in it.
func (w *Writer) patch(end int64) error {
	data := w.out.Frames * int64(w.format.FrameBytes())
	data32, fact32 := uint32(data), uint32(w.out.Frames)
	if end-8 > w.limit {
		w.out.Container = RF64
		data32, fact32 = unset32, unset32
	}
	put := func(v uint32, at int64) error {
		_, err := w.f.WriteAt(binary.LittleEndian.AppendUint32(nil, v), at)
		return err
	}
	_, err := w.f.WriteAt(sizes(w.out.Container, end, data, w.out.Frames), 0)
	if err == nil && w.factAt > 0 {
		err = put(fact32, w.factAt)
	}
	if err == nil {
		err = put(data32, w.dataAt-4)
	}
	if err != nil {
		return fmt.Errorf("header: %w", err)
	}
	return nil
}

// Close writes what is left, the chunks behind the samples, and the final
// sizes. It is to be called once the last Write has succeeded; further calls
// return what the first one did.
func (w *Writer) Close() error {
	if w.done || w.err != nil {
		return w.err
	}
	w.done = true
	w.patchNext = math.MaxInt64
	if w.err = w.flush(); w.err != nil {
		return w.err
	}
	var tail []byte
	if (w.off-w.dataAt)%2 == 1 {
		tail = append(tail, 0)
	}
	for _, c := range w.meta.behind() {
		tail = appendChunk(tail, c)
	}
	if len(tail) > 0 {
		if _, err := w.f.WriteAt(tail, w.off); err != nil {
			w.err = fmt.Errorf("chunks behind the data at byte %d: %w", w.off, err)
			return w.err
		}
	}
	w.out.Bytes = w.off + int64(len(tail))
	w.err = w.patch(w.out.Bytes)
	return w.err
}

// Written returns what was written so far, the size of the file after Close.
func (w *Writer) Written() Written {
	out := w.out
	out.sums = slices.Clone(out.sums)
	return out
}
