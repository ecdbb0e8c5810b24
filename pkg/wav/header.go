package wav

import (
	"encoding/binary"
	"fmt"
)

// Encoding is how one sample is stored, little-endian, in the words of the
// command line. Integers are two's complement but for pcm8, which is unsigned
// with its centre at 128 [IBM/Microsoft 1991].
type Encoding string

// The encodings.
const (
	PCM8    Encoding = "pcm8"
	PCM16   Encoding = "pcm16"
	PCM24   Encoding = "pcm24"
	PCM32   Encoding = "pcm32"
	Float32 Encoding = "float32"
	Float64 Encoding = "float64"
)

// Bits is the width of a sample in the file, 0 for an unknown encoding.
func (e Encoding) Bits() int {
	switch e {
	case PCM8:
		return 8
	case PCM16:
		return 16
	case PCM24:
		return 24
	case PCM32, Float32:
		return 32
	case Float64:
		return 64
	}
	return 0
}

// Float says whether samples are floating point.
func (e Encoding) Float() bool { return e == Float32 || e == Float64 }

// Container is the form of the file around fmt and data.
type Container string

// The containers.
const (
	RIFF   Container = "RIFF"
	RF64   Container = "RF64"   // EBU Tech 3306
	BW64   Container = "BW64"   // ITU-R BS.2088
	Wave64 Container = "Wave64" // 128-bit chunk names, 64-bit sizes
)

// Limits of what is read; beyond them a file is refused.
const (
	MaxChannels = 256
	MinRate     = 8000
	MaxRate     = 384000
)

// Header is what a file says about its samples.
type Header struct {
	Container   Container `json:"container"`
	Encoding    Encoding  `json:"encoding"`
	Bits        int       `json:"bits"`       // width of a sample in the file
	ValidBits   int       `json:"valid_bits"` // of them in use, left-justified
	Channels    int       `json:"channels"`
	Rate        int       `json:"sample_rate_hz"`
	Frames      int64     `json:"frames"`      // whole frames that are there
	DataOffset  int64     `json:"data_offset"` // byte of the first sample
	DataSize    int64     `json:"data_bytes"`  // of whole frames
	Extensible  bool      `json:"extensible"`
	ChannelMask uint32    `json:"channel_mask"`         // speaker positions; 0 is none
	SubFormat   string    `json:"sub_format,omitempty"` // GUID of an extensible header
}

// FrameBytes is the size of a frame in the file.
func (h Header) FrameBytes() int { return h.Channels * h.Bits / 8 }

// Chunk is one chunk of a file.
type Chunk struct {
	ID     string `json:"id"`
	Offset int64  `json:"offset"` // byte of the id
	Size   int64  `json:"bytes"`  // of the body, as far as it is there

	body int64 // byte of the body
}

// Format tags [IBM/Microsoft 1991; RFC 2361].
const (
	tagPCM        = 0x0001
	tagFloat      = 0x0003
	tagExtensible = 0xFFFE
)

// tagNames names what is not read, so that a refusal can say what it is.
var tagNames = map[uint16]string{
	0x0002: "Microsoft ADPCM", 0x0005: "IBM CVSD", 0x0006: "A-law (G.711)", 0x0007: "mu-law (G.711)",
	0x0008: "DTS", 0x0010: "OKI ADPCM", 0x0011: "IMA ADPCM", 0x0014: "G.723 ADPCM", 0x0016: "DSP Group TrueSpeech",
	0x0031: "GSM 6.10", 0x0040: "G.721 ADPCM", 0x0045: "G.726 ADPCM", 0x0050: "MPEG layer 1 or 2 in WAV",
	0x0055: "MPEG layer 3 in WAV", 0x0092: "Dolby AC-3 in WAV", 0x00FF: "AAC in WAV", 0x0160: "Windows Media Audio 1",
	0x0161: "Windows Media Audio 2", 0x0162: "Windows Media Audio Pro", 0x0163: "Windows Media Audio lossless",
	0x1610: "AAC in WAV", 0x2000: "Dolby AC-3 in WAV", 0x2001: "DTS in WAV", 0x674F: "Ogg Vorbis in WAV",
	0xF1AC: "FLAC in WAV", 0x0000: "no format",
}

// guidTail ends every sub-format GUID whose first two bytes are a format tag:
// {0000xxxx-0000-0010-8000-00AA00389B71}.
var guidTail = [14]byte{0x00, 0x00, 0x00, 0x00, 0x10, 0x00, 0x80, 0x00, 0x00, 0xAA, 0x00, 0x38, 0x9B, 0x71}

// ambisonicTail ends the sub-format GUIDs of B-format files,
// {0000xxxx-0721-11D3-8644-C8C1CA000000}, whose samples are plain PCM or float.
var ambisonicTail = [14]byte{0x00, 0x00, 0x21, 0x07, 0xD3, 0x11, 0x86, 0x44, 0xC8, 0xC1, 0xCA, 0x00, 0x00, 0x00}

func guidText(g []byte) string {
	le := binary.LittleEndian
	return fmt.Sprintf("%08X-%04X-%04X-%X-%X", le.Uint32(g), le.Uint16(g[4:]), le.Uint16(g[6:]), g[8:10], g[10:16])
}

// parseFmt reads the body of a fmt chunk (up to its first 64 bytes) into h.
func parseFmt(h *Header, c Chunk, b []byte, warn func(code string, at int64, format string, args ...any)) error {
	broken := func(format string, args ...any) error {
		return &FormatError{Where: "fmt chunk", Offset: c.Offset, What: fmt.Sprintf(format, args...)}
	}
	unsupported := func(format string, args ...any) error {
		return &UnsupportedError{Where: "fmt chunk", Offset: c.Offset, What: fmt.Sprintf(format, args...)}
	}
	if len(b) < 16 {
		return broken("has %d bytes, 16 are the least", len(b))
	}
	le := binary.LittleEndian
	tag, channels, rate := le.Uint16(b), int(le.Uint16(b[2:])), int64(le.Uint32(b[4:]))
	avg, align, bits := int64(le.Uint32(b[8:])), int(le.Uint16(b[12:])), int(le.Uint16(b[14:]))
	valid := bits
	if tag == tagExtensible {
		if len(b) < 40 {
			return broken("has %d bytes, an extensible one has 40", len(b))
		}
		h.Extensible = true
		if v := int(le.Uint16(b[18:])); v > 0 {
			valid = v
		}
		h.ChannelMask = le.Uint32(b[20:])
		h.SubFormat = guidText(b[24:40])
		if tail := [14]byte(b[26:40]); tail != guidTail && tail != ambisonicTail {
			return unsupported("sub-format %s is not known", h.SubFormat)
		}
		tag = le.Uint16(b[24:])
	}
	if tag != tagPCM && tag != tagFloat {
		if name, ok := tagNames[tag]; ok {
			return unsupported("%s (format tag 0x%04X): PCM and float are read", name, tag)
		}
		return unsupported("format tag 0x%04X: PCM and float are read", tag)
	}
	switch {
	case channels == 0:
		return broken("says 0 channels")
	case channels > MaxChannels:
		return unsupported("says %d channels: up to %d are read", channels, MaxChannels)
	case rate == 0:
		return broken("says a sample rate of 0 Hz")
	case rate < MinRate || rate > MaxRate:
		return unsupported("says a sample rate of %d Hz: %d to %d Hz are read", rate, MinRate, MaxRate)
	case bits == 0:
		return broken("says 0 bits a sample")
	}
	// The container is what the block align says, not the bits [Microsoft, WAVEFORMATEX].
	width, byBits := 0, (bits+7)/8
	if align%channels == 0 {
		width = align / channels
	}
	readable := func(w int) bool { return w >= 1 && w <= 4 && tag == tagPCM || w == 4 || w == 8 && tag == tagFloat }
	switch {
	case width == byBits:
	case width > byBits && tag == tagPCM && readable(width) && avg != rate*int64(channels)*int64(byBits):
	case readable(byBits):
		warn(WarnBlockAlign, c.Offset, "fmt chunk: block align %d does not fit %d channels of %d bits: %d bytes a sample are taken", align, channels, bits, byBits)
		width = byBits
	default:
		width = byBits // and is refused below
	}
	if tag == tagFloat && (bits != 32 && bits != 64) {
		return unsupported("float of %d bits: 32 and 64 are read", bits)
	}
	if !readable(width) {
		return unsupported("PCM of %d bits in %d bytes a sample: up to 32 bits are read", bits, width)
	}
	if valid > width*8 {
		warn(WarnValidBits, c.Offset, "fmt chunk: %d valid bits in a container of %d: %d are taken", valid, width*8, width*8)
		valid = width * 8
	}
	h.Channels, h.Rate, h.Bits, h.ValidBits = channels, int(rate), width*8, valid
	switch {
	case tag == tagFloat && width == 4:
		h.Encoding, h.ValidBits = Float32, 32
	case tag == tagFloat:
		h.Encoding, h.ValidBits = Float64, 64
	default:
		h.Encoding = [...]Encoding{PCM8, PCM16, PCM24, PCM32}[width-1]
	}
	return nil
}
