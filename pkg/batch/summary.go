package batch

import (
	"bytes"
	"cmp"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path"
	"path/filepath"
	"slices"
	"time"
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

// FigureStats are the statistics of one figure over the takes.
type FigureStats struct {
	Name     string   `json:"name"`
	Measured int      `json:"measured"`
	Unknown  int      `json:"unknown"` // takes made in which it could not be measured
	Lowest   *float64 `json:"lowest"`
	Median   *float64 `json:"median"`
	Highest  *float64 `json:"highest"`
}

// Row is one take of a summary.
type Row struct {
	Take    string              `json:"take"`
	State   State               `json:"state"`
	Cause   string              `json:"cause,omitempty"`
	Error   string              `json:"error,omitempty"`
	Figures map[string]*float64 `json:"figures,omitempty"`
}

// Trend is what changed since the last summary of another plan in the same
// folder.
type Trend struct {
	PlanID  string        `json:"plan_id"` // of then
	Takes   int           `json:"takes"`
	Done    int           `json:"done"`
	Missed  int           `json:"missed"`
	Failed  int           `json:"failed"`
	NewlyOK []string      `json:"newly_done"`   // takes that were not done then
	NewlyNo []string      `json:"newly_failed"` // takes that are missed or failed now and were done then
	Figures []FigureTrend `json:"figures"`
}

// FigureTrend is how the median of a figure moved, now minus then.
type FigureTrend struct {
	Name   string  `json:"name"`
	Change float64 `json:"change"`
}

// MergeSettings are how results are gathered.
type MergeSettings struct {
	Out    string
	Verify bool   // hold every output against its SHA-256
	Worst  string // figure by which done takes are ordered, lowest first
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
	s.Trend = trendOf(m.Out, s)
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
	s.Figures = figuresOf(s.Results)
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

func figuresOf(rows []Row) []FigureStats {
	values, unknown := map[string][]float64{}, map[string]int{}
	var names []string
	for _, r := range rows {
		if r.State == Failed {
			continue
		}
		for name, v := range r.Figures {
			if _, ok := values[name]; !ok {
				values[name] = []float64{}
				names = append(names, name)
			}
			if v == nil || math.IsNaN(*v) {
				unknown[name]++
			} else {
				values[name] = append(values[name], *v)
			}
		}
	}
	slices.Sort(names)
	list := []FigureStats{}
	for _, name := range names {
		v := values[name]
		slices.Sort(v)
		f := FigureStats{Name: name, Measured: len(v), Unknown: unknown[name]}
		if n := len(v); n > 0 {
			median := v[(n-1)/2]/2 + v[n/2]/2
			f.Lowest, f.Median, f.Highest = &v[0], &median, &v[n-1]
		}
		list = append(list, f)
	}
	return list
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

// trendOf compares with the last summary of another plan.
func trendOf(out string, s *Summary) *Trend {
	var was Summary
	for _, name := range []string{summaryName, previousName} {
		text, err := os.ReadFile(filepath.Join(out, name))
		if err != nil || json.Unmarshal(text, &was) != nil || was.Schema != SummarySchema {
			continue
		}
		if was.PlanID != s.PlanID {
			return was.trendTo(s)
		}
		was = Summary{}
	}
	return nil
}

// trendTo is what changed from was to s.
func (was *Summary) trendTo(s *Summary) *Trend {
	t := &Trend{PlanID: was.PlanID, Takes: was.Takes, Done: was.Done, Missed: was.Missed, Failed: was.Failed,
		NewlyOK: []string{}, NewlyNo: []string{}, Figures: []FigureTrend{}}
	then := make(map[string]State, len(was.Results))
	for _, r := range was.Results {
		then[r.Take] = r.State
	}
	for _, r := range s.Results {
		if before := then[r.Take]; before == Done && r.State != Done {
			t.NewlyNo = append(t.NewlyNo, r.Take)
		} else if before != Done && r.State == Done {
			t.NewlyOK = append(t.NewlyOK, r.Take)
		}
	}
	slices.Sort(t.NewlyOK)
	slices.Sort(t.NewlyNo)
	for _, now := range s.Figures {
		for _, before := range was.Figures {
			if now.Name == before.Name && now.Median != nil && before.Median != nil {
				t.Figures = append(t.Figures, FigureTrend{now.Name, *now.Median - *before.Median})
			}
		}
	}
	return t
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

// Throughput is what the ledgers of an output folder say of the work behind
// it: takes committed, time spent on them, over all runs.
func Throughput(out string) (takes int, spent time.Duration, err error) {
	lines, _, err := ReadLedgers(out)
	for _, l := range lines {
		if l.Event == EventCommitted {
			takes++
			spent += time.Duration(l.Took * float64(time.Second))
		}
	}
	return takes, spent, err
}
