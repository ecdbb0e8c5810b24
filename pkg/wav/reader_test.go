package wav

import (
	"bytes"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

func TestReaderKeepsTheContractOfASource(t *testing.T) {
	for _, r := range []recipe{
		{bits: 24, channels: 3, frames: 5000},
		{bits: 16, channels: 256, frames: 1500},
		{tag: tagFloat, bits: 64, channels: 7, frames: 4000},
		{bits: 8, channels: 1, frames: 1025},
	} {
		x := r.make()
		inner := int(readBytes / int64(r.fill().width*r.fill().channels)) // frames read ahead
		t.Run(fmt.Sprintf("%d channels of %d bits", r.channels, r.bits), func(t *testing.T) {
			audiotest.TestSource(t, func() audio.Source { return open(t, x.file) }, x.want,
				audiotest.Options{Rate: 48000, Sizes: []int{inner, 12 << 10 / (r.fill().width * r.channels)}})
		})
	}
}

func TestReadAllocatesNothing(t *testing.T) {
	for _, r := range []recipe{{bits: 24, channels: 16, frames: 100000}, {tag: tagFloat, bits: 32, channels: 16, frames: 100000}} {
		rd := open(t, r.make().file)
		b := audio.NewBlock(16, 900)
		if n := testing.AllocsPerRun(100, func() {
			if _, err := rd.Read(b); err != nil {
				t.Fatal(err)
			}
		}); n != 0 {
			t.Errorf("%d bits: %g allocations a read, want 0", r.bits, n)
		}
	}
}

// K8: 16-bit full scale 32768, 24-bit 8388608; -32768 is -1.0; -1 in 24 bits is
// FF FF FF, 8388607 is FF FF 7F; 8 bits are unsigned around 128 (RIFF/WAVE
// practice; common practice).
func TestIntegersAreScaledByTheirFullScale(t *testing.T) {
	for _, c := range []struct {
		e    Encoding
		hex  string
		want float64
	}{
		{PCM8, "80", 0}, {PCM8, "00", -1}, {PCM8, "ff", 127.0 / 128}, {PCM8, "81", 1.0 / 128},
		{PCM16, "0080", -1}, {PCM16, "ff7f", 32767.0 / 32768}, {PCM16, "ffff", -1.0 / 32768}, {PCM16, "0100", 1.0 / 32768},
		{PCM24, "ffffff", -1.0 / 8388608}, {PCM24, "ffff7f", 8388607.0 / 8388608}, {PCM24, "000080", -1}, {PCM24, "010000", 1.0 / 8388608},
		{PCM32, "00000080", -1}, {PCM32, "00000040", 0.5}, {PCM32, "ffffff7f", 1}, // 1-2^-31 rounds to 1 in float32
		{Float32, "0000803f", 1}, {Float32, "000000c0", -2}, {Float64, "000000000000e0bf", -0.5}, {Float64, "9a9999999999b93f", float64(float32(0.1))},
	} {
		raw, err := hex.DecodeString(c.hex)
		if err != nil {
			t.Fatal(err)
		}
		got := []float32{9}
		decoderOf(c.e)(got, raw, 1)
		if float64(got[0]) != c.want {
			t.Errorf("%s %s = %v, want %v", c.e, c.hex, got[0], c.want)
		}
	}
}

// Every 16-bit integer, against division in float64.
func TestEvery16BitIntegerIsExact(t *testing.T) {
	raw, got := make([]byte, 2<<16), make([]float32, 1<<16)
	for v := range 1 << 16 {
		le.PutUint16(raw[2*v:], uint16(v))
	}
	decode16(got, raw, 2)
	for v := range 1 << 16 {
		if want := float64(int16(v)) / 32768; float64(got[v]) != want {
			t.Fatalf("%d = %v, want %v", int16(v), got[v], want)
		}
	}
}

func TestSeekGoesToAnyFrame(t *testing.T) {
	x := recipe{bits: 24, channels: 5, frames: 30000}.make()
	r := open(t, x.file)
	rng := rand.New(rand.NewPCG(3, 4))
	b := audio.NewBlock(5, 1000)
	for range 300 {
		at := rng.Int64N(30001)
		if err := r.SeekFrame(at); err != nil {
			t.Fatal(err)
		}
		want := min(1+rng.IntN(1000), 30000-int(at))
		n, err := r.Read(b.Slice(0, max(want, 1)))
		if want == 0 {
			if err != io.EOF {
				t.Fatalf("at the end: %d, %v", n, err)
			}
			continue
		}
		if n != want || err != nil {
			t.Fatalf("at %d: %d, %v, want %d", at, n, err, want)
		}
		sameBits(t, b.Slice(0, n), x.want.Slice(int(at), int(at)+n))
	}
	for _, at := range []int64{-1, 30001} {
		if err := r.SeekFrame(at); err == nil || !strings.Contains(err.Error(), "of 30000") {
			t.Errorf("seek to %d: %v", at, err)
		}
	}
}

// failingAt is a file that cannot be read from a byte on.
type failingAt struct {
	b    []byte
	from int64
	err  error
}

func (f failingAt) ReadAt(p []byte, off int64) (int, error) {
	if off >= f.from {
		return 0, f.err
	}
	n := copy(p, f.b[off:min(f.from, int64(len(f.b)))])
	if n < len(p) {
		return n, f.err
	}
	return n, nil
}

func TestAFailureComesOutWithTheFramesBeforeItAndItsPlace(t *testing.T) {
	x := recipe{bits: 24, channels: 2, frames: 60000}.make()
	disk := errors.New("the disk is on fire")
	for _, c := range []struct{ bytes, frames int }{{44 + 6*50000, 50000}, {44 + 6*50000 + 3, 50000}, {44, 0}} {
		r, err := Open(failingAt{x.file, 0, disk}, int64(len(x.file)))
		if r != nil || !errors.Is(err, disk) {
			t.Fatalf("header: %v, %v", r, err)
		}
		if r, err = Open(failingAt{x.file, int64(c.bytes), disk}, int64(len(x.file))); err != nil {
			t.Fatal(err)
		}
		b := audio.NewBlock(2, 70000)
		n, err := r.Read(b)
		if n != c.frames || !errors.Is(err, disk) || !strings.Contains(err.Error(), fmt.Sprintf("data chunk at byte 36: frame %d of 60000", c.frames)) {
			t.Errorf("%d frames, %v, want %d", n, err, c.frames)
		}
		sameBits(t, b.Slice(0, n), x.want.Slice(0, n))
		if n, again := r.Read(b); n != 0 || again != err {
			t.Errorf("again: %d, %v", n, again)
		}
	}
}

func TestAFileThatShrinksWhileItIsReadIsAnError(t *testing.T) {
	x := recipe{frames: 100000}.make()
	r, err := Open(failingAt{x.file, int64(len(x.file)) - 40, io.EOF}, int64(len(x.file)))
	if err != nil {
		t.Fatal(err)
	}
	if _, err = audio.ReadAll(r); !errors.Is(err, io.ErrUnexpectedEOF) {
		t.Errorf("%v, want unexpected EOF", err)
	}
}

func TestSamplesThatAreNotNumbersAreZeroAndTold(t *testing.T) {
	for _, r := range []recipe{{tag: tagFloat, bits: 32, channels: 3, frames: 20000}, {tag: tagFloat, bits: 64, channels: 3, frames: 20000}, {tag: tagFloat, bits: 32, channels: 4, frames: 20000}} {
		x := r.make()
		bad := []struct {
			frame, ch int
			v         float64
		}{{15000, 0, math.NaN()}, {12345, 2, math.Inf(1)}, {12346, 1, math.Inf(-1)}, {12347, 1, 1 << 32}, {12348, 0, -1e37}, {19999, 2, math.NaN()}}
		if r.bits == 64 {
			bad = append(bad, struct {
				frame, ch int
				v         float64
			}{17000, 1, 1e300})
		}
		for _, k := range bad {
			at := 44 + (k.frame*r.channels+k.ch)*r.bits/8
			if r.bits == 32 {
				le.PutUint32(x.file[at:], math.Float32bits(float32(k.v)))
			} else {
				le.PutUint64(x.file[at:], math.Float64bits(k.v))
			}
			x.want.Channel(k.ch)[k.frame] = 0
		}
		// Samples of integer scale are samples.
		at := 44 + (12400*r.channels+1)*r.bits/8
		if r.bits == 32 {
			le.PutUint32(x.file[at:], math.Float32bits(-(1 << 31)))
		} else {
			le.PutUint64(x.file[at:], math.Float64bits(-(1 << 31)))
		}
		x.want.Channel(1)[12400] = -(1 << 31)
		rd := open(t, x.file)
		if got := rd.NonFinite(); got != (NonFinite{}) {
			t.Errorf("before reading: %+v", got)
		}
		sameBits(t, readAll(t, rd), x.want)
		if got, want := rd.NonFinite(), (NonFinite{int64(len(bad)), 12345, 2}); got != want {
			t.Errorf("%+v, want %+v", got, want)
		}
		w := rd.Warnings()
		text := fmt.Sprintf("%d samples are not finite numbers, or 2^32 times full scale and more, and were read as 0, the first in channel 3 at frame 12345", len(bad))
		if codes(w) != WarnNonFinite || w[0].Message != text || w[0].Offset != int64(44+12345*r.channels*r.bits/8) {
			t.Errorf("warnings %v, want %q", w, text)
		}
		if err := rd.SeekFrame(19000); err != nil {
			t.Fatal(err)
		}
		readAll(t, rd)
		if got, want := rd.NonFinite(), (NonFinite{1, 19999, 2}); got != want {
			t.Errorf("after a seek: %+v, want %+v", got, want)
		}
	}
}

func TestHeaderTellsWhatTheFileSays(t *testing.T) {
	x := recipe{bits: 32, width: 4, ext: true, valid: 24, channels: 3, frames: 7}.make()
	le.PutUint32(x.file[40:], 0x7)
	got := open(t, x.file).Header()
	want := Header{Container: RIFF, Encoding: PCM32, Bits: 32, ValidBits: 24, Channels: 3, Rate: 48000, Frames: 7, DataOffset: 68, DataSize: 84,
		Extensible: true, ChannelMask: 7, SubFormat: "00000001-0000-0010-8000-00AA00389B71"} // K2
	if got != want {
		t.Errorf("%+v, want %+v", got, want)
	}
	if c := open(t, x.file).Chunks(); len(c) != 2 || c[0].ID != "fmt " || c[0].Offset != 12 || c[0].Size != 40 || c[1].Offset != 60 || c[1].Size != 84 {
		t.Errorf("chunks %+v", c)
	}
}

// K2: the PCM sub-format GUID is 01 00 00 00 00 00 10 00 80 00 00 AA 00 38 9B 71
// (KSDATAFORMAT_SUBTYPE_PCM; confirmed by a second source).
func TestSubFormatBytesAreThoseOfPCM(t *testing.T) {
	want := []byte{1, 0, 0, 0, 0, 0, 16, 0, 128, 0, 0, 170, 0, 56, 155, 113}
	if b := fmtBody(Format{48000, 3, PCM24}); len(b) != 40 || !bytes.Equal(b[24:], want) || le.Uint16(b) != 0xFFFE || le.Uint16(b[16:]) != 22 {
		t.Errorf("%x", b)
	}
	// K9: microphones have no loudspeaker position: mask 0 (from memory).
	if b := fmtBody(Format{48000, 8, PCM16}); le.Uint32(b[20:]) != 0 {
		t.Errorf("mask %x, want 0", b[20:24])
	}
	// K1: fmt of 16 bytes for plain PCM, 18 for float (RIFF 1991; from memory).
	for f, want := range map[Format]int{{48000, 2, PCM16}: 16, {48000, 1, Float32}: 18, {48000, 1, PCM24}: 40} {
		if b := fmtBody(f); len(b) != want {
			t.Errorf("%+v: fmt of %d bytes, want %d", f, len(b), want)
		}
	}
}

func TestReadOfOtherChannelsPanics(t *testing.T) {
	defer func() {
		if r := recover(); r == nil || !strings.HasPrefix(fmt.Sprint(r), "wav: ") {
			t.Errorf("recovered %v", r)
		}
	}()
	r := open(t, recipe{}.make().file)
	r.Read(audio.NewBlock(3, 1))
}

// eofReads gives io.EOF together with the last bytes, as ReadAt may.
type eofReads struct{ b []byte }

func (e eofReads) ReadAt(p []byte, off int64) (int, error) {
	n := copy(p, e.b[min(off, int64(len(e.b))):])
	if off+int64(n) == int64(len(e.b)) {
		return n, io.EOF
	}
	return n, nil
}

func TestEndOfFileTogetherWithTheLastBytesIsNoFailure(t *testing.T) {
	x := recipe{bits: 24, frames: 1000}.make()
	r, err := Open(eofReads{x.file}, int64(len(x.file)))
	if err != nil {
		t.Fatal(err)
	}
	sameBits(t, readAll(t, r), x.want)
}
