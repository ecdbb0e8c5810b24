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

// read takes the text of a file over: size, encoding, line ends. It reports
// whether the text can be read at all.
func (d *Document) read(data []byte) bool {
	if len(data) > MaxBytes {
		d.add(1, 1, "", "%d bytes, at most %d are read", len(data), MaxBytes)
		return false
	}
	for _, mark := range []struct{ bytes, name string }{
		{"\xff\xfe", "utf-16"}, {"\xfe\xff", "utf-16"},
	} {
		if bytes.HasPrefix(data, []byte(mark.bytes)) {
			d.add(1, 1, "", "text in %s, want utf-8", mark.name)
			return false
		}
	}
	data = bytes.TrimPrefix(data, []byte("\xef\xbb\xbf"))
	text := strings.ReplaceAll(string(data), "\r\n", "\n")
	d.text = strings.ReplaceAll(text, "\r", "\n")
	marks, comment := 0, false
	for i := 0; i < len(d.text); {
		c := d.text[i]
		if c < utf8.RuneSelf {
			switch {
			case c == '\n':
				comment = false
				marks++
			case c < ' ' && c != '\t' || c == 0x7f:
				line, column := place(d.text, i)
				d.add(line, column, "", "control character %#04x in the text", c)
				return false
			case c == '#' && (i == 0 || d.text[i-1] == ' ' || d.text[i-1] == '\n'):
				// Taken for a comment even inside quotes, where it only makes
				// the count smaller: quotes hold no marks that cost anything.
				comment = true
			case !comment && strings.IndexByte(",:[{?!&*|>%", c) >= 0,
				!comment && c == '-' && i+1 < len(d.text) && d.text[i+1] == ' ':
				marks++
			}
			i++
			continue
		}
		r, size := utf8.DecodeRuneInString(d.text[i:])
		if r == utf8.RuneError && size == 1 {
			line, column := place(d.text, i)
			d.add(line, column, "", "byte %#02x is not utf-8", d.text[i])
			return false
		}
		i += size
	}
	if marks > MaxMarks {
		d.add(1, 1, "", "%d lines, keys and list entries, at most %d are read", marks, MaxMarks)
		return false
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
