package wav

import (
	"bytes"
	"errors"
	"io"
	"reflect"
	"runtime"
	"testing"
	"time"

	"alidade/pkg/audio"
)

// capped runs f and fails if it allocates more than twice the size or 64 MiB,
// whichever is larger, or takes 5 s.
func capped(t *testing.T, size int, f func()) {
	t.Helper()
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	start := time.Now()
	f()
	took := time.Since(start)
	runtime.ReadMemStats(&after)
	if got, most := after.TotalAlloc-before.TotalAlloc, max(uint64(2*size), 64<<20); got > most {
		t.Errorf("%d bytes of memory for %d, want at most %d", got, size, most)
	}
	if took > 5*time.Second {
		t.Errorf("took %v", took)
	}
}

// FuzzOpen: no panic, no hang, bounded memory, an error of the two kinds, and
// every frame that the header promises can be read.
func FuzzOpen(f *testing.F) {
	for _, e := range corpus() {
		if x := e.taken(); len(x.file) < 1<<14 {
			f.Add(x.file)
		}
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		var r *Reader
		var err error
		capped(t, len(b), func() { r, err = Open(bytes.NewReader(b), int64(len(b))) })
		if err != nil {
			var broken *FormatError
			var refused *UnsupportedError
			if !errors.As(err, &broken) && !errors.As(err, &refused) {
				t.Errorf("%T: %v", err, err)
			}
			return
		}
		h := r.Header()
		if h.Frames < 0 || h.DataOffset+h.DataSize > int64(len(b)) || h.Channels < 1 || h.Channels > MaxChannels {
			t.Fatalf("%+v of a file of %d bytes", h, len(b))
		}
		frames := int64(0)
		block := audio.NewBlock(h.Channels, 999)
		for {
			n, err := r.Read(block)
			frames += int64(n)
			if err == io.EOF {
				break
			}
			if err != nil {
				t.Fatal(err)
			}
		}
		if frames != h.Frames {
			t.Errorf("%d frames, the header promises %d", frames, h.Frames)
		}
		// What it carries is written and read again the same.
		m := r.Metadata()
		out, _ := m.Derive(Change{Output: Format{48000, 1, PCM16}, TakeRate: h.Rate, TakeFrames: h.Frames, FirstFrame: h.Frames / 3, Frames: h.Frames / 2})
		file := &memory{}
		w, err := NewWriter(file, Format{48000, 1, PCM16}, Option{Metadata: out})
		if err != nil {
			t.Fatal(err)
		}
		if err := w.Close(); err != nil {
			t.Fatal(err)
		}
		if again, err := Open(bytes.NewReader(file.b), int64(len(file.b))); err != nil {
			t.Error(err)
		} else if len(again.Metadata().Info) > len(out.Info) {
			t.Errorf("%d entries of INFO came of %d", len(again.Metadata().Info), len(out.Info))
		}
		r.Describe("x")
	})
}

// FuzzIXML: what is read and written again is read the same.
func FuzzIXML(f *testing.F) {
	f.Add([]byte(sampleIXML))
	f.Add([]byte("<BWFXML><SPEED><TIMECODE_RATE>24000/1001</TIMECODE_RATE></SPEED></BWFXML>"))
	f.Add([]byte("<?xml version='1.0' encoding='x'?><!DOCTYPE a><BWFXML a='b'>x<!-- c --><a:b/><![CDATA[<]]>&amp;&#65;&x;</BWFXML>"))
	f.Fuzz(func(t *testing.T, b []byte) {
		var x *IXML
		capped(t, len(b), func() { x, _ = parseIXML(b) })
		if x == nil {
			return
		}
		body := x.body()
		if len(body) > maxIXML {
			return
		}
		again, whole := parseIXML(body)
		if again == nil || !whole {
			t.Fatalf("%q was written as %q, which is not read", b, body)
		}
		if !reflect.DeepEqual(again, x) {
			t.Fatalf("%q was written as %q, which reads %+v, want %+v", b, body, again, x)
		}
	})
}

// FuzzBext: what is read and written again is read the same.
func FuzzBext(f *testing.F) {
	v := -23.5
	f.Add((&Bext{Description: "x", Originator: "é", TimeReference: 1 << 40, LoudnessValueLUFS: &v, CodingHistory: "A=PCM\r\n"}).body())
	f.Add(make([]byte, 346))
	f.Add(bytes.Repeat([]byte{0xff}, 700))
	f.Fuzz(func(t *testing.T, b []byte) {
		var x *Bext
		capped(t, len(b), func() { x = parseBext(b) })
		if x == nil {
			return
		}
		y := parseBext(x.body())
		z := parseBext(y.body())
		z.Version, y.UMID = y.Version, z.UMID
		if !reflect.DeepEqual(y, z) {
			t.Fatalf("%+v, then %+v", y, z)
		}
		if y.TimeReference != x.TimeReference {
			t.Fatalf("time reference %d, then %d", x.TimeReference, y.TimeReference)
		}
	})
}

// FuzzTime: a time that is understood comes back as the frame it names.
func FuzzTime(f *testing.F) {
	for _, text := range []string{"10:00:00", "10:00:00.5", "10:01:00;02", "23:59:59:24", "::", "10:00:00:"} {
		f.Add(text, int64(1728000000))
	}
	f.Fuzz(func(t *testing.T, text string, reference int64) {
		rate := FrameRate{30000, 1001, true}
		b := TimeBase{Reference: max(0, reference) % maxReference, ReferenceRate: 48000, AdvanceRate: 48048, FrameRate: &rate}
		if n, err := b.Frame(text); err == nil && n < 0 {
			t.Errorf("%q is frame %d", text, n)
		}
	})
}
