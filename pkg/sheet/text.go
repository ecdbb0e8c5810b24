package sheet

import (
	"bytes"
	"fmt"
	"strings"
	"unicode/utf8"
)

// The limits of a file.
const (
	MaxBytes = 4 << 20 // size
	MaxMarks = 50_000  // marks that separate values; also values, with every alias written out
	MaxDepth = 64      // lists and mappings inside one another
)

// read takes the text of a YAML file over and counts its marks. It reports
// whether the text can be read at all.
func (d *Document) read(data []byte) bool {
	if !d.take(data) {
		return false
	}
	marks := 0
	for i := range len(d.text) {
		// Marks in comments and quotes count too: telling them apart is the
		// parser's work, which this bounds.
		c := d.text[i]
		if strings.IndexByte("\n,:[{?!&*|>%", c) >= 0 || c == '-' && i+1 < len(d.text) && d.text[i+1] == ' ' {
			marks++
		}
	}
	if marks > MaxMarks {
		d.add(1, 1, "", "%d lines, keys and list entries, at most %d are read", marks, MaxMarks)
		return false
	}
	return true
}

// take takes the text of a file over: size, encoding, line ends.
func (d *Document) take(data []byte) bool {
	if len(data) > MaxBytes {
		d.add(1, 1, "", "%d bytes, at most %d are read", len(data), MaxBytes)
		return false
	}
	if bytes.HasPrefix(data, []byte("\xff\xfe")) || bytes.HasPrefix(data, []byte("\xfe\xff")) {
		d.add(1, 1, "", "text in utf-16, want utf-8")
		return false
	}
	data = bytes.TrimPrefix(data, []byte("\xef\xbb\xbf"))
	text := strings.ReplaceAll(string(data), "\r\n", "\n")
	d.text = strings.ReplaceAll(text, "\r", "\n")
	for i, r := range d.text {
		broken := false
		if r == utf8.RuneError {
			_, size := utf8.DecodeRuneInString(d.text[i:])
			broken = size == 1
		}
		if broken || r < ' ' && r != '\t' && r != '\n' || r == 0x7f {
			line, column := place(d.text, i)
			if broken {
				d.add(line, column, "", "byte %#02x is not utf-8", d.text[i])
			} else {
				d.add(line, column, "", "control character %#02x in the text", r)
			}
			return false
		}
	}
	return true
}

// show returns text quoted and cut to a length fit for a message.
func show(text string) string {
	if utf8.RuneCountInString(text) > 40 {
		text = string([]rune(text)[:40]) + "…"
	}
	return fmt.Sprintf("%q", text)
}
