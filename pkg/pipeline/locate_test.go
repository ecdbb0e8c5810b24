package pipeline

import (
	"context"
	"errors"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

func (s scene) locate(search Search, o Options) (*Located, error) {
	return Locate(context.Background(), Spec{Take: []string{s.take}, RigPath: s.rig, Options: o, Version: "test"}, search, Watch{})
}

func (s scene) mustLocate(t *testing.T, search Search, o Options) *Located {
	t.Helper()
	r, err := s.locate(search, o)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// Both talkers are found, dominant first, and steering picks the same ones.
func TestLocateFindsWhatSteeringPicks(t *testing.T) {
	s := sceneFrom(t, "heading_deg: 30\n"+ringOfEight, twoTalkers)
	r := s.mustLocate(t, Search{}, Options{})
	if len(r.Sources) != 2 || r.Schema != LocateSchema || r.Take.SampleRateHz != 16000 || r.Rig.MicrophonesUsed != 8 || r.Ambiguity == "" {
		t.Fatalf("%+v", r)
	}
	for i, want := range []float64{-40, 75} {
		b := r.Sources[i]
		if e := math.Abs(rig.WrapDeg(b.AzimuthDeg - want)); e > 2 {
			t.Errorf("source %d at %.2f°, want %g°", i+1, b.AzimuthDeg, want)
		}
		// +y is 30° clockwise from north, so azimuth 90 is heading 30.
		if b.CompassDeg == nil || math.Abs(rig.WrapDeg(*b.CompassDeg-(120-b.AzimuthDeg))) > 1e-9 {
			t.Errorf("source %d: compass %v for azimuth %.2f°", i+1, b.CompassDeg, b.AzimuthDeg)
		}
		if b.StandardErrorDeg == nil || b.ElevationErrorDeg == nil || b.Interval95Deg == nil || *b.Interval95Deg < *b.StandardErrorDeg || b.DistanceM != nil {
			t.Errorf("source %d: %+v", i+1, b)
		}
		steered := s.must(t, Options{Toward: TowardAuto, Pick: i + 1, NoMeasure: true, Reports: "none", Overwrite: true})
		if steered.Direction.AzimuthDeg != b.AzimuthDeg || *steered.Direction.StandardErrorDeg != *b.StandardErrorDeg {
			t.Errorf("source %d at %.4f°, steering takes %.4f°", i+1, b.AzimuthDeg, steered.Direction.AzimuthDeg)
		}
		if b.Track < 1 || b.Track > len(r.Tracks) {
			t.Errorf("source %d has track %d of %d", i+1, b.Track, len(r.Tracks))
		}
	}
	if len(r.Windows) < 15 || len(r.Picture.AnglesDeg) != len(r.Picture.LevelDB) || len(r.Picture.LevelDB) < 100 {
		t.Errorf("%d windows, picture of %d angles and %d levels", len(r.Windows), len(r.Picture.AnglesDeg), len(r.Picture.LevelDB))
	}
	top := 0
	for i, v := range r.Picture.LevelDB {
		if v > r.Picture.LevelDB[top] {
			top = i
		}
	}
	if a := r.Picture.AnglesDeg[top]; math.Abs(rig.WrapDeg(a+40)) > 6 && math.Abs(rig.WrapDeg(a-75)) > 6 {
		t.Errorf("the picture is loudest at %.0f°", a)
	}
}

// The options of the search are heeded.
func TestSearchOptionsAreHeeded(t *testing.T) {
	s := sceneFrom(t, ringOfEight, twoTalkers)
	r := s.mustLocate(t, Search{Window: 1, Hop: 0.25, FromHz: 500, ToHz: 2500, Sources: 1}, Options{})
	u := r.Search
	if math.Abs(u.WindowS-1) > 0.05 || math.Abs(u.HopS-0.25) > 0.03 || u.FromHz != 500 || u.ToHz != 2500 || u.Sources != 1 {
		t.Errorf("%+v", u)
	}
	for _, w := range r.Windows {
		if len(w.Sources) > 1 {
			t.Errorf("%d sources in a window, want one", len(w.Sources))
		}
	}
	// Seen from microphone M1 and in other air the answer is another one.
	base := s.mustLocate(t, Search{}, Options{})
	fast := 400.0
	if other := s.mustLocate(t, Search{}, Options{SpeedOfSound: &fast}); other.Sources[0].AzimuthDeg == base.Sources[0].AzimuthDeg || other.Rig.SpeedOfSoundMS != 400 {
		t.Errorf("speed of sound: %+v", other.Sources[0])
	}
	if other := s.mustLocate(t, Search{}, Options{ReferencePoint: "M1"}); other.Rig.Reference != "M1" {
		t.Errorf("reference point %q", other.Rig.Reference)
	}
}

func TestSearchRefusesWhatCannotBe(t *testing.T) {
	s := newScene(t, 1, wav.PCM24)
	for _, c := range []struct {
		search Search
		want   []string
	}{
		{Search{Window: 0.001}, []string{"--window 0.001: want 0.02 to 60 s"}},
		{Search{Window: -1, Hop: 100, Sources: 9}, []string{"--window -1", "--hop 100", "--sources 9: want 1 to 8"}},
		{Search{Window: 0.2, Hop: 0.3}, []string{"would be skipped"}},
		{Search{FromHz: 3000, ToHz: 200}, []string{"no frequency lies between"}},
		{Search{Window: math.NaN()}, []string{"--window NaN"}},
		{Search{ToHz: 9000}, []string{"rig four in a row: no direction can be searched for", "9000 Hz is above half the rate, 8000 Hz"}},
		{Search{FromHz: 1000, ToHz: 1010}, []string{"lines of the transform"}},
	} {
		_, err := s.locate(c.search, Options{})
		var usage *UsageError
		if !errors.As(err, &usage) {
			t.Errorf("%+v: %v, want a *UsageError", c.search, err)
			continue
		}
		for _, w := range c.want {
			if !strings.Contains(err.Error(), w) {
				t.Errorf("%+v: %v, want %q", c.search, err, w)
			}
		}
	}
}

// Nothing found is an answer with its reason, and no error.
func TestLocateAnswersWhereNothingIsFound(t *testing.T) {
	s := scene{dir: t.TempDir()}
	s.take, s.rig = filepath.Join(s.dir, "take.wav"), writeText(t, filepath.Join(s.dir, "four.yaml"), fourLine)
	writeWAV(t, s.take, sceneRate, wav.PCM24, audio.NewBlock(4, 2*sceneRate))
	r := s.mustLocate(t, Search{}, Options{})
	if len(r.Sources) != 0 || r.Sources == nil || len(r.Tracks) != 0 || r.Tracks == nil || len(r.Picture.LevelDB) != 0 || len(r.Windows) == 0 {
		t.Errorf("silence: %+v", r)
	}
	f := foundIn(r.Findings, "no-direction")
	if f == nil || f.Severity != Warning || !strings.HasPrefix(f.Message, "no direction found: silence") {
		t.Errorf("finding %+v", f)
	}
	for _, w := range r.Windows {
		if w.Reason == "" || w.Sources == nil {
			t.Errorf("window %+v without a reason", w)
		}
	}
	writeWAV(t, s.take, sceneRate, wav.PCM24, audio.NewBlock(4, 0))
	if _, err := s.locate(Search{}, Options{}); err == nil || !strings.Contains(err.Error(), "holds no sound") {
		t.Errorf("a take without frames: %v", err)
	}
	writeWAV(t, s.take, sceneRate, wav.PCM24, audio.NewBlock(3, 100))
	if _, err := s.locate(Search{}, Options{}); err == nil || !strings.Contains(err.Error(), "the take has 3 channels") {
		t.Errorf("a take of three channels: %v", err)
	}
	writeText(t, s.rig, "rig: one place\nmicrophones:\n  - {name: A, channel: 1, at_mm: [0, 0, 0]}\n")
	var usage *UsageError
	if _, err := s.locate(Search{}, Options{}); !errors.As(err, &usage) {
		t.Errorf("a rig of one microphone: %v", err)
	}
}

// A walk through 90° in 10 s in diffuse noise: within 3° RMS.
func TestLocateFollowsAWalk(t *testing.T) {
	s := sceneFrom(t, ringOfEight, walker)
	r := s.mustLocate(t, Search{}, Options{})
	if len(r.Sources) == 0 || !r.Sources[0].Moves || r.Sources[0].Track != 1 {
		t.Fatalf("sources %+v", r.Sources)
	}
	sum, n := 0.0, 0
	for _, k := range r.Tracks[0].Knots {
		truth, err := s.render.Heard("walker", k.TimeS)
		if err != nil {
			t.Fatal(err)
		}
		e := rig.WrapDeg(k.AzimuthDeg - truth.AzimuthDeg())
		sum, n = sum+e*e, n+1
	}
	rms := math.Sqrt(sum / float64(n))
	t.Logf("%.2f° RMS over %d knots, span %.1f°", rms, n, r.Tracks[0].SpanDeg)
	if rms > 3 || n < 40 || math.Abs(r.Tracks[0].SpanDeg-86) > 8 {
		t.Errorf("track: %.2f° RMS over %d knots, span %.1f°, want at most 3° and about 86°", rms, n, r.Tracks[0].SpanDeg)
	}
	if f := foundIn(r.Findings, "source-moves"); f == nil {
		t.Error("no finding says that the source moves")
	}
}

// Two real takes of a loudspeaker in a room on a line of eight; truth from the
// delays between neighbours fitted with a spherical wave (README of the
// recordings): 88.2° and 1.15 m, 35.2° and 1.55 m. Channel 1 is dead in the
// second.
func TestLocateRealLine(t *testing.T) {
	data := filepath.Join(dataDir(t), "line8-room")
	for _, c := range []struct {
		name            string
		angle, distance float64
		dead            bool
	}{{"noise_rec_one.wav", 88.2, 1.15, false}, {"noise_rec_two.wav", 35.2, 1.55, true}} {
		s := scene{dir: t.TempDir(), take: filepath.Join(data, c.name)}
		s.rig = writeText(t, filepath.Join(s.dir, "line.yaml"), longLine)
		r := s.mustLocate(t, Search{}, Options{})
		if len(r.Sources) == 0 {
			t.Errorf("%s: nothing found: %+v", c.name, r.Findings)
			continue
		}
		b := r.Sources[0]
		if math.Abs(b.AzimuthDeg-c.angle) > 1.5 {
			t.Errorf("%s: %.2f°, want %.1f° within 1.5°", c.name, b.AzimuthDeg, c.angle)
		}
		if b.DistanceM == nil || math.Abs(*b.DistanceM/c.distance-1) > 0.15 {
			t.Errorf("%s: distance %s m, want %.2f within 15 %%", c.name, show(b.DistanceM), c.distance)
		}
		f := foundIn(r.Findings, "dead-channel")
		if (f != nil) != c.dead || f != nil && (len(f.Channels) != 1 || f.Channels[0] != 1) {
			t.Errorf("%s: dead channel %+v", c.name, f)
		}
		t.Logf("%s: %.2f° ± %s°, %s ± %s m", c.name, b.AzimuthDeg, show(b.StandardErrorDeg), show(b.DistanceM), show(b.DistanceErrorM))
		near := s.must(t, Options{Focus: TowardAuto, Out: filepath.Join(s.dir, "near.wav"), IsolatedTarget: s.take})
		if near.Steer.DistanceM == nil || math.Abs(*near.Steer.DistanceM/c.distance-1) > 0.15 {
			t.Errorf("%s: focused %s m away, want %.2f", c.name, show(near.Steer.DistanceM), c.distance)
		}
	}
}
