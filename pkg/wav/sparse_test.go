package wav

import (
	"os"
	"path/filepath"
	"testing"
	"time"

	"alidade/pkg/audio"
)

// sparse makes a file of the given size that takes no room, with a start and
// an end, and skips where the disk has no such files.
func sparse(t *testing.T, size int64, start, end []byte) *os.File {
	t.Helper()
	f, err := os.Create(filepath.Join(t.TempDir(), "sparse.wav"))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { f.Close() })
	if err := f.Truncate(size); err != nil {
		t.Skipf("this disk holds no sparse file of %d bytes: %v", size, err)
	}
	if _, err := f.WriteAt(start, 0); err != nil {
		t.Fatal(err)
	}
	if _, err := f.WriteAt(end, size-int64(len(end))); err != nil {
		t.Fatal(err)
	}
	return f
}

// bounds are the first and last frames of a big take, 64 channels of 24 bits.
func bounds() (first, last taken) {
	return recipe{bits: 24, channels: 64, frames: 100, ext: true}.make(), recipe{bits: 24, channels: 64, frames: 90, ext: true}.make()
}

// K7: 2^32 bytes are 932.07 s of 32 channels of 24 bits at 48 kHz, 16,777.2 s
// of 8 of 16 bits at 16 kHz; a day of stereo is 24,883,200,000 bytes
// (arithmetic).
func TestBigFilesAreReadFromTheFirstFrameToTheLast(t *testing.T) {
	for _, c := range []struct {
		f    Format
		want float64
	}{{Format{48000, 32, PCM24}, 932.07}, {Format{16000, 8, PCM16}, 16777.22}} {
		if got := float64(1<<32) / float64(c.f.FrameBytes()*c.f.Rate); got < c.want-0.01 || got > c.want+0.01 {
			t.Errorf("%+v outgrows RIFF after %.2f s, want %.2f", c.f, got, c.want)
		}
	}
	if got := 24 * 3600 * 48000 * int64((Format{48000, 2, PCM24}).FrameBytes()); got != 24883200000 {
		t.Errorf("a day of stereo has %d bytes", got)
	}

	first, last := bounds()
	const frame = 64 * 3
	data := int64(6<<30) / frame * frame
	head := func(container string, riff, data32 uint32, ds64 []byte) []byte {
		b := append([]byte{}, container...)
		b = le.AppendUint32(b, riff)
		b = append(b, "WAVE"...)
		if ds64 != nil {
			b = appendChunk(b, rawChunk{"ds64", ds64})
		}
		b = append(b, first.file[12:12+48]...) // the fmt chunk
		b = append(b, "data"...)
		return le.AppendUint32(b, data32)
	}
	samples := func(x taken, frames int) []byte { return x.file[len(x.file)-frames*frame:] }
	ds64 := ds64Body(uint64(data+96), uint64(data), uint64(data/frame))
	small := int64(5<<30) / frame * frame
	for _, c := range []struct {
		name      string
		head      []byte
		data      int64
		container Container
		warnings  string
	}{
		{"RF64", head("RF64", unset32, unset32, ds64), data, RF64, ""},
		{"BW64", head("BW64", unset32, unset32, ds64), data, BW64, ""},
		{"RIFF with a ds64", head("RIFF", unset32, unset32, ds64), data, RIFF, ""},
		{"RIFF with wrapped sizes", head("RIFF", uint32(small+60), uint32(small%(1<<32)), nil), small, RIFF, WarnSizeWrapped},
		{"RIFF with a wrapped data size only", head("RIFF", 0, uint32(small%(1<<32)), nil), small, RIFF, WarnSizeWrapped},
		{"RIFF of size 0", head("RIFF", 0, 0, nil), data, RIFF, WarnSizeZero},
		{"RIFF of size 0xFFFFFFFF", head("RIFF", unset32, unset32, nil), data, RIFF, WarnSizeUnknown},
		{"RIFF of 3 GiB", head("RIFF", uint32(3<<30+60), 3<<30, nil), 3 << 30, RIFF, ""},
		{"RIFF of nearly 4 GiB", head("RIFF", uint32((4<<30-4096)/frame*frame+60), (4<<30-4096)/frame*frame, nil), (4<<30 - 4096) / frame * frame, RIFF, ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			size := int64(len(c.head)) + c.data
			f := sparse(t, size, append(c.head, samples(first, 100)...), samples(last, 90))
			start := time.Now()
			r, err := Open(f, size)
			took := time.Since(start)
			if err != nil {
				t.Fatal(err)
			}
			if h := r.Header(); h.Container != c.container || h.Frames != c.data/frame || codes(r.Warnings()) != c.warnings {
				t.Errorf("%+v, warnings %v, want %s of %d frames, %q", h, r.Warnings(), c.container, c.data/frame, c.warnings)
			}
			if took > 10*time.Millisecond {
				t.Errorf("the header took %v, want at most 10 ms", took)
			}
			b := audio.NewBlock(64, 100)
			if n, err := r.Read(b); n != 100 || err != nil {
				t.Fatal(n, err)
			}
			sameBits(t, b, first.want)
			if err := r.SeekFrame(r.Frames() - 90); err != nil {
				t.Fatal(err)
			}
			n, err := r.Read(b)
			if n != 90 || err != nil {
				t.Fatal(n, err)
			}
			sameBits(t, b.Slice(0, 90), last.want)
		})
	}
}

// The switch of a Writer at the true limit. It writes 4 GiB and so runs on
// demand only.
func TestAWriterPassesFourGiB(t *testing.T) {
	if os.Getenv("ALIDADE_LONG") == "" {
		t.Skip("set ALIDADE_LONG=1: it writes 4 GiB to a temporary file")
	}
	f, err := os.Create(filepath.Join(t.TempDir(), "big.wav"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	format := Format{48000, 64, Float32}
	w, err := NewWriter(f, format, Option{})
	if err != nil {
		t.Fatal(err)
	}
	in := noise(64, 16384)
	for w.Written().Frames*int64(format.FrameBytes()) <= 4<<30 {
		if err := w.Write(in); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	how, err := Verify(f, w.Written().Bytes, w.Written())
	t.Logf("%d bytes, %s, %s", w.Written().Bytes, w.Written().Container, how)
	if err != nil || w.Written().Container != RF64 {
		t.Error(err)
	}
}
