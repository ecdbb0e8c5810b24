package report

import (
	"bytes"
	_ "embed" // the page's own files
	"fmt"
	"html/template"
	"io"
	"math"
	"slices"
	"strings"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

var (
	//go:embed page/folder.html
	folderHTML string
	//go:embed page/folder.js
	folderJS string

	folderTemplate = template.Must(template.New("folder").Parse(folderHTML))
)

// Entry is one take of a folder.
type Entry struct {
	Name    string           // as a person knows it
	Link    string           // to its page, relative to the folder's, with slashes; empty for none
	Result  *pipeline.Result // nil if the take failed
	Failure string           // why it failed
}

// rowView is one row of the table of takes.
type rowView struct {
	Name, Link, Word, Glyph, Gain, Direction, Channels, Length, Why string
	// Sort keys: text or numbers, empty ones last.
	Rank                                          int
	SortGain, SortDirection, SortChannels, Sorted string
	Picture                                       template.HTML
}

type folderView struct {
	Policy, Title, Version, Heading, Lead string
	Style                                 template.CSS
	Script                                template.JS
	Rows                                  []rowView
	Good, Caution, Fault                  int
}

// Index writes the page of a folder of takes: how many are ready, and a table
// that sorts and filters, failed takes first, then faults, cautions and good
// ones, each in the order given.
func Index(w io.Writer, title, version string, entries []Entry) error {
	v := folderView{Policy: policy(pageCSS, folderJS), Style: template.CSS(pageCSS), Script: template.JS(folderJS),
		Title: shorten(clean(title), 120), Version: clean(version)}
	low, high := 0.0, 6.0
	var gains []float64
	for _, e := range entries {
		if g, ci := gainOf(e.Result); g != nil {
			gains = append(gains, *g)
			low, high = math.Min(low, *g), math.Max(high, *g)
			if ci != nil {
				low, high = math.Min(low, math.Max(ci[0], -20)), math.Max(high, math.Min(ci[1], 40))
			}
		}
	}
	x := draw.Linear(low, high)
	for _, e := range entries {
		row := viewEntry(e, x)
		switch row.Word {
		case "good":
			v.Good++
		case "caution":
			v.Caution++
		default:
			v.Fault++
		}
		v.Rows = append(v.Rows, row)
	}
	slices.SortStableFunc(v.Rows, func(a, b rowView) int { return a.Rank - b.Rank })
	v.Heading = fmt.Sprintf("%d of %s ready to use", v.Good, takesWord(len(entries)))
	v.Lead = fmt.Sprintf("%d to look at first, %d failed or at fault.", v.Caution, v.Fault)
	if len(gains) > 0 {
		slices.Sort(gains)
		n := len(gains)
		v.Lead += fmt.Sprintf(" The median SNR gain is %s dB, from %s to %s dB.", decimals((gains[(n-1)/2]+gains[n/2])/2, 1), decimals(gains[0], 1), decimals(gains[n-1], 1))
	}
	var b bytes.Buffer
	if err := folderTemplate.Execute(&b, v); err != nil {
		return fmt.Errorf("report: folder page: %w", err)
	}
	_, err := w.Write(b.Bytes())
	return err
}

func takesWord(n int) string {
	if n == 1 {
		return "1 take"
	}
	return fmt.Sprintf("%d takes", n)
}

// gainOf returns the overall SNR gain and its interval; nil where there is none.
func gainOf(r *pipeline.Result) (pipeline.Number, pipeline.Interval) {
	if r == nil {
		return nil, nil
	}
	return r.Overall.SNRGainDB, r.Overall.SNRGainCI95
}

func viewEntry(e Entry, x draw.Scale) rowView {
	v := rowView{Name: shorten(clean(e.Name), 160), Link: e.Link, Gain: "–", Direction: "–", Channels: "–", Length: "–"}
	v.Sorted = strings.ToLower(v.Name)
	if e.Result == nil {
		v.Word, v.Glyph, v.Why = "failed", "×", sentence(shorten(clean(e.Failure), 300))
		return v
	}
	r := e.Result
	s := stateOf(r)
	v.Word, v.Glyph = s.Word, s.Glyph
	v.Rank = map[string]int{"fault": 1, "caution": 2, "good": 3}[s.Word]
	v.Direction, v.SortDirection = decimals(r.Steer.AzimuthDeg, 1)+"°", Round(r.Steer.AzimuthDeg, "azimuth_deg")
	v.Channels, v.SortChannels = fmt.Sprintf("%d of %d", r.Rig.MicrophonesUsed, len(r.Rig.Mics)), fmt.Sprint(r.Rig.MicrophonesUsed)
	v.Length = clock(math.Round(r.Take.DurationS), r.Take.DurationS)
	if list := sortedFindings(r); len(list) > 0 {
		v.Why = sentence(shorten(clean(list[0].Message), 160))
	}
	g, ci := gainOf(r)
	if g == nil {
		return v
	}
	v.Gain, v.SortGain = levelText(g), Round(*g, "snr_gain_db")
	var p draw.SVG
	p.Open("mini", fmt.Sprintf("SNR gain %s", withInterval(g, ci)))
	p.Line(x.At(0), 10, x.At(0), 90, "zero")
	if ci != nil {
		p.Line(x.At(ci[0]), 50, x.At(ci[1]), 50, "whisker")
	}
	p.Dot(x.At(*g), 50, 4, "fix", "data-value", v.SortGain)
	v.Picture = p.Close()
	return v
}
