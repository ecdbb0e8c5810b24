package bearing

import (
	"errors"
	"fmt"
	"math"
	"reflect"
	"runtime"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

func TestResultDoesNotDependOnBlockSizeOrProcessors(t *testing.T) {
	const rate = 16000
	mics := ringMics(5, 0.07)
	m := newMixture(mics, rate, 2*rate+37).plane(bursts(2*rate+37, rate, 3), rig.Degrees(-77, 0), 1).noise(0.3, 4)
	b := m.block()
	var first *Result
	for _, size := range []int{4096, 1, 7, 255, 256, 257, 512, 100000} {
		for _, procs := range []int{1, 2} {
			if size == 1 && procs == 2 {
				continue
			}
			old := runtime.GOMAXPROCS(procs)
			cores := procs * (size % 2) // 0 in every second case: as many as there are
			f, err := NewFinder(mics, rig.Point{}, rate, Options{Speed: testSpeed, Cores: cores})
			if err != nil {
				t.Fatal(err)
			}
			if len(f.desks) != procs {
				t.Fatalf("%d desks on %d processors", len(f.desks), procs)
			}
			if _, err := audio.Copy(audio.FromBlock(rate, b), size, f); err != nil {
				t.Fatal(err)
			}
			r := f.Result()
			runtime.GOMAXPROCS(old)
			if first == nil {
				first = r
				if len(r.Sources) != 1 {
					t.Fatalf("%d sources, want 1", len(r.Sources))
				}
				continue
			}
			if !reflect.DeepEqual(first, r) {
				t.Errorf("blocks of %d frames on %d processors give another result", size, procs)
			}
		}
	}
}

func TestWriteAllocatesNothingBetweenWindows(t *testing.T) {
	const rate = 16000
	mics := lineMics(4, 0.05)
	f, err := NewFinder(mics, rig.Point{}, rate, Options{Window: 40, Hop: 40})
	if err != nil {
		t.Fatal(err)
	}
	b := newMixture(mics, rate, 640).noise(1, 2).block()
	if n := testing.AllocsPerRun(100, func() {
		if err := f.Write(b); err != nil {
			t.Fatal(err)
		}
	}); n != 0 {
		t.Errorf("%g allocations a block, want 0", n)
	}
}

func TestShortTakesGiveAnAnswerOrAReason(t *testing.T) {
	const rate = 16000
	mics := lineMics(8, 0.04)
	for _, n := range []int{0, 1, 10, 255, 256, 511, 512, 513, 1000, 3000, 6400, 6500, 9000} {
		m := newMixture(mics, rate, max(n, 1))
		if n > 1 {
			m.plane(white(n, 5), rig.Degrees(70, 0), 1).noise(0.1, 6)
		}
		r := find(t, mics, rate, m.block().Slice(0, n), Options{})
		if len(r.Sources) == 0 {
			if len(r.Findings) == 0 || r.Findings[0].Code != CodeNoDirection || r.Findings[0].Message == "" {
				t.Errorf("%d frames: no source and no reason", n)
			}
			if _, err := r.Best(1); err == nil {
				t.Errorf("%d frames: Best gave no error", n)
			}
			if n >= 3000 {
				t.Errorf("%d frames: nothing found: %+v", n, r.Findings)
			}
			continue
		}
		s := r.Sources[0]
		if e := math.Abs(s.Direction.AzimuthDeg() - 70); e > 4*s.StandardError/deg+1 {
			t.Errorf("%d frames: %.2f° ± %.2f°, want 70°", n, s.Direction.AzimuthDeg(), s.StandardError/deg)
		}
	}
}

func TestReasonsForNoDirection(t *testing.T) {
	const rate = 16000
	mics := lineMics(8, 0.04)
	diffuse := newMixture(mics, rate, 2*rate)
	for w := range 120 {
		z := -1 + 2*(float64(w)+0.5)/120
		diffuse.plane(white(2*rate, uint64(w)), rig.Direction{Azimuth: 2.399963 * float64(w), Elevation: math.Asin(z)}, 0.09)
	}
	for _, c := range []struct {
		name string
		m    *mixture
		want string
	}{
		{"silence", newMixture(mics, rate, 2*rate), "silence"},
		{"noise of the microphones alone", newMixture(mics, rate, 2*rate).noise(1, 9), "not coherent"},
		{"diffuse noise", diffuse, ""},
	} {
		r := find(t, mics, rate, c.m.block(), Options{})
		if len(r.Sources) != 0 {
			if c.want != "" || r.Sources[0].Confidence >= 0.5 {
				t.Errorf("%s: found %+v", c.name, r.Sources[0])
			}
			continue
		}
		if len(r.Findings) == 0 || !strings.Contains(r.Findings[0].Message, c.want) {
			t.Errorf("%s: findings %+v, want a reason with %q", c.name, r.Findings, c.want)
		}
		for _, w := range r.Windows {
			if len(w.Sources) == 0 && w.Reason == "" {
				t.Errorf("%s: window at %.2f s has no source and no reason", c.name, w.Start)
			}
		}
	}
}

func TestNewFinderRefusesWhatCannotBe(t *testing.T) {
	good := lineMics(4, 0.05)
	for _, c := range []struct {
		name string
		mics []rig.Point
		rate int
		o    Options
		want string
	}{
		{"one microphone", good[:1], 48000, Options{}, "1 microphones"},
		{"none", nil, 48000, Options{}, "0 microphones"},
		{"one place", []rig.Point{{X: 1}, {X: 1}}, 48000, Options{}, "in one place"},
		{"no rate", good, 0, Options{}, "0 frames per second"},
		{"a huge rate", good, 1 << 30, Options{}, "frames per second"},
		{"no number", []rig.Point{{X: math.NaN()}, {}}, 48000, Options{}, "microphone 1"},
		{"far away", []rig.Point{{X: 1e9}, {}}, 48000, Options{}, "microphone 1"},
		{"an empty range", good, 48000, Options{FromHz: 900, ToHz: 800}, "range is empty"},
		{"above half the rate", good, 16000, Options{ToHz: 9000}, "above half the rate"},
		{"a narrow range", good, 16000, Options{FromHz: 1000, ToHz: 1010}, "lines of the transform"},
		{"a short window", good, 48000, Options{Window: 1e-6}, "window in seconds"},
		{"a window without a number", good, 48000, Options{Window: math.NaN()}, "window in seconds"},
		{"a hop over the window", good, 48000, Options{Window: 0.5, Hop: 1}, "stretches would be skipped"},
		{"too many sources", good, 48000, Options{Sources: 99}, "number of sources"},
		{"negative sources", good, 48000, Options{Sources: -1}, "number of sources"},
		{"corrections of another number", good, 48000, Options{Corrections: []float64{0}}, "1 time corrections"},
		{"an endless speed", good, 48000, Options{Speed: math.Inf(1)}, "speed of sound"},
		{"a huge rig", []rig.Point{{}, {X: 900}}, 384000, Options{Window: 0.1}, "too long for windows"},
	} {
		_, err := NewFinder(c.mics, rig.Point{}, c.rate, c.o)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v, want one with %q", c.name, err, c.want)
		}
	}
	// All faults at once.
	_, err := NewFinder(good[:1], rig.Point{}, 0, Options{Sources: 99})
	if err == nil || strings.Count(err.Error(), "\n") != 2 {
		t.Errorf("error %v, want three lines", err)
	}
}

func TestWriteRefusesBadBlocks(t *testing.T) {
	mics := lineMics(3, 0.05)
	open := func() *Finder {
		f, err := NewFinder(mics, rig.Point{}, 16000, Options{})
		if err != nil {
			t.Fatal(err)
		}
		return f
	}
	f := open()
	if err := f.Write(audio.NewBlock(2, 10)); err == nil || !strings.Contains(err.Error(), "2 channels for 3 microphones") {
		t.Errorf("error %v", err)
	}
	if f.Result() != nil {
		t.Error("a failed finder gives a result")
	}
	for _, v := range []float32{float32(math.NaN()), float32(math.Inf(1)), float32(math.Inf(-1))} {
		f = open()
		b := audio.NewBlock(3, 700)
		b.Channel(1)[600] = v
		err := f.Write(b)
		if err == nil || !strings.Contains(err.Error(), "channel 2, frame 600") {
			t.Errorf("error %v", err)
		}
		if again := f.Write(audio.NewBlock(3, 10)); !errors.Is(again, err) {
			t.Errorf("second write: %v, want the first error again", again)
		}
	}
	f = open()
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	if err := f.Write(audio.NewBlock(3, 10)); err == nil {
		t.Error("write after close gave no error")
	}
}

// Time corrections and a reference microphone off the centre.
func TestCorrectionsAreAppliedAndThePointIsSeenFromTheReference(t *testing.T) {
	const rate = 48000
	mics := lineMics(8, 0.04)
	late := []float64{0, 20e-6, -30e-6, 10e-6, 40e-6, -10e-6, 0, 25e-6}
	x := white(rate, 12)
	var d []float64
	u := rig.Degrees(110, 0).Unit()
	for m, p := range mics {
		d = append(d, -p.Dot(u)/testSpeed+late[m])
	}
	b := newMixture(mics, rate, rate).add(delayed(x, d, rate), 1).noise(0.1, 4).block()
	corrections := make([]float64, 8)
	for m := range late {
		corrections[m] = -late[m]
	}
	r := find(t, mics, rate, b, Options{Corrections: corrections})
	if len(r.Sources) == 0 || math.Abs(r.Sources[0].Direction.AzimuthDeg()-110) > 0.3 {
		t.Errorf("corrected: %+v, want 110°", r.Sources)
	}
	// A near source: a 0.8 m line, 1 m away.
	wide := lineMics(8, 0.115)
	src := rig.Point{X: 0.3, Y: 0.95}
	d = d[:0]
	for _, p := range wide {
		d = append(d, src.Distance(p)/testSpeed)
	}
	b = newMixture(wide, rate, rate).add(delayed(x, d, rate), 1).noise(0.1, 4).block()
	ref := wide[0]
	f, err := NewFinder(wide, ref, rate, Options{Speed: testSpeed})
	if err != nil {
		t.Fatal(err)
	}
	if err := f.Write(b); err != nil {
		t.Fatal(err)
	}
	s, err := f.Result().Best(1)
	if err != nil {
		t.Fatal(err)
	}
	if s.Point == nil || s.Point.Distance(src) > 0.02 {
		t.Fatalf("point %v, want %v", s.Point, src)
	}
	want := rig.Toward(src.Sub(ref))
	if rig.AngleBetween(s.Direction, want) > 0.3*deg || math.Abs(*s.Distance-src.Distance(ref)) > 0.02 {
		t.Errorf("seen from the reference: %.2f°, %.3f m, want %.2f°, %.3f m", s.Direction.AzimuthDeg(), *s.Distance, want.AzimuthDeg(), src.Distance(ref))
	}
	// A far source gets no distance.
	far := find(t, wide, rate, newMixture(wide, rate, rate).plane(x, rig.Degrees(60, 0), 1).noise(0.5, 2).block(), Options{})
	if s, err := far.Best(1); err != nil || s.Distance != nil {
		t.Errorf("a plane wave was given a distance: %+v, %v", s, err)
	}
}

// A steady sound is found as it is; a talker over a steady directional noise of
// the same level is found in spite of it, and comes first.
func TestTalkerComesBeforeSteadyNoise(t *testing.T) {
	const rate = 16000
	mics := ringMics(8, 0.06)
	n := 8 * rate
	m := newMixture(mics, rate, n).plane(white(n, 1), rig.Degrees(-100, 0), 0.5).plane(bursts(n, rate, 2), rig.Degrees(30, 0), 1).noise(0.05, 3)
	r := find(t, mics, rate, m.block(), Options{})
	s, err := r.Best(1)
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(rig.WrapDeg(s.Direction.AzimuthDeg()-30)) > 3 || s.Stationary {
		t.Errorf("first source %+v, want the talker at 30°", s)
	}
	r = find(t, mics, rate, newMixture(mics, rate, n/2).plane(white(n/2, 1), rig.Degrees(-100, 0), 0.5).noise(0.05, 3).block(), Options{})
	if s, err := r.Best(1); err != nil || math.Abs(rig.WrapDeg(s.Direction.AzimuthDeg()+100)) > 1 || !s.Stationary {
		t.Errorf("steady sound alone: %+v, %v, want -100°, stationary", s, err)
	}
}

func TestBestCountsFromOne(t *testing.T) {
	r := &Result{Sources: []Source{{Windows: 1}, {Windows: 2}}}
	if s, err := r.Best(2); err != nil || s.Windows != 2 {
		t.Errorf("Best(2) = %+v, %v", s, err)
	}
	for _, pick := range []int{0, -1, 3} {
		if _, err := r.Best(pick); err == nil {
			t.Errorf("Best(%d) gave no error", pick)
		}
	}
}

func TestPictureShowsTheSource(t *testing.T) {
	const rate = 16000
	mics := lineMics(8, 0.04)
	r := find(t, mics, rate, newMixture(mics, rate, rate).plane(white(rate, 1), rig.Degrees(120, 0), 1).noise(0.3, 2).block(), Options{})
	top := 0
	for i, v := range r.Picture.LevelDB {
		if v > r.Picture.LevelDB[top] {
			top = i
		}
		if v > 0 || v < -30 {
			t.Fatalf("level %g dB, want -30 to 0", v)
		}
	}
	if got := r.Picture.Angles[top] / deg; math.Abs(got-120) > 3 {
		t.Errorf("the picture's top is at %.0f°, want 120°", got)
	}
	text := r.Picture.Text(60, 4)
	lines := strings.Split(strings.TrimSuffix(text, "\n"), "\n")
	if len(lines) != 4 || len(lines[0]) != 60 || !strings.Contains(lines[0][38:43], "#") {
		t.Errorf("picture:\n%s", text)
	}
	if (Picture{}).Text(60, 4) != "" || r.Picture.Text(0, 4) != "" || r.Picture.Text(10, -1) != "" {
		t.Error("an empty picture is drawn")
	}
}

func ExampleFinder() {
	const rate = 16000
	mics := lineMics(8, 0.04)
	take := newMixture(mics, rate, 2*rate).plane(white(2*rate, 1), rig.Degrees(60, 0), 1).noise(0.5, 2).block()

	f, err := NewFinder(mics, rig.Point{}, rate, Options{Speed: testSpeed})
	if err != nil {
		fmt.Println(err)
		return
	}
	if _, err := audio.Copy(audio.FromBlock(rate, take), 4096, f); err != nil {
		fmt.Println(err)
		return
	}
	best, err := f.Result().Best(1)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("%.0f degrees from the axis, confidence above 0.9: %v\n", best.Direction.AzimuthDeg(), best.Confidence > 0.9)
	fmt.Println(f.Result().Ambiguity)
	// Output:
	// 60 degrees from the axis, confidence above 0.9: true
	// a line of microphones hears every direction of a cone around its axis alike: front and back, above and below cannot be told apart
}

func BenchmarkFinder16Channels48k(b *testing.B) {
	const rate, seconds = 48000, 5
	mics := lineMics(16, 0.03)
	block := newMixture(mics, rate, seconds*rate).plane(bursts(seconds*rate, rate, 1), rig.Degrees(70, 0), 1).noise(0.2, 2).block()
	b.ReportAllocs()
	for b.Loop() {
		f, err := NewFinder(mics, rig.Point{}, rate, Options{})
		if err != nil {
			b.Fatal(err)
		}
		if _, err := audio.Copy(audio.FromBlock(rate, block), 4096, f); err != nil {
			b.Fatal(err)
		}
		if len(f.Result().Sources) == 0 {
			b.Fatal("nothing found")
		}
	}
	b.ReportMetric(seconds*float64(b.N)/b.Elapsed().Seconds(), "x-realtime")
}
