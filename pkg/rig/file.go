package rig

import (
	"errors"
	"fmt"
	"io"
	"math"
	"path"
	"strconv"
	"strings"
	"sync"

	"alidade/pkg/sheet"
)

// SchemaID is the $id of the JSON Schema of a rig file.
const SchemaID = "urn:alidade:schema:rig:1"

// The limits of a rig file.
const (
	MaxMicrophones = 256   // also the highest channel
	maxAtMM        = 1e5   // 100 m from the origin in every axis
	maxExtent      = 100.0 // m between two microphones
	minApart       = 1e-3  // m between two used microphones
)

// milli is a length in metres that a file gives in millimetres, micro a time in
// seconds that it gives in microseconds. The decimal point is moved in the
// text, so that 77.8 mm is the float64 next to 0.0778 m.
type (
	milli float64
	micro float64
)

func (v *milli) UnmarshalJSON(text []byte) error { return unmarshalScaled((*float64)(v), text, -3) }
func (v *micro) UnmarshalJSON(text []byte) error { return unmarshalScaled((*float64)(v), text, -6) }

func unmarshalScaled(v *float64, text []byte, power int) error {
	if string(text) == "null" {
		return nil
	}
	x, err := scaled(string(text), power)
	*v = x
	return err
}

// scaled returns the decimal number text times 10^power, rounded once.
func scaled(text string, power int) (float64, error) {
	mantissa, exponent, given := strings.Cut(strings.ToLower(text), "e")
	if given {
		e, err := strconv.Atoi(exponent)
		if err != nil {
			return 0, err
		}
		power += e
	}
	return strconv.ParseFloat(mantissa+"e"+strconv.Itoa(power), 64)
}

// file is a rig file as it stands, in the units of its keys.
type file struct {
	Rig         string      `json:"rig,omitempty" jsonschema:"minLength=1,maxLength=200" jsonschema_description:"Name of the rig; the file's name if absent."`
	Air         *airFile    `json:"air,omitempty" jsonschema_description:"The air on site; dry air of 20 °C if absent."`
	Reference   string      `json:"reference,omitempty" jsonschema:"minLength=1,maxLength=200" jsonschema_description:"centre (the mean of the microphones in use) or the name of a microphone."`
	HeadingDeg  *float64    `json:"heading_deg,omitempty" jsonschema:"minimum=-360,maximum=360" jsonschema_description:"Compass heading of the rig's +y axis, degrees clockwise from true north."`
	Limits      *Limits     `json:"limits,omitempty" jsonschema_description:"From where on something about a take is a finding; a negative number turns a check off."`
	Microphones []micFile   `json:"microphones,omitempty" jsonschema:"minItems=1,maxItems=256" jsonschema_description:"The microphones, one by one. Exactly one of microphones, positions, line, ring, grid and spiral is given."`
	Positions   string      `json:"positions,omitempty" jsonschema:"minLength=1,maxLength=1000" jsonschema_description:"A CSV file with the columns name, channel, x_mm, y_mm, z_mm, and if wanted gain_db, delay_us, polarity, use, sensitivity_mv_pa, sensitivity_dbfs, clock_ppm."`
	Line        *lineFile   `json:"line,omitempty" jsonschema_description:"Microphones along x, centred on the origin, channels from -x to +x."`
	Ring        *ringFile   `json:"ring,omitempty" jsonschema_description:"Microphones on a level circle around the origin, the first on +x, then towards +y."`
	Grid        *gridFile   `json:"grid,omitempty" jsonschema_description:"Microphones on a level grid centred on the origin, columns along x, rows along y; row by row from -y, each from -x."`
	Spiral      *spiralFile `json:"spiral,omitempty" jsonschema_description:"Microphones on a level spiral around the origin, evenly spread in radius and angle, the first at the origin, the last at the radius."`
}

type airFile struct {
	TemperatureC *float64 `json:"temperature_c,omitempty" jsonschema:"minimum=-50,maximum=60" jsonschema_description:"Temperature, °C."`
	HumidityPct  *float64 `json:"humidity_pct,omitempty" jsonschema:"minimum=0,maximum=100" jsonschema_description:"Relative humidity, per cent."`
	PressureKPa  *float64 `json:"pressure_kpa,omitempty" jsonschema:"minimum=50,maximum=110" jsonschema_description:"Air pressure, kPa."`
}

type micFile struct {
	Name            string        `json:"name,omitempty" jsonschema:"minLength=1,maxLength=200" jsonschema_description:"Name of the microphone; M and its channel if absent."`
	Channel         int           `json:"channel" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Channel of the take, counted from 1."`
	AtMM            []milli       `json:"at_mm" jsonschema:"minItems=2,maxItems=3" jsonschema_description:"Place x, y and, 0 if absent, z in millimetres: x to the right, y to the front, z up."`
	GainDB          float64       `json:"gain_db,omitempty" jsonschema:"minimum=-60,maximum=60" jsonschema_description:"Correction: added to the channel's level, dB. A quiet channel has a positive gain."`
	DelayUS         micro         `json:"delay_us,omitempty" jsonschema:"minimum=-100000,maximum=100000" jsonschema_description:"Correction: added to the channel's time, µs. A channel that arrives late has a negative delay."`
	Polarity        string        `json:"polarity,omitempty" jsonschema:"enum=normal,enum=inverted" jsonschema_description:"Polarity of the channel; an inverted one is turned over."`
	Use             *bool         `json:"use,omitempty" jsonschema_description:"false leaves the microphone out, of the reference point too."`
	SensitivityMVPa *float64      `json:"sensitivity_mv_pa,omitempty" jsonschema:"exclusiveMinimum=0,maximum=100000" jsonschema_description:"Sensitivity, mV/Pa."`
	SensitivityDBFS *float64      `json:"sensitivity_dbfs,omitempty" jsonschema:"minimum=-200,maximum=60" jsonschema_description:"What the channel reads at 94 dB sound pressure level before its gain correction, dBFS (a full-scale sine reads 0): levels are given in dB SPL too."`
	Response        *responseFile `json:"response,omitempty" jsonschema_description:"Filter that makes the channel agree with the others over frequency, as alidade calibrate --responses writes it."`
	ClockPPM        float64       `json:"clock_ppm,omitempty" jsonschema:"minimum=-10000,maximum=10000" jsonschema_description:"How fast the channel's clock runs, parts per million; positive is fast."`
}

type responseFile struct {
	RateHz int       `json:"rate_hz" jsonschema:"minimum=8000,maximum=384000" jsonschema_description:"Frames per second of the takes that it is made for."`
	Taps   []float64 `json:"taps" jsonschema:"minItems=1,maxItems=1023" jsonschema_description:"The filter: an odd number of taps, the middle one at no delay."`
}

type lineFile struct {
	Count        int   `json:"count" jsonschema:"minimum=2,maximum=256" jsonschema_description:"Number of microphones."`
	SpacingMM    milli `json:"spacing_mm" jsonschema:"minimum=1,maximum=100000" jsonschema_description:"Distance of neighbours, mm."`
	FirstChannel int   `json:"first_channel,omitempty" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Channel of the first microphone; 1 if absent. Microphones are named M and their channel."`
}

type ringFile struct {
	Count        int   `json:"count" jsonschema:"minimum=2,maximum=256" jsonschema_description:"Number of microphones."`
	RadiusMM     milli `json:"radius_mm" jsonschema:"minimum=1,maximum=50000" jsonschema_description:"Radius of the circle, mm."`
	FirstChannel int   `json:"first_channel,omitempty" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Channel of the first microphone; 1 if absent. Microphones are named M and their channel."`
}

type gridFile struct {
	Columns      int   `json:"columns" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Number of microphones along x."`
	Rows         int   `json:"rows" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Number of microphones along y."`
	SpacingMM    milli `json:"spacing_mm" jsonschema:"minimum=1,maximum=100000" jsonschema_description:"Distance of neighbours, mm."`
	FirstChannel int   `json:"first_channel,omitempty" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Channel of the first microphone; 1 if absent. Microphones are named M and their channel."`
}

type spiralFile struct {
	Count        int     `json:"count" jsonschema:"minimum=2,maximum=256" jsonschema_description:"Number of microphones."`
	RadiusMM     milli   `json:"radius_mm" jsonschema:"minimum=1,maximum=50000" jsonschema_description:"Distance of the last microphone from the origin, mm."`
	Turns        float64 `json:"turns" jsonschema:"exclusiveMinimum=0,maximum=100" jsonschema_description:"Number of turns from the first microphone to the last."`
	FirstChannel int     `json:"first_channel,omitempty" jsonschema:"minimum=1,maximum=256" jsonschema_description:"Channel of the first microphone; 1 if absent. Microphones are named M and their channel."`
}

// Schema returns the JSON Schema of a rig file.
func Schema() ([]byte, error) {
	return sheet.SchemaOf(file{}, SchemaID, "Alidade rig file")
}

// compiled is the schema made ready, once.
var compiled = sync.OnceValues(func() (*sheet.Schema, error) {
	text, err := Schema()
	if err != nil {
		return nil, err
	}
	return sheet.NewSchema(text)
})

// Load reads a rig file in YAML or JSON. The name stands in faults, and without
// its folder and ending it is the name of a rig that gives none. A rig whose
// positions stand in a CSV file is completed through open, which is given the
// path as the rig file has it and may be nil if no file can be opened. The
// error holds every fault at once as *sheet.FaultsError values, each with its
// place; sheet.Annotated shows the lines.
func Load(name string, data []byte, open func(path string) (io.ReadCloser, error)) (*Rig, error) {
	schema, err := compiled()
	if err != nil {
		return nil, err
	}
	l := loader{doc: sheet.Parse(name, data, schema), open: open}
	l.doc.Fill(&l.file)
	r := l.rig(name)
	if err := errors.Join(append([]error{l.doc.Err()}, l.beside...)...); err != nil {
		return nil, err
	}
	return r, nil
}

// loader turns a file into a rig and collects what is wrong with it.
type loader struct {
	doc    *sheet.Document
	file   file
	open   func(path string) (io.ReadCloser, error)
	beside []error // of the CSV file
}

// rig returns the rig, for what it is worth if there are faults.
func (l *loader) rig(name string) *Rig {
	f := l.file
	r := &Rig{Name: f.Rig, Reference: CentreReference, HeadingDeg: f.HeadingDeg}
	if f.Limits != nil {
		r.Limits = *f.Limits
	}
	if r.Name == "" {
		base := path.Base(strings.ReplaceAll(name, `\`, "/"))
		r.Name = strings.TrimSuffix(base, path.Ext(base))
	}
	if f.Air != nil {
		r.Air = Air(*f.Air)
	}
	if f.Reference != "" {
		r.Reference = f.Reference
	}
	if !l.doc.Has("") {
		return r
	}
	var given []string
	for _, key := range []string{"microphones", "positions", "line", "ring", "grid", "spiral"} {
		if l.doc.Given(key) {
			given = append(given, key)
		}
	}
	if len(given) == 0 {
		l.doc.Fault("", "no microphones: give one of microphones, positions, line, ring, grid and spiral")
		return r
	}
	for _, key := range given[1:] {
		l.doc.KeyFault(key, "a second set of microphones beside %s, want one", given[0])
	}
	if !l.doc.Has(given[0]) {
		return r
	}
	switch given[0] {
	case "microphones":
		l.list(r)
	case "positions":
		l.positions(r)
	case "line":
		if l.sound("line.count", "line.spacing_mm") {
			l.shape(r, "line", Line(f.Line.Count, float64(f.Line.SpacingMM)), f.Line.FirstChannel)
		}
	case "ring":
		if l.sound("ring.count", "ring.radius_mm") {
			l.shape(r, "ring", Ring(f.Ring.Count, float64(f.Ring.RadiusMM)), f.Ring.FirstChannel)
		}
	case "grid":
		if !l.sound("grid.columns", "grid.rows", "grid.spacing_mm") {
			break
		}
		if n := f.Grid.Columns * f.Grid.Rows; n < 2 || n > MaxMicrophones {
			l.doc.Fault("grid", "%d columns times %d rows are %d microphones, want 2 to %d", f.Grid.Columns, f.Grid.Rows, n, MaxMicrophones)
			break
		}
		l.shape(r, "grid", Grid(f.Grid.Columns, f.Grid.Rows, float64(f.Grid.SpacingMM)), f.Grid.FirstChannel)
	case "spiral":
		if l.sound("spiral.count", "spiral.radius_mm", "spiral.turns") {
			l.shape(r, "spiral", Spiral(f.Spiral.Count, float64(f.Spiral.RadiusMM), f.Spiral.Turns), f.Spiral.FirstChannel)
		}
	}
	return r
}

// sound reports whether all of the paths are in the file without a fault.
func (l *loader) sound(paths ...string) bool {
	for _, p := range paths {
		if !l.doc.Has(p) {
			return false
		}
	}
	return true
}

// shape fills in the microphones of a shorthand.
func (l *loader) shape(r *Rig, key string, at []Point, first int) {
	if first == 0 {
		first = 1
	}
	if last := first + len(at) - 1; last > MaxMicrophones {
		l.doc.Fault(key, "the last of %d microphones would be channel %d, at most %d are read", len(at), last, MaxMicrophones)
		return
	}
	for i, p := range at {
		r.Mics = append(r.Mics, Mic{Name: "M" + strconv.Itoa(first+i), Channel: first + i, At: p, Use: true})
	}
	l.together(r, func(int) place {
		return place{doc: l.doc, path: key, nameSound: true, channelSound: true, atSound: true}
	})
}

// list takes the microphones of the list over.
func (l *loader) list(r *Rig) {
	var places []place
	for i, m := range l.file.Microphones {
		p := fmt.Sprintf("microphones[%d]", i)
		mic := Mic{
			Name: m.Name, Channel: m.Channel, GainDB: m.GainDB, Delay: float64(m.DelayUS),
			Inverted: m.Polarity == "inverted", Use: m.Use == nil || *m.Use, ClockPPM: m.ClockPPM,
		}
		if m.SensitivityMVPa != nil {
			mic.SensitivityMVPa = *m.SensitivityMVPa
		}
		mic.SensitivityDBFS = m.SensitivityDBFS
		if v := m.Response; v != nil {
			mic.Response = &Response{RateHz: v.RateHz, Taps: v.Taps}
			if l.doc.Has(p+".response.taps") && len(v.Taps)%2 == 0 {
				l.doc.Fault(p+".response.taps", "%d taps, want an odd number: the middle one stands at no delay", len(v.Taps))
			}
			for k, tap := range v.Taps {
				if entry := fmt.Sprintf("%s.response.taps[%d]", p, k); l.doc.Has(entry) && math.Abs(tap) > 100 {
					l.doc.Fault(entry, "%g, want a tap within 100", tap)
				}
			}
		}
		if mic.Name == "" && m.Channel > 0 {
			mic.Name = "M" + strconv.Itoa(m.Channel)
		}
		at := place{doc: l.doc, path: p, channelSound: l.doc.Has(p + ".channel")}
		at.nameSound = l.doc.Has(p) && l.doc.Given(p+".name") == l.doc.Has(p+".name")
		at.atSound = l.doc.Has(p + ".at_mm")
		for k, v := range m.AtMM {
			entry := fmt.Sprintf("%s.at_mm[%d]", p, k)
			if !l.doc.Has(entry) {
				at.atSound = false
				continue
			}
			if math.Abs(float64(v)) > maxAtMM/1000 {
				l.doc.Fault(entry, "%g m from the origin, want at most %g m", math.Abs(float64(v)), maxAtMM/1000)
				at.atSound = false
			}
			switch k {
			case 0:
				mic.At.X = float64(v)
			case 1:
				mic.At.Y = float64(v)
			case 2:
				mic.At.Z = float64(v)
			}
		}
		r.Mics = append(r.Mics, mic)
		places = append(places, at)
	}
	l.together(r, func(m int) place { return places[m] })
}

// numberText returns v as the shortest decimal text that reads back as v.
func numberText(v float64) string { return strconv.FormatFloat(v, 'f', -1, 64) }
