package rig

import (
	"math"
	"math/rand/v2"
	"reflect"
	"runtime"
	"strconv"
	"strings"
	"testing"
)

// randomRig is a rig of values with every digit that a float64 has.
func randomRig(rng *rand.Rand) *Rig {
	r := &Rig{Name: "rig " + strconv.Itoa(rng.IntN(1000)), Reference: CentreReference}
	if rng.IntN(2) == 0 {
		h := 720*rng.Float64() - 360
		r.HeadingDeg = &h
		r.Limits = Limits{LevelDB: 1 + rng.Float64(), DC: rng.Float64() / 1e7, SilentDBFS: -90 - rng.Float64()}
		c := 100*rng.Float64() - 45
		r.Air.TemperatureC = &c
	}
	n := 2 + rng.IntN(12)
	for m := range n {
		mic := Mic{
			Name: "n" + strconv.Itoa(m), Channel: m + 1, Use: m < 2 || rng.IntN(3) > 0,
			At: Point{float64(m) + rng.Float64(), 1e-3 * rng.NormFloat64(), rng.Float64() * 1e-7},
		}
		if rng.IntN(2) == 0 {
			mic.GainDB = 60 * (2*rng.Float64() - 1)
			mic.Delay = 1e-3 * rng.NormFloat64()
			mic.Inverted = true
			mic.SensitivityMVPa = 50 * rng.Float64()
			mic.ClockPPM = 10 * rng.NormFloat64()
			v := 40*rng.Float64() - 60
			mic.SensitivityDBFS = &v
			mic.Response = &Response{RateHz: 48000, Taps: []float64{rng.NormFloat64(), 1, 1e-6 * rng.NormFloat64()}}
		}
		r.Mics = append(r.Mics, mic)
	}
	if rng.IntN(2) == 0 {
		r.Reference = r.Mics[rng.IntN(n)].Name
	}
	return r
}

func TestYAMLLoadsBackToTheBit(t *testing.T) {
	rng := rand.New(rand.NewPCG(20, 26))
	for range 300 {
		r := randomRig(rng)
		text := r.YAML()
		back, err := Load("x.yaml", text, nil)
		if err != nil {
			t.Fatalf("%v\n%s", err, text)
		}
		if !reflect.DeepEqual(back, r) {
			t.Fatalf("got  %+v\nwant %+v\n%s", back, r, text)
		}
		if again := back.YAML(); string(again) != string(text) {
			t.Fatalf("written again it differs:\n%s\n%s", text, again)
		}
	}
}

func TestYAMLReadsAsWritten(t *testing.T) {
	r, err := Load("x.yaml", []byte(roof), nil)
	if err != nil {
		t.Fatal(err)
	}
	const want = `rig: roof line of eight
air: {temperature_c: 18, humidity_pct: 55, pressure_kpa: 101.3}
reference: M2
heading_deg: 12.5
microphones:
  - {name: M1, channel: 1, at_mm: [-77.8, 0, 0], gain_db: 0.2, delay_us: 3.1}
  - {name: M2, channel: 3, at_mm: [0, 1.5, 0], polarity: inverted, sensitivity_mv_pa: 12.6, clock_ppm: -4.5}
  - {name: M4, channel: 4, at_mm: [77.8, 0, -20], use: false}
`
	if got := string(r.YAML()); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
}

func TestNamesOfEveryKindSurviveYAML(t *testing.T) {
	for _, name := range []string{
		"a b", "a: b", "- x", "# no", "x # y", "'", `"`, `\`, "null", "true", "No", "12", "1e3", "~", "0x1", " lead", "trail ", "é 音", "[x]", "{x}", "&a", "*a",
		"!t", "%d", "@x", "`x`", "|", ">", "?", "a,b", "x\ny", "tab\there", "…", "\u2028", "-", ".inf", "<<", "=", "12:30:00", "😀", "a]b", "\u202eabc",
	} {
		r := &Rig{Name: name, Reference: name, Mics: []Mic{{Name: name, Channel: 1, Use: true}, {Name: "other", Channel: 2, At: Point{X: 1}, Use: true}}}
		back, err := Load("x.yaml", r.YAML(), nil)
		if err != nil {
			t.Errorf("%q: %v\n%s", name, err, r.YAML())
			continue
		}
		if !reflect.DeepEqual(back, r) {
			t.Errorf("%q came back as %+v", name, back)
		}
	}
}

func TestShiftedMovesThePointAndNothingElse(t *testing.T) {
	for _, c := range []struct {
		v      float64
		places int
		want   string
	}{
		{0.0778, 3, "77.8"}, {-0.14, 3, "-140"}, {0, 3, "0"}, {math.Copysign(0, -1), 3, "0"}, {1, 3, "1000"}, {3.1e-6, 6, "3.1"}, {1e-9, 3, "0.000001"},
		{123.456, 3, "123456"}, {0.30000000000000004, 3, "300.00000000000004"}, {math.NaN(), 3, "0"}, {math.Inf(1), 3, "0"},
	} {
		if got := shifted(c.v, c.places); got != c.want {
			t.Errorf("shifted(%v, %d) = %s, want %s", c.v, c.places, got, c.want)
		}
	}
}

func FuzzLoadGivesBackWhatItReads(f *testing.F) {
	f.Add(roof)
	f.Add("line: {count: 8, spacing_mm: 40}\n")
	f.Add("ring: {count: 8, radius_mm: 60}\nreference: M3\n")
	f.Add("grid: {columns: 4, rows: 4, spacing_mm: 30}\n")
	f.Add("spiral: {count: 9, radius_mm: 60, turns: 2}\n")
	f.Add(`{"microphones": [{"channel": 1, "at_mm": [0, 0]}, {"channel": 2, "at_mm": [1e1, 0]}]}`)
	f.Add("microphones: &m [*m]\n")
	f.Fuzz(func(t *testing.T, text string) {
		if len(text) > 1<<15 {
			return
		}
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		r, err := Load("x.yaml", []byte(text), nil)
		runtime.ReadMemStats(&after)
		if mb := (after.TotalAlloc - before.TotalAlloc) >> 20; mb > 256 {
			t.Fatalf("%d MB for %d bytes", mb, len(text))
		}
		if err != nil {
			if r != nil || err.Error() == "" || strings.Contains(err.Error(), "%!") {
				t.Fatalf("%v, %q", r, err)
			}
			return
		}
		if n := len(r.Used()); n < 2 || n > MaxMicrophones {
			t.Fatalf("%d microphones in use", n)
		}
		back, err := Load("x.yaml", r.YAML(), nil)
		if err != nil {
			t.Fatalf("%v\n%s", err, r.YAML())
		}
		if !reflect.DeepEqual(back, r) {
			t.Fatalf("got  %+v\nwant %+v", back, r)
		}
	})
}
