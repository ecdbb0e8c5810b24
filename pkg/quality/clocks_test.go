package quality

import (
	"math"
	"os"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
)

// clocksOf are the clocks of a scene.
func clocksOf(t *testing.T, s scene) (*Clocks, string) {
	t.Helper()
	q, err := New(s.mics, 48000, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.Copy(s.rendered(t).Mix(), 4096, q); err != nil {
		t.Fatal(err)
	}
	return q.Clocks()
}

// The clock of the second half of the microphones runs 20 ppm fast, with a
// source that stays and with one that moves.
func TestClocksAreMeasured(t *testing.T) {
	if os.Getenv("ALIDADE_LONG") == "" {
		t.Skip("renders takes of 12 s: set ALIDADE_LONG=1")
	}
	az, far := 40.0, 75.0
	for _, c := range []struct {
		name   string
		mics   []rig.Mic
		source scenario.Source
		most   float64 // error, ppm
	}{
		{"still", line8(), scenario.Source{At: &scenario.Place{AzimuthDeg: &az}}, 0.08},
		{"moves", solid8(), scenario.Source{Path: []scenario.Waypoint{{AtS: 0, Place: scenario.Place{AzimuthDeg: &az}}, {AtS: 11, Place: scenario.Place{AzimuthDeg: &far}}}}, 0.3},
	} {
		t.Run(c.name, func(t *testing.T) {
			s := scene{mics: c.mics, seconds: 10, seed: 8, snrDB: 15, source: c.source, faults: []scenario.Fault{{Channels: []int{5, 6, 7, 8}, ClockPPM: 20}}}
			got, why := clocksOf(t, s)
			if got == nil {
				t.Fatal(why)
			}
			t.Logf("%+v", got)
			if len(got.Groups) != 2 || got.Moved != (c.name == "moves") {
				t.Errorf("%d clocks, moved %v", len(got.Groups), got.Moved)
			}
			for m, ppm := range got.PPM {
				want := 0.0
				if m >= 4 {
					want = 20
				}
				if math.Abs(ppm-want) > c.most {
					t.Errorf("microphone %d: %.3f ppm, want %g within %g", m+1, ppm, want, c.most)
				}
			}
		})
	}
}

// Slopes of a source that moves, and clocks, told apart by where the microphones
// stand; a regular ring, where two ways of sharing clocks explain them, says so.
func TestClocksThatCannotBeToldAreNot(t *testing.T) {
	for _, c := range []struct {
		mics  []rig.Mic
		twice bool
	}{{line8(), false}, {ring8(), true}, {solid8(), false}} {
		q, err := New(c.mics, 48000, Options{})
		if err != nil {
			t.Fatal(err)
		}
		j := &judgement{Inspector: q, result: &Result{}, dead: make([]bool, 8)}
		g := newGeometry(j, j.alive(), nil)
		slope := make([]float64, 8)
		for m := range slope {
			slope[m] = 13e-6*c.mics[m].At.X + 21e-6*c.mics[m].At.Y
			if m >= 4 {
				slope[m] += 20e-6
			}
		}
		groups, moved, twice := g.groups(slope, 0.05e-6)
		if twice != c.twice || !twice && (!moved || !alike(groups, [][]int{{0, 1, 2, 3}, {4, 5, 6, 7}})) {
			t.Errorf("%v: groups %v, moved %v, twice %v", c.mics[0].At, groups, moved, twice)
		}
		for m := range slope {
			slope[m] = 1e-5 * math.Sin(37*float64(m*m)+1)
		}
		if groups, _, _ := g.groups(slope, 0.05e-6); groups != nil {
			t.Errorf("as many clocks as microphones: %v", groups)
		}
	}
}

// Without a source nothing is measured, and the reason is said.
func TestClocksNeedASource(t *testing.T) {
	quiet := -90.0
	sc := &scenario.Scenario{Name: "take", RateHz: 48000, DurationS: 3, Seed: 3, SensorDBFS: &quiet,
		Diffuse: []scenario.Diffuse{{LevelDBFS: -40, Spectrum: scenario.SpectrumPink}},
		Rig:     &rig.Rig{Name: "rig", Mics: line8()}}
	r, err := sc.Render(scenario.Options{})
	if err != nil {
		t.Fatal(err)
	}
	q, err := New(line8(), 48000, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.Copy(r.Mix(), 4096, q); err != nil {
		t.Fatal(err)
	}
	if c, why := q.Clocks(); c != nil || why == "" {
		t.Errorf("%+v, %q", c, why)
	}
}
