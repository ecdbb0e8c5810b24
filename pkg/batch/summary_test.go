package batch

import (
	"encoding/json"
	"errors"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"
)

func mergeOf(b *bench) *Summary {
	b.t.Helper()
	s, err := Merge(b.plan, MergeSettings{Out: b.out, Verify: true, Worst: "gain_db"})
	if err != nil {
		b.t.Fatal(err)
	}
	return s
}

func TestASummaryNamesTheWorstFirstAndCountsCauses(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "four", "b.wav": "two", "c.wav": "bad", "d.wav": "short", "e.wav": "sixsix"})
	if _, err := b.run(capitals, b.settings()); err != nil {
		t.Fatal(err)
	}
	s := mergeOf(b)
	var order []string
	for _, r := range s.Results {
		order = append(order, r.Take)
	}
	if want := []string{"c", "d", "b", "a", "e"}; !slices.Equal(order, want) || !s.Complete() {
		t.Errorf("order %v, want %v", order, want)
	}
	if s.Done != 3 || s.Missed != 1 || s.Failed != 1 || s.Bytes != 4+3+3+5+6 || len(s.Causes) != 2 || s.Causes[0].Cause != "limit" {
		t.Errorf("%+v", s)
	}
	// Gains are the lengths 3, 4, 5, 6 of the takes made: the median is 4.5.
	g := s.Figures[0]
	if g.Name != "gain_db" || g.Measured != 4 || *g.Lowest != 3 || *g.Median != 4.5 || *g.Highest != 6 {
		t.Errorf("%+v", g)
	}
	if u := s.Figures[1]; u.Name != "unknown_db" || u.Measured != 0 || u.Unknown != 4 || u.Median != nil {
		t.Errorf("%+v", u)
	}
}

func TestAMergeSaysWhatIsMissingDamagedAndStray(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two", "c.wav": "three", "d.wav": "four"})
	b.replan(4)
	if _, err := b.run(capitals, b.settings()); err != nil {
		t.Fatal(err)
	}
	part := map[string]int{}
	for _, take := range b.plan.Takes {
		part[take.Key] = take.Part
	}
	for _, err := range []error{
		os.RemoveAll(filepath.Join(b.out, "a")),
		os.WriteFile(filepath.Join(b.out, "b", "track"), []byte("ONE"), 0o666),
		os.WriteFile(filepath.Join(b.out, "c", "more"), nil, 0o666),
		os.MkdirAll(filepath.Join(b.out, "n"), 0o777),
		os.Rename(filepath.Join(b.out, "d"), filepath.Join(b.out, "n", "d")),
		os.MkdirAll(filepath.Join(b.out, stagingFolder, "elsewhere-1-1-x", "y"), 0o777),
	} {
		if err != nil {
			t.Fatal(err)
		}
	}
	s := mergeOf(b)
	want := []int{part["a"], part["b"], part["c"], part["d"]}
	slices.Sort(want)
	if !slices.Equal(s.Absent, []string{"a", "d"}) || !slices.Equal(s.Strays, []string{"n/d"}) || !slices.Equal(s.MissingParts(), want) {
		t.Errorf("%+v, parts %v", s, s.MissingParts())
	}
	damaged := strings.Join(s.Damaged, "\n")
	if !strings.Contains(damaged, "track has changed") || !strings.Contains(damaged, "more does not belong there") {
		t.Errorf("%q", s.Damaged)
	}
	if _, err := os.Stat(filepath.Join(b.out, stagingFolder)); err != nil {
		t.Errorf("what another machine may have in work went away: %v", err)
	}
	// With everything there, staging of runs elsewhere goes as well.
	for _, key := range []string{"b", "c"} {
		if err := os.RemoveAll(filepath.Join(b.out, key)); err != nil {
			t.Fatal(err)
		}
	}
	if _, err := b.run(capitals, b.settings()); err != nil {
		t.Fatal(err)
	}
	if s := mergeOf(b); !s.Complete() {
		t.Errorf("%+v", s)
	}
	if _, err := os.Stat(filepath.Join(b.out, stagingFolder)); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("staging is left: %v", err)
	}
}

func TestAMergeLooksAgainForNamesThatAreNotSeenYet(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two"})
	if _, err := b.run(capitals, b.settings()); err != nil {
		t.Fatal(err)
	}
	hidden := filepath.Join(t.TempDir(), "a")
	if err := os.Rename(filepath.Join(b.out, "a"), hidden); err != nil {
		t.Fatal(err)
	}
	looks := 0
	s, err := Merge(b.plan, MergeSettings{Out: b.out, Look: func(absent int) bool {
		if looks++; absent != 1 || os.Rename(hidden, filepath.Join(b.out, "a")) != nil {
			t.Errorf("look %d: %d absent", looks, absent)
		}
		return true
	}})
	if err != nil || !s.Complete() || looks != 1 {
		t.Errorf("%+v, %v after %d looks", s, err, looks)
	}
}

func TestResultsOfAnotherPlanAreNotTaken(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one"})
	if _, err := b.run(capitals, b.settings()); err != nil {
		t.Fatal(err)
	}
	plan, err := planOf(b.root, 1, `{"x":2}`)
	if err != nil {
		t.Fatal(err)
	}
	b.plan = plan
	if s := mergeOf(b); s.Complete() || !strings.Contains(s.Damaged[0], "made under another plan") {
		t.Errorf("%+v", s)
	}
}

func TestTheTrendIsAgainstTheLastOtherPlanAndMergingAgainChangesNothing(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "bad"})
	night := func() *Summary {
		if _, err := b.run(capitals, b.settings()); err != nil {
			t.Fatal(err)
		}
		s := mergeOf(b)
		if err := s.Save(b.out, map[string][]byte{"index.html": []byte("page")}); err != nil {
			t.Fatal(err)
		}
		return s
	}
	if first := night(); first.Trend != nil {
		t.Errorf("a trend from nothing: %+v", first.Trend)
	}
	b.put("b.wav", "fivee")
	b.put("c.wav", "bad")
	b.replan(1)
	second := night()
	// The median of 3 and 5 is 4, it was 3.
	if tr := second.Trend; tr == nil || tr.Takes != 2 || tr.Failed != 1 || !slices.Equal(tr.NewlyOK, []string{"b"}) || !slices.Equal(tr.New, []string{"c"}) || len(tr.Gone) != 0 || len(tr.Figures) != 1 || tr.Figures[0].Change != 1 {
		t.Errorf("%+v", tr)
	}
	before := b.all()
	night()
	if !equalTrees(before, b.all()) {
		t.Error("merging again changed the folder")
	}
	var was Summary
	if err := json.Unmarshal([]byte(before[previousName]), &was); err != nil || was.Takes != 2 {
		t.Errorf("%+v, %v", was, err)
	}
	// a, b twice, c.
	if w, err := Throughput(b.out); err != nil || w.Takes != 4 || w.Spent <= 0 || w.Bytes != 3+3+5+3 {
		t.Errorf("%+v, %v, want 4 takes: a, b twice, c", w, err)
	}
	if err := os.Remove(filepath.Join(b.root, "a.wav")); err != nil {
		t.Fatal(err)
	}
	b.replan(1)
	if tr := night().Trend; tr == nil || !slices.Equal(tr.Gone, []string{"a"}) || len(tr.New)+len(tr.NewlyNo)+len(tr.NewlyOK) != 0 {
		t.Errorf("%+v", tr)
	}
}

func TestStorageIsTriedAndLeftAsItWas(t *testing.T) {
	dir := t.TempDir()
	r, err := CheckStorage(dir, time.Now)
	if err != nil || !r.Good() || len(r.Checks) != 8 {
		t.Fatalf("%+v, %v", r, err)
	}
	if left, _ := os.ReadDir(dir); len(left) > 0 {
		t.Errorf("left %v", left)
	}
	r, err = CheckStorage(dir, func() time.Time { return time.Now().Add(time.Hour) })
	if err != nil || !r.Good() {
		t.Fatalf("a clock that is off is no reason to refuse: %+v, %v", r, err)
	}
	k := slices.IndexFunc(r.Checks, func(c StorageCheck) bool { return strings.Contains(c.Name, "clock") })
	if k < 0 || r.Checks[k].Good || !strings.Contains(r.Checks[k].Found, "1h0m") {
		t.Errorf("%+v", r.Checks)
	}
	if _, err := CheckStorage(filepath.Join(dir, "nowhere"), time.Now); err == nil {
		t.Error("a folder that is not there was tried")
	}
}

func TestJobFilesAreWhatTheirEnginesRead(t *testing.T) {
	j := JobFile{Plan: "a night.plan.json", Name: "A night!", Parts: 12, Workers: 2, MemoryMiB: 200, Image: "registry.example/alidade:1", Claim: "takes"}
	for engine, want := range map[string][]string{
		Slurm:      {"#SBATCH --array=0-11\n", "#SBATCH --job-name=a-night\n", "#SBATCH --mem=656M\n", "#SBATCH --cpus-per-task=2\n", "alidade batch 'a night.plan.json' --workers 2"},
		Kubernetes: {"completions: 12\n", `args: [batch, "/data/a night.plan.json", --workers, "2", --bad-takes-done]`, "completionMode: Indexed\n", `memory: 656Mi`},
		Parallel:   {"seq 1 12 | parallel -q ", "--part {}/12", "'a night.plan.json'"},
	} {
		j.Engine = engine
		text, err := j.Text()
		if err != nil {
			t.Fatal(err)
		}
		for _, w := range want {
			if !strings.Contains(text, w) {
				t.Errorf("%s: no %q in\n%s", engine, w, text)
			}
		}
		if !strings.HasPrefix(text, "#!") {
			continue
		}
		cmd := exec.Command("bash", "-n")
		cmd.Stdin = strings.NewReader(text)
		if out, err := cmd.CombinedOutput(); err != nil {
			t.Errorf("%s: a shell does not read it: %v\n%s", engine, err, out)
		}
	}
	j.Engine = "abacus"
	if _, err := j.Text(); err == nil {
		t.Error("a job file for an abacus")
	}
	if got := quoted("it's"); got != `'it'\''s'` {
		t.Errorf("quoted %s", got)
	}
}

// Directions on both sides of 180° have no median of 0°: by the definition of a
// mean direction in Fisher 1993, 2.3.1.
func TestAnglesAreTakenAroundTheirMeanDirection(t *testing.T) {
	stats := func(deg ...float64) FigureStats {
		var rows []Row
		for _, d := range deg {
			rows = append(rows, Row{State: Done, Figures: map[string]*float64{"az": &d}})
		}
		return figuresOf(rows, []string{"az"})[0]
	}
	for _, c := range []struct {
		deg                  []float64
		lowest, mid, highest float64
	}{
		{[]float64{170, 179, -179}, 170, 179, -179},
		{[]float64{-170, 160, 175, -178}, 160, 178.5, -170},
		{[]float64{10, 20, 60}, 10, 20, 60},
		{[]float64{-5, 5}, -5, 0, 5},
		{[]float64{180}, 180, 180, 180},
	} {
		if f := stats(c.deg...); f.Median == nil || *f.Lowest != c.lowest || *f.Median != c.mid || *f.Highest != c.highest || f.Measured != len(c.deg) {
			t.Errorf("%v: from %g through %g to %g", c.deg, *f.Lowest, *f.Median, *f.Highest)
		}
	}
	// Nothing points anywhere.
	if f := stats(0, 180); f.Median != nil || f.Measured != 2 {
		t.Errorf("%+v", f)
	}
	a, b := 178.0, -177.0
	now, then := &Summary{Figures: []FigureStats{{Name: "az", Median: &b}}}, &Summary{Figures: []FigureStats{{Name: "az", Median: &a}}}
	if tr := then.trendTo(now, []string{"az"}); len(tr.Figures) != 1 || tr.Figures[0].Change != 5 {
		t.Errorf("%+v", tr.Figures)
	}
}
