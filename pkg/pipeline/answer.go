package pipeline

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"alidade/pkg/response"
)

// answer says in sentences which bands the rig helps in and by how much.
func answer(p *Prediction) []string {
	var list []string
	var helped []PredictedBand
	last := -1
	gaps := false
	for i, b := range p.Bands {
		if b.PredictedDiffuseDB != nil && *b.PredictedDiffuseDB >= response.NoApertureDB {
			gaps = gaps || last >= 0 && last != i-1
			helped, last = append(helped, b), i
		}
	}
	const diffuse = "diffuse noise (from all around alike)"
	switch {
	case len(helped) == 0:
		list = append(list, fmt.Sprintf("In %s this beam helps in no band: less than %g dB everywhere.", diffuse, response.NoApertureDB))
	default:
		first, end := helped[0], helped[len(helped)-1]
		best := slices.MaxFunc(helped, func(a, b PredictedBand) int { return cmp.Compare(*a.PredictedDiffuseDB, *b.PredictedDiffuseDB) })
		text := fmt.Sprintf("In %s this beam helps from the %s band up: %.1f dB there", diffuse, hertz(first.NominalHz), *first.PredictedDiffuseDB)
		if last != len(p.Bands)-1 {
			text = fmt.Sprintf("In %s this beam helps from the %s to the %s band: %.1f dB in the first", diffuse, hertz(first.NominalHz), hertz(end.NominalHz), *first.PredictedDiffuseDB)
		}
		for _, at := range []float64{500, 1000, 2000} {
			i := slices.IndexFunc(helped, func(b PredictedBand) bool { return b.NominalHz == at })
			if i > 0 && helped[i].NominalHz != best.NominalHz {
				text += fmt.Sprintf(", %.1f dB at %s", *helped[i].PredictedDiffuseDB, hertz(at))
			}
		}
		if best.NominalHz != first.NominalHz {
			text += fmt.Sprintf(", most at %s: %.1f dB", hertz(best.NominalHz), *best.PredictedDiffuseDB)
		}
		if gaps {
			text += "; not in every band between"
		}
		list = append(list, text+".")
		if first.NominalHz != p.Bands[0].NominalHz {
			list = append(list, fmt.Sprintf("Below that it takes away less than %g dB: the rig is too small for the wavelength.", response.NoApertureDB))
		}
	}
	if text := whiteAnswer(p.Bands); text != "" {
		list = append(list, text)
	}
	if hz := p.GratingFreeBelowHz; hz != nil {
		list = append(list, fmt.Sprintf("From %s up another direction is heard as loud as the steered one or within 3 dB of it (grating lobe): noise from there stays.", hertz(threeDigits(*hz))))
	}
	return list
}

// whiteAnswer is the sentence on noise that is independent from microphone to
// microphone.
func whiteAnswer(bands []PredictedBand) string {
	var low, high *PredictedBand
	var louder []string
	for i := range bands {
		b := &bands[i]
		if b.PredictedWhiteDB == nil {
			continue
		}
		if low == nil || *b.PredictedWhiteDB < *low.PredictedWhiteDB {
			low = b
		}
		if high == nil || *b.PredictedWhiteDB > *high.PredictedWhiteDB {
			high = b
		}
		if *b.PredictedWhiteDB < -0.05 {
			louder = append(louder, hertz(b.NominalHz))
		}
	}
	const white = "In white noise (of the microphones themselves, each its own)"
	switch {
	case low == nil:
		return ""
	case *high.PredictedWhiteDB-*low.PredictedWhiteDB < 0.1:
		return fmt.Sprintf("%s it gains %.1f dB in every band.", white, *high.PredictedWhiteDB)
	}
	text := fmt.Sprintf("%s it gains between %.1f dB (%s) and %.1f dB (%s)", white, *low.PredictedWhiteDB, hertz(low.NominalHz), *high.PredictedWhiteDB, hertz(high.NominalHz))
	switch n := len(louder); {
	case n > 2:
		text += fmt.Sprintf("; a negative gain makes it louder, in %d bands", n)
	case n > 0:
		text += "; a negative gain makes it louder, at " + strings.Join(louder, " and ")
	}
	return text + "."
}

// threeDigits rounds to three significant digits.
func threeDigits(v float64) float64 {
	p := math.Pow(10, math.Floor(math.Log10(v))-2)
	return math.Round(v/p) * p
}

// hertz is a frequency in print: 400 Hz, 1.25 kHz.
func hertz(hz float64) string {
	if hz >= 1000 {
		return fmt.Sprintf("%.4g kHz", hz/1000)
	}
	return fmt.Sprintf("%.4g Hz", hz)
}
