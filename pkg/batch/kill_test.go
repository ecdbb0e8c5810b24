package batch

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"hash/crc32"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// The environment in which this test binary carries out a plan and nothing
// else.
const childEnv = "ALIDADE_BATCH_CHILD"

func TestMain(m *testing.M) {
	if dir := os.Getenv(childEnv); dir != "" {
		if err := child(dir); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		os.Exit(0)
	}
	os.Exit(m.Run())
}

// child carries out the plan of a folder slowly, writing each track bit by bit.
func child(dir string) error {
	text, err := os.ReadFile(filepath.Join(dir, "plan.json"))
	if err != nil {
		return err
	}
	plan, err := ReadPlan("plan.json", text)
	if err != nil {
		return err
	}
	_, err = Run(context.Background(), plan, slowly, Settings{Root: filepath.Join(dir, "takes"), Out: filepath.Join(dir, "out"), Workers: 2, Part: -1, Now: time.Now}, Observer{})
	return err
}

func slowly(ctx context.Context, a Assignment) (Report, error) {
	text, err := os.ReadFile(a.Paths()[0])
	if err != nil {
		return Report{}, err
	}
	f, err := os.Create(filepath.Join(a.Folder, "track"))
	if err != nil {
		return Report{}, err
	}
	defer f.Close()
	for _, c := range strings.ToUpper(string(text)) {
		time.Sleep(200 * time.Microsecond)
		if _, err := f.WriteString(string(c)); err != nil {
			return Report{}, err
		}
	}
	gain := float64(len(text))
	return Report{Figures: map[string]*float64{"gain_db": &gain}}, f.Sync()
}

// A whole process group is killed at random moments; the takes in work are lost
// and nothing else. ALIDADE_LONG=1 kills a hundred times.
func TestKilledAtRandomMomentsEveryTakeIsThereOnce(t *testing.T) {
	const takes = 60
	kills := 10
	if os.Getenv("ALIDADE_LONG") == "1" {
		kills = 100
	}
	dir := t.TempDir()
	root := filepath.Join(dir, "takes")
	if err := os.Mkdir(root, 0o777); err != nil {
		t.Fatal(err)
	}
	for k := range takes {
		if err := os.WriteFile(filepath.Join(root, fmt.Sprintf("take%02d.wav", k)), []byte(strings.Repeat("abcde", k%7+5)), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	plan, err := planOf(root, 1, `{}`)
	if err != nil {
		t.Fatal(err)
	}
	if err := savePlan(dir, plan); err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(7, 1))
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	start := func() *exec.Cmd {
		cmd := exec.Command(self)
		cmd.Env = append(os.Environ(), childEnv+"="+dir)
		cmd.SysProcAttr = &syscall.SysProcAttr{Setpgid: true}
		cmd.Stderr = os.Stderr
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		return cmd
	}
	out := filepath.Join(dir, "out")
	before := map[string]time.Time{}
	for k := range kills {
		if k > 0 && k%10 == 0 { // begin anew
			if err := os.RemoveAll(out); err != nil {
				t.Fatal(err)
			}
			before = map[string]time.Time{}
		}
		cmd := start()
		time.Sleep(time.Duration(rng.IntN(90_000)) * time.Microsecond)
		if err := syscall.Kill(-cmd.Process.Pid, syscall.SIGKILL); err != nil {
			t.Fatal(err)
		}
		_ = cmd.Wait()
		// What was committed before stays as it was.
		now := map[string]time.Time{}
		for _, take := range plan.Takes {
			info, err := os.Stat(filepath.Join(out, take.Key, outcomeName))
			if err != nil {
				continue
			}
			now[take.Key] = info.ModTime()
			if o, err := ReadOutcome(out, take.Key); err != nil || o.Verify(out) != nil {
				t.Fatalf("kill %d: %s has its final name and is not whole: %v", k, take.Key, err)
			}
		}
		for key, at := range before {
			if !now[key].Equal(at) {
				t.Fatalf("kill %d: %s was done and is made again", k, key)
			}
		}
		before = now
	}
	cmd := start()
	if err := cmd.Wait(); err != nil {
		t.Fatal(err)
	}
	s, err := Merge(plan, MergeSettings{Out: out, Verify: true})
	if err != nil || !s.Complete() || s.Done != takes || len(s.Strays) > 0 {
		t.Fatalf("%+v, %v", s, err)
	}
	alone := filepath.Join(t.TempDir(), "out")
	if _, err := Run(t.Context(), plan, slowly, Settings{Root: root, Out: alone, Workers: 8, Part: -1, Now: time.Now}, Observer{}); err != nil {
		t.Fatal(err)
	}
	if got := treeOf(t, out); !equalTrees(got, treeOf(t, alone)) {
		t.Errorf("%d files, not those of an undisturbed run, or litter among them", len(got))
	}
	// Each committed once per ledger: at most the takes of one kill, committed
	// and not yet noted, are missing there.
	lines, _, err := ReadLedgers(out)
	if err != nil {
		t.Fatal(err)
	}
	times := map[string]int{}
	for _, l := range lines {
		if l.Event == EventCommitted {
			if times[l.Take]++; times[l.Take] > 1 {
				t.Errorf("%s was committed twice", l.Take)
			}
		}
	}
}

// savePlan writes the plan into the folder.
func savePlan(dir string, plan *Plan) error {
	f, err := os.Create(filepath.Join(dir, "plan.json"))
	if err != nil {
		return err
	}
	if err := plan.Write(f); err != nil {
		return err
	}
	return f.Close()
}

// A full disk is met for real, in a small file system of its own.
func TestAFullDiskStopsTheRunAndRoomLetsItGoOn(t *testing.T) {
	if os.Getuid() != 0 {
		t.Skip("mounting a small file system needs root")
	}
	takes := map[string]string{}
	for k := range 6 {
		takes[fmt.Sprintf("%d.wav", k)] = strings.Repeat("x", 100_000)
	}
	b := newBench(t, takes)
	if err := os.Mkdir(b.out, 0o777); err != nil {
		t.Fatal(err)
	}
	if err := syscall.Mount("tmpfs", b.out, "tmpfs", 0, "size=400k"); err != nil {
		t.Skipf("no tmpfs here: %v", err)
	}
	defer func() {
		if err := syscall.Unmount(b.out, 0); err != nil {
			t.Error(err)
		}
	}()
	tally, err := b.run(capitals, b.settings())
	var trouble *TroubleError
	if !errors.As(err, &trouble) || tally.Done == 0 || tally.Failed > 0 || tally.Open == 0 {
		t.Fatalf("%+v, %v", tally, err)
	}
	for key := range b.all() {
		if strings.HasPrefix(key, stagingFolder) {
			t.Errorf("%s is left", key)
		}
	}
	if err := syscall.Mount("tmpfs", b.out, "tmpfs", syscall.MS_REMOUNT, "size=4m"); err != nil {
		t.Fatal(err)
	}
	again, err := b.run(capitals, b.settings())
	if err != nil || again.Standing != tally.Done || again.Standing+again.Done != 6 {
		t.Errorf("with room: %+v, %v", again, err)
	}
	// Read only: said before any work.
	if err := syscall.Mount("tmpfs", b.out, "tmpfs", syscall.MS_REMOUNT|syscall.MS_RDONLY, ""); err != nil {
		t.Fatal(err)
	}
	b.put("7.wav", "more")
	b.replan(1)
	if _, err = b.run(capitals, b.settings()); !errors.As(err, &trouble) || !strings.Contains(err.Error(), "read-only") {
		t.Errorf("read only: %v", err)
	}
}

func TestALedgerPassesOverDamagedLines(t *testing.T) {
	out := t.TempDir()
	l := &Ledger{out: out, run: "r"}
	for _, take := range []string{"a", "b"} {
		if err := l.Append(Line{At: "2026-01-01T00:00:00Z", Event: EventCommitted, Take: take, State: Done}); err != nil {
			t.Fatal(err)
		}
	}
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	name := filepath.Join(out, ledgerFolder, "r.jsonl")
	text, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	// CRC-32C of "123456789" is e3069283: RFC 3720 names the polynomial, the
	// value is common practice.
	if got := fmt.Sprintf("%08x", crc32.Checksum([]byte("123456789"), castagnoli)); got != "e3069283" {
		t.Errorf("CRC-32C %s", got)
	}
	changed := strings.Replace(string(text), `"take":"a"`, `"take":"c"`, 1)
	if err := os.WriteFile(name, []byte(changed+string(text[:40])), 0o666); err != nil {
		t.Fatal(err)
	}
	lines, damaged, err := ReadLedgers(out)
	if err != nil || damaged != 2 || len(lines) != 1 || lines[0].Take != "b" {
		t.Errorf("%+v, %d damaged, %v", lines, damaged, err)
	}
	var s sealedLine
	if err := json.Unmarshal([]byte(strings.SplitN(string(text), "\n", 2)[0]), &s); err != nil || len(s.Sum) != 8 {
		t.Errorf("%+v, %v", s, err)
	}
}
