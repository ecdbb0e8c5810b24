package report

import (
	"encoding/csv"
	"fmt"
	"io"
	"strings"

	"github.com/jedib0t/go-pretty/v6/table"
	"github.com/jedib0t/go-pretty/v6/text"

	"alidade/pkg/pipeline"
)

// notDefined stands in a table where a figure does not exist.
const notDefined = "not defined"

// Prediction writes a prediction for a person at a terminal of the given width
// in cells (80 where it is 0, never less than 60): what the beam helps and by
// how much in sentences, the figures at each frequency as a table, and what
// errors of the rig do where they were tried.
func Prediction(w io.Writer, p *pipeline.Prediction, width int) error {
	if width == 0 {
		width = 80
	}
	width = max(width, 60)
	r := &pipeline.Result{Steer: p.Steer}
	how := p.Steer.Weights
	if p.Steer.Taper != "uniform" {
		how += ", taper " + p.Steer.Taper
	}
	lines := wrap(fmt.Sprintf("%s, steered to %s: %s of %d microphones",
		clean(p.Rig.Name), directionWords(r), how, p.Rig.MicrophonesUsed), width, "  ", 3)
	for _, a := range p.Answer {
		lines = append(lines, wrap(a, width, "  ", 6)...)
	}
	if a := p.Steer.Ambiguity; a != "" {
		lines = append(lines, wrap(sentence(clean(a)), width, "  ", 3)...)
	}
	lines = append(lines, "")
	lines = append(lines, predictionTable(p, width)...)
	lines = append(lines, "")
	lines = append(lines, wrap(reachWords(p), width, "  ", 5)...)
	if t := p.Tolerance; t != nil {
		lines = append(lines, "")
		lines = append(lines, wrap(toleranceWords(t), width, "  ", 4)...)
		lines = append(lines, toleranceTable(t, nominalOf(p), width)...)
	}
	for _, f := range p.Findings {
		if f.Code == "beamwidth-not-defined" || f.Code == "no-grating-lobe" { // the table says so
			continue
		}
		lines = append(lines, wrap(string(f.Severity)+": "+clean(f.Message), width, "  ", 4)...)
	}
	_, err := io.WriteString(w, strings.Join(lines, "\n")+"\n")
	return err
}

// predictionTable is the figures at each frequency.
func predictionTable(p *pipeline.Prediction, width int) []string {
	t, name := plainTable(), nominalOf(p)
	t.AppendHeader(table.Row{"", "beam", "first", "side lobes", "grating", "DI", "WNG"})
	t.AppendHeader(table.Row{"", "width °", "nulls °", "dB (count)", "lobes °", "dB", "dB"})
	for _, f := range p.Frequencies {
		side := "none"
		if f.HighestSideLobeDB != nil {
			side = fmt.Sprintf("%s (%d)", decimals(*f.HighestSideLobeDB, 1), f.SideLobeCount)
		}
		beam := notDefined
		if f.BeamwidthDeg != nil {
			beam = decimals(*f.BeamwidthDeg, 1)
		}
		t.AppendRow(table.Row{name(f.Hz), beam, degreesList(f.FirstNullsDeg, 2), side, degreesList(f.GratingLobesDeg, 2),
			levelText(f.DirectivityIndexDB), levelText(f.WhiteNoiseGainDB)})
	}
	return tableLines(t, 7, width)
}

// nominalOf returns what writes a frequency of a prediction: by its nominal name
// where it is the middle of a band.
func nominalOf(p *pipeline.Prediction) func(hz float64) string {
	return func(hz float64) string {
		for _, b := range p.Bands {
			if hz == b.CentreHz {
				return frequencyWords(b.NominalHz)
			}
		}
		return frequencyWords(hz)
	}
}

// degreesList is some angles of a list, and how many more there are.
func degreesList(list []float64, most int) string {
	if len(list) == 0 {
		return "none"
	}
	var words []string
	for i, a := range list {
		if i == most {
			words = append(words, fmt.Sprintf("+%d", len(list)-most))
			break
		}
		words = append(words, decimals(a, 1))
	}
	return strings.Join(words, " ")
}

// reachWords is what does not depend on frequency, in a sentence or two.
func reachWords(p *pipeline.Prediction) string {
	a := p.Aperture
	words := fmt.Sprintf("DI: directivity index; WNG: white noise gain. Angles: %s.", p.Cut.Name)
	if a.LowerUsefulHz != nil {
		words += fmt.Sprintf(" The rig is %s m long to sound, one wavelength at %s, its lower useful frequency.", decimals(a.EffectiveM, 3), frequencyWords(*a.LowerUsefulHz))
	}
	if a.HalfWavelengthHz != nil {
		words += fmt.Sprintf(" Steered anywhere it is free of grating lobes up to %s", frequencyWords(*a.HalfWavelengthHz))
		if p.GratingFreeBelowHz != nil {
			words += fmt.Sprintf(", steered here up to %s", frequencyWords(*p.GratingFreeBelowHz))
		}
		words += "."
	} else if p.GratingFreeBelowHz != nil {
		words += fmt.Sprintf(" Steered here it is free of grating lobes up to %s.", frequencyWords(*p.GratingFreeBelowHz))
	}
	if n := len(p.Frequencies); n > 0 && p.Cut.DistanceM == nil {
		if f := p.Frequencies[n-1]; f.NearFieldReachM != nil && *f.NearFieldReachM > 0.1 {
			words += fmt.Sprintf(" A source nearer than %s m (at %s, and less in proportion below) has to be steered to as a point: --focus.",
				decimals(*f.NearFieldReachM, 2), frequencyWords(f.Hz))
		}
	}
	if p.Cut.DistanceM != nil {
		words += fmt.Sprintf(" Sources along them are %s m away, as the point is.", decimals(*p.Cut.DistanceM, 2))
	}
	return words
}

// toleranceWords says which errors were tried.
func toleranceWords(t *pipeline.Tolerance) string {
	var list []string
	for _, e := range []struct {
		value float64
		words string
	}{
		{t.PlacementMM, "%g mm of placement along each axis"}, {t.GainErrorDB, "%g dB of gain"},
		{t.PhaseErrorDeg, "%g° of phase"}, {t.TemperatureErrorC, "%g °C of air temperature"},
	} {
		if e.value > 0 {
			list = append(list, fmt.Sprintf(e.words, e.value))
		}
	}
	return fmt.Sprintf("With errors of %s (standard deviations; %d trials, seed %d), levels in dB re the steered direction without errors:",
		strings.Join(list, ", "), t.Trials, t.Seed)
}

// toleranceTable is what the errors do at each frequency.
func toleranceTable(tol *pipeline.Tolerance, name func(hz float64) string, width int) []string {
	t := plainTable()
	t.AppendHeader(table.Row{"", "steered", "", "highest", "side lobe", "floor of"})
	t.AppendHeader(table.Row{"", "mean", "5 to 95 %", "mean", "5 to 95 %", "errors"})
	span := func(l *pipeline.TolerantLevel) (mean, percent string) {
		if l == nil {
			return "none", "none"
		}
		return levelText(l.ExpectedDB), levelText(l.P5DB) + " to " + levelText(l.P95DB)
	}
	for i := range tol.Frequencies {
		f := &tol.Frequencies[i]
		mean, percent := span(&f.Steered)
		side, sidePercent := span(f.HighestSideLobe)
		t.AppendRow(table.Row{name(f.Hz), mean, percent, side, sidePercent, levelText(f.ErrorFloorDB)})
	}
	return tableLines(t, 6, width)
}

// plainTable is a table without borders and colours.
func plainTable() table.Writer {
	t := table.NewWriter()
	style := table.StyleLight
	style.Options = table.OptionsNoBordersAndSeparators
	style.Format.Header = text.FormatDefault
	style.Color = table.ColorOptions{}
	t.SetStyle(style)
	return t
}

// tableLines renders a table whose columns, so many, stand to the right.
func tableLines(t table.Writer, columns, width int) []string {
	var configs []table.ColumnConfig
	for column := 1; column <= columns; column++ {
		configs = append(configs, table.ColumnConfig{Number: column, Align: text.AlignRight, AlignHeader: text.AlignRight})
	}
	t.SetColumnConfigs(configs)
	var lines []string
	for _, line := range strings.Split(text.StripEscape(t.Render()), "\n") {
		lines = append(lines, cut(strings.TrimRight(line, " "), width))
	}
	return lines
}

// PredictionCSV writes the figures at each frequency as a table: a header line
// of keys of the JSON form, lists separated by blanks, an empty cell where a
// figure is not defined.
func PredictionCSV(w io.Writer, p *pipeline.Prediction) error {
	out := csv.NewWriter(w)
	header := []string{"hz", "beamwidth_deg", "first_nulls_deg", "highest_side_lobe_db", "side_lobe_count", "grating_lobes_deg",
		"directivity_index_db", "white_noise_gain_db", "diffuse_gain_db", "near_field_reach_m"}
	if p.Tolerance != nil {
		header = append(header, "steered_expected_db", "steered_p5_db", "steered_p50_db", "steered_p95_db", "error_floor_db")
	}
	if err := out.Write(header); err != nil {
		return err
	}
	list := func(v []float64) string {
		var words []string
		for _, a := range v {
			words = append(words, Round(a, "_deg"))
		}
		return strings.Join(words, " ")
	}
	for i, f := range p.Frequencies {
		row := []string{Round(f.Hz, "_hz"), cellText(f.BeamwidthDeg, "_deg"), list(f.FirstNullsDeg), cellText(f.HighestSideLobeDB, "_db"),
			fmt.Sprint(f.SideLobeCount), list(f.GratingLobesDeg), cellText(f.DirectivityIndexDB, "_db"), cellText(f.WhiteNoiseGainDB, "_db"),
			cellText(f.DiffuseGainDB, "_db"), cellText(f.NearFieldReachM, "_m")}
		if p.Tolerance != nil {
			t := p.Tolerance.Frequencies[i]
			for _, v := range []pipeline.Number{t.Steered.ExpectedDB, t.Steered.P5DB, t.Steered.P50DB, t.Steered.P95DB, t.ErrorFloorDB} {
				row = append(row, cellText(v, "_db"))
			}
		}
		if err := out.Write(row); err != nil {
			return err
		}
	}
	out.Flush()
	return out.Error()
}

// PatternCSV writes the response of a prediction as a table of hz, angle_deg,
// level_db and phase_deg, a row each pair of frequency and angle.
func PatternCSV(w io.Writer, p *pipeline.Prediction) error {
	out := csv.NewWriter(w)
	if err := out.Write([]string{"hz", "angle_deg", "level_db", "phase_deg"}); err != nil {
		return err
	}
	if p.Response != nil {
		for f, hz := range p.Response.Hz {
			for d, angle := range p.Response.AnglesDeg {
				if err := out.Write([]string{Round(hz, "_hz"), Round(angle, "_deg"), cellText(p.Response.LevelDB[f][d], "_db"), cellText(p.Response.PhaseDeg[f][d], "_deg")}); err != nil {
					return err
				}
			}
		}
	}
	out.Flush()
	return out.Error()
}
