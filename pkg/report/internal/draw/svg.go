package draw

import (
	"html"
	"html/template"
	"math"
	"strconv"
	"strings"
)

// SVG is a picture being drawn. Values that are not finite numbers are drawn at
// 0, texts are escaped.
type SVG struct{ b strings.Builder }

// Open begins the picture: a frame that fills its place on the page, named for
// readers who do not see it.
func (s *SVG) Open(class, label string, attributes ...string) {
	s.b.WriteString(`<svg class="`)
	s.b.WriteString(html.EscapeString(class))
	s.b.WriteString(`" role="img" aria-label="`)
	s.b.WriteString(html.EscapeString(label))
	s.b.WriteString(`" width="100%" height="100%"`)
	s.attributes(attributes)
	s.b.WriteByte('>')
}

// Close ends the picture and returns it.
func (s *SVG) Close() template.HTML {
	s.b.WriteString("</svg>")
	return template.HTML(s.b.String())
}

// Group begins a group, End ends it.
func (s *SVG) Group(class string, attributes ...string) {
	s.b.WriteString(`<g class="` + html.EscapeString(class) + `"`)
	s.attributes(attributes)
	s.b.WriteByte('>')
}

// End ends a group.
func (s *SVG) End() { s.b.WriteString("</g>") }

// Element writes an element with attributes in pairs of name and value.
func (s *SVG) Element(name string, attributes ...string) {
	s.b.WriteByte('<')
	s.b.WriteString(name)
	s.attributes(attributes)
	s.b.WriteString("/>")
}

func (s *SVG) attributes(pairs []string) {
	for i := 0; i+1 < len(pairs); i += 2 {
		s.b.WriteByte(' ')
		s.b.WriteString(pairs[i])
		s.b.WriteString(`="`)
		s.b.WriteString(html.EscapeString(pairs[i+1]))
		s.b.WriteByte('"')
	}
}

// Rect draws a rectangle, everything in per cent.
func (s *SVG) Rect(x, y, width, height float64, class string, attributes ...string) {
	s.Element("rect", append([]string{"x", Percent(x), "y", Percent(y), "width", Percent(math.Max(width, 0)), "height", Percent(math.Max(height, 0)), "class", class}, attributes...)...)
}

// Line draws a straight line, everything in per cent.
func (s *SVG) Line(x1, y1, x2, y2 float64, class string, attributes ...string) {
	s.Element("line", append([]string{"x1", Percent(x1), "y1", Percent(y1), "x2", Percent(x2), "y2", Percent(y2), "class", class}, attributes...)...)
}

// Dot draws a circle of a radius in pixels.
func (s *SVG) Dot(x, y, radius float64, class string, attributes ...string) {
	s.Element("circle", append([]string{"cx", Percent(x), "cy", Percent(y), "r", Number(radius), "class", class}, attributes...)...)
}

// Diamond draws a diamond of a half width in pixels.
func (s *SVG) Diamond(x, y, half float64, class string, attributes ...string) {
	s.b.WriteString(`<svg x="` + Percent(x) + `" y="` + Percent(y) + `" overflow="visible">`)
	h := Number(half)
	s.Element("path", append([]string{"d", "M0-" + h + "L" + h + " 0L0 " + h + "L-" + h + " 0Z", "class", class}, attributes...)...)
	s.b.WriteString("</svg>")
}

// Text writes text at a place in per cent.
func (s *SVG) Text(x, y float64, class, text string, attributes ...string) {
	s.b.WriteString("<text")
	s.attributes(append([]string{"x", Percent(x), "y", Percent(y), "class", class}, attributes...))
	s.b.WriteByte('>')
	s.b.WriteString(html.EscapeString(text))
	s.b.WriteString("</text>")
}

// Path draws a curve through points in per cent that may be stretched with the
// frame, its stroke not.
func (s *SVG) Path(points [][2]float64, class string, closed bool) {
	s.b.WriteString(`<svg viewBox="0 0 100 100" preserveAspectRatio="none" width="100%" height="100%" overflow="visible">`)
	var d strings.Builder
	for i, p := range points {
		if i == 0 {
			d.WriteByte('M')
		} else {
			d.WriteByte('L')
		}
		d.WriteString(Number(p[0]) + " " + Number(p[1]))
	}
	if closed {
		d.WriteByte('Z')
	}
	s.Element("path", "d", d.String(), "class", class, "vector-effect", "non-scaling-stroke")
	s.b.WriteString("</svg>")
}

// Number returns a number with at most two decimals.
func Number(v float64) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "0"
	}
	v = math.Round(v*100) / 100
	if v == 0 {
		return "0"
	}
	return strconv.FormatFloat(v, 'f', -1, 64)
}

// Percent returns a number with at most two decimals and its sign.
func Percent(v float64) string { return Number(v) + "%" }

// Scale places values on an axis, in per cent.
type Scale struct {
	from, to float64
	log      bool
}

// Linear is an axis on which from lies at 0 and to at 100 per cent.
func Linear(from, to float64) Scale { return Scale{from, to, false} }

// Log is a logarithmic axis of two values above 0.
func Log(from, to float64) Scale { return Scale{math.Log(from), math.Log(to), true} }

// At returns where v lies, held to the axis: per cent.
func (s Scale) At(v float64) float64 {
	if s.log {
		v = math.Log(v)
	}
	if s.to == s.from {
		return 0
	}
	return math.Min(100, math.Max(0, 100*(v-s.from)/(s.to-s.from)))
}

// Inside reports whether v lies on the axis.
func (s Scale) Inside(v float64) bool {
	if s.log {
		v = math.Log(v)
	}
	return v >= math.Min(s.from, s.to) && v <= math.Max(s.from, s.to)
}

// Ticks returns round values from low to high, at most so many.
func Ticks(low, high float64, most int) []float64 {
	if !(high > low) || most < 1 || math.IsInf(high-low, 0) {
		return nil
	}
	step := math.Pow(10, math.Floor(math.Log10((high-low)/float64(most))))
	for _, f := range []float64{1, 2, 3, 5, 10, 20, 30, 50} {
		if math.Mod(f, 3) == 0 && f*step < 2.9 {
			continue // threes are for decibels and degrees, not for parts of a second
		}
		if n := math.Floor(high/(f*step)) - math.Ceil(low/(f*step)) + 1; n <= float64(most) {
			step *= f
			break
		}
	}
	var ticks []float64
	for i := math.Ceil(low / step); i*step <= high*(1+1e-12)+1e-12 && len(ticks) < 4*most; i++ {
		ticks = append(ticks, i*step)
	}
	return ticks
}
