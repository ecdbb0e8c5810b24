package rig

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"

	"alidade/pkg/sheet"
)

// positionColumns are the columns of a CSV file of positions.
var positionColumns = []sheet.Column{
	{Name: "name", Required: true}, {Name: "channel", Required: true},
	{Name: "x_mm", Required: true}, {Name: "y_mm", Required: true}, {Name: "z_mm", Required: true},
	{Name: "gain_db"}, {Name: "delay_us"}, {Name: "polarity"}, {Name: "use"}, {Name: "sensitivity_mv_pa"}, {Name: "sensitivity_dbfs"}, {Name: "clock_ppm"},
}

// positions fills in the microphones from the CSV file that the rig names.
func (l *loader) positions(r *Rig) {
	name := l.file.Positions
	data, err := l.readPositions(name)
	if err != nil {
		l.doc.Fault("positions", "%v", err)
		return
	}
	t := sheet.ParseTable(name, data, positionColumns)
	defer func() {
		if err := t.Err(); err != nil {
			l.beside = append(l.beside, err)
		}
	}()
	if t.Err() != nil && t.Rows() == 0 {
		return
	}
	if n := t.Rows(); n > MaxMicrophones {
		t.Fault(MaxMicrophones, "", "%d microphones, at most %d are read", n, MaxMicrophones)
		return
	}
	places := make([]place, t.Rows())
	for row := range places {
		mic, at := tableMic(t, row)
		at.doc = l.doc
		r.Mics = append(r.Mics, mic)
		places[row] = at
	}
	l.together(r, func(m int) place { return places[m] })
}

func (l *loader) readPositions(name string) (data []byte, err error) {
	if l.open == nil {
		return nil, fmt.Errorf("%q: no file can be opened here", name)
	}
	in, err := l.open(name)
	if err != nil {
		return nil, err
	}
	defer func() {
		if cerr := in.Close(); err == nil && cerr != nil {
			data, err = nil, cerr
		}
	}()
	// One byte more than is read tells that there is more.
	return io.ReadAll(io.LimitReader(in, sheet.MaxBytes+1))
}

// tableMic returns the microphone of a row, and what of it is sound.
func tableMic(t *sheet.Table, row int) (Mic, place) {
	mic := Mic{Use: true}
	at := place{table: t, row: row, nameSound: true, channelSound: true, atSound: true}
	missing := func(column string) {
		t.Fault(row, column, "an empty cell, want a value")
	}
	// A column that the header lacks has its fault already.
	has := map[string]bool{}
	for _, c := range t.Columns() {
		has[c] = true
	}
	mic.Name, _ = t.Text(row, "name")

	if text, ok := t.Text(row, "channel"); ok {
		c, err := strconv.Atoi(text)
		if err != nil || c < 1 || c > MaxMicrophones {
			t.Fault(row, "channel", "got %q, want a whole number from 1 to %d", text, MaxMicrophones)
			at.channelSound = false
		}
		mic.Channel = c
	} else {
		at.channelSound = false
		if has["channel"] {
			missing("channel")
		}
	}
	if mic.Name == "" && at.channelSound {
		mic.Name = "M" + strconv.Itoa(mic.Channel)
	}

	for _, axis := range []struct {
		column string
		value  *float64
	}{{"x_mm", &mic.At.X}, {"y_mm", &mic.At.Y}, {"z_mm", &mic.At.Z}} {
		if _, ok := t.Text(row, axis.column); !ok {
			at.atSound = false
			if has[axis.column] {
				missing(axis.column)
			}
			continue
		}
		v, ok := number(t, row, axis.column, -maxAtMM, maxAtMM)
		*axis.value = shift(t, row, axis.column, v, -3)
		at.atSound = at.atSound && ok
	}

	mic.GainDB, _ = number(t, row, "gain_db", -60, 60)
	delay, _ := number(t, row, "delay_us", -1e5, 1e5)
	mic.Delay = shift(t, row, "delay_us", delay, -6)
	mic.ClockPPM, _ = number(t, row, "clock_ppm", -1e4, 1e4)
	mic.SensitivityMVPa, _ = number(t, row, "sensitivity_mv_pa", math.SmallestNonzeroFloat64, 1e5)
	if _, ok := t.Text(row, "sensitivity_dbfs"); ok {
		if v, ok := number(t, row, "sensitivity_dbfs", -200, 60); ok {
			mic.SensitivityDBFS = &v
		}
	}
	if text, ok := t.Text(row, "polarity"); ok {
		mic.Inverted = text == "inverted"
		if !mic.Inverted && text != "normal" {
			t.Fault(row, "polarity", "got %q, want normal or inverted", text)
		}
	}
	if text, ok := t.Text(row, "use"); ok {
		switch strings.ToLower(text) {
		case "true":
		case "false":
			mic.Use = false
		default:
			t.Fault(row, "use", "got %q, want true or false", text)
		}
	}
	return mic, at
}

// number returns a cell, 0 if there is none or if it is out of range.
func number(t *sheet.Table, row int, column string, low, high float64) (float64, bool) {
	v, ok := t.Number(row, column)
	if ok && !(v >= low && v <= high) {
		if low > 0 {
			t.Fault(row, column, "got %g, want above 0 and at most %g", v, high)
		} else {
			t.Fault(row, column, "got %g, want %g to %g", v, low, high)
		}
		return 0, false
	}
	return v, ok
}

// shift moves the decimal point of a cell that reads as v.
func shift(t *sheet.Table, row int, column string, v float64, power int) float64 {
	if v == 0 {
		return 0
	}
	text, _ := t.Text(row, column)
	x, err := scaled(text, power)
	if err != nil {
		return v * math.Pow10(power)
	}
	return x
}
