package batch

import (
	"bytes"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"
)

func TestAPatternMatchesNamesAndFolders(t *testing.T) {
	for _, c := range []struct {
		pattern, name string
		want          bool
	}{
		{"*.wav", "a.wav", true}, {"*.wav", "x/a.wav", false}, {"**/*.wav", "a.wav", true}, {"**/*.wav", "x/y/a.wav", true},
		{"takes/**/roof_?.wav", "takes/roof_1.wav", true}, {"takes/**/roof_?.wav", "takes/a/b/roof_12.wav", false},
		{"**", "a/b", true}, {"a/**", "b/a", false}, {"**/a/**/b", "x/a/y/a/z/b", true}, {"**/a/b/*", "a/x/a/b/c", true},
		{"./a.wav", "a.wav", true}, {"[ab].wav", "b.wav", true},
	} {
		if got := Match(c.pattern, c.name); got != c.want {
			t.Errorf("Match(%q, %q) = %v", c.pattern, c.name, got)
		}
	}
	// Many ** cost little.
	begun := time.Now()
	if Match(strings.Repeat("**/a/", 30)+"b", strings.Repeat("a/", 400)+"c") || time.Since(begun) > time.Second {
		t.Errorf("%s for a pattern of many **", time.Since(begun))
	}
	for _, bad := range []string{"", "/abs/*.wav", "../x.wav", "a/../../b", "[", `a\b`} {
		if CheckPattern(bad) == nil {
			t.Errorf("pattern %q was taken", bad)
		}
	}
}

func TestFindSortsSkipsAndSaysWhy(t *testing.T) {
	root := t.TempDir()
	for _, name := range []string{"b.wav", "a.wav", "n/c.wav", "n/test.wav", ".hidden.wav", ".trash/d.wav", "out/e.wav", "notes.txt"} {
		path := filepath.Join(root, name)
		if err := os.MkdirAll(filepath.Dir(path), 0o777); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(path, []byte("12345"), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.Symlink("nowhere", filepath.Join(root, "z.wav")); err != nil {
		t.Fatal(err)
	}
	found, left, err := Find(root, []string{"**/*.wav", "n/*.wav"}, []string{"**/test.wav"}, []string{filepath.Join(root, "out")})
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, f := range found {
		names = append(names, f.Path)
		if f.Bytes != 5 || f.ModifiedNS == 0 {
			t.Errorf("%+v", f)
		}
	}
	if want := []string{"a.wav", "b.wav", "n/c.wav"}; !slices.Equal(names, want) {
		t.Errorf("found %v, want %v", names, want)
	}
	if want := []LeftOut{{"n/test.wav", `excluded by "**/test.wav"`}, {"z.wav", "a link to nothing"}}; !slices.Equal(left, want) {
		t.Errorf("left out %v, want %v", left, want)
	}
	if found, _, err := Find(root, []string{"nowhere/*.wav"}, nil, nil); err != nil || len(found) > 0 {
		t.Errorf("%v, %v", found, err)
	}
}

// draft is one of n takes of sizes 1, 2, 3 ...
func draft(n, parts int) Draft {
	d := Draft{Version: "1", Job: "j", Root: ".", Folder: "out", Parts: parts, Recipes: []Recipe{{Rig: "r", RigSHA256: "1", Options: json.RawMessage(`{ "a" : 1 }`)}}}
	for k := range n {
		name := fmt.Sprintf("take%05d", n-1-k)
		d.Takes = append(d.Takes, Take{Key: name, Paths: []string{name + ".wav"}, Files: []File{{Path: name + ".wav", Bytes: int64(k + 1), ModifiedNS: int64(k)}}})
	}
	return d
}

func TestThePlanIsSortedAndTheSameForTheSameFolder(t *testing.T) {
	d := draft(20, 4)
	a, err := NewPlan(d)
	if err != nil {
		t.Fatal(err)
	}
	slices.Reverse(d.Takes)
	for k := range d.Takes {
		d.Takes[k].Files[0].ModifiedNS = 77 // a copy on another disk
	}
	d.Recipes[0].Options = json.RawMessage("{\"a\":1}")
	b, err := NewPlan(d)
	if err != nil {
		t.Fatal(err)
	}
	var x, y bytes.Buffer
	if err := a.Write(&x); err != nil {
		t.Fatal(err)
	}
	if err := b.Write(&y); err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(x.Bytes(), y.Bytes()) || !slices.IsSortedFunc(a.Takes, func(p, q Take) int { return strings.Compare(p.Key, q.Key) }) {
		t.Error("the order in which takes are found changes the plan")
	}
	back, err := ReadPlan("plan", x.Bytes())
	if err != nil || back.PlanID != a.PlanID || back.Parts != 4 {
		t.Fatalf("%+v, %v", back, err)
	}
	for _, change := range []struct{ from, to, want string }{
		{`"bytes":3}`, `"bytes":4}`, "plan_id"}, {`"a":1`, `"a":2`, "plan_id"}, {`"part":3`, `"part":2`, "is in part 2"},
		{`"parts":4`, `"parts":5`, "part"}, {"left_out", "left", "unknown field"}, {PlanSchema, "alidade-plan/9", "want"},
		{"]}\n", "", "not a plan"}, {"]}\n", "]}{}", "more after"}, {`"path":"take00003.wav"`, `"path":"../x.wav"`, "outside the root"},
	} {
		text := strings.Replace(x.String(), change.from, change.to, 1)
		if text == x.String() {
			t.Fatalf("%q is not in the plan", change.from)
		}
		if _, err := ReadPlan("plan", []byte(text)); err == nil || !strings.Contains(err.Error(), change.want) {
			t.Errorf("%q for %q: %v, want %q", change.to, change.from, err, change.want)
		}
	}
}

// Graham 1969, theorem 2: the longest part of longest-first is at most
// 4/3 - 1/(3n) of the best one, which is at least the mean and the largest take.
func TestPartsAreBalancedByBytes(t *testing.T) {
	for _, n := range []int{1, 3, 7, 8, 40} {
		p, err := NewPlan(draft(200, n))
		if err != nil {
			t.Fatal(err)
		}
		load := make([]int64, n)
		var sum int64
		for _, take := range p.Takes {
			load[take.Part] += take.Bytes()
			sum += take.Bytes()
		}
		if best := max(float64(sum)/float64(n), 200); float64(slices.Max(load)) > best*(4.0/3-1/(3*float64(n)))+1e-9 {
			t.Errorf("%d parts: %v", n, load)
		}
	}
	for _, n := range []int{-1, 201, 1001} {
		p, err := NewPlan(draft(200, 1))
		if err == nil {
			err = p.Divide(n)
		}
		if err == nil {
			t.Errorf("%d parts of 200 takes", n)
		}
	}
}

func TestTakesThatWouldGetInEachOthersWayAreRefused(t *testing.T) {
	for _, c := range []struct {
		a, b, want string
	}{
		{"x", "x", "two takes of that name"}, {"Roof", "roof", "differ only in case"}, {"a", "a/b", "would lie in that of the other"},
		{"summary.json", "z", "a file of the batch itself"}, {".x", "z", "begins with a dot"}, {"../x", "z", "dot"}, {"a//b", "z", "not the name of a folder"},
	} {
		d := draft(2, 1)
		d.Takes[0].Key, d.Takes[1].Key = c.a, c.b
		if _, err := NewPlan(d); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q and %q: %v, want %q", c.a, c.b, err, c.want)
		}
	}
}

func TestAPlanOfTwentyThousandTakesIsQuickAndSmall(t *testing.T) {
	var before, after runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&before)
	begun := time.Now()
	p, err := NewPlan(draft(20_000, 1000))
	if err != nil {
		t.Fatal(err)
	}
	var text bytes.Buffer
	if err := p.Write(&text); err != nil {
		t.Fatal(err)
	}
	if _, err := ReadPlan("plan", text.Bytes()); err != nil {
		t.Fatal(err)
	}
	took := time.Since(begun)
	runtime.ReadMemStats(&after)
	t.Logf("made, written and read in %s, %d bytes, %d MiB allocated in all", took, text.Len(), (after.TotalAlloc-before.TotalAlloc)>>20)
	if took > 5*time.Second || (after.TotalAlloc-before.TotalAlloc)>>20 > 200 {
		t.Errorf("%s, %d MiB", took, (after.TotalAlloc-before.TotalAlloc)>>20)
	}
}

func TestThePartComesFromTheFlagOrTheEngine(t *testing.T) {
	for _, c := range []struct {
		flag  string
		parts int
		env   map[string]string
		want  int
		fault string
	}{
		{"", 1, nil, -1, ""}, {"", 4, nil, -1, ""}, {"2/4", 4, nil, 1, ""},
		{"", 4, map[string]string{"SLURM_ARRAY_TASK_ID": "3"}, 3, ""},
		{"", 4, map[string]string{"JOB_COMPLETION_INDEX": "0"}, 0, ""},
		{"", 4, map[string]string{"AWS_BATCH_JOB_ARRAY_INDEX": "1"}, 1, ""},
		{"", 4, map[string]string{"BATCH_TASK_INDEX": "2"}, 2, ""},
		{"", 4, map[string]string{"LSB_JOBINDEX": "4"}, 3, ""},  // counts from 1
		{"", 4, map[string]string{"LSB_JOBINDEX": "0"}, -1, ""}, // no array
		{"", 4, map[string]string{"SGE_TASK_ID": "undefined"}, -1, ""},
		{"", 4, map[string]string{"SGE_TASK_ID": "1", "SLURM_ARRAY_TASK_ID": "0"}, 0, ""}, // they agree
		{"", 4, map[string]string{"SGE_TASK_ID": "1", "SLURM_ARRAY_TASK_ID": "1"}, 0, "say which with --part"},
		{"3/4", 4, map[string]string{"SGE_TASK_ID": "1", "SLURM_ARRAY_TASK_ID": "1"}, 2, ""}, // the flag wins
		{"", 4, map[string]string{"SLURM_ARRAY_TASK_ID": "4"}, 0, "the plan has 4 parts"},
		{"", 4, map[string]string{"PBS_ARRAY_INDEX": "x"}, 0, "not an index"},
		{"2/3", 4, nil, 0, "the plan has 4 parts"}, {"0/4", 4, nil, 0, "want K/N"}, {"5/4", 4, nil, 0, "want K/N"}, {"two", 4, nil, 0, "want K/N"},
	} {
		part, _, err := PartOf(c.flag, c.parts, func(name string) string { return c.env[name] })
		switch {
		case c.fault == "" && (err != nil || part != c.want):
			t.Errorf("%q, %v: part %d, %v, want %d", c.flag, c.env, part, err, c.want)
		case c.fault != "" && (err == nil || !strings.Contains(err.Error(), c.fault)):
			t.Errorf("%q, %v: %v, want %q", c.flag, c.env, err, c.fault)
		}
	}
	for want, env := range map[int]map[string]string{0: nil, 5: {"SLURM_RESTART_COUNT": "5"}, 2: {"AWS_BATCH_JOB_ATTEMPT": "3"}} {
		if got := Restarts(func(name string) string { return env[name] }); got != want {
			t.Errorf("%v: %d restarts, want %d", env, got, want)
		}
	}
}

func FuzzReadPlan(f *testing.F) {
	p, err := NewPlan(draft(3, 2))
	if err != nil {
		f.Fatal(err)
	}
	var text bytes.Buffer
	if err := p.Write(&text); err != nil {
		f.Fatal(err)
	}
	f.Add(text.Bytes())
	f.Add([]byte(`{"schema":"alidade-plan/1","takes":[{"key":"a"}]}`))
	f.Fuzz(func(t *testing.T, data []byte) {
		if p, err := ReadPlan("plan", data); err == nil && p.PlanID == "" {
			t.Error("a plan without an id was taken")
		}
	})
}
