package sheet

import (
	"encoding/json"
	"fmt"
	"reflect"
	"runtime"
	"strings"
	"testing"
	"time"
)

// parsed returns the tree of a text as encoding/json would have it.
func parsed(t testing.TB, text string) (any, error) {
	t.Helper()
	d := Parse("x.yaml", []byte(text), nil)
	if err := d.Err(); err != nil {
		return nil, err
	}
	raw, err := json.Marshal(d.root.value(true))
	if err != nil {
		t.Fatal(err)
	}
	var v any
	if err := json.Unmarshal(raw, &v); err != nil {
		t.Fatal(err)
	}
	return v, nil
}

// YAML 1.2.2, section 10.3.2 (core schema) and its examples 10.9 and 2.19 to
// 2.21, from memory; and the traps of YAML 1.1 that it did away with.
func TestPlainValuesFollowTheCoreSchema(t *testing.T) {
	for _, c := range []struct {
		text string
		want any
	}{
		{"0", 0.0}, {"-19", -19.0}, {"+12", 12.0}, {"0o14", 12.0}, {"0xC", 12.0},
		{"1.23015e+3", 1230.15}, {"12.3015e+02", 1230.15}, {"1e3", 1000.0}, {"1E-2", 0.01}, {"-1.", -1.0}, {".5", 0.5}, {"-0.0", 0.0}, {"1.50", 1.5},
		{"true", true}, {"False", false}, {"TRUE", true},
		{"null", nil}, {"~", nil}, {"", nil}, {"Null", nil},
		{"yes", "yes"}, {"off", "off"}, {"y", "y"}, {"1_000", "1_000"}, {"12:30:00", "12:30:00"}, {"2026-12-01", "2026-12-01"}, {"0b11", "0b11"},
		{`"12"`, "12"}, {"'true'", "true"}, {`"null"`, "null"}, {`"a\tb\u00e9"`, "a\tbé"}, {"'it''s'", "it's"},
		{"a b", "a b"}, {"x#y", "x#y"}, {"x # y", "x"}, {"1 2", "1 2"}, {"e5", "e5"},
		{"[1, two, {a: 3}]", []any{1.0, "two", map[string]any{"a": 3.0}}},
		{"{}", map[string]any{}}, {"[]", []any{}},
		{"|\n  two\n  lines", "two\nlines\n"}, {">-\n  two\n  lines", "two lines"},
		{"9007199254740993", 9007199254740993.0}, {"123456789012345678901234567890", 1.2345678901234568e29},
		{"2.2250738585072014e-308", 2.2250738585072014e-308}, {"1e-400", 0.0},
	} {
		v, err := parsed(t, "k: "+c.text+"\n")
		if err != nil {
			t.Errorf("%q: %v", c.text, err)
			continue
		}
		if got := v.(map[string]any)["k"]; !reflect.DeepEqual(got, c.want) {
			t.Errorf("%q = %#v, want %#v", c.text, got, c.want)
		}
	}
}

func TestBothLayoutsAndJSONGiveTheSameTree(t *testing.T) {
	want, err := parsed(t, `{"a": [1, {"b": "x", "c": null}], "d": {"e": true}}`)
	if err != nil {
		t.Fatal(err)
	}
	for name, text := range map[string]string{
		"block":              "a:\n  - 1\n  - b: x\n    c:\nd:\n  e: true\n",
		"flow":               "a: [1, {b: x, c: ~}]\nd: {e: true}\n",
		"JSON with tabs":     "{\n\t\"a\": [1,\n\t\t{\"b\": \"x\", \"c\": null}],\n\t\"d\": {\"e\": true}\n}\n",
		"CRLF":               "a:\r\n  - 1\r\n  - b: x\r\n    c:\r\nd:\r\n  e: true\r\n",
		"CR alone":           "a: [1, {b: x, c: ~}]\rd: {e: true}\r",
		"byte order mark":    "\ufeffa: [1, {b: x, c: ~}]\nd: {e: true}\n",
		"document marks":     "---\na: [1, {b: x, c: ~}]\nd: {e: true}\n...\n",
		"comments":           "# one\na: [1, {b: x, c: ~}] # two\n# three\nd: {e: true}\n# four",
		"no end of line":     "a: [1, {b: x, c: ~}]\nd: {e: true}",
		"anchors":            "x: &x {e: true}\na: [1, {b: x, c: ~}]\nd: *x\n",
		"list not indented":  "a:\n- 1\n- b: x\n  c: null\nd:\n  e: true\n",
		"quoted keys":        "'a': [1, {\"b\": x, c: ~}]\n\"d\": {e: true}\n",
		"flow over lines":    "a: [\n  1,\n  {b: x,\n   c: ~},\n]\nd: {\n  e: true\n}\n",
		"many empty lines":   "\n\n\na: [1, {b: x, c: ~}]\n\n\nd: {e: true}\n\n",
		"trailing blanks":    "a: [1, {b: x, c: ~}]   \nd: {e: true}  \n",
		"deeper indentation": "a:\n        - 1\n        - b: x\n          c:\nd:\n    e: true\n",
	} {
		got, err := parsed(t, text)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		m := got.(map[string]any)
		delete(m, "x")
		if !reflect.DeepEqual(got, want) {
			t.Errorf("%s: got %v, want %v", name, got, want)
		}
	}
}

func TestWhatIsNotReadIsRefusedWithItsPlace(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"empty", "", "x.yaml:1:1: the file is empty"},
		{"blank", " \n\n", "x.yaml:1:1: the file is empty"},
		{"comment alone", "# nothing\n", "x.yaml:1:1: the file is empty"},
		{"a text", "just text\n", "x.yaml:1:1: got string, want key: value lines"},
		{"a list", "- a\n- b\n", "x.yaml:1:1: got list, want key: value lines"},
		{"two documents", "a: 1\n---\nb: 2\n", "x.yaml:2:1: a second document in the file, want one"},
		{"directive", "%YAML 1.1\n---\na: 1\n", "x.yaml:1:1: a directive, none is read"},
		{"tag", "a: !!int 5\n", `x.yaml:1:4: a: tag "!!int": tags are not read`},
		{"tag on a mapping", "a: !mic {b: 1}\n", `x.yaml:1:4: a: tag "!mic": tags are not read`},
		{"merge key", "x: &x {a: 1}\ny:\n  <<: *x\n", "x.yaml:3:3: y: merge keys are not read: write the keys out"},
		{"key twice", "a: 1\nb: 2\na: 3\n", "x.yaml:3:1: a: key given twice, first in line 1"},
		{"key twice in flow", "m: {a: 1, b: 2, 'a': 3}\n", "x.yaml:1:17: m.a: key given twice, first in line 1"},
		{"tab", "a:\n\tb: 1\n", "x.yaml:2:1: not readable as YAML: a tab in the indentation, want spaces"},
		{"tab after blanks", "a:\n  b: 1\n  \tc: 1\n", "a tab in the indentation"},
		{"unclosed list", "a: [1, 2\nb: 3\n", "x.yaml:2:1: not readable as YAML: ',' or ']' must be specified"},
		{"unclosed text", "a: \"x\n", "x.yaml:1:4: not readable as YAML"},
		{"not a number", "a: .nan\n", "x.yaml:1:4: a: .nan is not a finite number"},
		{"infinity", "a: [1, -.INF]\n", "x.yaml:1:8: a[1]: -.INF is not a finite number"},
		{"beyond range", "a: 1e999\n", `x.yaml:1:4: a: "1e999" is not a finite number`},
		{"leading zero", "a: 010\n", `x.yaml:1:4: a: "010": a number with a leading zero (quote it if it is a text)`},
		{"undefined alias", "a: *x\n", "x.yaml:1:4: a: alias *x has no anchor before it"},
		{"alias in its anchor", "a: &x [1, *x]\n", "x.yaml:1:11: a[1]: alias *x lies inside its own anchor"},
		{"UTF-16", "\xff\xfea\x00", "x.yaml:1:1: text in utf-16, want utf-8"},
		{"Latin-1", "a: 1\nb: caf\xe9\n", "x.yaml:2:7: byte 0xe9 is not utf-8"},
		{"control character", "a: 1\nb: \x00\n", "x.yaml:2:4: control character 0x00 in the text"},
		{"escape character", "a: \x1b[31m\n", "x.yaml:1:4: control character 0x1b in the text"},
		{"a list as key", "[a]: 1\n", "x.yaml:1:"},
	} {
		d := Parse("x.yaml", []byte(c.text), nil)
		err := d.Err()
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, want %q", c.name, err, c.want)
		}
	}
}

func TestColumnsCountCharacters(t *testing.T) {
	d := Parse("x.yaml", []byte("ü: {é: 'ö', 音: .nan}\n"), nil)
	if err := d.Err(); err == nil || !strings.HasPrefix(err.Error(), `x.yaml:1:16: "ü"."音": .nan`) {
		t.Errorf("got %v", err)
	}
}

// laughs is the doubling alias document: n levels hold 2^n values.
func laughs(n int) string {
	var b strings.Builder
	b.WriteString("a0: &a0 [1, 1]\n")
	for i := 1; i <= n; i++ {
		fmt.Fprintf(&b, "a%d: &a%d [*a%d, *a%d]\n", i, i, i-1, i-1)
	}
	return b.String()
}

func TestHostileFilesAreRefusedCheaply(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"too large", "a: " + strings.Repeat("x", MaxBytes), "at most 4194304 are read"},
		{"aliases that double", laughs(40), "with every alias written out"},
		{"deep flow", "a: " + strings.Repeat("[", 10_000), "more than 64 levels"},
		{"deep closed flow", "a: " + strings.Repeat("[", 200) + strings.Repeat("]", 200), "more than 64 levels"},
		{"deep mappings", "a: " + strings.Repeat("{a: ", 10_000), "more than 64 levels"},
		{"deep dashes", strings.Repeat("- ", 20_000), "more than 64 levels"},
		{"deep keys", strings.Repeat("? ", 20_000), "more than 64 levels"},
		{"deep indentation", deepBlock(200), "more than 64 levels"},
		{"alias chain", aliasChain(100), "more than 64 levels"},
		{"many values", "a: [" + strings.Repeat("0,", 2_000_000) + "0]", "at most 50000 are read"},
		{"many lines", strings.Repeat("\n", 60_000), "at most 50000 are read"},
		{"many tags", "a: " + strings.Repeat("!a ", 40_000), "more than 64 levels"},
		{"many anchors", "a: " + strings.Repeat("&a ", 40_000), "more than 64 levels"},
		{"many values behind a comment sign", "a: [' #', " + strings.Repeat("0,", 2_000_000) + "0]", "at most 50000 are read"},
	} {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		start := time.Now()
		d := Parse("x.yaml", []byte(c.text), nil)
		took := time.Since(start)
		runtime.ReadMemStats(&after)
		err := d.Err()
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %.200v, want %q", c.name, err, c.want)
		}
		if mb := (after.TotalAlloc - before.TotalAlloc) >> 20; mb > 200 {
			t.Errorf("%s: %d MB allocated", c.name, mb)
		}
		if took > 3*time.Second {
			t.Errorf("%s: took %v", c.name, took)
		}
	}
}

func deepBlock(n int) string {
	var b strings.Builder
	for i := range n {
		fmt.Fprintf(&b, "%sa:\n", strings.Repeat(" ", i))
	}
	return b.String()
}

// aliasChain nests by aliases what is not nested in the text.
func aliasChain(n int) string {
	var b strings.Builder
	b.WriteString("a0: &a0 [1]\n")
	for i := 1; i <= n; i++ {
		fmt.Fprintf(&b, "a%d: &a%d [*a%d]\n", i, i, i-1)
	}
	return b.String()
}

func FuzzParseNeverPanicsAndFindsEveryFaultInTheText(f *testing.F) {
	for _, seed := range []string{
		"name: four\nmicrophones:\n  - {channel: 1, at_mm: [-140, 0, 0]}\n", "a: &x [1]\nb: *x\n", "{\"a\": [1, 2]}", "a: |\n  b\n",
		"? a\n: b\n", "- - - 1", "a: !t b", "\ta: 1", "a: 'x\n\n y'", "%YAML 1.2\n---\na: 1\n...\n", "{a: 1, a: 2}", "a: >2-\n   x\n",
	} {
		f.Add(seed)
	}
	schema := gaugeSchema(f)
	f.Fuzz(func(t *testing.T, text string) {
		if len(text) > 1<<16 {
			return
		}
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		d := Parse("x.yaml", []byte(text), schema)
		var g gauge
		d.Fill(&g)
		err := d.Err()
		runtime.ReadMemStats(&after)
		if mb := (after.TotalAlloc - before.TotalAlloc) >> 20; mb > 256 {
			t.Fatalf("%d MB for %d bytes", mb, len(text))
		}
		if err == nil {
			return
		}
		faults := err.(*FaultsError)
		lines := strings.Count(d.text, "\n") + 1
		for _, fault := range faults.Faults {
			if fault.Line < 1 || fault.Line > lines || fault.Column < 1 || fault.Message == "" {
				t.Fatalf("a fault out of place: %+v in %q", fault, text)
			}
		}
		if faults.Annotated() == "" {
			t.Fatal("no text")
		}
	})
}
