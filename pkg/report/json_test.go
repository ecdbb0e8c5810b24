package report

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"reflect"
	"strings"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"alidade/pkg/pipeline"
	"alidade/pkg/sheet"
)

func reportText(t testing.TB, r *pipeline.Result) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := JSON(&b, r); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// validator compiles the schema with the module directly, so that a slip in
// our own checking cannot hide one in the schema.
func validator(t *testing.T) *jsonschema.Schema {
	t.Helper()
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
	return s
}

func TestReportsKeepTheirSchema(t *testing.T) {
	s := validator(t)
	for name, r := range map[string]*pipeline.Result{"good": goodTake(), "bare": bareTake(), "zero": {}} {
		var doc any
		if err := json.Unmarshal(reportText(t, r), &doc); err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if err := s.Validate(doc); err != nil {
			t.Errorf("%s: %v", name, err)
		}
	}
}

func TestSchemaRefusesWhatIsNoReport(t *testing.T) {
	s := validator(t)
	for name, change := range map[string]func(m map[string]any){
		"bands missing":    func(m map[string]any) { delete(m, "bands") },
		"text for a level": func(m map[string]any) { m["overall"].(map[string]any)["snr_gain_db"] = "7.9" },
		"interval of three": func(m map[string]any) {
			m["overall"].(map[string]any)["snr_gain_ci95_db"] = []any{1.0, 2.0, 3.0}
		},
		"null for a required number": func(m map[string]any) { m["take"].(map[string]any)["channels"] = nil },
	} {
		var doc map[string]any
		if err := json.Unmarshal(reportText(t, goodTake()), &doc); err != nil {
			t.Fatal(err)
		}
		change(doc)
		if s.Validate(doc) == nil {
			t.Errorf("%s: the schema lets it pass", name)
		}
	}
	// Keys may be added within a version.
	var doc map[string]any
	if err := json.Unmarshal(reportText(t, goodTake()), &doc); err != nil {
		t.Fatal(err)
	}
	doc["later"] = 1.0
	if err := s.Validate(doc); err != nil {
		t.Errorf("an added key is refused: %v", err)
	}
}

func TestJSONHasTheKeysThatScriptsRelyOnInOrder(t *testing.T) {
	var doc map[string]any
	text := reportText(t, goodTake())
	if err := json.Unmarshal(text, &doc); err != nil {
		t.Fatal(err)
	}
	at := -1
	for _, key := range []string{"schema", "version", "take", "rig", "steer", "segments", "bands", "octave_bands", "overall", "channels", "findings", "output"} {
		i := bytes.Index(text, []byte("\n  \""+key+"\": "))
		if i <= at {
			t.Errorf("key %s stands at byte %d, want after %d", key, i, at)
		}
		at = i
	}
	band := doc["bands"].([]any)[3].(map[string]any)
	for _, key := range []string{"nominal_hz", "centre_hz", "low_hz", "high_hz", "noise_in_dbfs", "noise_out_dbfs", "noise_reduction_db",
		"noise_reduction_ci95_db", "target_in_dbfs", "target_out_dbfs", "target_change_db", "target_change_ci95_db", "snr_in_db", "snr_out_db",
		"snr_gain_db", "snr_gain_ci95_db", "snr_gain_over_best_microphone_db", "predicted_white_db", "predicted_diffuse_db", "flags"} {
		if _, ok := band[key]; !ok {
			t.Errorf("a band has no %s", key)
		}
	}
	if _, ok := doc["created_utc"]; ok {
		t.Error("created_utc is there though the result has none")
	}
}

// The encoder must not say anything else than encoding/json does, up to
// rounding and null.
func TestJSONSaysWhatEncodingJSONSays(t *testing.T) {
	for name, r := range map[string]*pipeline.Result{"good": goodTake(), "bare": bareTake()} {
		plain, err := json.Marshal(r)
		if err != nil {
			t.Fatal(err)
		}
		var want, got any
		if err := json.Unmarshal(plain, &want); err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(reportText(t, r), &got); err != nil {
			t.Fatal(err)
		}
		compare(t, name, got, want)
	}
}

// compare holds two decoded documents against each other. A list that Go has
// as nil is written as an empty one.
func compare(t *testing.T, path string, got, want any) {
	t.Helper()
	switch w := want.(type) {
	case map[string]any:
		g, ok := got.(map[string]any)
		if !ok || len(g) != len(w) {
			t.Errorf("%s: got %v, want %v", path, got, want)
			return
		}
		for k := range w {
			compare(t, path+"."+k, g[k], w[k])
		}
	case []any:
		g, ok := got.([]any)
		if !ok || len(g) != len(w) {
			t.Errorf("%s: got %v, want %v", path, got, want)
			return
		}
		for i := range w {
			compare(t, path+"[]", g[i], w[i])
		}
	case float64:
		g, ok := got.(float64)
		if !ok || math.Abs(g-w) > 0.0005001 {
			t.Errorf("%s: got %v, want %v", path, got, want)
		}
	case nil:
		if list, ok := got.([]any); got != nil && !(ok && len(list) == 0) {
			t.Errorf("%s: got %v, want null", path, got)
		}
	default:
		if got != want {
			t.Errorf("%s: got %v, want %v", path, got, want)
		}
	}
}

func TestReadReturnsWhatJSONWrote(t *testing.T) {
	for name, r := range map[string]*pipeline.Result{"good": goodTake(), "bare": bareTake()} {
		text := reportText(t, r)
		back, err := Read("x.report.json", text)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if again := reportText(t, back); !bytes.Equal(again, text) {
			t.Errorf("%s: written again it differs:\n%s\n%s", name, again, text)
		}
		if back.Steer.Method != r.Steer.Method || !reflect.DeepEqual(back.Findings, r.Findings) {
			t.Errorf("%s: read back as %+v", name, back)
		}
	}
}

func TestNoNumberThatIsNoneLeaves(t *testing.T) {
	r := goodTake()
	r.Bands[4].SNRGainDB = f(math.NaN())
	r.Bands[5].NoiseInDBFS = f(math.Inf(-1))
	r.Bands[6].SNRGainCI95 = &[2]float64{1, math.Inf(1)}
	r.Steer.CompassDeg = f(math.NaN())
	var doc struct {
		Bands []pipeline.Band
		Steer map[string]any
	}
	if err := json.Unmarshal(reportText(t, r), &doc); err != nil {
		t.Fatal(err)
	}
	if doc.Bands[4].SNRGainDB != nil || doc.Bands[5].NoiseInDBFS != nil || doc.Bands[6].SNRGainCI95 != nil {
		t.Error("a figure that is no number did not become null")
	}
	if v, ok := doc.Steer["compass_deg"]; ok {
		t.Errorf("compass_deg is %v, want it left out", v)
	}
	r = goodTake()
	r.Channels[2].DC = math.NaN()
	var b bytes.Buffer
	err := JSON(&b, r)
	if err == nil || err.Error() != "report: channels.2.dc: NaN is not a finite number" || b.Len() != 0 {
		t.Errorf("a DC of NaN gave %q and %d bytes", err, b.Len())
	}
}

func TestNumbersAreRoundedToWhatIsClaimed(t *testing.T) {
	for _, c := range []struct {
		key  string
		x    float64
		want string
	}{
		{"snr_gain_db", 7.9124999, "7.912"},
		{"noise_in_dbfs", -48.00049, "-48"},
		{"level_db_spl", 71.23456, "71.235"},
		{"target_change_db", -0.0004, "0"},
		{"azimuth_deg", 59.99951, "60"},
		{"azimuth_deg", -59.9994, "-59.999"},
		{"duration_s", 2.5899999, "2.59"},
		{"noise", 1.23456789, "1.234568"},
		{"speed_of_sound_m_s", 343.2, "343.2"},
		{"centre_hz", 1995.2623149688796, "1995.262315"},
		{"at_m", -0.12345678, "-0.123457"},
		{"delay_us", 3.1, "3.1"},
		{"dc", 1.234567891234e-5, "0.0000123456789"},
		{"dc", 1e-9, "1e-09"},
		{"confidence", 0.1 + 0.2, "0.3"},
	} {
		got := Round(c.x, c.key)
		if got != c.want {
			t.Errorf("Round(%v, %q) = %s, want %s", c.x, c.key, got, c.want)
		}
		if !json.Valid([]byte(got)) {
			t.Errorf("Round(%v, %q) = %s is not JSON", c.x, c.key, got)
		}
	}
}

func TestReadRefusesWithThePlace(t *testing.T) {
	good := string(reportText(t, goodTake()))
	for _, c := range []struct{ name, text, want string }{
		{"cut off", good[:len(good)/2], "not readable as JSON"},
		{"not JSON", "rig: x\n", "x.json:1:1: not readable as JSON"},
		{"a list", "[]", "x.json:1:1: got list, want an object"},
		{"another version", strings.Replace(good, "alidade-report/1", "alidade-report/2", 1), `x.json: schema "alidade-report/2", want "alidade-report/1"`},
		{"no report", `{"a": 1}`, "x.json: not a report: no key schema"},
		{"a text for a number", strings.Replace(good, `"channels": 8,`, `"channels": "8",`, 1), "x.json:8:17: take.channels: got string, want whole number"},
		{"a key missing", strings.Replace(good, `"encoding"`, `"coding"`, 1), `x.json:4:11: take: missing key "encoding"`},
		{"a key twice", strings.Replace(good, `"version"`, `"schema": "alidade-report/1", "version"`, 1), `key "schema" given twice`},
		{"more after it", good + "{}", "more after the end"},
		{"number beyond range", strings.Replace(good, `"frames": 1440000`, `"frames": 1e400`, 1), "not a finite number"},
		{"huge whole number", strings.Replace(good, `"frames": 1440000`, `"frames": 123456789012345678901`, 1), "take.frames"},
		{"deep", `{"schema": "alidade-report/1", "x": ` + strings.Repeat("[", 5000) + strings.Repeat("]", 5000) + "}", "more than 64 levels"},
	} {
		_, err := Read("x.json", []byte(c.text))
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, want %q", c.name, err, c.want)
		}
	}
	_, err := Read("x.json", []byte(strings.ReplaceAll(good, `"used": true`, `"used": 1`)))
	var faults *sheet.FaultsError
	if !errors.As(err, &faults) || len(faults.Faults) != 14 {
		t.Errorf("14 faults came out as %v", err)
	}
}

func FuzzReadGivesBackWhatItReads(fz *testing.F) {
	small := goodTake()
	small.Bands, small.OctaveBands, small.Rig.Mics, small.Channels = small.Bands[:1], nil, small.Rig.Mics[:1], small.Channels[:1]
	fz.Add(string(reportText(fz, small)))
	fz.Add(`{"schema": "alidade-report/1", "bands": null}`)
	fz.Fuzz(func(t *testing.T, text string) {
		r, err := Read("x.json", []byte(text))
		if err != nil {
			return
		}
		first := reportText(t, r)
		again, err := Read("x.json", first)
		if err != nil {
			t.Fatalf("what was written is not read: %v\n%s", err, first)
		}
		if second := reportText(t, again); !bytes.Equal(first, second) {
			t.Fatalf("not the same twice:\n%s\n%s", first, second)
		}
		if err := Summary(&bytes.Buffer{}, r, 80); err != nil {
			t.Fatal(err)
		}
	})
}
