package scenario

import (
	"errors"
	"math"
	"runtime"
	"strings"
	"sync"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
	"alidade/pkg/rig"
)

func number(v float64) *float64 { return &v }

func at(azimuth, distance float64) *Place {
	return &Place{AzimuthDeg: number(azimuth), DistanceM: distance}
}

// lineRig is a line of mics with channels from 1 on.
func lineRig(count int, spacing float64) *rig.Rig {
	r := &rig.Rig{Name: "line", Reference: rig.CentreReference}
	for m, p := range rig.Line(count, spacing) {
		r.Mics = append(r.Mics, rig.Mic{Name: string(rune('A' + m)), Channel: m + 1, At: p, Use: true})
	}
	return r
}

// busy has something of everything: near and far, still and moving, diffuse
// noise of both methods, and faults of every kind.
func busy() *Scenario {
	return &Scenario{
		Name: "busy", RateHz: 16000, DurationS: 0.7, Seed: 12, Rig: lineRig(4, 0.05), SensorDBFS: number(-70),
		Sources: []Source{
			{Name: "voice", Kind: KindTalker, At: at(70, 2), LevelDBFS: number(-25), OnS: [][]float64{{0.1, 0.6}}},
			{Name: "walker", Kind: KindNoise, Spectrum: SpectrumSpeech, LevelDBFS: number(-30), Path: []Waypoint{
				{AtS: 0, Place: *at(20, 0)}, {AtS: 0.6, Place: *at(50, 0)}}},
			{Name: "cart", Role: RoleInterferer, Kind: KindTone, Hz: 700, LevelDBFS: number(-30), Path: []Waypoint{
				{AtS: 0, Place: Place{PointM: []float64{-3, 2, 0}}}, {AtS: 0.7, Place: Place{PointM: []float64{3, 2, 0.5}}}}},
			{Name: "claps", Role: RoleInterferer, Kind: KindClaps, EveryS: 0.2, At: at(150, 4), LevelDBFS: number(-35)},
		},
		Diffuse: []Diffuse{{LevelDBFS: -40, Spectrum: SpectrumOutdoors}, {LevelDBFS: -45, Method: MethodWaves, Waves: 64}},
		Faults: []Fault{
			{Channels: []int{2}, GainDB: -3, DelayUS: 40, Polarity: "inverted", WindDBFS: number(-40), HandlingDBFS: number(-20)},
			{Channels: []int{3}, ClockPPM: 200, DC: 0.01, HumDBFS: number(-50), DropOuts: 2, RepeatedBlocks: 3, RepeatBlockFrames: 100},
			{Channels: []int{1}, SwapWith: 4, ClippedFraction: 0.01},
		},
	}
}

// roomy is a source that walks in a room, and one that stands.
func roomy() *Scenario {
	return &Scenario{
		Name: "roomy", RateHz: 16000, DurationS: 0.5, Seed: 3, Rig: lineRig(3, 0.06), SensorDBFS: number(-60),
		Room: &Room{SizeM: []float64{4, 5, 3}, RigAtM: []float64{1.8, 1.5, 1.2}, TurnDeg: 20, RT60S: []float64{0.2}},
		Sources: []Source{
			{Name: "walker", Kind: KindNoise, LevelDBFS: number(-30), Path: []Waypoint{
				{AtS: 0, Place: *at(60, 1.2)}, {AtS: 0.5, Place: *at(64, 1.2)}}},
			{Name: "fan", Role: RoleInterferer, Kind: KindNoise, Spectrum: SpectrumPink, At: at(120, 1.5), LevelDBFS: number(-40)},
		},
	}
}

func rendered(t testing.TB, s *Scenario) *Rendering {
	t.Helper()
	r, err := s.Render(Options{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// known returns the renderings of busy and roomy, made once: nothing changes one.
var known = sync.OnceValues(func() ([]*Rendering, error) {
	var all []*Rendering
	for _, sc := range []*Scenario{busy(), roomy()} {
		r, err := sc.Render(Options{})
		if err != nil {
			return nil, err
		}
		all = append(all, r)
	}
	return all, nil
})

// both returns the renderings of busy and roomy.
func both(t testing.TB) map[string]*Rendering {
	t.Helper()
	all, err := known()
	if err != nil {
		t.Fatal(err)
	}
	return map[string]*Rendering{"busy": all[0], "roomy": all[1]}
}

func whole(t testing.TB, src audio.Source) audio.Block {
	t.Helper()
	b, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func same(a, b audio.Block) bool {
	if a.Channels() != b.Channels() || a.Frames() != b.Frames() {
		return false
	}
	for ch := range a.Channels() {
		x, y := a.Channel(ch), b.Channel(ch)
		for i := range x {
			if math.Float32bits(x[i]) != math.Float32bits(y[i]) {
				return false
			}
		}
	}
	return true
}

// level returns the mean square of frames from..to of a channel, dBFS.
func level(b audio.Block, ch, from, to int) float64 {
	var e float64
	for _, v := range b.Channel(ch)[from:to] {
		e += float64(v) * float64(v)
	}
	return 10 * math.Log10(2*e/float64(to-from))
}

func TestTakesKeepTheContractOfASource(t *testing.T) {
	for name, r := range both(t) {
		want := whole(t, r.Mix())
		if int64(want.Frames()) != r.Frames() {
			t.Errorf("%s: %d frames, want %d", name, want.Frames(), r.Frames())
		}
		if name == "busy" {
			audiotest.TestSource(t, r.Mix, want, audiotest.Options{Rate: 16000, Sizes: []int{2048}})
		} else if again := whole(t, r.Mix()); !same(again, want) {
			t.Errorf("%s: other samples the second time", name)
		}
	}
}

func TestSamplesDoNotDependOnProcessors(t *testing.T) {
	old := runtime.GOMAXPROCS(1)
	one := whole(t, rendered(t, roomy()).Mix())
	runtime.GOMAXPROCS(2)
	two := whole(t, rendered(t, roomy()).Mix())
	runtime.GOMAXPROCS(old)
	if !same(one, two) {
		t.Error("one processor and two give different samples")
	}
}

func TestAnotherSeedGivesOtherNoise(t *testing.T) {
	a := roomy()
	b := roomy()
	b.Seed++
	if same(whole(t, rendered(t, a).Noise()), whole(t, rendered(t, b).Noise())) {
		t.Error("two seeds give the same noise")
	}
}

func TestEachRendersWhatTheSourcesDo(t *testing.T) {
	for scenario, r := range both(t) {
		var mix, target, noise audio.Collect
		err := r.Each(func(m, s, n audio.Block) error {
			return errors.Join(mix.Write(m), target.Write(s), noise.Write(n))
		})
		if err != nil {
			t.Fatal(err)
		}
		for name, v := range map[string][2]audio.Block{
			"mix":    {mix.Block(), whole(t, r.Mix())},
			"target": {target.Block(), whole(t, r.Target())},
			"noise":  {noise.Block(), whole(t, r.Noise())},
		} {
			if !same(v[0], v[1]) {
				t.Errorf("%s: %s of Each is not that of its source", scenario, name)
			}
		}
	}
	stop := errors.New("enough")
	if err := both(t)["roomy"].Each(func(_, _, _ audio.Block) error { return stop }); !errors.Is(err, stop) {
		t.Errorf("Each returned %v, want the error of fn", err)
	}
}

// Without clipping the parts add up to the take, within float32 rounding.
func TestTargetAndNoiseAddUpToTheMix(t *testing.T) {
	for _, sc := range []*Scenario{busy(), roomy()} {
		for i := range sc.Faults {
			sc.Faults[i].ClippedFraction = 0
		}
		r := rendered(t, sc)
		mix, target, noise := whole(t, r.Mix()), whole(t, r.Target()), whole(t, r.Noise())
		for ch := range mix.Channels() {
			for i, v := range mix.Channel(ch) {
				if d := math.Abs(float64(v) - float64(target.Channel(ch)[i]) - float64(noise.Channel(ch)[i])); d > 3e-7 {
					t.Fatalf("%s: channel %d, frame %d: parts are off by %g", sc.Name, ch+1, i, d)
				}
			}
		}
	}
}

// In a room the isolated direct sound and the rest of the target share one
// signal: taking the direct sound away leaves what the responses without it
// predict, and outdoors nothing.
func TestDirectSoundIsPartOfTheTarget(t *testing.T) {
	outdoors := roomy()
	outdoors.Room = nil
	direct := whole(t, both(t)["roomy"].Direct())
	open := rendered(t, outdoors)
	if !same(whole(t, open.Direct()), whole(t, open.Target())) {
		t.Error("outdoors the direct sound is not the whole target")
	}
	target := whole(t, both(t)["roomy"].Target())
	n := target.Frames()
	for ch := range target.Channels() {
		if d := level(target, ch, 0, n) - level(direct, ch, 0, n); d < 0.5 || d > 20 {
			t.Errorf("channel %d: reflections add %.1f dB, want some", ch+1, d)
		}
	}
	// Before the first reflection is there, target and direct sound are one; the
	// source is on from before frame 0, so a gate makes a beginning.
	gated := roomy()
	gated.Room.Absorption, gated.Room.RT60S, gated.Room.DryAir = []float64{0.4}, nil, true
	gated.Sources[0].Path = nil
	gated.Sources[0].At = at(60, 0.4)
	gated.Sources[0].OnS = [][]float64{{0.1, 0.5}}
	r := rendered(t, gated)
	d, all := whole(t, r.Direct()), whole(t, r.Target())
	for i := range 1600 + 30 { // the floor is 1.2 m below: 2.4 m of detour are 112 frames
		if x := math.Abs(float64(d.Channel(1)[i] - all.Channel(1)[i])); x > 1e-6 {
			t.Fatalf("frame %d: target and direct sound differ by %g before any reflection", i, x)
		}
	}
}

// Levels: white noise of -30 dBFS at the reference point has it at a far
// line's microphones; a near source loses 6.02 dB when twice as far.
func TestLevelsAreThoseAskedFor(t *testing.T) {
	sc := &Scenario{Name: "levels", RateHz: 16000, DurationS: 12, Seed: 5, Rig: lineRig(3, 1),
		Sources: []Source{
			{Name: "noise", Kind: KindNoise, At: at(90, 0), LevelDBFS: number(-30)},
		}}
	for _, kind := range []string{KindNoise, KindTalker, KindClaps, KindChirp, KindTone} {
		sc.Sources[0].Kind = kind
		b := whole(t, rendered(t, sc).Target())
		// 12 s of white noise at 16 kHz: 192000 values, 0.014 dB of spread.
		for ch := range 3 {
			if got := level(b, ch, 0, b.Frames()); math.Abs(got+30) > 0.07 {
				t.Errorf("%s: channel %d at %.3f dBFS, want -30", kind, ch+1, got)
			}
		}
	}
	sc.Sources[0].Kind = KindTone
	sc.Sources[0].At = &Place{PointM: []float64{2, 0, 0}} // 3, 2 and 1 m from the three
	b := whole(t, rendered(t, sc).Target())
	for ch, want := range []float64{-30 - 3.5218, -30, -30 + 6.0206} {
		if got := level(b, ch, 1600, b.Frames()-1600); math.Abs(got-want) > 0.01 {
			t.Errorf("near tone: channel %d at %.3f dBFS, want %.3f", ch+1, got, want)
		}
	}
}

// snr_db is over diffuse, sensor and interferer noise together: three equal
// ones stand 4.77 dB above each.
func TestSNRCountsAllNoise(t *testing.T) {
	sc := &Scenario{Name: "snr", RateHz: 16000, DurationS: 10, Seed: 5, Rig: lineRig(2, 0.05), SensorDBFS: number(-50),
		Diffuse: []Diffuse{{LevelDBFS: -50}},
		Sources: []Source{
			{Name: "tone", Kind: KindTone, Hz: 440, At: at(10, 0), SNRDB: number(6)},
			{Name: "hiss", Role: RoleInterferer, Kind: KindNoise, At: at(100, 0), LevelDBFS: number(-50)},
		}}
	r := rendered(t, sc)
	if got, want := r.Truth().Sources[0].LevelDBFS, -50+4.7712+6; math.Abs(got-want) > 1e-3 {
		t.Errorf("level of the target = %.4f dBFS, want %.4f", got, want)
	}
	m := r.NewMeter()
	if err := r.Each(func(mix, target, noise audio.Block) error { m.Add(mix, target, noise); return nil }); err != nil {
		t.Fatal(err)
	}
	for _, c := range m.Truth().ChannelTruth {
		if c.SNRDB == nil || math.Abs(*c.SNRDB-6) > 0.1 {
			t.Errorf("channel %d: SNR %v, want 6 dB", c.Channel, c.SNRDB)
		}
	}
}

func TestFreshNoiseIsOtherNoiseOfTheSameKind(t *testing.T) {
	sc := roomy()
	sc.DurationS = 4
	sc.Sources = sc.Sources[1:]
	r := rendered(t, sc)
	src, err := r.FreshNoise(6, 99)
	if err != nil {
		t.Fatal(err)
	}
	fresh, old := whole(t, src), whole(t, r.Noise())
	if fresh.Frames() != 96000 {
		t.Errorf("%d frames, want 96000", fresh.Frames())
	}
	if same(fresh.Slice(0, old.Frames()), old) {
		t.Error("fresh noise is the old one")
	}
	for ch := range fresh.Channels() {
		if d := level(fresh, ch, 0, fresh.Frames()) - level(old, ch, 0, old.Frames()); math.Abs(d) > 1 {
			t.Errorf("channel %d: fresh noise is %.2f dB louder", ch+1, d)
		}
	}
	again, err := r.FreshNoise(4, sc.Seed)
	if err != nil {
		t.Fatal(err)
	}
	if !same(whole(t, again), old) {
		t.Error("fresh noise of the same seed and length is other noise")
	}
	late := busy() // neither the voice nor the claps are on so early
	late.Sources[3].OnS = [][]float64{{0.2, 0.6}}
	if _, err := rendered(t, late).FreshNoise(0.05, 1); err != nil {
		t.Errorf("fresh noise shorter than the wait for its sources: %v", err)
	}
	for _, seconds := range []float64{0, -1, math.NaN(), 1e9} {
		if _, err := r.FreshNoise(seconds, 1); err == nil {
			t.Errorf("%g s of noise: no error", seconds)
		}
	}
}

// A recording comes out where it went in, at another rate too.
func TestFilesSoundAtTheirPlace(t *testing.T) {
	const hz = 500.0
	sc := &Scenario{Name: "file", RateHz: 48000, DurationS: 0.5, Seed: 5, Rig: lineRig(2, 0.1),
		Sources: []Source{{Name: "tape", Kind: KindFile, File: "a.wav", At: at(90, 0), LevelDBFS: number(-20)}}}
	sound := func(rate int, silent bool) Options {
		return Options{Sound: func(name string) (int, []float32, error) {
			x := make([]float32, rate)
			for i := range x {
				if !silent {
					x[i] = float32(math.Sin(2 * math.Pi * hz * float64(i) / float64(rate)))
				}
			}
			return rate, x, nil
		}}
	}
	for _, rate := range []int{48000, 16000} {
		r, err := sc.Render(sound(rate, false))
		if err != nil {
			t.Fatal(err)
		}
		b := whole(t, r.Target())
		for i := 4800; i < 20000; i++ {
			want := 0.1 * math.Sin(2*math.Pi*hz*float64(i)/48000)
			if got := float64(b.Channel(0)[i]); math.Abs(got-want) > 1e-5 {
				t.Fatalf("from %d Hz: frame %d = %.6f, want %.6f", rate, i, got, want)
			}
		}
	}
	long := *sc // the recording is over after its second: the level holds until then
	long.DurationS = 3
	r, err := long.Render(sound(48000, false))
	if err != nil {
		t.Fatal(err)
	}
	b := whole(t, r.Target())
	if got := level(b, 0, 0, 48000); math.Abs(got+20) > 0.01 {
		t.Errorf("recording at %.3f dBFS while it lasts, want -20", got)
	}
	if on := r.Truth().Sources[0].OnS; len(on) != 1 || math.Abs(on[0][1]-1) > 1e-9 {
		t.Errorf("the truth says it is on in %v, want 0 to 1 s", on)
	}
	if _, err := sc.Render(sound(48000, true)); err == nil || !strings.Contains(err.Error(), "silent") {
		t.Errorf("a silent recording: %v, want an error", err)
	}
	if _, err := sc.Render(Options{}); err == nil || !strings.Contains(err.Error(), "a.wav") {
		t.Errorf("nobody provides the recording: %v, want an error naming it", err)
	}
	gone := errors.New("gone")
	if _, err := sc.Render(Options{Sound: func(string) (int, []float32, error) { return 0, nil, gone }}); !errors.Is(err, gone) {
		t.Errorf("unreadable recording: %v, want its error", err)
	}
}

func TestTakesDoNotAllocateOnceWarm(t *testing.T) {
	sc := busy()
	sc.DurationS = 5
	src := rendered(t, sc).Mix()
	b := audio.NewBlock(4, 512)
	read := func() {
		if _, err := src.Read(b); err != nil {
			t.Fatal(err)
		}
	}
	for range 100 {
		read()
	}
	if n := testing.AllocsPerRun(40, read); n != 0 {
		t.Errorf("%g allocations a block, want 0", n)
	}
}
