package sheet

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
)

// Document is a file that was read, with what is wrong with it so far.
type Document struct {
	name string
	text string // without byte order mark, line ends as \n
	root *node  // nil if the text is not YAML
	faults
}

// Parse reads data as a file of the given form. It never fails: what is wrong
// is in Err. A nil schema checks the YAML alone.
func Parse(name string, data []byte, schema *Schema) *Document {
	d := &Document{name: name}
	if !d.read(data) {
		return d
	}
	d.build()
	if d.root != nil && schema != nil {
		d.check(schema)
	}
	return d
}

// Decode reads data as a file of the given form into a struct with json tags.
// Its error is a *FaultsError with every fault of the file; then what is sound
// of the file has still been filled in.
func Decode(name string, data []byte, schema *Schema, into any) error {
	d := Parse(name, data, schema)
	d.Fill(into)
	return d.Err()
}

// Err returns everything that is wrong so far as one *FaultsError in file
// order, or nil.
func (d *Document) Err() error { return d.faults.err(d.name, d.text) }

// Readable reports whether the text could be read as YAML at all: if not, what
// it lacks is nobody's fault.
func (d *Document) Readable() bool { return d.root != nil }

// Has reports whether the value at path is in the file and sound in itself.
// The empty path is the file as a whole.
func (d *Document) Has(path string) bool {
	if d.root == nil {
		return false
	}
	n, _, ok := d.root.find(path)
	return ok && !n.bad
}

// Given reports whether the value at path is in the file, sound or not.
func (d *Document) Given(path string) bool {
	if d.root == nil {
		return false
	}
	_, _, ok := d.root.find(path)
	return ok
}

// Len returns the number of entries of the list at path, 0 if there is none.
func (d *Document) Len(path string) int {
	if d.root == nil {
		return 0
	}
	if n, _, ok := d.root.find(path); ok && n.kind == kindList {
		return len(n.items)
	}
	return 0
}

// Place returns line and column of the value at path, of the nearest value
// around it if it is not in the file.
func (d *Document) Place(path string) (line, column int) {
	if d.root == nil {
		return 1, 1
	}
	n, _, _ := d.root.find(path)
	return n.line, n.column
}

// Fault adds a fault at the value at path; the message follows the rules of
// Fault.Message.
func (d *Document) Fault(path, format string, args ...any) {
	line, column := d.Place(path)
	d.add(line, column, path, format, args...)
}

// KeyFault is Fault, placed at the key of the value rather than at the value.
func (d *Document) KeyFault(path, format string, args ...any) {
	line, column := d.Place(path)
	if d.root != nil {
		if _, k, ok := d.root.find(path); ok && k != nil {
			line, column = k.line, k.column
		}
	}
	d.add(line, column, path, format, args...)
}

// Fill decodes what is sound of the file into a struct with json tags: values
// that a fault lies on are left out.
func (d *Document) Fill(into any) {
	if d.root == nil || d.root.bad || d.root.kind != kindMapping {
		return
	}
	text, err := json.Marshal(d.root.value(true))
	if err == nil {
		err = json.NewDecoder(bytes.NewReader(text)).Decode(into)
	}
	if err == nil {
		return
	}
	// The schema allowed what the struct cannot hold, such as a whole number
	// beyond 64 bits.
	var mismatch *json.UnmarshalTypeError
	if errors.As(err, &mismatch) {
		d.Fault(fieldPath(mismatch.Field), "got %s, want a value that fits %s", mismatch.Value, mismatch.Type)
		return
	}
	d.Fault("", "%s", strings.TrimPrefix(err.Error(), "json: "))
}

// fieldPath turns the dotted field of encoding/json into a path: its numbers
// are indices.
func fieldPath(field string) string {
	var b strings.Builder
	for _, part := range strings.Split(field, ".") {
		if part != "" && strings.Trim(part, "0123456789") == "" {
			fmt.Fprintf(&b, "[%s]", part)
			continue
		}
		if b.Len() > 0 {
			b.WriteByte('.')
		}
		b.WriteString(part)
	}
	return b.String()
}
