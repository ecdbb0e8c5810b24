package wav

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"math"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"alidade/pkg/audio"
)

// entry is a file of the corpus and what must become of it: its samples to the
// bit with these warnings and no others, or a refusal that says this.
type entry struct {
	name     string
	taken    func() taken
	warnings string // codes, in order
	frames   int    // first frames of the samples that are to be read; all if 0, none if negative
	broken   string // text of a *FormatError
	refused  string // text of an *UnsupportedError
}

func of(r recipe) func() taken { return r.make }

func edit(r recipe, change func(b []byte) []byte) func() taken {
	r.change = change
	return r.make
}

func bytesOf(b string) func() taken { return func() taken { return taken{file: []byte(b)} } }

// corpus lists every file.
func corpus() (list []entry) {
	add := func(e ...entry) { list = append(list, e...) }

	// The encodings, plain and extensible. K1: fmt of 16, 18 and 40 bytes.
	for _, bits := range []int{8, 16, 24, 32} {
		for _, channels := range []int{1, 2} {
			add(entry{name: fmt.Sprintf("plain PCM of %d bits, %d channels", bits, channels), taken: of(recipe{bits: bits, channels: channels})})
		}
		add(entry{name: fmt.Sprintf("PCM of %d bits with a fmt of 18 bytes", bits), taken: of(recipe{bits: bits, fmtBytes: 18})},
			entry{name: fmt.Sprintf("extensible PCM of %d bits", bits), taken: of(recipe{bits: bits, ext: true})})
	}
	for _, x := range []struct{ valid, width int }{{20, 3}, {12, 2}, {24, 4}, {18, 3}, {7, 1}, {9, 2}, {31, 4}, {8, 2}, {16, 4}} {
		add(entry{name: fmt.Sprintf("plain PCM, %d bits in %d bytes", x.valid, x.width), taken: of(recipe{bits: x.valid, width: x.width})},
			entry{name: fmt.Sprintf("extensible PCM, %d bits valid in %d bytes", x.valid, x.width), taken: of(recipe{bits: 8 * x.width, width: x.width, ext: true, valid: x.valid})})
	}
	for _, bits := range []int{32, 64} {
		fact := []rawChunk{{"fact", []byte{40, 0, 0, 0}}}
		add(entry{name: fmt.Sprintf("float%d, fmt of 16 bytes", bits), taken: of(recipe{tag: tagFloat, bits: bits})},
			entry{name: fmt.Sprintf("float%d, fmt of 18 bytes and fact", bits), taken: of(recipe{tag: tagFloat, bits: bits, fmtBytes: 18, between: fact})},
			entry{name: fmt.Sprintf("extensible float%d", bits), taken: of(recipe{tag: tagFloat, bits: bits, ext: true, between: fact})},
			entry{name: fmt.Sprintf("mono float%d", bits), taken: of(recipe{tag: tagFloat, bits: bits, channels: 1})})
	}
	add(entry{name: "extensible with 0 valid bits", taken: func() taken {
		r := recipe{bits: 16, ext: true}.make()
		le.PutUint16(r.file[20+18:], 0)
		return r
	}},
		entry{name: "extensible with more valid bits than the container", taken: of(recipe{bits: 16, ext: true, valid: 24}), warnings: WarnValidBits},
		entry{name: "extensible B-format PCM", taken: of(recipe{bits: 24, ext: true, channels: 4, guid: "010000002107d3118644c8c1ca000000"})},
		entry{name: "extensible B-format float", taken: of(recipe{tag: tagFloat, bits: 32, ext: true, channels: 4, guid: "030000002107d3118644c8c1ca000000"})},
		entry{name: "extensible fmt of 64 bytes", taken: of(recipe{bits: 24, ext: true, fmtBytes: 64})},
		entry{name: "fmt of 200 bytes", taken: of(recipe{bits: 24, fmtBytes: 200})})

	// Tags that are not read, by name.
	for _, x := range []struct {
		tag  uint16
		bits int
		want string
	}{{0x0006, 8, "A-law (G.711) (format tag 0x0006)"}, {0x0007, 8, "mu-law (G.711)"}, {0x0002, 4, "Microsoft ADPCM"}, {0x0011, 4, "IMA ADPCM"},
		{0x0055, 0, "MPEG layer 3 in WAV"}, {0x0050, 0, "MPEG layer 1 or 2"}, {0x0031, 0, "GSM 6.10"}, {0x00FF, 16, "AAC in WAV"},
		{0x0092, 16, "Dolby AC-3"}, {0x0161, 16, "Windows Media Audio"}, {0x674F, 16, "Ogg Vorbis"}, {0xF1AC, 16, "FLAC in WAV"}, {0x4D2, 16, "format tag 0x04D2: PCM"}} {
		add(entry{name: x.want, taken: of(recipe{tag: x.tag, bits: max(4, x.bits)}), refused: x.want})
	}
	add(entry{name: "extensible mu-law", taken: of(recipe{tag: 7, bits: 8, ext: true}), refused: "mu-law (G.711)"},
		entry{name: "extensible with an unknown GUID", taken: of(recipe{bits: 16, ext: true, guid: "00112233445566778899aabbccddeeff"}), refused: "sub-format 33221100-5544-7766-8899-AABBCCDDEEFF is not known"},
		entry{name: "PCM of 64 bits", taken: of(recipe{bits: 64}), refused: "PCM of 64 bits in 8 bytes"},
		entry{name: "PCM of 40 bits", taken: of(recipe{bits: 40}), refused: "PCM of 40 bits in 5 bytes"},
		entry{name: "float of 16 bits", taken: of(recipe{tag: tagFloat, bits: 16}), refused: "float of 16 bits"},
		entry{name: "float of 24 bits", taken: of(recipe{tag: tagFloat, bits: 24}), refused: "float of 24 bits"},
		entry{name: "65535 bits", taken: edit(recipe{}, func(b []byte) []byte { le.PutUint16(b[34:], 65535); return b }), refused: "PCM of 65535 bits"},
		entry{name: "samples in a wave list", taken: of(recipe{between: []rawChunk{{"LIST", []byte("wavldata\x00\x00\x00\x00")}}}), refused: "wave list"})

	// Channels.
	for _, n := range []int{3, 4, 5, 6, 7, 8, 12, 16, 24, 32, 48, 64, 96, 128, 255, 256} {
		for _, bits := range []int{16, 24} {
			add(entry{name: fmt.Sprintf("%d channels of %d bits", n, bits), taken: of(recipe{bits: bits, channels: n, frames: 11})})
		}
	}
	for _, n := range []int{257, 1024, 16383} {
		add(entry{name: fmt.Sprintf("%d channels", n), taken: of(recipe{channels: n, frames: 1, align: 2}), refused: fmt.Sprintf("says %d channels: up to 256 are read", n)})
	}
	add(entry{name: "65535 channels in 4000 bytes", taken: edit(recipe{frames: 1000}, func(b []byte) []byte { le.PutUint16(b[22:], 65535); return b }), refused: "says 65535 channels"})

	// Sample rates.
	for _, rate := range []int{8000, 11025, 16000, 22050, 32000, 44056, 44100, 47952, 48048, 64000, 88200, 96000, 176400, 192000, 352800, 384000} {
		add(entry{name: fmt.Sprintf("%d Hz", rate), taken: of(recipe{rate: rate, bits: 24})})
	}
	for _, rate := range []int{7999, 1, 384001, 768000, 2822400} {
		add(entry{name: fmt.Sprintf("%d Hz", rate), taken: of(recipe{rate: rate}), refused: fmt.Sprintf("says a sample rate of %d Hz: 8000 to 384000 Hz are read", rate)})
	}
	add(entry{name: "rate 0", taken: edit(recipe{}, func(b []byte) []byte { le.PutUint32(b[24:], 0); return b }), broken: "fmt chunk at byte 12: says a sample rate of 0 Hz"})

	// 64-bit containers.
	for _, c := range []string{"RF64", "BW64"} {
		table := rf64(c, recipe{bits: 24, after: []rawChunk{{"axml", []byte("<a/>")}}})
		table.before[0].body = append(table.before[0].body[:24], ds64Body(0, 0, 0, "axml", 4)[24:]...)
		table.change = func(b []byte) []byte { le.PutUint32(b[len(b)-8:], unset32); return b }
		short := rf64(c, recipe{})
		short.before[0].body = short.before[0].body[:20]
		short.change = nil
		large := rf64(c, recipe{})
		le.PutUint64(large.before[0].body[8:], 1<<40)
		huge := rf64(c, recipe{})
		le.PutUint64(huge.before[0].body[8:], math.MaxUint64)
		zero := rf64(c, recipe{})
		clear(zero.before[0].body)
		claims := rf64(c, recipe{})
		le.PutUint32(claims.before[0].body[24:], 1<<30)
		plain := rf64(c, recipe{bits: 24})
		plain.data32 = 0
		add(entry{name: c, taken: of(rf64(c, recipe{bits: 24}))},
			entry{name: c + " of 3 channels of float", taken: of(rf64(c, recipe{tag: tagFloat, bits: 32, channels: 3, ext: true}))},
			entry{name: c + " with bext", taken: of(rf64(c, recipe{bits: 24, before: []rawChunk{{"bext", make([]byte, 602)}}}))},
			entry{name: c + " with chna and axml", taken: of(rf64(c, recipe{before: []rawChunk{{"chna", make([]byte, 44)}}, after: []rawChunk{{"axml", []byte("<x/>")}}}))},
			entry{name: c + " with a table", taken: of(table)},
			entry{name: c + " with the data size in 32 bits", taken: of(plain)},
			entry{name: c + " without ds64", taken: of(recipe{container: c, riffSize: unset32, data32: unset32}), warnings: WarnNoDS64 + " " + WarnSizeUnknown},
			entry{name: c + " with a ds64 of 20 bytes", taken: of(short), warnings: WarnNoDS64 + " " + WarnNoDS64 + " " + WarnSizeUnknown},
			entry{name: c + " whose ds64 gives 1 TiB", taken: of(large), warnings: WarnTruncated},
			entry{name: c + " whose ds64 gives 2^64-1 bytes", taken: of(huge), warnings: WarnTruncated},
			entry{name: c + " whose ds64 is all zero", taken: of(zero), warnings: WarnSizeZero},
			entry{name: c + " whose ds64 claims 2^30 table entries", taken: of(claims)})
	}
	used := rf64("RIFF", recipe{bits: 24})
	add(entry{name: "RIFF with sizes in a ds64", taken: of(used)},
		entry{name: "RIFF with a ds64 that is not used", taken: of(recipe{before: []rawChunk{{"ds64", ds64Body(9, 9, 9)}}})},
		entry{name: "Wave64", taken: func() taken { return wave64(recipe{bits: 24, channels: 3, frames: 41}) }},
		entry{name: "Wave64 of float", taken: func() taken { return wave64(recipe{tag: tagFloat, bits: 32, channels: 1, frames: 41, fmtBytes: 18}) }},
		entry{name: "Wave64 with a chunk of unknown GUID", taken: func() taken {
			strange := append([]byte("ABCDEFGHIJKLMNOP"), le.AppendUint64(nil, 24+9)...)
			return wave64(recipe{}, append(strange, make([]byte, 16)...))
		}},
		entry{name: "Wave64 whose data claim 1 TiB", taken: func() taken {
			x := wave64(recipe{})
			le.PutUint64(x.file[40+40+16:], 1<<40)
			return x
		}, warnings: WarnTruncated},
		entry{name: "Wave64 with a chunk size below its header", taken: func() taken {
			x := wave64(recipe{})
			le.PutUint64(x.file[40+16:], 3)
			return x
		}, broken: "no fmt chunk"},
		entry{name: "Wave64 that is no wave", taken: func() taken {
			x := wave64(recipe{})
			copy(x.file[24:], "abcd")
			return x
		}, refused: "holds no wave"})

	// Chunks before, between and behind, in any order.
	bext := rawChunk{"bext", make([]byte, 602)}
	bextOdd := rawChunk{"bext", make([]byte, 617)}
	ixml := rawChunk{"iXML", []byte("<BWFXML><SCENE>7</SCENE></BWFXML>")}
	cues := rawChunk{"cue ", append([]byte{1, 0, 0, 0}, make([]byte, 24)...)}
	info := rawChunk{"LIST", []byte("INFOINAM\x03\x00\x00\x00ab\x00\x00")}
	adtl := rawChunk{"LIST", []byte("adtllabl\x07\x00\x00\x00\x00\x00\x00\x00hi\x00\x00")}
	for _, c := range []struct {
		name  string
		chunk rawChunk
	}{{"JUNK", rawChunk{"JUNK", make([]byte, 28)}}, {"FLLR", rawChunk{"FLLR", make([]byte, 4044)}}, {"PAD", rawChunk{"PAD ", make([]byte, 100)}}, {"bext", bext},
		{"odd bext", bextOdd}, {"odd iXML", ixml}, {"cue", cues}, {"INFO", info}, {"adtl", adtl}, {"smpl", rawChunk{"smpl", make([]byte, 60)}},
		{"id3", rawChunk{"id3 ", []byte("ID3\x03\x00\x00\x00\x00\x00\x00x")}}, {"_PMX", rawChunk{"_PMX", []byte("<x/>")}}, {"unknown", rawChunk{"Qx7~", []byte("what?")}},
		{"empty LIST", rawChunk{"LIST", nil}}, {"LIST of 2 bytes", rawChunk{"LIST", []byte("IN")}}} {
		add(entry{name: c.name + " before the data", taken: of(recipe{bits: 24, before: []rawChunk{c.chunk}})},
			entry{name: c.name + " between fmt and data", taken: of(recipe{bits: 24, between: []rawChunk{c.chunk}})},
			entry{name: c.name + " behind the data", taken: of(recipe{bits: 24, frames: 41, channels: 1, after: []rawChunk{c.chunk}})})
	}
	add(entry{name: "data before fmt", taken: of(recipe{dataFirst: true})},
		entry{name: "everything at once", taken: of(recipe{bits: 24, before: []rawChunk{{"JUNK", make([]byte, 28)}, bextOdd, ixml}, between: []rawChunk{{"FLLR", make([]byte, 999)}}, after: []rawChunk{cues, adtl, info}})},
		entry{name: "odd bext without pad", taken: of(recipe{before: []rawChunk{bextOdd}, noPad: true}), warnings: WarnNoPad},
		entry{name: "odd data without pad, LIST behind", taken: of(recipe{bits: 8, channels: 1, frames: 41, noPad: true, after: []rawChunk{info}}), warnings: WarnNoPad},
		entry{name: "odd data without pad at the end", taken: of(recipe{bits: 24, channels: 1, frames: 41, noPad: true})},
		entry{name: "odd 8-bit data with pad", taken: of(recipe{bits: 8, channels: 1, frames: 41})},
		entry{name: "odd 24-bit data with pad", taken: of(recipe{bits: 24, channels: 3, frames: 41})},
		entry{name: "pad byte counted into the data", taken: edit(recipe{bits: 24, channels: 1, frames: 41}, func(b []byte) []byte { le.PutUint32(b[40:], 124); return b })},
		entry{name: "a byte of a frame counted into the data", taken: edit(recipe{bits: 24, channels: 1, frames: 41}, func(b []byte) []byte {
			le.PutUint32(b[40:], 124)
			b[len(b)-1] = 7
			return b
		}), warnings: WarnPartialFrame},
		entry{name: "two data chunks", taken: of(recipe{after: []rawChunk{{"data", make([]byte, 400)}}}), warnings: WarnTwice},
		entry{name: "two fmt chunks", taken: of(recipe{between: []rawChunk{{"fmt ", make([]byte, 16)}}}), warnings: WarnTwice},
		entry{name: "fact that lies", taken: of(recipe{tag: tagFloat, bits: 32, between: []rawChunk{{"fact", []byte{41, 0, 0, 0}}}}), warnings: WarnFact},
		entry{name: "fact of 2 bytes", taken: of(recipe{tag: tagFloat, bits: 32, between: []rawChunk{{"fact", []byte{41, 0}}}})},
		entry{name: "ID3 tag before the header", taken: edit(recipe{bits: 24}, func(b []byte) []byte {
			return append([]byte("ID3\x04\x00\x00\x00\x00\x01\x02"+strings.Repeat("x", 130)), b...)
		}), warnings: WarnPrefix},
		entry{name: "5000 chunks before the data", taken: of(recipe{before: slices.Repeat([]rawChunk{{"abcd", nil}}, 5000)}), broken: "has no fmt chunk"},
		entry{name: "5000 chunks behind the data", taken: of(recipe{after: slices.Repeat([]rawChunk{{"abcd", nil}}, 5000)}), warnings: WarnTooManyChunks + " " + WarnTrailing})

	// Sizes that lie.
	add(entry{name: "data size 0 with samples behind", taken: of(recipe{data32: -1}), warnings: WarnSizeZero},
		entry{name: "both sizes 0", taken: of(recipe{data32: -1, riffSize: -1}), warnings: WarnSizeZero},
		entry{name: "data size 0xFFFFFFFF", taken: of(recipe{data32: unset32}), warnings: WarnSizeUnknown},
		entry{name: "both sizes 0xFFFFFFFF, as a pipe leaves them", taken: of(recipe{data32: unset32, riffSize: unset32, between: []rawChunk{info}}), warnings: WarnSizeUnknown},
		entry{name: "data size 0x7FFFFFFF", taken: of(recipe{data32: 0x7FFFFFFF}), warnings: WarnTruncated},
		entry{name: "data size 0x7FFFF000, as a pipe leaves it", taken: of(recipe{data32: 0x7FFFF000, riffSize: 0x7FFFF024}), warnings: WarnTruncated + " " + WarnRIFFSize},
		entry{name: "data size one byte too large", taken: of(recipe{data32: 161}), warnings: WarnTruncated},
		entry{name: "RIFF size too small", taken: of(recipe{riffSize: 60}), warnings: WarnRIFFSize},
		entry{name: "RIFF size too large", taken: of(recipe{riffSize: 9999}), warnings: WarnRIFFSize},
		entry{name: "RIFF size 0xFFFFFFFF", taken: of(recipe{riffSize: unset32})},
		entry{name: "RIFF size 1 too small, as some writers have it", taken: of(recipe{bits: 24, channels: 1, frames: 41, after: []rawChunk{info}, change: func(b []byte) []byte { le.PutUint32(b[4:], uint32(len(b)-9)); return b }})},
		entry{name: "truncated on a frame", taken: edit(recipe{}, func(b []byte) []byte { return b[:len(b)-80] }), frames: 20, warnings: WarnTruncated + " " + WarnRIFFSize},
		entry{name: "truncated within a sample", taken: edit(recipe{bits: 24}, func(b []byte) []byte { return b[:len(b)-121] }), frames: 19, warnings: WarnTruncated + " " + WarnPartialFrame + " " + WarnRIFFSize},
		entry{name: "data end within a frame", taken: of(recipe{data32: 158}), frames: 39, warnings: WarnTrailing + " " + WarnPartialFrame},
		entry{name: "chunk behind the data truncated", taken: edit(recipe{after: []rawChunk{info}}, func(b []byte) []byte { return b[:len(b)-3] }), warnings: WarnTruncated + " " + WarnRIFFSize},
		entry{name: "100 bytes of garbage behind the end", taken: of(recipe{tail: bytes.Repeat([]byte{0x81, 3}, 50)}), warnings: WarnTrailing},
		entry{name: "an ID3v1 tag behind the end", taken: of(recipe{tail: append([]byte("TAG"), make([]byte, 125)...)}), warnings: WarnTrailing},
		entry{name: "zeros up to 1 MiB behind the end", taken: of(recipe{tail: make([]byte, 1<<20)}), warnings: WarnTrailing},
		entry{name: "another WAV behind the end", taken: func() taken {
			x := recipe{}.make()
			x.file = append(x.file, recipe{frames: 40000}.make().file...)
			return x
		}, warnings: WarnTrailing},
		entry{name: "sizes of ten seconds ago", taken: of(recipe{frames: 40000, data32: 400, riffSize: 436}), warnings: WarnSizeStale + " " + WarnRIFFSize},
		entry{name: "no frames", taken: of(recipe{frames: -1}), warnings: WarnNoFrames},
		entry{name: "no frames, LIST behind", taken: of(recipe{frames: -1, after: []rawChunk{info}}), warnings: WarnNoFrames},
		entry{name: "header only of a long take", taken: edit(recipe{frames: 1000}, func(b []byte) []byte { return b[:44] }), frames: -1, warnings: WarnTruncated + " " + WarnNoFrames + " " + WarnRIFFSize},
		entry{name: "less than a frame", taken: edit(recipe{channels: 8}, func(b []byte) []byte { return b[:44+7] }), frames: -1, warnings: WarnTruncated + " " + WarnPartialFrame + " " + WarnNoFrames + " " + WarnRIFFSize},
		entry{name: "block align 0", taken: of(recipe{align: -1}), warnings: WarnBlockAlign},
		entry{name: "block align too small", taken: of(recipe{bits: 24, align: 5}), warnings: WarnBlockAlign},
		entry{name: "block align of one channel", taken: of(recipe{bits: 24, align: 3}), warnings: WarnBlockAlign},
		entry{name: "block align twice too large", taken: of(recipe{align: 8}), warnings: WarnBlockAlign},
		entry{name: "average bytes 0", taken: of(recipe{avg: -1})},
		entry{name: "float whose block align is that of 16 bits", taken: of(recipe{tag: tagFloat, bits: 32, align: 4}), warnings: WarnBlockAlign})

	// Metadata that lie: the samples are read all the same.
	lie := func(id string, body string) recipe { return recipe{before: []rawChunk{{id, []byte(body)}}} }
	add(entry{name: "INFO entry that claims 4 GiB", taken: of(lie("LIST", "INFOIART\xf0\xff\xff\xffsomebody"))},
		entry{name: "adtl entry that claims 4 GiB", taken: of(lie("LIST", "adtllabl\xff\xff\xff\xff\x01\x00\x00\x00x"))},
		entry{name: "cue chunk that claims 2^32-1 points", taken: of(lie("cue ", "\xff\xff\xff\xff"+strings.Repeat("\x01", 24)))},
		entry{name: "cue chunk of 2 bytes", taken: of(lie("cue ", "\xff\xff"))},
		entry{name: "bext of 300 bytes", taken: of(lie("bext", strings.Repeat("x", 300))), warnings: WarnMetadata},
		entry{name: "bext of 348 bytes", taken: of(lie("bext", strings.Repeat("x", 348)))},
		entry{name: "bext of all ones", taken: of(lie("bext", strings.Repeat("\xff", 700)))},
		entry{name: "iXML that is none", taken: of(lie("iXML", "hello")), warnings: WarnMetadata},
		entry{name: "iXML with another root", taken: of(lie("iXML", "<html/>")), warnings: WarnMetadata},
		entry{name: "iXML cut off", taken: of(lie("iXML", "<BWFXML><SCENE>1</SC")), warnings: WarnMetadata},
		entry{name: "iXML 100 deep", taken: of(lie("iXML", "<BWFXML>"+strings.Repeat("<a>", 100))), warnings: WarnMetadata},
		entry{name: "iXML of 120,000 elements", taken: of(lie("iXML", "<BWFXML>"+strings.Repeat("<a/>", 120000)+"</BWFXML>")), warnings: WarnMetadata},
		entry{name: "iXML of 80,000 attributes", taken: of(lie("iXML", "<BWFXML"+strings.Repeat(" a=''", 80000)+"/>"))},
		entry{name: "iXML in 40,000 pieces of text", taken: of(lie("iXML", "<BWFXML>"+strings.Repeat("x<!---->", 40000)+"</BWFXML>"))},
		entry{name: "iXML of 60,000 attributes that are not UTF-8", taken: of(lie("iXML", "<BWFXML"+strings.Repeat(" a='\xff'", 60000)+"/>"))},
		entry{name: "60,000 cues and 3000 lists about them", taken: of(recipe{before: append(slices.Repeat([]rawChunk{{"LIST", []byte("adtllabl\x06\x00\x00\x00\x01\x00\x00\x00x\x00")}}, 3000),
			rawChunk{"cue ", append([]byte("\xff\xff\xff\xff"), bytes.Repeat([]byte("\x01\x00\x00\x00\x02\x00\x00\x00data\x00\x00\x00\x00\x00\x00\x00\x00\x02\x00\x00\x00"), 60000)...)})})},
		entry{name: "8 MiB of cues, lists and texts that are not UTF-8", taken: of(recipe{before: append(slices.Repeat([]rawChunk{{"cue ", append([]byte("\xff\xff\xff\xff"), bytes.Repeat([]byte{1}, 24*60000)...)}}, 2),
			rawChunk{"LIST", []byte("INFO" + strings.Repeat("IART\x00\xff\x00\x00"+strings.Repeat("\xe4", 65280), 60))}, rawChunk{"iXML", []byte("<BWFXML" + strings.Repeat(" a='\xff'", 60000) + "/>")})})},
		entry{name: "iXML of 512 KiB and 1 byte", taken: of(lie("iXML", "<BWFXML>"+strings.Repeat(" ", maxIXML-7))), warnings: WarnMetadata},
		entry{name: "iXML padded with zeros", taken: of(lie("iXML", "<BWFXML/>"+strings.Repeat("\x00", 4000)))},
		entry{name: "LIST of 5 MiB", taken: of(lie("LIST", "INFO"+strings.Repeat("\x00", 5<<20))), warnings: WarnMetadata},
		entry{name: "fmt that claims 2 GiB", taken: edit(recipe{}, func(b []byte) []byte { le.PutUint32(b[16:], 1<<31-1); return b }), broken: "no data chunk"},
		entry{name: "fmt that claims 4 GiB", taken: edit(recipe{}, func(b []byte) []byte { le.PutUint32(b[16:], 1<<32-2); return b }), broken: "no data chunk"},
		entry{name: "JUNK that claims 4 GiB before the data", taken: edit(recipe{before: []rawChunk{{"JUNK", make([]byte, 28)}}}, func(b []byte) []byte { le.PutUint32(b[16:], 1<<32-16); return b }),
			broken: "JUNK chunk at byte 12: declares 4294967280 bytes, the file has 220 left, and no fmt chunk was found before it"},
		entry{name: "LIST that claims 1.75 GiB before the data", taken: edit(recipe{before: []rawChunk{info}}, func(b []byte) []byte { le.PutUint32(b[16:], 7<<28); return b }), broken: "LIST chunk at byte 12"})

	// What is no sound, or not ours.
	add(entry{name: "empty file", taken: bytesOf(""), broken: "file at byte 0: is empty"},
		entry{name: "one byte", taken: bytesOf("R"), broken: `starts with "R"`},
		entry{name: "text", taken: bytesOf("Dear all, the take is"), broken: `starts with "Dear"`},
		entry{name: "RIFF and nothing", taken: bytesOf("RIFF"), broken: "ends after 4 bytes of a RIFF header of 12"},
		entry{name: "RIFF WAVE and nothing", taken: bytesOf("RIFF\x04\x00\x00\x00WAVE"), broken: "has no fmt chunk in its 12 bytes"},
		entry{name: "40 bytes of header", taken: edit(recipe{}, func(b []byte) []byte { return b[:40] }), broken: "has no data chunk in its 40 bytes"},
		entry{name: "fmt cut off", taken: edit(recipe{}, func(b []byte) []byte { return b[:30] }), broken: "fmt chunk at byte 12: has 10 bytes"},
		entry{name: "fmt of 14 bytes", taken: of(recipe{fmtBytes: 14}), broken: "fmt chunk at byte 12: has 14 bytes, 16 are the least"},
		entry{name: "extensible fmt of 18 bytes", taken: of(recipe{ext: true, fmtBytes: 18}), broken: "has 18 bytes, an extensible one has 40"},
		entry{name: "no fmt", taken: edit(recipe{}, func(b []byte) []byte { copy(b[12:], "abcd"); return b }), broken: "has no fmt chunk"},
		entry{name: "no data", taken: edit(recipe{}, func(b []byte) []byte { copy(b[36:], "abcd"); return b }), broken: "has no data chunk"},
		entry{name: "channels 0", taken: edit(recipe{}, func(b []byte) []byte { le.PutUint16(b[22:], 0); return b }), broken: "fmt chunk at byte 12: says 0 channels"},
		entry{name: "bits 0", taken: edit(recipe{}, func(b []byte) []byte { le.PutUint16(b[34:], 0); return b }), broken: "says 0 bits"},
		entry{name: "garbage instead of a chunk", taken: edit(recipe{}, func(b []byte) []byte { copy(b[12:], "\x00\x01\x02\x03"); return b }), broken: "has no fmt chunk"},
		entry{name: "all zeros behind the header", taken: bytesOf("RIFF\x00\x00\x10\x00WAVE" + strings.Repeat("\x00", 1<<20)), broken: "has no fmt chunk"},
		entry{name: "an ID3 tag longer than the file", taken: bytesOf("ID3\x04\x00\x00\x7f\x7f\x7f\x7fxxx"), broken: "starts with \"\""},
		entry{name: "RIFX", taken: bytesOf("RIFX\x00\x00\x00\x24WAVEfmt "), refused: "big-endian"},
		entry{name: "AVI", taken: bytesOf("RIFF\x24\x00\x00\x00AVI LIST"), refused: `RIFF form "AVI ", not WAVE`},
		entry{name: "AIFF", taken: bytesOf("FORM\x00\x00\x00\x24AIFFCOMM"), refused: "AIFF"},
		entry{name: "FLAC", taken: bytesOf("fLaC\x00\x00\x00\x22........"), refused: "is a FLAC file, not WAV"},
		entry{name: "Ogg", taken: bytesOf("OggS\x00\x02......"), refused: "Ogg"},
		entry{name: "MPEG layer 3", taken: bytesOf("\xff\xfb\x90\x64........"), refused: "MPEG layer 3 file"},
		entry{name: "MPEG layer 3 behind ID3", taken: bytesOf("ID3\x03\x00\x00\x00\x00\x00\x04xxxx\xff\xfb\x90\x64........"), refused: "file at byte 14: is an MPEG"},
		entry{name: "Core Audio", taken: bytesOf("caff\x00\x01\x00\x00desc"), refused: "Core Audio"},
		entry{name: "MP4", taken: bytesOf("\x00\x00\x00\x18ftypM4A "), refused: "MP4"},
		entry{name: "zip", taken: bytesOf("PK\x03\x04\x14\x00......"), refused: "zip archive"},
		entry{name: "gzip", taken: bytesOf("\x1f\x8b\x08\x00........"), refused: "gzip file"},
		entry{name: "HDF5", taken: bytesOf("\x89HDF\r\n\x1a\n...."), refused: "HDF5"})
	return list
}

// K1, K2, K8: the layouts that recipe writes (RIFF 1991, WAVEFORMATEXTENSIBLE;
// from memory and a second source). K8: -32768 is -1.0, the centre of 8 bits 128.
func TestEveryFileOfTheCorpusIsReadOrRefusedAsWanted(t *testing.T) {
	list := corpus()
	names, bad := map[string]bool{}, 0
	for _, e := range list {
		if names[e.name] {
			t.Errorf("two entries are called %q", e.name)
		}
		names[e.name] = true
		if e.broken != "" || e.refused != "" {
			bad++
		}
		t.Run(e.name, func(t *testing.T) { e.check(t) })
	}
	if len(list) < 157 || bad < 40 {
		t.Errorf("%d files, %d of them bad, want at least 157 and 40", len(list), bad)
	}
	t.Logf("%d files, %d of them refused", len(list), bad)
}

func (e entry) check(t *testing.T) {
	x := e.taken()
	var before, after runtime.MemStats
	start := time.Now()
	runtime.ReadMemStats(&before)
	r, err := Open(bytes.NewReader(x.file), int64(len(x.file)))
	runtime.ReadMemStats(&after)
	if took := time.Since(start); took > 2*time.Second {
		t.Errorf("took %v, want at most 2 s", took)
	}
	if took := after.TotalAlloc - before.TotalAlloc; took > 1<<22 {
		t.Logf("%d bytes of memory for a file of %d", took, len(x.file))
	}
	if took, most := after.TotalAlloc-before.TotalAlloc, max(uint64(2*len(x.file)), 64<<20); took > most {
		t.Errorf("%d bytes of memory for a file of %d, want at most %d", took, len(x.file), most)
	}
	if e.broken != "" || e.refused != "" {
		var broken *FormatError
		var refused *UnsupportedError
		if r != nil || err == nil {
			t.Fatal("it was opened")
		}
		if is := errors.As(err, &broken); is != (e.broken != "") || errors.As(err, &refused) != (e.refused != "") {
			t.Errorf("%T: %v", err, err)
		}
		if text := err.Error(); !strings.Contains(text, e.broken+e.refused) || strings.Contains(text, "\n") || !strings.Contains(text, " at byte ") {
			t.Errorf("it says %q, want %q in one line with a place", text, e.broken+e.refused)
		}
		return
	}
	if err != nil {
		t.Fatal(err)
	}
	if got := codes(r.Warnings()); got != e.warnings {
		t.Errorf("warnings %q, want %q: %v", got, e.warnings, r.Warnings())
	}
	want := x.want
	if e.frames > 0 {
		want = want.Slice(0, e.frames)
	} else if e.frames < 0 {
		want = want.Slice(0, 0)
	}
	sameBits(t, readAll(t, r), want)
	if h := r.Header(); h.Frames != int64(want.Frames()) || h.Channels != want.Channels() || h.DataSize != h.Frames*int64(h.FrameBytes()) {
		t.Errorf("header %+v, want %d frames of %d channels", h, want.Frames(), want.Channels())
	}
	if _, err := r.Read(audio.NewBlock(want.Channels(), 1)); err != io.EOF {
		t.Errorf("behind the end: %v, want io.EOF", err)
	}
}
