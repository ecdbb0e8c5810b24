package sheet

import (
	"encoding/json"
	"errors"
	"fmt"
	"math/big"
	"slices"
	"strconv"
	"strings"

	"github.com/santhosh-tekuri/jsonschema/v6"
	violation "github.com/santhosh-tekuri/jsonschema/v6/kind"
)

// check holds the tree against the schema and adds a fault for each violation.
func (d *Document) check(s *Schema) {
	err := s.compiled.Validate(d.root.value(false))
	if err == nil {
		return
	}
	var v *jsonschema.ValidationError
	if !errors.As(err, &v) {
		d.add(1, 1, "", "not comparable with the form: %v", err)
		return
	}
	d.violations(s, v)
}

// violations adds the faults of a violation and of its causes.
func (d *Document) violations(s *Schema, v *jsonschema.ValidationError) {
	switch v.ErrorKind.(type) {
	case *violation.AnyOf, *violation.OneOf:
		d.noForm(s, v)
		return
	}
	if len(v.Causes) > 0 {
		for _, cause := range v.Causes {
			d.violations(s, cause)
		}
		return
	}
	at, path := d.locate(v.InstanceLocation)
	if at.bad {
		return // said already
	}
	switch k := v.ErrorKind.(type) {
	case *violation.AdditionalProperties:
		known := s.keysAt(v.SchemaURL)
		names := slices.Clone(k.Properties)
		slices.Sort(names)
		for _, name := range names {
			entry, ok := at.get(name)
			if !ok {
				continue
			}
			entry.value.bad = true
			below := append(path[:len(path):len(path)], step{name: name, index: -1})
			d.add(entry.line, entry.column, join(below), "%s", unknownKey(name, known, at))
		}
	case *violation.Required:
		names := slices.Clone(k.Missing)
		slices.Sort(names)
		for _, name := range names {
			d.add(at.line, at.column, join(path), "missing key %q", name)
		}
	default:
		at.bad = true
		d.add(at.line, at.column, join(path), "%s", words(v.ErrorKind, at))
	}
}

// noForm adds the faults of a value that fits none of several forms: what the
// forms want instead if none of them fits its kind, else what is wrong with
// the form that it comes nearest to.
func (d *Document) noForm(s *Schema, v *jsonschema.ValidationError) {
	at, path := d.locate(v.InstanceLocation)
	if at.bad {
		return
	}
	if one, ok := v.ErrorKind.(*violation.OneOf); ok && len(one.Subschemas) > 0 {
		at.bad = true
		d.add(at.line, at.column, join(path), "fits two forms at once, want one")
		return
	}
	var wants []string
	var nearest *jsonschema.ValidationError
	for _, cause := range v.Causes {
		leaf := cause
		for len(leaf.Causes) == 1 {
			leaf = leaf.Causes[0]
		}
		k, isType := leaf.ErrorKind.(*violation.Type)
		if isType && len(leaf.InstanceLocation) == len(v.InstanceLocation) {
			wants = append(wants, k.Want...)
			continue
		}
		if nearest == nil {
			nearest = cause
		}
	}
	if nearest != nil {
		d.violations(s, nearest)
		return
	}
	at.bad = true
	d.add(at.line, at.column, join(path), "%s", words(&violation.Type{Want: wants}, at))
}

// locate returns the value at a location of the validator.
func (d *Document) locate(location []string) (*node, []step) {
	at := d.root
	var path []step
	for _, part := range location {
		s := step{name: part, index: -1}
		if at.kind == kindList {
			if i, err := strconv.Atoi(part); err == nil {
				s = step{index: i}
			}
		}
		next, _, ok := at.walk([]step{s})
		if !ok {
			break
		}
		at, path = next, append(path, s)
	}
	return at, path
}

// words says what is wrong with a value.
func words(k jsonschema.ErrorKind, at *node) string {
	switch k := k.(type) {
	case *violation.Type:
		return fmt.Sprintf("got %s, want %s", got(at, k.Want), wantKinds(k.Want))
	case *violation.Enum:
		return enumWords(k.Want, at)
	case *violation.Const:
		return fmt.Sprintf("got %s, want %s", at.shown(), shownValue(k.Want))
	case *violation.Minimum:
		return fmt.Sprintf("got %s, want at least %s", at.shown(), rat(k.Want))
	case *violation.Maximum:
		return fmt.Sprintf("got %s, want at most %s", at.shown(), rat(k.Want))
	case *violation.ExclusiveMinimum:
		return fmt.Sprintf("got %s, want above %s", at.shown(), rat(k.Want))
	case *violation.ExclusiveMaximum:
		return fmt.Sprintf("got %s, want below %s", at.shown(), rat(k.Want))
	case *violation.MultipleOf:
		return fmt.Sprintf("got %s, want a multiple of %s", at.shown(), rat(k.Want))
	case *violation.MinItems:
		return fmt.Sprintf("%s, want at least %d", count(k.Got, "entry", "entries"), k.Want)
	case *violation.MaxItems:
		return fmt.Sprintf("%s, want at most %d", count(k.Got, "entry", "entries"), k.Want)
	case *violation.MinProperties:
		return fmt.Sprintf("%s, want at least %d", count(k.Got, "key", "keys"), k.Want)
	case *violation.MaxProperties:
		return fmt.Sprintf("%s, want at most %d", count(k.Got, "key", "keys"), k.Want)
	case *violation.MinLength:
		if k.Got == 0 {
			return "an empty text"
		}
		return fmt.Sprintf("%s, want at least %d", count(k.Got, "character", "characters"), k.Want)
	case *violation.MaxLength:
		return fmt.Sprintf("%s, want at most %d", count(k.Got, "character", "characters"), k.Want)
	case *violation.Pattern:
		return fmt.Sprintf("%s does not have the form %s", at.shown(), k.Want)
	case *violation.UniqueItems:
		return fmt.Sprintf("entries %d and %d are equal", k.Duplicates[0]+1, k.Duplicates[1]+1)
	case *violation.FalseSchema:
		return "nothing is allowed here"
	}
	return fmt.Sprintf("%s does not keep %q of the form", at.kind, strings.Join(k.KeywordPath(), " "))
}

func count(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// got says what stands there, in the words of wantKinds.
func got(at *node, want []string) string {
	if at.kind == kindNumber && slices.Contains(want, "integer") {
		return at.number.String()
	}
	return at.kind.String()
}

func wantKinds(kinds []string) string {
	names := map[string]string{
		"integer": "whole number", "boolean": "true or false", "array": "list", "object": "mapping", "null": "nothing",
	}
	var list []string
	for _, k := range kinds {
		name := k
		if n, ok := names[k]; ok {
			name = n
		}
		if !slices.Contains(list, name) {
			list = append(list, name)
		}
	}
	return strings.Join(list, " or ")
}

func enumWords(want []any, at *node) string {
	var list, texts []string
	for _, w := range want {
		list = append(list, shownValue(w))
		if s, ok := w.(string); ok {
			texts = append(texts, s)
		}
	}
	if at.kind == kindText {
		if near, ok := nearest(at.text, texts); ok {
			return fmt.Sprintf("got %s, want one of %s (%s?)", at.shown(), strings.Join(list, ", "), near)
		}
	}
	return fmt.Sprintf("got %s, want one of %s", at.shown(), strings.Join(list, ", "))
}

// shown returns the value itself where it is short, else its kind.
func (n *node) shown() string {
	switch n.kind {
	case kindNumber:
		return n.number.String()
	case kindText:
		return show(n.text)
	case kindBool:
		return strconv.FormatBool(n.truth)
	}
	return n.kind.String()
}

func shownValue(v any) string {
	text, err := json.Marshal(v)
	if err != nil {
		return fmt.Sprint(v)
	}
	return strings.Trim(string(text), `"`)
}

func rat(r *big.Rat) string {
	f, _ := r.Float64()
	return strconv.FormatFloat(f, 'g', -1, 64)
}

// unknownKey says that a key is not known, with the nearest one that is and is
// not given already, or with all of them where there are few.
func unknownKey(name string, known []string, at *node) string {
	var free []string
	for _, k := range known {
		if _, given := at.get(k); !given {
			free = append(free, k)
		}
	}
	if near, ok := nearest(name, free); ok {
		return fmt.Sprintf("unknown key, did you mean %q?", near)
	}
	if near, ok := nearest(name, known); ok {
		return fmt.Sprintf("unknown key; %q is given already", near)
	}
	if len(known) == 0 {
		return "unknown key"
	}
	slices.Sort(known)
	return "unknown key, known are " + strings.Join(known, ", ")
}

// nearest returns the word of words that text was probably meant to be.
func nearest(text string, words []string) (string, bool) {
	if len(text) > 80 {
		return "", false
	}
	best, bestDistance := "", len(text)/3+1
	sorted := slices.Clone(words)
	slices.Sort(sorted)
	for _, w := range sorted {
		d := distance(strings.ToLower(text), strings.ToLower(w))
		if p := strings.ToLower(text); len(p) >= 3 && (strings.HasPrefix(w, p+"_") || strings.HasPrefix(p, w+"_")) {
			d = min(d, 1) // a unit left off, or the wrong one
		}
		if d >= max(len(text), len(w)) {
			continue // nothing in common
		}
		if d <= bestDistance && (best == "" || d < bestDistance) {
			best, bestDistance = w, d
		}
	}
	return best, best != ""
}

// distance returns the optimal string alignment distance of a and b: letters
// added, dropped, changed, or swapped with their neighbour [Damerau 1964].
func distance(a, b string) int {
	x, y := []rune(a), []rune(b)
	before, last := make([]int, len(y)+1), make([]int, len(y)+1)
	for j := range last {
		last[j] = j
	}
	for i := 1; i <= len(x); i++ {
		row := make([]int, len(y)+1)
		row[0] = i
		for j := 1; j <= len(y); j++ {
			cost := 1
			if x[i-1] == y[j-1] {
				cost = 0
			}
			row[j] = min(last[j]+1, row[j-1]+1, last[j-1]+cost)
			if i > 1 && j > 1 && x[i-1] == y[j-2] && x[i-2] == y[j-1] {
				row[j] = min(row[j], before[j-2]+1)
			}
		}
		before, last = last, row
	}
	return last[len(y)]
}
