package sheet

import (
	"bytes"
	"encoding/json"
	"strings"
	"testing"
)

type measured struct {
	Must    float64     `json:"must" jsonschema_description:"One, two, and three."`
	May     *float64    `json:"may,omitempty"`
	Null    *float64    `json:"null"`
	Pair    *[2]float64 `json:"pair"`
	Inner   []inner     `json:"inner"`
	List    []*float64  `json:"list,omitempty"`
	Hidden  int         `json:"-"`
	private int
}

type inner struct {
	Null *string `json:"null"`
	Next *inner  `json:"next"`
}

func TestSchemaIsTheSameBytesEveryTime(t *testing.T) {
	first, err := SchemaOf(measured{}, "urn:test:m", "M")
	if err != nil {
		t.Fatal(err)
	}
	for range 20 {
		again, err := SchemaOf(&measured{private: 1}, "urn:test:m", "M")
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(first, again) {
			t.Fatalf("got\n%s\nthen\n%s", first, again)
		}
	}
	if !bytes.HasSuffix(first, []byte("}\n")) || !json.Valid(first) {
		t.Errorf("not JSON with a newline at its end: %s", first)
	}
	for _, want := range []string{`"$schema": "https://json-schema.org/draft/2020-12/schema"`, `"$id": "urn:test:m"`, `"title": "M"`, `"One, two, and three."`} {
		if !strings.Contains(string(first), want) {
			t.Errorf("no %s in\n%s", want, first)
		}
	}
	if strings.Contains(string(first), "Hidden") || strings.Contains(string(first), "private") {
		t.Errorf("fields that are not of the form: %s", first)
	}
}

func TestPointersWithoutOmitemptyMayBeNull(t *testing.T) {
	text, err := SchemaOf(measured{}, "urn:test:m", "M")
	if err != nil {
		t.Fatal(err)
	}
	s, err := NewSchema(text)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct{ text, want string }{
		{`{"must": 1, "null": null, "pair": null, "inner": [{"null": null, "next": {"null": "x", "next": null}}]}`, ""},
		{`{"must": 1, "null": 2.5, "pair": [1, 2], "inner": [], "may": 3}`, ""},
		{`{"must": 1, "null": 1, "pair": null, "inner": [], "list": [1, null, 2]}`, ""},
		{`{"must": 1, "null": 1, "pair": null, "inner": [], "list": [1, "x"]}`, "x.json:1:63: list[1]: got string, want number or nothing"},
		{`{"must": null, "null": 1, "pair": null, "inner": []}`, "x.json:1:10: must: got nothing, want number"},
		{`{"must": 1, "null": 1, "pair": null, "inner": [], "may": null}`, "x.json:1:58: may: got nothing, want number"},
		{`{"must": 1, "null": "1", "pair": null, "inner": []}`, "x.json:1:21: null: got string, want number or nothing"},
		{`{"must": 1, "null": 1, "pair": [1], "inner": []}`, "x.json:1:32: pair: 1 entry, want at least 2"},
		{`{"must": 1, "null": 1, "pair": [1, "2"], "inner": []}`, "x.json:1:36: pair[1]: got string, want number"},
		{`{"must": 1, "null": 1, "pair": null, "inner": [{"null": 3, "next": null}]}`, "x.json:1:57: inner[0].null: got number, want string or nothing"},
	} {
		var m measured
		err := DecodeJSON("x.json", []byte(c.text), s, &m)
		got := ""
		if err != nil {
			got = err.Error()
		}
		if got != c.want {
			t.Errorf("%s\n got %q\nwant %q", c.text, got, c.want)
		}
	}
}

func TestOpenSchemaLetsUnknownKeysPassAndTheOtherDoesNot(t *testing.T) {
	closed := gaugeSchema(t)
	text, err := OpenSchemaOf(gauge{}, "urn:test:open", "G")
	if err != nil {
		t.Fatal(err)
	}
	open, err := NewSchema(text)
	if err != nil {
		t.Fatal(err)
	}
	const file = "name: x\nsomething: else\n"
	var g gauge
	if err := Decode("x", []byte(file), open, &g); err != nil || g.Name != "x" {
		t.Errorf("open: %v, %+v", err, g)
	}
	want := "x:2:1: something: unknown key, known are kind, limit_db, microphones, name"
	if err := Decode("x", []byte(file), closed, &g); err == nil || err.Error() != want {
		t.Errorf("closed: got %v, want %s", err, want)
	}
	if open.ID() != "urn:test:open" {
		t.Errorf("ID() = %s", open.ID())
	}
}

func TestSchemaThatReachesOutsideOrHasNoIDIsRefused(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{`{"type": "object"}`, "$id"},
		{`{"$id": "relative.json", "type": "object"}`, "want an absolute uri"},
		{`{"$id": "urn:test:x", "$ref": "file:///etc/hostname"}`, "lies outside the schema"},
		{`{"$id": "urn:test:x", "type": 5}`, "urn:test:x"},
		{`{`, "schema"},
	} {
		if _, err := NewSchema([]byte(c.text)); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, want %q", c.text, err, c.want)
		}
	}
	if _, err := SchemaOf(gauge{}, "no uri", "x"); err == nil {
		t.Error("an id that is no URI passes")
	}
}

// Every keyword that our forms use, each with the words it is reported in.
func TestViolationsAreSaidInPlainWords(t *testing.T) {
	s, err := NewSchema([]byte(`{"$id": "urn:test:w", "type": "object", "properties": {
		"any": {"anyOf": [{"type": "string"}, {"type": "array", "items": {"type": "number"}}]},
		"one": {"oneOf": [{"type": "number"}, {"type": "integer"}]},
		"above": {"exclusiveMinimum": 0}, "below": {"exclusiveMaximum": 1}, "most": {"maximum": 60}, "step": {"multipleOf": 5},
		"list": {"maxItems": 2}, "set": {"uniqueItems": true}, "map": {"minProperties": 1}, "small": {"maxProperties": 1},
		"text": {"minLength": 1, "maxLength": 3}, "form": {"pattern": "^[a-z]+$"}, "const": {"const": "x"}, "never": false,
		"long": {"minLength": 2}, "mixed": {"enum": ["a", 1, null]}, "whole": {"type": "integer"}
	}}`))
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct{ text, want string }{
		{"any: 5", "any: got number, want string or list"},
		{"any: [1, x]", "any[1]: got string, want number"},
		{"any: [1, 2]", ""},
		{"one: 5", "one: fits two forms at once, want one"},
		{"above: 0", "above: got 0, want above 0"},
		{"below: 1.5", "below: got 1.5, want below 1"},
		{"most: 61", "most: got 61, want at most 60"},
		{"step: 7", "step: got 7, want a multiple of 5"},
		{"list: [1, 2, 3]", "list: 3 entries, want at most 2"},
		{"set: [1, 2, 1]", "set: entries 1 and 3 are equal"},
		{"map: {}", "map: 0 keys, want at least 1"},
		{"small: {a: 1, b: 2}", "small: 2 keys, want at most 1"},
		{"text: ''", "text: an empty text"},
		{"text: abcd", "text: 4 characters, want at most 3"},
		{"long: a", "long: 1 character, want at least 2"},
		{"form: A1", `form: "A1" does not have the form ^[a-z]+$`},
		{"const: y", `const: got "y", want x`},
		{"never: 1", "never: nothing is allowed here"},
		{"mixed: b", `mixed: got "b", want one of a, 1, null`},
		{"whole: 1.0", ""},
		{"whole: 1.5", "whole: got 1.5, want whole number"},
		{"whole: 1e2", ""},
		{"whole: x", "whole: got string, want whole number"},
	} {
		err := Parse("x", []byte(c.text+"\n"), s).Err()
		got := ""
		if err != nil {
			got = strings.SplitN(err.Error(), ": ", 2)[1]
		}
		if got != c.want {
			t.Errorf("%s\n got %q\nwant %q", c.text, got, c.want)
		}
	}
}

func TestNearestKeyIsFoundOrNone(t *testing.T) {
	known := []string{"microphones", "name", "at_mm", "channel", "gain_db", "delay_us", "use"}
	for _, c := range []struct{ text, want string }{
		{"chanel", "channel"}, {"Channel", "channel"}, {"gain", "gain_db"}, {"gain_dB", "gain_db"}, {"delay", "delay_us"}, {"microphone", "microphones"},
		{"nmae", "name"}, {"at", ""}, {"at_cm", "at_mm"}, {"polarity", ""}, {"x", ""}, {strings.Repeat("n", 1000), ""},
	} {
		got, ok := nearest(c.text, known)
		if got != c.want || ok != (c.want != "") {
			t.Errorf("nearest(%.20q) = %q, %v, want %q", c.text, got, ok, c.want)
		}
	}
}

// Distances worked out by hand from the definition in Damerau 1964: one each
// for a letter added, dropped, changed, two neighbours swapped.
func TestDistanceCountsSlips(t *testing.T) {
	for _, c := range []struct {
		a, b string
		want int
	}{
		{"", "", 0}, {"abc", "abc", 0}, {"abc", "abcd", 1}, {"abc", "ac", 1}, {"abc", "axc", 1}, {"abc", "acb", 1},
		{"", "abc", 3}, {"kitten", "sitting", 3}, {"ca", "abc", 3}, {"größe", "grösse", 2},
	} {
		if got := distance(c.a, c.b); got != c.want {
			t.Errorf("distance(%q, %q) = %d, want %d", c.a, c.b, got, c.want)
		}
		if got := distance(c.b, c.a); got != c.want {
			t.Errorf("distance(%q, %q) = %d, want %d", c.b, c.a, got, c.want)
		}
	}
}
