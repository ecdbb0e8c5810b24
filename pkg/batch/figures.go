package batch

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"slices"
	"time"
)

// FigureStats are the statistics of one figure over the takes. Those of an
// angle are taken around the mean direction: from Lowest the values turn
// through Median to Highest, which may be the smaller number.
type FigureStats struct {
	Name     string   `json:"name"`
	Measured int      `json:"measured"`
	Unknown  int      `json:"unknown"` // takes made in which it could not be measured
	Lowest   *float64 `json:"lowest"`
	Median   *float64 `json:"median"`
	Highest  *float64 `json:"highest"`
}

// Trend is what changed since the last summary of another plan in the same
// folder. NewlyOK and NewlyNo are takes of both plans.
type Trend struct {
	PlanID  string        `json:"plan_id"` // of then
	Takes   int           `json:"takes"`
	Done    int           `json:"done"`
	Missed  int           `json:"missed"`
	Failed  int           `json:"failed"`
	New     []string      `json:"new"`          // takes that the plan of then had not
	Gone    []string      `json:"gone"`         // takes that the plan of now has not
	NewlyOK []string      `json:"newly_done"`   // takes that were not done then
	NewlyNo []string      `json:"newly_failed"` // takes that are missed or failed now and were done then
	Figures []FigureTrend `json:"figures"`
}

// FigureTrend is how the median of a figure moved, now minus then.
type FigureTrend struct {
	Name   string  `json:"name"`
	Change float64 `json:"change"`
}

func figuresOf(rows []Row, angles []string) []FigureStats {
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
		f := FigureStats{Name: name, Measured: len(v), Unknown: unknown[name]}
		mean, known := 0.0, true
		if slices.Contains(angles, name) {
			if mean, known = meanAngle(v); known {
				for k := range v {
					v[k] = wrapped(v[k] - mean)
				}
			}
		}
		slices.Sort(v)
		if n := len(v); n > 0 && known {
			back := func(x float64) *float64 {
				if slices.Contains(angles, name) {
					// To a thousandth of what a direction is known to, so that
					// going there and back leaves no dust.
					x = wrapped(math.Round((x+mean)*1e6) / 1e6)
				}
				return &x
			}
			f.Lowest, f.Median, f.Highest = back(v[0]), back(v[(n-1)/2]/2+v[n/2]/2), back(v[n-1])
		}
		list = append(list, f)
	}
	return list
}

// meanAngle is the direction of the mean of the unit vectors at angles in
// degrees, and false where they cancel (Fisher, N. I., "Statistical Analysis of
// Circular Data", Cambridge 1993, 2.3.1).
func meanAngle(deg []float64) (float64, bool) {
	var x, y float64
	for _, d := range deg {
		s, c := math.Sincos(d * math.Pi / 180)
		x, y = x+c, y+s
	}
	if math.Hypot(x, y) <= 1e-6*float64(len(deg)) {
		return 0, false
	}
	return math.Atan2(y, x) * 180 / math.Pi, true
}

// wrapped is an angle in degrees within -180 < a <= 180.
func wrapped(deg float64) float64 {
	return deg - 360*math.Ceil((deg-180)/360)
}

// trendOf compares with the last summary of another plan.
func trendOf(out string, s *Summary, angles []string) *Trend {
	var was Summary
	for _, name := range []string{summaryName, previousName} {
		text, err := os.ReadFile(filepath.Join(out, name))
		if err != nil || json.Unmarshal(text, &was) != nil || was.Schema != SummarySchema {
			continue
		}
		if was.PlanID != s.PlanID {
			return was.trendTo(s, angles)
		}
		was = Summary{}
	}
	return nil
}

// trendTo is what changed from was to s.
func (was *Summary) trendTo(s *Summary, angles []string) *Trend {
	t := &Trend{PlanID: was.PlanID, Takes: was.Takes, Done: was.Done, Missed: was.Missed, Failed: was.Failed,
		New: []string{}, Gone: []string{}, NewlyOK: []string{}, NewlyNo: []string{}, Figures: []FigureTrend{}}
	then := make(map[string]State, len(was.Results))
	for _, r := range was.Results {
		then[r.Take] = r.State
	}
	for _, r := range s.Results {
		switch before, known := then[r.Take]; {
		case !known:
			t.New = append(t.New, r.Take)
		case before == Done && r.State != Done:
			t.NewlyNo = append(t.NewlyNo, r.Take)
		case before != Done && r.State == Done:
			t.NewlyOK = append(t.NewlyOK, r.Take)
		}
		delete(then, r.Take)
	}
	for name := range then {
		t.Gone = append(t.Gone, name)
	}
	for _, list := range [][]string{t.New, t.Gone, t.NewlyOK, t.NewlyNo} {
		slices.Sort(list)
	}
	for _, now := range s.Figures {
		for _, before := range was.Figures {
			if now.Name == before.Name && now.Median != nil && before.Median != nil {
				change := *now.Median - *before.Median
				if slices.Contains(angles, now.Name) {
					change = wrapped(change)
				}
				t.Figures = append(t.Figures, FigureTrend{now.Name, change})
			}
		}
	}
	return t
}

// Work is what lies behind committed results, of one run or of all. It depends
// on the machines and their load, and so is no part of a Summary.
type Work struct {
	Takes int           // committed
	Spent time.Duration // on them, the sum over the workers
	Bytes int64         // of the files they were made from
}

func (w *Work) add(took time.Duration, files []File) {
	w.Takes++
	w.Spent += took
	for _, f := range files {
		w.Bytes += f.Bytes
	}
}

// Throughput reads from the ledgers of an output folder how much work all its
// runs have done.
func Throughput(out string) (w Work, err error) {
	lines, _, err := ReadLedgers(out)
	for _, l := range lines {
		if l.Event == EventCommitted {
			w.add(time.Duration(l.Took*float64(time.Second)), l.Files)
		}
	}
	return w, err
}
