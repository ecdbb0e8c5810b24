package batch

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
)

// OutcomeSchema is the version of the form of an outcome.
const OutcomeSchema = "alidade-outcome/1"

// outcomeName is the file of each take's folder that says what came of it.
const outcomeName = "outcome.json"

// maxOutcomeBytes bounds an outcome that is read.
const maxOutcomeBytes = 16 << 20

// State is what came of a take.
type State string

// The states. Done and Missed have outputs.
const (
	Done   State = "done"
	Missed State = "missed" // made, but short of a limit that was asked for
	Failed State = "failed"
)

// The causes that the batch itself finds.
const (
	CauseVanished = "vanished" // a file of the take is not there any more
	CauseChanged  = "changed"  // a file of the take changed
	CauseTimeout  = "timeout"  // it took too long
	CauseCrash    = "crash"    // the work ended in a panic
	CauseFailed   = "failed"   // the work gave no cause
)

// Outcome is what came of a take, as plain data. It lies in the take's folder.
type Outcome struct {
	Schema  string              `json:"schema"`
	Take    string              `json:"take"` // key
	PlanID  string              `json:"plan_id"`
	Recipe  string              `json:"recipe"` // its ID
	Version string              `json:"version"`
	State   State               `json:"state"`
	Cause   string              `json:"cause,omitempty"` // stable, of a take that is not done
	Error   string              `json:"error,omitempty"` // what was wrong, in words
	Files   []File              `json:"files"`           // what it was made from
	Outputs []File              `json:"outputs"`         // files of its folder but this one, without times
	Figures map[string]*float64 `json:"figures,omitempty"`
	Sum     string              `json:"sum"` // SHA-256 of all of the above
}

// seal computes the checksum and returns the text of the file.
func (o *Outcome) seal() ([]byte, error) {
	sum, err := o.checksum()
	if err != nil {
		return nil, err
	}
	o.Sum = sum
	text, err := json.MarshalIndent(o, "", " ")
	if err != nil {
		return nil, fmt.Errorf("outcome of %s: %w", o.Take, err)
	}
	return append(text, '\n'), nil
}

func (o Outcome) checksum() (string, error) {
	o.Sum = ""
	text, err := json.Marshal(o)
	if err != nil {
		return "", fmt.Errorf("outcome of %s: %w", o.Take, err)
	}
	return digest(text), nil
}

// folderOf is the final folder of a take.
func folderOf(out, key string) string { return filepath.Join(out, filepath.FromSlash(key)) }

// ReadOutcome reads what came of a take. The error is fs.ErrNotExist where
// nothing was committed.
func ReadOutcome(out, key string) (*Outcome, error) {
	o, err := readOutcome(folderOf(out, key))
	if err == nil && o.Take != key {
		return nil, &DamagedError{fmt.Errorf("%s: belongs to take %s", filepath.Join(folderOf(out, key), outcomeName), o.Take)}
	}
	return o, err
}

// TakeIn returns the key of the take whose result lies in a folder that is named
// after it, empty where none lies there.
func TakeIn(dir string) string {
	dir, err := filepath.Abs(dir)
	if err != nil {
		return ""
	}
	o, err := readOutcome(dir)
	if err != nil || CheckKey(o.Take) != nil || !strings.HasSuffix(filepath.ToSlash(dir), "/"+o.Take) {
		return ""
	}
	return o.Take
}

// readOutcome reads the outcome in a folder.
func readOutcome(dir string) (*Outcome, error) {
	name := filepath.Join(dir, outcomeName)
	file, err := os.Open(name)
	if err != nil {
		return nil, err
	}
	text, err := io.ReadAll(io.LimitReader(file, maxOutcomeBytes+1))
	if err = errors.Join(err, file.Close()); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	o := &Outcome{}
	if err := json.Unmarshal(text, o); err != nil || len(text) > maxOutcomeBytes {
		return nil, &DamagedError{fmt.Errorf("%s: not an outcome: %w", name, errors.Join(err))}
	}
	sum, err := o.checksum()
	if err != nil {
		return nil, err
	}
	switch {
	case o.Schema != OutcomeSchema:
		return nil, &DamagedError{fmt.Errorf("%s: form %q, want %q", name, o.Schema, OutcomeSchema)}
	case sum != o.Sum:
		return nil, &DamagedError{fmt.Errorf("%s: its checksum does not fit", name)}
	}
	return o, nil
}

// DamagedError is a committed result that is not as it was committed.
type DamagedError struct{ Err error }

// Error implements error.
func (e *DamagedError) Error() string { return e.Err.Error() }

// Unwrap gives the cause.
func (e *DamagedError) Unwrap() error { return e.Err }

// Verify holds the files of a take's folder against its outcome: size and
// SHA-256 of each, none missing and none more.
func (o *Outcome) Verify(out string) error {
	dir := folderOf(out, o.Take)
	now, err := outputsOf(dir)
	if err != nil {
		return fmt.Errorf("%s: %w", dir, err)
	}
	if slices.Equal(now, o.Outputs) {
		return nil
	}
	by := map[string]File{}
	for _, f := range now {
		by[f.Path] = f
	}
	var faults []string
	for _, f := range o.Outputs {
		switch is, ok := by[f.Path]; {
		case !ok:
			faults = append(faults, f.Path+" is missing")
		case is != f:
			faults = append(faults, f.Path+" has changed")
		}
		delete(by, f.Path)
	}
	for _, f := range now {
		if _, more := by[f.Path]; more {
			faults = append(faults, f.Path+" does not belong there")
		}
	}
	return &DamagedError{fmt.Errorf("%s: %s", dir, strings.Join(faults, ", "))}
}

// entries is how many entries the folder of the take has.
func (o *Outcome) entries() int {
	top := map[string]bool{outcomeName: true}
	for _, f := range o.Outputs {
		first, _, _ := strings.Cut(f.Path, "/")
		top[first] = true
	}
	return len(top)
}

// bytes is how long the outputs are together that lie in the take's folder
// itself.
func (o *Outcome) bytes() int64 {
	n := int64(0)
	for _, f := range o.Outputs {
		if !strings.Contains(f.Path, "/") {
			n += f.Bytes
		}
	}
	return n
}

// present reports whether all outputs are there in their sizes.
func (o *Outcome) present(out string) bool {
	dir := folderOf(out, o.Take)
	return !slices.ContainsFunc(o.Outputs, func(f File) bool {
		info, err := os.Lstat(filepath.Join(dir, filepath.FromSlash(f.Path)))
		return err != nil || info.Size() != f.Bytes
	})
}

// outputsOf lists the files below dir but the outcome, sorted, with hashes.
func outputsOf(dir string) ([]File, error) {
	list := []File{}
	err := filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		rel, err := filepath.Rel(dir, name)
		if err != nil {
			return err
		}
		if rel = filepath.ToSlash(rel); rel == outcomeName {
			return nil
		}
		f := File{Path: rel}
		if f.SHA256, f.Bytes, err = hashFile(name); err != nil {
			return err
		}
		list = append(list, f)
		return nil
	})
	return list, err
}

// hashFile returns the SHA-256 and the size of a file.
func hashFile(name string) (sum string, size int64, err error) {
	file, err := os.Open(name)
	if err != nil {
		return "", 0, err
	}
	h := sha256.New()
	size, err = io.Copy(h, file)
	return hex.EncodeToString(h.Sum(nil)), size, errors.Join(err, file.Close())
}

// sameBytes reports whether a file is the same text.
func sameBytes(name string, text []byte) bool {
	is, err := os.ReadFile(name)
	return err == nil && bytes.Equal(is, text)
}
