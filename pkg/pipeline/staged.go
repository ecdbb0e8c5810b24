package pipeline

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
)

// staged is a file on its way: written under a temporary name in the folder of
// its final name, which it takes only when complete. It is an *os.File to
// write and read back through.
type staged struct {
	*os.File
	final     string
	overwrite bool
	replaced  bool // final existed when the file was staged
	sealed    bool // complete and synced
	done      bool
}

// maxStagedTries bounds the search for a free temporary name.
const maxStagedTries = 1000

// stage creates the temporary file for final. An existing final is refused
// unless overwrite is set, and then must be a regular file, whose mode is kept.
func stage(final string, overwrite bool) (*staged, error) {
	mode := fs.FileMode(0o666)
	info, err := os.Stat(final)
	switch {
	case err == nil && !info.Mode().IsRegular():
		return nil, &HintedError{
			Err:  fmt.Errorf("%s: is %s, not a file that could be replaced", final, kindOf(info.Mode())),
			Hint: "give another --out",
		}
	case err == nil && !overwrite:
		return nil, &HintedError{
			Err:  fmt.Errorf("%s: exists already", final),
			Hint: "give another --out, or --overwrite to replace it",
		}
	case err == nil:
		mode = info.Mode().Perm()
	case !errors.Is(err, fs.ErrNotExist):
		return nil, unwritable(final, err)
	}
	dir, base := filepath.Split(final)
	const maxBase = 200 // leaves room for the rest within the usual 255 bytes
	if len(base) > maxBase {
		base = strings.ToValidUTF8(base[:maxBase], "")
	}
	for try := range maxStagedTries {
		name := filepath.Join(dir, fmt.Sprintf(".%s.partial-%d", base, try))
		f, err := os.OpenFile(name, os.O_RDWR|os.O_CREATE|os.O_EXCL, mode)
		if errors.Is(err, fs.ErrExist) {
			continue
		}
		if err != nil {
			return nil, unwritable(final, err)
		}
		if info != nil {
			// The mode above went through the umask; an existing file keeps its own.
			if err := f.Chmod(mode); err != nil {
				return nil, errors.Join(err, f.Close(), os.Remove(name))
			}
		}
		return &staged{File: f, final: final, overwrite: overwrite, replaced: info != nil}, nil
	}
	return nil, fmt.Errorf("%s: %d temporary files of earlier runs stand in its folder: remove those named .%s.partial-*", final, maxStagedTries, base)
}

// commitAll commits files that belong together: all are whole and synced before
// the first gets its name, and if one cannot get it, those before it that
// replaced nothing are taken away again.
func commitAll(files []*staged) error {
	for _, s := range files {
		if err := s.seal(); err != nil {
			return err
		}
	}
	for k, s := range files {
		if err := s.commit(); err != nil {
			for _, before := range files[:k] {
				if !before.replaced {
					err = errors.Join(err, os.Remove(before.final))
				}
			}
			return err
		}
	}
	return nil
}

// seal syncs and closes the file, which is complete. On an error it is removed.
func (s *staged) seal() error {
	if s.done || s.sealed {
		return nil
	}
	if err := errors.Join(s.Sync(), s.Close()); err != nil {
		s.done = true
		return errors.Join(err, os.Remove(s.Name()))
	}
	s.sealed = true
	return nil
}

// commit seals the file and gives it its final name, exclusively unless it may
// overwrite. On an error the file is removed.
func (s *staged) commit() error {
	if s.done {
		return nil
	}
	if err := s.seal(); err != nil {
		return err
	}
	s.done = true
	tmp := s.Name()
	if !s.overwrite {
		// A link is exclusive where a rename would replace what came in between.
		err := os.Link(tmp, s.final)
		switch {
		case err == nil:
			if err := os.Remove(tmp); err != nil {
				return err
			}
			return syncFolder(filepath.Dir(s.final))
		case errors.Is(err, fs.ErrExist):
			return errors.Join(fmt.Errorf("%s: came into being while it was written", s.final), os.Remove(tmp))
		}
		// File systems without hard links: look again, then rename.
		if _, err := os.Lstat(s.final); err == nil {
			return errors.Join(fmt.Errorf("%s: came into being while it was written", s.final), os.Remove(tmp))
		}
	}
	if err := os.Rename(tmp, s.final); err != nil {
		return errors.Join(err, os.Remove(tmp))
	}
	return syncFolder(filepath.Dir(s.final))
}

// abandon closes and removes the file unless it was committed. Its errors are
// of no use to anyone: the run has failed already.
func (s *staged) abandon() {
	if s == nil || s.done {
		return
	}
	s.done = true
	_ = s.Close()
	_ = os.Remove(s.Name())
}

// syncFolder makes a rename in dir last through a loss of power. A file system
// that cannot sync folders is left to itself.
func syncFolder(dir string) error {
	d, err := os.Open(dir)
	if err != nil {
		return err
	}
	_ = d.Sync()
	return d.Close()
}

// kindOf names what a path is when it is not a regular file.
func kindOf(mode fs.FileMode) string {
	switch {
	case mode.IsDir():
		return "a folder"
	case mode&fs.ModeNamedPipe != 0:
		return "a named pipe"
	case mode&fs.ModeSocket != 0:
		return "a socket"
	case mode&fs.ModeDevice != 0:
		return "a device"
	case mode&fs.ModeSymlink != 0:
		return "a link"
	case mode.IsRegular():
		return "a file"
	}
	return "not a regular file"
}

// refuseInputs reports outputs that are the same file as an input, by name, by
// link or by a name that differs only in case.
func refuseInputs(outputs, inputs []string) error {
	type known struct {
		info fs.FileInfo // nil where there is no such file
		abs  string
	}
	look := func(path string) (k known, err error) {
		if info, err := os.Stat(path); err == nil {
			k.info = info
		}
		k.abs, err = filepath.Abs(path)
		return k, err
	}
	read := make([]known, len(inputs))
	for i, in := range inputs {
		var err error
		if read[i], err = look(in); err != nil {
			return err
		}
	}
	for _, out := range outputs {
		o, err := look(out)
		if err != nil {
			return err
		}
		for i, in := range inputs {
			if o.info != nil && read[i].info != nil && os.SameFile(read[i].info, o.info) {
				return &UsageError{Err: fmt.Errorf("%s: is the input %s: an input is never written to", out, in), Hint: "give another --out"}
			}
			if strings.EqualFold(o.abs, read[i].abs) {
				return &UsageError{Err: fmt.Errorf("%s: differs from the input %s only in case: on many disks that is the same file", out, in), Hint: "give another --out"}
			}
		}
	}
	return nil
}
