package pipeline

import (
	"bufio"
	"errors"
	"fmt"
	"io"
	"path/filepath"
	"strings"
)

// WriteWhole writes a file that appears under its name whole or not at all. An
// existing file is replaced only with overwrite, and none of the inputs ever.
func WriteWhole(path string, overwrite bool, inputs []string, write func(io.Writer) error) (err error) {
	if err := refuseInputs([]string{path}, inputs); err != nil {
		return err
	}
	file, err := stage(path, overwrite)
	if err != nil {
		return err
	}
	defer file.abandon()
	if err := file.fill(write); err != nil {
		return err
	}
	return file.commit()
}

// fill writes the content of a staged file.
func (s *staged) fill(write func(io.Writer) error) error {
	buffered := bufio.NewWriter(s)
	if err := errors.Join(write(buffered), buffered.Flush()); err != nil {
		return fmt.Errorf("%s: %w", s.final, err)
	}
	return nil
}

// Sheet is a file that shows a result of type R: a table or a page.
type Sheet[R any] struct {
	Option string // that names the file, without --
	Path   string
	Write  func(io.Writer, R) error
}

// sheets are files under way that show one result.
type sheets[R any] struct {
	list  []Sheet[R]
	files []*staged
}

// output is a file that is going to be written, and what it is in words.
type output struct{ what, path string }

// stageSheets refuses, before the work, sheets that are inputs, that exist
// without overwrite, or that are one file with another or with one of the
// others, and stages them.
func stageSheets[R any](list []Sheet[R], overwrite bool, inputs []string, others []output) (*sheets[R], error) {
	s := &sheets[R]{list: list}
	taken := map[string]string{}
	for _, o := range others {
		key, err := placeOf(o.path)
		if err != nil {
			return nil, err
		}
		taken[key] = o.what
	}
	for _, f := range list {
		if err := refuseInputs([]string{f.Path}, inputs); err != nil {
			return nil, ofOption(err, f.Option)
		}
		key, err := placeOf(f.Path)
		if err != nil {
			return nil, err
		}
		if before, ok := taken[key]; ok {
			return nil, &UsageError{Err: fmt.Errorf("--%s %s: is the file of %s too", f.Option, f.Path, before), Hint: "give another --" + f.Option}
		}
		taken[key] = "--" + f.Option
	}
	for _, f := range list {
		file, err := stage(f.Path, overwrite)
		if err != nil {
			s.abandon()
			return nil, ofOption(err, f.Option)
		}
		s.files = append(s.files, file)
	}
	return s, nil
}

// finish writes the result into the sheets, which get their names together.
func (s *sheets[R]) finish(result R) error {
	for i, f := range s.list {
		if err := s.files[i].fill(func(w io.Writer) error { return f.Write(w, result) }); err != nil {
			return err
		}
	}
	return commitAll(s.files)
}

// abandon removes what was not committed.
func (s *sheets[R]) abandon() {
	for _, f := range s.files {
		f.abandon()
	}
}

// placeOf is the same for two names of one place, also where they differ only
// in case, and whether there is a file yet or not.
func placeOf(path string) (string, error) {
	whole, err := filepath.Abs(path)
	if err != nil {
		return "", err
	}
	if dir, err := filepath.EvalSymlinks(filepath.Dir(whole)); err == nil {
		whole = filepath.Join(dir, filepath.Base(whole))
	}
	return strings.ToLower(whole), nil
}

// ofOption has the hints of stage and refuseInputs, which speak of --out, speak
// of the option that names the file.
func ofOption(err error, option string) error {
	change := func(hint string) string {
		hint = strings.TrimSuffix(hint, ", or end --out in / to have it made")
		return strings.ReplaceAll(hint, "--out", "--"+option)
	}
	switch e := err.(type) {
	case *HintedError:
		return &HintedError{Err: e.Err, Hint: change(e.Hint)}
	case *UsageError:
		return &UsageError{Err: e.Err, Hint: change(e.Hint)}
	}
	return err
}
