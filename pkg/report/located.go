package report

import (
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"github.com/jedib0t/go-pretty/v6/text"

	"alidade/pkg/pipeline"
)

// Bounds of what a terminal is shown of a take; the table of LocatedCSV has all.
const (
	locatedRows   = 24 // times
	locatedTracks = 3
	pictureHeight = 5
)

// LocatedText writes what was heard from where for a person at a terminal of
// the given width in cells (80 where it is 0, never less than 60): the sources,
// a picture of power over angle, the paths over time, and the findings.
func LocatedText(w io.Writer, r *pipeline.Located, width int) error {
	if width == 0 {
		width = 80
	}
	width = max(width, 60)
	lines := wrap(locatedHeadline(r), width, "  ", 4)
	if len(r.Sources) > 0 {
		lines = append(lines, "")
		lines = append(lines, sourceTable(r, width)...)
	}
	if r.Ambiguity != "" && len(r.Sources) > 0 {
		lines = append(lines, wrap(clean(r.Ambiguity), width, "", 3)...)
	}
	if p := pictureLines(r, width); len(p) > 0 {
		lines = append(append(lines, ""), p...)
	}
	if t := pathTable(r, width); len(t) > 0 {
		lines = append(append(lines, ""), t...)
	}
	if len(r.Findings) > 0 && len(r.Sources) > 0 {
		lines = append(lines, "")
	}
	for _, f := range r.Findings {
		lines = append(lines, wrap(string(f.Severity)+": "+clean(f.Message), width, "  ", 4)...)
	}
	_, err := io.WriteString(w, strings.Join(lines, "\n")+"\n")
	return err
}

// locatedHeadline says how many sources were heard in what.
func locatedHeadline(r *pipeline.Located) string {
	name := "take"
	if len(r.Take.Files) > 0 {
		name = clean(r.Take.Files[0].Path)
	}
	what := "no source"
	switch n := len(r.Sources); {
	case n == 1:
		what = "1 source"
	case n > 1:
		what = fmt.Sprintf("%d sources", n)
	}
	return fmt.Sprintf("%s: %s heard in %s s, %.0f to %.0f Hz, windows of %.2f s", name, what, decimals(r.Take.DurationS, 1), r.Search.FromHz, r.Search.ToHz, r.Search.WindowS)
}

// column is a column of a table of texts, all of them of one alignment.
type column struct {
	head string
	left bool
	cell []string
}

// columns lays out columns two blanks apart.
func columns(width int, list ...column) []string {
	var lines []string
	for i := -1; i < len(list[0].cell); i++ {
		var row []string
		for _, c := range list {
			wide := text.StringWidthWithoutEscSequences(c.head)
			for _, s := range c.cell {
				wide = max(wide, text.StringWidthWithoutEscSequences(s))
			}
			s := c.head
			if i >= 0 {
				s = c.cell[i]
			}
			pad := strings.Repeat(" ", wide-text.StringWidthWithoutEscSequences(s))
			if c.left {
				row = append(row, s+pad)
			} else {
				row = append(row, pad+s)
			}
		}
		lines = append(lines, cut(strings.TrimRight(strings.Join(row, "  "), " "), width))
	}
	return lines
}

// angleText returns an angle with its unit, a dash where there is none; one
// decimal more where it is small.
func angleText(v pipeline.Number) string {
	switch {
	case v == nil || math.IsNaN(*v) || math.IsInf(*v, 0):
		return "–"
	case math.Abs(*v) < 1:
		return decimals(*v, 2) + "°"
	}
	return decimals(*v, 1) + "°"
}

// metresText returns a distance with its standard error, nothing where there is
// none.
func metresText(b pipeline.Bearing) string {
	if b.DistanceM == nil {
		return ""
	}
	s := decimals(*b.DistanceM, 2)
	if b.DistanceErrorM != nil {
		s += " ± " + decimals(*b.DistanceErrorM, 2)
	}
	return s + " m"
}

func ratioText(v pipeline.Number) string {
	if v == nil {
		return "–"
	}
	return decimals(*v, 2)
}

// withError returns an angle with its standard error.
func withError(v float64, e pipeline.Number) string {
	if e == nil {
		return decimals(v, 1) + "°"
	}
	return decimals(v, 1) + "° ± " + angleText(e)
}

// sourceTable is a line a source, and columns only for what some of them have.
func sourceTable(r *pipeline.Located, width int) []string {
	number, azimuth := column{head: "#"}, column{head: "azimuth"}
	compass, elevation, distance := column{head: "true"}, column{head: "elevation"}, column{head: "distance"}
	confidence, heard, remarks := column{head: "confidence"}, column{head: "heard"}, column{left: true}
	anyUp, anyCompass, anyDistance := false, false, false
	for i, s := range r.Sources {
		add := func(c *column, text string) { c.cell = append(c.cell, text) }
		add(&number, strconv.Itoa(i+1))
		add(&azimuth, withError(s.AzimuthDeg, s.StandardErrorDeg))
		add(&elevation, withError(s.ElevationDeg, s.ElevationErrorDeg))
		heading := ""
		if s.CompassDeg != nil {
			heading = fmt.Sprintf("%03.0f°", math.Mod(math.Round(*s.CompassDeg), 360))
		}
		add(&compass, heading)
		add(&distance, metresText(s.Bearing))
		add(&confidence, ratioText(s.Confidence))
		add(&heard, fmt.Sprintf("%.0f %%", 100*float64(s.Windows)/float64(max(1, len(r.Windows)))))
		var words []string
		for _, w := range []struct {
			is   bool
			word string
		}{{s.Moves, "moves"}, {s.Steady, "steady"}, {s.Reflection, "reflection"}} {
			if w.is {
				words = append(words, w.word)
			}
		}
		add(&remarks, strings.Join(words, ", "))
		anyUp = anyUp || s.ElevationErrorDeg != nil || math.Abs(s.ElevationDeg) >= 0.05
		anyCompass = anyCompass || s.CompassDeg != nil
		anyDistance = anyDistance || s.DistanceM != nil
	}
	list := []column{number, azimuth}
	if anyCompass {
		list = append(list, compass)
	}
	if anyUp {
		list = append(list, elevation)
	}
	if anyDistance {
		list = append(list, distance)
	}
	return columns(width, append(list, confidence, heard, remarks)...)
}

// pictureLines are the picture of power over angle with its axes.
func pictureLines(r *pipeline.Located, width int) []string {
	angles := r.Picture.AnglesDeg
	const margin = 7
	wide := min(width-margin-1, 60)
	rows := strings.Split(strings.TrimRight(r.Picture.Text(wide, pictureHeight), "\n"), "\n")
	if len(angles) < 2 || len(rows) < pictureHeight {
		return nil
	}
	lines := []string{"power over azimuth"}
	if r.Rig.Shape == "line" {
		lines[0] = "power over the angle from the line's axis"
	}
	for i, row := range rows {
		scale := ""
		switch i {
		case 0:
			scale = "0 dB"
		case len(rows) - 1:
			scale = "-20 dB"
		}
		lines = append(lines, strings.TrimRight(fmt.Sprintf("%6s |%s", scale, row), " "))
	}
	first, last := angles[0], angles[len(angles)-1]
	axis, marks := []rune(strings.Repeat("-", wide)), []rune(strings.Repeat(" ", wide+4))
	for _, a := range []float64{-90, 0, 45, 90, 135, 180} {
		at := int(math.Round((a - first) / (last - first) * float64(wide-1)))
		if a < first-1 || a > last+1 || last-first > 270 && (a == 45 || a == 135) {
			continue
		}
		at = min(max(at, 0), wide-1)
		axis[at] = '+'
		label := []rune(decimals(a, 0) + "°")
		copy(marks[max(0, min(at-len(label)/2, wide+4-len(label))):], label)
	}
	return append(lines, strings.Repeat(" ", margin)+"+"+string(axis), strings.TrimRight(strings.Repeat(" ", margin+1)+string(marks), " "))
}

// pathTable is the paths over time: the tracks that were heard longest, at some
// of their times.
func pathTable(r *pipeline.Located, width int) []string {
	tracks := r.Tracks
	if len(tracks) == 0 {
		return nil
	}
	if len(tracks) > locatedTracks {
		tracks = tracks[:locatedTracks]
	}
	var times []float64
	for _, t := range tracks {
		for _, k := range t.Knots {
			times = append(times, k.TimeS)
		}
	}
	slices.Sort(times)
	times = slices.Compact(times)
	step := (len(times) + locatedRows - 1) / locatedRows
	var shown []float64
	for i := 0; i < len(times); i += step {
		shown = append(shown, times[i])
	}
	at := column{head: "time, s"}
	for _, x := range shown {
		at.cell = append(at.cell, decimals(x, 2))
	}
	list := []column{at}
	for i, t := range tracks {
		c := column{head: fmt.Sprintf("track %d", i+1)}
		knots := map[float64]pipeline.LocatedKnot{}
		for _, k := range t.Knots {
			knots[k.TimeS] = k
		}
		for _, x := range shown {
			k, ok := knots[x]
			s := ""
			if ok {
				s = decimals(k.AzimuthDeg, 1) + "°"
				if math.Abs(k.ElevationDeg) >= 0.05 {
					s += " up " + decimals(k.ElevationDeg, 1) + "°"
					s = strings.Replace(s, "up -", "down ", 1)
				}
				s += " ± " + levelText(k.StandardErrorDeg) + "°"
				if !k.Heard {
					s = "(" + s + ")"
				}
			}
			c.cell = append(c.cell, s)
		}
		list = append(list, c)
	}
	lines := columns(width, list...)
	var rest []string
	if len(r.Tracks) > len(tracks) {
		rest = append(rest, fmt.Sprintf("%d of %d tracks", len(tracks), len(r.Tracks)))
	}
	if step > 1 {
		rest = append(rest, fmt.Sprintf("every %s s", decimals(float64(step)*r.Search.HopS, 1)))
	}
	if len(rest) > 0 {
		lines = append(lines, strings.Join(rest, ", ")+"; --csv and --json have all of it")
	}
	if slices.ContainsFunc(lines, func(s string) bool { return strings.Contains(s, "(") }) {
		lines = append(lines, "(in brackets: carried over a silence)")
	}
	return lines
}

// LocatedCSV writes what was heard from where as a table with a header line:
// first the sources over the whole take, then what each window heard, then the
// tracks, told apart by the first column. A quantity that was not measured is
// an empty cell; keys and figures are those of the JSON form.
func LocatedCSV(w io.Writer, r *pipeline.Located) error {
	out := csv.NewWriter(w)
	head := []string{"kind", "number", "start_s", "end_s", "azimuth_deg", "elevation_deg", "compass_deg", "distance_m",
		"standard_error_deg", "elevation_error_deg", "confidence", "heard"}
	out.Write(head)
	number := func(v float64, key string) string { return Round(v, key) }
	row := func(kind string, n int, start, end float64, b pipeline.Bearing, heard string) {
		out.Write([]string{kind, strconv.Itoa(n), number(start, "start_s"), number(end, "end_s"),
			number(b.AzimuthDeg, "azimuth_deg"), number(b.ElevationDeg, "elevation_deg"), cellText(b.CompassDeg, "compass_deg"),
			cellText(b.DistanceM, "distance_m"), cellText(b.StandardErrorDeg, "standard_error_deg"),
			cellText(b.ElevationErrorDeg, "elevation_error_deg"), cellText(b.Confidence, "confidence"), heard})
	}
	for i, s := range r.Sources {
		row("source", i+1, 0, r.Take.DurationS, s.Bearing, "true")
	}
	for _, v := range r.Windows {
		for i, b := range v.Sources {
			row("window", i+1, v.StartS, v.EndS, b, "true")
		}
	}
	half := r.Search.WindowS / 2
	for i, t := range r.Tracks {
		for _, k := range t.Knots {
			row("track", i+1, math.Max(0, k.TimeS-half), math.Min(r.Take.DurationS, k.TimeS+half), pipeline.Bearing{
				AzimuthDeg: k.AzimuthDeg, ElevationDeg: k.ElevationDeg, StandardErrorDeg: k.StandardErrorDeg,
			}, strconv.FormatBool(k.Heard))
		}
	}
	out.Flush()
	return out.Error()
}
