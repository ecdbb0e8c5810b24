package pipeline

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"
)

var le = binary.LittleEndian

// shape is a WAV file made byte by byte from its published layout, without the
// writer of the program: RIFF and fmt after IBM/Microsoft 1991 and Microsoft's
// WAVEFORMATEXTENSIBLE, ds64 after EBU Tech 3306.
type shape struct {
	container string // RIFF, RF64 or BW64
	float     bool
	bits      int
	ext       bool
	rate      int
	chunks    []chunk // before the data
	tail      []chunk // behind it
}

type chunk struct {
	id   string
	body []byte
}

// file returns the bytes of a file of the channels x, whose samples are k/128
// with whole k, so that every encoding holds them exactly.
func (s shape) file(x [][]int8) []byte {
	width := s.bits / 8
	var data []byte
	for i := range x[0] {
		for ch := range x {
			v := int64(x[ch][i])
			switch {
			case s.float && width == 4:
				data = le.AppendUint32(data, math.Float32bits(float32(v)/128))
			case s.float:
				data = le.AppendUint64(data, math.Float64bits(float64(v)/128))
			case width == 1:
				data = append(data, byte(v+128))
			default:
				for k := range width {
					data = append(data, byte(v<<(8*(width-1))>>(8*k)))
				}
			}
		}
	}
	tag := uint16(1)
	if s.float {
		tag = 3
	}
	channels := len(x)
	fmtBody := le.AppendUint16(nil, tag)
	if s.ext {
		fmtBody = le.AppendUint16(nil, 0xFFFE)
	}
	fmtBody = le.AppendUint16(fmtBody, uint16(channels))
	fmtBody = le.AppendUint32(fmtBody, uint32(s.rate))
	fmtBody = le.AppendUint32(fmtBody, uint32(s.rate*channels*width))
	fmtBody = le.AppendUint16(fmtBody, uint16(channels*width))
	fmtBody = le.AppendUint16(fmtBody, uint16(s.bits))
	if s.ext {
		fmtBody = le.AppendUint16(fmtBody, 22)
		fmtBody = le.AppendUint16(fmtBody, uint16(s.bits))
		fmtBody = le.AppendUint32(fmtBody, 0)
		fmtBody = le.AppendUint16(fmtBody, tag)
		fmtBody = append(fmtBody, 0, 0, 0, 0, 0x10, 0, 0x80, 0, 0, 0xAA, 0, 0x38, 0x9B, 0x71)
	}
	body := []byte("WAVE")
	put := func(id string, size uint32, b []byte) {
		body = append(body, id...)
		body = le.AppendUint32(body, size)
		body = append(body, b...)
		if len(b)%2 == 1 {
			body = append(body, 0)
		}
	}
	long := s.container != "RIFF"
	if long {
		put("ds64", 28, make([]byte, 28))
	}
	put("fmt ", uint32(len(fmtBody)), fmtBody)
	for _, c := range s.chunks {
		put(c.id, uint32(len(c.body)), c.body)
	}
	size := uint32(len(data))
	if long {
		size = math.MaxUint32
	}
	put("data", size, data)
	for _, c := range s.tail {
		put(c.id, uint32(len(c.body)), c.body)
	}
	riff := uint32(len(body))
	if long {
		le.PutUint64(body[12:], uint64(len(body)))
		le.PutUint64(body[20:], uint64(len(data)))
		le.PutUint64(body[28:], uint64(len(x[0])))
		riff = math.MaxUint32
	}
	return append(le.AppendUint32([]byte(s.container), riff), body...)
}

// bextChunk is a broadcast extension chunk [EBU Tech 3285].
func bextChunk(description, originator, date, clock string, reference int64, history string) chunk {
	b := make([]byte, 602)
	copy(b[0:256], description)
	copy(b[256:288], originator)
	copy(b[288:320], "SERIAL-4711")
	copy(b[320:330], date)
	copy(b[330:338], clock)
	le.PutUint64(b[338:], uint64(reference))
	le.PutUint16(b[346:], 1)
	for k := range 64 {
		b[348+k] = byte(k + 1) // a UMID, which no copy may carry
	}
	return chunk{"bext", append(b, history...)}
}

// ixmlChunk is an iXML chunk with the given elements.
func ixmlChunk(inner string) chunk {
	return chunk{"iXML", []byte(`<?xml version="1.0" encoding="UTF-8"?><BWFXML><IXML_VERSION>2.0</IXML_VERSION>` + inner + `</BWFXML>`)}
}

type mark struct {
	frame, frames uint32
	label         string
}

// cueChunks are a cue chunk and its labels and lengths [IBM/Microsoft 1991].
func cueChunks(marks ...mark) []chunk {
	cue := le.AppendUint32(nil, uint32(len(marks)))
	adtl := []byte("adtl")
	for k, m := range marks {
		id := uint32(k + 1)
		cue = le.AppendUint32(le.AppendUint32(cue, id), m.frame)
		cue = append(cue, "data\x00\x00\x00\x00\x00\x00\x00\x00"...)
		cue = le.AppendUint32(cue, m.frame)
		text := append(le.AppendUint32(nil, id), m.label+"\x00"...)
		adtl = le.AppendUint32(append(adtl, "labl"...), uint32(len(text)))
		adtl = append(adtl, text...)
		if len(text)%2 == 1 {
			adtl = append(adtl, 0)
		}
		if m.frames > 0 {
			adtl = le.AppendUint32(append(adtl, "ltxt"...), 20)
			adtl = le.AppendUint32(le.AppendUint32(adtl, id), m.frames)
			adtl = append(adtl, "rgn \x00\x00\x00\x00\x00\x00\x00\x00"...)
		}
	}
	return []chunk{{"cue ", cue}, {"LIST", adtl}}
}

// coarse are channels of seeded noise in steps of 1/128.
func coarse(channels, frames int) [][]int8 {
	rng := rand.New(rand.NewPCG(uint64(channels), uint64(frames)))
	x := make([][]int8, channels)
	for ch := range x {
		x[ch] = make([]int8, frames)
		for i := range x[ch] {
			x[ch][i] = int8(rng.IntN(41) - 20)
		}
	}
	return x
}

func put(t testing.TB, path string, data []byte) string {
	t.Helper()
	if err := os.WriteFile(path, data, 0o666); err != nil {
		t.Fatal(err)
	}
	return path
}

// cut is the frames from..to of all channels.
func cut(x [][]int8, from, to int) [][]int8 {
	var out [][]int8
	for _, c := range x {
		out = append(out, c[from:to])
	}
	return out
}

// TestSameTrackFromEveryShapeOfATake holds a take in every encoding, header and
// container, as a set and as a chain, to one track, byte by byte.
func TestSameTrackFromEveryShapeOfATake(t *testing.T) {
	x := coarse(4, 9001)
	base := shape{container: "RIFF", bits: 16, rate: 16000}
	dir := t.TempDir()
	rigPath := writeText(t, filepath.Join(dir, "four.yaml"), fourLine)
	steered := func(name string, o Options, take ...string) []byte {
		t.Helper()
		o.Toward, o.NoMeasure, o.Format, o.Out = "60", true, FormatPCM24, filepath.Join(dir, name+".track.wav")
		o.Excerpt, o.Handles = "0.1..0.5", 0.01
		spec := Spec{Take: take, RigPath: rigPath, Options: o, Version: "test"}
		r, err := Run(t.Context(), spec, jsonRenderers, Watch{})
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if r.Take.Channels != 4 || r.Take.Frames != 9001 {
			t.Errorf("%s: a take of %d channels and %d frames", name, r.Take.Channels, r.Take.Frames)
		}
		for _, f := range r.Take.Files {
			data, err := os.ReadFile(f.Path)
			if err != nil {
				t.Fatal(err)
			}
			if got := digestOf(data); f.SHA256 != got {
				t.Errorf("%s: %s has the hash %s, the report says %s", name, f.Path, got, f.SHA256)
			}
		}
		data, err := os.ReadFile(o.Out)
		if err != nil {
			t.Fatal(err)
		}
		return data
	}
	want := steered("plain16", Options{}, put(t, filepath.Join(dir, "plain16.wav"), base.file(x)))

	var shapes []shape
	for _, bits := range []int{8, 16, 24, 32} {
		for _, ext := range []bool{false, true} {
			for _, c := range []string{"RIFF", "RF64", "BW64"} {
				shapes = append(shapes, shape{container: c, bits: bits, ext: ext, rate: 16000})
			}
		}
	}
	for _, bits := range []int{32, 64} {
		for _, ext := range []bool{false, true} {
			for _, c := range []string{"RIFF", "RF64", "BW64"} {
				shapes = append(shapes, shape{container: c, float: true, bits: bits, ext: ext, rate: 16000})
			}
		}
	}
	for _, s := range shapes {
		name := fmt.Sprintf("%s-%d-%v-%v", s.container, s.bits, s.float, s.ext)
		if got := steered(name, Options{}, put(t, filepath.Join(dir, name+".wav"), s.file(x))); !bytes.Equal(got, want) {
			t.Errorf("%s: another track", name)
		}
	}

	var singles []string
	for ch := range x {
		s := base
		s.bits = 8 * (ch + 1) // even of unlike encodings
		singles = append(singles, put(t, filepath.Join(dir, fmt.Sprintf("single_%d.wav", ch+1)), s.file(x[ch:ch+1])))
	}
	var chained, grid []string
	for k, ends := range [][2]int{{0, 4000}, {4000, 4001}, {4001, 9001}} {
		chained = append(chained, put(t, filepath.Join(dir, fmt.Sprintf("chained%d.wav", k)), base.file(cut(x, ends[0], ends[1]))))
		for ch := range x {
			put(t, filepath.Join(dir, fmt.Sprintf("grid%d-%02d.wav", k, ch+1)), base.file(cut(x[ch:ch+1], ends[0], ends[1])))
		}
		grid = append(grid, filepath.Join(dir, fmt.Sprintf("grid%d-{ch}.wav", k)))
	}
	for name, got := range map[string][]byte{
		"set by pattern": steered("set", Options{}, filepath.Join(dir, "single_{ch}.wav")),
		"set by list":    steered("list", Options{}, singles...),
		"chain":          steered("chain", Options{Chain: true}, chained...),
		"chain of sets":  steered("sets", Options{Chain: true}, grid...),
	} {
		if !bytes.Equal(got, want) {
			t.Errorf("%s: another track", name)
		}
	}
}
