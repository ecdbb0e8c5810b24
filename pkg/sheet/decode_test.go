package sheet

import (
	"errors"
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
