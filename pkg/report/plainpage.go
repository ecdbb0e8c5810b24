package report

import (
	"bytes"
	_ "embed" // the page's own files
	"fmt"
	"html/template"
	"io"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

var (
	//go:embed page/plain.html
	plainHTML string

	plainTemplate = template.Must(template.New("plain").Parse(plainHTML))
)

// plainView is a page that is not that of a steered take: an answer, findings,
// sections.
type plainView struct {
	Policy, Version, Name, Facts, Heading, Quiet, NoFindings, MadeKind string
	Lead                                                               []string
	Style                                                              template.CSS
	Script                                                             template.JS
	Stamp                                                              template.HTML
	Legend                                                             template.URL
	State                                                              *state
	Findings                                                           []findingView
	Sections                                                           []plainSection
	Made, Definitions                                                  []named
}

// plainSection is a part of such a page.
type plainSection struct {
	ID, Heading, Kind, Note string
	Charts, Polars          []chart
	Rig                     *chart
	Flags                   []flagView
	Table                   *plainTableView
}

// plainTableView is a table, behind a fold where Fold names one.
type plainTableView struct {
	ID, Name, Caption, Fold string
	Head                    []string
	Rows                    [][]string
}

// write finishes a page and writes it.
func (v *plainView) write(w io.Writer) error {
	v.Policy, v.Style, v.Script = policy(pageCSS, pageJS), template.CSS(pageCSS), template.JS(pageJS)
	legend, err := draw.Legend()
	if err != nil {
		return fmt.Errorf("report: page: %w", err)
	}
	v.Legend = template.URL(legend)
	var b bytes.Buffer
	if err := plainTemplate.Execute(&b, v); err != nil {
		return fmt.Errorf("report: page: %w", err)
	}
	_, err = w.Write(b.Bytes())
	return err
}

// rigFacts is the part of a report that rig and steered direction are drawn of.
func rigFacts(r pipeline.RigSummary, s pipeline.Steer) *pipeline.Result {
	return &pipeline.Result{Rig: r, Steer: s}
}

// definitionsOf picks definitions by their names.
func definitionsOf(names ...string) []named {
	var list []named
	for _, name := range names {
		for _, d := range definitions {
			if d.Name == name {
				list = append(list, d)
			}
		}
	}
	return list
}

// madeOf makes pairs of names and values, without the empty ones.
func madeOf(pairs ...string) []named {
	var list []named
	for i := 0; i+1 < len(pairs); i += 2 {
		if pairs[i+1] != "" {
			list = append(list, named{Name: pairs[i], Value: shorten(clean(pairs[i+1]), 400)})
		}
	}
	return list
}
