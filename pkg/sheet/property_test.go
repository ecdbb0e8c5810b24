package sheet

import (
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"reflect"
	"strconv"
	"strings"
	"testing"
)

// grown is a random tree with its text in three layouts. Every scalar has a
// text of its own, so that its place can be looked up.
type grown struct {
	rng    *rand.Rand
	leaves map[string]string // path to the text of a scalar
	next   int
}

func (g *grown) word() string {
	g.next++
	return fmt.Sprintf("w%dw", g.next)
}

func (g *grown) tree(path string, depth int) any {
	kind := g.rng.IntN(6)
	if depth == 0 {
		kind = g.rng.IntN(2)
		if path == "" {
			kind = 5
		}
	}
	if path == "" {
		kind = 5
	}
	switch kind {
	case 0:
		w := g.word()
		g.leaves[path] = w
		return w
	case 1:
		// A number that no other text holds: digits on both sides of the point.
		g.next++
		text := fmt.Sprintf("%d.%d5", 1000+g.next, 1000+g.next)
		g.leaves[path] = text
		return json.Number(text)
	case 2, 3:
		n := 1 + g.rng.IntN(4)
		list := make([]any, n)
		for i := range list {
			list[i] = g.tree(fmt.Sprintf("%s[%d]", path, i), depth-1)
		}
		return list
	}
	n := 1 + g.rng.IntN(4)
	m := map[string]any{}
	for range n {
		k := g.word()
		below := k
		if path != "" {
			below = path + "." + k
		}
		m[k] = g.tree(below, depth-1)
	}
	return m
}

// block writes a tree as indented YAML, a comment here and there.
func block(b *strings.Builder, rng *rand.Rand, v any, indent string) {
	note := func() string {
		if rng.IntN(4) == 0 {
			return "   # été: [not, {read"
		}
		return ""
	}
	entry := func(v any, deeper string) {
		switch v.(type) {
		case map[string]any, []any:
			b.WriteString(note() + "\n")
			block(b, rng, v, indent+deeper)
		default:
			fmt.Fprintf(b, " %v%s\n", v, note())
		}
	}
	switch x := v.(type) {
	case map[string]any:
		for k, v := range x { // any order: a mapping has none
			b.WriteString(indent + k + ":")
			entry(v, "  ")
		}
	case []any:
		for _, v := range x {
			b.WriteString(indent + "-")
			entry(v, "    ")
		}
	}
}

// flow writes a tree between brackets, lines broken here and there.
func flow(b *strings.Builder, rng *rand.Rand, v any) {
	gap := func() {
		if rng.IntN(3) == 0 {
			b.WriteString("\n      ")
		} else {
			b.WriteString(" ")
		}
	}
	switch x := v.(type) {
	case map[string]any:
		b.WriteString("{")
		first := true
		for k, v := range x {
			if !first {
				b.WriteString(",")
				gap()
			}
			first = false
			b.WriteString(k + ": ")
			flow(b, rng, v)
		}
		b.WriteString("}")
	case []any:
		b.WriteString("[")
		for i, v := range x {
			if i > 0 {
				b.WriteString(",")
				gap()
			}
			flow(b, rng, v)
		}
		b.WriteString("]")
	default:
		fmt.Fprint(b, v)
	}
}

func TestRandomTreesAreReadInEveryLayoutWithEveryPlaceRight(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 11))
	anything, err := NewSchema([]byte(`{"$id": "urn:test:any"}`))
	if err != nil {
		t.Fatal(err)
	}
	leaves := 0
	for range 300 {
		g := &grown{rng: rng, leaves: map[string]string{}}
		tree := g.tree("", 5)
		texts := map[string]string{}
		var b strings.Builder
		block(&b, rng, tree, "")
		texts["block"] = b.String()
		b.Reset()
		flow(&b, rng, tree)
		texts["flow"] = b.String()
		indented, err := json.MarshalIndent(tree, "", " ")
		if err != nil {
			t.Fatal(err)
		}
		texts["JSON"] = string(indented)
		for layout, text := range texts {
			d := Parse("x", []byte(text), nil)
			if layout == "JSON" && rng.IntN(2) == 0 {
				// The reader of JSON alone must agree.
				var into map[string]any
				if err := DecodeJSON("x", []byte(text), anything, &into); err != nil {
					t.Fatalf("%v\n%s", err, text)
				}
			}
			if err := d.Err(); err != nil {
				t.Fatalf("%s: %v\n%s", layout, err, text)
			}
			if got := d.root.value(true); !reflect.DeepEqual(got, tree) {
				t.Fatalf("%s: got %v, want %v\n%s", layout, got, tree, text)
			}
			lines := strings.Split(text, "\n")
			for path, leaf := range g.leaves {
				line, column := d.Place(path)
				rest := string([]rune(lines[line-1])[column-1:])
				if !strings.HasPrefix(strings.TrimPrefix(rest, `"`), leaf) {
					t.Fatalf("%s: %s is placed at %d:%d, before %q, want %q\n%s", layout, path, line, column, rest, leaf, text)
				}
				if !d.Has(path) || !d.Given(path) {
					t.Fatalf("%s: %s is not there", layout, path)
				}
				leaves++
			}
		}
	}
	if leaves < 5000 {
		t.Errorf("only %d values looked up", leaves)
	}
}

// A schema that refuses one value after the other: its fault must lie on that
// value, and what is filled in must be all the others.
func TestOneRefusedValueLeavesAllOthers(t *testing.T) {
	type row struct {
		Level float64 `json:"level" jsonschema:"minimum=0,maximum=9"`
		Name  string  `json:"name" jsonschema:"maxLength=4"`
	}
	type table struct {
		Rows []row `json:"rows"`
	}
	text, err := SchemaOf(table{}, "urn:test:rows", "rows")
	if err != nil {
		t.Fatal(err)
	}
	schema, err := NewSchema(text)
	if err != nil {
		t.Fatal(err)
	}
	const n = 12
	for bad := range 2 * n {
		var b strings.Builder
		b.WriteString("rows:\n")
		for i := range n {
			level, name := strconv.Itoa(i%10), "r"+strconv.Itoa(i)
			if bad == 2*i {
				level = "10"
			}
			if bad == 2*i+1 {
				name = "longer"
			}
			fmt.Fprintf(&b, "- {level: %s, name: %s}\n", level, name)
		}
		var into table
		err := Decode("x", []byte(b.String()), schema, &into)
		column, field, words := 11, "level", "got 10, want at most 9"
		if bad%2 == 1 {
			column, field, words = 20, "name", "6 characters, want at most 4"
		}
		want := fmt.Sprintf("x:%d:%d: rows[%d].%s: %s", bad/2+2, column, bad/2, field, words)
		if err == nil || err.Error() != want {
			t.Fatalf("got %v, want %s", err, want)
		}
		for i, r := range into.Rows {
			if level := float64(i % 10); bad != 2*i && r.Level != level || bad == 2*i && r.Level != 0 {
				t.Errorf("bad %d: row %d has level %g", bad, i, r.Level)
			}
			if name := "r" + strconv.Itoa(i); bad != 2*i+1 && r.Name != name || bad == 2*i+1 && r.Name != "" {
				t.Errorf("bad %d: row %d has name %q", bad, i, r.Name)
			}
		}
	}
}
