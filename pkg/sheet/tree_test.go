package sheet

import (
	"strings"
	"testing"
)

func TestPathsAreReadAsTheyAreWritten(t *testing.T) {
	for _, path := range []string{"", "a", "a.b", "a[0]", "a[12].b", "a[0][1]", "a.b[3].c.d", "microphones[1].at_mm[2]"} {
		if got := join(splitPath(path)); got != path {
			t.Errorf("%q read and written is %q", path, got)
		}
	}
	for _, c := range []struct {
		steps []step
		want  string
	}{
		{[]step{{name: "a b", index: -1}, {index: 2}}, `"a b"[2]`},
		{[]step{{name: "", index: -1}}, `""`},
		{[]step{{name: "x\ny", index: -1}, {name: "z", index: -1}}, `"x\ny".z`},
		{[]step{{name: strings.Repeat("k", 100), index: -1}}, `"` + strings.Repeat("k", 60) + `…"`},
	} {
		if got := join(c.steps); got != c.want {
			t.Errorf("join(%v) = %s, want %s", c.steps, got, c.want)
		}
	}
	for _, odd := range []string{"[", "[x]", "a[-1]", "a..b", ".", "a[99999999999999999999]", "]"} {
		d := Parse("x.yaml", []byte("a: {b: [1]}\n"), nil)
		if d.Has(odd) {
			t.Errorf("the path %q leads somewhere", odd)
		}
	}
}

func TestFieldPathsOfTheDecoderBecomeOurs(t *testing.T) {
	for in, want := range map[string]string{"a": "a", "a.b": "a.b", "a.0": "a[0]", "a.0.b": "a[0].b", "": ""} {
		if got := fieldPath(in); got != want {
			t.Errorf("fieldPath(%q) = %q, want %q", in, got, want)
		}
	}
}

// Faults of a JSON document of our own are found by line and column too.
func TestJSONFaultsHaveTheirPlace(t *testing.T) {
	schema := gaugeSchema(t)
	for _, c := range []struct{ text, want string }{
		{"{\n  \"name\": 5\n}", "g.json:2:11: name: got number, want string"},
		{"{\"name\": \"é\", \"kind\": \"no\"}", `g.json:1:23: kind: got "no", want one of dry, wet`},
		{"{\"name\": \"x\",\n \"nmae\": 1}", `g.json:2:2: nmae: unknown key; "name" is given already`},
		{"{\"name\": \"x\",}", "g.json:1:14: not readable as JSON"},
		{"{\"name\": \"x\"", "g.json:1:13: not readable as JSON: it ends too early"},
		{"", "g.json:1:1: not readable as JSON: it ends too early"},
		{"name: x", "g.json:1:1: not readable as JSON"},
		{"{\"name\": \"x\", \"limit_db\": 1e-400}", ""},
		{"{\"name\": \"x\", \"limit_db\": 59.99999999999999999999999999999999999999}", ""},
		{"{\"name\": \"x\", \"microphones\": [{\"channel\": 1, \"at_mm\": [1, 2]}, {\"channel\": 300, \"at_mm\": [1, 2]}]}", "microphones[1].channel: got 300, want at most 256"},
	} {
		var g gauge
		err := DecodeJSON("g.json", []byte(c.text), schema, &g)
		if c.want == "" {
			if err != nil {
				t.Errorf("%s: %v", c.text, err)
			}
			continue
		}
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, want %s", c.text, err, c.want)
		}
	}
	if err := DecodeJSON("g.json", []byte("["+strings.Repeat("0,", MaxJSONValues)+"0]"), schema, &gauge{}); err == nil || !strings.Contains(err.Error(), "more than 1000000 values") {
		t.Errorf("a million values: %v", err)
	}
	if err := DecodeJSON("g.json", []byte(strings.Repeat("{\"a\":", 100)), schema, &gauge{}); err == nil || !strings.Contains(err.Error(), "more than 64 levels") {
		t.Errorf("deep: %v", err)
	}
}
