package sheet

import (
	"encoding/csv"
	"errors"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"unicode/utf8"
)

// Column is a column that a table may have.
type Column struct {
	Name     string
	Required bool
}

// Table is a CSV file (RFC 4180, comma separated, a header line first) that was
// read, with what is wrong with it so far. Rows count from 0 and leave the
// header out.
type Table struct {
	name  string
	text  string
	at    map[string]int // column name to index
	cells [][]cell
	faults
}

type cell struct {
	text         string
	line, column int
}

// maxColumns bounds the width of a table.
const maxColumns = 1000

// ParseTable reads data as a table. With known columns, a header that is none
// of them is a fault, and so is a required one that is missing; with nil every
// header is taken. Spaces around a header or a cell do not count; a row of
// nothing but empty cells is left out. It never fails: what is wrong is in Err.
func ParseTable(name string, data []byte, known []Column) *Table {
	t := &Table{name: name, at: map[string]int{}}
	var d Document
	if len(data) == 0 {
		t.add(1, 1, "", "the file is empty")
		return t
	}
	sound := d.take(data)
	t.text, t.faults = d.text, d.faults
	if !sound {
		return t
	}
	if lines := strings.Count(t.text, "\n"); lines > MaxMarks {
		t.add(1, 1, "", "%d lines, at most %d are read", lines, MaxMarks)
		return t
	}
	r := csv.NewReader(strings.NewReader(t.text))
	r.TrimLeadingSpace = true
	r.FieldsPerRecord = -1
	r.Comment = '#'
	var header []cell
	runes := columns{text: t.text, line: 1}
	for {
		record, err := r.Read()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			line, column := 1, 1
			var parse *csv.ParseError
			if errors.As(err, &parse) {
				line, column, err = parse.Line, parse.Column, parse.Err
			}
			t.add(line, column, "", "not readable as CSV: %v", err)
			return t
		}
		if len(record) > maxColumns {
			line, _ := r.FieldPos(0)
			t.add(line, 1, "", "%d columns, at most %d are read", len(record), maxColumns)
			return t
		}
		row := make([]cell, len(record))
		for i, text := range record {
			line, column := r.FieldPos(i)
			row[i] = cell{strings.TrimSpace(text), line, runes.at(line, column)}
		}
		if header == nil {
			header = row
			t.header(row, known)
			continue
		}
		if !slices.ContainsFunc(row, func(c cell) bool { return c.text != "" }) {
			continue
		}
		if len(row) != len(header) {
			t.add(row[0].line, row[0].column, "", "%s, want %d as in the header", count(len(row), "cell", "cells"), len(header))
			// Cells that are there are still looked at.
		}
		t.cells = append(t.cells, row)
	}
	if header == nil {
		t.add(1, 1, "", "the file is empty")
	}
	return t
}

// columns turns places in bytes into places in characters, for places that come
// in the order of the text: each byte is looked at once.
type columns struct {
	text         string
	line, offset int // where it stands
	start, runes int // of the line: its offset, characters before the place
}

func (c *columns) at(line, column int) int {
	for c.line < line {
		next := strings.IndexByte(c.text[c.offset:], '\n')
		if next < 0 {
			return column
		}
		c.offset += next + 1
		c.line, c.start, c.runes = c.line+1, c.offset, 0
	}
	to := min(c.start+column-1, len(c.text))
	if to >= c.offset {
		c.runes += utf8.RuneCountInString(c.text[c.offset:to])
		c.offset = to
	}
	return c.runes + 1
}

// header takes the names of the columns over.
func (t *Table) header(row []cell, known []Column) {
	var names []string
	for _, k := range known {
		names = append(names, k.Name)
	}
	var unknown []cell
	for i, c := range row {
		_, twice := t.at[c.text]
		switch {
		case c.text == "":
			t.add(c.line, c.column, "", "column %d has no name", i+1)
		case twice:
			t.add(c.line, c.column, c.text, "column given twice")
		case known != nil && !slices.Contains(names, c.text):
			unknown = append(unknown, c)
		default:
			t.at[c.text] = i
		}
	}
	var free []string
	for _, n := range names {
		if _, given := t.at[n]; !given {
			free = append(free, n)
		}
	}
	for _, c := range unknown {
		if near, ok := nearest(c.text, free); ok {
			t.add(c.line, c.column, shortKey(c.text), "unknown column, did you mean %q?", near)
		} else {
			t.add(c.line, c.column, shortKey(c.text), "unknown column, known are %s", strings.Join(names, ", "))
		}
	}
	for _, k := range known {
		if _, given := t.at[k.Name]; k.Required && !given {
			t.add(1, 1, "", "missing column %q", k.Name)
		}
	}
}

// Rows returns the number of rows below the header.
func (t *Table) Rows() int { return len(t.cells) }

// Columns returns the names of the columns that were taken, in file order.
func (t *Table) Columns() []string {
	names := make([]string, 0, len(t.at))
	for n := range t.at {
		names = append(names, n)
	}
	slices.SortFunc(names, func(a, b string) int { return t.at[a] - t.at[b] })
	return names
}

// Text returns a cell without the spaces around it, and whether it is there
// and not empty.
func (t *Table) Text(row int, column string) (string, bool) {
	i, ok := t.at[column]
	if !ok || row < 0 || row >= len(t.cells) || i >= len(t.cells[row]) {
		return "", false
	}
	text := t.cells[row][i].text
	return text, text != ""
}

// Number returns a cell as a finite number with its digits as they stand, and
// whether there is one. A cell that is no number is a fault.
func (t *Table) Number(row int, column string) (value float64, ok bool) {
	text, ok := t.Text(row, column)
	if !ok {
		return 0, false
	}
	v, err := strconv.ParseFloat(text, 64)
	if err != nil || math.IsNaN(v) || math.IsInf(v, 0) || !floatNumber.MatchString(text) {
		t.Fault(row, column, "got %s, want number", show(text))
		return 0, false
	}
	return v, true
}

// Place returns line and column of a cell, of its row if it is not there.
func (t *Table) Place(row int, column string) (line, col int) {
	if row < 0 || row >= len(t.cells) {
		return 1, 1
	}
	cells := t.cells[row]
	if i, ok := t.at[column]; ok && i < len(cells) {
		return cells[i].line, cells[i].column
	}
	return cells[0].line, cells[0].column
}

// Fault adds a fault at a cell; the message follows the rules of
// Fault.Message.
func (t *Table) Fault(row int, column, format string, args ...any) {
	line, col := t.Place(row, column)
	t.add(line, col, column, format, args...)
}

// Err returns everything that is wrong so far as one *FaultsError in file
// order, or nil.
func (t *Table) Err() error { return t.faults.err(t.name, t.text) }
