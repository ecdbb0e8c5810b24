package main

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"time"
	"unicode"

	"github.com/urfave/cli/v2"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

const mergeHelp = `alidade merge: one summary from the parts of a batch

Usage
  alidade merge PLAN.json|JOB.yaml [OPTIONS]

Example
  $ alidade merge night.plan.json

Holds every result against the plan and its checksums, and writes summary.json,
summary.txt and index.html into the output folder. Running it again changes
nothing. When results are missing the exit code is 1, and the parts that would
make them are named.

Options
  --out DIR       the output folder, where it is another one here
  --root DIR      the folder of the takes, where it is another one here
  --wait S        look again for so many seconds for what is missing: over a
                  network a new name may stay unseen for a while (default 0)
  --json          the summary as JSON on standard output
  --help, -h      this text
`

const checkStorageHelp = `alidade check-storage: whether a folder can carry a batch

Usage
  alidade check-storage DIR

Example
  $ alidade check-storage out

Tries in the folder what a batch relies on: renames that are whole and never
replace a folder that is not empty, files that are read back as they were
written, syncs, the clock, room. Nothing is left there. Exit code 1 if a batch
cannot do with it.

Options
  --json      the findings as JSON
  --help, -h  this text
`

func mergeVerb() verb {
	return verb{
		name: "merge", does: "one summary from the parts of a batch",
		help: mergeHelp,
		flags: func() []cli.Flag {
			return []cli.Flag{&cli.StringFlag{Name: "out"}, &cli.StringFlag{Name: "root"}, &cli.Float64Flag{Name: "wait"}, &cli.BoolFlag{Name: "json"}}
		},
		run: runMerge,
	}
}

func checkStorageVerb() verb {
	return verb{
		name: "check-storage", does: "whether a folder can carry a batch",
		help:  checkStorageHelp,
		flags: func() []cli.Flag { return []cli.Flag{&cli.BoolFlag{Name: "json"}} },
		run:   runCheckStorage,
	}
}

func runMerge(u *ui, c *cli.Context) error {
	if c.NArg() != 1 {
		return &usageError{fmt.Errorf("merge: %d files, want one plan or job file", c.NArg()), ""}
	}
	wait := c.Float64("wait")
	if wait < 0 || wait > 86400 {
		return &usageError{fmt.Errorf("merge: --wait %g: want 0 to 86400 s", wait), ""}
	}
	t, err := u.undertake(c, c.Args().First())
	if err != nil {
		return err
	}
	until := u.now().Add(time.Duration(wait * float64(time.Second)))
	m := batch.MergeSettings{Out: t.out, Worst: worstFigure, Angles: angleFigures, Verify: true, Look: func(absent int) bool {
		if !u.now().Before(until) {
			return false
		}
		select {
		case <-c.Context.Done():
			return false
		case <-time.After(time.Second):
			return true
		}
	}}
	s, err := t.sumUp(m, true)
	if err != nil {
		return err
	}
	if err := c.Context.Err(); err != nil {
		return err
	}
	if err := u.showSummary(s, c.Bool("json")); err != nil {
		return err
	}
	if w, err := batch.Throughput(t.out); err == nil && w.Takes > 0 {
		u.remark("%s", workWords(w))
	}
	if s.Complete() {
		return nil
	}
	var parts []string
	for _, p := range s.MissingParts() {
		parts = append(parts, strconv.Itoa(p))
	}
	text := fmt.Sprintf("%d of %d results are missing", len(s.Absent)+len(s.Damaged), s.Takes)
	if t.plan.Parts > 1 {
		text += ": --array=" + strings.Join(parts, ",") + " would make them"
	}
	return &missedError{exitNothing, errors.New(text)}
}

// The files of a summary beside summary.json.
const (
	indexFile   = "index.html"
	summaryText = "summary.txt"
)

// sumUp gathers the results and writes the summary. With results missing
// nothing is written, and little is read where nothing was made since.
func (t *undertaking) sumUp(m batch.MergeSettings, made bool) (*batch.Summary, error) {
	if _, err := os.Stat(m.Out); err != nil {
		return nil, err
	}
	s, err := batch.Merge(t.plan, m)
	if err != nil || !s.Complete() {
		return s, err
	}
	if !made && s.Saved(m.Out, indexFile, summaryText) {
		return s, nil // all of it says so already
	}
	var page bytes.Buffer
	if err := report.Index(&page, t.plan.Job, version, t.entries(s)); err != nil {
		return nil, err
	}
	return s, s.Save(m.Out, map[string][]byte{indexFile: page.Bytes(), summaryText: []byte(summaryWords(s))})
}

// entries are the lines of the folder's page, worst first.
func (t *undertaking) entries(s *batch.Summary) []report.Entry {
	var list []report.Entry
	for _, r := range s.Results {
		e := report.Entry{Name: r.Take, Failure: r.Error}
		if r.State != batch.Failed {
			e.Result, e.Link = t.resultOf(r.Take)
			if e.Result != nil && r.State == batch.Missed {
				limit := pipeline.Finding{Code: "limit", Severity: pipeline.Error, Message: r.Error}
				e.Result.Findings = append([]pipeline.Finding{limit}, e.Result.Findings...)
			}
			if e.Result == nil && e.Failure == "" {
				e.Failure = "there is no JSON report to read its figures from"
			}
		}
		list = append(list, e)
	}
	return list
}

// resultOf reads the report of a take, as far as the page of the folder shows
// it. It is nil where the job wrote none. The report is as it was committed: the
// merge has held it against its hash.
func (t *undertaking) resultOf(key string) (*pipeline.Result, string) {
	dir := filepath.Join(t.out, filepath.FromSlash(key))
	entries, err := os.ReadDir(dir)
	if err != nil {
		return nil, ""
	}
	stem := ""
	for _, e := range entries {
		if name, ok := strings.CutSuffix(e.Name(), ".report.json"); ok && stem == "" {
			stem = name
		}
	}
	result, err := readShown(filepath.Join(dir, stem+".report.json"))
	if err != nil {
		return nil, ""
	}
	for _, e := range entries {
		if e.Name() == stem+".html" {
			return result, link(key + "/" + e.Name())
		}
	}
	return result, ""
}

func (u *ui) showSummary(s *batch.Summary, asJSON bool) error {
	if !asJSON {
		u.print(summaryWords(s))
		return nil
	}
	text, err := s.JSON()
	u.print(string(text))
	return err
}

// mostListed bounds the lists of the summary's text.
const mostListed = 10

// visible is a line with the characters written out that a file's name may hold
// and that would break the line, steer the terminal or turn its letters round.
func visible(line string) string {
	var b strings.Builder
	for _, r := range line {
		if !unicode.IsPrint(r) {
			q := strconv.QuoteRune(r)
			b.WriteString(q[1 : len(q)-1])
		} else {
			b.WriteRune(r)
		}
	}
	return b.String()
}

// summaryWords is a summary for a person.
func summaryWords(s *batch.Summary) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s: %s, %d done, %d missed a limit, %d failed", s.Job, takesWord(s.Takes), s.Done, s.Missed, s.Failed)
	if n := len(s.Absent) + len(s.Damaged); n > 0 {
		fmt.Fprintf(&b, ", %d without a result", n)
	}
	b.WriteString("\n")
	for _, f := range s.Figures {
		if f.Median == nil {
			fmt.Fprintf(&b, "%-20s not measured in any of %d takes\n", f.Name, f.Unknown)
			continue
		}
		fmt.Fprintf(&b, "%-20s median %s, from %s to %s; measured in %d of %d", f.Name, report.Round(*f.Median, f.Name), report.Round(*f.Lowest, f.Name), report.Round(*f.Highest, f.Name), f.Measured, f.Measured+f.Unknown)
		b.WriteString("\n")
	}
	listed := func(title string, lines []string) {
		if len(lines) == 0 {
			return
		}
		fmt.Fprintf(&b, "\n%s\n", title)
		for k, l := range lines {
			if k == mostListed {
				fmt.Fprintf(&b, "  and %d more\n", len(lines)-k)
				break
			}
			fmt.Fprintf(&b, "  %s\n", visible(l))
		}
	}
	for _, c := range s.Causes {
		var lines []string
		for _, r := range s.Results {
			if r.State != batch.Done && r.Cause == c.Cause {
				lines = append(lines, r.Take+": "+r.Error)
			}
		}
		listed(fmt.Sprintf("%s: %d", c.Cause, c.Count), lines)
	}
	var worst []string
	for _, r := range s.Results {
		if g := r.Figures[worstFigure]; g != nil && r.State == batch.Done && len(worst) < 5 {
			worst = append(worst, fmt.Sprintf("%s: %s dB", r.Take, report.Round(*g, worstFigure)))
		}
	}
	listed("Lowest SNR gain", worst)
	listed("No result", s.Absent)
	listed("Not usable", s.Damaged)
	listed("Results of no take of the plan", s.Strays)
	if t := s.Trend; t != nil {
		fmt.Fprintf(&b, "\nLast time (plan %.12s): %s, %d done, %d missed a limit, %d failed\n", t.PlanID, takesWord(t.Takes), t.Done, t.Missed, t.Failed)
		for _, f := range t.Figures {
			fmt.Fprintf(&b, "  median %s: %s%s\n", f.Name, plus(f.Change), report.Round(f.Change, f.Name))
		}
		if len(t.New)+len(t.Gone) > 0 {
			fmt.Fprintf(&b, "  %s new, %d not there any more\n", takesWord(len(t.New)), len(t.Gone))
		}
		listed("Done then, not now", t.NewlyNo)
		listed("Done now, not then", t.NewlyOK)
	}
	return b.String()
}

func plus(x float64) string {
	if x >= 0 {
		return "+"
	}
	return ""
}

func runCheckStorage(u *ui, c *cli.Context) error {
	if c.NArg() != 1 {
		return &usageError{fmt.Errorf("check-storage: %d folders, want one", c.NArg()), ""}
	}
	r, err := batch.CheckStorage(c.Args().First(), u.now)
	if err != nil {
		return err
	}
	if c.Bool("json") {
		if err := report.WriteJSON(u.stdout, r); err != nil {
			return err
		}
	} else {
		if r.FreeBytes != nil {
			u.printf("%s: %.1f GB free\n", r.Path, float64(*r.FreeBytes)/1e9)
		} else {
			u.printf("%s: free room not known\n", r.Path)
		}
		for _, k := range r.Checks {
			word := "good"
			if !k.Good {
				word = map[bool]string{true: "BAD", false: "note"}[k.Needed]
			}
			u.printf("  %-4s  %s: %s\n", word, k.Name, k.Found)
		}
	}
	if !r.Good() {
		return &missedError{exitNothing, fmt.Errorf("%s: a batch cannot rely on it", r.Path)}
	}
	return nil
}
