//go:build linux

package main

import (
	"encoding/json"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"alidade/pkg/pipeline"
	"alidade/pkg/wav"
)

// nobody lets the program run as a user who owns nothing, from a copy of it
// that such a user may run. It skips where this process may not do that.
func (y *yard) nobody() *syscall.SysProcAttr {
	y.t.Helper()
	if os.Geteuid() != 0 {
		return nil // ordinary already
	}
	y.check(os.Chmod(filepath.Dir(y.dir), 0o755))
	path, err := exec.LookPath("alidade")
	y.check(err)
	bin := y.t.TempDir()
	data, err := os.ReadFile(path)
	y.check(err)
	y.check(os.WriteFile(filepath.Join(bin, "alidade"), data, 0o755))
	y.t.Setenv("PATH", bin)
	who := &syscall.SysProcAttr{Credential: &syscall.Credential{Uid: 65534, Gid: 65534}}
	probe := exec.Command("alidade", "--version")
	probe.SysProcAttr = who
	if err := probe.Run(); err != nil {
		y.t.Skipf("the program cannot be run as another user here: %v", err)
	}
	return who
}

func TestFilesOfAnotherUser(t *testing.T) {
	for _, c := range []struct {
		name  string
		spoil func(y *yard) error
		args  []string
		code  int
		want  string
	}{
		{"unreadable take", func(y *yard) error { return os.Chmod(y.at("good.wav"), 0) }, steerArgs("good.wav", "--out", "out/"), 1, "good.wav: permission denied"},
		{"unreadable rig", func(y *yard) error { return os.Chmod(y.at("rig.yaml"), 0) }, steerArgs("good.wav", "--out", "out/"), 2, "rig.yaml: permission denied"},
		{"read-only folder", func(y *yard) error { return os.Chmod(y.at("out"), 0o555) }, steerArgs("good.wav", "--out", "out/"), 1, "out: permission denied"},
		{"folder in a read-only folder", func(y *yard) error { return os.Chmod(y.at("out"), 0o555) }, steerArgs("good.wav", "--out", "out/more/"), 1, "out/more: permission denied"},
		{"take's own folder is read-only", func(y *yard) error { return os.Chmod(y.dir, 0o555) }, steerArgs("good.wav"), 1, "permission denied"},
		{"unreadable file for inspect", func(y *yard) error { return os.Chmod(y.at("good.wav"), 0) }, []string{"inspect", "good.wav"}, 1, "good.wav: permission denied"},
	} {
		t.Run(c.name, func(t *testing.T) {
			y := newYard(t)
			y.check(os.Mkdir(y.at("out"), 0o777))
			y.check(os.Chmod(y.at("out"), 0o777))
			who := y.nobody()
			y.check(c.spoil(y))
			before := y.all()
			o := y.as(who, c.args...)
			y.check(os.Chmod(y.dir, 0o777))
			y.refused(o, c.code, c.want, before)
		})
	}
}

// Disks of their own, mounted: full, and read-only.
func TestDisksThatTakeNothing(t *testing.T) {
	for _, c := range []struct {
		name, options, want string
		spoil               func(disk string) error
	}{
		{"full", "size=256k", "0.0 MB free, the outputs need", func(disk string) error {
			_ = os.WriteFile(filepath.Join(disk, "filler"), make([]byte, 1<<20), 0o666) // ends in a full disk
			return nil
		}},
		{"too small", "size=256k", "MB free, the outputs need", func(string) error { return nil }},
		{"read-only", "size=8m", "read-only file system", func(disk string) error {
			return syscall.Mount("tmpfs", disk, "tmpfs", syscall.MS_REMOUNT|syscall.MS_RDONLY, "")
		}},
	} {
		t.Run(c.name, func(t *testing.T) {
			y := newYard(t)
			disk := y.at("disk")
			y.check(os.Mkdir(disk, 0o777))
			if err := syscall.Mount("tmpfs", disk, "tmpfs", 0, c.options); err != nil {
				t.Skipf("a file system of its own cannot be mounted (that takes root): %v", err)
			}
			defer func() {
				if err := syscall.Unmount(disk, 0); err != nil {
					t.Error(err)
				}
			}()
			y.check(c.spoil(disk))
			before := y.all()
			y.refused(y.alidade(steerArgs("good.wav", "--out", "disk/")...), 1, c.want, before)
		})
	}
}

// Inputs that are odd and yet give a whole track of the take's length, with a
// finding that says what was odd.
func TestOddInputsGiveATrackAndAFinding(t *testing.T) {
	head := format(1, 4, 48000, 16)
	long := hiss(4, 24000)
	lying := func(size int64) []byte { return riff("RIFF", head, body{"data", size, long.data}) }
	for _, c := range []struct {
		name   string
		file   []byte
		frames int64
		code   string
	}{
		{"cut off in the middle", good(4, 24000)[:44+8*10000+3], 10000, "take-truncated"},
		{"size of zero", lying(0), 24000, "take-size-zero"},
		{"size unknown", lying(math.MaxUint32), 24000, "take-size-unknown"},
		{"size beyond the file", lying(1 << 31), 24000, "take-truncated"},
		{"not a number in every sample", riff("RIFF", format(3, 4, 48000, 32), floats(4, 24000, 1, math.NaN())), 24000, "take-non-finite-sample"},
		{"infinite now and then", riff("RIFF", format(3, 4, 48000, 32), floats(4, 24000, 999, math.Inf(-1))), 24000, "take-non-finite-sample"},
		{"silence", riff("RIFF", head, body{"data", -1, make([]byte, 8*24000)}), 24000, "channel-silent"},
		{"shorter than the filter", good(4, 7), 7, ""},
		{"one frame", good(4, 1), 1, ""},
		{"a chunk that claims 4 GiB", riff("RIFF", head, long, body{"LIST", math.MaxUint32, []byte("INFO")}), 24000, "take-truncated"},
		{"noise behind the end", append(good(4, 24000), make([]byte, 999)...), 24000, "take-trailing-bytes"},
		{"iXML that is not XML", riff("RIFF", head, body{"iXML", -1, []byte(strings.Repeat("<", 5000))}, long), 24000, "take-metadata"},
		{"iXML nested without end", riff("RIFF", head, body{"iXML", -1, []byte(strings.Repeat("<A>", 100000))}, long), 24000, "take-metadata"},
		{"bext cut short", riff("RIFF", head, body{"bext", -1, make([]byte, 40)}, long), 24000, "take-metadata"},
		{"more cues claimed than are there", riff("RIFF", head, body{"cue ", -1, append([]byte{255, 255, 255, 255}, make([]byte, 240)...)}, long), 24000, ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			y := newYard(t)
			y.put("x.wav", c.file)
			o := y.alidade(steerArgs("x.wav", "--json")...)
			if o.code != 0 || o.took > refusalTime || o.residentMiB > refusalMiB {
				t.Fatalf("exit code %d, %v, %.0f MiB\n%s", o.code, o.took, o.residentMiB, o.stderr)
			}
			var r pipeline.Result
			y.check(json.Unmarshal([]byte(o.stdout), &r))
			d, err := pipeline.Describe(y.at("x_az+060.0.wav"))
			y.check(err)
			if d.Frames != c.frames || r.Take.Frames != c.frames || r.Output.Frames != c.frames {
				t.Errorf("%d frames in the track, %d and %d in the report, want %d", d.Frames, r.Take.Frames, r.Output.Frames, c.frames)
			}
			var codes []string
			for _, f := range r.Findings {
				codes = append(codes, f.Code)
			}
			if c.code != "" && !slices.Contains(codes, c.code) {
				t.Errorf("findings %v, want %s", codes, c.code)
			}
		})
	}
}

// A take that is taken away while it is read: the run ends with it named, or
// finishes because the system keeps an open file.
func TestTakeThatVanishes(t *testing.T) {
	y := newYard(t)
	y.put("x.wav", good(4, 1500000))
	path, err := exec.LookPath("alidade")
	y.check(err)
	cmd := exec.Command(path, steerArgs("x.wav", "--no-measure")...)
	cmd.Dir = y.dir
	var stderr strings.Builder
	cmd.Stderr = &stderr
	y.check(cmd.Start())
	deadline := time.Now().Add(20 * time.Second)
	for {
		if found, _ := filepath.Glob(y.at(".x_az+060.0.wav.partial-*")); len(found) > 0 || time.Now().After(deadline) {
			break
		}
		time.Sleep(time.Millisecond)
	}
	y.check(os.Truncate(y.at("x.wav"), 1000))
	y.check(os.Remove(y.at("x.wav")))
	err = cmd.Wait()
	if err == nil || cmd.ProcessState.ExitCode() != 1 || !strings.Contains(stderr.String(), "x.wav: ") || strings.Contains(stderr.String(), "goroutine ") {
		t.Errorf("%v\n%s", err, stderr.String())
	}
	for _, line := range y.all() {
		if strings.Contains(line, "partial") || strings.Contains(line, "x_az") {
			t.Errorf("left behind: %s", line)
		}
	}
}

// sparseRF64 makes a take of silence without filling the disk, with a
// little sound at its start and its end [EBU Tech 3306].
func sparseRF64(t *testing.T, path string, channels int, bytes int64) (frames int64) {
	t.Helper()
	frames = bytes / int64(3*channels)
	f := format(1, channels, 48000, 24)
	data := frames * int64(3*channels)
	b := append([]byte("RF64\xff\xff\xff\xffWAVEds64"), 28, 0, 0, 0)
	b = le.AppendUint64(b, uint64(4+8+28+8+16+8+data))
	b = le.AppendUint64(b, uint64(data))
	b = le.AppendUint64(b, uint64(frames))
	b = le.AppendUint32(b, 0)
	b = append(append(b, "fmt \x10\x00\x00\x00"...), f.data...)
	b = append(b, "data\xff\xff\xff\xff"...)
	file, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	sound := hiss(1, 30000).data
	for _, w := range []struct {
		at   int64
		data []byte
	}{{0, b}, {int64(len(b)), sound}, {int64(len(b)) + data - int64(len(sound)), sound}} {
		if _, err := file.WriteAt(w.data, w.at); err != nil {
			t.Fatal(err)
		}
	}
	return frames
}

// TestSixGiBTakeInLittleMemory steers a take of 6 GiB and 64 channels.
func TestSixGiBTakeInLittleMemory(t *testing.T) {
	bytes := int64(96 << 20)
	if os.Getenv("ALIDADE_LONG") == "1" {
		bytes = 6 << 30
	}
	y := newYard(t)
	frames := sparseRF64(t, y.at("long.wav"), 64, bytes)
	y.put("rig.yaml", []byte("rig: sixty-four\nline: {count: 64, spacing_mm: 20}\n"))
	file, err := os.Open(y.at("long.wav"))
	y.check(err)
	defer file.Close()
	info, err := file.Stat()
	y.check(err)
	best := time.Hour
	for range 5 {
		start := time.Now()
		r, err := wav.Open(file, info.Size())
		best = min(best, time.Since(start))
		if err != nil || r.Frames() != frames || r.Header().Channels != 64 {
			t.Fatalf("%v, %+v", err, r)
		}
	}
	if best > 10*time.Millisecond {
		t.Errorf("the header takes %v", best)
	}
	o := y.alidade(steerArgs("long.wav", "--no-measure")...)
	if o.code != 0 || o.residentMiB > 200 {
		t.Errorf("exit code %d, %.0f MiB\n%s", o.code, o.residentMiB, o.stderr)
	}
	d, err := pipeline.Describe(y.at("long_az+060.0.wav"))
	y.check(err)
	if d.Frames != frames {
		t.Errorf("a track of %d frames, want %d", d.Frames, frames)
	}
	t.Logf("%.2f GiB, %d frames of 64 channels: header %v, steered in %v with at most %.0f MiB resident", float64(info.Size())/(1<<30), frames, best, o.took.Round(time.Millisecond), o.residentMiB)
}

// TestKilledAtAnyMoment interrupts and kills the program at moments spread over
// a run. Afterwards there is the whole track, with its report, or no track;
// and a run after that succeeds.
func TestKilledAtAnyMoment(t *testing.T) {
	moments, frames := 8, 200000
	if os.Getenv("ALIDADE_LONG") == "1" {
		moments, frames = 50, 1500000
	}
	if testing.Short() {
		t.Skip("runs the program many times")
	}
	y := newYard(t)
	y.put("x.wav", good(4, frames))
	path, err := exec.LookPath("alidade")
	y.check(err)
	args := steerArgs("x.wav", "--no-measure", "--out", "out/t.wav", "--reproducible")
	y.check(os.Mkdir(y.at("out"), 0o777))
	start := time.Now()
	if o := y.alidade(args...); o.code != 0 {
		t.Fatalf("%s", o.stderr)
	}
	whole := time.Since(start)
	want, err := os.ReadFile(y.at("out/t.wav"))
	y.check(err)
	rng := rand.New(rand.NewPCG(3, 50))
	for _, sig := range []syscall.Signal{syscall.SIGINT, syscall.SIGKILL} {
		made, none := 0, 0
		for k := range moments {
			y.check(os.RemoveAll(y.at("out")))
			y.check(os.Mkdir(y.at("out"), 0o777))
			cmd := exec.Command(path, args...)
			cmd.Dir, cmd.Stderr = y.dir, io.Discard
			y.check(cmd.Start())
			time.Sleep(time.Duration((float64(k) + rng.Float64()) / float64(moments) * 1.1 * float64(whole)))
			_ = cmd.Process.Signal(sig) // it may have ended
			_ = cmd.Wait()
			var names []string
			list, err := os.ReadDir(y.at("out"))
			y.check(err)
			for _, e := range list {
				names = append(names, e.Name())
			}
			got, err := os.ReadFile(y.at("out/t.wav"))
			switch {
			case err == nil:
				made++
				if string(got) != string(want) {
					t.Errorf("%v at moment %d: another track of %d bytes, want %d", sig, k, len(got), len(want))
				}
				if !slices.Contains(names, "t.report.json") {
					t.Errorf("%v at moment %d: a track without its report: %v", sig, k, names)
				}
			case os.IsNotExist(err):
				none++
				if sig == syscall.SIGINT && len(names) > 0 {
					t.Errorf("interrupted at moment %d: left behind %v", k, names)
				}
			default:
				t.Error(err)
			}
		}
		t.Logf("%v at %d moments of %v: %d whole tracks, %d times none", sig, moments, whole.Round(time.Millisecond), made, none)
	}
	if o := y.alidade(append(args, "--overwrite")...); o.code != 0 {
		t.Errorf("the run after that: %s", o.stderr)
	}
	if got, err := os.ReadFile(y.at("out/t.wav")); err != nil || string(got) != string(want) {
		t.Errorf("the run after that gives another track: %v", err)
	}
}

// Programs that others wrote read a track with all that it carries, without a
// word of complaint, and find the metadata where they look for them.
func TestOtherProgramsReadTheTracks(t *testing.T) {
	y := newYard(t)
	bext := make([]byte, 602)
	copy(bext, "take seven")
	copy(bext[256:], "recorder")
	copy(bext[320:], "2026-05-0110:00:00")
	le.PutUint64(bext[338:], 36000*48000)
	le.PutUint16(bext[346:], 1)
	ixml := []byte(`<?xml version="1.0"?><BWFXML><IXML_VERSION>2.0</IXML_VERSION><SCENE>7A</SCENE><TAKE>3</TAKE></BWFXML>`)
	y.put("x.wav", riff("RIFF", body{"bext", -1, bext}, body{"iXML", -1, ixml}, format(1, 4, 48000, 16), hiss(4, 48000)))
	judges := []struct {
		name string
		args func(file string) []string
		says []string
	}{
		{"sndfile-info", func(f string) []string { return []string{f} }, []string{"alidade", "bext :", "iXML :"}},
		{"sndfile-info", func(f string) []string { return []string{"--broadcast", f} }, []string{"take seven", "36000.000000 seconds", "T=alidade"}},
		{"sox", func(f string) []string { return []string{"--i", f} }, []string{"Channels       : 1", "48000"}},
		{"mediainfo", func(f string) []string { return []string{f} }, []string{"take seven", "1 channel"}},
		{"ffmpeg", func(f string) []string { return []string{"-v", "warning", "-i", f, "-f", "null", "-"} }, nil},
	}
	found := 0
	for _, j := range judges {
		if _, err := exec.LookPath(j.name); err != nil {
			t.Logf("%s is not installed (Debian: sndfile-programs, sox, mediainfo, ffmpeg)", j.name)
			continue
		}
		found++
	}
	if found == 0 {
		t.Skip("no other program that reads WAV is installed")
	}
	for _, encoding := range []string{"pcm16", "pcm24", "float32"} {
		file := encoding + ".wav"
		if o := y.alidade(steerArgs("x.wav", "--no-measure", "--format", encoding, "--out", file)...); o.code != 0 {
			t.Fatal(o.stderr)
		}
		data, err := os.ReadFile(y.at(file))
		y.check(err)
		for _, text := range []string{"<SCENE>7A</SCENE>", "take seven", "M=mono,T=alidade"} {
			if !strings.Contains(string(data), text) {
				t.Errorf("%s: without %q", file, text)
			}
		}
		for _, j := range judges {
			path, err := exec.LookPath(j.name)
			if err != nil {
				continue
			}
			cmd := exec.Command(path, j.args(file)...)
			cmd.Dir = y.dir
			out, err := cmd.CombinedOutput()
			text := string(out)
			if err != nil {
				t.Errorf("%s %s: %v\n%s", j.name, file, err, text)
			}
			for _, word := range []string{"warning", "error", "invalid", "unknown chunk", "should be", "***"} {
				if strings.Contains(strings.ToLower(text), word) {
					t.Errorf("%s %s says %q:\n%s", j.name, file, word, text)
				}
			}
			for _, line := range strings.Split(strings.TrimSpace(text), "\n") {
				// ffmpeg remarks this of every mono file whose header names no loudspeaker.
				if j.says == nil && line != "" && !strings.HasPrefix(line, "Guessed Channel Layout") {
					t.Errorf("%s %s: %s", j.name, file, line)
				}
			}
			for _, want := range j.says {
				if !strings.Contains(text, want) {
					t.Errorf("%s %s does not say %q:\n%s", j.name, file, want, text)
				}
			}
		}
	}
}
