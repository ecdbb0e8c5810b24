//go:build linux

package main

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"alidade/pkg/batch"
)

// long says whether the long forms of tests run.
func long() bool { return os.Getenv("ALIDADE_LONG") == "1" }

// newNight is a yard with a job and n good takes in several formats, of several
// lengths from so many frames.
func newNight(t *testing.T, n, frames int) *yard {
	t.Helper()
	y := newYard(t)
	y.put("night.yaml", []byte("rig: rig.yaml\ntakes: [\"takes/**/*.wav\"]\nsteer: {toward: 60, noise: 0..0.2}\n"))
	for k := range n {
		length := frames + 300*(k%17)
		var take []byte
		switch k % 4 {
		case 0:
			take = good(4, length)
		case 1:
			take = riff("RIFF", guid(4, "\x01\x00\x00\x00\x00\x00\x10\x00\x80\x00\x00\xaa\x00\x38\x9b\x71"), hiss(4, length))
		case 2: // 32 bits, half as many frames
			take = riff("RIFF", format(1, 4, 48000, 32), body{"data", -1, hiss(4, length/2*2).data})
		default: // a header that promises more than there is
			take = riff("RIFF", format(1, 4, 48000, 16), body{"data", int64(16 * length), hiss(4, length).data})
		}
		y.put(fmt.Sprintf("takes/n%d/t%03d.wav", k%3, k), take)
	}
	return y
}

// batch runs a batch in the yard and returns its exit code and output.
func (y *yard) batch(args ...string) (code int, stdout, stderr string) {
	y.t.Helper()
	cmd := exec.Command("alidade", append([]string{"batch"}, args...)...)
	cmd.Dir = y.dir
	var out, errs bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &errs
	var exit *exec.ExitError
	if err := cmd.Run(); err != nil && !errors.As(err, &exit) {
		y.t.Fatal(err)
	}
	if strings.Contains(errs.String(), "panic:") {
		y.t.Errorf("a panic:\n%s", errs.String())
	}
	return cmd.ProcessState.ExitCode(), out.String(), errs.String()
}

// tree is every file of an output folder with its text, the ledgers aside.
func (y *yard) tree(out string) map[string]string {
	y.t.Helper()
	list := map[string]string{}
	root := y.at(out)
	err := filepath.WalkDir(root, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if d.Name() == ".ledger" {
			return fs.SkipDir
		}
		rel, err := filepath.Rel(root, name)
		if err != nil || d.IsDir() {
			return err
		}
		text, err := os.ReadFile(name)
		list[rel] = string(text)
		return err
	})
	y.check(err)
	return list
}

// same holds two output folders against each other, byte for byte.
func (y *yard) same(a, b string) {
	y.t.Helper()
	x, z := y.tree(a), y.tree(b)
	for name := range x {
		if text, ok := z[name]; !ok || text != x[name] {
			y.t.Errorf("%s of %s is missing or another in %s", name, a, b)
			return
		}
	}
	if len(x) != len(z) {
		y.t.Errorf("%d files in %s, %d in %s", len(x), a, len(z), b)
	}
}

// badTakes are takes that are bad in ten ways.
func badTakes() map[string][]byte {
	return map[string][]byte{
		"empty":    {},
		"stub":     []byte("RIFF"),
		"text":     []byte("this is a letter and no sound, although its name says so\n"),
		"few":      good(2, 4800),
		"silent":   riff("RIFF", format(1, 4, 48000, 16)),
		"noformat": riff("RIFF", hiss(4, 4800)),
		"noframes": riff("RIFF", format(1, 4, 48000, 16), body{"data", 0, nil}),
		"law":      riff("RIFF", format(7, 4, 48000, 8), hiss(4, 4800)),
		"twelve":   riff("RIFF", format(1, 4, 0, 16), hiss(4, 4800)),
		"nowhere":  riff("RIFF", format(1, 0, 48000, 16), hiss(4, 4800)),
	}
}

// ALIDADE_LONG=1 runs four hundred takes.
func TestANightWithBadTakesIsTheSameByAnyWorkersAndParts(t *testing.T) {
	n := 12
	if long() {
		n = 380
	}
	y := newNight(t, n, 9600)
	bad := badTakes()
	for k := range max(n/19, 10) { // one in twenty
		names := sortedKeys(bad)
		name := names[k%len(names)]
		y.put(fmt.Sprintf("takes/bad/%s%d.wav", name, k/len(names)), bad[name])
	}
	cmd := exec.Command("alidade", "batch", "night.yaml", "--workers", "2", "--memory-mib", "400", "--quiet")
	cmd.Dir = y.dir
	begun := time.Now()
	text, _ := cmd.Output()
	if code := cmd.ProcessState.ExitCode(); code != 3 {
		t.Fatalf("exit code %d\n%s", code, text)
	}
	peak := cmd.ProcessState.SysUsage().(*syscall.Rusage).Maxrss >> 10
	t.Logf("%d takes in %s, %d MiB at most", n+max(n/19, 10), time.Since(begun).Round(time.Millisecond), peak)
	if peak > 400 {
		t.Errorf("%d MiB of 400", peak)
	}
	if want := fmt.Sprintf("%d done, 0 missed a limit, %d failed", n, max(n/19, 10)); !strings.Contains(string(text), want) {
		t.Errorf("no %q in\n%s", want, text)
	}
	summary := y.tree("out")["summary.json"]
	for name := range bad {
		if !strings.Contains(summary, "takes/bad/"+name+"0: ") && !strings.Contains(summary, "takes/bad/"+name+"0.wav") {
			t.Errorf("the summary does not say what is wrong with %s", name)
		}
	}
	if code, _, errs := y.batch("night.yaml", "--workers", "1", "--out", "one", "--quiet"); code != 3 {
		t.Fatalf("exit code %d\n%s", code, errs)
	}
	y.same("out", "one")
	counts := []int{3}
	if long() {
		counts = append(counts, 8)
	}
	for _, parts := range counts {
		out := fmt.Sprintf("parts%d", parts)
		plan := exec.Command("alidade", "plan", "night.yaml", "--parts", fmt.Sprint(parts))
		plan.Dir = y.dir
		y.check(plan.Run())
		for k := range parts {
			if code, _, errs := y.batch("night.plan.json", "--part", fmt.Sprintf("%d/%d", k+1, parts), "--out", out, "--quiet", "--bad-takes-done"); code != 0 {
				t.Fatalf("part %d: exit code %d\n%s", k+1, code, errs)
			}
		}
		merge := exec.Command("alidade", "merge", "night.plan.json", "--out", out)
		merge.Dir = y.dir
		y.check(merge.Run())
		y.same("out", out)
	}
}

// The process group of a batch is killed at random moments. ALIDADE_LONG=1
// kills a hundred times over sixty takes.
func TestABatchKilledAtRandomMomentsEndsAsAnUndisturbedOne(t *testing.T) {
	n, kills := 10, 4
	if long() {
		n, kills = 60, 100
	}
	y := newNight(t, n, 24000)
	if code, _, errs := y.batch("night.yaml", "--out", "calm", "--quiet"); code != 0 {
		t.Fatalf("exit code %d\n%s", code, errs)
	}
	rng := rand.New(rand.NewPCG(11, 7))
	perRound := 3 // kills until the night begins anew
	for k := range kills {
		if k%perRound == 0 && k > 0 {
			if code, _, errs := y.batch("night.yaml", "--quiet"); code != 0 {
				t.Fatalf("after %d kills: exit code %d\n%s", k, code, errs)
			}
			y.same("calm", "out")
			y.check(os.RemoveAll(y.at("out")))
		}
		cmd := exec.Command("alidade", "batch", "night.yaml", "--workers", "2", "--quiet")
		cmd.Dir = y.dir
		cmd.SysProcAttr = &syscall.SysProcAttr{Setpgid: true}
		y.check(cmd.Start())
		time.Sleep(time.Duration(20+rng.IntN(150)) * time.Millisecond)
		_ = syscall.Kill(-cmd.Process.Pid, syscall.SIGKILL) // it may have ended
		_ = cmd.Wait()
	}
	code, out, errs := y.batch("night.yaml", "--quiet")
	if code != 0 || !strings.Contains(out, fmt.Sprintf("%d takes, %d done", n, n)) {
		t.Fatalf("exit code %d\n%s%s", code, out, errs)
	}
	y.same("calm", "out")
}

func TestTwoBatchesAtOnceShareTheNight(t *testing.T) {
	const n = 10
	y := newNight(t, n, 30000)
	type end struct {
		code      int
		out, errs string
	}
	ends := make(chan end, 2)
	for range 2 {
		go func() {
			code, out, errs := y.batch("night.yaml", "--workers", "1")
			ends <- end{code, out, errs}
		}()
	}
	committed := 0
	for range 2 {
		e := <-ends
		if e.code != 0 || !strings.Contains(e.out, fmt.Sprintf("%d takes, %d done", n, n)) {
			t.Errorf("exit code %d\n%s%s", e.code, e.out, e.errs)
		}
		committed += strings.Count(e.errs, `"state":"done"`)
	}
	if committed != n {
		t.Errorf("%d takes were committed %d times", n, committed)
	}
	if code, _, errs := y.batch("night.yaml", "--out", "alone", "--quiet"); code != 0 {
		t.Fatalf("exit code %d\n%s", code, errs)
	}
	y.same("alone", "out")
}

func TestABatchOnADiskThatFillsUpGoesOnWhenThereIsRoom(t *testing.T) {
	if os.Geteuid() != 0 {
		t.Skip("mounting a small file system needs root")
	}
	y := newNight(t, 12, 24000)
	y.check(os.Mkdir(y.at("out"), 0o777))
	if err := syscall.Mount("tmpfs", y.at("out"), "tmpfs", 0, "size=4m"); err != nil {
		t.Skipf("no tmpfs here: %v", err)
	}
	defer func() { y.check(syscall.Unmount(y.at("out"), 0)) }()
	code, _, errs := y.batch("night.yaml", "--need-room")
	if code != 75 || !strings.Contains(errs, "the outputs of 12 takes need up to ") || !strings.Contains(errs, "nothing was begun") || len(y.tree("out")) > 0 {
		t.Fatalf("without room for all: exit code %d\n%s", code, errs)
	}
	code, _, errs = y.batch("night.yaml")
	if !strings.Contains(errs, `"event":"short-of-room","need_bytes":`) {
		t.Errorf("not said ahead:\n%s", errs)
	}
	if code != 75 || !strings.Contains(errs, "no space left on device") || !strings.Contains(errs, "hint: free some room") {
		t.Fatalf("full: exit code %d\n%s", code, errs)
	}
	done := strings.Count(errs, `"state":"done"`)
	for name := range y.tree("out") {
		if strings.HasPrefix(name, ".") || strings.Contains(name, "partial") {
			t.Errorf("%s is left", name)
		}
	}
	y.check(syscall.Mount("tmpfs", y.at("out"), "tmpfs", syscall.MS_REMOUNT, "size=60m"))
	code, _, errs = y.batch("night.yaml", "--need-room")
	if code != 0 || done == 0 || !strings.Contains(errs, fmt.Sprintf(`"standing":%d`, done)) {
		t.Fatalf("with room: exit code %d, %d stood\n%s", code, done, errs)
	}
	before := y.tree("out")
	y.put("takes/more.wav", good(4, 24000))
	y.check(syscall.Mount("tmpfs", y.at("out"), "tmpfs", syscall.MS_REMOUNT|syscall.MS_RDONLY, ""))
	if code, _, errs = y.batch("night.yaml"); code != 75 || !strings.Contains(errs, "read-only file system") {
		t.Errorf("read only: exit code %d\n%s", code, errs)
	}
	if after := y.tree("out"); len(after) != len(before) {
		t.Errorf("%d files, %d before", len(after), len(before))
	}
}

func TestANightThatLosesFilesNamesThem(t *testing.T) {
	y := newNight(t, 8, 9600)
	plan := exec.Command("alidade", "plan", "night.yaml")
	plan.Dir = y.dir
	y.check(plan.Run())
	lost, grown := "takes/n1/t001.wav", "takes/n2/t002.wav"
	y.check(os.Remove(y.at(lost)))
	y.put(grown, good(4, 30000))
	code, out, _ := y.batch("night.plan.json", "--quiet")
	for _, want := range []string{"8 takes, 6 done, 0 missed a limit, 2 failed", lost + ": is not there any more", grown + ": changed from "} {
		if code != 3 || !strings.Contains(out, want) {
			t.Errorf("exit code %d, no %q in\n%s", code, want, out)
		}
	}
	// No folder is larger than the plan has it.
	text, err := os.ReadFile(y.at("night.plan.json"))
	y.check(err)
	p, err := batch.ReadPlan("night.plan.json", text)
	y.check(err)
	tree := y.tree("out")
	for _, take := range p.Takes {
		var size int64
		for name, text := range tree {
			if strings.HasPrefix(name, take.Key+"/") {
				size += int64(len(text))
			}
		}
		if size == 0 || size > take.OutputBytes {
			t.Errorf("%s: %d bytes of outputs, %d planned", take.Key, size, take.OutputBytes)
		}
	}
	// Planned anew, the one is made and the other is no take any more.
	if code, out, _ = y.batch("night.yaml", "--quiet"); code != 0 || !strings.Contains(out, "7 takes, 7 done") {
		t.Errorf("exit code %d\n%s", code, out)
	}
}

func TestTakesOfAFolderAreGroupedByTheirMetadata(t *testing.T) {
	y := newYard(t)
	for k := range 4 {
		ixml := fmt.Sprintf(`<?xml version="1.0"?><BWFXML><FILE_SET><TOTAL_FILES>4</TOTAL_FILES><FAMILY_UID>F1</FAMILY_UID><FILE_SET_INDEX>%d</FILE_SET_INDEX></FILE_SET></BWFXML>`, k+1)
		y.put(fmt.Sprintf("takes/set_%c.wav", 'a'+k), riff("RIFF", format(1, 1, 48000, 16), body{"iXML", -1, []byte(ixml)}, hiss(1, 9600)))
	}
	y.put("takes/whole.wav", good(4, 9600))
	y.put("night.yaml", []byte("rig: rig.yaml\ntakes: [\"takes/*.wav\"]\nsteer: {toward: 60}\n"))
	code, out, errs := y.batch("night.yaml", "--quiet")
	if code != 0 || !strings.Contains(out, "2 takes, 2 done") {
		t.Fatalf("exit code %d\n%s%s", code, out, errs)
	}
	folders, err := os.ReadDir(y.at("out/takes"))
	y.check(err)
	var names []string
	for _, f := range folders {
		names = append(names, f.Name())
	}
	if !slices.Equal(names, []string{"set_a", "whole"}) {
		t.Errorf("folders %v", names)
	}
}

// The line for GNU parallel, carried out on this machine.
func TestTheLineForGNUParallelRuns(t *testing.T) {
	if _, err := exec.LookPath("parallel"); err != nil {
		t.Skip("GNU parallel is not installed (Debian: parallel)")
	}
	y := newNight(t, 7, 9600)
	y.put("takes/bad.wav", []byte("RIFF"))
	y.check(os.Rename(y.at("night.yaml"), y.at("a night.yaml")))
	if code, _, errs := y.batch("a night.yaml", "--out", "calm", "--quiet"); code != 3 {
		t.Fatalf("exit code %d\n%s", code, errs)
	}
	out, errs, err := shell(y.dir, "alidade plan 'a night.yaml' --parts 3 --for parallel > run.sh && HOME=$PWD sh run.sh")
	if err != nil || !strings.Contains(string(out), "8 takes, 7 done, 0 missed a limit, 1 failed") {
		t.Fatalf("%v\n%s%s", err, out, errs)
	}
	y.same("calm", "out")
}

// A plan of a large folder reads headers alone. ALIDADE_LONG=1 plans twenty
// thousand takes.
func TestALargeFolderIsPlannedQuicklyInLittleMemory(t *testing.T) {
	n, most := 1000, 10*time.Second
	if long() {
		n = 20_000
	}
	y := newYard(t)
	y.put("night.yaml", []byte("rig: rig.yaml\ntakes: [\"takes/**/*.wav\"]\nsteer: {toward: 60}\n"))
	take := good(4, 100)
	for k := range n {
		y.put(fmt.Sprintf("takes/d%02d/t%05d.wav", k%40, k), take)
	}
	cmd := exec.Command("alidade", "plan", "night.yaml", "--parts", "1000")
	cmd.Dir = y.dir
	begun := time.Now()
	if out, err := cmd.CombinedOutput(); err != nil || !strings.Contains(string(out), fmt.Sprintf("%d takes, ", n)) {
		t.Fatalf("%v\n%s", err, out)
	}
	took, peak := time.Since(begun), cmd.ProcessState.SysUsage().(*syscall.Rusage).Maxrss>>10
	t.Logf("%d takes planned in %s with %d MiB", n, took.Round(time.Millisecond), peak)
	if took > most || peak > 200 {
		t.Errorf("%s and %d MiB, want at most %s and 200 MiB", took, peak, most)
	}
}
