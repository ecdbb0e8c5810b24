package report

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"unicode"

	"alidade/pkg/pipeline"
)

// cellText returns a measured quantity as the JSON report has it, empty where
// it could not be measured.
func cellText(v pipeline.Number, key string) string {
	if v == nil || math.IsNaN(*v) || math.IsInf(*v, 0) {
		return ""
	}
	return Round(*v, key)
}

// clean returns text from a file fit to be shown: one line, nothing in it that
// steers a terminal or turns the direction of reading around.
func clean(text string) string {
	return strings.Map(func(r rune) rune {
		switch {
		case r == '\n' || r == '\t' || r == '\r':
			return ' '
		case unicode.IsControl(r), unicode.Is(unicode.Cf, r), r == '\u2028', r == '\u2029':
			return '\ufffd'
		}
		return r
	}, text)
}

// decimals returns v with so many decimals, without a sign on zero.
func decimals(v float64, n int) string {
	s := strconv.FormatFloat(v, 'f', n, 64)
	if strings.Trim(s, "-0.") == "" {
		return strings.TrimPrefix(s, "-")
	}
	return s
}

// levelText returns a level difference with one decimal, a dash where it could
// not be measured.
func levelText(v pipeline.Number) string {
	if v == nil || math.IsNaN(*v) || math.IsInf(*v, 0) {
		return "–"
	}
	return decimals(*v, 1)
}

// withInterval returns "7.9 dB (95 %: 7.2 to 8.6)", without the interval where
// there is none.
func withInterval(v pipeline.Number, ci pipeline.Interval) string {
	text := levelText(v) + " dB"
	if v != nil && ci != nil {
		text += fmt.Sprintf(" (95 %%: %s to %s)", decimals(ci[0], 1), decimals(ci[1], 1))
	}
	return text
}

// directionWords returns where the beam points, with the compass where the rig
// states it.
func directionWords(r *pipeline.Result) string {
	s := r.Steer
	text := decimals(s.AzimuthDeg, 1) + "°"
	if s.CompassDeg != nil {
		text = "rig " + text
	}
	if math.Abs(s.ElevationDeg) >= 0.05 {
		text += " up " + decimals(s.ElevationDeg, 1) + "°"
		if s.ElevationDeg < 0 {
			text = strings.Replace(text, " up -", " down ", 1)
		}
	}
	if s.CompassDeg != nil {
		text += fmt.Sprintf(", compass %03.0f° true", math.Mod(math.Round(*s.CompassDeg), 360))
	}
	if d := r.Direction; d != nil && d.StandardErrorDeg != nil {
		digits := 1
		if *d.StandardErrorDeg < 0.1 {
			digits = 2
		}
		text += fmt.Sprintf(" ± %s°", decimals(*d.StandardErrorDeg, digits))
	}
	if s.PointM != nil {
		text = pointWords(*s.PointM) + " (" + text + ")"
	}
	return text
}

// pointWords returns a point in metres from the rig's origin.
func pointWords(p [3]float64) string {
	return fmt.Sprintf("point %s, %s, %s m", decimals(p[0], 2), decimals(p[1], 2), decimals(p[2], 2))
}

// briefDirectionWords returns the least that says where the beam points: the
// point, or the angles of the rig.
func briefDirectionWords(r *pipeline.Result) string {
	if p := r.Steer.PointM; p != nil {
		return pointWords(*p)
	}
	return directionWords(&pipeline.Result{Steer: pipeline.Steer{AzimuthDeg: r.Steer.AzimuthDeg, ElevationDeg: r.Steer.ElevationDeg}})
}

// gainWords returns the overall figure that counts, with its interval, and in
// how many bands it was measured unless in all of them: the noise of the others
// is not in it.
func gainWords(r *pipeline.Result) string {
	switch o := r.Overall; {
	case o.SNRGainDB != nil:
		return "SNR gain " + withInterval(o.SNRGainDB, o.SNRGainCI95) + partWords(r.Bands, func(b pipeline.Band) bool { return b.SNRGainDB != nil })
	case o.NoiseReductionDB != nil:
		return "noise reduction " + withInterval(o.NoiseReductionDB, o.NoiseReductionCI95) + partWords(r.Bands, func(b pipeline.Band) bool { return b.NoiseReductionDB != nil })
	}
	return "gain not measured"
}

// partWords says how many of the bands are measured, nothing where all are.
func partWords(bands []pipeline.Band, measured func(pipeline.Band) bool) string {
	n := 0
	for _, b := range bands {
		if measured(b) {
			n++
		}
	}
	if n == len(bands) {
		return ""
	}
	return fmt.Sprintf(" in %d of %d bands", n, len(bands))
}

// sortedFindings returns the findings, errors first, then warnings, then
// remarks, each in the order of the report.
func sortedFindings(r *pipeline.Result) []pipeline.Finding {
	rank := map[pipeline.Severity]int{pipeline.Error: -2, pipeline.Warning: -1, pipeline.Info: 0}
	list := slices.Clone(r.Findings)
	slices.SortStableFunc(list, func(a, b pipeline.Finding) int { return rank[a.Severity] - rank[b.Severity] })
	return list
}

// frequencyWords returns a nominal mid-band frequency as it is printed: 31.5 Hz,
// 1.25 kHz.
func frequencyWords(hz float64) string {
	if hz >= 1000 {
		return strconv.FormatFloat(hz/1000, 'g', 4, 64) + " kHz"
	}
	return strconv.FormatFloat(hz, 'g', 4, 64) + " Hz"
}

// rangeWords returns two frequencies as a range: 2–5 kHz, 500 Hz–1.6 kHz.
func rangeWords(low, high float64) string {
	from, to := frequencyWords(low), frequencyWords(high)
	if low == high {
		return to
	}
	if from[strings.LastIndexByte(from, ' '):] == to[strings.LastIndexByte(to, ' '):] {
		from = from[:strings.LastIndexByte(from, ' ')]
	}
	return from + "–" + to
}

// group is a part of the frequency axis as it is told to a person.
type group struct {
	name      string
	low, high float64 // nominal mid-band frequencies, both inside
}

// groups cover the bands of the report.
var groups = []group{
	{"rumble", 0, 100}, {"low", 125, 400}, {"middle", 500, 1600}, {"high", 2000, 5000}, {"top", 6300, math.Inf(1)},
}

// inGroup returns the bands of a group.
func inGroup(bands []pipeline.Band, g group) []pipeline.Band {
	var list []pipeline.Band
	for _, b := range bands {
		if b.NominalHz >= g.low && b.NominalHz <= g.high {
			list = append(list, b)
		}
	}
	return list
}

// meanOf returns the mean of a quantity over the bands where it was measured,
// in its own unit, and their number; nil where there is none.
func meanOf(bands []pipeline.Band, v func(pipeline.Band) pipeline.Number) (pipeline.Number, int) {
	sum, n := 0.0, 0
	for _, b := range bands {
		if x := v(b); x != nil {
			sum += *x
			n++
		}
	}
	if n == 0 {
		return nil, 0
	}
	mean := sum / float64(n)
	return &mean, n
}
