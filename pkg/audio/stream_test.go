package audio_test

import (
	"errors"
	"fmt"
	"io"
	"math"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

var errBroken = errors.New("broken on purpose")

func TestMemoryKeepsTheContract(t *testing.T) {
	for _, frames := range []int{0, 1, 1023, 1024, 1025, 3000} {
		b := noise(1, 3, frames)
		audiotest.TestSource(t, func() audio.Source { return audio.FromBlock(44100, b) }, b, audiotest.Options{Rate: 44100})
	}
}

func TestMemoryRewinds(t *testing.T) {
	b := noise(1, 2, 100)
	m := audio.FromBlock(8000, b)
	for pass := range 3 {
		got, err := audio.ReadAll(m)
		if err != nil || got.Frames() != 100 || got.Channel(1)[99] != b.Channel(1)[99] {
			t.Fatalf("pass %d: %d frames, %v", pass, got.Frames(), err)
		}
		m.Rewind()
	}
}

func TestMapKeepsTheContract(t *testing.T) {
	in := noise(2, 3, 3000)
	order, gain := []int{2, 0, 0, 1}, []float64{1, -0.5, 1, 0.1}
	want := audio.NewBlock(4, 3000)
	for j, ch := range order {
		for i, x := range in.Channel(ch) {
			want.Channel(j)[i] = float32(gain[j]) * x
		}
	}
	stage := func(up audio.Source) audio.Source {
		m, err := audio.Map(up, order, gain)
		if err != nil {
			t.Fatal(err)
		}
		return m
	}
	audiotest.TestStage(t, 48000, in, stage, want, audiotest.Options{Rate: 48000})
}

func TestMapWithoutGainsOnlyReorders(t *testing.T) {
	in := noise(2, 3, 50)
	m, err := audio.Map(audio.FromBlock(48000, in), []int{1, 1}, nil)
	if err != nil {
		t.Fatal(err)
	}
	got, err := audio.ReadAll(m)
	if err != nil {
		t.Fatal(err)
	}
	for j := range 2 {
		for i, v := range got.Channel(j) {
			if v != in.Channel(1)[i] {
				t.Fatalf("channel %d, frame %d = %v, want %v", j, i, v, in.Channel(1)[i])
			}
		}
	}
}

func TestMapKeepsItsOwnOrder(t *testing.T) {
	in := noise(2, 3, 50)
	order, gain := []int{2, 0}, []float64{2, 3}
	m, err := audio.Map(audio.FromBlock(48000, in), order, gain)
	if err != nil {
		t.Fatal(err)
	}
	order[0], gain[0] = 1, 9
	got, err := audio.ReadAll(m)
	if err != nil {
		t.Fatal(err)
	}
	if got.Channel(0)[7] != 2*in.Channel(2)[7] {
		t.Errorf("frame 7 = %v, want twice channel 3: %v", got.Channel(0)[7], 2*in.Channel(2)[7])
	}
}

func TestMapRefusesAChannelThatIsNotThere(t *testing.T) {
	src := audio.FromBlock(48000, noise(1, 3, 10))
	for _, order := range [][]int{{0, 3}, {-1, 2}} {
		_, err := audio.Map(src, order, nil)
		if err == nil || !strings.Contains(err.Error(), "the source has 3") {
			t.Errorf("Map(%v) = %v, want the channel count of the source", order, err)
		}
	}
	if got := panics(func() { audio.Map(src, []int{0, 1}, []float64{1}) }); !strings.Contains(got, "map of 2 channels with 1 gains") {
		t.Errorf("panics with %q", got)
	}
	m, err := audio.Map(src, []int{0, 1}, nil)
	if err != nil {
		t.Fatal(err)
	}
	if got := panics(func() { m.Read(audio.NewBlock(3, 5)) }); !strings.Contains(got, "read of 2 channels into a block of 3") {
		t.Errorf("panics with %q", got)
	}
}

func TestGainKeepsTheContract(t *testing.T) {
	in := noise(3, 2, 2500)
	want := audio.NewBlock(2, 2500)
	for ch := range 2 {
		for i, x := range in.Channel(ch) {
			want.Channel(ch)[i] = x * -0.3
		}
	}
	audiotest.TestStage(t, 48000, in, func(up audio.Source) audio.Source { return audio.Gain(up, -0.3) }, want, audiotest.Options{Rate: 48000})
}

func TestSectionKeepsTheContract(t *testing.T) {
	const frames = 9000
	in := noise(4, 2, frames)
	for _, c := range []struct{ from, to, wantTo int64 }{
		{0, frames, frames}, {0, 1, 1}, {1, 2, 2}, {0, 0, 0}, {500, 500, 500},
		{4095, 8000, 8000}, {4096, 8193, 8193}, {4097, 4098, 4098},
		{8000, frames + 5, frames}, // ends where the stream ends
		{frames, frames + 5, frames}, {frames + 1, frames + 5, frames + 1},
	} {
		want := audio.NewBlock(2, 0)
		if c.from < c.wantTo {
			want = in.Slice(int(c.from), int(c.wantTo))
		}
		open := func() audio.Source { return audio.Section(audio.FromBlock(48000, in), c.from, c.to) }
		t.Run(fmt.Sprintf("%d..%d", c.from, c.to), func(t *testing.T) {
			audiotest.TestSource(t, open, want, audiotest.Options{Rate: 48000})
		})
	}
}

func TestSectionPassesOnAFailure(t *testing.T) {
	in := noise(4, 2, 9000)
	for _, c := range []struct {
		from, to, fails int64
		n               int
		end             error
	}{
		{100, 500, 50, 0, errBroken}, // before the section
		{5000, 8000, 4096, 0, errBroken},
		{100, 500, 300, 200, errBroken}, // within it
		{100, 500, 500, 400, io.EOF},    // after it: the section is whole
	} {
		src := audio.Section(audiotest.Failing(audio.FromBlock(48000, in), c.fails, errBroken), c.from, c.to)
		dst := audio.NewBlock(2, 1000)
		n, err := src.Read(dst)
		if n != c.n || err != nil && err != c.end {
			t.Errorf("%+v: read = %d, %v", c, n, err)
		}
		for range 2 {
			if n, err := src.Read(dst); n != 0 || err != c.end {
				t.Errorf("%+v: read after = %d, %v, want 0, %v", c, n, err, c.end)
			}
		}
	}
}

func TestSectionRefusesABackwardStretch(t *testing.T) {
	src := audio.FromBlock(48000, noise(1, 1, 10))
	for _, c := range [][2]int64{{-1, 5}, {5, 4}} {
		if got := panics(func() { audio.Section(src, c[0], c[1]) }); !strings.Contains(got, "audio: section") {
			t.Errorf("Section(%d, %d) panics with %q", c[0], c[1], got)
		}
	}
}

func TestTeeKeepsTheContract(t *testing.T) {
	in := noise(5, 2, 2500)
	sum := &summing{}
	audiotest.TestStage(t, 48000, in, func(up audio.Source) audio.Source { return audio.Tee(up, sum) }, in, audiotest.Options{Rate: 48000})
	if sum.frames == 0 {
		t.Error("the sink saw nothing")
	}
}

// summing is a sink that counts frames, sums samples, and fails once it has
// seen a number of frames.
type summing struct {
	frames int
	sum    float64
	failAt int
}

func (s *summing) Write(src audio.Block) error {
	for ch := range src.Channels() {
		for _, x := range src.Channel(ch) {
			s.sum += float64(x)
		}
	}
	s.frames += src.Frames()
	if s.failAt > 0 && s.frames >= s.failAt {
		return errBroken
	}
	return nil
}

func TestTeeWritesEveryFrameOnceAndStopsAtAFailureOfItsSink(t *testing.T) {
	in := noise(5, 2, 1000)
	var kept audio.Collect
	got, err := audio.ReadAll(audio.Tee(audio.FromBlock(48000, in), &kept))
	if err != nil || got.Frames() != 1000 || kept.Block().Frames() != 1000 {
		t.Fatalf("%d frames out, %d to the side, %v", got.Frames(), kept.Block().Frames(), err)
	}
	for i, v := range kept.Block().Channel(1) {
		if v != in.Channel(1)[i] {
			t.Fatalf("frame %d to the side = %v, want %v", i, v, in.Channel(1)[i])
		}
	}

	sink := &summing{failAt: 250}
	src := audio.Tee(audio.FromBlock(48000, in), sink)
	dst := audio.NewBlock(2, 100)
	for k, want := range []struct {
		n   int
		err error
	}{{100, nil}, {100, nil}, {100, errBroken}, {0, errBroken}, {0, errBroken}} {
		if n, err := src.Read(dst); n != want.n || err != want.err {
			t.Errorf("read %d = %d, %v, want %d, %v", k, n, err, want.n, want.err)
		}
	}
	if sink.frames != 300 {
		t.Errorf("the sink was given %d frames, want none after its failure at 300", sink.frames)
	}

	// Both fail in one Read: the failure of the source stands.
	src = audio.Tee(audiotest.Failing(audio.FromBlock(48000, in), 50, io.ErrUnexpectedEOF), &summing{failAt: 1})
	for range 2 {
		if _, err := src.Read(dst); err != io.ErrUnexpectedEOF {
			t.Errorf("read = %v, want the failure of the source", err)
		}
	}
}

func TestCopyGivesEverySinkEveryFrame(t *testing.T) {
	in := noise(6, 2, 1000)
	for _, size := range []int{1, 7, 999, 1000, 1001} {
		a, b := &summing{}, &audio.Collect{}
		n, err := audio.Copy(audio.FromBlock(48000, in), size, a, b)
		if n != 1000 || err != nil || a.frames != 1000 || b.Block().Frames() != 1000 {
			t.Errorf("blocks of %d: %d frames, %v; the sinks took %d and %d", size, n, err, a.frames, b.Block().Frames())
		}
	}
	if n, err := audio.Copy(audio.FromBlock(48000, in), 64); n != 1000 || err != nil {
		t.Errorf("without sinks: %d, %v", n, err)
	}
	if got := panics(func() { audio.Copy(audio.FromBlock(48000, in), 0) }); !strings.Contains(got, "copy in blocks of 0 frames") {
		t.Errorf("panics with %q", got)
	}
}

// stuck yields some frames and then neither a frame nor an error.
type stuck struct{ *audio.Memory }

func (s stuck) Read(dst audio.Block) (int, error) {
	n, _ := s.Memory.Read(dst)
	return n, nil
}

// wrapped ends with an error around io.EOF, as a file cut short would give.
type wrapped struct{ *audio.Memory }

func (w wrapped) Read(dst audio.Block) (int, error) {
	n, err := w.Memory.Read(dst)
	if err != nil {
		err = fmt.Errorf("take: %w", err)
	}
	return n, err
}

func TestCopyReturnsTheFirstFailure(t *testing.T) {
	in := noise(6, 2, 1000)
	memory := func() *audio.Memory { return audio.FromBlock(48000, in) }

	var a summing
	n, err := audio.Copy(audiotest.Failing(memory(), 777, errBroken), 100, &a)
	if n != 777 || err != errBroken || a.frames != 777 {
		t.Errorf("failing source: %d, %v, %d written; want the 777 good frames and the failure", n, err, a.frames)
	}
	first, second := &summing{failAt: 150}, &summing{}
	n, err = audio.Copy(memory(), 100, first, second)
	if n != 100 || err != errBroken || second.frames != 100 {
		t.Errorf("failing sink: %d, %v, the sink after it took %d; want 100, the failure, 100", n, err, second.frames)
	}
	if n, err := audio.Copy(stuck{memory()}, 64); n != 1000 || !errors.Is(err, io.ErrNoProgress) {
		t.Errorf("stuck source: %d, %v, want 1000 and no progress", n, err)
	}
	if n, err := audio.Copy(wrapped{memory()}, 64); n != 1000 || err == nil || err == io.EOF {
		t.Errorf("wrapped end: %d, %v, want it to count as a failure", n, err)
	}
	if _, err := audio.Section(stuck{memory()}, 2000, 3000).Read(audio.NewBlock(2, 10)); !errors.Is(err, io.ErrNoProgress) {
		t.Errorf("section of a stuck source: %v, want no progress", err)
	}
}

func TestReadAllReturnsWhatWasGood(t *testing.T) {
	in := noise(7, 2, 10000)
	got, err := audio.ReadAll(audio.FromBlock(48000, in))
	if err != nil || got.Frames() != 10000 || got.Channel(1)[9999] != in.Channel(1)[9999] {
		t.Errorf("%d frames, %v", got.Frames(), err)
	}
	got, err = audio.ReadAll(audiotest.Failing(audio.FromBlock(48000, in), 5000, errBroken))
	if err != errBroken || got.Frames() != 5000 {
		t.Errorf("failing source: %d frames, %v, want 5000 and the failure", got.Frames(), err)
	}
	got, err = audio.ReadAll(audio.FromBlock(48000, audio.NewBlock(5, 0)))
	if err != nil || got.Channels() != 5 || got.Frames() != 0 {
		t.Errorf("empty source: %d channels, %d frames, %v", got.Channels(), got.Frames(), err)
	}
}

func TestCollectKeepsEveryFrameInOrder(t *testing.T) {
	in := noise(8, 2, 500)
	c := &audio.Collect{}
	if b := c.Block(); b.Channels() != 0 || b.Frames() != 0 {
		t.Errorf("before the first write: %d channels, %d frames", b.Channels(), b.Frames())
	}
	audiotest.TestSink(t, func() (audio.Sink, func() []float64) {
		c := &audio.Collect{}
		return c, func() (all []float64) {
			for ch := range 2 {
				for i, x := range c.Block().Channel(ch) {
					if x != in.Channel(ch)[i] {
						t.Fatalf("channel %d, frame %d = %v, want %v", ch, i, x, in.Channel(ch)[i])
					}
					all = append(all, float64(x))
				}
			}
			return all
		}
	}, in, true, audiotest.Options{})
	if err := c.Write(in); err != nil {
		t.Fatal(err)
	}
	if got := panics(func() { c.Write(noise(1, 3, 4)) }); !strings.Contains(got, "collect: 3 channels after 2") {
		t.Errorf("panics with %q", got)
	}
}

func TestDecibelsAreTenOrTwentyTimesTheLogarithm(t *testing.T) {
	near := func(what string, got, want float64) {
		t.Helper()
		if math.Abs(got-want) > 1e-12*math.Max(1, math.Abs(want)) {
			t.Errorf("%s = %v, want %v", what, got, want)
		}
	}
	near("PowerDB(100)", audio.PowerDB(100), 20)
	near("AmplitudeDB(100)", audio.AmplitudeDB(100), 40)
	near("AmplitudeDB(-0.1)", audio.AmplitudeDB(-0.1), -20)
	near("FromPowerDB(-30)", audio.FromPowerDB(-30), 1e-3)
	near("FromAmplitudeDB(-60)", audio.FromAmplitudeDB(-60), 1e-3)
	for _, x := range []float64{1e-9, 0.3, 7, 1e12} {
		near("power there and back", audio.FromPowerDB(audio.PowerDB(x)), x)
		near("amplitude there and back", audio.FromAmplitudeDB(audio.AmplitudeDB(x)), x)
	}
	if !math.IsInf(audio.PowerDB(0), -1) || !math.IsInf(audio.AmplitudeDB(0), -1) {
		t.Error("zero is not -Inf dB")
	}
}
