package main

import (
	"errors"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// entries are the names in a folder, hidden ones included.
func entries(t *testing.T, dir string) string {
	t.Helper()
	list, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range list {
		names = append(names, e.Name())
	}
	return strings.Join(names, " ")
}

func TestAFolderIsWholeOrAbsent(t *testing.T) {
	dir := t.TempDir()
	f, err := newFolder(filepath.Join(dir, "deep", "yard") + "/")
	if err != nil {
		t.Fatal(err)
	}
	if err := f.write("rig.yaml", []byte("rig: x\n")); err != nil {
		t.Fatal(err)
	}
	if got := entries(t, filepath.Join(dir, "deep")); got != ".yard.partial-0" {
		t.Errorf("on its way: %q", got)
	}
	if err := f.commit(); err != nil {
		t.Fatal(err)
	}
	f.abandon() // does nothing any more
	if got := entries(t, filepath.Join(dir, "deep")); got != "yard" {
		t.Errorf("when done: %q", got)
	}
	if got := entries(t, filepath.Join(dir, "deep", "yard")); got != "rig.yaml" {
		t.Errorf("within: %q", got)
	}

	f, err = newFolder(filepath.Join(dir, "other"))
	if err != nil {
		t.Fatal(err)
	}
	if err := f.write("a", nil); err != nil {
		t.Fatal(err)
	}
	if err := f.write("a", nil); !errors.Is(err, os.ErrExist) {
		t.Errorf("a file written twice: %v", err)
	}
	f.abandon()
	if got := entries(t, dir); got != "deep" {
		t.Errorf("abandoned: %q", got)
	}
}

func TestAFolderReplacesNothing(t *testing.T) {
	dir := t.TempDir()
	full, file, empty := filepath.Join(dir, "full"), filepath.Join(dir, "file"), filepath.Join(dir, "empty")
	if err := errors.Join(os.MkdirAll(filepath.Join(full, "x"), 0o777), os.Mkdir(empty, 0o777), os.WriteFile(file, nil, 0o666)); err != nil {
		t.Fatal(err)
	}
	if _, err := newFolder(full); err == nil || !strings.Contains(err.Error(), "exists already, with 1 entries") {
		t.Errorf("a full folder: %v", err)
	}
	if _, err := newFolder(file); err == nil || !strings.Contains(err.Error(), "exists already") {
		t.Errorf("a file: %v", err)
	}
	f, err := newFolder(empty)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(f.write("a", nil), f.commit()); err != nil {
		t.Errorf("an empty folder: %v", err)
	}
	// Another run takes the name in between.
	f, err = newFolder(filepath.Join(dir, "raced"))
	if err != nil {
		t.Fatal(err)
	}
	if err := os.MkdirAll(filepath.Join(dir, "raced", "theirs"), 0o777); err != nil {
		t.Fatal(err)
	}
	if err := f.commit(); err == nil {
		t.Error("a folder that came in between was replaced")
	}
	f.abandon()
	if got := entries(t, filepath.Join(dir, "raced")); got != "theirs" {
		t.Errorf("the folder in between holds %q", got)
	}
}

// tone is a block of two different sines, peaks at the given amplitude.
func tone(frames int, amplitude float64) audio.Block {
	b := audio.NewBlock(2, frames)
	for ch := range 2 {
		for i := range frames {
			b.Channel(ch)[i] = float32(amplitude * math.Sin(0.01*float64(i*(3+ch))))
		}
	}
	return b
}

func TestSoundIsWrittenAsItIs(t *testing.T) {
	f, err := newFolder(filepath.Join(t.TempDir(), "yard"))
	if err != nil {
		t.Fatal(err)
	}
	in := tone(10000, 0.9)
	s, err := f.sound("take.wav", audio.Format{Rate: 16000, Channels: 2}, wav.Float32)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(s.Write(in.Slice(0, 777)), s.Write(in.Slice(777, 10000)), s.close(), f.commit()); err != nil {
		t.Fatal(err)
	}
	file, err := os.Open(filepath.Join(f.final, "take.wav"))
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		t.Fatal(err)
	}
	r, err := wav.Open(file, info.Size())
	if err != nil {
		t.Fatal(err)
	}
	got, err := audio.ReadAll(r)
	if err != nil || got.Frames() != 10000 || got.Channels() != 2 || r.Format().Rate != 16000 {
		t.Fatalf("%d frames, %+v, %v", got.Frames(), r.Format(), err)
	}
	for ch := range 2 {
		for i, v := range got.Channel(ch) {
			if v != in.Channel(ch)[i] {
				t.Fatalf("channel %d, frame %d = %v, want %v", ch, i, v, in.Channel(ch)[i])
			}
		}
	}
}

func TestSoundThatCannotBeWrittenIsSaid(t *testing.T) {
	f, err := newFolder(filepath.Join(t.TempDir(), "yard"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.abandon()
	stereo := audio.Format{Rate: 16000, Channels: 2}
	s, err := f.sound("loud.wav", stereo, wav.PCM24)
	if err != nil {
		t.Fatal(err)
	}
	err = errors.Join(s.Write(tone(10000, 2)), s.close())
	if err == nil || !strings.Contains(err.Error(), "yard/loud.wav: ") || !strings.Contains(err.Error(), "+6.0 dBFS") || len(hints(err, nil)) == 0 {
		t.Errorf("too loud: %v, hints %q", err, hints(err, nil))
	}
	if _, err := f.sound("loud.wav", stereo, wav.PCM24); !errors.Is(err, os.ErrExist) {
		t.Errorf("a name given twice: %v", err)
	}
	if _, err := f.sound("none.wav", audio.Format{Rate: 16000}, wav.PCM24); err == nil || !strings.Contains(err.Error(), "none.wav") {
		t.Errorf("no channels: %v", err)
	}
	s, err = f.sound("closed.wav", stereo, wav.PCM24)
	if err != nil {
		t.Fatal(err)
	}
	s.abandon()
	if err := errors.Join(s.Write(tone(100000, 0.5)), s.close()); err == nil {
		t.Error("a closed file took sound")
	}
}
