package report

import (
	"fmt"
	"math"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

// timeAxis is the take from its first to its last frame.
func timeAxis(r *pipeline.Result) draw.Scale {
	return draw.Linear(0, math.Max(r.Take.DurationS, 1e-3))
}

// timeTicks draws the marks of the time axis beneath a chart.
func timeTicks(s *draw.SVG, r *pipeline.Result) {
	x := timeAxis(r)
	for _, t := range draw.Ticks(0, r.Take.DurationS, 6) {
		s.Text(x.At(t), 100, "tick mid", clock(t, r.Take.DurationS), "dy", "18")
	}
}

// clock returns seconds of a take as they stand on its axis.
func clock(t, whole float64) string {
	if whole < 60 {
		return draw.Number(t) + " s"
	}
	m := math.Floor(t / 60)
	if whole < 3600 {
		return fmt.Sprintf("%.0f:%02.0f", m, t-60*m)
	}
	return fmt.Sprintf("%.0f:%02.0f:%02.0f", math.Floor(m/60), math.Mod(m, 60), t-60*m)
}

// segmentChart draws the stretches behind the figures; nil where there are
// none in the take.
func segmentChart(r *pipeline.Result) *chart {
	g := r.Segments
	if len(g.Noise)+len(g.Target) == 0 || r.Take.DurationS <= 0 || g.Source == "isolated" {
		return nil
	}
	x := timeAxis(r)
	var s draw.SVG
	s.Open("segments", fmt.Sprintf("Stretches of the take behind the figures: %d with noise alone, %d with the target. They come from: %s.", len(g.Noise), len(g.Target), clean(g.Source)))
	for row, list := range [][][2]float64{g.Noise, g.Target} {
		name := [2]string{"noise", "target"}[row]
		y := 4 + 50*float64(row)
		s.Rect(0, y, 100, 42, "lane")
		for _, st := range list {
			s.Rect(x.At(st[0]), y, math.Max(x.At(st[1])-x.At(st[0]), 0.15), 42, "stretch "+name, "data-from", Round(st[0], "start_s"), "data-to", Round(st[1], "end_s"))
		}
		s.Text(0, y+21, "tick left", name, "dx", "-8", "dy", "4")
	}
	timeTicks(&s, r)
	words := map[string]string{
		"given": "as given", "cues": "from cue points", "automatic": "found by the level of the steered track against its own floor",
	}
	source, known := words[g.Source]
	if !known {
		source = clean(g.Source)
	}
	return &chart{Key: "segments", Name: "Stretches used", Picture: s.Close(),
		Caption: "The stretches behind every figure on this page, " + source + ". If one of them is wrong, so are the figures: give others with --noise and --target."}
}

// directionChart draws the direction over time with its error; nil where it
// was not estimated.
func directionChart(r *pipeline.Result) *chart {
	d := r.Direction
	if d == nil || len(d.Windows) == 0 {
		return nil
	}
	// The axis spans what was heard, with room for errors, at least 20°.
	low, high, found := r.Steer.AzimuthDeg, r.Steer.AzimuthDeg, 0
	for _, w := range d.Windows {
		if w.AzimuthDeg == nil {
			continue
		}
		found++
		e := 0.0
		if w.StandardErrorDeg != nil {
			e = math.Min(2**w.StandardErrorDeg, 30)
		}
		low, high = math.Min(low, *w.AzimuthDeg-e), math.Max(high, *w.AzimuthDeg+e)
	}
	if pad := (20 - (high - low)) / 2; pad > 0 {
		low, high = low-pad, high+pad
	}
	low, high = math.Max(math.Floor(low/5)*5, -180), math.Min(math.Ceil(high/5)*5, 180)
	x, y := timeAxis(r), draw.Linear(high, low)
	radius := 3.0
	if len(d.Windows) > 120 {
		radius = 1.5
	}
	var s draw.SVG
	s.Open("direction", fmt.Sprintf("Azimuth over time: heard in %d of %d windows, %s.", found, len(d.Windows), timeHeading(r)))
	for _, v := range draw.Ticks(low, high, 6) {
		s.Line(0, y.At(v), 100, y.At(v), "grid")
		s.Text(0, y.At(v), "tick left", draw.Number(v)+"°", "dx", "-8", "dy", "4")
	}
	pointed := "The beam followed it."
	if r.Steer.Kind != "followed" {
		pointed = "The line is where the beam was pointed."
		s.Line(0, y.At(r.Steer.AzimuthDeg), 100, y.At(r.Steer.AzimuthDeg), "steer")
	}
	for _, w := range d.Windows {
		if w.AzimuthDeg == nil {
			continue
		}
		mid := x.At((w.StartS + w.EndS) / 2)
		if e := w.StandardErrorDeg; e != nil {
			s.Line(mid, y.At(*w.AzimuthDeg-2**e), mid, y.At(*w.AzimuthDeg+2**e), "whisker")
		}
		class := "fix"
		if w.Confidence != nil && *w.Confidence < 0.5 {
			class += " unsure"
		}
		s.Dot(mid, y.At(*w.AzimuthDeg), radius, class, "data-azimuth", Round(*w.AzimuthDeg, "azimuth_deg"))
	}
	timeTicks(&s, r)
	return &chart{Key: "direction", Name: "Direction over time", Picture: s.Close(),
		Caption: "Each dot is the direction in one window, its whisker two standard errors either way; hollow dots are unsure. " + pointed}
}

// spectrogramCharts draws the take before and after on one scale.
func spectrogramCharts(r *pipeline.Result) ([]chart, error) {
	p := r.Pictures
	if p == nil {
		return nil, nil
	}
	var list []chart
	for _, part := range []struct {
		key, name string
		s         *pipeline.Spectrogram
	}{{"before", "Before: the reference", p.Reference}, {"after", "After: the steered track", p.Output}} {
		g := part.s
		if g == nil || !sound(g.Levels, len(g.Hz), -1) {
			continue
		}
		if g.Of != "" {
			part.name = "Before: microphone " + shorten(clean(g.Of), 24)
		}
		url, err := draw.HeatMap(g.Levels.Rows, g.Levels.Columns, g.Levels.Bytes)
		if err != nil {
			return nil, err
		}
		x := timeAxis(r)
		from, to := x.At(g.StartS), x.At(g.StartS+g.StepS*float64(g.Levels.Columns))
		var s draw.SVG
		s.Open("heat", fmt.Sprintf("%s: spectrogram from %s to %s, %s to %s dBFS.", part.name, frequencyWords(math.Round(g.Hz[0])), frequencyWords(math.Round(g.Hz[len(g.Hz)-1])),
			decimals(g.Levels.LowDB, 0), decimals(g.Levels.HighDB, 0)))
		s.Element("image", "href", url, "x", draw.Percent(from), "y", "0", "width", draw.Percent(to-from), "height", "100%", "preserveAspectRatio", "none")
		frequencyTicks(&s, g.Hz)
		if r.Segments.Source != "isolated" { // those are of other takes
			for _, st := range r.Segments.Noise {
				s.Line(x.At(st[0]), 0, x.At(st[1]), 0, "stretch noise")
			}
			for _, st := range r.Segments.Target {
				s.Line(x.At(st[0]), 0, x.At(st[1]), 0, "stretch target")
			}
		}
		timeTicks(&s, r)
		list = append(list, chart{Key: part.key, Name: part.name + ", Hz", Picture: s.Close(), Low: decimals(g.Levels.LowDB, 0) + " dBFS", High: decimals(g.Levels.HighDB, 0) + " dBFS",
			Caption: spectrogramWords(part.key, r)})
	}
	return list, nil
}

// spectrogramWords say what to look for.
func spectrogramWords(key string, r *pipeline.Result) string {
	text := "Light is loud, on the same scale before and after."
	if key == "after" {
		text = "What got darker is what the beam took away; the wanted sound should look as it did before."
	}
	if len(r.Segments.Noise)+len(r.Segments.Target) > 0 && r.Segments.Source != "isolated" {
		text += " The strip above it marks the stretches used: orange the noise, blue the target."
	}
	return text
}

// frequencyTicks marks octaves on a vertical logarithmic axis.
func frequencyTicks(s *draw.SVG, hz []float64) {
	y := draw.Log(hz[len(hz)-1], hz[0])
	for _, f := range []float64{63, 125, 250, 500, 1000, 2000, 4000, 8000, 16000} {
		if y.Inside(f) {
			s.Text(0, y.At(f), "tick left", frequencyShort(f), "dx", "-8", "dy", "4")
		}
	}
}

// sound reports whether a grid holds what it says, with so many rows and
// columns (any number for -1) and a size fit for a page.
func sound(l pipeline.Levels, rows, columns int) bool {
	const most = 4 << 20
	return l.Rows > 1 && l.Columns > 1 && (rows < 0 || l.Rows == rows) && (columns < 0 || l.Columns == columns) &&
		l.Rows <= most && l.Columns <= most && l.Rows*l.Columns <= most && len(l.Bytes) == l.Rows*l.Columns && l.HighDB > l.LowDB
}
