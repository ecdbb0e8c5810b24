package sheet

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"unicode"
	"unicode/utf8"
)

// Fault is one thing that is wrong with a file.
type Fault struct {
	Line    int    // counted from 1
	Column  int    // counted from 1, in characters
	Path    string // of the value, such as microphones[1].at_mm[2]; empty for the file as a whole
	Message string // what and why, lower case, without a full stop
}

// FaultsError is everything that is wrong with a file, in file order.
type FaultsError struct {
	Name   string  // of the file
	Faults []Fault // at least one, at most maxFaults
	More   int     // faults beyond these
	lines  []string
}

// maxFaults bounds the list: past it a reader learns nothing new.
const maxFaults = 100

// Error returns one line a fault: name:line:column: path: message.
func (e *FaultsError) Error() string {
	var b strings.Builder
	for i, f := range e.Faults {
		if i > 0 {
			b.WriteByte('\n')
		}
		b.WriteString(e.head(f))
	}
	if e.More > 0 {
		fmt.Fprintf(&b, "\n%s: and %d more faults", e.Name, e.More)
	}
	return b.String()
}

// Annotated returns the text of Error with each fault's source line beneath
// it and a caret under its column. Lines are cut to about 100 characters
// around the place, and control characters are shown as blanks.
func (e *FaultsError) Annotated() string {
	var b strings.Builder
	for i, f := range e.Faults {
		if i > 0 {
			b.WriteByte('\n')
		}
		b.WriteString(e.head(f))
		if f.Line < 1 || f.Line > len(e.lines) {
			continue
		}
		shown, caret := clip(e.lines[f.Line-1], f.Column)
		gutter := fmt.Sprintf("%6d", f.Line)
		fmt.Fprintf(&b, "\n%s | %s\n%s | %s^", gutter, shown, strings.Repeat(" ", len(gutter)), strings.Repeat(" ", caret))
	}
	if e.More > 0 {
		fmt.Fprintf(&b, "\n%s: and %d more faults", e.Name, e.More)
	}
	return b.String()
}

func (e *FaultsError) head(f Fault) string {
	if f.Path == "" {
		return fmt.Sprintf("%s:%d:%d: %s", e.Name, f.Line, f.Column, f.Message)
	}
	return fmt.Sprintf("%s:%d:%d: %s: %s", e.Name, f.Line, f.Column, f.Path, f.Message)
}

// clip returns the part of line around the given column, ready to print, and
// how many cells lie before the caret.
func clip(line string, column int) (shown string, caret int) {
	const width, before = 100, 60
	runes := []rune(line)
	at := min(max(column-1, 0), len(runes))
	from := 0
	if at > before {
		from = at - before
	}
	to := min(len(runes), from+width)
	var b strings.Builder
	if from > 0 {
		b.WriteString("… ")
		caret = 2
	}
	for i := from; i < to; i++ {
		r := runes[i]
		if !unicode.IsPrint(r) {
			r = ' '
		}
		b.WriteRune(r)
		if i < at {
			caret++
		}
	}
	if to < len(runes) {
		b.WriteString(" …")
	}
	return b.String(), caret
}

// faults collects what is wrong with a file.
type faults struct{ list []Fault }

func (fs *faults) add(line, column int, path, format string, args ...any) {
	fs.list = append(fs.list, Fault{max(line, 1), max(column, 1), path, fmt.Sprintf(format, args...)})
}

// err returns the faults in file order as one *FaultsError, or nil.
func (fs *faults) err(name, text string) error {
	if len(fs.list) == 0 {
		return nil
	}
	list := slices.Clone(fs.list)
	slices.SortStableFunc(list, func(a, b Fault) int {
		if a.Line != b.Line {
			return a.Line - b.Line
		}
		return a.Column - b.Column
	})
	list = slices.Compact(list)
	e := &FaultsError{Name: name, Faults: list}
	if len(list) > maxFaults {
		e.Faults, e.More = list[:maxFaults], len(list)-maxFaults
	}
	// Only the lines that are shown are kept: a file may be large.
	last := e.Faults[len(e.Faults)-1].Line
	e.lines = strings.SplitN(text, "\n", last+1)
	if len(e.lines) > last {
		e.lines = e.lines[:last]
	}
	return e
}

// place returns line and column of a byte offset in text, counted from 1.
func place(text string, offset int) (line, column int) {
	head := text[:min(offset, len(text))]
	line = strings.Count(head, "\n") + 1
	if i := strings.LastIndexByte(head, '\n'); i >= 0 {
		head = head[i+1:]
	}
	return line, utf8.RuneCountInString(head) + 1
}

// Annotated returns the text of err, each *FaultsError in it with the source
// lines it speaks of.
func Annotated(err error) string {
	if err == nil {
		return ""
	}
	if joined, ok := err.(interface{ Unwrap() []error }); ok {
		var parts []string
		for _, e := range joined.Unwrap() {
			parts = append(parts, Annotated(e))
		}
		return strings.Join(parts, "\n")
	}
	var faults *FaultsError
	if errors.As(err, &faults) {
		// What was added around the faults stays.
		return strings.Replace(err.Error(), faults.Error(), faults.Annotated(), 1)
	}
	return err.Error()
}
