package sheet

import (
	"errors"
	"fmt"
	"strings"
	"testing"
)

// gauge is a form with one of everything: text, number, list, nested list,
// enum, optional part.
type gauge struct {
	Name  string   `json:"name" jsonschema:"minLength=1"`
	Kind  string   `json:"kind,omitempty" jsonschema:"enum=dry,enum=wet"`
	Mics  []mic    `json:"microphones,omitempty"`
	Limit *float64 `json:"limit_db,omitempty" jsonschema:"minimum=0,maximum=60"`
}

type mic struct {
	Channel int       `json:"channel" jsonschema:"minimum=1,maximum=256"`
	At      []float64 `json:"at_mm" jsonschema:"minItems=2,maxItems=3"`
	Use     *bool     `json:"use,omitempty"`
}

func gaugeSchema(t testing.TB) *Schema {
	t.Helper()
	text, err := SchemaOf(gauge{}, "urn:test:gauge", "A gauge")
	if err != nil {
		t.Fatal(err)
	}
	s, err := NewSchema(text)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func TestEveryFaultComesAtOnceInFileOrderWithItsPlace(t *testing.T) {
	const text = `name: four
kind: wett
microphones:
  - {channel: 1, at_mm: [-140, 0, 0]}
  - {channel: 0, at_mm: [77.8, 77.8, zero]}
  - {chanel: 3, at_mm: [1]}
  - {channel: 2.5, at_mm: [1, 2], use: 1}
  - channel: 4
    at_mm: 5
    at_mm: 6
limit: 3
`
	const want = `g.yaml:2:7: kind: got "wett", want one of dry, wet (wet?)
g.yaml:5:15: microphones[1].channel: got 0, want at least 1
g.yaml:5:38: microphones[1].at_mm[2]: got string, want number
g.yaml:6:5: microphones[2]: missing key "channel"
g.yaml:6:6: microphones[2].chanel: unknown key, did you mean "channel"?
g.yaml:6:24: microphones[2].at_mm: 1 entry, want at least 2
g.yaml:7:15: microphones[3].channel: got 2.5, want whole number
g.yaml:7:40: microphones[3].use: got number, want true or false
g.yaml:9:12: microphones[4].at_mm: got number, want list
g.yaml:10:5: microphones[4].at_mm: key given twice, first in line 9
g.yaml:11:1: limit: unknown key, did you mean "limit_db"?`
	var g gauge
	err := Decode("g.yaml", []byte(text), gaugeSchema(t), &g)
	var faults *FaultsError
	if !errors.As(err, &faults) {
		t.Fatalf("Decode gave %v, want a *FaultsError", err)
	}
	if got := faults.Error(); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	if !strings.Contains(faults.Annotated(), `
     5 |   - {channel: 0, at_mm: [77.8, 77.8, zero]}
       |                                      ^
`) {
		t.Errorf("no caret under zero in\n%s", faults.Annotated())
	}
	if g.Name != "four" || len(g.Mics) != 5 || g.Mics[0].Channel != 1 || g.Mics[1].At[1] != 77.8 || g.Mics[1].At[2] != 0 {
		t.Errorf("what is sound was not filled in: %+v", g)
	}
}

func TestDocumentKnowsWhatIsGivenAndWhatIsSound(t *testing.T) {
	d := Parse("g.yaml", []byte("name: x\nlimit_db: 99\nmicrophones:\n  - {channel: 1, at_mm: [1, two]}\n  - {channel: 2}\n"), gaugeSchema(t))
	for _, c := range []struct {
		path         string
		given, sound bool
	}{
		{"", true, true}, {"name", true, true}, {"limit_db", true, false}, {"kind", false, false},
		{"microphones", true, true}, {"microphones[0].at_mm", true, true}, {"microphones[0].at_mm[0]", true, true},
		{"microphones[0].at_mm[1]", true, false}, {"microphones[1].at_mm", false, false}, {"microphones[2]", false, false}, {"name.x", false, false},
	} {
		if d.Given(c.path) != c.given || d.Has(c.path) != c.sound {
			t.Errorf("%q: given %v, has %v, want %v, %v", c.path, d.Given(c.path), d.Has(c.path), c.given, c.sound)
		}
	}
	if n := d.Len("microphones"); n != 2 {
		t.Errorf("Len = %d", n)
	}
	if n := d.Len("name") + d.Len("nothing"); n != 0 {
		t.Errorf("Len of what is no list = %d", n)
	}
	for _, c := range []struct {
		path         string
		line, column int
	}{{"name", 1, 7}, {"microphones[0].at_mm[1]", 4, 29}, {"microphones[1].at_mm[2]", 5, 5}, {"kind", 1, 1}} {
		if l, col := d.Place(c.path); l != c.line || col != c.column {
			t.Errorf("Place(%q) = %d:%d, want %d:%d", c.path, l, col, c.line, c.column)
		}
	}
	d.Fault("microphones[1].channel", "got %d", 2)
	d.KeyFault("microphones", "no good")
	const want = `g.yaml:2:11: limit_db: got 99, want at most 60
g.yaml:3:1: microphones: no good
g.yaml:4:29: microphones[0].at_mm[1]: got string, want number
g.yaml:5:5: microphones[1]: missing key "at_mm"
g.yaml:5:15: microphones[1].channel: got 2`
	if err := d.Err(); err == nil || err.Error() != want {
		t.Errorf("got\n%v\nwant\n%s", err, want)
	}
}

func TestDocumentThatIsNoYAMLHasNothing(t *testing.T) {
	d := Parse("g.yaml", []byte("a: [\n"), gaugeSchema(t))
	var g gauge
	d.Fill(&g)
	d.Fault("name", "said on top")
	if d.Has("") || d.Given("a") || d.Len("a") != 0 || d.Err() == nil {
		t.Errorf("a broken file has something: %v", d.Err())
	}
	if l, c := d.Place("a.b"); l != 1 || c != 1 {
		t.Errorf("Place = %d:%d", l, c)
	}
}

func TestAManyFaultedFileIsCutShort(t *testing.T) {
	err := Decode("g.yaml", []byte("name: x\n"+manyUnknown(250)), gaugeSchema(t), &gauge{})
	var faults *FaultsError
	if !errors.As(err, &faults) || len(faults.Faults) != 100 || faults.More != 150 {
		t.Fatalf("got %v", err)
	}
	for _, text := range []string{faults.Error(), faults.Annotated()} {
		if !strings.HasSuffix(text, "\ng.yaml: and 150 more faults") {
			t.Errorf("the end says nothing of the rest: %q", text[len(text)-60:])
		}
	}
}

func manyUnknown(n int) string {
	var b strings.Builder
	for i := range n {
		b.WriteString("zzz" + string(rune('a'+i%26)) + string(rune('a'+i/26)) + ": 1\n")
	}
	return b.String()
}

func TestCaretStandsUnderTheValueInLongLines(t *testing.T) {
	line := "name: x\nlimit_db: 5\nkind: " + strings.Repeat("é", 150) + "\n"
	err := Decode("g.yaml", []byte("microphones: [{channel: 1, at_mm: ["+strings.Repeat("1.25, ", 60)+"two]}]\n"+line), gaugeSchema(t), &gauge{})
	text := Annotated(err)
	lines := strings.Split(text, "\n")
	found := 0
	for i, l := range lines {
		if !strings.HasSuffix(l, "^") {
			continue
		}
		caret := len([]rune(l)) - 1
		source := []rune(lines[i-1])
		if caret >= len(source) {
			t.Errorf("caret beyond the line:\n%s\n%s", lines[i-1], l)
			continue
		}
		under := string(source[caret:min(caret+3, len(source))])
		if under != "two" && under != "ééé" && under != "[1." {
			t.Errorf("caret under %q:\n%s\n%s", under, lines[i-1], l)
		}
		if len(source) > 120 {
			t.Errorf("%d characters: %s", len(source), lines[i-1])
		}
		found++
	}
	if found < 3 {
		t.Errorf("%d carets in\n%s", found, text)
	}
}

func TestAnnotatedKeepsWhatWasPutAround(t *testing.T) {
	schema := gaugeSchema(t)
	one := Decode("a.yaml", []byte("name: 5\n"), schema, &gauge{})
	two := ParseTable("b.csv", []byte("a\n"), []Column{{"b", true}}).Err()
	text := Annotated(errors.Join(fmt.Errorf("job: %w", one), two, errors.New("plain")))
	const want = `job: a.yaml:1:7: name: got number, want string
     1 | name: 5
       |       ^
b.csv:1:1: a: unknown column, known are b
     1 | a
       | ^
b.csv:1:1: missing column "b"
     1 | a
       | ^
plain`
	if text != want {
		t.Errorf("got\n%s\nwant\n%s", text, want)
	}
	if Annotated(nil) != "" {
		t.Error("no error has a text")
	}
}

func TestNumbersThatTheStructCannotHoldAreFaults(t *testing.T) {
	s, err := NewSchema([]byte(`{"$id": "urn:test:n", "type": "object"}`))
	if err != nil {
		t.Fatal(err)
	}
	var into struct {
		A int     `json:"a"`
		B float64 `json:"b"`
		C []int8  `json:"c"`
	}
	err = Decode("n.yaml", []byte("b: 2\na: 123456789012345678901234567890\n"), s, &into)
	if err == nil || !strings.HasPrefix(err.Error(), "n.yaml:2:4: a: got number") {
		t.Errorf("got %v", err)
	}
	err = Decode("n.yaml", []byte("c: [1, 300]\n"), s, &into)
	if err == nil || !strings.HasPrefix(err.Error(), "n.yaml:1:") {
		t.Errorf("got %v", err)
	}
}
