package quality

import (
	"cmp"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
)

// microphones returns the microphones of a rig made of places.
func microphones(at []rig.Point) []rig.Mic {
	var mics []rig.Mic
	for i, p := range at {
		mics = append(mics, rig.Mic{Name: "M" + string(rune('1'+i)), Channel: i + 1, At: p, Use: true})
	}
	return mics
}

// The rigs of the tests.
func line8() []rig.Mic { return microphones(rig.Line(8, 0.04)) }
func ring8() []rig.Mic { return microphones(rig.Ring(8, 0.06)) }
func solid8() []rig.Mic {
	return microphones([]rig.Point{{X: .09, Y: 0, Z: -.03}, {X: 0, Y: .08, Z: .03}, {X: -.08, Y: .01, Z: -.04}, {X: .01, Y: -.09, Z: .05},
		{X: .05, Y: .05, Z: .07}, {X: -.05, Y: .06, Z: -.06}, {X: -.06, Y: -.05, Z: .06}, {X: .06, Y: -.06, Z: -.07}})
}

func deg(v float64) *float64 { return &v }

// scene is a take to be inspected.
type scene struct {
	rate    int // 48000 if 0
	mics    []rig.Mic
	seconds float64
	seed    uint64
	source  scenario.Source
	snrDB   float64 // against diffuse noise and the microphones' own
	room    bool
	faults  []scenario.Fault
	scale   float64
	air     *scenario.Air
}

// rendered returns the scene as a rendering: noise from one side, diffuse noise
// and noise of the microphones.
func (s scene) rendered(t *testing.T) *scenario.Rendering {
	t.Helper()
	source := s.source
	if source.Kind == "" {
		source.Kind = scenario.KindNoise
	}
	source.Name = "source"
	s.rate = cmp.Or(s.rate, 48000)
	if source.At == nil && source.Path == nil {
		source.At = &scenario.Place{AzimuthDeg: deg(35)}
	}
	level := -30.0
	source.LevelDBFS = &level
	sensor := level - s.snrDB - 10
	sc := &scenario.Scenario{Name: "take", RateHz: s.rate, DurationS: s.seconds, Seed: s.seed,
		Sources: []scenario.Source{source}, SensorDBFS: &sensor,
		Diffuse: []scenario.Diffuse{{LevelDBFS: level - s.snrDB, Spectrum: scenario.SpectrumPink}},
		Faults:  s.faults, PositionScale: s.scale, Air: s.air,
		Rig: &rig.Rig{Name: "rig", Mics: s.mics},
	}
	if s.room {
		sc.Room = &scenario.Room{SizeM: []float64{7, 5.5, 3}, RigAtM: []float64{3.1, 2.4, 1.3}, RT60S: []float64{0.4}}
		for i := range sc.Sources {
			if p := sc.Sources[i].At; p != nil && p.DistanceM == 0 {
				q := *p
				q.DistanceM = 1.5
				sc.Sources[i].At = &q
			}
		}
	}
	r, err := sc.Render(scenario.Options{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// inspect returns what an inspector finds in the scene.
func (s scene) inspect(t *testing.T) *Result {
	t.Helper()
	q, err := New(s.mics, cmp.Or(s.rate, 48000), Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.Copy(s.rendered(t).Mix(), 4096, q); err != nil {
		t.Fatal(err)
	}
	return q.Result()
}

// codes are the codes of the findings that are more than a remark.
func (r *Result) codes() (list []string) {
	for _, f := range r.Findings {
		if f.Severity != Info {
			list = append(list, f.Code)
		}
	}
	return list
}

// found reports a finding of a code about exactly these channels, all if none
// are given.
func (r *Result) found(code string, channels ...int) bool {
	hit := map[int]bool{}
	any := false
	for _, f := range r.Findings {
		if f.Code == code {
			any = true
			for _, c := range f.Channels {
				hit[c] = true
			}
		}
	}
	for _, c := range channels {
		if !hit[c] {
			return false
		}
	}
	return any && (len(channels) == 0 || len(hit) == len(channels))
}
