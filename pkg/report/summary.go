package report

import (
	"fmt"
	"io"
	"slices"
	"strings"

	"github.com/jedib0t/go-pretty/v6/table"
	"github.com/jedib0t/go-pretty/v6/text"

	"alidade/pkg/pipeline"
)

// SummaryLines is the most lines that Summary writes.
const SummaryLines = 20

// Summary writes the result for a person at a terminal of the given width in
// cells (80 where it is 0, never less than 60): at most SummaryLines lines, no
// colour. The first line holds direction, overall gain with its interval, and
// the first caution.
func Summary(w io.Writer, r *pipeline.Result, width int) error {
	if width == 0 {
		width = 80
	}
	width = max(width, 60)
	findings := sortedFindings(r)
	lines := headline(r, findings, width)
	if a := r.Steer.Ambiguity; a != "" {
		lines = append(lines, wrap(clean(a), width, "", 2)...)
	}
	if t := bandTable(r, width); t != "" {
		lines = append(lines, strings.Split(t, "\n")...)
		lines = append(lines, totals(r, width)...)
	}
	var files []string
	for _, o := range append([]pipeline.Output{r.Output}, r.OtherOutputs...) {
		if o.Path != "" {
			files = append(files, fileLine(o, width))
		}
	}
	if len(files) > 2 {
		files = files[:2]
	}
	lines = append(lines, findingLines(findings, SummaryLines-len(lines)-len(files), width)...)
	lines = append(lines, files...)
	_, err := io.WriteString(w, strings.Join(lines, "\n")+"\n")
	return err
}

// headline is the first line: what a person reads who reads only one. Where the
// direction in full would leave no room for the gain and its interval, it has a
// line of its own after that.
func headline(r *pipeline.Result, findings []pipeline.Finding, width int) []string {
	line := fmt.Sprintf("%s: %s", directionWords(r), gainWords(r))
	var full []string
	if text.StringWidthWithoutEscSequences(line) > width {
		line = fmt.Sprintf("%s: %s", briefDirectionWords(r), gainWords(r))
		full = []string{cut("in full: "+directionWords(r), width)}
	}
	if len(findings) > 0 && findings[0].Severity != pipeline.Info {
		line += "; " + string(findings[0].Severity) + ": " + clean(findings[0].Message)
	}
	return append([]string{cut(line, width)}, full...)
}

// bandTable is the bands in groups, each figure the mean of the decibels of
// those bands of the group that have one; empty where nothing was measured or
// predicted.
func bandTable(r *pipeline.Result, width int) string {
	t := table.NewWriter()
	style := table.StyleLight
	style.Options = table.OptionsNoBordersAndSeparators
	style.Format.Header = text.FormatDefault
	style.Color = table.ColorOptions{}
	t.SetStyle(style)
	t.AppendHeader(table.Row{"mean of the", "noise", "target", "SNR", "gain predicted in", ""})
	t.AppendHeader(table.Row{"bands, dB", "change", "change", "gain", "diffuse, white", "remarks"})
	rows := 0
	for _, g := range groups {
		bands := inGroup(r.Bands, g)
		if len(bands) == 0 {
			continue
		}
		noise, n := meanOf(bands, func(b pipeline.Band) pipeline.Number { return b.NoiseReductionDB })
		target, _ := meanOf(bands, func(b pipeline.Band) pipeline.Number { return b.TargetChangeDB })
		gain, _ := meanOf(bands, func(b pipeline.Band) pipeline.Number { return b.SNRGainDB })
		white, nw := meanOf(bands, func(b pipeline.Band) pipeline.Number { return b.PredictedWhiteDB })
		diffuse, nd := meanOf(bands, func(b pipeline.Band) pipeline.Number { return b.PredictedDiffuseDB })
		rows += n + nw + nd
		if noise != nil {
			down := -*noise
			noise = &down
		}
		t.AppendRow(table.Row{
			g.name + " " + rangeWords(bands[0].NominalHz, bands[len(bands)-1].NominalHz),
			levelText(noise), levelText(target), levelText(gain),
			fmt.Sprintf("%s, %5s", levelText(diffuse), levelText(white)), groupRemarks(bands),
		})
	}
	if rows == 0 {
		return ""
	}
	var configs []table.ColumnConfig
	for column := 2; column <= 5; column++ {
		configs = append(configs, table.ColumnConfig{Number: column, Align: text.AlignRight, AlignHeader: text.AlignRight})
	}
	t.SetColumnConfigs(configs)
	var lines []string
	for _, line := range strings.Split(text.StripEscape(t.Render()), "\n") {
		lines = append(lines, cut(strings.TrimRight(line, " "), width))
	}
	return strings.Join(lines, "\n")
}

// groupRemarks says how many bands of a group carry a flag, in plain words.
func groupRemarks(bands []pipeline.Band) string {
	words := []struct{ flag, word string }{
		{"grating", "grating"}, {"no-aperture", "rig small"}, {"sparse", "few data"}, {"target-unmeasurable", "no target"},
	}
	var list []string
	for _, w := range words {
		n := 0
		for _, b := range bands {
			if slices.Contains(b.Flags, w.flag) {
				n++
			}
		}
		switch n {
		case 0:
		case len(bands):
			list = append(list, w.word)
		default:
			list = append(list, fmt.Sprintf("%s %d/%d", w.word, n, len(bands)))
		}
	}
	return strings.Join(list, ", ")
}

// totals is the overall figures beyond those of the headline.
func totals(r *pipeline.Result, width int) []string {
	o := r.Overall
	var parts []string
	add := func(name string, v pipeline.Number) {
		if v != nil {
			parts = append(parts, name+" "+levelText(v))
		}
	}
	add("speech-weighted SNR gain", o.SpeechWeightedSNRGainDB)
	add("A-weighted noise reduction", o.NoiseReductionADB)
	add("target change", o.TargetChangeDB)
	best := "best microphone"
	if o.BestMicrophone != "" {
		best += " " + clean(o.BestMicrophone)
	}
	add("SNR gain over "+best, o.OverBestMicrophoneDB)
	if len(parts) == 0 {
		return nil
	}
	return wrap("overall, dB: "+strings.Join(parts, ", "), width, "  ", 2)
}

// findingLines is the findings in so many lines: each one at first in full,
// and where there is no room for all of them, how many more the report has.
func findingLines(findings []pipeline.Finding, room, width int) []string {
	var lines []string
	for i, f := range findings {
		left := room - len(lines)
		if i < len(findings)-1 {
			left-- // for the line that counts the rest
		}
		if left < 1 {
			rest := len(findings) - i
			word := "findings"
			if rest == 1 {
				word = "finding"
			}
			return append(lines, fmt.Sprintf("and %d more %s in the report", rest, word))
		}
		lines = append(lines, wrap(string(f.Severity)+": "+clean(f.Message), width, "  ", min(left, 3))...)
	}
	return lines
}

// fileLine is one written file.
func fileLine(o pipeline.Output, width int) string {
	detail := fmt.Sprintf(" (%s, %d frames", clean(o.Format), o.Frames)
	if o.PeakDBFS != nil {
		detail += ", peak " + levelText(o.PeakDBFS) + " dBFS"
	}
	detail += ")"
	path := clean(o.Path)
	if room := width - len("wrote ") - text.StringWidthWithoutEscSequences(detail); text.StringWidthWithoutEscSequences(path) > room {
		// The end of a path tells more than its beginning. A path is worth
		// copying whole, so detail goes before it does.
		return "wrote " + path
	}
	return "wrote " + path + detail
}

// cut returns line cut to the width in cells, with an ellipsis where something
// was left off.
func cut(line string, width int) string {
	if text.StringWidthWithoutEscSequences(line) <= width {
		return line
	}
	var b strings.Builder
	used := 0
	for _, r := range line {
		w := text.RuneWidth(r)
		if used+w > width-1 {
			break
		}
		used += w
		b.WriteRune(r)
	}
	return strings.TrimRight(b.String(), " ,;:") + "…"
}

// wrap breaks text at blanks into at most the given number of lines of the
// width in cells; lines after the first begin with indent.
func wrap(s string, width int, indent string, most int) []string {
	var lines []string
	line := ""
	words := strings.Fields(s)
	for i, word := range words {
		next := word
		if line != "" {
			next = line + " " + word
		} else if len(lines) > 0 {
			next = indent + word
		}
		if text.StringWidthWithoutEscSequences(next) <= width || line == "" {
			line = next
			continue
		}
		if len(lines) == most-1 {
			return append(lines, cut(line+" "+strings.Join(words[i:], " "), width))
		}
		lines = append(lines, line)
		line = indent + word
	}
	if line != "" {
		lines = append(lines, cut(line, width))
	}
	return lines
}
