package calibration

import (
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
)

// compare runs Channels over a take from the given direction.
func (f *faulty) compare(t *testing.T, az, el float64, known []rig.Mic, o Options) (*Relative, error) {
	t.Helper()
	e, err := Expect(f.rig.Positions(), f.rig.ReferencePoint(), rig.Degrees(az, el), math.Inf(1), f.speed, Doubt{Direction: 0.5 * deg})
	if err != nil {
		t.Fatal(err)
	}
	return Channels(f.open, e, known, o)
}

// refused expects a refusal that says want.
func refused(t *testing.T, what string, err error, want string) {
	t.Helper()
	var r *RefusedError
	if !errors.As(err, &r) || !strings.Contains(r.Why, want) {
		t.Errorf("%s: %v, want a refusal that says %q", what, err, want)
	}
}

func TestTakesThatCannotCarryIt(t *testing.T) {
	tone := []scenario.Source{{Name: "whistle", Kind: scenario.KindTone, Hz: 1000, LevelDBFS: num(-20), At: &scenario.Place{AzimuthDeg: num(60)}}}
	_, err := makeFaulty(t, solid8(0.08), 1, tone, -60, 0.4, nil).compare(t, 60, 0, nil, Options{})
	refused(t, "a tone", err, "a tone has no delay")

	f := makeFaulty(t, solid8(0.08), 2, wideband(60, 0), -40, 0.3, nil)
	var right []rig.Mic
	for m := range f.delay {
		right = append(right, rig.Mic{Delay: -f.delay[m] + 1e-6*float64(m%3), Inverted: f.inverse[m]})
	}
	for _, off := range [][2]float64{{66, 0}, {60, 8}, {60, 70}} {
		_, err = f.compare(t, off[0], off[1], right, Options{})
		refused(t, fmt.Sprint("from ", off), err, "azimuth ")
	}
	// Within the doubt about the direction nothing is refused.
	if _, err = f.compare(t, 60.8, -0.5, right, Options{}); err != nil {
		t.Errorf("0.9° off with a standard uncertainty of 0.5°: %v", err)
	}

	_, err = makeFaulty(t, solid8(0.08), 3, nil, -40, 0.5, nil).compare(t, 60, 0, nil, Options{})
	refused(t, "no source", err, "no two channels")

	_, err = makeFaulty(t, solid8(0.08), 4, wideband(60, 0), -4, 0.3, nil).compare(t, 60, 0, nil, Options{})
	refused(t, "-16 dB signal-to-noise", err, "")

	_, err = makeFaulty(t, solid8(0.08), 5, nil, -80, 0.6, func(s *scenario.Scenario) {
		s.Diffuse = []scenario.Diffuse{{LevelDBFS: -30}}
	}).compare(t, 60, 0, nil, Options{})
	refused(t, "diffuse noise", err, "")
}

// A direction of chance must not be seen in channels that are merely late: of
// many rigs with delays at random, few are refused.
func TestLateChannelsAreNoOtherDirection(t *testing.T) {
	seeds := 3
	if long() {
		seeds = 60
	}
	wrong := 0
	for seed := range seeds {
		f := makeFaulty(t, solid8(0.06), uint64(300+seed), wideband(20, 0), -45, 0.3, nil)
		if _, err := f.compare(t, 20, 0, nil, Options{}); err != nil {
			wrong++
		}
	}
	if float64(wrong) > 0.02*float64(seeds) {
		t.Errorf("%d of %d takes from the right direction refused", wrong, seeds)
	}
}

// Corrections that the rig has already are found again, not added twice, and a
// dead channel is left out without harm to the others.
func TestKnownCorrectionsAndADeadChannel(t *testing.T) {
	f := makeFaulty(t, solid8(0.08), 7, wideband(-30, 0), -50, 0.5, func(s *scenario.Scenario) {
		s.Faults = append(s.Faults, scenario.Fault{Channels: []int{3}, Dead: true})
	})
	plain, err := f.compare(t, -30, 0, nil, Options{})
	if err != nil {
		t.Fatal(err)
	}
	var mics []rig.Mic
	for m, at := range f.rig.Positions() {
		mics = append(mics, rig.Mic{At: at, Delay: -f.delay[m], Inverted: f.inverse[m]})
	}
	known, err := f.compare(t, -30, 0, mics, Options{})
	if err != nil {
		t.Fatal(err)
	}
	for m := range mics {
		a, b := plain.Channels[m], known.Channels[m]
		if heard := m != 2; a.Heard != heard || b.Heard != heard {
			t.Errorf("channel %d: heard %v and %v, want %v", m+1, a.Heard, b.Heard, heard)
		}
		if math.Abs(a.Late-b.Late) > 5e-9 || math.Abs(a.LevelDB-b.LevelDB) > 2e-3 {
			t.Errorf("channel %d: %.4f µs and %.4f dB, with known corrections %.4f µs and %.4f dB", m+1, 1e6*a.Late, a.LevelDB, 1e6*b.Late, b.LevelDB)
		}
	}
	if known.Misfit > 0.1e-6 {
		t.Errorf("misfit %.3f µs of a rig that is right, want below 0.1 µs", 1e6*known.Misfit)
	}
}

// In a room the direct sound of claps keeps within the bounds that a steady
// sound does not: reverberation time 0.4 s, 1.5 m away.
func TestClapsInARoom(t *testing.T) {
	sources := []scenario.Source{{Name: "clapper", Kind: scenario.KindClaps, LevelDBFS: num(-40), EveryS: 0.5, At: &scenario.Place{AzimuthDeg: num(35), DistanceM: 1.5}}}
	f := makeFaulty(t, solid8(0.08), 11, sources, -90, 2, func(s *scenario.Scenario) {
		s.Room = &scenario.Room{SizeM: []float64{6.1, 4.7, 2.9}, RigAtM: []float64{2.8, 2.1, 1.4}, RT60S: []float64{0.4}, MaxOrder: func() *int { n := 8; return &n }()}
	})
	e, err := Expect(f.rig.Positions(), f.rig.ReferencePoint(), rig.Degrees(35, 0), 1.5, f.speed, Doubt{})
	if err != nil {
		t.Fatal(err)
	}
	r, err := Channels(f.open, e, nil, Options{Claps: true})
	if err != nil {
		t.Fatal(err)
	}
	gain, late, _, _ := f.errors(r)
	g, d := 0.0, 0.0
	for m := range gain {
		g, d = math.Max(g, math.Abs(gain[m])), math.Max(d, math.Abs(late[m]))
		if r.Channels[m].Inverted != f.inverse[m] {
			t.Errorf("channel %d: inverted %v, want %v", m+1, r.Channels[m].Inverted, f.inverse[m])
		}
	}
	t.Logf("%d claps: gains within %.3f dB, delays within %.2f µs", r.Frames, g, 1e6*d)
	if r.Frames < 3 || g > 0.1 || d > 1e-6 {
		t.Errorf("%d claps, gains within %.3f dB, delays within %.2f µs: want 3 or more, 0.1 dB, 1 µs", r.Frames, g, 1e6*d)
	}
}

// The distance of a near source is in level and delay of what is expected.
func TestNearSource(t *testing.T) {
	sources := []scenario.Source{{Name: "box", Kind: scenario.KindNoise, LevelDBFS: num(-20), At: &scenario.Place{AzimuthDeg: num(100), DistanceM: 0.6}}}
	f := makeFaulty(t, solid8(0.08), 12, sources, -50, 0.5, nil)
	e, err := Expect(f.rig.Positions(), f.rig.ReferencePoint(), rig.Degrees(100, 0), 0.6, f.speed, Doubt{})
	if err != nil {
		t.Fatal(err)
	}
	r, err := Channels(f.open, e, nil, Options{})
	if err != nil {
		t.Fatal(err)
	}
	gain, late, _, _ := f.errors(r)
	for m := range gain {
		if math.Abs(gain[m]) > 0.02 || math.Abs(late[m]) > 0.1e-6 {
			t.Errorf("channel %d: gain off by %.3f dB, delay by %.3f µs", m+1, gain[m], 1e6*late[m])
		}
	}
}

// Two microphones: the power ratio, which is right where both have the same
// signal-to-noise ratio.
func TestTwoMicrophones(t *testing.T) {
	f := makeFaulty(t, []rig.Point{{X: -0.05}, {X: 0.05}}, 13, wideband(80, 0), -60, 0.5, nil)
	r, err := f.compare(t, 80, 0, nil, Options{})
	if err != nil {
		t.Fatal(err)
	}
	gain, late, _, _ := f.errors(r)
	if math.Abs(gain[0]) > 0.02 || math.Abs(late[0]) > 0.1e-6 {
		t.Errorf("gain off by %.3f dB, delay by %.3f µs", gain[0], 1e6*late[0])
	}
	if _, err := Channels(func() (audio.Source, error) { return audio.FromBlock(48000, audio.NewBlock(1, 10)), nil },
		&Expected{At: []rig.Point{{}}, Delay: []float64{0}, LevelDB: []float64{0}}, nil, Options{}); err == nil {
		t.Error("one microphone is compared with nothing")
	}
}
