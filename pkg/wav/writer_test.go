package wav

import (
	"bytes"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

func TestWhatIsWrittenIsReadBack(t *testing.T) {
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		for _, channels := range []int{1, 2, 3, 8, 64, 256} {
			for _, frames := range []int{0, 1, 2, 777} {
				in := noise(channels, frames)
				m, out := write(t, Format{44100, channels, e}, Option{Seed: 7}, in, 100)
				if out.Bytes != int64(len(m.b)) || out.Frames != int64(frames) || out.Over != 0 || out.Container != RIFF {
					t.Errorf("%s, %d channels of %d: %+v, file of %d bytes", e, channels, frames, out, len(m.b))
				}
				r := open(t, m.b)
				if w := codes(r.Warnings()); w != "" && !(frames == 0 && w == WarnNoFrames) {
					t.Errorf("%s, %d channels of %d: %v", e, channels, frames, r.Warnings())
				}
				if h := r.Header(); h.Encoding != e || h.Rate != 44100 || h.Channels != channels || h.Frames != int64(frames) {
					t.Errorf("header %+v", h)
				}
				got := readAll(t, r)
				// Half a least significant bit for pcm24; 1.5 with dither.
				tolerance := map[Encoding]float64{PCM16: 1.5 / 32768, PCM24: 0.5 / 8388608, Float32: 0}[e]
				for ch := range channels {
					for i, x := range in.Channel(ch) {
						if d := math.Abs(float64(x) - float64(got.Channel(ch)[i])); d > tolerance {
							t.Fatalf("%s: channel %d, frame %d: %v from %v, further than %g", e, ch, i, got.Channel(ch)[i], x, tolerance)
						}
					}
				}
				if _, err := Verify(m, out.Bytes, out); err != nil {
					t.Error(err)
				}
			}
		}
	}
}

func TestBytesDoNotDependOnTheBlocks(t *testing.T) {
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		in := noise(3, 50000)
		first, a := write(t, Format{48000, 3, e}, Option{Seed: 9}, in, 50000)
		for _, size := range []int{1, 7, 1024, writeBytes / 9, writeBytes/9 + 1} {
			if size == 1 && testing.Short() {
				continue
			}
			m, b := write(t, Format{48000, 3, e}, Option{Seed: 9}, in, size)
			if !bytes.Equal(m.b, first.b) || fmt.Sprint(a) != fmt.Sprint(b) {
				t.Errorf("%s in blocks of %d: other bytes", e, size)
			}
		}
		if other, _ := write(t, Format{48000, 3, e}, Option{Seed: 10}, in, 1000); bytes.Equal(other.b, first.b) != (e != PCM16) {
			t.Errorf("%s with another seed: equal is %v", e, bytes.Equal(other.b, first.b))
		}
	}
}

func TestWriterKeepsTheContractOfASink(t *testing.T) {
	in := noise(2, 3000)
	audiotest.TestSink(t, func() (audio.Sink, func() []float64) {
		m := &memory{b: make([]byte, 0, 1<<20)}
		w, err := NewWriter(m, Format{48000, 2, PCM16}, Option{})
		if err != nil {
			t.Fatal(err)
		}
		return w, func() []float64 {
			if err := w.Close(); err != nil {
				t.Fatal(err)
			}
			list := []float64{w.Written().Peak, float64(w.Written().Frames)}
			for _, x := range m.b {
				list = append(list, float64(x))
			}
			return list
		}
	}, in, false, audiotest.Options{})
}

// discard is a file that forgets.
type discard struct{}

func (discard) WriteAt(p []byte, _ int64) (int, error) { return len(p), nil }

func TestWriteAllocatesNothing(t *testing.T) {
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		w, err := NewWriter(discard{}, Format{48000, 4, e}, Option{})
		if err != nil {
			t.Fatal(err)
		}
		in := noise(4, 5000)
		// The header is patched every ten seconds: not in these.
		if n := testing.AllocsPerRun(50, func() {
			if err := w.Write(in); err != nil {
				t.Fatal(err)
			}
		}); n != 0 {
			t.Errorf("%s: %g allocations a write, want 0", e, n)
		}
	}
}

// The rounding error of dithered integers has the moments of TPDF dither:
// mean 0 and variance 1/4 LSB², whatever the signal [Lipshitz et al. 1992: the
// first two moments are made independent of the signal].
func TestDitherMakesTheErrorIndependentOfTheSignal(t *testing.T) {
	const n = 200000
	for _, level := range []float64{0, 0.25, 0.5, 0.75, 100.1} { // in LSB
		in := audio.NewBlock(1, n)
		for i := range in.Channel(0) {
			in.Channel(0)[i] = float32(level / 32768)
		}
		m, _ := write(t, Format{48000, 1, PCM16}, Option{Seed: 3}, in, 4096)
		sum, square := 0.0, 0.0
		for _, x := range readAll(t, open(t, m.b)).Channel(0) {
			d := float64(x)*32768 - float64(in.Channel(0)[0])*32768
			sum += d
			square += d * d
		}
		mean, variance := sum/n, square/n
		// Four standard deviations of the mean and of the variance (their own
		// spread: the fourth moment of the error is below 0.4 LSB⁴).
		if math.Abs(mean) > 4*0.5/math.Sqrt(n) || math.Abs(variance-0.25) > 4*math.Sqrt(0.4/n) {
			t.Errorf("level %g LSB: mean %.5f, variance %.5f LSB², want 0 and 0.25", level, mean, variance)
		}
	}
}

// Noise numbers in a row and those of neighbouring channels are uncorrelated.
func TestDitherIsTriangularAndWhite(t *testing.T) {
	const n = 1 << 18
	x := make([]float64, n)
	for k := range x {
		x[k] = tpdf(12345, uint64(k))
		if x[k] <= -1 || x[k] >= 1 {
			t.Fatalf("number %d is %g", k, x[k])
		}
	}
	inner := 0
	for _, v := range x {
		if math.Abs(v) < 0.5 {
			inner++
		}
	}
	// A triangle over -1..1 has 3/4 of its area within ±1/2.
	if p := float64(inner) / n; math.Abs(p-0.75) > 4*math.Sqrt(0.75*0.25/n) {
		t.Errorf("%.4f lie within ±1/2, want 0.75", p)
	}
	for _, lag := range []int{1, 2, 3, 8, 64, 256} {
		r := 0.0
		for k := range n - lag {
			r += x[k] * x[k+lag]
		}
		if r /= n / 6.0; math.Abs(r) > 4.5/math.Sqrt(n) {
			t.Errorf("correlation at %d: %.5f", lag, r)
		}
	}
}

func TestClippingIsCountedAndNeverWraps(t *testing.T) {
	for _, c := range []struct {
		e         Encoding
		low, high float64
	}{{PCM16, -1, 32767.0 / 32768}, {PCM24, -1, 8388607.0 / 8388608}} {
		in := noise(2, 5000)
		in.Channel(0)[100], in.Channel(1)[100] = 1.5, -1.25
		in.Channel(1)[4000] = -3
		in.Channel(0)[4500] = 2
		in.Channel(0)[10], in.Channel(1)[11] = 1, -1 // full scale is in range
		m, out := write(t, Format{48000, 2, c.e}, Option{}, in, 333)
		if out.Over != 3 || out.FirstOver != 100 || out.Peak != 3 || out.PeakFrame != 4000 {
			t.Errorf("%s: %d frames over, first %d, peak %g at %d; want 3, 100, 3 at 4000", c.e, out.Over, out.FirstOver, out.Peak, out.PeakFrame)
		}
		got := readAll(t, open(t, m.b))
		for _, s := range []struct {
			ch, i int
			want  float64
		}{{0, 100, c.high}, {1, 100, c.low}, {1, 4000, c.low}, {0, 4500, c.high}} {
			if x := float64(got.Channel(s.ch)[s.i]); x != s.want {
				t.Errorf("%s: channel %d, frame %d = %v, want %v", c.e, s.ch, s.i, x, s.want)
			}
		}
	}
	in := noise(1, 100)
	in.Channel(0)[7] = -4
	m, out := write(t, Format{48000, 1, Float32}, Option{}, in, 10)
	if x := readAll(t, open(t, m.b)).Channel(0)[7]; x != -4 || out.Over != 1 || out.Peak != 4 {
		t.Errorf("float32: %v, %+v, want it untouched and told", x, out)
	}
}

func TestSamplesThatAreNotNumbersAreNotWritten(t *testing.T) {
	for _, bad := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
		w, err := NewWriter(&memory{}, Format{48000, 2, PCM24}, Option{})
		if err != nil {
			t.Fatal(err)
		}
		in := noise(2, 100)
		in.Channel(1)[42] = float32(bad)
		err = w.Write(in)
		if err == nil || !strings.Contains(err.Error(), "frame 42, channel 2") {
			t.Errorf("%v: %v", bad, err)
		}
		if again := w.Write(noise(2, 1)); again != err {
			t.Errorf("after it: %v", again)
		}
		if w.Close() != err {
			t.Error("close hides it")
		}
	}
}

func TestFormatsThatAreNotWrittenAreRefusedAllAtOnce(t *testing.T) {
	for f, want := range map[Format]int{{48000, 1, PCM8}: 1, {48000, 1, "pcm12"}: 1, {0, 0, ""}: 3, {384001, 257, Float64}: 3, {48000, 0, PCM16}: 1} {
		_, err := NewWriter(&memory{}, f, Option{})
		if err == nil || len(strings.Split(err.Error(), "\n")) != want {
			t.Errorf("%+v: %v, want %d faults", f, err, want)
		}
	}
}

// The switch to RF64 at every size around the limit, which is lowered here;
// the true one is held by the sparse file.
func TestAFileThatOutgrowsRIFFBecomesRF64(t *testing.T) {
	for _, e := range []Encoding{PCM24, Float32} {
		in := noise(1, 1001)
		meta := &Metadata{Bext: &Bext{Description: "x"}, Cues: []Cue{{ID: 1, Frame: 3}}}
		was, plain := write(t, Format{48000, 1, e}, Option{Metadata: meta}, in, 1001)
		for _, limit := range []int64{plain.Bytes - 8, plain.Bytes - 9} {
			m := &memory{}
			w, err := NewWriter(m, Format{48000, 1, e}, Option{Metadata: meta})
			if err != nil {
				t.Fatal(err)
			}
			w.limit = limit
			if err := errors.Join(w.Write(in), w.Close()); err != nil {
				t.Fatal(err)
			}
			out := w.Written()
			want := RIFF
			if plain.Bytes-8 > limit {
				want = RF64
			}
			r := open(t, m.b)
			if out.Container != want || r.Header().Container != want || codes(r.Warnings()) != "" {
				t.Errorf("RIFF size %d, limit %d: %s, want %s, warnings %v", plain.Bytes-8, limit, out.Container, want, r.Warnings())
			}
			if want == RF64 {
				// K5: RF64, 0xFFFFFFFF, WAVE, ds64 first: riffSize at 0, dataSize at 8,
				// sampleCount at 16, tableLength at 24 (ITU-R BS.2088 Annex 1; EBU Tech 3306).
				b := m.b
				if string(b[:4]) != "RF64" || le.Uint32(b[4:]) != unset32 || string(b[8:16]) != "WAVEds64" || le.Uint32(b[16:]) != 28 ||
					le.Uint64(b[20:]) != uint64(len(b)-8) || le.Uint64(b[28:]) != uint64(1001*e.Bits()/8) || le.Uint64(b[36:]) != 1001 || le.Uint32(b[44:]) != 0 {
					t.Errorf("header % x", b[:48])
				}
			}
			how, err := Verify(m, out.Bytes, out)
			if err != nil || strings.Contains(how, "two readers") != (want == RIFF && e == PCM24) {
				t.Errorf("%s, %v", how, err)
			}
			sameBits(t, readAll(t, r), readAll(t, open(t, was.b)))
			if len(r.Metadata().Cues) != 1 || r.Metadata().Bext == nil {
				t.Errorf("metadata %+v", r.Metadata())
			}
		}
	}
}

// A loss of power at any write: what is on the disk by then can be opened, and
// all frames that had reached it are there.
func TestWhatACrashLeavesCanBeRead(t *testing.T) {
	in := noise(2, 4*writeBytes)
	m := &memory{}
	f := &crash{memory: m}
	w, err := NewWriter(f, Format{8000, 2, PCM24}, Option{Metadata: &Metadata{Bext: &Bext{}}})
	if err != nil {
		t.Fatal(err)
	}
	w.patchEvery = 30000
	w.patchNext = 30000
	f.check = func() {
		r, err := Open(bytes.NewReader(m.b), int64(len(m.b)))
		if err != nil {
			t.Fatal(err)
		}
		there := (int64(len(m.b)) - w.dataAt) / 6
		if got := r.Frames(); got != there {
			t.Errorf("%d frames are there, %d are read: %v", there, got, r.Warnings())
		}
	}
	if err := w.Write(in); err != nil {
		t.Fatal(err)
	}
	if f.writes < 15 {
		t.Errorf("only %d writes were looked at", f.writes)
	}
}

type crash struct {
	*memory
	check  func()
	writes int
}

func (c *crash) WriteAt(p []byte, off int64) (int, error) {
	n, err := c.memory.WriteAt(p, off)
	if c.check != nil {
		c.writes++
		c.check()
	}
	return n, err
}

// full is a file on a disk with room for n bytes.
type full struct {
	memory
	room int64
}

var errFull = errors.New("no room")

func (f *full) WriteAt(p []byte, off int64) (int, error) {
	if off+int64(len(p)) > f.room {
		return 0, errFull
	}
	return f.memory.WriteAt(p, off)
}

func TestAFullDiskIsTheErrorOfTheWriter(t *testing.T) {
	in := noise(1, 100000)
	for _, room := range []int64{0, 30, 100, writeBytes - 5, 200000, 300080, 300089} {
		f := &full{room: room}
		w, err := NewWriter(f, Format{48000, 1, PCM24}, Option{Metadata: &Metadata{Cues: []Cue{{ID: 1}}}})
		if err == nil {
			err = errors.Join(w.Write(in), w.Close())
		}
		if !errors.Is(err, errFull) {
			t.Errorf("room for %d bytes: %v", room, err)
		}
	}
}

func TestCloseTwiceChangesNothing(t *testing.T) {
	m := &memory{}
	w, err := NewWriter(m, Format{48000, 1, PCM24}, Option{})
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(w.Write(noise(1, 11)), w.Close()); err != nil {
		t.Fatal(err)
	}
	was := bytes.Clone(m.b)
	if err := w.Close(); err != nil || !bytes.Equal(was, m.b) {
		t.Errorf("%v, changed %v", err, !bytes.Equal(was, m.b))
	}
	if err := w.Write(noise(1, 1)); err == nil {
		t.Error("a write after close is taken")
	}
}

func TestVerifyFindsEveryFlippedBit(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 8))
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		m, out := write(t, Format{48000, 2, e}, Option{}, noise(2, 999), 999)
		if _, err := Verify(m, out.Bytes, out); err != nil {
			t.Fatal(err)
		}
		h := open(t, m.b).Header()
		for range 300 {
			bit := rng.Int64N(8 * h.DataSize)
			at := h.DataOffset + bit/8
			m.b[at] ^= 1 << (bit % 8)
			if _, err := Verify(m, out.Bytes, out); err == nil || !strings.HasPrefix(err.Error(), "read back: ") {
				t.Errorf("%s, bit %d of byte %d: %v", e, bit%8, at, err)
			}
			m.b[at] ^= 1 << (bit % 8)
		}
		for _, at := range []int64{0, 4, 8, 48, 50, 52, 60, h.DataOffset - 8, h.DataOffset - 4} {
			m.b[at] ^= 1
			if _, err := Verify(m, out.Bytes, out); err == nil {
				t.Errorf("%s: byte %d of the header", e, at)
			}
			m.b[at] ^= 1
		}
		if _, err := Verify(m, out.Bytes-1, out); err == nil {
			t.Error("a file that is too short")
		}
	}
}

// The second reader finds a fault that the first one shares with the writer:
// samples of which both make the same wrong thing. Here the sums are of other
// samples, so each alone must object.
func TestBothReadersOfVerifyCompare(t *testing.T) {
	m, out := write(t, Format{48000, 3, PCM24}, Option{}, noise(3, 20000), 999)
	wrong := out
	wrong.sums = append([]uint64{}, out.sums...)
	wrong.sums[2]++
	for name, err := range map[string]error{"first": verifyOwn(m, out.Bytes, wrong), "second": verifyWitness(m, wrong)} {
		if err == nil || !strings.Contains(err.Error(), "channel 3") {
			t.Errorf("the %s reader: %v", name, err)
		}
	}
	wrong = out
	wrong.Frames++
	if verifyOwn(m, out.Bytes, wrong) == nil || verifyWitness(m, wrong) == nil {
		t.Error("another length passes")
	}
	wrong = out
	wrong.Format.Rate = 44100
	if verifyOwn(m, out.Bytes, wrong) == nil || verifyWitness(m, wrong) == nil {
		t.Error("another rate passes")
	}
}

func TestSizeBoundHolds(t *testing.T) {
	meta := &Metadata{Bext: &Bext{CodingHistory: "x"}, Cues: []Cue{{ID: 1, Label: "ab"}}, Info: []InfoEntry{{"INAM", "take"}}}
	for _, frames := range []int{0, 1, 1001} {
		_, out := write(t, Format{48000, 3, PCM24}, Option{Metadata: meta}, noise(3, frames), 100)
		if bound := SizeBound(out.Format, meta, int64(frames)); bound < out.Bytes || bound > out.Bytes+400 {
			t.Errorf("%d frames: bound %d, file of %d", frames, bound, out.Bytes)
		}
	}
}
