package report

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"reflect"
	"strconv"
	"strings"

	"alidade/pkg/pipeline"
)

// JSON writes the report: the JSON form of r, with a newline at its end. The
// same result gives the same bytes.
func JSON(w io.Writer, r *pipeline.Result) error {
	c := *r
	if c.Schema == "" {
		c.Schema = pipeline.ReportSchema
	}
	return WriteJSON(w, &c)
}

// WriteJSON writes a value of structs with json tags, lists, numbers and texts
// in the form of the report: keys in the order of the fields, numbers rounded
// by the unit that their key ends in, nil lists as []. It is what every command
// writes under --json.
func WriteJSON(w io.Writer, v any) error {
	e := encoder{}
	e.value(reflect.ValueOf(v), "", 0)
	if e.err != nil {
		return e.err
	}
	e.out.WriteByte('\n')
	_, err := w.Write(e.out.Bytes())
	return err
}

// encoder writes values: the outer two levels of a document on lines of their
// own, what is inside on one line.
type encoder struct {
	out  bytes.Buffer
	path []string
	err  error
}

// spreadLevels is the number of levels whose entries stand on lines of their
// own; a list of objects may lie one level deeper.
const spreadLevels = 2

func (e *encoder) fail(format string, args ...any) {
	if e.err == nil {
		e.err = fmt.Errorf("report: %s: %s", strings.Join(e.path, "."), fmt.Sprintf(format, args...))
	}
}

// value writes v, which stands under the given key.
func (e *encoder) value(v reflect.Value, key string, level int) {
	if !v.IsValid() {
		e.out.WriteString("null")
		return
	}
	if m, ok := v.Interface().(json.Marshaler); ok && v.Kind() != reflect.Pointer {
		text, err := m.MarshalJSON()
		if err != nil {
			e.fail("%v", err)
		}
		e.out.Write(text)
		return
	}
	switch v.Kind() {
	case reflect.Pointer, reflect.Interface:
		if v.IsNil() || !finite(v.Elem()) {
			e.out.WriteString("null")
			return
		}
		e.value(v.Elem(), key, level)
	case reflect.Struct:
		e.object(v, level)
	case reflect.Slice, reflect.Array:
		if v.Kind() == reflect.Slice && v.Type().Elem().Kind() == reflect.Uint8 {
			e.marshal(v) // base64
			return
		}
		e.list(v, key, level)
	case reflect.Float64, reflect.Float32:
		x := v.Float()
		if math.IsNaN(x) || math.IsInf(x, 0) {
			e.fail("%v is not a finite number", x)
			x = 0
		}
		e.out.WriteString(Round(x, key))
	case reflect.Map, reflect.Chan, reflect.Func, reflect.Complex64, reflect.Complex128:
		e.fail("a %s has no place in a report", v.Kind())
	default:
		e.marshal(v)
	}
}

// marshal writes texts, truth values and whole numbers.
func (e *encoder) marshal(v reflect.Value) {
	var b bytes.Buffer
	enc := json.NewEncoder(&b)
	enc.SetEscapeHTML(false)
	if err := enc.Encode(v.Interface()); err != nil {
		e.fail("%v", err)
		return
	}
	e.out.Write(bytes.TrimSuffix(b.Bytes(), []byte("\n")))
}

// finite reports whether a measured quantity is a number: a value behind a
// pointer, or both ends of an interval.
func finite(v reflect.Value) bool {
	switch {
	case v.Kind() == reflect.Float64 || v.Kind() == reflect.Float32:
		return !math.IsNaN(v.Float()) && !math.IsInf(v.Float(), 0)
	case v.Kind() == reflect.Array && v.Type().Elem().Kind() == reflect.Float64:
		for i := range v.Len() {
			if !finite(v.Index(i)) {
				return false
			}
		}
	}
	return true
}

func (e *encoder) object(v reflect.Value, level int) {
	g := brackets{e: e, open: '{', close: '}', spread: level < spreadLevels, level: level}
	e.fields(v, &g)
	g.end()
}

func (e *encoder) fields(v reflect.Value, g *brackets) {
	t := v.Type()
	for i := range t.NumField() {
		f := t.Field(i)
		name, options, _ := strings.Cut(f.Tag.Get("json"), ",")
		if !f.IsExported() || name == "-" {
			continue
		}
		if f.Anonymous && name == "" && f.Type.Kind() == reflect.Struct {
			e.fields(v.Field(i), g)
			continue
		}
		if name == "" {
			name = f.Name
		}
		field := v.Field(i)
		if strings.Contains(options, "omitempty") && empty(field) || strings.Contains(options, "omitzero") && field.IsZero() {
			continue
		}
		g.entry()
		e.out.WriteString(strconv.Quote(name))
		e.out.WriteString(": ")
		e.path = append(e.path, name)
		e.value(field, name, g.level+1)
		e.path = e.path[:len(e.path)-1]
	}
}

// empty is what omitempty of encoding/json leaves out, and a measured quantity
// that is no number.
func empty(v reflect.Value) bool {
	switch v.Kind() {
	case reflect.Pointer, reflect.Interface:
		return v.IsNil() || !finite(v.Elem())
	case reflect.Slice, reflect.Map, reflect.String, reflect.Array:
		return v.Len() == 0
	case reflect.Struct:
		return false
	}
	return v.IsZero()
}

func (e *encoder) list(v reflect.Value, key string, level int) {
	element := v.Type().Elem()
	for element.Kind() == reflect.Pointer {
		element = element.Elem()
	}
	g := brackets{e: e, open: '[', close: ']', spread: level <= spreadLevels && element.Kind() == reflect.Struct, level: level}
	for i := range v.Len() {
		g.entry()
		e.path = append(e.path, strconv.Itoa(i))
		inner := level + 1
		if element.Kind() == reflect.Struct {
			inner = max(inner, spreadLevels) // an entry stays on its line
		}
		e.value(v.Index(i), key, inner)
		e.path = e.path[:len(e.path)-1]
	}
	g.end()
}

// brackets is an object or a list being written.
type brackets struct {
	e           *encoder
	open, close byte
	spread      bool // one entry a line
	level       int
	entries     int
}

func (g *brackets) entry() {
	if g.entries == 0 {
		g.e.out.WriteByte(g.open)
	} else {
		g.e.out.WriteByte(',')
	}
	if g.spread {
		g.e.out.WriteByte('\n')
		g.e.out.WriteString(strings.Repeat("  ", g.level+1))
	} else if g.entries > 0 {
		g.e.out.WriteByte(' ')
	}
	g.entries++
}

func (g *brackets) end() {
	if g.entries == 0 {
		g.e.out.WriteByte(g.open)
	} else if g.spread {
		g.e.out.WriteByte('\n')
		g.e.out.WriteString(strings.Repeat("  ", g.level))
	}
	g.e.out.WriteByte(g.close)
}

// units gives the decimals that are claimed for a quantity by the end of its
// key; the first that fits counts.
var units = []struct {
	suffix   string
	decimals int
}{
	{"_dbfs", 3}, {"_db_spl", 3}, {"_db", 3}, {"_deg", 3},
	{"_m_s", 6}, {"_hz", 6}, {"_s", 6}, {"_us", 6}, {"_m", 6},
}

// plainTimes are keys of times in seconds that do not end in their unit.
var plainTimes = map[string]bool{"noise": true, "target": true}

// Round returns x as the text of a JSON number, rounded to what is claimed for
// a quantity of that key. Halves are rounded to even. Negative zero is 0.
func Round(x float64, key string) string {
	decimals := -1
	for _, u := range units {
		if strings.HasSuffix(key, u.suffix) {
			decimals = u.decimals
			break
		}
	}
	if plainTimes[key] {
		decimals = 6
	}
	text := ""
	if decimals >= 0 {
		text = strconv.FormatFloat(x, 'f', decimals, 64)
	} else {
		text = strconv.FormatFloat(x, 'g', 9, 64)
	}
	rounded, err := strconv.ParseFloat(text, 64)
	if err != nil || rounded == 0 {
		return "0"
	}
	format := byte('f')
	if a := math.Abs(rounded); a < 1e-6 || a >= 1e21 {
		format = 'e' // as encoding/json does
	}
	return strconv.FormatFloat(rounded, format, -1, 64)
}
