package batch

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"
)

// StorageCheck is one thing that a folder was tried for.
type StorageCheck struct {
	Name   string `json:"name"`
	Good   bool   `json:"good"`
	Needed bool   `json:"needed"` // a batch cannot do without
	Found  string `json:"found"`
}

// StorageReport is what a folder can do.
type StorageReport struct {
	Path      string         `json:"path"`
	FreeBytes *int64         `json:"free_bytes"` // nil where it cannot be told
	Checks    []StorageCheck `json:"checks"`
}

// Good reports whether the folder can carry a batch.
func (r *StorageReport) Good() bool {
	for _, c := range r.Checks {
		if c.Needed && !c.Good {
			return false
		}
	}
	return true
}

// clockSlack is how far the clock of a file server may be from our own.
const clockSlack = 5 * time.Second

// CheckStorage tries in a folder what a batch relies on, and leaves nothing
// there. What only shows with two machines or without power it cannot try:
// syncs are asked for, not pulled the plug on.
func CheckStorage(dir string, now func() time.Time) (*StorageReport, error) {
	info, err := os.Stat(dir)
	if err != nil {
		return nil, err
	}
	if !info.IsDir() {
		return nil, fmt.Errorf("%s: not a folder", dir)
	}
	r := &StorageReport{Path: dir, Checks: []StorageCheck{}}
	if free, ok := FreeBytes(dir); ok {
		r.FreeBytes = &free
	}
	add := func(name string, needed bool, err error, good string) bool {
		c := StorageCheck{Name: name, Good: err == nil, Needed: needed, Found: good}
		if err != nil {
			c.Found = err.Error()
		}
		r.Checks = append(r.Checks, c)
		return err == nil
	}
	at, err := os.MkdirTemp(dir, ".check-storage-")
	if !add("a folder can be made", true, err, "made") {
		return r, nil
	}
	defer os.RemoveAll(at)
	file := filepath.Join(at, "file")
	const text = "what was written is read back\n"
	add("files are written and synced", true, writeSynced(file, []byte(text)), "written and synced")
	back, err := os.ReadFile(file)
	if err == nil && string(back) != text {
		err = fmt.Errorf("%d bytes read back, %d written", len(back), len(text))
	}
	add("what was written is read back", true, err, "the same")
	add("folders are synced", false, trySyncFolder(at), "synced")
	add("a folder is renamed", true, tryRename(at), "whole, at once")
	add("renames are exclusive", true, tryExclusive(at), "a folder that is not empty is never replaced")
	add("the clock agrees", false, tryClock(file, now()), fmt.Sprintf("within %s", clockSlack))
	add("upper and lower case differ", false, tryCase(at), "they do")
	return r, nil
}

// FreeBytes returns how many bytes an ordinary user may still write in the file
// system of dir, or of the folder that dir will be made in. It is false where
// that cannot be told.
func FreeBytes(dir string) (free int64, ok bool) {
	for {
		free, err := freeBytes(dir)
		up := filepath.Dir(dir)
		if err == nil || !errors.Is(err, fs.ErrNotExist) || up == dir {
			return free, err == nil
		}
		dir = up
	}
}

func trySyncFolder(at string) error {
	d, err := os.Open(at)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}

// filled makes a folder with one file that says what it is.
func filled(path, text string) error {
	if err := os.Mkdir(path, 0o777); err != nil {
		return err
	}
	return writeSynced(filepath.Join(path, outcomeName), []byte(text))
}

func tryRename(at string) error {
	from, to := filepath.Join(at, "from"), filepath.Join(at, "to")
	if err := filled(from, "first"); err != nil {
		return err
	}
	if err := os.Rename(from, to); err != nil {
		return err
	}
	if text, err := os.ReadFile(filepath.Join(to, outcomeName)); err != nil || string(text) != "first" {
		return errors.Join(errors.New("after the rename the file is not there"), err)
	}
	return nil
}

func tryExclusive(at string) error {
	from, to := filepath.Join(at, "second"), filepath.Join(at, "taken")
	if err := errors.Join(filled(from, "second"), filled(to, "first")); err != nil {
		return err
	}
	err := os.Rename(from, to)
	text, rerr := os.ReadFile(filepath.Join(to, outcomeName))
	switch {
	case rerr != nil:
		return rerr
	case string(text) != "first" || err == nil:
		return errors.New("a rename replaced a folder that was not empty: two runs could make a take twice")
	}
	return nil
}

func tryClock(file string, now time.Time) error {
	info, err := os.Stat(file)
	if err != nil {
		return err
	}
	if off := info.ModTime().Sub(now); off.Abs() > clockSlack {
		return fmt.Errorf("the files' clock is %s off ours: takes that change may be overlooked", off.Round(time.Second))
	}
	return nil
}

func tryCase(at string) error {
	if _, err := os.Stat(filepath.Join(at, "FILE")); !errors.Is(err, fs.ErrNotExist) {
		return errors.Join(errors.New("file and FILE are one"), err)
	}
	return nil
}
