package wav

import (
	"bytes"
	"fmt"
	"io"
	"testing"

	"alidade/pkg/audio"
)

// BenchmarkRead decodes 16 channels in blocks of 4096 frames, beside a plain
// read of the same bytes in the same portions.
func BenchmarkRead(b *testing.B) {
	for _, r := range []recipe{{bits: 16}, {bits: 24}, {bits: 32}, {tag: tagFloat, bits: 32}, {tag: tagFloat, bits: 64}} {
		r.channels, r.frames = 16, 1<<16
		x := r.make()
		rd := open(b, x.file)
		h := rd.Header()
		b.Run(string(h.Encoding), func(b *testing.B) {
			block := audio.NewBlock(16, 4096)
			b.SetBytes(4096 * int64(h.FrameBytes()))
			b.ReportAllocs()
			for b.Loop() {
				if _, err := rd.Read(block); err != nil {
					if err := rd.SeekFrame(0); err != nil {
						b.Fatal(err)
					}
				}
			}
			b.ReportMetric(float64(b.N)*4096/48000/b.Elapsed().Seconds(), "x-realtime")
		})
		if r.bits == 24 {
			b.Run("plain-read", func(b *testing.B) {
				f, buf, at := bytes.NewReader(x.file), make([]byte, 4096*h.FrameBytes()), int64(0)
				b.SetBytes(int64(len(buf)))
				for b.Loop() {
					if _, err := f.ReadAt(buf, at); err == io.EOF {
						at = 0
					}
					at += int64(len(buf))
				}
			})
		}
	}
}

// BenchmarkWrite encodes mono blocks of 4096 frames.
func BenchmarkWrite(b *testing.B) {
	in := noise(1, 4096)
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		b.Run(string(e), func(b *testing.B) {
			w, err := NewWriter(discard{}, Format{48000, 1, e}, Option{})
			if err != nil {
				b.Fatal(err)
			}
			b.SetBytes(4096 * int64(e.Bits()) / 8)
			b.ReportAllocs()
			for b.Loop() {
				if err := w.Write(in); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}

// BenchmarkVerify reads a mono track back through both readers.
func BenchmarkVerify(b *testing.B) {
	m, out := write(b, Format{48000, 1, PCM24}, Option{}, noise(1, 480000), 4096)
	b.SetBytes(out.Bytes)
	for b.Loop() {
		if _, err := Verify(m, out.Bytes, out); err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkOpen reads the header and metadata of a take that has everything.
func BenchmarkOpen(b *testing.B) {
	for _, chunks := range []int{0, 1000} {
		r := recipe{before: []rawChunk{{"iXML", []byte(sampleIXML)}, {"bext", make([]byte, 602)}}}
		for range chunks {
			r.after = append(r.after, rawChunk{"abcd", make([]byte, 4)})
		}
		x := r.make()
		b.Run(fmt.Sprintf("%d-chunks", 4+chunks), func(b *testing.B) {
			for b.Loop() {
				open(b, x.file)
			}
		})
	}
}
