package batch

import (
	"bytes"
	"cmp"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
)

// SummarySchema is the version of the form of a summary.
const SummarySchema = "alidade-summary/1"

// The files of a summary in the output folder.
const (
	summaryName  = "summary.json"
	previousName = "summary.previous.json"
)

// Summary is what came of a plan, as plain data. It does not depend on how
// many runs, workers and parts it took.
type Summary struct {
	Schema  string        `json:"schema"`
	PlanID  string        `json:"plan_id"`
	Version string        `json:"version"`
	Job     string        `json:"job"`
	Takes   int           `json:"takes"`
	Done    int           `json:"done"`
	Missed  int           `json:"missed"`
	Failed  int           `json:"failed"`
	Bytes   int64         `json:"bytes"` // of the takes with an outcome
	Absent  []string      `json:"absent"`
	Damaged []string      `json:"damaged"` // and why
	Strays  []string      `json:"strays"`  // results of no take of the plan
	Causes  []CauseCount  `json:"causes"`
	Figures []FigureStats `json:"figures"`
	Results []Row         `json:"results"` // worst first
	Trend   *Trend        `json:"trend,omitempty"`

	parts []int // that hold absent takes
}

// CauseCount is how many takes are not done for one cause.
type CauseCount struct {
	Cause string   `json:"cause"`
	Count int      `json:"count"`
	Takes []string `json:"takes"`
}

// Row is one take of a summary.
type Row struct {
	Take    string              `json:"take"`
	State   State               `json:"state"`
	Cause   string              `json:"cause,omitempty"`
	Error   string              `json:"error,omitempty"`
	Figures map[string]*float64 `json:"figures,omitempty"`
}

// MergeSettings are how results are gathered.
type MergeSettings struct {
	Out    string
	Verify bool   // hold every output against its SHA-256
	Worst  string // figure by which done takes are ordered, lowest first
	// Angles are the figures that are angles in degrees, with 180 = -180.
	Angles []string
	// Look is asked after a look that found takes absent whether to look again,
	// and waits in between: over a network a name that was looked up too early
	// stays missing for a while. Nil looks once.
	Look func(absent int) bool
}

// Complete reports whether every take has a sound outcome.
func (s *Summary) Complete() bool { return len(s.Absent)+len(s.Damaged) == 0 }

// MissingParts are the parts, from 0, that would make what is absent.
func (s *Summary) MissingParts() []int { return s.parts }

// Merge gathers the outcomes of a plan. It changes nothing but what runs left
// in the staging folder, which goes when every take is there.
func Merge(plan *Plan, m MergeSettings) (*Summary, error) {
	g := &gathered{plan: plan, m: m, outcomes: make([]*Outcome, len(plan.Takes)), damaged: make([]error, len(plan.Takes))}
	absent := g.look()
	for len(absent) > 0 && m.Look != nil && m.Look(len(absent)) {
		absent = g.look()
	}
	if g.err != nil {
		return nil, trouble(g.err)
	}
	s := g.summary()
	var err error
	if s.Strays, err = strays(m.Out, plan); err != nil {
		return nil, trouble(err)
	}
	if s.Complete() {
		sweep(m.Out, true)
	}
	s.Trend = trendOf(m.Out, s, m.Angles)
	return s, nil
}

type gathered struct {
	plan     *Plan
	m        MergeSettings
	outcomes []*Outcome
	damaged  []error
	err      error
}

// look reads what is there of the outcomes that were absent, and returns which
// still are.
func (g *gathered) look() (absent []int) {
	g.err = nil
	for k, t := range g.plan.Takes {
		if g.outcomes[k] != nil {
			continue
		}
		g.damaged[k] = nil
		o, err := ReadOutcome(g.m.Out, t.Key)
		if errors.Is(err, fs.ErrNotExist) {
			// Listing the folder shows what a name looked up too early hides.
			_, _ = os.ReadDir(filepath.Dir(folderOf(g.m.Out, t.Key)))
			o, err = ReadOutcome(g.m.Out, t.Key)
		}
		var damaged *DamagedError
		switch {
		case errors.Is(err, fs.ErrNotExist):
		case errors.As(err, &damaged):
			g.damaged[k] = err
		case err != nil:
			g.err = err
			return nil
		case o.Recipe != g.plan.Recipes[t.Recipe].ID:
			g.damaged[k] = fmt.Errorf("%s: made under another plan (%.12s), by another rig, other options or another version", t.Key, o.PlanID)
		case !sameSizes(o.Files, t.Files) && o.Cause != CauseChanged:
			g.damaged[k] = fmt.Errorf("%s: made from files of other sizes than the plan has", t.Key)
		default:
			if g.m.Verify {
				if err := o.Verify(g.m.Out); err != nil {
					g.damaged[k] = err
					continue
				}
			}
			g.outcomes[k] = o
		}
		if g.outcomes[k] == nil && g.damaged[k] == nil {
			absent = append(absent, k)
		}
	}
	return absent
}

func (g *gathered) summary() *Summary {
	s := &Summary{Schema: SummarySchema, PlanID: g.plan.PlanID, Version: g.plan.Version, Job: g.plan.Job, Takes: len(g.plan.Takes),
		Absent: []string{}, Damaged: []string{}, Strays: []string{}, Causes: []CauseCount{}, Figures: []FigureStats{}, Results: []Row{}}
	parts := map[int]bool{}
	causes := map[string]*CauseCount{}
	for k, t := range g.plan.Takes {
		o := g.outcomes[k]
		if o == nil {
			parts[t.Part] = true
			if g.damaged[k] != nil {
				s.Damaged = append(s.Damaged, g.damaged[k].Error())
			} else {
				s.Absent = append(s.Absent, t.Key)
			}
			continue
		}
		s.Bytes += t.Bytes()
		s.Results = append(s.Results, Row{t.Key, o.State, o.Cause, o.Error, o.Figures})
		switch o.State {
		case Done:
			s.Done++
			continue
		case Missed:
			s.Missed++
		default:
			s.Failed++
		}
		c := causes[o.Cause]
		if c == nil {
			c = &CauseCount{Cause: o.Cause}
			causes[o.Cause] = c
		}
		c.Count++
		c.Takes = append(c.Takes, t.Key)
	}
	for _, c := range causes {
		s.Causes = append(s.Causes, *c)
	}
	slices.SortFunc(s.Causes, func(a, b CauseCount) int {
		return cmp.Or(cmp.Compare(b.Count, a.Count), cmp.Compare(a.Cause, b.Cause))
	})
	for p := range parts {
		s.parts = append(s.parts, p)
	}
	slices.Sort(s.parts)
	s.Figures = figuresOf(s.Results, g.m.Angles)
	rank := map[State]int{Failed: 0, Missed: 1, Done: 2}
	slices.SortStableFunc(s.Results, func(a, b Row) int {
		return cmp.Or(cmp.Compare(rank[a.State], rank[b.State]), compareFigure(a.Figures[g.m.Worst], b.Figures[g.m.Worst]), cmp.Compare(a.Take, b.Take))
	})
	return s
}

// compareFigure puts what could not be measured first, then low before high.
func compareFigure(a, b *float64) int {
	switch {
	case a == nil && b == nil:
		return 0
	case a == nil:
		return -1
	case b == nil:
		return 1
	}
	return cmp.Compare(*a, *b)
}

// strays lists results in the output folder that are of no take of the plan.
func strays(out string, plan *Plan) ([]string, error) {
	known := make(map[string]bool, len(plan.Takes))
	for _, t := range plan.Takes {
		known[t.Key] = true
	}
	list := []string{}
	var visit func(rel string) error
	visit = func(rel string) error {
		entries, err := os.ReadDir(folderOf(out, rel))
		if err != nil {
			if errors.Is(err, fs.ErrNotExist) {
				return nil
			}
			return err
		}
		for _, e := range entries {
			if rel != "." && e.Name() == outcomeName {
				list = append(list, rel)
				return nil
			}
		}
		for _, e := range entries {
			key := path.Join(rel, e.Name())
			if e.IsDir() && !known[key] && e.Name() != stagingFolder && e.Name() != ledgerFolder {
				if err := visit(key); err != nil {
					return err
				}
			}
		}
		return nil
	}
	return list, visit(".")
}

// JSON is the text of summary.json. The same outcomes give the same bytes.
func (s *Summary) JSON() ([]byte, error) {
	text, err := json.MarshalIndent(s, "", " ")
	if err != nil {
		return nil, fmt.Errorf("summary: %w", err)
	}
	return append(text, '\n'), nil
}

// Saved reports whether summary.json of an output folder is this summary, with
// files of these names beside it.
func (s *Summary) Saved(out string, beside ...string) bool {
	text, err := s.JSON()
	if err != nil || !sameBytes(filepath.Join(out, summaryName), text) {
		return false
	}
	for _, name := range beside {
		if _, err := os.Lstat(filepath.Join(out, name)); err != nil {
			return false
		}
	}
	return true
}

// Save writes summary.json, and other files beside it, each whole or not at
// all; one that says the same already is left alone. The summary of another
// plan that stands there is kept as summary.previous.json.
func (s *Summary) Save(out string, beside map[string][]byte) error {
	text, err := s.JSON()
	if err != nil {
		return err
	}
	name := filepath.Join(out, summaryName)
	var was Summary
	if old, err := os.ReadFile(name); err == nil && json.Unmarshal(old, &was) == nil && was.PlanID != s.PlanID && !bytes.Equal(old, text) {
		if err := replaceFile(filepath.Join(out, previousName), old); err != nil {
			return trouble(err)
		}
	}
	names := []string{}
	for n := range beside {
		names = append(names, n)
	}
	slices.Sort(names)
	for _, n := range names {
		if at := filepath.Join(out, n); !sameBytes(at, beside[n]) {
			if err := replaceFile(at, beside[n]); err != nil {
				return trouble(err)
			}
		}
	}
	if sameBytes(name, text) {
		return nil
	}
	return trouble(replaceFile(name, text))
}
