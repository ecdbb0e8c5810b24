package batch

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync/atomic"
)

// stagingFolder holds what is not yet committed, below the output folder: a
// folder for each run, in it one for each take in work.
const stagingFolder = ".staging"

// fate is what is known of the process of a run.
type fate int

// The fates.
const (
	isUnknown fate = iota
	isRunning
	hasEnded
)

// staging is the folder of one run.
type staging struct {
	out  string
	path string // of this run; empty until the first take
	name string
}

// newStaging returns the staging of a run. Its folder is made with the first
// take.
func newStaging(out string) (*staging, error) {
	top := filepath.Join(out, stagingFolder)
	var path string
	for try := 0; ; try++ {
		if err := os.MkdirAll(top, 0o777); err != nil {
			return nil, err
		}
		var err error
		if path, err = os.MkdirTemp(top, runMark()+"-"); err == nil {
			break
		}
		// A run that has just ended takes an empty staging folder with it.
		if !errors.Is(err, fs.ErrNotExist) || try == 100 {
			return nil, err
		}
	}
	// MkdirTemp keeps others out, but what is renamed out of here is for them.
	return &staging{out: out, path: path, name: filepath.Base(path)}, nil
}

// short is the name of a take's folder in a staging folder.
func short(key string) string { return digest([]byte(key))[:16] }

// begin makes an empty folder for a take.
func (s *staging) begin(key string) (string, error) {
	dir := filepath.Join(s.path, short(key))
	if err := os.RemoveAll(dir); err != nil {
		return "", err
	}
	// With the folder of the run, should a merge have swept that away.
	return dir, os.MkdirAll(dir, 0o777)
}

// drop removes the folder of a take.
func (s *staging) drop(key string) { _ = os.RemoveAll(filepath.Join(s.path, short(key))) }

// close removes the folder of the run, and the staging folder if it was the
// last.
func (s *staging) close() {
	_ = os.RemoveAll(s.path)
	_ = os.Remove(filepath.Join(s.out, stagingFolder)) // stays while others use it
}

// inWork reports whether another run that may still be alive has the take in
// work. That is a hint and no claim: it only puts the take last.
func (s *staging) inWork(key string) bool {
	for _, run := range otherRuns(s.out, s.name) {
		if _, err := os.Lstat(filepath.Join(s.out, stagingFolder, run, short(key))); err == nil {
			return true
		}
	}
	return false
}

// sweptMark is in the names of folders that are being removed.
const sweptMark = "-swept-"

// otherRuns are the staging folders of runs other than own that may be alive.
func otherRuns(out, own string) (names []string) {
	entries, err := os.ReadDir(filepath.Join(out, stagingFolder))
	if err != nil {
		return nil
	}
	for _, e := range entries {
		if e.Name() != own && fateOf(e.Name()) != hasEnded && !strings.Contains(e.Name(), sweptMark) {
			names = append(names, e.Name())
		}
	}
	return names
}

// sweep removes what runs left that are known to have ended, and with unknown
// what those left of which nothing is known. A run that is known to be at work
// keeps its folder and removes it itself. What cannot be removed stays: it is in
// nobody's way, and the next sweep tries again.
func sweep(out string, unknown bool) {
	top := filepath.Join(out, stagingFolder)
	entries, err := os.ReadDir(top)
	if err != nil {
		return
	}
	for _, e := range entries {
		if fate := fateOf(e.Name()); fate == isRunning || fate == isUnknown && !unknown {
			continue
		}
		at := filepath.Join(top, e.Name())
		if !strings.Contains(e.Name(), sweptMark) {
			// Under another name first: whoever still works there, on a machine
			// that is not seen from here, can put nothing into a folder that is
			// being emptied, and finds all of it gone at once.
			swept := filepath.Join(top, fmt.Sprintf("%s%s%d", runMark(), sweptMark, sweeps.Add(1)))
			if os.Rename(at, swept) == nil {
				at = swept
			}
		}
		_ = os.RemoveAll(at) // another run may be doing the same
	}
	_ = os.Remove(top) // stays while others use it
}

// sweeps counts the folders that this process swept.
var sweeps atomic.Int64

// errOthers says that another run committed the take first.
var errOthers = errors.New("committed by another run")

// commit gives a staged take its final name. The staged folder holds everything
// but the outcome, which is written here. Where before is not nil, it is the
// outcome that is replaced; any other that stands there wins, and the error is
// errOthers.
func (s *staging) commit(dir string, o, before *Outcome) (size int64, err error) {
	text, err := o.seal()
	if err != nil {
		return 0, err
	}
	if err := writeSynced(filepath.Join(dir, outcomeName), text); err != nil {
		return 0, err
	}
	if err := syncTree(dir); err != nil {
		return 0, err
	}
	final := folderOf(s.out, o.Take)
	parent := filepath.Dir(final)
	if err := os.MkdirAll(parent, 0o777); err != nil {
		return 0, err
	}
	if before != nil {
		if err := s.setAside(final, before); err != nil {
			return 0, err
		}
	}
	if err := os.Rename(dir, final); err != nil {
		// What counts is what stands there, not the error: over a network a
		// rename that was carried out may be answered with one.
		now, rerr := ReadOutcome(s.out, o.Take)
		_, gone := os.Lstat(dir)
		switch {
		case rerr != nil:
			return 0, err
		case errors.Is(gone, fs.ErrNotExist) && now.Sum == o.Sum:
			err = nil
		default:
			return 0, errOthers
		}
	}
	for at := parent; ; at = filepath.Dir(at) {
		syncFolder(at)
		if len(at) <= len(filepath.Clean(s.out)) {
			break
		}
	}
	return int64(len(text)), nil
}

// setAside moves the result that a new one replaces into the staging folder of
// the run. A result that came meanwhile goes back.
func (s *staging) setAside(final string, before *Outcome) error {
	if now, err := ReadOutcome(s.out, before.Take); err == nil && now.Sum != before.Sum {
		return errOthers
	}
	aside := filepath.Join(s.path, "replaced-"+short(before.Take))
	if err := os.RemoveAll(aside); err != nil {
		return err
	}
	err := os.Rename(final, aside)
	if errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	if err != nil {
		return err
	}
	if before.Sum != "" { // else: what stood there was damaged
		is, err := os.ReadFile(filepath.Join(aside, outcomeName))
		if err == nil && !strings.Contains(string(is), before.Sum) {
			if err := os.Rename(aside, final); err == nil {
				return errOthers
			}
		}
	}
	return os.RemoveAll(aside)
}

// writeSynced writes a new file and makes it last.
func writeSynced(name string, text []byte) error {
	file, err := os.OpenFile(name, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o666)
	if err != nil {
		return err
	}
	_, err = file.Write(text)
	if err == nil {
		err = file.Sync()
	}
	return errors.Join(err, file.Close())
}

// replaceFile writes a file under a temporary name and renames it.
func replaceFile(name string, text []byte) error {
	dir, base := filepath.Split(name)
	temporary := filepath.Join(dir, fmt.Sprintf(".%s.%s", base, runMark()))
	_ = os.Remove(temporary) // of an earlier try of this process
	err := writeSynced(temporary, text)
	if err == nil {
		err = os.Rename(temporary, name)
	}
	if err != nil {
		return errors.Join(err, os.RemoveAll(temporary))
	}
	syncFolder(filepath.Clean(dir))
	return nil
}

// syncTree makes all files and folders below dir last.
func syncTree(dir string) error {
	return filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if d.IsDir() {
			syncFolder(name)
			return nil
		}
		file, err := os.Open(name)
		if err != nil {
			return err
		}
		return errors.Join(file.Sync(), file.Close())
	})
}

// syncFolder makes the names in a folder last. Some file systems cannot.
func syncFolder(dir string) {
	if d, err := os.Open(dir); err == nil {
		_ = d.Sync()
		_ = d.Close()
	}
}
