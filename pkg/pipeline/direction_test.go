package pipeline

import (
	"bytes"
	"errors"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
	"alidade/pkg/wav"
)

const (
	ringOfEight = "rig: ring of eight\nring: {count: 8, radius_mm: 60}\n"
	lineOfEight = "rig: line of eight\nline: {count: 8, spacing_mm: 40}\n"
	longLine    = "rig: long line\nline: {count: 8, spacing_mm: 120}\n"
)

// sceneRendered is a scenario on disk: take, isolated parts and rig.
type sceneRendered struct {
	scene
	noise, target string
	render        *scenario.Rendering
}

// sceneFrom makes a take of a rig file and the rest of a scenario file.
func sceneFrom(t testing.TB, rigText, rest string) sceneRendered {
	t.Helper()
	s := sceneRendered{scene: scene{dir: t.TempDir()}}
	path := func(name string) string { return filepath.Join(s.dir, name) }
	s.take, s.rig, s.noise, s.target = path("take.wav"), path("rig.yaml"), path("noise.wav"), path("target.wav")
	if err := os.WriteFile(s.rig, []byte(rigText), 0o666); err != nil {
		t.Fatal(err)
	}
	sc, err := scenario.Load("scene.yaml", []byte("scenario: test\nrig_file: rig.yaml\n"+rest), func(string) (io.ReadCloser, error) { return os.Open(s.rig) })
	if err != nil {
		t.Fatal(err)
	}
	if s.render, err = sc.Render(scenario.Options{}); err != nil {
		t.Fatal(err)
	}
	for name, src := range map[string]audio.Source{s.take: s.render.Mix(), s.noise: s.render.Noise(), s.target: s.render.Target()} {
		b, err := audio.ReadAll(src)
		if err != nil {
			t.Fatal(err)
		}
		writeWAV(t, name, s.render.Format().Rate, wav.Float32, b)
	}
	return s
}

const twoTalkers = `rate_hz: 16000
duration_s: 4
seed: 5
sources:
  - {name: near, kind: talker, hz: 120, at: {azimuth_deg: -40}, level_dbfs: -24}
  - {name: other, role: interferer, kind: talker, hz: 190, at: {azimuth_deg: 75}, level_dbfs: -28}
sensor_dbfs: -60
`

// foundIn returns the finding of a code, nil if there is none.
func foundIn(list []Finding, code string) *Finding {
	for k := range list {
		if list[k].Code == code {
			return &list[k]
		}
	}
	return nil
}

// A source that is found and a direction that is given make the same track, and
// the report says where the direction comes from.
func TestSteersToWhatIsFound(t *testing.T) {
	s := sceneFrom(t, ringOfEight, twoTalkers)
	for _, c := range []struct {
		pick  int
		want  float64
		name  string
		shown string
	}{{0, -40, "take_auto.wav", "source 1 of 2"}, {1, -40, "take_auto.wav", "source 1 of 2"}, {2, 75, "take_auto2.wav", "source 2 of 2"}} {
		r := s.must(t, Options{Toward: TowardAuto, Pick: c.pick, Overwrite: true})
		d := r.Direction
		if d == nil || d.StandardErrorDeg == nil || d.Confidence == nil {
			t.Fatalf("pick %d: direction %+v", c.pick, d)
		}
		if e := math.Abs(rig.WrapDeg(d.AzimuthDeg - c.want)); e > 2 || e > 4**d.StandardErrorDeg+0.3 {
			t.Errorf("pick %d: found at %.2f° ± %.2f°, want %g°", c.pick, d.AzimuthDeg, *d.StandardErrorDeg, c.want)
		}
		if r.Steer.Kind != "estimated" || r.Steer.AzimuthDeg != d.AzimuthDeg || r.Steer.Method != MethodSpectral {
			t.Errorf("pick %d: steered by %s to %.2f° with %s", c.pick, r.Steer.Kind, r.Steer.AzimuthDeg, r.Steer.Method)
		}
		if got := filepath.Base(r.Output.Path); got != c.name {
			t.Errorf("pick %d: the track is %s, want %s", c.pick, got, c.name)
		}
		heard := 0
		for i, w := range d.Windows {
			if !(w.EndS > w.StartS) || i > 0 && !(w.StartS > d.Windows[i-1].StartS) {
				t.Errorf("window %d from %g to %g s", i, w.StartS, w.EndS)
			}
			if w.AzimuthDeg != nil {
				heard++
				if math.Abs(rig.WrapDeg(*w.AzimuthDeg-c.want)) > 25 {
					t.Errorf("pick %d, window at %.1f s: %.1f° is not that source", c.pick, w.StartS, *w.AzimuthDeg)
				}
			} else if w.ElevationDeg != nil || w.StandardErrorDeg != nil || w.Confidence != nil {
				t.Errorf("window at %.1f s: no azimuth, and the rest is there", w.StartS)
			}
		}
		if heard < 3 || len(d.Windows) < 15 {
			t.Errorf("pick %d: heard in %d of %d windows", c.pick, heard, len(d.Windows))
		}
		if f := foundIn(r.Findings, "direction-found"); f == nil || !strings.Contains(f.Message, c.shown) {
			t.Errorf("pick %d: finding %+v", c.pick, f)
		}
		given := s.must(t, Options{Toward: strconv.FormatFloat(d.AzimuthDeg, 'g', -1, 64) + "," + strconv.FormatFloat(d.ElevationDeg, 'g', -1, 64), Out: filepath.Join(s.dir, "given.wav"), Overwrite: true})
		if given.Direction != nil || given.Steer.Kind != "given" {
			t.Errorf("a given direction is reported as %s with %+v", given.Steer.Kind, given.Direction)
		}
		a, _ := readWAV(t, r.Output.Path)
		b, _ := readWAV(t, given.Output.Path)
		// An ulp of the angle apart: far below the float32 of the track.
		if db := differenceDB(a.Channel(0), b.Channel(0)); db > -120 {
			t.Errorf("pick %d: the track of the direction found differs from the given one's by %.1f dB", c.pick, db)
		}
	}
	_, err := s.run(Options{Toward: TowardAuto, Pick: 6, Out: filepath.Join(s.dir, "none.wav")})
	var hinted *HintedError
	if !errors.As(err, &hinted) || !strings.Contains(err.Error(), "--pick 6: 2 sources were found") {
		t.Errorf("pick beyond the sources: %v", err)
	}
	if _, err := os.Stat(filepath.Join(s.dir, "none.wav")); !errors.Is(err, os.ErrNotExist) {
		t.Error("a track of no direction is left behind")
	}
	d := s.must(t, Options{Toward: TowardAuto, Overwrite: true}).Direction
	var usage *UsageError
	null := strconv.FormatFloat(d.AzimuthDeg, 'f', 4, 64) + "," + strconv.FormatFloat(d.ElevationDeg, 'f', 4, 64)
	if _, err := s.run(Options{Toward: TowardAuto, Null: []string{null}, Overwrite: true}); !errors.As(err, &usage) || !strings.Contains(err.Error(), "cannot be deaf") {
		t.Errorf("a null where the source was found: %v", err)
	}
}

// differenceDB is the level of a-b re that of b.
func differenceDB(a, b []float32) float64 {
	num, den := 0.0, 0.0
	for i := range b {
		d := float64(a[i]) - float64(b[i])
		num += d * d
		den += float64(b[i]) * float64(b[i])
	}
	return 10 * math.Log10(num/den)
}

// Same bytes from --toward auto and follow from blocks of any size.
func TestFoundDirectionsGiveTheSameBytes(t *testing.T) {
	s := sceneFrom(t, lineOfEight, strings.Replace(walker, "duration_s: 10", "duration_s: 3", 1))
	for _, toward := range []string{TowardAuto, TowardFollow} {
		var want []byte
		for _, block := range []int{0, 7, 1 << 16} {
			s.must(t, Options{Toward: toward, BlockFrames: block, Overwrite: true, Out: filepath.Join(s.dir, "y.wav")})
			var got []byte
			for _, name := range []string{"y.wav", "y.report.json"} {
				data, err := os.ReadFile(filepath.Join(s.dir, name))
				if err != nil {
					t.Fatal(err)
				}
				got = append(got, data...)
			}
			if want == nil {
				want = got
			}
			if !bytes.Equal(got, want) {
				t.Errorf("%s: blocks of %d: other bytes", toward, block)
			}
		}
	}
}

// walker goes through 90° in 10 s, in noise from all sides.
const walker = `rate_hz: 16000
duration_s: 10
seed: 11
sources:
  - name: walker
    kind: noise
    spectrum: speech
    path: [{at_s: 0, azimuth_deg: 45}, {at_s: 10, azimuth_deg: 135}]
    level_dbfs: -26
diffuse:
  - {level_dbfs: -32, spectrum: speech}
sensor_dbfs: -60
`

// The wave of a loudspeaker 1.2 m from a line 0.84 m long is curved: its point
// is found and focused on. A far one has none, and that is said.
func TestFocusesOnThePointThatIsFound(t *testing.T) {
	near := `rate_hz: 16000
duration_s: 4
seed: 3
sources:
  - {name: near, kind: talker, at: {azimuth_deg: 70, distance_m: 1.2}, level_dbfs: -24}
sensor_dbfs: -65
`
	s := sceneFrom(t, longLine, near)
	r := s.must(t, Options{Focus: TowardAuto})
	d := r.Direction
	if d == nil || d.DistanceM == nil || math.Abs(*d.DistanceM-1.2) > 0.12 || math.Abs(d.AzimuthDeg-70) > 1.5 {
		t.Fatalf("found %+v, want 70° and 1.2 m", d)
	}
	p := r.Steer.PointM
	if r.Steer.Kind != "focus-estimated" || p == nil {
		t.Fatalf("steered by %s to %v", r.Steer.Kind, p)
	}
	want := rig.Degrees(70, 0).Unit().Scale(1.2)
	if e := (rig.Point{X: p[0], Y: p[1], Z: p[2]}).Distance(want); e > 0.12 {
		t.Errorf("focused on %v, %.2f m from the source", *p, e)
	}
	if filepath.Base(r.Output.Path) != "take_auto.wav" {
		t.Errorf("the track is %s", r.Output.Path)
	}
	auto := s.must(t, Options{Toward: TowardAuto, Overwrite: true})
	if f := foundIn(auto.Findings, "near-field"); f == nil || !strings.Contains(f.Message, "--focus auto") {
		t.Errorf("steered to a near source: finding %+v", f)
	}
	far := sceneFrom(t, longLine, strings.Replace(near, ", distance_m: 1.2", "", 1))
	_, err := far.run(Options{Focus: TowardAuto})
	var hinted *HintedError
	if !errors.As(err, &hinted) || !strings.Contains(err.Error(), "not measurably curved") || !strings.Contains(hinted.Hint, "--toward auto") {
		t.Errorf("a far source: %v", err)
	}
	// The short line cannot tell any distance.
	short := sceneFrom(t, fourLine, near)
	if _, err := short.run(Options{Focus: TowardAuto}); !errors.As(err, &hinted) {
		t.Errorf("a rig too short for a distance: %v", err)
	}
}

// Where nothing is found nothing is written, and the error says why.
func TestNothingFoundWritesNothing(t *testing.T) {
	silent := audio.NewBlock(4, 3*sceneRate)
	alone := audio.NewBlock(4, 3*sceneRate)
	rng := rand.New(rand.NewPCG(9, 9))
	for ch := range 4 {
		x := alone.Channel(ch)
		for i := range x {
			x[i] = float32(0.05 * rng.NormFloat64())
		}
	}
	short := audio.NewBlock(4, 5)
	short.Channel(1)[2] = 0.1
	for name, b := range map[string]audio.Block{"silence": silent, "own noise": alone, "five frames": short} {
		for _, o := range []Options{{Toward: TowardAuto}, {Toward: TowardFollow}, {Focus: TowardAuto}} {
			s := scene{dir: t.TempDir()}
			s.take, s.rig = filepath.Join(s.dir, "take.wav"), writeText(t, filepath.Join(s.dir, "four.yaml"), fourLine)
			writeWAV(t, s.take, sceneRate, wav.PCM24, b)
			_, err := s.run(o)
			var hinted *HintedError
			if !errors.As(err, &hinted) || !strings.Contains(err.Error(), "no direction to steer to: ") {
				t.Errorf("%s, %+v: %v", name, o, err)
			}
			s.onlyInputs(t)
		}
	}
}

// A dead channel is left out of the search and named, kept in the beam or not;
// the direction stands.
func TestDeadChannelDoesNotBendTheDirection(t *testing.T) {
	s := sceneFrom(t, ringOfEight, twoTalkers+"faults:\n  - {channels: [3], dead: true}\n")
	r := s.must(t, Options{Toward: TowardAuto, Out: filepath.Join(s.dir, "left.wav")})
	if d := r.Direction; math.Abs(rig.WrapDeg(d.AzimuthDeg+40)) > 2 || r.Rig.MicrophonesUsed != 7 {
		t.Errorf("found at %.1f° with %d microphones, want -40° with 7", d.AzimuthDeg, r.Rig.MicrophonesUsed)
	}
	r = s.must(t, Options{Toward: TowardAuto, KeepDead: true})
	if d := r.Direction; math.Abs(rig.WrapDeg(d.AzimuthDeg+40)) > 2 {
		t.Errorf("found at %.1f°, want -40°", d.AzimuthDeg)
	}
	f := foundIn(r.Findings, "dead-channel")
	if f == nil || len(f.Channels) != 1 || f.Channels[0] != 3 || f.Severity != Warning || !strings.Contains(f.Message, "channel 3 is") {
		t.Errorf("finding %+v", f)
	}
}

// The corrections of the rig are those of the search too, and microphones that
// it leaves out are not heard.
func TestSearchHeedsTheRigFile(t *testing.T) {
	text := "rig: corrected ring\nmicrophones:\n"
	for m := range 8 {
		a := 2 * math.Pi * float64(m) / 8
		extra := []string{"", ", delay_us: 150", ", polarity: inverted", "", ", delay_us: -220, gain_db: 6", "", "", ", use: false"}[m]
		text += "  - {name: R" + strconv.Itoa(m+1) + ", channel: " + strconv.Itoa(8-m) + ", at_mm: [" +
			strconv.FormatFloat(60*math.Cos(a), 'f', 6, 64) + ", " + strconv.FormatFloat(60*math.Sin(a), 'f', 6, 64) + ", 0]" + extra + "}\n"
	}
	s := sceneFrom(t, text, twoTalkers)
	r := s.must(t, Options{Toward: TowardAuto})
	if d := r.Direction; math.Abs(rig.WrapDeg(d.AzimuthDeg+40)) > 2 || *d.Confidence < 0.3 {
		t.Errorf("found at %.1f° with confidence %.2f, want -40°", d.AzimuthDeg, *d.Confidence)
	}
	if f := foundIn(r.Findings, "channel-misfit"); f != nil {
		t.Errorf("a rig file that is right: %+v", f)
	}
}

// What cannot be is refused before a file is opened.
func TestOptionsOfFoundDirections(t *testing.T) {
	floor := 3.0
	for _, c := range []struct {
		o    Options
		want string // in the error; empty for none
	}{
		{Options{Toward: "auto"}, ""},
		{Options{Focus: "auto", UndoSpreading: true}, ""},
		{Options{Toward: "follow", Method: "farrow", Taper: "hann"}, ""},
		{Options{Toward: "auto", Pick: 8}, ""},
		{Options{Toward: "auto", Weights: WeightsSuperdirective}, ""},
		{Options{Toward: "auto", Focus: "auto"}, "a beam points to one place"},
		{Options{Toward: "auto", Pick: 9}, "--pick 9: want 1 to 8"},
		{Options{Toward: "auto", Pick: -1}, "--pick -1: want 1 to 8"},
		{Options{Toward: "60", Pick: 2}, "--pick 2 with a direction or point that is given"},
		{Options{Toward: "follow", Method: "spectral"}, "--toward follow with --method spectral: delays that glide need the method farrow"},
		{Options{Toward: "follow", Method: "sinc"}, "need the method farrow"},
		{Options{Toward: "follow", Weights: WeightsSuperdirective}, "--toward follow with weights other than delay-and-sum"},
		{Options{Toward: "follow", Null: []string{"20"}}, "--toward follow with weights other than delay-and-sum or with nulls"},
		{Options{Toward: "follow", WhiteNoiseGainFloorDB: &floor}, "a floor belongs to weights"},
		{Options{Toward: "follow", Postfilter: "diffuse"}, "--toward follow with --postfilter diffuse"},
		{Options{Toward: "follow", UndoSpreading: true}, "--undo-spreading needs a point"},
		{Options{Focus: "follow"}, `--focus "follow"`},
		{Options{Toward: "Auto"}, `--toward "Auto"`},
	} {
		err := c.o.Validate()
		if c.want == "" && err != nil || c.want != "" && (err == nil || !strings.Contains(err.Error(), c.want)) {
			t.Errorf("%+v: %v, want %q", c.o, err, c.want)
		}
	}
}
