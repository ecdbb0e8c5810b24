//go:build linux

package pipeline

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"

	"alidade/pkg/wav"
)

func TestOutputThatIsAnInputByLinkIsRefused(t *testing.T) {
	s := newScene(t, 1, wav.PCM16)
	before, err := os.ReadFile(s.take)
	if err != nil {
		t.Fatal(err)
	}
	for name, link := range map[string]func(string) error{
		"hard link":     func(p string) error { return os.Link(s.take, p) },
		"symbolic link": func(p string) error { return os.Symlink(s.take, p) },
		"link to rig":   func(p string) error { return os.Link(s.rig, p) },
	} {
		out := filepath.Join(t.TempDir(), "out.wav")
		if err := link(out); err != nil {
			t.Fatal(err)
		}
		_, err := s.run(Options{Toward: "90", Out: out, Overwrite: true})
		var usage *UsageError
		if !errors.As(err, &usage) || !strings.Contains(err.Error(), "an input is never written to") {
			t.Errorf("%s: %v", name, err)
		}
	}
	// By a folder that is a link, in other case, and as a report of the track.
	dir := filepath.Join(t.TempDir(), "link")
	if err := os.Symlink(s.dir, dir); err != nil {
		t.Fatal(err)
	}
	for _, out := range []string{filepath.Join(dir, "take.wav"), filepath.Join(s.dir, "Take.wav"), filepath.Join(s.dir, "x", "..", "take.wav")} {
		_, err := s.run(Options{Toward: "90", Out: out, Overwrite: true})
		var usage *UsageError
		if !errors.As(err, &usage) {
			t.Errorf("%s: %v, want it refused", out, err)
		}
	}
	s.onlyInputs(t)
	if after, err := os.ReadFile(s.take); err != nil || !bytes.Equal(before, after) {
		t.Errorf("the take changed: %v", err)
	}
}

func TestReplacedFilesKeepTheirMode(t *testing.T) {
	dir := t.TempDir()
	defer syscall.Umask(syscall.Umask(0o022))
	for _, mode := range []fs.FileMode{0o600, 0o640, 0o666} {
		path := filepath.Join(dir, fmt.Sprintf("%o", mode))
		put(t, path, []byte("old"))
		if err := os.Chmod(path, mode); err != nil {
			t.Fatal(err)
		}
		f, err := stage(path, true)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := f.WriteString("new"); err != nil {
			t.Fatal(err)
		}
		if old, _ := os.ReadFile(path); string(old) != "old" {
			t.Errorf("%o: %q before it is committed", mode, old)
		}
		if err := f.commit(); err != nil {
			t.Fatal(err)
		}
		info, err := os.Stat(path)
		if err != nil || info.Mode().Perm() != mode {
			t.Errorf("%v, %v, want mode %o", info.Mode(), err, mode)
		}
	}
	f, err := stage(filepath.Join(dir, "fresh"), false)
	if err != nil {
		t.Fatal(err)
	}
	if err := f.commit(); err != nil {
		t.Fatal(err)
	}
	if info, _ := os.Stat(f.final); info.Mode().Perm() != 0o644 {
		t.Errorf("a new file has mode %v under a umask of 022", info.Mode())
	}
}

func TestWhatIsNoFileIsNotReplaced(t *testing.T) {
	dir := t.TempDir()
	pipe := filepath.Join(dir, "pipe")
	if err := syscall.Mkfifo(pipe, 0o666); err != nil {
		t.Skipf("no named pipes here: %v", err)
	}
	for path, what := range map[string]string{dir: "a folder", pipe: "a named pipe", "/dev/null": "a device"} {
		if _, err := stage(path, true); err == nil || !strings.Contains(err.Error(), "is "+what) {
			t.Errorf("%s: %v, want it named as %s", path, err, what)
		}
	}
	if got := entries(t, dir); !slices.Equal(got, []string{"pipe"}) {
		t.Errorf("left behind: %v", got)
	}
}

// Of files that belong together all appear or none: a name that was taken in
// the meantime stops them, and what stood there before stays.
func TestFilesAppearTogetherOrNotAtAll(t *testing.T) {
	dir := t.TempDir()
	put(t, filepath.Join(dir, "old"), []byte("old"))
	var files []*staged
	for _, name := range []string{"a", "old", "b", "c"} {
		f, err := stage(filepath.Join(dir, name), name == "old")
		if err != nil {
			t.Fatal(err)
		}
		if _, err := f.WriteString("new"); err != nil {
			t.Fatal(err)
		}
		files = append(files, f)
	}
	put(t, filepath.Join(dir, "b"), []byte("another's"))
	err := commitAll(files)
	if err == nil || !strings.Contains(err.Error(), "b: came into being while") {
		t.Fatalf("%v", err)
	}
	for _, f := range files {
		f.abandon()
	}
	if got := entries(t, dir); !slices.Equal(got, []string{"b", "old"}) {
		t.Errorf("left: %v", got)
	}
	if data, _ := os.ReadFile(filepath.Join(dir, "b")); string(data) != "another's" {
		t.Errorf("b holds %q", data)
	}
}

// A disk that fills up while the track is written ends the run with the
// system's reason and leaves nothing; a disk that is too small is found before.
func TestDiskFull(t *testing.T) {
	disk := t.TempDir()
	if err := syscall.Mount("tmpfs", disk, "tmpfs", 0, "size=3m"); err != nil {
		t.Skipf("a small file system of its own cannot be mounted (that takes root): %v", err)
	}
	defer func() {
		if err := syscall.Unmount(disk, 0); err != nil {
			t.Error(err)
		}
	}()
	s := newScene(t, 20, wav.PCM24) // a track of 0.96 MB and a megabyte for each report
	full := false
	spec := Spec{Take: []string{s.take}, RigPath: s.rig, Options: Options{Toward: "90", NoMeasure: true, BlockFrames: 4096, Out: disk + "/", Reports: "json"}}
	_, err := Run(t.Context(), spec, jsonRenderers, Watch{Progress: func(stage string, _, _ int64) {
		if !full && stage == "steering" {
			full = true
			_ = os.WriteFile(filepath.Join(disk, "filler"), make([]byte, 4<<20), 0o666) // ends in ENOSPC
		}
	}})
	if !errors.Is(err, syscall.ENOSPC) || !strings.Contains(err.Error(), "take_az+090.0.wav") {
		t.Errorf("%v, want the track named and no space left on device", err)
	}
	if got := entries(t, disk); !slices.Equal(got, []string{"filler"}) {
		t.Errorf("left behind: %v", got)
	}
	_, err = s.run(Options{Toward: "90", Out: disk + "/"})
	var hint *HintedError
	if !errors.As(err, &hint) || !strings.Contains(err.Error(), "0.0 MB free, the outputs need") {
		t.Errorf("%v, want the room told before the work", err)
	}
	if got := entries(t, disk); !slices.Equal(got, []string{"filler"}) {
		t.Errorf("left behind: %v", got)
	}
}
