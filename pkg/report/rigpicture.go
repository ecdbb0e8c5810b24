package report

import (
	"fmt"
	"html/template"
	"math"
	"strings"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

// rigView is how a rig is looked at: from above, or from the front where it is
// taller than deep.
type rigView struct {
	front          bool
	cx, cy, radius float64 // metres, the middle and half the side of what is shown
}

func viewOf(r *pipeline.Result) rigView {
	var low, high [3]float64
	for i := range low {
		low[i], high[i] = math.Inf(1), math.Inf(-1)
	}
	for _, m := range r.Rig.Mics {
		for i, x := range m.AtM {
			low[i], high[i] = math.Min(low[i], x), math.Max(high[i], x)
		}
	}
	v := rigView{front: high[2]-low[2] > 2*(high[1]-low[1]) && high[2]-low[2] > 1e-9}
	second := 1
	if v.front {
		second = 2
	}
	v.cx, v.cy = (low[0]+high[0])/2, (low[second]+high[second])/2
	v.radius = 1.45 * math.Max(math.Max(high[0]-low[0], high[second]-low[second])/2, 1e-3)
	return v
}

// at places a microphone, per cent.
func (v rigView) at(p [3]float64) (x, y float64) {
	second := p[1]
	if v.front {
		second = p[2]
	}
	return 50 + 50*(p[0]-v.cx)/v.radius, 50 - 50*(second-v.cy)/v.radius
}

// rigPicture draws the microphones with their names, those left out or with
// remarks marked, the steered direction, and a scale.
func rigPicture(r *pipeline.Result) *chart {
	if len(r.Rig.Mics) == 0 {
		return nil
	}
	v := viewOf(r)
	remarks := map[int]bool{}
	for _, c := range r.Channels {
		remarks[c.Channel] = len(c.Flags) > 0
	}
	from, edge := "from above, front at the top", "front"
	if v.front {
		from, edge = "from behind, up at the top", "up"
	}
	var s draw.SVG
	// A rig that is only looked at is steered nowhere.
	steered, toward, line := r.Steer.Kind != "", "", ""
	if steered {
		toward, line = ", steered to "+directionWords(r), " The line is the steered direction from the reference point."
	}
	s.Open("rig", fmt.Sprintf("The rig %s seen %s: %d microphones, %d in use%s.",
		clean(r.Rig.Name), from, len(r.Rig.Mics), r.Rig.MicrophonesUsed, toward))
	az, el := r.Steer.AzimuthDeg*math.Pi/180, r.Steer.ElevationDeg*math.Pi/180
	u := [3]float64{math.Cos(el) * math.Cos(az), math.Cos(el) * math.Sin(az), math.Sin(el)}
	rx, ry := v.at(r.Rig.ReferencePointM)
	ux, uy := u[0], u[1]
	if v.front {
		uy = u[2]
	}
	if steered {
		s.Line(rx, ry, rx+46*ux, ry-46*uy, "steer casing")
		s.Line(rx, ry, rx+46*ux, ry-46*uy, "steer", "data-azimuth", Round(r.Steer.AzimuthDeg, "azimuth_deg"))
	}
	s.Text(50, 0, "tick mid", edge, "dy", "12")
	// Names beside the dots are legible up to a couple of dozen.
	names := len(r.Rig.Mics) <= 24
	for i, m := range r.Rig.Mics {
		x, y := v.at(m.AtM)
		class := "mic"
		switch {
		case !m.Used:
			class += " out"
		case remarks[m.Channel]:
			class += " remark"
		}
		s.Group(class, "data-channel", fmt.Sprint(m.Channel))
		s.Dot(x, y, 6, "body")
		if !m.Used {
			s.Line(x-1.6, y-1.6, x+1.6, y+1.6, "cross")
			s.Line(x-1.6, y+1.6, x+1.6, y-1.6, "cross")
		}
		if names {
			// Names of a row step up and down, so that neighbours keep apart.
			dy := "-11"
			if i%2 == 1 {
				dy = "20"
			}
			s.Text(x, y, "name mid", shorten(clean(m.Name), 8), "dy", dy)
		}
		s.End()
	}
	length := niceLength(v.radius)
	s.Line(4, 96, 4+50*length/v.radius, 96, "ruler")
	s.Text(4, 96, "tick", lengthWords(length), "dy", "-6")
	return &chart{Key: "rig", Name: "Rig", Picture: s.Close(),
		Caption: fmt.Sprintf("The rig seen %s.%s Crossed microphones are left out, hollow ones have a remark.", from, line)}
}

// stamp is the mark of a rig: its microphones and where it was pointed, without
// words.
func stamp(r *pipeline.Result) template.HTML {
	var s draw.SVG
	s.Open("stamp", "")
	v := viewOf(r)
	az := r.Steer.AzimuthDeg * math.Pi / 180
	if len(r.Rig.Mics) > 0 && r.Steer.Kind != "" {
		rx, ry := v.at(r.Rig.ReferencePointM)
		s.Line(rx, ry, rx+45*math.Cos(az), ry-45*math.Sin(az), "steer")
	}
	for _, m := range r.Rig.Mics {
		if x, y := v.at(m.AtM); m.Used {
			s.Dot(x, y, 2.4, "body")
		}
	}
	return template.HTML(strings.Replace(string(s.Close()), `role="img" aria-label=""`, `aria-hidden="true"`, 1))
}

// niceLength returns 1, 2 or 5 times a power of ten of about half a radius.
func niceLength(radius float64) float64 {
	p := math.Pow(10, math.Floor(math.Log10(radius/2)))
	for _, f := range []float64{5, 2, 1} {
		if f*p <= radius/2*1.0001 {
			return f * p
		}
	}
	return p
}

func lengthWords(m float64) string {
	switch {
	case m < 0.0095:
		return draw.Number(m*1000) + " mm"
	case m < 0.95:
		return draw.Number(m*100) + " cm"
	}
	return draw.Number(m) + " m"
}

// shorten cuts text to so many characters.
func shorten(text string, most int) string {
	runes := []rune(text)
	if len(runes) <= most {
		return text
	}
	return string(runes[:most-1]) + "…"
}
