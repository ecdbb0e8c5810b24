package wav

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
)

// Caps on what is read of a file besides its samples.
const (
	maxChunks   = 4096
	maxFmtBytes = 64
	maxDS64     = 28 + 12*64
	// staleTail is the least number of bytes behind the end of the data that
	// counts as sound the header does not know of.
	staleTail = 64 << 10
)

const unset32 = 0xFFFFFFFF

// knownIDs are the chunk ids that tell a chunk from samples or garbage.
var knownIDs = []string{"fmt ", "data", "fact", "ds64", "bext", "iXML", "LIST", "cue ", "smpl", "inst", "JUNK", "junk",
	"FLLR", "PAD ", "pad ", "id3 ", "ID3 ", "_PMX", "axml", "chna", "bxml", "levl", "umid", "minf", "elm1", "regn",
	"PEAK", "plst", "DISP", "acid", "aXML", "qlty", "mext", "link", "cart", "r64m", "note", "labl", "strc", "SAUR",
	"LGWV", "AFAn", "AFmd", "wavl", "slnt", "DGDA", "SMED", "ResU", "afsp", "Fake", "clm "}

// scan walks the chunks of one file.
type scan struct {
	r        io.ReaderAt
	size     int64
	base     int64 // byte of the RIFF header
	wave64   bool
	riffSize int64 // as declared, of everything behind the size field; -1 unknown
	head     Header
	chunks   []Chunk
	warnings []Warning
	ds64     *ds64Chunk
	fmt      *Chunk
	data     *Chunk
	fact     *Chunk
	overlong *Chunk // the last chunk that claimed more than there is
	claimed  uint64
}

type ds64Chunk struct {
	riff, data, frames uint64
	table              map[string]uint64
}

func (s *scan) warn(code string, at int64, format string, args ...any) {
	s.warnings = append(s.warnings, Warning{Code: code, Message: fmt.Sprintf(format, args...), Offset: at})
}

// bytesAt returns n bytes at off, fewer at the end of the file.
func (s *scan) bytesAt(off int64, n int) ([]byte, error) {
	n = int(max(0, min(int64(n), s.size-off)))
	b := make([]byte, n)
	if n == 0 {
		return b, nil
	}
	got, err := s.r.ReadAt(b, off)
	if got == n || errors.Is(err, io.EOF) {
		return b[:got], nil
	}
	return nil, fmt.Errorf("file at byte %d: %w", off, err)
}

// strangers are files that are taken for WAV now and then.
var strangers = []struct {
	at    int
	magic string
	name  string
}{
	{0, "RIFX", "RIFX, the big-endian form of RIFF"}, {0, "FORM", "an IFF file such as AIFF"}, {0, "fLaC", "a FLAC file"},
	{0, "OggS", "an Ogg file"}, {0, "caff", "a Core Audio file"}, {0, ".snd", "a Sun or NeXT sound file"},
	{0, "\xff\xfb", "an MPEG layer 3 file"}, {0, "wvpk", "a WavPack file"}, {0, "MAC ", "a Monkey's Audio file"},
	{4, "ftyp", "an MP4 or QuickTime file"}, {0, "PK\x03\x04", "a zip archive"}, {0, "\x1f\x8b", "a gzip file"},
	{0, "\x89HDF", "an HDF5 file"}, {0, "\x1aE\xdf\xa3", "a Matroska file"},
}

// header reads everything before the first chunk and returns its place.
func (s *scan) header() (int64, error) {
	if s.size == 0 {
		return 0, &FormatError{Where: "file", What: "is empty"}
	}
	b, err := s.bytesAt(0, 40)
	if err != nil {
		return 0, err
	}
	if len(b) >= 10 && string(b[:3]) == "ID3" {
		// ID3v2: a syncsafe size of 4 times 7 bits, without the 10 byte header.
		n := int64(b[6]&0x7f)<<21 | int64(b[7]&0x7f)<<14 | int64(b[8]&0x7f)<<7 | int64(b[9]&0x7f)
		if n += 10; b[5]&0x10 != 0 {
			n += 10
		}
		s.base = n
		if b, err = s.bytesAt(n, 40); err != nil {
			return 0, err
		}
		s.warn(WarnPrefix, 0, "an ID3 tag of %d bytes stands before the header", n)
	}
	if len(b) >= 40 && [16]byte(b[:16]) == wave64RIFF {
		if [16]byte(b[24:40]) != wave64ID("wave") {
			return 0, &UnsupportedError{Where: "file", Offset: s.base, What: "a Wave64 file that holds no wave"}
		}
		s.wave64, s.head.Container = true, Wave64
		s.riffSize = int64(min(binary.LittleEndian.Uint64(b[16:]), math.MaxInt64/2)) - 8
		return s.base + 40, nil
	}
	if len(b) < 4 || !slices.Contains([]string{"RIFF", "RF64", "BW64"}, string(b[:4])) {
		for _, x := range strangers {
			if len(b) >= x.at+len(x.magic) && string(b[x.at:x.at+len(x.magic)]) == x.magic {
				return 0, &UnsupportedError{Where: "file", Offset: s.base, What: "is " + x.name + ", not WAV"}
			}
		}
		return 0, &FormatError{Where: "file", Offset: s.base, What: fmt.Sprintf("starts with %q, not with RIFF, RF64, BW64 or Wave64", b[:min(4, len(b))])}
	}
	if len(b) < 12 {
		return 0, &FormatError{Where: "file", Offset: s.base, What: fmt.Sprintf("ends after %d bytes of a RIFF header of 12", len(b))}
	}
	if string(b[8:12]) != "WAVE" {
		return 0, &UnsupportedError{Where: "file", Offset: s.base, What: fmt.Sprintf("RIFF form %q, not WAVE", b[8:12])}
	}
	s.head.Container = Container(b[:4])
	s.riffSize = int64(binary.LittleEndian.Uint32(b[4:]))
	return s.base + 12, nil
}

// Wave64 names chunks by GUIDs whose first four bytes are the RIFF id in lower
// case. The outer one has a tail of its own.
var wave64RIFF = [16]byte{'r', 'i', 'f', 'f', 0x2E, 0x91, 0xCF, 0x11, 0xA5, 0xD6, 0x28, 0xDB, 0x04, 0xC1, 0x00, 0x00}

func wave64ID(id string) [16]byte {
	g := [16]byte{4: 0xF3, 0xAC, 0xD3, 0x11, 0x8C, 0xD1, 0x00, 0xC0, 0x4F, 0x8E, 0xDB, 0x8A}
	copy(g[:], id)
	return g
}

// chunkAt reads the chunk header at pos. ok is false where none can stand.
// claim is the size that the header gives for the body.
func (s *scan) chunkAt(pos int64) (c Chunk, claim uint64, ok bool, err error) {
	n := 8
	if s.wave64 {
		n = 24
	}
	b, err := s.bytesAt(pos, n)
	if err != nil || len(b) < n {
		return c, 0, false, err
	}
	c = Chunk{ID: string(b[:4]), Offset: pos, body: pos + int64(n)}
	for _, x := range b[:4] {
		if x < 0x20 || x > 0x7e {
			return c, 0, false, nil
		}
	}
	if !s.wave64 {
		return c, uint64(binary.LittleEndian.Uint32(b[4:])), true, nil
	}
	claim = binary.LittleEndian.Uint64(b[16:])
	// A size includes its own header of 24 bytes; unknown GUIDs are passed over.
	if !bytes.Equal(b[4:16], wave64RIFF[4:]) {
		want := wave64ID("")
		if !bytes.Equal(b[4:16], want[4:]) {
			c.ID = guidText(b)
		}
	}
	if claim < 24 {
		return c, 0, c.ID == "data" && claim == 0, nil
	}
	return c, claim - 24, true, nil
}

// knownAt says whether a chunk with a known id that fits the file starts at
// pos.
func (s *scan) knownAt(pos int64) bool {
	c, claim, ok, err := s.chunkAt(pos)
	return err == nil && ok && slices.Contains(knownIDs, c.ID) && claim <= uint64(s.size-c.body)
}

// after returns where the chunk that follows a body of n bytes starts.
func (s *scan) after(c Chunk) int64 {
	end := c.body + c.Size
	if s.wave64 {
		return c.Offset + (end-c.Offset+7)&^7
	}
	if c.Size%2 == 0 {
		return end
	}
	if end+1 < s.size && !s.knownAt(end+1) && s.knownAt(end) {
		s.warn(WarnNoPad, c.Offset, "%s chunk of %d bytes is not padded to an even length", idText(c.ID), c.Size)
		return end
	}
	return end + 1
}

// walk lists the chunks and reads those that say where and what the samples
// are.
func (s *scan) walk(pos int64) error {
	for pos+8 <= s.size {
		if len(s.chunks) == maxChunks {
			s.warn(WarnTooManyChunks, pos, "more than %d chunks: the rest is left unread", maxChunks)
			break
		}
		c, claim, ok, err := s.chunkAt(pos)
		if err != nil {
			return err
		}
		outside := pos >= s.base+8+s.riffSize && s.riffSize > 0
		if !ok || outside && !slices.Contains(knownIDs, c.ID) && (s.data != nil && s.fmt != nil) {
			break
		}
		left := s.size - c.body
		if claim == unset32 && !s.wave64 && s.ds64 != nil {
			switch {
			case c.ID == "data":
				claim = s.ds64.data
			case s.ds64.table[c.ID] > 0:
				claim = s.ds64.table[c.ID]
			}
		}
		if c.ID == "data" && s.data == nil {
			c.Size = s.dataExtent(c, claim, left)
		} else {
			c.Size = int64(min(claim, uint64(left)))
			if claim > uint64(left) {
				s.warn(WarnTruncated, pos, "%s chunk declares %d bytes, the file has %d left", idText(c.ID), claim, left)
				kept := c
				s.overlong, s.claimed = &kept, claim
			}
		}
		s.chunks = append(s.chunks, c)
		if err := s.take(c); err != nil {
			return err
		}
		pos = s.after(c)
	}
	if rest := s.size - pos; rest > 0 {
		s.warn(WarnTrailing, pos, "%d bytes at the end are no chunks and are left out", rest)
	}
	return nil
}

// take keeps what the chunk says about the samples.
func (s *scan) take(c Chunk) error {
	slot := map[string]**Chunk{"fmt ": &s.fmt, "data": &s.data, "fact": &s.fact}[c.ID]
	if slot != nil {
		if *slot != nil {
			if c.ID != "fact" {
				s.warn(WarnTwice, c.Offset, "a second %s chunk is left out", idText(c.ID))
			}
			return nil
		}
		*slot = &c
	}
	switch {
	case c.ID == "fmt ":
		b, err := s.bytesAt(c.body, int(min(c.Size, maxFmtBytes)))
		if err != nil {
			return err
		}
		return parseFmt(&s.head, c, b, s.warn)
	case c.ID == "ds64" && s.ds64 == nil && !s.wave64:
		b, err := s.bytesAt(c.body, int(min(c.Size, maxDS64)))
		if err != nil {
			return err
		}
		s.ds64 = parseDS64(b)
		if s.ds64 == nil {
			s.warn(WarnNoDS64, c.Offset, "ds64 chunk has %d bytes, 28 are the least", len(b))
		} else if s.riffSize == unset32 {
			s.riffSize = int64(min(s.ds64.riff, math.MaxInt64/2))
		}
	case c.ID == "LIST" && s.data == nil:
		if b, err := s.bytesAt(c.body, 4); err == nil && string(b) == "wavl" {
			return &UnsupportedError{Where: "LIST chunk", Offset: c.Offset, What: "samples in a wave list (wavl)"}
		}
	}
	return nil
}

// parseDS64 reads a ds64 body (EBU Tech 3306; ITU-R BS.2088), or returns nil.
func parseDS64(b []byte) *ds64Chunk {
	if len(b) < 28 {
		return nil
	}
	le := binary.LittleEndian
	d := &ds64Chunk{riff: le.Uint64(b), data: le.Uint64(b[8:]), frames: le.Uint64(b[16:]), table: map[string]uint64{}}
	for k := uint32(0); k < le.Uint32(b[24:]) && len(b) >= 40; k++ {
		d.table[string(b[28:32])] = le.Uint64(b[32:])
		b = b[12:]
	}
	return d
}

// dataExtent decides how many bytes of samples there are.
func (s *scan) dataExtent(c Chunk, claim uint64, left int64) int64 {
	unknown := claim == unset32 && !s.wave64
	if unknown && s.head.Container != RIFF {
		s.warn(WarnNoDS64, c.Offset, "data chunk has its length in a ds64 chunk that is not there")
	}
	switch {
	case unknown:
		s.warn(WarnSizeUnknown, c.Offset, "data chunk says nothing of its length: read to the end of the file, %d bytes", left)
		return left
	case claim == 0 && left > 0 && !s.knownAt(c.body):
		s.warn(WarnSizeZero, c.Offset, "data chunk declares 0 bytes: read to the end of the file, %d bytes", left)
		return left
	case claim > uint64(left):
		s.warn(WarnTruncated, c.Offset, "data chunk declares %d bytes, the file has %d left", claim, left)
		return left
	}
	n := int64(claim)
	if s.head.Container == RIFF && s.ds64 == nil && s.size > unset32 {
		if m := s.unwrap(c, n, left); m > n {
			s.warn(WarnSizeWrapped, c.Offset, "data chunk declares %d bytes, its true length modulo 4 GiB: %d bytes are read", n, m)
			return m
		}
	}
	if tail := left - n - n%2; tail >= staleTail && s.soundAt(c.body+n) {
		s.warn(WarnSizeStale, c.Offset, "data chunk declares %d bytes, but %d more follow that are no chunks: read to the end of the file", n, left-n)
		return left
	}
	return n
}

// unwrap returns the longest extent of the data that is n modulo 4 GiB and
// ends where the file or another chunk says so, or n.
func (s *scan) unwrap(c Chunk, n, left int64) int64 {
	if s.endsWell(c.body+n) && s.riffSize+8 == c.body+n+n%2-s.base {
		return n
	}
	const wrap = 1 << 32
	for m := n + (left-n)/wrap*wrap; m > n; m -= wrap {
		if s.endsWell(c.body + m) {
			return m
		}
	}
	if s.riffSize == int64(uint32(s.size-8-s.base)) && left%wrap >= n {
		return n + (left-n)/wrap*wrap
	}
	return n
}

// endsWell says whether a body may end at pos: there the file ends or a chunk
// starts.
func (s *scan) endsWell(pos int64) bool {
	return pos == s.size || pos+1 == s.size || s.knownAt(pos) || pos%2 == 1 && s.knownAt(pos+1)
}

// soundAt says whether what stands at pos can be neither a chunk nor filling.
func (s *scan) soundAt(pos int64) bool {
	for _, at := range []int64{pos, pos + pos%2} {
		if c, claim, ok, err := s.chunkAt(at); err != nil || ok && (slices.Contains(knownIDs, c.ID) || claim <= uint64(s.size-c.body)) {
			return false
		}
	}
	b, err := s.bytesAt(pos, 4096)
	return err == nil && len(bytes.Trim(b, "\x00")) > 0 && len(bytes.Trim(b, "\xff")) > 0
}

// finish checks that the samples can be read and counts their frames.
func (s *scan) finish() error {
	if s.fmt == nil || s.data == nil {
		name := "fmt"
		if s.fmt != nil {
			name = "data"
		}
		if s.overlong != nil {
			return &FormatError{Where: idText(s.overlong.ID) + " chunk", Offset: s.overlong.Offset,
				What: fmt.Sprintf("declares %d bytes, the file has %d left, and no %s chunk was found before it", s.claimed, s.size-s.overlong.body, name)}
		}
		return &FormatError{Where: "file", Offset: s.base, What: fmt.Sprintf("has no %s chunk in its %d bytes", name, s.size)}
	}
	h, frame := &s.head, int64(s.head.FrameBytes())
	h.Frames = s.data.Size / frame
	h.DataOffset, h.DataSize = s.data.body, h.Frames*frame
	if rest := s.data.Size - h.DataSize; rest > 0 && !s.padCounted(h.DataOffset+h.DataSize, rest) {
		s.warn(WarnPartialFrame, h.DataOffset+h.DataSize, "data chunk ends %d bytes into a frame of %d: they are left out", rest, frame)
	}
	if h.Frames == 0 {
		s.warn(WarnNoFrames, s.data.Offset, "data chunk holds no frames")
	}
	said := s.riffSize != 0 && s.riffSize != unset32 && s.riffSize != int64(uint32(s.size-8-s.base)) && !s.wave64
	if end := s.base + 8 + s.riffSize; said && (end > s.size+1 || end < h.DataOffset+s.data.Size) {
		s.warn(WarnRIFFSize, s.base, "RIFF header gives an end at byte %d, the file has %d", end, s.size)
	}
	if s.fact != nil && h.Encoding.Float() {
		if b, err := s.bytesAt(s.fact.body, 4); err == nil && len(b) == 4 && s.fact.Size >= 4 {
			if n := binary.LittleEndian.Uint32(b); n != 0 && n != unset32 && int64(n) != h.Frames {
				s.warn(WarnFact, s.fact.Offset, "fact chunk says %d frames, the data hold %d", n, h.Frames)
			}
		}
	}
	return nil
}

// padCounted says whether the rest behind the last whole frame is padding that
// a writer counted into the size of the data.
func (s *scan) padCounted(pos, rest int64) bool {
	if rest != 1 && !(s.wave64 && rest < 8) {
		return false
	}
	b, err := s.bytesAt(pos, int(rest))
	return err == nil && len(bytes.Trim(b, "\x00")) == 0
}

// idText makes a chunk id fit for a message.
func idText(id string) string {
	for len(id) > 0 && id[len(id)-1] == ' ' {
		id = id[:len(id)-1]
	}
	return id
}
