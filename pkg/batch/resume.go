package batch

import (
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
)

// standing is what a run finds of a take before it begins.
type standing struct {
	state  State    // of the result that holds; empty if the take is to be made
	before *Outcome // what a new result replaces; nil if nothing stands there
}

// resume finds out which takes need nothing more.
type resume struct {
	plan   *Plan
	s      *Settings
	ledger map[string]Line // the last commit of each take
}

func newResume(plan *Plan, s *Settings) (*resume, error) {
	lines, _, err := ReadLedgers(s.Out)
	if err != nil {
		return nil, err
	}
	r := &resume{plan: plan, s: s, ledger: make(map[string]Line, len(lines))}
	for _, l := range lines {
		if l.Event == EventCommitted {
			r.ledger[l.Take] = l
		}
	}
	return r, nil
}

// look finds out how a take stands.
func (r *resume) look(t Take) (standing, error) {
	recipe := r.plan.Recipes[t.Recipe].ID
	if l, ok := r.ledger[t.Key]; ok && l.State != Failed && l.Recipe == recipe {
		info, err := os.Lstat(filepath.Join(folderOf(r.s.Out, t.Key), outcomeName))
		if err == nil && info.Size() == l.Size && r.atAGlance(t, l.Files) && r.complete(t, l.Things, l.Bytes) {
			return standing{state: l.State}, nil
		}
	}
	o, err := ReadOutcome(r.s.Out, t.Key)
	var damaged *DamagedError
	switch {
	case errors.As(err, &damaged):
		return standing{before: &Outcome{Take: t.Key}}, nil
	case errors.Is(err, fs.ErrNotExist):
		// A folder of that name without an outcome is not of our making, unless
		// it is empty.
		entries, err := os.ReadDir(folderOf(r.s.Out, t.Key))
		if err == nil && len(entries) > 0 {
			return standing{}, &OccupiedError{Path: folderOf(r.s.Out, t.Key)}
		}
		return standing{}, nil
	case err != nil:
		return standing{}, err
	}
	if r.holds(t, o) {
		return standing{state: o.State}, nil
	}
	return standing{before: o}, nil
}

// holds reports whether an outcome is what making the take again would give.
func (r *resume) holds(t Take, o *Outcome) bool {
	switch {
	case o.Recipe != r.plan.Recipes[t.Recipe].ID:
		return false
	case o.State == Failed && r.s.RetryFailed, !o.present(r.s.Out):
		return false
	case o.Cause == CauseVanished || o.Cause == CauseChanged:
		// Worth another look only if all files are there as planned.
		now, err := r.s.stat(t)
		return err != nil || !sameSizes(now, t.Files)
	}
	return r.atAGlance(t, o.Files) || r.byContent(t, o.Files)
}

// complete reports whether the folder of a take has as many entries as it was
// committed with, and as many bytes in its outputs: a file that somebody took
// away or cut shows at one look a take. Where more lies there, the outcome is
// asked for each output.
func (r *resume) complete(t Take, entries int, bytes int64) bool {
	list, err := os.ReadDir(folderOf(r.s.Out, t.Key))
	if err != nil || len(list) != entries || entries == 0 {
		return false
	}
	for _, e := range list {
		info, err := e.Info()
		if err != nil {
			return false
		}
		if e.Name() != outcomeName && info.Mode().IsRegular() {
			bytes -= info.Size()
		}
	}
	return bytes == 0
}

// atAGlance compares paths, sizes and times of change.
func (r *resume) atAGlance(t Take, made []File) bool {
	now, err := r.s.stat(t)
	if err != nil {
		return false
	}
	return slices.EqualFunc(now, made, func(a, b File) bool {
		return a.Path == b.Path && a.Bytes == b.Bytes && a.ModifiedNS == b.ModifiedNS
	})
}

// byContent compares paths, sizes and hashes: a copy has another time.
func (r *resume) byContent(t Take, made []File) bool {
	now, err := r.s.stat(t)
	if err != nil || !slices.EqualFunc(now, made, func(a, b File) bool {
		return a.Path == b.Path && a.Bytes == b.Bytes && b.SHA256 != ""
	}) {
		return false
	}
	for _, f := range made {
		if sum, _, err := hashFile(r.s.input(f.Path)); err != nil || sum != f.SHA256 {
			return false
		}
	}
	return true
}

// stat looks at the files of a take.
func (s *Settings) stat(t Take) ([]File, error) {
	list := make([]File, 0, len(t.Files))
	for _, f := range t.Files {
		info, err := os.Stat(s.input(f.Path))
		if err != nil {
			return nil, err
		}
		list = append(list, File{Path: f.Path, Bytes: info.Size(), ModifiedNS: info.ModTime().UnixNano()})
	}
	return list, nil
}

// input is the path of a file of a take.
func (s *Settings) input(path string) string { return filepath.Join(s.Root, filepath.FromSlash(path)) }

func sameSizes(a, b []File) bool {
	return slices.EqualFunc(a, b, func(x, y File) bool { return x.Path == y.Path && x.Bytes == y.Bytes })
}

// OccupiedError is a folder with the name of a take that holds something else.
type OccupiedError struct{ Path string }

// Error implements error.
func (e *OccupiedError) Error() string {
	return e.Path + ": holds files that are no result of a batch: move them away, or give outputs.folder another name"
}
