package rig

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"reflect"
	"strings"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"alidade/pkg/sheet"
)

const roof = `rig: roof line of eight
air: {temperature_c: 18, humidity_pct: 55, pressure_kpa: 101.3}
reference: M2
heading_deg: 12.5
microphones:
  - {name: M1, channel: 1, at_mm: [-77.8, 0, 0], gain_db: 0.2, delay_us: 3.1, polarity: normal, use: true}
  - name: M2
    channel: 3
    at_mm: [0, 1.5]
    polarity: inverted
    sensitivity_mv_pa: 12.6
    clock_ppm: -4.5
  - {channel: 4, at_mm: [77.8, 0, -20], use: false}
`

func TestLoadReadsEveryKey(t *testing.T) {
	r, err := Load("rigs/roof.yaml", []byte(roof), nil)
	if err != nil {
		t.Fatal(err)
	}
	f := func(v float64) *float64 { return &v }
	want := &Rig{
		Name: "roof line of eight", Air: Air{f(18), f(55), f(101.3)}, Reference: "M2", HeadingDeg: f(12.5),
		Mics: []Mic{
			{Name: "M1", Channel: 1, At: Point{-0.0778, 0, 0}, GainDB: 0.2, Delay: 3.1e-6, Use: true},
			{Name: "M2", Channel: 3, At: Point{0, 0.0015, 0}, Inverted: true, Use: true, SensitivityMVPa: 12.6, ClockPPM: -4.5},
			{Name: "M4", Channel: 4, At: Point{0.0778, 0, -0.02}},
		},
	}
	if !reflect.DeepEqual(r, want) {
		t.Errorf("got  %+v\nwant %+v", r, want)
	}
	if p := r.ReferencePoint(); p != (Point{0, 0.0015, 0}) {
		t.Errorf("reference point %v", p)
	}
}

func TestDefaultsOfARigFile(t *testing.T) {
	r, err := Load(`D:\rigs\desk.v2.yaml`, []byte("line: {count: 3, spacing_mm: 40}\n"), nil)
	if err != nil {
		t.Fatal(err)
	}
	if r.Name != "desk.v2" || r.Reference != CentreReference || r.HeadingDeg != nil || r.Air != (Air{}) {
		t.Errorf("got %+v", r)
	}
	if m := r.Mics[2]; m.Name != "M3" || m.Channel != 3 || !m.Use || m.Factor() != 1 {
		t.Errorf("got %+v", m)
	}
}

// Each shorthand against places worked out here from its definition.
func TestShorthandsPlaceTheirMicrophones(t *testing.T) {
	for _, c := range []struct {
		text  string
		first int
		at    []Point // mm
	}{
		{"line: {count: 4, spacing_mm: 40, first_channel: 5}", 5, []Point{{-60, 0, 0}, {-20, 0, 0}, {20, 0, 0}, {60, 0, 0}}},
		{"line: {count: 3, spacing_mm: 12.5}", 1, []Point{{-12.5, 0, 0}, {0, 0, 0}, {12.5, 0, 0}}},
		{"ring: {count: 4, radius_mm: 60}", 1, []Point{{60, 0, 0}, {0, 60, 0}, {-60, 0, 0}, {0, -60, 0}}},
		{"ring: {count: 3, radius_mm: 60, first_channel: 2}", 2, []Point{{60, 0, 0}, {-30, 30 * math.Sqrt(3), 0}, {-30, -30 * math.Sqrt(3), 0}}},
		{"grid: {columns: 3, rows: 2, spacing_mm: 30}", 1, []Point{{-30, -15, 0}, {0, -15, 0}, {30, -15, 0}, {-30, 15, 0}, {0, 15, 0}, {30, 15, 0}}},
		{"spiral: {count: 5, radius_mm: 80, turns: 1}", 1, []Point{{0, 0, 0}, {0, 20, 0}, {-40, 0, 0}, {0, -60, 0}, {80, 0, 0}}},
		{"spiral: {count: 3, radius_mm: 80, turns: 2.25}", 1, []Point{{0, 0, 0}, {40 * math.Cos(math.Pi*2.25), 40 * math.Sin(math.Pi*2.25), 0}, {0, 80, 0}}},
	} {
		r, err := Load("x.yaml", []byte(c.text+"\n"), nil)
		if err != nil {
			t.Errorf("%s: %v", c.text, err)
			continue
		}
		if len(r.Mics) != len(c.at) {
			t.Errorf("%s: %d microphones, want %d", c.text, len(r.Mics), len(c.at))
			continue
		}
		for m, mic := range r.Mics {
			if d := mic.At.Distance(c.at[m].Scale(1e-3)); !(d < 1e-15) {
				t.Errorf("%s: microphone %d at %v, %g m off", c.text, m+1, mic.At, d)
			}
			if mic.Channel != c.first+m {
				t.Errorf("%s: microphone %d has channel %d, want %d", c.text, m+1, mic.Channel, c.first+m)
			}
			if want := fmt.Sprintf("M%d", mic.Channel); mic.Name != want {
				t.Errorf("%s: microphone %d is named %s, want %s after its channel, as in a list", c.text, m+1, mic.Name, want)
			}
		}
	}
}

func TestShapesAreCentredOnTheOrigin(t *testing.T) {
	for n := 2; n < 40; n++ {
		for name, at := range map[string][]Point{"line": Line(n, 0.037), "ring": Ring(n, 0.11), "grid": Grid(n, 3, 0.05)} {
			var sum Point
			for _, p := range at {
				sum = sum.Add(p)
			}
			if !(sum.Norm() < 1e-14*float64(n)) {
				t.Errorf("%s of %d: mean %v", name, n, sum.Scale(1/float64(len(at))))
			}
		}
		// Neighbours on a ring are 2 r sin(pi/n) apart.
		ring := Ring(n, 0.11)
		for m := range ring {
			if d := ring[m].Distance(ring[(m+1)%n]); math.Abs(d-0.22*math.Sin(math.Pi/float64(n))) > 1e-15 {
				t.Errorf("ring of %d: neighbours %d are %g apart", n, m, d)
			}
		}
	}
}

type closer struct {
	io.Reader
	closed *bool
	err    error
}

func (c closer) Close() error { *c.closed = true; return c.err }

func TestPositionsComeFromATable(t *testing.T) {
	const table = "name,channel,x_mm,y_mm,z_mm,gain_db,polarity,use,delay_us\nfront left,2,-40.1,10,0,1.5,inverted,,-2.5\nB,1,40,10,5,,normal,true,\n,7,0,-10,0,,,false,\n"
	var asked string
	var closed bool
	r, err := Load("rigs/a.yaml", []byte("positions: places.csv\nreference: front left\n"), func(path string) (io.ReadCloser, error) {
		asked = path
		return closer{strings.NewReader(table), &closed, nil}, nil
	})
	if err != nil {
		t.Fatal(err)
	}
	want := []Mic{
		{Name: "front left", Channel: 2, At: Point{-0.0401, 0.01, 0}, GainDB: 1.5, Delay: -2.5e-6, Inverted: true, Use: true},
		{Name: "B", Channel: 1, At: Point{0.04, 0.01, 0.005}, Use: true},
		{Name: "M7", Channel: 7, At: Point{0, -0.01, 0}},
	}
	if !reflect.DeepEqual(r.Mics, want) {
		t.Errorf("got  %+v\nwant %+v", r.Mics, want)
	}
	if asked != "places.csv" || !closed {
		t.Errorf("opened %q, closed %v", asked, closed)
	}
}

func TestFaultsOfTheTableAndOfTheFileComeTogether(t *testing.T) {
	const table = "name,channel,x_mm,y_mm,z_mm,polarity,use,gain_db,sensitivity_mv_pa\nA,0,1,2,3,norm,maybe,61,0\nA,2,zero,2,,,,,\nC,2,200000,0,0,,,,\nD,x,0,0,0,,,,\nE,5,0,0,0.5,,,,\n"
	var closed bool
	_, err := Load("a.yaml", []byte("positions: p.csv\nreference: Z\nheading_deg: north\n"), func(string) (io.ReadCloser, error) {
		return closer{strings.NewReader(table), &closed, nil}, nil
	})
	const want = `a.yaml:2:12: reference: no microphone is named "Z", want centre or one of A, A, C, D, E
a.yaml:3:14: heading_deg: got string, want number
p.csv:2:3: channel: got "0", want a whole number from 1 to 256
p.csv:2:11: polarity: got "norm", want normal or inverted
p.csv:2:16: use: got "maybe", want true or false
p.csv:2:22: gain_db: got 61, want -60 to 60
p.csv:2:25: sensitivity_mv_pa: got 0, want above 0 and at most 100000
p.csv:3:1: name: the name "A" is given twice, first in channel 0
p.csv:3:5: x_mm: got "zero", want number
p.csv:3:12: z_mm: an empty cell, want a value
p.csv:4:3: channel: channel 2 is given twice, first to "A"
p.csv:4:5: x_mm: got 200000, want -100000 to 100000
p.csv:5:3: channel: got "x", want a whole number from 1 to 256
p.csv:6:1: at_mm: 0.5 mm from "D", want at least 1 mm: places are in millimetres (or use: false)`
	if err == nil || err.Error() != want {
		t.Errorf("got\n%v\nwant\n%s", err, want)
	}
	if !strings.Contains(sheet.Annotated(err), "     4 | C,2,200000,0,0,,,,\n       |   ^") {
		t.Errorf("no source lines in\n%s", sheet.Annotated(err))
	}
}

func TestATableThatCannotBeReadIsAFaultOfTheFile(t *testing.T) {
	var closed bool
	for _, c := range []struct {
		name string
		open func(string) (io.ReadCloser, error)
		want string
	}{
		{"no opener", nil, `a.yaml:1:12: positions: "p.csv": no file can be opened here`},
		{"not there", func(p string) (io.ReadCloser, error) {
			return nil, &fs.PathError{Op: "open", Path: p, Err: fs.ErrNotExist}
		}, "a.yaml:1:12: positions: open p.csv: file does not exist"},
		{"close fails", func(string) (io.ReadCloser, error) {
			return closer{strings.NewReader("name\n"), &closed, errors.New("disk gone")}, nil
		}, "a.yaml:1:12: positions: disk gone"},
		{"endless", func(string) (io.ReadCloser, error) { return closer{endless{}, &closed, nil}, nil }, "p.csv:1:1: 4194305 bytes, at most 4194304 are read"},
		{"header alone", func(string) (io.ReadCloser, error) {
			return closer{strings.NewReader("name,channel,x_mm,y_mm,z_mm\n"), &closed, nil}, nil
		}, "a.yaml:1:1: no microphone in use, a beam needs two or more"},
		{"columns missing", func(string) (io.ReadCloser, error) {
			return closer{strings.NewReader("name,channel,x_mm\nA,1,0\nB,2,5\n"), &closed, nil}, nil
		}, "p.csv:1:1: missing column \"y_mm\"\np.csv:1:1: missing column \"z_mm\""},
		{"too many", func(string) (io.ReadCloser, error) {
			return closer{strings.NewReader("name,channel,x_mm,y_mm,z_mm\n" + strings.Repeat("A,1,0,0,0\n", 300)), &closed, nil}, nil
		}, "p.csv:258:1: 300 microphones, at most 256 are read"},
	} {
		_, err := Load("a.yaml", []byte("positions: p.csv\n"), c.open)
		if err == nil || err.Error() != c.want {
			t.Errorf("%s: got %v, want %s", c.name, err, c.want)
		}
	}
}

type endless struct{}

func (endless) Read(p []byte) (int, error) {
	for i := range p {
		p[i] = 'x'
	}
	return len(p), nil
}

func TestRefusalsOfARigFile(t *testing.T) {
	mics := func(list string) string { return "microphones:\n" + list }
	for _, c := range []struct{ name, text, want string }{
		{"no microphones", "rig: x\n", "r.yaml:1:1: no microphones: give one of microphones, positions, line, ring, grid and spiral"},
		{"two sets", "line: {count: 2, spacing_mm: 5}\nring: {count: 3, radius_mm: 9}\n", "r.yaml:2:1: ring: a second set of microphones beside line, want one"},
		{"one microphone", mics("  - {channel: 1, at_mm: [0, 0, 0]}\n"), "r.yaml:1:1: 1 microphone in use, a beam needs two or more"},
		{"one live microphone", mics("  - {channel: 1, at_mm: [0, 0, 0]}\n  - {channel: 2, at_mm: [9, 0, 0], use: false}\n"), "r.yaml:1:1: 1 microphone in use, a beam needs two or more"},
		{"none in use", mics("  - {channel: 1, at_mm: [0, 0, 0], use: false}\n"), "r.yaml:1:1: no microphone in use, a beam needs two or more"},
		{"two in one place", mics("  - {channel: 1, at_mm: [5, 0, 0]}\n  - {channel: 2, at_mm: [5, 0.5, 0]}\n"), `r.yaml:3:25: microphones[1].at_mm: 0.5 mm from "M1", want at least 1 mm: places are in millimetres (or use: false)`},
		{"far apart", mics("  - {channel: 1, at_mm: [-60000, 0, 0]}\n  - {channel: 2, at_mm: [60000, 0]}\n"), `r.yaml:3:25: microphones[1].at_mm: 120 m from "M1", want at most 100 m`},
		{"far out", mics("  - {channel: 1, at_mm: [0, 100001, 0]}\n  - {channel: 2, at_mm: [0, 0]}\n"), `r.yaml:2:29: microphones[0].at_mm[1]: 100.001 m from the origin, want at most 100 m`},
		{"channel twice", mics("  - {channel: 1, at_mm: [0, 0]}\n  - {name: Q, channel: 1, at_mm: [5, 0]}\n"), `r.yaml:3:24: microphones[1].channel: channel 1 is given twice, first to "M1"`},
		{"name twice", mics("  - {name: Q, channel: 1, at_mm: [0, 0]}\n  - {name: Q, channel: 2, at_mm: [5, 0]}\n"), `r.yaml:3:12: microphones[1].name: the name "Q" is given twice, first in channel 1`},
		{"name twice by default", mics("  - {name: M2, channel: 1, at_mm: [0, 0]}\n  - {channel: 2, at_mm: [5, 0]}\n"), `r.yaml:3:5: microphones[1]: the name "M2" is given twice, first in channel 1`},
		{"reserved name", mics("  - {name: centre, channel: 1, at_mm: [0, 0]}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:12: microphones[0].name: the name centre stands for the mean of the microphones"},
		{"channel 0", mics("  - {channel: 0, at_mm: [0, 0]}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:15: microphones[0].channel: got 0, want at least 1"},
		{"channel 257", mics("  - {channel: 257, at_mm: [0, 0]}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:15: microphones[0].channel: got 257, want at most 256"},
		{"unknown reference", "reference: M9\nline: {count: 2, spacing_mm: 5}\n", `r.yaml:1:12: reference: no microphone is named "M9", want centre or one of M1, M2`},
		{"gain", mics("  - {channel: 1, at_mm: [0, 0], gain_db: 60.5}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:42: microphones[0].gain_db: got 60.5, want at most 60"},
		{"not a number", mics("  - {channel: 1, at_mm: [.nan, 0]}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:26: microphones[0].at_mm[0]: .nan is not a finite number"},
		{"one coordinate", mics("  - {channel: 1, at_mm: [0]}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:25: microphones[0].at_mm: 1 entry, want at least 2"},
		{"four coordinates", mics("  - {channel: 1, at_mm: [0, 1, 2, 3]}\n  - {channel: 2, at_mm: [5, 0]}\n"), "r.yaml:2:25: microphones[0].at_mm: 4 entries, want at most 3"},
		{"misspelt key", mics("  - {channel: 1, at_mm: [0, 1], gain: 1}\n  - {channel: 2, at_mm: [5, 0]}\n"), `r.yaml:2:33: microphones[0].gain: unknown key, did you mean "gain_db"?`},
		{"grid of one", "grid: {columns: 1, rows: 1, spacing_mm: 30}\n", "r.yaml:1:7: grid: 1 columns times 1 rows are 1 microphones, want 2 to 256"},
		{"grid too large", "grid: {columns: 256, rows: 256, spacing_mm: 30}\n", "r.yaml:1:7: grid: 256 columns times 256 rows are 65536 microphones, want 2 to 256"},
		{"channels run out", "line: {count: 200, spacing_mm: 5, first_channel: 100}\n", "r.yaml:1:7: line: the last of 200 microphones would be channel 299, at most 256 are read"},
		{"line too long", "line: {count: 256, spacing_mm: 1000}\n", `100 m`},
		{"ring too crowded", "ring: {count: 256, radius_mm: 10}\n", `r.yaml:1:7: line`},
		{"not YAML", "microphones: [\n", "r.yaml:"},
		{"empty", "", "r.yaml:1:1: the file is empty"},
		{"microphones is a mapping", "microphones: {a: 1}\n", "r.yaml:1:14: microphones: got mapping, want list"},
		{"no list entries", "microphones: []\n", "r.yaml:1:14: microphones: 0 entries, want at least 1"},
		{"a null microphone", mics("  -\n  - {channel: 2, at_mm: [5, 0]}\n"), "microphones[0]: got nothing, want mapping"},
		{"temperature", "air: {temperature_c: -51}\nline: {count: 2, spacing_mm: 5}\n", "r.yaml:1:22: air.temperature_c: got -51, want at least -50"},
		{"spiral turns", "spiral: {count: 4, radius_mm: 50, turns: 0}\n", "r.yaml:1:42: spiral.turns: got 0, want above 0"},
	} {
		r, err := Load("r.yaml", []byte(c.text), nil)
		if err == nil {
			t.Errorf("%s: loads as %+v", c.name, r)
			continue
		}
		var faults *sheet.FaultsError
		if !errors.As(err, &faults) {
			t.Errorf("%s: %v is no *sheet.FaultsError", c.name, err)
		}
		if c.name == "ring too crowded" {
			if !strings.HasPrefix(err.Error(), `r.yaml:1:7: ring: 0.`) || !strings.Contains(err.Error(), "want at least 1 mm") {
				t.Errorf("%s: got %v", c.name, err)
			}
			continue
		}
		if !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got\n%v\nwant\n%s", c.name, err, c.want)
		}
	}
}

func TestAFaultDoesNotHideOthersNorMakeThemUp(t *testing.T) {
	const text = `reference: M7
colour: red
microphones:
  - {name: A, channel: 1, at_mm: [0, 0, 0]}
  - {name: A, channel: 1, at_mm: [0, 0, 0], polarity: upside}
  - {name: C, chanel: 3, at_mm: [0, x]}
  - {at_mm: 7}
`
	_, err := Load("r.yaml", []byte(text), nil)
	const want = `r.yaml:1:12: reference: no microphone is named "M7", want centre or one of A, A, C
r.yaml:2:1: colour: unknown key, known are air, grid, heading_deg, limits, line, microphones, positions, reference, rig, ring, spiral
r.yaml:5:12: microphones[1].name: the name "A" is given twice, first in channel 1
r.yaml:5:24: microphones[1].channel: channel 1 is given twice, first to "A"
r.yaml:5:34: microphones[1].at_mm: 0 mm from "A", want at least 1 mm: places are in millimetres (or use: false)
r.yaml:5:55: microphones[1].polarity: got "upside", want one of normal, inverted
r.yaml:6:5: microphones[2]: missing key "channel"
r.yaml:6:15: microphones[2].chanel: unknown key, did you mean "channel"?
r.yaml:6:37: microphones[2].at_mm[1]: got string, want number
r.yaml:7:5: microphones[3]: missing key "channel"
r.yaml:7:13: microphones[3].at_mm: got number, want list`
	if err == nil || err.Error() != want {
		t.Errorf("got\n%v\nwant\n%s", err, want)
	}
}

func TestAReferenceIsNotCalledUnknownWhereANameIsUnreadable(t *testing.T) {
	_, err := Load("r.yaml", []byte("reference: M7\nmicrophones:\n  - {name: [M7], channel: 1, at_mm: [0, 0]}\n  - 7\n"), nil)
	const want = `r.yaml:3:12: microphones[0].name: got list, want string
r.yaml:4:5: microphones[1]: got number, want mapping`
	if err == nil || err.Error() != want {
		t.Errorf("got\n%v\nwant\n%s", err, want)
	}
}

func TestCheckTakeNamesEachMicrophoneBeyondTheTake(t *testing.T) {
	r, err := Load("r.yaml", []byte(roof), nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := r.CheckTake(3); err != nil {
		t.Errorf("a microphone out of use needs no channel, but: %v", err)
	}
	const want = "rig roof line of eight: microphone \"M1\": channel 1, but the take has 0 channels\n" +
		"rig roof line of eight: microphone \"M2\": channel 3, but the take has 0 channels"
	if err := r.CheckTake(0); err == nil || err.Error() != want {
		t.Errorf("got %v", err)
	}
	if err := r.CheckTake(1); err == nil || err.Error() != `rig roof line of eight: microphone "M2": channel 3, but the take has 1 channel` {
		t.Errorf("got %v", err)
	}
}

func TestSchemaTakesTheRigsThatLoadTakes(t *testing.T) {
	text, err := Schema()
	if err != nil {
		t.Fatal(err)
	}
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(text))
	if err != nil {
		t.Fatal(err)
	}
	c := jsonschema.NewCompiler()
	if err := c.AddResource(SchemaID, doc); err != nil {
		t.Fatal(err)
	}
	s, err := c.Compile(SchemaID)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		json string
		ok   bool
	}{
		{`{"line": {"count": 8, "spacing_mm": 40}}`, true},
		{`{"rig": "x", "microphones": [{"channel": 1, "at_mm": [0, 1]}, {"channel": 2, "at_mm": [0, 1, 2], "use": true}]}`, true},
		{`{"rig": "x", "mics": []}`, false},
		{`{"line": {"count": 8}}`, false},
		{`{"line": {"count": "8", "spacing_mm": 40}}`, false},
		{`{"heading_deg": 361, "line": {"count": 8, "spacing_mm": 40}}`, false},
	} {
		var v any
		if err := json.Unmarshal([]byte(c.json), &v); err != nil {
			t.Fatal(err)
		}
		if err := s.Validate(v); (err == nil) != c.ok {
			t.Errorf("%s: schema says %v", c.json, err)
		}
		if _, err := Load("x.json", []byte(c.json), nil); (err == nil) != c.ok {
			t.Errorf("%s: Load says %v", c.json, err)
		}
	}
}
