package report

import (
	"fmt"
	"html/template"
	"math"
	"slices"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

// quantity is one of the figures that the chart of bands can show.
type quantity struct {
	Key, Name string
	value     func(b pipeline.Band) pipeline.Number
	interval  func(b pipeline.Band) pipeline.Interval
	predicted bool
}

func quantities() []quantity {
	return []quantity{
		{"snr_gain_db", "SNR gain", func(b pipeline.Band) pipeline.Number { return b.SNRGainDB }, func(b pipeline.Band) pipeline.Interval { return b.SNRGainCI95 }, true},
		{"noise_reduction_db", "Noise reduction", func(b pipeline.Band) pipeline.Number { return b.NoiseReductionDB }, func(b pipeline.Band) pipeline.Interval { return b.NoiseReductionCI95 }, true},
		{"target_change_db", "Target change", func(b pipeline.Band) pipeline.Number { return b.TargetChangeDB }, func(b pipeline.Band) pipeline.Interval { return b.TargetChangeCI95 }, false},
	}
}

// chart is a picture with its words.
type chart struct {
	Key     string
	Name    string
	Picture template.HTML
	Caption string
	// Low and High are the ends of the scale of a map of levels.
	Low, High string
}

// bandCharts draws the bands once for each quantity that has figures, always
// the SNR gain for its predictions.
func bandCharts(r *pipeline.Result) []chart {
	if len(r.Bands) == 0 {
		return nil
	}
	var list []chart
	for _, q := range quantities() {
		_, measured := meanOf(r.Bands, q.value)
		if measured == 0 && (!q.predicted || len(list) > 0) {
			continue
		}
		if q.Key == "snr_gain_db" && measured == 0 {
			// The noise alone may be known: its chart has the predictions too.
			if _, noise := meanOf(r.Bands, func(b pipeline.Band) pipeline.Number { return b.NoiseReductionDB }); noise > 0 {
				continue
			}
		}
		list = append(list, bandChart(r.Bands, q, measured))
	}
	return list
}

func bandChart(bands []pipeline.Band, q quantity, measured int) chart {
	low, high := 0.0, 3.0
	take := func(v float64) { low, high = math.Min(low, v), math.Max(high, v) }
	for _, b := range bands {
		if v := q.value(b); v != nil {
			take(*v)
		}
		if ci := q.interval(b); ci != nil {
			// An interval that is wide beyond reason must not flatten the rest.
			take(math.Max(ci[0], -30))
			take(math.Min(ci[1], 40))
		}
		if q.predicted {
			for _, p := range []pipeline.Number{b.PredictedWhiteDB, b.PredictedDiffuseDB, b.PredictedInNoiseDB} {
				if p != nil {
					take(*p)
				}
			}
		}
	}
	high = 3 * math.Ceil(high/3)
	low = math.Floor(low) // no more room below 0 dB than it needs
	y := draw.Linear(high, low)

	label := fmt.Sprintf("%s in decibels for %d one-third octave bands, measured in %d.", q.Name, len(bands), measured)
	if best, worst := extremes(bands, q); measured > 0 {
		label += fmt.Sprintf(" Highest %s dB at %s, lowest %s dB at %s.",
			levelText(q.value(bands[best])), frequencyWords(bands[best].NominalHz), levelText(q.value(bands[worst])), frequencyWords(bands[worst].NominalHz))
	}
	var s draw.SVG
	s.Open("bands", label, "data-quantity", q.Key)
	for _, v := range draw.Ticks(low, high, 7) {
		s.Line(0, y.At(v), 100, y.At(v), "grid")
		s.Text(0, y.At(v), "tick left", draw.Number(v), "dx", "-8", "dy", "4")
	}
	step := 100 / math.Max(1, float64(len(bands)))
	for i, b := range bands {
		drawBand(&s, b, q, y, float64(i)*step, step, measured > 0)
	}
	s.Line(0, y.At(0), 100, y.At(0), "zero")
	for i, b := range bands {
		if isOctave(b.NominalHz) {
			s.Text((float64(i)+0.5)*step, 100, "tick mid", frequencyShort(b.NominalHz), "dy", "18")
		}
	}
	caption := "Bars are measured, whiskers their 95 % intervals; hatched bands carry a flag."
	if q.predicted {
		caption += " Diamonds are predicted for noise from everywhere, rings for noise that differs from microphone to microphone."
		if slices.ContainsFunc(bands, func(b pipeline.Band) bool { return b.PredictedInNoiseDB != nil }) {
			caption += " Strokes across a bar are predicted for the noise of this take."
		}
	}
	name := q.Name
	if measured == 0 {
		name = "Predicted gain"
		caption = "Nothing could be measured in the bands. Diamonds are predicted for noise from everywhere, rings for noise that differs from microphone to microphone."
	}
	if q.Key == "target_change_db" {
		caption = "How much the wanted sound changed: 0 dB is kept as it was. In a room 2 to 4 dB of loss are the target's own reverberation. Whiskers are 95 % intervals."
	}
	return chart{Key: q.Key, Name: name, Picture: s.Close(), Caption: caption}
}

// drawBand draws one band of the chart between x and x+step per cent; what was
// not measured is marked where anything was.
func drawBand(s *draw.SVG, b pipeline.Band, q quantity, y draw.Scale, x, step float64, some bool) {
	mid := x + step/2
	s.Group("band", "data-hz", Round(b.NominalHz, "nominal_hz"))
	if v := q.value(b); v != nil {
		class := "bar"
		if len(b.Flags) > 0 {
			class += " flagged"
		}
		top, bottom := y.At(math.Max(*v, 0)), y.At(math.Min(*v, 0))
		s.Rect(x+0.14*step, top, 0.72*step, bottom-top, class, "data-value", Round(*v, q.Key))
	} else if some {
		s.Rect(x+0.14*step, y.At(0)-2, 0.72*step, 2, "unmeasured")
	}
	if ci := q.interval(b); ci != nil {
		s.Line(mid, y.At(ci[0]), mid, y.At(ci[1]), "whisker casing")
		s.Line(mid, y.At(ci[0]), mid, y.At(ci[1]), "whisker", "data-low", Round(ci[0], q.Key), "data-high", Round(ci[1], q.Key))
	}
	if q.predicted {
		if p := b.PredictedInNoiseDB; p != nil {
			s.Line(x+0.05*step, y.At(*p), x+0.95*step, y.At(*p), "innoise casing")
			s.Line(x+0.05*step, y.At(*p), x+0.95*step, y.At(*p), "innoise", "data-value", Round(*p, "predicted_measured_noise_db"))
		}
		if p := b.PredictedWhiteDB; p != nil {
			s.Dot(mid, y.At(*p), 3.5, "white", "data-value", Round(*p, "predicted_white_db"))
		}
		if p := b.PredictedDiffuseDB; p != nil {
			s.Diamond(mid, y.At(*p), 5, "diffuse", "data-value", Round(*p, "predicted_diffuse_db"))
		}
	}
	s.End()
}

func extremes(bands []pipeline.Band, q quantity) (best, worst int) {
	best, worst = -1, -1
	for i, b := range bands {
		v := q.value(b)
		if v == nil {
			continue
		}
		if best < 0 || *v > *q.value(bands[best]) {
			best = i
		}
		if worst < 0 || *v < *q.value(bands[worst]) {
			worst = i
		}
	}
	return best, worst
}

// isOctave reports whether a nominal frequency names an octave band.
func isOctave(hz float64) bool {
	for _, o := range []float64{31.5, 63, 125, 250, 500, 1000, 2000, 4000, 8000, 16000} {
		if hz == o {
			return true
		}
	}
	return false
}

// frequencyShort returns a nominal frequency as on an axis: 63, 125, 1k, 16k.
func frequencyShort(hz float64) string {
	if hz >= 1000 {
		return draw.Number(hz/1000) + "k"
	}
	return draw.Number(hz)
}

// bandRow is one row of the table of bands, the figures as in the JSON report.
type bandRow struct {
	Band, Noise, NoiseCI, Target, TargetCI, Gain, GainCI, Best, White, Diffuse string
	InNoise                                                                    string
	In, Out                                                                    string
	Flags                                                                      []string
}

func bandRows(bands []pipeline.Band) []bandRow {
	ends := func(ci pipeline.Interval) string {
		if ci == nil {
			return ""
		}
		return Round(ci[0], "x_db") + " to " + Round(ci[1], "x_db")
	}
	var rows []bandRow
	for _, b := range bands {
		rows = append(rows, bandRow{
			Band:  frequencyWords(b.NominalHz),
			Noise: cellText(b.NoiseReductionDB, "x_db"), NoiseCI: ends(b.NoiseReductionCI95),
			Target: cellText(b.TargetChangeDB, "x_db"), TargetCI: ends(b.TargetChangeCI95),
			Gain: cellText(b.SNRGainDB, "x_db"), GainCI: ends(b.SNRGainCI95), Best: cellText(b.OverBestMicrophoneDB, "x_db"),
			White: cellText(b.PredictedWhiteDB, "x_db"), Diffuse: cellText(b.PredictedDiffuseDB, "x_db"), InNoise: cellText(b.PredictedInNoiseDB, "x_db"),
			In: cellText(b.NoiseInDBFS, "x_dbfs"), Out: cellText(b.NoiseOutDBFS, "x_dbfs"), Flags: b.Flags,
		})
	}
	return rows
}
