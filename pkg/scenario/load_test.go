package scenario

import (
	"errors"
	"io"
	"io/fs"
	"math"
	"reflect"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/sheet"
)

const small = `scenario: small
rate_hz: 16000
duration_s: 1
rig:
  line: {count: 3, spacing_mm: 40}
sources:
  - {name: a, kind: noise, at: {azimuth_deg: 30}, level_dbfs: -30}
`

func files(contents map[string]string) func(string) (io.ReadCloser, error) {
	return func(name string) (io.ReadCloser, error) {
		text, ok := contents[name]
		if !ok {
			return nil, fs.ErrNotExist
		}
		return io.NopCloser(strings.NewReader(text)), nil
	}
}

func TestDemoIsASoundScenario(t *testing.T) {
	sc, err := Load("demo.yaml", []byte(Demo()), nil)
	if err != nil {
		t.Fatal(err)
	}
	if len(sc.Rig.Mics) != 8 || sc.Rig.Mics[4].GainDB != 4.5 || math.Abs(sc.Rig.Mics[1].At.X+0.1) > 1e-12 {
		t.Errorf("rig of the demo = %+v", sc.Rig)
	}
	sc.DurationS = 5
	r := rendered(t, sc)
	m := r.NewMeter()
	peak := float32(0)
	err = r.Each(func(mix, target, noise audio.Block) error {
		m.Add(mix, target, noise)
		for ch := range mix.Channels() {
			for _, v := range mix.Channel(ch) {
				peak = max(peak, v, -v)
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if peak < 0.02 || peak >= 1 {
		t.Errorf("peak of the demo = %g, want a take that is neither faint nor clipped", peak)
	}
	c := m.Truth().ChannelTruth
	if d := *c[3].NoiseDBFS - *c[4].NoiseDBFS; math.Abs(d-4.5) > 0.2 {
		t.Errorf("channel 5 is %.2f dB below channel 4, want 4.5", d)
	}
	if _, err := r.NoiseCovariance(nil, 1000); err != nil {
		t.Errorf("the demo's expected gain cannot be known: %v", err)
	}
}

func TestLoadReadsEveryKey(t *testing.T) {
	sc, err := Load("x.yaml", []byte(`
scenario: all
rate_hz: 48000
duration_s: 2.5
seed: 77
rig_file: rigs/four.yaml
air: {temperature_c: -3, humidity_pct: 40}
room:
  size_m: [6, 5, 3]
  rig_at_m: [3, 2, 1]
  turn_deg: 30
  absorption: [0.1, 0.1, 0.2, 0.3, 0.4, 0.4, 0.5]
  walls: {floor: [0.6]}
  max_order: 3
  length_s: 0.2
sources:
  - {name: t, role: target, kind: talker, hz: 180, snr_db: 4, on_s: [[0.5, 1], [1.5, 2]], at: {point_m: [1, 0.5, 0]}}
  - name: c
    role: interferer
    kind: chirp
    from_hz: 200
    to_hz: 4000
    every_s: 0.5
    level_dbfs: -40
    path:
      - {at_s: 0, azimuth_deg: 10, distance_m: 1}
      - {at_s: 2, azimuth_deg: 20, elevation_deg: 5, distance_m: 1.5}
diffuse:
  - {level_dbfs: -50, spectrum: pink, field: cylindrical, method: waves, waves: 128}
sensor_dbfs: -80
misplaced_mm: 0.5
position_scale: 1.001
faults:
  - {channels: [1, 2], gain_db: -2, delay_us: 12, polarity: inverted, clock_ppm: 3, dead: false, moved_mm: [1, 2, 3], dc: 0.001}
  - {channels: [3], swap_with: 4, clip_dbfs: -6, hum_dbfs: -60, hum_hz: 60, hum_harmonics: 3}
  - {wind_dbfs: -50, handling_dbfs: -30, handling_count: 2, drop_outs: 1, drop_out_ms: 3, repeated_blocks: 2, repeat_block_frames: 64}
`), files(map[string]string{"rigs/four.yaml": "rig: four\nring: {count: 4, radius_mm: 50}\n"}))
	if err != nil {
		t.Fatal(err)
	}
	if sc.Rig.Name != "four" || sc.Sources[1].Path[1].DistanceM != 1.5 || *sc.Room.MaxOrder != 3 || sc.Faults[2].RepeatBlockFrames != 64 {
		t.Errorf("read as %+v", sc)
	}
	if _, err := sc.Render(Options{}); err != nil {
		t.Errorf("Render: %v", err)
	}
}

// Each fault of a file comes with its place, all of one kind at once.
func TestLoadNamesFaultsWithTheirPlaces(t *testing.T) {
	change := func(old, new string) string {
		if !strings.Contains(small, old) {
			t.Fatalf("%q is not in the text", old)
		}
		return strings.Replace(small, old, new, 1)
	}
	for _, v := range []struct {
		name, text string
		want       []string
	}{
		{"unknown key", change("rate_hz", "rate_khz"), []string{"x.yaml:2:", "rate_khz", "rate_hz"}},
		{"rate", change("16000", "100"), []string{"x.yaml:2:10", "8000"}},
		{"no rig", change("rig:\n  line: {count: 3, spacing_mm: 40}\n", ""), []string{"neither rig nor rig_file"}},
		{"two rigs", change("rig:", "rig_file: a.yaml\nrig:"), []string{"x.yaml:4:", "want one of the two"}},
		{"rig's own fault", change("spacing_mm: 40", "spacing_mm: wide"), []string{"x.yaml:5:32", "rig.line.spacing_mm"}},
		{"unknown key in the rig", change("count: 3", "counts: 3"), []string{"x.yaml:5:", "counts"}},
		{"kind", change("kind: noise", "kind: hum"), []string{"x.yaml:7:", "kind"}},
		{"level twice", change("level_dbfs: -30", "level_dbfs: -30, snr_db: 3"), []string{"x.yaml:7:", "snr_db", "want one of the two"}},
		{"no level", change(", level_dbfs: -30", ""), []string{"x.yaml:7:", "neither level_dbfs nor snr_db"}},
		{"no place", change(" at: {azimuth_deg: 30},", ""), []string{"neither at nor path"}},
		{"half a place", change("azimuth_deg: 30", "distance_m: 3"), []string{"neither azimuth_deg nor point_m"}},
		{"two places", change("azimuth_deg: 30", "azimuth_deg: 3, point_m: [1, 2, 3]"), []string{"a point and a direction"}},
		{"path and place", change("at: {", "path: [{at_s: 0, azimuth_deg: 1}], at: {"), []string{"at is given as well"}},
		{"mixed path", change("at: {azimuth_deg: 30}", "path: [{at_s: 0, azimuth_deg: 1}, {at_s: 0, point_m: [1, 2, 3]}]"), []string{"want one form", "later than"}},
		{"on backwards", change("level_dbfs: -30", "level_dbfs: -30, on_s: [[2, 1]]"), []string{"on_s[0]", "from before to"}},
		{"file without a file", change("kind: noise", "kind: file"), []string{"kind file has a file"}},
		{"tone too high", change("kind: noise", "kind: tone, hz: 9000"), []string{"8000 Hz"}},
		{"channel", small + "faults:\n  - {channels: [4], gain_db: 1}\n", []string{"x.yaml:9:17", "the take has 3"}},
		{"swap", small + "faults:\n  - {swap_with: 2}\n", []string{"exactly one"}},
		{"same name", small + "  - {name: a, kind: noise, at: {azimuth_deg: 30}, level_dbfs: -30}\n", []string{"x.yaml:8:12", "two sources"}},
		{"room without walls", small + "room: {size_m: [3, 3, 3], rig_at_m: [1, 1, 1]}\n", []string{"neither rt60_s nor absorption"}},
		{"three absorptions", small + "room: {size_m: [3, 3, 3], rig_at_m: [1, 1, 1], absorption: [0.1, 0.2, 0.3]}\n", []string{"3 values, want 1 or 7"}},
		{"waves of mixing", small + "diffuse:\n  - {level_dbfs: -40, waves: 99}\n", []string{"only method waves"}},
		{"two at once", change("16000", "17.5") + "sensor_dbfs: loud\n", []string{"x.yaml:2:", "x.yaml:8:"}},
	} {
		_, err := Load("x.yaml", []byte(v.text), nil)
		if err == nil {
			t.Errorf("%s: no error", v.name)
			continue
		}
		for _, want := range v.want {
			if !strings.Contains(err.Error(), want) {
				t.Errorf("%s: %q, want %q in it", v.name, err, want)
			}
		}
		var faults *sheet.FaultsError
		if !errors.As(err, &faults) {
			t.Errorf("%s: a %T, want *sheet.FaultsError", v.name, err)
		}
	}
}

func TestRigFilesThatCannotBeReadAreNamed(t *testing.T) {
	text := []byte(strings.Replace(small, "rig:\n  line: {count: 3, spacing_mm: 40}\n", "rig_file: a.yaml\n", 1))
	for name, open := range map[string]func(string) (io.ReadCloser, error){"nobody opens": nil, "not there": files(nil)} {
		if _, err := Load("x.yaml", text, open); err == nil || !strings.Contains(err.Error(), "x.yaml:4:") {
			t.Errorf("%s: %v, want the place of rig_file", name, err)
		}
	}
	_, err := Load("x.yaml", text, files(map[string]string{"a.yaml": "rig: a\nline: {count: 0, spacing_mm: 40}\n"}))
	if err == nil || !strings.Contains(err.Error(), "a.yaml:2:") {
		t.Errorf("a faulty rig file: %v, want its place", err)
	}
}

// What a scenario cannot be is found before anything sounds.
func TestImpossibleScenesAreRefused(t *testing.T) {
	for want, change := range map[string]func(s *Scenario){
		"outside the room":     func(s *Scenario) { s.Sources[1].At = at(0, 9) },
		"microphone \"A\"":     func(s *Scenario) { s.Room.RigAtM = []float64{0.01, 1, 1} },
		"cannot be in a room":  func(s *Scenario) { s.Sources[1].At = at(0, 0) },
		"nearer than 10 mm":    func(s *Scenario) { s.Sources[1].At = &Place{PointM: []float64{0.06, 0.005, 0}} },
		"speed of sound":       func(s *Scenario) { s.Sources[0].Path[1].AtS = 0.0005 },
		"too short for a room": func(s *Scenario) { s.Room.RT60S = []float64{0.02} },
		"shorter length_s":     func(s *Scenario) { s.Room.RT60S = []float64{8}; s.Room.DryAir = true },
		"without any noise": func(s *Scenario) {
			s.SensorDBFS, s.Sources = nil, s.Sources[:1]
			s.Sources[0].LevelDBFS, s.Sources[0].SNRDB = nil, number(3)
		},
		"silent": func(s *Scenario) {
			s.Sources[1].Kind, s.Sources[1].Spectrum, s.Sources[1].OnS = KindClaps, "", [][]float64{{-2, -1}}
		},
		"the channels are":         func(s *Scenario) { s.Rig = nil },
		"1 to 256":                 func(s *Scenario) { s.Rig.Mics[0].Channel = 300 },
		"more than 0 and at most":  func(s *Scenario) { s.DurationS = math.Inf(1) },
		"want -100 to 200":         func(s *Scenario) { s.Sources[0].LevelDBFS, s.Sources[0].SNRDB = nil, number(math.NaN()) },
		"temperature":              func(s *Scenario) { s.Air = &Air{TemperatureC: number(99)} },
		"filter values, more than": func(s *Scenario) { s.Rig = lineRig(200, 0.01); s.Room = nil; s.Diffuse = []Diffuse{{LevelDBFS: -30}} },
	} {
		s := roomy()
		change(s)
		if want == "the channels are" {
			want = "without microphones"
		}
		_, err := s.Render(Options{})
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("Render: %v, want %q", err, want)
		}
	}
}

func TestValidateLeavesTheScenarioAlone(t *testing.T) {
	s := busy()
	s.Sources[0].At = &Place{PointM: []float64{1}}
	before := *s.Sources[0].At
	if s.Validate() == nil {
		t.Error("one coordinate of three: no error")
	}
	if !reflect.DeepEqual(before, *s.Sources[0].At) {
		t.Error("Validate changed the place")
	}
}

func TestSchemaIsSteadyAndComplete(t *testing.T) {
	a, err := Schema()
	if err != nil {
		t.Fatal(err)
	}
	b, _ := Schema()
	if string(a) != string(b) {
		t.Error("two schemas differ")
	}
	for _, key := range []string{"clipped_fraction", "rt60_s", "point_m", "azimuth_deg", "at_s", "sensor_dbfs", "ceiling"} {
		if !strings.Contains(string(a), `"`+key+`"`) {
			t.Errorf("%s is not in the schema", key)
		}
	}
}

// A hostile file costs an error, not a crash: every reading ends, and what
// loads also renders or says why not.
func FuzzLoad(f *testing.F) {
	f.Add(Demo())
	f.Add(small)
	f.Add(small + "faults:\n  - {channels: [3], swap_with: 2, drop_outs: 4}\n")
	f.Add(small + "room: {size_m: [3, 3, 3], rig_at_m: [1, 1, 1], rt60_s: [0.2]}\n")
	f.Fuzz(func(t *testing.T, text string) {
		sc, err := Load("x.yaml", []byte(text), nil)
		if err != nil {
			return
		}
		if err := sc.Validate(); err != nil {
			t.Errorf("loaded, but: %v", err)
		}
	})
}
