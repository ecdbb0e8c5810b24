package report

import (
	"fmt"
	"math"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

// level returns the level of a cell of a grid, dB.
func level(l pipeline.Levels, row, column int) float64 {
	return l.LowDB + (l.HighDB-l.LowDB)*float64(l.Bytes[row*l.Columns+column])/255
}

// angleTicks returns angles that people know, in degrees.
func angleTicks(first, last float64) []float64 {
	step := 5.0
	for _, s := range []float64{10, 15, 30, 45, 90} {
		if (last-first)/step > 9 {
			step = s
		}
	}
	var ticks []float64
	for a := math.Ceil(first/step) * step; a <= last && len(ticks) < 20; a += step {
		ticks = append(ticks, a)
	}
	return ticks
}

// angleMarks writes the angles beneath a picture; every other one makes room
// where the page is narrow.
func angleMarks(s *draw.SVG, x draw.Scale, first, last float64) {
	for i, a := range angleTicks(first, last) {
		class := "tick mid"
		if i%2 == 1 {
			class += " minor"
		}
		s.Text(x.At(a), 100, class, draw.Number(a)+"°", "dy", "18")
	}
}

// responseChart draws what the beam lets through over angle and frequency; nil
// where the report has no such picture.
func responseChart(r *pipeline.Result) (*chart, error) {
	if r.Pictures == nil || r.Pictures.Response == nil {
		return nil, nil
	}
	p := r.Pictures.Response
	if !sound(p.Levels, len(p.Hz), len(p.AnglesDeg)) {
		return nil, nil
	}
	url, err := draw.HeatMap(p.Levels.Rows, p.Levels.Columns, p.Levels.Bytes)
	if err != nil {
		return nil, err
	}
	first, last := p.AnglesDeg[0], p.AnglesDeg[len(p.AnglesDeg)-1]
	x, y := draw.Linear(first, last), draw.Log(p.Hz[len(p.Hz)-1], p.Hz[0])
	label := fmt.Sprintf("What the beam lets in from %s° to %s° and from %s to %s, steered to %s°.",
		draw.Number(first), draw.Number(last), frequencyWords(math.Round(p.Hz[0])), frequencyWords(math.Round(p.Hz[len(p.Hz)-1])), decimals(r.Steer.AzimuthDeg, 1))
	var s draw.SVG
	s.Open("heat", label, "data-low-db", Round(p.Levels.LowDB, "low_db"), "data-high-db", Round(p.Levels.HighDB, "high_db"),
		"data-x-from", Round(first, "x_deg"), "data-x-to", Round(last, "x_deg"),
		"data-y-from", Round(p.Hz[0], "y_hz"), "data-y-to", Round(p.Hz[len(p.Hz)-1], "y_hz"))
	s.Element("image", "href", url, "width", "100%", "height", "100%", "preserveAspectRatio", "none")
	frequencyTicks(&s, p.Hz)
	angleMarks(&s, x, first, last)
	steer := x.At(r.Steer.AzimuthDeg)
	s.Line(steer, 0, steer, 100, "overlay casing")
	s.Line(steer, 0, steer, 100, "overlay")
	if g := p.GratingFreeBelowHz; g != nil && y.Inside(*g) {
		s.Line(0, y.At(*g), 100, y.At(*g), "overlay casing")
		s.Line(0, y.At(*g), 100, y.At(*g), "overlay dashed")
		s.Text(100, y.At(*g), "overlay right", "grating lobes above "+frequencyWords(threeDigits(*g)), "dx", "-6", "dy", "-5")
	}
	for _, lobe := range p.Lobes {
		if !x.Inside(lobe.AzimuthDeg) || !(lobe.Hz > 0) || !y.Inside(lobe.Hz) {
			continue
		}
		data := []string{"data-level", Round(lobe.LevelDB, "level_db")}
		switch lobe.Kind {
		case "grating":
			s.Diamond(x.At(lobe.AzimuthDeg), y.At(lobe.Hz), 4, "lobe grating", data...)
		case "side":
			s.Dot(x.At(lobe.AzimuthDeg), y.At(lobe.Hz), 2.5, "lobe side", data...)
		case "main":
			s.Dot(x.At(lobe.AzimuthDeg), y.At(lobe.Hz), 5, "lobe main", data...)
		}
	}
	far := "a far source"
	if r.Steer.Kind == "followed" {
		far = "the mean direction, since the beam moved, and a far source"
	}
	if p.DistanceM != nil {
		far = "a source " + decimals(*p.DistanceM, 2) + " m away"
	}
	return &chart{Key: "response", Name: "Response over angle and frequency, Hz", Picture: s.Close(), Low: decimals(p.Levels.LowDB, 0) + " dB", High: decimals(p.Levels.HighDB, 0) + " dB",
		Caption: fmt.Sprintf("Light is let through: %s to %s dB against the steered direction (the upright line), for %s at elevation %s°. Marked at a few frequencies: rings the main lobe, dots side lobes, diamonds grating lobes, heard like the wanted sound.",
			decimals(p.Levels.LowDB, 0), decimals(p.Levels.HighDB, 0), far, decimals(p.ElevationDeg, 0))}, nil
}

// polarCharts draws the response around the rig at a few frequencies.
func polarCharts(r *pipeline.Result) []chart {
	if r.Pictures == nil || r.Pictures.Response == nil {
		return nil
	}
	p := r.Pictures.Response
	if !sound(p.Levels, len(p.Hz), len(p.AnglesDeg)) {
		return nil
	}
	const floor = -40.0
	var list []chart
	for _, hz := range []float64{250, 1000, 2000, 6300} {
		row, distance := 0, math.Inf(1)
		for i, f := range p.Hz {
			if d := math.Abs(math.Log(f / hz)); d < distance {
				row, distance = i, d
			}
		}
		if distance > 0.12 {
			continue // not in the picture
		}
		name := frequencyWords(twoDigits(p.Hz[row]))
		var s draw.SVG
		s.Open("polar", fmt.Sprintf("Polar response at %s: 0 dB at the rim, -20 dB at half the radius, %s dB at the centre, 0° to the right, 90° up.", name, draw.Number(floor)))
		for _, ring := range []float64{0, -20} {
			s.Element("circle", "cx", "50%", "cy", "50%", "r", draw.Percent(44*(1-ring/floor)), "class", "grid")
		}
		s.Line(6, 50, 94, 50, "grid")
		s.Line(50, 6, 50, 94, "grid")
		s.Text(94, 50, "tick", "0°", "dx", "3", "dy", "4")
		s.Text(50, 6, "tick mid", "90°", "dy", "-3")
		points := make([][2]float64, 0, len(p.AnglesDeg))
		for c, a := range p.AnglesDeg {
			radius := 44 * math.Max(0, 1-level(p.Levels, row, c)/floor)
			rad := a * math.Pi / 180
			points = append(points, [2]float64{50 + math.Min(radius, 50)*math.Cos(rad), 50 - math.Min(radius, 50)*math.Sin(rad)})
		}
		full := p.AnglesDeg[len(p.AnglesDeg)-1]-p.AnglesDeg[0] > 350
		s.Path(points, "lobes", full)
		az := r.Steer.AzimuthDeg * math.Pi / 180
		s.Line(50, 50, 50+44*math.Cos(az), 50-44*math.Sin(az), "steer")
		list = append(list, chart{Key: "polar", Name: name, Picture: s.Close()})
	}
	return list
}

// twoDigits and threeDigits round a frequency to so many significant digits.
func twoDigits(hz float64) float64   { return digits(hz, 2) }
func threeDigits(hz float64) float64 { return digits(hz, 3) }

func digits(hz float64, n int) float64 {
	p := math.Pow(10, math.Floor(math.Log10(hz))+1-float64(n))
	return math.Round(hz/p) * p
}

// scanCharts draws the level of the beam steered to many angles; empty where
// nothing was scanned.
func scanCharts(r *pipeline.Result) ([]chart, error) {
	if r.Pictures == nil || r.Pictures.Scan == nil || len(r.Pictures.Scan.AnglesDeg) < 2 {
		return nil, nil
	}
	p := r.Pictures.Scan
	first, last := p.AnglesDeg[0], p.AnglesDeg[len(p.AnglesDeg)-1]
	x := draw.Linear(first, last)
	angles := func(s *draw.SVG) { angleMarks(s, x, first, last) }
	var list []chart
	for _, part := range []struct {
		key, name, unit string
		values          []pipeline.Number
	}{{"scan-level", "Level by steered angle", "dBFS", p.LevelDBFS}, {"scan-gain", "SNR gain by steered angle", "dB", p.SNRGainDB}} {
		if len(part.values) != len(p.AnglesDeg) {
			continue
		}
		low, high, top := math.Inf(1), math.Inf(-1), -1
		for i, v := range part.values {
			if v == nil {
				continue
			}
			low = math.Min(low, *v)
			if *v > high {
				high, top = *v, i
			}
		}
		if top < 0 {
			continue
		}
		peak := high
		low, high = 3*math.Floor((low-0.5)/3), 3*math.Ceil((high+0.5)/3)
		y := draw.Linear(high, low)
		var s draw.SVG
		s.Open("scan", fmt.Sprintf("%s: highest %s %s at %s°.", part.name, decimals(peak, 1), part.unit, draw.Number(p.AnglesDeg[top])))
		for _, v := range draw.Ticks(low, high, 6) {
			s.Line(0, y.At(v), 100, y.At(v), "grid")
			s.Text(0, y.At(v), "tick left", draw.Number(v), "dx", "-8", "dy", "4")
		}
		var run [][2]float64
		for i := 0; i <= len(part.values); i++ {
			if i < len(part.values) && part.values[i] != nil {
				run = append(run, [2]float64{x.At(p.AnglesDeg[i]), y.At(*part.values[i])})
				continue
			}
			if len(run) > 1 {
				s.Path(run, "curve", false)
			}
			run = nil
		}
		for i, v := range part.values {
			if v != nil {
				s.Dot(x.At(p.AnglesDeg[i]), y.At(*v), 2.5, "fix", "data-angle", Round(p.AnglesDeg[i], "x_deg"), "data-value", Round(*v, "x_db"))
			}
		}
		angles(&s)
		list = append(list, chart{Key: part.key, Name: part.name + ", " + part.unit, Picture: s.Close(),
			Caption: fmt.Sprintf("Highest at %s°: %s %s. A flat top means that the rig cannot tell the angles beneath it apart.", draw.Number(p.AnglesDeg[top]), decimals(peak, 1), part.unit)})
	}
	if sound(p.Levels, len(p.NominalHz), len(p.AnglesDeg)) {
		url, err := draw.HeatMap(p.Levels.Rows, p.Levels.Columns, p.Levels.Bytes)
		if err != nil {
			return nil, err
		}
		var s draw.SVG
		s.Open("heat", fmt.Sprintf("Level by steered angle and band, %s to %s dBFS.", decimals(p.Levels.LowDB, 0), decimals(p.Levels.HighDB, 0)))
		s.Element("image", "href", url, "width", "100%", "height", "100%", "preserveAspectRatio", "none")
		for i, hz := range p.NominalHz {
			if isOctave(hz) {
				s.Text(0, 100-100*(float64(i)+0.5)/float64(len(p.NominalHz)), "tick left", frequencyShort(hz), "dx", "-8", "dy", "4")
			}
		}
		angles(&s)
		list = append(list, chart{Key: "scan-bands", Name: "Level by steered angle and band, Hz", Picture: s.Close(), Low: decimals(p.Levels.LowDB, 0) + " dBFS", High: decimals(p.Levels.HighDB, 0) + " dBFS",
			Caption: fmt.Sprintf("Light is loud: %s to %s dBFS. A source stands out as a light column that gets narrower with frequency.", decimals(p.Levels.LowDB, 0), decimals(p.Levels.HighDB, 0))})
	}
	return list, nil
}
