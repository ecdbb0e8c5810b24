package report

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"alidade/pkg/pipeline"
)

// state is what a take comes to.
type state struct {
	Word  string // good, caution or fault
	Glyph string
}

// stateOf returns fault if a finding is an error, caution if one is a warning
// or if no gain was measured, else good.
func stateOf(r *pipeline.Result) state {
	worst := pipeline.Info
	for _, f := range r.Findings {
		if f.Severity == pipeline.Error || f.Severity == pipeline.Warning && worst == pipeline.Info {
			worst = f.Severity
		}
	}
	switch {
	case worst == pipeline.Error:
		return state{"fault", "×"}
	case worst == pipeline.Warning || r.Overall.SNRGainDB == nil && r.Overall.NoiseReductionDB == nil:
		return state{"caution", "!"}
	}
	return state{"good", "✓"}
}

// heading is the result in a few words.
func heading(r *pipeline.Result) string {
	toward := " toward " + shortDirection(r)
	switch o := r.Overall; {
	case o.SNRGainDB != nil && *o.SNRGainDB >= 0.05:
		return decimals(*o.SNRGainDB, 1) + " dB clearer" + toward
	case o.SNRGainDB != nil && *o.SNRGainDB <= -0.05:
		return decimals(-*o.SNRGainDB, 1) + " dB less clear" + toward
	case o.SNRGainDB != nil:
		return "No clearer" + toward
	case o.NoiseReductionDB != nil && *o.NoiseReductionDB >= 0.05:
		return decimals(*o.NoiseReductionDB, 1) + " dB less noise" + toward
	case o.NoiseReductionDB != nil:
		return "No less noise" + toward
	}
	return "Steered" + toward + ", gain not measured"
}

func shortDirection(r *pipeline.Result) string {
	if r.Steer.Kind == "followed" {
		return "a moving source"
	}
	return decimals(r.Steer.AzimuthDeg, 1) + "°"
}

// lead is the result in plain words: what was gained, with its interval, where
// it holds, what to distrust.
func lead(r *pipeline.Result) string {
	var parts []string
	o := r.Overall
	switch {
	case o.SNRGainDB != nil:
		where := partWords(r.Bands, func(b pipeline.Band) bool { return b.SNRGainDB != nil })
		if *o.SNRGainDB > -0.05 {
			parts = append(parts, fmt.Sprintf("Against the mean microphone the wanted sound stands out by %s more%s.", withInterval(o.SNRGainDB, o.SNRGainCI95), where))
		} else {
			parts = append(parts, fmt.Sprintf("Against the mean microphone the wanted sound stands out less: the SNR gain is %s%s.", withInterval(o.SNRGainDB, o.SNRGainCI95), where))
		}
		if where != "" {
			parts = append(parts, "In the other bands it does not come out of the noise, whose part there is not in that figure.")
		}
		if o.NoiseReductionDB != nil && o.TargetChangeDB != nil {
			parts = append(parts, fmt.Sprintf("The noise %s, the wanted sound %s.", changeWords(-*o.NoiseReductionDB), changeWords(*o.TargetChangeDB)))
		}
	case o.NoiseReductionDB != nil && *o.NoiseReductionDB < -0.05:
		parts = append(parts, fmt.Sprintf("The noise got louder: its reduction is %s; how much of the wanted sound was kept could not be measured.", withInterval(o.NoiseReductionDB, o.NoiseReductionCI95)))
	case o.NoiseReductionDB != nil:
		parts = append(parts, fmt.Sprintf("The noise falls by %s; how much of the wanted sound was kept could not be measured.", withInterval(o.NoiseReductionDB, o.NoiseReductionCI95)))
	default:
		text := "The track was steered, but what it gains was not measured"
		if len(r.Findings) > 0 {
			text += "; the findings say why"
		}
		parts = append(parts, text+".")
	}
	if low, high, ok := surest(r.Bands); ok {
		parts = append(parts, fmt.Sprintf("Every band of %s gains for certain: its whole interval lies above 0 dB.", rangeWords(low, high)))
	}
	if d := distrust(r.Bands); d != "" {
		parts = append(parts, "Distrust "+d+".")
	}
	return strings.Join(parts, " ")
}

func changeWords(db float64) string {
	switch text := decimals(math.Abs(db), 1) + " dB"; {
	case math.Abs(db) < 0.05:
		return "keeps its level"
	case db < 0:
		return "falls by " + text
	default:
		return "rises by " + text
	}
}

// surest returns the widest run of neighbouring bands without a flag whose gain
// is above 0 dB with its whole interval.
func surest(bands []pipeline.Band) (low, high float64, ok bool) {
	best, start := 0, -1
	for i := 0; i <= len(bands); i++ {
		sure := false
		if i < len(bands) {
			b := bands[i]
			sure = len(b.Flags) == 0 && (b.SNRGainCI95 != nil && b.SNRGainCI95[0] > 0 ||
				b.SNRGainDB == nil && b.NoiseReductionCI95 != nil && b.NoiseReductionCI95[0] > 0)
		}
		switch {
		case sure && start < 0:
			start = i
		case !sure && start >= 0:
			if n := i - start; n > best {
				best, low, high = n, bands[start].NominalHz, bands[i-1].NominalHz
			}
			start = -1
		}
	}
	return low, high, best > 1
}

// flagNotes says what a flag on a band means.
var flagNotes = []struct{ flag, short, long string }{
	{"grating", "grating lobes", "another direction is heard as loud as the steered one or within 3 dB of it: the microphones stand too far apart for so high a sound"},
	{"no-aperture", "a rig too small for the wavelength", "less than 1 dB of noise from everywhere can go away: the rig is too small for so low a sound"},
	{"sparse", "too little sound behind the figure", "fewer than 30 independent samples stand behind the figure: a longer stretch helps"},
	{"target-unmeasurable", "a target that does not stand out of the noise", "the target has no figure: its level does not exceed the noise significantly, or no stretch with it, or with noise alone, is known"},
}

// distrust lists the flagged bands with what is the matter with them, in plain
// words; empty where there are none.
func distrust(bands []pipeline.Band) string {
	var parts []string
	for _, note := range flagNotes[:3] {
		if r := flaggedRanges(bands, note.flag); r != "" {
			parts = append(parts, r+" ("+note.short+")")
		}
	}
	return strings.Join(parts, ", ")
}

// flaggedRanges returns the bands that carry a flag as ranges of frequency.
func flaggedRanges(bands []pipeline.Band, flag string) string {
	var parts []string
	start := -1
	for i := 0; i <= len(bands); i++ {
		on := i < len(bands) && slices.Contains(bands[i].Flags, flag)
		if on && start < 0 {
			start = i
		}
		if !on && start >= 0 {
			parts = append(parts, rangeWords(bands[start].NominalHz, bands[i-1].NominalHz))
			start = -1
		}
	}
	if len(parts) > 4 {
		parts = append(parts[:3], fmt.Sprintf("%d more ranges", len(parts)-3))
	}
	return strings.Join(parts, ", ")
}

// bandHeading is the finding of the chart of bands.
func bandHeading(r *pipeline.Result) string {
	best := -1
	value := func(b pipeline.Band) pipeline.Number {
		if r.Overall.SNRGainDB != nil {
			return b.SNRGainDB
		}
		return b.NoiseReductionDB
	}
	for i, b := range r.Bands {
		if sound := len(b.Flags) == 0 || r.Overall.SNRGainDB == nil && len(b.Flags) == 1 && b.Flags[0] == "target-unmeasurable"; sound && value(b) != nil && (best < 0 || *value(b) > *value(r.Bands[best])) {
			best = i
		}
	}
	if best < 0 {
		return "What the rig should gain in each band"
	}
	less := ""
	if r.Overall.SNRGainDB == nil {
		less = " less noise"
	}
	return fmt.Sprintf("It helps most at %s: %s dB%s", frequencyWords(r.Bands[best].NominalHz), levelText(value(r.Bands[best])), less)
}

// channelHeading is the finding of the table of channels.
func channelHeading(r *pipeline.Result) string {
	used, flagged := 0, 0
	for _, c := range r.Channels {
		if c.Used {
			used++
		}
		if len(c.Flags) > 0 {
			flagged++
		}
	}
	text := fmt.Sprintf("%d of %d channels are in the beam", used, len(r.Channels))
	switch flagged {
	case 0:
	case 1:
		text += ", 1 has a remark"
	default:
		text += fmt.Sprintf(", %d have remarks", flagged)
	}
	return text
}

// timeHeading is the finding of the pictures over time.
func timeHeading(r *pipeline.Result) string {
	if d := r.Direction; d != nil {
		low, high, found := math.Inf(1), math.Inf(-1), 0
		for _, w := range d.Windows {
			if w.AzimuthDeg != nil {
				low, high = math.Min(low, *w.AzimuthDeg), math.Max(high, *w.AzimuthDeg)
				found++
			}
		}
		if found > 0 {
			return fmt.Sprintf("Heard from %s° to %s° in %d of %d windows", decimals(low, 0), decimals(high, 0), found, len(d.Windows))
		}
	}
	seconds := func(list [][2]float64) (sum float64) {
		for _, s := range list {
			sum += s[1] - s[0]
		}
		return sum
	}
	s := r.Segments
	switch {
	case s.Source == "isolated":
		return "Noise and target were recorded apart"
	case len(s.Noise) == 0:
		return "No stretch of noise alone"
	}
	return fmt.Sprintf("%s s of noise alone, %s s with the target", decimals(seconds(s.Noise), 1), decimals(seconds(s.Target), 1))
}
