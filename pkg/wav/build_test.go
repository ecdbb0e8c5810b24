package wav

import (
	"bytes"
	"encoding/binary"
	"encoding/hex"
	"io"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
)

var le = binary.LittleEndian

// noise is a block of seeded noise within ±1, different on each channel.
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

// recipe says how a test file is made. It is a writer of its own, kept apart
// from Writer: it can make what is wrong.
type recipe struct {
	tag              uint16 // PCM if 0
	bits, width      int    // bits field and bytes a sample; width follows bits if 0
	channels, rate   int    // 2 and 48000 if 0
	frames           int    // 40 if 0, none if negative
	ext              bool
	valid            int    // of an extensible header; bits if 0
	guid             string // hex; of the tag if empty
	align, avg       int    // fields; right if 0, 0 if negative
	fmtBytes         int    // cut or fill the fmt body
	before, between  []rawChunk
	after            []rawChunk
	container        string // RIFF if empty
	riffSize, data32 int64  // fields; right if 0, 0 if negative
	noPad            bool
	tail             []byte // behind everything
	dataFirst        bool
	change           func(file []byte) []byte
}

// taken is a made file and what its samples are.
type taken struct {
	file []byte
	want audio.Block
}

func (r recipe) fill() recipe {
	def := func(v *int, to int) {
		if *v == 0 {
			*v = to
		}
	}
	if r.tag == 0 {
		r.tag = tagPCM
	}
	def(&r.bits, 16)
	def(&r.width, (r.bits+7)/8)
	def(&r.channels, 2)
	def(&r.rate, 48000)
	def(&r.frames, 40)
	r.frames = max(0, r.frames)
	def(&r.valid, r.bits)
	def(&r.align, r.width*r.channels)
	def(&r.avg, r.rate*r.width*r.channels)
	r.align, r.avg = max(0, r.align), max(0, r.avg)
	if r.container == "" {
		r.container = "RIFF"
	}
	return r
}

// samples makes the bytes of the data chunk and the float32 that they mean,
// computed in float64 from the integers, left-justified.
func (r recipe) samples() ([]byte, audio.Block) {
	rng := rand.New(rand.NewPCG(uint64(r.bits), uint64(r.channels*1000+r.frames)))
	want := audio.NewBlock(r.channels, r.frames)
	var b []byte
	valid := r.bits
	if r.ext {
		valid = min(r.valid, 8*r.width)
	}
	for i := range r.frames {
		for ch := range r.channels {
			x := &want.Channel(ch)[i]
			v := int64(rng.Uint64()) >> (64 - valid) // signed, of the valid bits
			switch {                                 // both ends of the range in every file
			case i == 1:
				v = -1 << (valid - 1)
			case i == 2:
				v = 1<<(valid-1) - 1
			}
			switch {
			case r.tag == tagFloat && r.width == 4:
				*x = float32(rng.NormFloat64())
				b = le.AppendUint32(b, math.Float32bits(*x))
			case r.tag == tagFloat:
				y := rng.NormFloat64()
				*x = float32(y)
				b = le.AppendUint64(b, math.Float64bits(y))
			case r.width == 1:
				*x = float32(float64(v) / math.Pow(2, float64(valid-1)))
				b = append(b, byte(v<<(8-valid)+128))
			default:
				*x = float32(float64(v) / math.Pow(2, float64(valid-1)))
				u := uint64(v) << (8*r.width - valid)
				for k := range r.width {
					b = append(b, byte(u>>(8*k)))
				}
			}
		}
	}
	return b, want
}

func (r recipe) fmtBody() []byte {
	tag := r.tag
	if r.ext {
		tag = tagExtensible
	}
	b := le.AppendUint16(nil, tag)
	b = le.AppendUint16(b, uint16(r.channels))
	b = le.AppendUint32(b, uint32(r.rate))
	b = le.AppendUint32(b, uint32(r.avg))
	b = le.AppendUint16(b, uint16(r.align))
	b = le.AppendUint16(b, uint16(r.bits))
	if r.ext {
		b = le.AppendUint16(b, 22)
		b = le.AppendUint16(b, uint16(r.valid))
		b = le.AppendUint32(b, 0)
		if r.guid != "" {
			g, err := hex.DecodeString(r.guid)
			if err != nil || len(g) != 16 {
				panic("GUID " + r.guid)
			}
			b = append(b, g...)
		} else {
			// K2: the sub-format GUID is the tag and 00 00 00 00 10 00 80 00 00 AA 00 38 9B 71.
			b = le.AppendUint16(b, r.tag)
			b = append(b, 0, 0, 0, 0, 0x10, 0, 0x80, 0, 0, 0xAA, 0, 0x38, 0x9B, 0x71)
		}
	}
	for len(b) < r.fmtBytes {
		b = append(b, 0)
	}
	if r.fmtBytes > 0 {
		b = b[:r.fmtBytes]
	}
	return b
}

func (r recipe) make() taken {
	r = r.fill()
	data, want := r.samples()
	put := func(b []byte, c rawChunk) []byte {
		b = append(b, c.id...)
		b = le.AppendUint32(b, uint32(len(c.body)))
		b = append(b, c.body...)
		if len(c.body)%2 == 1 && !r.noPad {
			b = append(b, 0)
		}
		return b
	}
	file := []byte(r.container + "    WAVE")
	for _, c := range r.before {
		file = put(file, c)
	}
	if !r.dataFirst {
		file = put(file, rawChunk{"fmt ", r.fmtBody()})
	}
	for _, c := range r.between {
		file = put(file, c)
	}
	at := len(file) + 4
	file = put(file, rawChunk{"data", data})
	if r.dataFirst {
		file = put(file, rawChunk{"fmt ", r.fmtBody()})
	}
	for _, c := range r.after {
		file = put(file, c)
	}
	field := func(at int, v, right int64) {
		if v == 0 {
			v = right
		}
		le.PutUint32(file[at:], uint32(max(0, v)))
	}
	field(at, r.data32, int64(len(data)))
	field(4, r.riffSize, int64(len(file)-8))
	file = append(file, r.tail...)
	if r.change != nil {
		file = r.change(file)
	}
	return taken{file, want}
}

// ds64Body is a ds64 body with table entries.
func ds64Body(riff, data, frames uint64, table ...any) []byte {
	b := le.AppendUint64(nil, riff)
	b = le.AppendUint64(b, data)
	b = le.AppendUint64(b, frames)
	b = le.AppendUint32(b, uint32(len(table)/2))
	for k := 0; k < len(table); k += 2 {
		b = append(b, table[k].(string)...)
		b = le.AppendUint64(b, uint64(table[k+1].(int)))
	}
	return b
}

// rf64 is a recipe of a small file with 64-bit sizes.
func rf64(container string, r recipe) recipe {
	r.container, r.riffSize, r.data32 = container, unset32, unset32
	full := r.fill()
	size := uint64(full.frames * full.channels * full.width)
	r.before = append([]rawChunk{{"ds64", ds64Body(0, size, uint64(full.frames))}}, r.before...)
	was := r.change
	r.change = func(file []byte) []byte {
		le.PutUint64(file[20:], uint64(len(file)-8))
		if was != nil {
			file = was(file)
		}
		return file
	}
	return r
}

// wave64 makes the same samples as a Wave64 file.
func wave64(r recipe, between ...[]byte) taken {
	r = r.fill()
	data, want := r.samples()
	put := func(b []byte, id string, body []byte) []byte {
		g := wave64ID(id)
		b = append(b, g[:]...)
		b = le.AppendUint64(b, uint64(len(body)+24))
		b = append(b, body...)
		for len(b)%8 != 0 {
			b = append(b, 0)
		}
		return b
	}
	file := append([]byte{}, wave64RIFF[:]...)
	file = le.AppendUint64(file, 0)
	wave := wave64ID("wave")
	file = append(file, wave[:]...)
	file = put(file, "fmt ", r.fmtBody())
	for _, b := range between {
		file = append(file, b...)
	}
	file = put(file, "data", data)
	le.PutUint64(file[16:], uint64(len(file)))
	return taken{file, want}
}

// open opens a file in memory.
func open(t testing.TB, file []byte) *Reader {
	t.Helper()
	r, err := Open(bytes.NewReader(file), int64(len(file)))
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// readAll reads all frames.
func readAll(t testing.TB, src audio.Source) audio.Block {
	t.Helper()
	b, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// sameBits fails unless a and b are the same to the bit.
func sameBits(t testing.TB, got, want audio.Block) {
	t.Helper()
	if got.Channels() != want.Channels() || got.Frames() != want.Frames() {
		t.Fatalf("%d channels of %d frames, want %d of %d", got.Channels(), got.Frames(), want.Channels(), want.Frames())
	}
	for ch := range want.Channels() {
		a, b := got.Channel(ch), want.Channel(ch)
		for i := range b {
			if math.Float32bits(a[i]) != math.Float32bits(b[i]) {
				t.Fatalf("channel %d, frame %d: %v, want %v", ch, i, a[i], b[i])
			}
		}
	}
}

// memory is a file in memory to write to and to read back.
type memory struct {
	b  []byte
	at int64
}

func (m *memory) WriteAt(p []byte, off int64) (int, error) {
	if need := int(off) + len(p); need > len(m.b) {
		m.b = append(m.b, make([]byte, need-len(m.b))...)
	}
	return copy(m.b[off:], p), nil
}

func (m *memory) ReadAt(p []byte, off int64) (int, error) {
	return bytes.NewReader(m.b).ReadAt(p, off)
}

func (m *memory) Read(p []byte) (int, error) {
	n, err := m.ReadAt(p, m.at)
	m.at += int64(n)
	return n, err
}

func (m *memory) Seek(off int64, whence int) (int64, error) {
	switch whence {
	case io.SeekCurrent:
		off += m.at
	case io.SeekEnd:
		off += int64(len(m.b))
	}
	m.at = off
	return off, nil
}

// write makes a file of b with a Writer, in blocks of the given size.
func write(t testing.TB, format Format, opt Option, b audio.Block, size int) (*memory, Written) {
	t.Helper()
	m := &memory{}
	w, err := NewWriter(m, format, opt)
	if err != nil {
		t.Fatal(err)
	}
	for at := 0; at < b.Frames(); at += size {
		if err := w.Write(b.Slice(at, min(at+size, b.Frames()))); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return m, w.Written()
}

// codes are the codes of the warnings.
func codes(list []Warning) string {
	var c []string
	for _, w := range list {
		c = append(c, w.Code)
	}
	return strings.Join(c, " ")
}
