package sheet

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"
)

// The limits of a JSON document of our own making, which may carry pictures
// and sound as long texts.
const (
	MaxJSONBytes  = 256 << 20
	MaxJSONValues = 1_000_000
)

// DecodeJSON reads data as a JSON document of the given form into a struct with
// json tags. It is stricter than Decode in that only JSON is read, and bounded
// by MaxJSONBytes and MaxJSONValues instead. Its error is a *FaultsError.
func DecodeJSON(name string, data []byte, schema *Schema, into any) error {
	d := &Document{name: name}
	if len(data) > MaxJSONBytes {
		d.add(1, 1, "", "%d bytes, at most %d are read", len(data), MaxJSONBytes)
		return d.Err()
	}
	d.text = string(data)
	b := jsonBuilder{doc: d, in: json.NewDecoder(bytes.NewReader(data)), line: 1}
	b.in.UseNumber()
	root, err := b.value(0)
	if err == nil {
		if _, err = b.in.Token(); err == nil {
			err = errors.New("more after the end of the document")
		} else if errors.Is(err, io.EOF) {
			err = nil
		}
	}
	if err != nil {
		b.advance(int(b.in.InputOffset()))
		d.add(b.line, b.column(), "", "not readable as JSON: %s", jsonWords(err))
		return d.Err()
	}
	d.root = root
	if root.kind != kindMapping {
		d.add(1, 1, "", "got %s, want an object", root.kind)
		return d.Err()
	}
	d.check(schema)
	if err := d.Err(); err != nil {
		return err
	}
	d.Fill(into)
	return d.Err()
}

func jsonWords(err error) string {
	if errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
		return "it ends too early"
	}
	return err.Error()
}

// jsonBuilder makes the tree of a JSON document.
type jsonBuilder struct {
	doc    *Document
	in     *json.Decoder
	values int
	offset int // up to which lines are counted
	line   int
	before int // characters of the line before the offset
}

// token returns the next token and its place.
func (b *jsonBuilder) token() (t json.Token, line, column int, err error) {
	b.advance(int(b.in.InputOffset()))
	for b.offset < len(b.doc.text) && strings.IndexByte(" \t\r\n,:", b.doc.text[b.offset]) >= 0 {
		b.advance(b.offset + 1)
	}
	line, column = b.line, b.column()
	t, err = b.in.Token()
	return t, line, column, err
}

// advance counts lines and characters up to an offset. Each byte is looked at
// once: a document of our own may stand on one line of megabytes.
func (b *jsonBuilder) advance(to int) {
	for ; b.offset < min(to, len(b.doc.text)); b.offset++ {
		switch c := b.doc.text[b.offset]; {
		case c == '\n':
			b.line++
			b.before = 0
		case utf8.RuneStart(c):
			b.before++
		}
	}
}

// column returns the column of the offset, in characters.
func (b *jsonBuilder) column() int { return b.before + 1 }

func (b *jsonBuilder) value(depth int) (*node, error) {
	if depth > MaxDepth {
		return nil, fmt.Errorf("more than %d levels of lists and objects", MaxDepth)
	}
	if b.values++; b.values > MaxJSONValues {
		return nil, fmt.Errorf("more than %d values", MaxJSONValues)
	}
	t, line, column, err := b.token()
	if err != nil {
		return nil, err
	}
	n := &node{line: line, column: column, size: 1}
	switch x := t.(type) {
	case nil:
		n.kind = kindNull
	case bool:
		n.kind, n.truth = kindBool, x
	case string:
		n.kind, n.text = kindText, x
	case json.Number:
		n.kind = kindNumber
		v, err := x.Float64()
		if err != nil || math.IsInf(v, 0) {
			return nil, fmt.Errorf("%s is not a finite number", show(x.String()))
		}
		if len(x) > 30 || strings.ContainsAny(x.String(), "eE") {
			// The validator counts with exact fractions: keep them short.
			x = json.Number(strconv.FormatFloat(v, 'g', -1, 64))
		}
		n.number = x
	case json.Delim:
		if x == '[' {
			n.kind = kindList
			for b.in.More() {
				item, err := b.value(depth + 1)
				if err != nil {
					return nil, err
				}
				n.items = append(n.items, item)
			}
		} else {
			n.kind = kindMapping
			seen := map[string]bool{}
			for b.in.More() {
				t, line, column, err := b.token()
				if err != nil {
					return nil, err
				}
				name, _ := t.(string)
				if seen[name] {
					return nil, fmt.Errorf("key %s given twice", show(name))
				}
				seen[name] = true
				k := key{name: name, line: line, column: column}
				if k.value, err = b.value(depth + 1); err != nil {
					return nil, err
				}
				n.keys = append(n.keys, k)
			}
		}
		if _, err := b.in.Token(); err != nil { // the closing bracket
			return nil, err
		}
	}
	return n, nil
}
