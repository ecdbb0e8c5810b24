package report

import (
	"fmt"
	"io"
	"math"
	"strings"

	"github.com/jedib0t/go-pretty/v6/table"
	"github.com/jedib0t/go-pretty/v6/text"

	"alidade/pkg/pipeline"
)

// Calibration writes what a calibration found for a person at a terminal of the
// given width in cells (80 where it is 0, never less than 60): what it rests
// on, a line a microphone, the findings, and the rig file.
func Calibration(w io.Writer, c *pipeline.Calibration, width int) error {
	if width == 0 {
		width = 80
	}
	width = max(width, 60)
	lines := wrap(calibrationBasis(c), width, "", 4)
	lines = append(lines, calibrationTable(c, width)...)
	lines = append(lines, responseTable(c, width)...)
	note := "± is twice the standard uncertainty (k = 2, about 95 %)"
	if c.Survey != nil {
		note += "; shift and turn of the whole rig are in none of them"
	}
	lines = append(lines, wrap(note, width, "  ", 2)...)
	for _, f := range c.Findings {
		lines = append(lines, wrap(string(f.Severity)+": "+clean(f.Message), width, "  ", 6)...)
	}
	lines = append(lines, "wrote "+clean(c.Output.Path))
	_, err := io.WriteString(w, strings.Join(lines, "\n")+"\n")
	return err
}

// calibrationBasis says in words what was listened to.
func calibrationBasis(c *pipeline.Calibration) string {
	s, h := c.Source, c.Heard
	if v := c.Survey; v != nil {
		return fmt.Sprintf("%s: places of %d microphones from %d sounds: arrivals are %s µs off, %s µs with the places before; of %d ways to move microphones the sounds determine %d",
			clean(c.Rig.Name), c.Rig.MicrophonesUsed, len(v.Sounds), decimals(v.ResidualUS, 2), decimals(v.ResidualBeforeUS, 2), v.Ways, v.Observable)
	}
	if v := c.Calibrator; v != nil {
		found := 0
		for _, m := range c.Microphones {
			if len(m.Tones) > 0 {
				found++
			}
		}
		text := fmt.Sprintf("%s: a calibrator of %g dB SPL at %g Hz, class %s (± %g dB), on %d of %d microphones",
			clean(c.Rig.Name), v.LevelDBSPL, v.Hz, clean(v.Class), v.ToleranceDB, found, c.Rig.MicrophonesUsed)
		if v.GainsSet {
			text += "; gain corrections follow it"
		}
		return text
	}
	if s == nil || h == nil {
		return ""
	}
	from := fmt.Sprintf("azimuth %.1f°, elevation %.1f°", s.AzimuthDeg, s.ElevationDeg)
	if s.DistanceM != nil {
		from += fmt.Sprintf(", %.2f m away", *s.DistanceM)
	}
	what := fmt.Sprintf("%d frames, %.0f %% of the take", h.Frames, 100*h.ShareTaken)
	if h.Sound == pipeline.SoundClaps {
		what = fmt.Sprintf("the direct sound of %d claps", h.Frames)
	}
	return fmt.Sprintf("%s: %d of %d channels hear the sound from %s; %s, %.0f to %.0f Hz; the rig as it was is %s µs off",
		clean(c.Rig.Name), s.ChannelsHeard, c.Rig.MicrophonesUsed, from, what, h.LowHz, h.HighHz, levelText(s.MisfitUS))
}

// calibrationTable is a line a microphone: old, new, change, uncertainty.
func calibrationTable(c *pipeline.Calibration, width int) []string {
	t := table.NewWriter()
	style := table.StyleLight
	style.Options = table.OptionsNoBordersAndSeparators
	style.Format.Header = text.FormatDefault
	style.Color = table.ColorOptions{}
	t.SetStyle(style)
	right := []int{1}
	plusMinus := func(v pipeline.Number, n int) string {
		if v == nil || math.IsNaN(*v) {
			return "–"
		}
		return "± " + decimals(*v, n)
	}
	if c.Survey != nil {
		t.AppendHeader(table.Row{"ch", "name", "x, mm", "", "y, mm", "", "z, mm", "", "moved, mm"})
		right = append(right, 3, 4, 5, 6, 7, 8, 9)
		for _, m := range c.Microphones {
			row := table.Row{m.Channel, cut(clean(m.Name), 12)}
			if m.AtMM == nil || m.AtUncertaintyMM == nil {
				for range 6 {
					row = append(row, "–")
				}
			} else {
				for k, v := range m.AtMM {
					row = append(row, decimals(v, 1), "± "+decimals(m.AtUncertaintyMM[k], 1))
				}
			}
			t.AppendRow(append(row, levelText(m.MovedMM)))
		}
		return calibrationLines(t, right, width)
	}
	if c.Calibrator != nil {
		t.AppendHeader(table.Row{"ch", "name", "94 dB reads, dBFS", "was", "", "gain, dB", "was", "stretch"})
		right = append(right, 3, 4, 5, 6, 7)
		level := func(v pipeline.Number) string {
			if v == nil {
				return "–"
			}
			return decimals(*v, 2)
		}
		for _, m := range c.Microphones {
			stretch := "no tone"
			switch n := len(m.Tones); n {
			case 0:
			case 1:
				stretch = fmt.Sprintf("%.1f to %.1f s", m.Tones[0].FromS, m.Tones[0].ToS)
			default:
				stretch = fmt.Sprintf("%d seatings", n)
			}
			t.AppendRow(table.Row{m.Channel, cut(clean(m.Name), 12), level(m.SensitivityDBFS), level(m.SensitivityBeforeDBFS),
				plusMinus(m.SensitivityUncertaintyDB, 2), decimals(m.GainDB, 2), decimals(m.GainBeforeDB, 2), stretch})
		}
		return calibrationLines(t, right, width)
	}
	t.AppendHeader(table.Row{"ch", "name", "gain, dB", "was", "", "delay, µs", "was", "", "polarity"})
	right = append(right, 3, 4, 5, 6, 7, 8)
	for _, m := range c.Microphones {
		polarity := m.Polarity
		if m.Polarity != m.PolarityBefore {
			polarity += ", changed"
		}
		if !m.Used {
			polarity = "not in use"
		} else if !m.Heard {
			polarity += ", not heard"
		}
		t.AppendRow(table.Row{m.Channel, cut(clean(m.Name), 12),
			decimals(m.GainDB, 2), decimals(m.GainBeforeDB, 2), plusMinus(m.GainUncertaintyDB, 2),
			decimals(m.DelayUS, 1), decimals(m.DelayBeforeUS, 1), plusMinus(m.DelayUncertaintyUS, 1), polarity})
	}
	return calibrationLines(t, right, width)
}

// calibrationLines renders a table with some columns to the right.
func calibrationLines(t table.Writer, right []int, width int) []string {
	var configs []table.ColumnConfig
	for _, column := range right {
		configs = append(configs, table.ColumnConfig{Number: column, Align: text.AlignRight, AlignHeader: text.AlignRight})
	}
	t.SetColumnConfigs(configs)
	var lines []string
	for _, line := range strings.Split(text.StripEscape(t.Render()), "\n") {
		lines = append(lines, cut(strings.TrimRight(line, " "), width))
	}
	return lines
}

// responseTable is what each channel does over frequency, in octaves, where that
// was asked for.
func responseTable(c *pipeline.Calibration, width int) []string {
	var centres []float64
	most := 0.0
	for _, m := range c.Microphones {
		if len(m.Response) > len(centres) {
			centres = nil
			for _, b := range m.Response {
				centres = append(centres, b.CentreHz)
			}
		}
		for _, b := range m.Response {
			most = math.Max(most, math.Abs(b.LeftDB))
		}
	}
	if centres == nil {
		return nil
	}
	t := table.NewWriter()
	style := table.StyleLight
	style.Options = table.OptionsNoBordersAndSeparators
	style.Format.Header = text.FormatDefault
	style.Color = table.ColorOptions{}
	t.SetStyle(style)
	head, right := table.Row{"ch", "name"}, []int{1}
	for k, hz := range centres {
		head = append(head, nominalOctave(hz))
		right = append(right, k+3)
	}
	t.AppendHeader(head)
	for _, m := range c.Microphones {
		if len(m.Response) != len(centres) {
			continue
		}
		row := table.Row{m.Channel, cut(clean(m.Name), 12)}
		for _, b := range m.Response {
			row = append(row, decimals(b.LevelDB, 2))
		}
		t.AppendRow(row)
	}
	lines := wrap(fmt.Sprintf("against the mean of all, gain taken out, dB by octave (Hz); filters leave at most %s dB of it:", decimals(most, 2)), width, "  ", 2)
	return append(lines, calibrationLines(t, right, width)...)
}

// nominalOctave is the nominal name of an octave's exact mid-band frequency
// [IEC 61260-1:2014, annex E].
func nominalOctave(hz float64) string {
	names := []string{"16", "31.5", "63", "125", "250", "500", "1 k", "2 k", "4 k", "8 k", "16 k"}
	k := int(math.Round(math.Log10(hz/1000)/0.3)) + 6
	if k < 0 || k >= len(names) {
		return decimals(hz, 0)
	}
	return names[k]
}
