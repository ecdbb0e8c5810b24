package batch

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"
)

// bench is a folder of takes and a plan for it. Its work writes the take in
// capitals, and fails where the take says so.
type bench struct {
	t         *testing.T
	root, out string
	plan      *Plan
}

func newBench(t *testing.T, takes map[string]string) *bench {
	t.Helper()
	dir := t.TempDir()
	b := &bench{t: t, root: filepath.Join(dir, "takes"), out: filepath.Join(dir, "out")}
	for name, text := range takes {
		b.put(name, text)
	}
	b.replan(1)
	return b
}

func (b *bench) put(name, text string) {
	b.t.Helper()
	path := filepath.Join(b.root, name)
	if err := errors.Join(os.MkdirAll(filepath.Dir(path), 0o777), os.WriteFile(path, []byte(text), 0o666)); err != nil {
		b.t.Fatal(err)
	}
}

func (b *bench) replan(parts int) {
	b.t.Helper()
	plan, err := planOf(b.root, parts, `{"x":1}`)
	if err != nil {
		b.t.Fatal(err)
	}
	b.plan = plan
}

func planOf(root string, parts int, options string) (*Plan, error) {
	found, left, err := Find(root, []string{"**/*.wav"}, nil, nil)
	if err != nil {
		return nil, err
	}
	d := Draft{Version: "1", Job: "job.yaml", Root: ".", Folder: "out", LeftOut: left, Parts: parts,
		Recipes: []Recipe{{Rig: "rig.yaml", RigSHA256: "ab", Options: json.RawMessage(options), MemoryMiB: 10}}}
	for _, f := range found {
		d.Takes = append(d.Takes, Take{Key: strings.TrimSuffix(f.Path, ".wav"), Paths: []string{f.Path}, Files: []File{f}})
	}
	return NewPlan(d)
}

func (b *bench) settings() Settings {
	return Settings{Root: b.root, Out: b.out, Workers: 2, Part: -1, Now: time.Now}
}

func (b *bench) run(do Do, s Settings) (Tally, error) {
	b.t.Helper()
	return Run(b.t.Context(), b.plan, do, s, Observer{})
}

// all is every file of the output folder with its text, the ledgers aside.
func (b *bench) all() map[string]string { return treeOf(b.t, b.out) }

func treeOf(t *testing.T, out string) map[string]string {
	t.Helper()
	list := map[string]string{}
	err := filepath.WalkDir(out, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		rel, _ := filepath.Rel(out, name)
		if rel == ledgerFolder {
			return fs.SkipDir
		}
		if d.IsDir() {
			return nil
		}
		text, err := os.ReadFile(name)
		list[filepath.ToSlash(rel)] = string(text)
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return list
}

type causeError struct{ cause string }

func (e causeError) Error() string { return "the take is " + e.cause }
func (e causeError) Cause() string { return e.cause }

// capitals is the work of a bench.
func capitals(ctx context.Context, a Assignment) (Report, error) {
	text, err := os.ReadFile(a.Paths()[0])
	if err != nil {
		return Report{}, err
	}
	a.Step("steering", 1, 2)
	sum, _, err := hashFile(a.Paths()[0])
	if err != nil {
		return Report{}, err
	}
	gain := float64(len(text))
	r := Report{Digests: map[string]string{a.Paths()[0]: sum}, Figures: map[string]*float64{"gain_db": &gain, "unknown_db": nil}}
	if err := os.WriteFile(filepath.Join(a.Folder, "track"), bytes.ToUpper(text), 0o666); err != nil {
		return Report{}, err
	}
	switch string(text) {
	case "bad":
		return Report{}, causeError{"unreadable"}
	case "panic":
		panic("index out of range")
	case "short":
		r.Missed = "3 dB, want 5 dB"
	case "slow":
		<-ctx.Done()
		return Report{}, ctx.Err()
	}
	return r, nil
}

func TestEveryTakeIsMadeAndBadOnesAreNamed(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "n/b.wav": "two", "c.wav": "bad", "d.wav": "panic", "e.wav": "short"})
	tally, err := b.run(capitals, b.settings())
	want := Tally{Takes: 5, Done: 2, Missed: 1, Failed: 2, Work: Work{Takes: 5, Bytes: 3 + 3 + 3 + 5 + 5}}
	if tally.Work.Spent <= 0 {
		t.Errorf("%s of work", tally.Work.Spent)
	}
	tally.Work.Spent = 0
	if err != nil || tally != want || !tally.Bad() {
		t.Fatalf("%+v, %v, want %+v", tally, err, want)
	}
	all := b.all()
	if all["a/track"] != "ONE" || all["n/b/track"] != "TWO" || all["e/track"] != "SHORT" {
		t.Errorf("tracks %q, %q, %q", all["a/track"], all["n/b/track"], all["e/track"])
	}
	for _, failed := range []string{"c/track", "d/track"} {
		if _, there := all[failed]; there {
			t.Errorf("%s: a failed take left an output", failed)
		}
	}
	for key, want := range map[string][3]string{
		"a": {"done", "", ""}, "c": {"failed", "unreadable", "the take is unreadable"},
		"d": {"failed", "crash", "index out of range"}, "e": {"missed", "limit", "3 dB"},
	} {
		o, err := ReadOutcome(b.out, key)
		if err != nil || string(o.State) != want[0] || o.Cause != want[1] || !strings.Contains(o.Error, want[2]) {
			t.Errorf("%s: %+v, %v, want %v", key, o, err, want)
		}
	}
	if _, err := os.Stat(filepath.Join(b.out, stagingFolder)); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("staging folder left: %v", err)
	}
}

func TestResultsDoNotDependOnWorkersPartsAndInterruptions(t *testing.T) {
	takes := map[string]string{"x.wav": "bad"}
	for k := range 23 {
		takes[fmt.Sprintf("night%d/take%02d.wav", k%3, k)] = strings.Repeat("abc", k+1)
	}
	b := newBench(t, takes)
	s := b.settings()
	s.Workers = 1
	if _, err := b.run(capitals, s); err != nil {
		t.Fatal(err)
	}
	want := b.all()
	for _, parts := range []int{1, 3, 8} {
		other := &bench{t: t, root: b.root, out: filepath.Join(t.TempDir(), "out")}
		other.replan(parts)
		if other.plan.PlanID != b.plan.PlanID {
			t.Errorf("%d parts: another plan_id", parts)
		}
		made := 0
		for part := range parts {
			s := other.settings()
			s.Part = part
			tally, err := other.run(capitals, s)
			if err != nil {
				t.Fatal(err)
			}
			made += tally.Done + tally.Failed
		}
		if got := other.all(); made != len(takes) || !equalTrees(got, want) {
			t.Errorf("%d parts: %d takes made, %d files, want %d and the %d files of one worker, byte for byte", parts, made, len(got), len(takes), len(want))
		}
	}
}

func equalTrees(a, b map[string]string) bool {
	if len(a) != len(b) {
		return false
	}
	for name, text := range a {
		if b[name] != text {
			return false
		}
	}
	return true
}

func TestARerunMakesOnlyWhatIsNotDone(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two", "c.wav": "bad"})
	var made []string
	var mu sync.Mutex
	do := func(ctx context.Context, a Assignment) (Report, error) {
		mu.Lock()
		made = append(made, a.Take.Key)
		mu.Unlock()
		return capitals(ctx, a)
	}
	again := func(what string, s Settings, want ...string) {
		t.Helper()
		made = nil
		if _, err := b.run(do, s); err != nil {
			t.Fatalf("%s: %v", what, err)
		}
		slices.Sort(made)
		if !slices.Equal(made, want) {
			t.Errorf("%s: made %v, want %v", what, made, want)
		}
	}
	s := b.settings()
	again("first", s, "a", "b", "c")
	again("again", s)
	retry := s
	retry.RetryFailed = true
	again("--retry-failed", retry, "c")

	// Without ledgers the folders say the same.
	if err := os.RemoveAll(filepath.Join(b.out, ledgerFolder)); err != nil {
		t.Fatal(err)
	}
	again("without ledgers", s)

	// Touched: the same content holds. Changed: made again, old outputs gone.
	later := time.Now().Add(time.Hour)
	if err := os.Chtimes(filepath.Join(b.root, "a.wav"), later, later); err != nil {
		t.Fatal(err)
	}
	again("touched", s)
	b.put("a.wav", "uno")
	if err := os.Chtimes(filepath.Join(b.root, "a.wav"), later.Add(1), later.Add(1)); err != nil {
		t.Fatal(err)
	}
	again("another text of the same length", s, "a")
	if got := b.all()["a/track"]; got != "UNO" {
		t.Errorf("track %q after the change, want UNO", got)
	}

	// Another recipe makes all again; an outcome that was damaged is made again.
	plan, err := planOf(b.root, 1, `{"x":2}`)
	if err != nil {
		t.Fatal(err)
	}
	b.plan = plan
	again("another option", s, "a", "b", "c")
	if err := os.WriteFile(filepath.Join(b.out, "b", outcomeName), []byte("{"), 0o666); err != nil {
		t.Fatal(err)
	}
	again("damaged outcome", s, "b")
	if err := os.RemoveAll(filepath.Join(b.out, "a")); err != nil {
		t.Fatal(err)
	}
	again("deleted result", s, "a")
}

func TestATakeThatChangesOrVanishesIsNamed(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two", "c.wav": "three", "d.wav": "four", "e.wav": "five"})
	if err := os.Remove(filepath.Join(b.root, "a.wav")); err != nil { // before its turn
		t.Fatal(err)
	}
	b.put("b.wav", "another length")
	do := func(ctx context.Context, a Assignment) (Report, error) {
		r, err := capitals(ctx, a)
		switch a.Take.Key {
		case "c": // grows while it is read
			b.put("c.wav", "three and more")
		case "d": // goes while it is read
			return r, errors.Join(errors.New("read: no more"), os.Remove(a.Paths()[0]))
		}
		return r, err
	}
	tally, err := b.run(do, b.settings())
	if err != nil || tally.Failed != 4 || tally.Done != 1 {
		t.Fatalf("%+v, %v", tally, err)
	}
	for key, want := range map[string][2]string{
		"a": {CauseVanished, "a.wav: is not there any more"}, "b": {CauseChanged, "b.wav: changed from 3 to 14 bytes since the plan was made"},
		"c": {CauseChanged, "c.wav: changed from 5 to 14 bytes while it was read"}, "d": {CauseVanished, "d.wav: vanished while it was read"},
	} {
		o, err := ReadOutcome(b.out, key)
		if err != nil || o.Cause != want[0] || !strings.Contains(o.Error, want[1]) {
			t.Errorf("%s: %+v, %v, want %v", key, o, err, want)
		}
	}
	// Files that are back as planned are made, without asking.
	b.put("a.wav", "one")
	b.put("b.wav", "two")
	if tally, err = b.run(capitals, b.settings()); err != nil || tally.Done != 2 || tally.BadStanding != 2 {
		t.Errorf("after their return: %+v, %v, want 2 done, 2 still bad", tally, err)
	}
}

func TestATakeThatTakesTooLongFailsAndTheOthersGoOn(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "slow", "b.wav": "two"})
	b.plan.TimeoutS = 0.05
	tally, err := b.run(capitals, b.settings())
	o, oerr := ReadOutcome(b.out, "a")
	if err != nil || oerr != nil || tally.Done != 1 || o.Cause != CauseTimeout || o.Error != "not done after 0.05 s" {
		t.Errorf("%+v, %v; %+v, %v", tally, err, o, oerr)
	}
}

func TestAnInterruptLeavesNothingHalfMade(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "slow", "c.wav": "slow"})
	cause := errors.New("asked to end")
	ctx, cancel := context.WithCancelCause(t.Context())
	var started atomic.Int32
	do := func(ctx context.Context, a Assignment) (Report, error) {
		if a.Take.Key != "a" && started.Add(1) == 2 {
			cancel(cause)
		}
		return capitals(ctx, a)
	}
	s := b.settings()
	s.Workers = 3
	begun := time.Now()
	_, err := Run(ctx, b.plan, do, s, Observer{})
	if !errors.Is(err, cause) || time.Since(begun) > 2*time.Second {
		t.Errorf("%v after %s, want the cause within 2 s", err, time.Since(begun))
	}
	for name := range b.all() {
		if !strings.HasPrefix(name, "a/") {
			t.Errorf("%s is left", name)
		}
	}
}

func TestStorageThatFailsLeavesTakesOpen(t *testing.T) {
	for _, c := range []struct {
		name string
		err  error
		open int // takes at least that stay open
		stop bool
	}{
		{"full", syscall.ENOSPC, 1, true}, {"read only", syscall.EROFS, 1, true},
		{"stale input", syscall.ESTALE, 1, false}, {"bad sector", syscall.EIO, 1, false},
	} {
		b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two", "c.wav": "three"})
		do := func(ctx context.Context, a Assignment) (Report, error) {
			if a.Take.Key == "a" {
				return Report{}, &fs.PathError{Op: "write", Path: "track", Err: c.err}
			}
			return capitals(ctx, a)
		}
		s := b.settings()
		s.Workers = 1
		tally, err := b.run(do, s)
		var trouble *TroubleError
		if !errors.As(err, &trouble) || !errors.Is(err, c.err) || tally.Failed != 0 || !strings.Contains(err.Error(), "a") {
			t.Errorf("%s: %+v, %v", c.name, tally, err)
		}
		if want := 2; !c.stop && tally.Done != want || c.stop && tally.Done != 0 {
			t.Errorf("%s: %d takes done after it", c.name, tally.Done)
		}
		if tally, err = b.run(capitals, s); err != nil || tally.Done+tally.Standing != 3 {
			t.Errorf("%s, rerun: %+v, %v", c.name, tally, err)
		}
	}
}

func TestAFolderOfSomebodyElseIsNotTouched(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one"})
	mine := filepath.Join(b.out, "a", "notes.txt")
	if err := errors.Join(os.MkdirAll(filepath.Dir(mine), 0o777), os.WriteFile(mine, []byte("mine"), 0o666)); err != nil {
		t.Fatal(err)
	}
	_, err := b.run(capitals, b.settings())
	var occupied *OccupiedError
	if !errors.As(err, &occupied) || !sameBytes(mine, []byte("mine")) {
		t.Errorf("%v", err)
	}
}

func TestMemoryOfTakesInWorkStaysWithinTheBudget(t *testing.T) {
	takes := map[string]string{}
	for k := range 12 {
		takes[fmt.Sprintf("%02d.wav", k)] = "text"
	}
	b := newBench(t, takes) // 10 MiB a take
	var now, most atomic.Int32
	do := func(ctx context.Context, a Assignment) (Report, error) {
		n := now.Add(1)
		for {
			m := most.Load()
			if n <= m || most.CompareAndSwap(m, n) {
				break
			}
		}
		time.Sleep(5 * time.Millisecond)
		now.Add(-1)
		return capitals(ctx, a)
	}
	for _, c := range []struct{ budget, want int32 }{{25, 2}, {5, 1}, {0, 4}} {
		most.Store(0)
		s := b.settings()
		s.Out = filepath.Join(t.TempDir(), "out")
		s.Workers, s.MemoryMiB = 4, int(c.budget)
		if tally, err := b.run(do, s); err != nil || tally.Done != 12 {
			t.Fatalf("%+v, %v", tally, err)
		}
		if got := most.Load(); got > c.want || c.want > 1 && got < 2 {
			t.Errorf("budget %d MiB: %d takes of 10 MiB at once, want %d", c.budget, got, c.want)
		}
	}
}

func TestTwoRunsOnOneFolderMakeEachTakeOnce(t *testing.T) {
	takes := map[string]string{}
	for k := range 40 {
		takes[fmt.Sprintf("%02d.wav", k)] = strings.Repeat("x", k+1)
	}
	b := newBench(t, takes)
	var made atomic.Int32
	do := func(ctx context.Context, a Assignment) (Report, error) {
		made.Add(1)
		time.Sleep(2 * time.Millisecond)
		return capitals(ctx, a)
	}
	var tallies [2]Tally
	var wait sync.WaitGroup
	for k := range tallies {
		wait.Add(1)
		go func() {
			defer wait.Done()
			var err error
			tallies[k], err = Run(t.Context(), b.plan, do, b.settings(), Observer{})
			if err != nil {
				t.Errorf("run %d: %v", k, err)
			}
		}()
	}
	wait.Wait()
	for k, y := range tallies {
		// Of a folder that two share, each counts its own.
		if y.Work.Takes != y.Done || y.Work.Spent < time.Duration(y.Done)*2*time.Millisecond || (y.Work.Bytes > 0) != (y.Done > 0) {
			t.Errorf("run %d: %+v", k, y)
		}
	}
	all, err := Throughput(b.out)
	if a, c := tallies[0].Work, tallies[1].Work; err != nil || all.Takes != a.Takes+c.Takes || all.Bytes != a.Bytes+c.Bytes || (all.Spent-a.Spent-c.Spent).Abs() > time.Millisecond {
		t.Errorf("%+v and %+v, the ledgers have %+v (%v)", a, c, all, err)
	}
	sum := tallies[0].Done + tallies[1].Done
	if sum != 40 || tallies[0].Open+tallies[1].Open != 0 {
		t.Errorf("%+v and %+v: committed %d times, want 40", tallies[0], tallies[1], sum)
	}
	if n := made.Load(); n > 50 {
		t.Errorf("work was done %d times for 40 takes: the runs did not share it", n)
	}
	alone := &bench{t: t, root: b.root, out: filepath.Join(t.TempDir(), "out"), plan: b.plan}
	if _, err := alone.run(capitals, alone.settings()); err != nil {
		t.Fatal(err)
	}
	if !equalTrees(b.all(), alone.all()) {
		t.Error("the folder differs from that of one run")
	}
}
