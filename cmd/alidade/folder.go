package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"alidade/pkg/audio"
	"alidade/pkg/pipeline"
	"alidade/pkg/wav"
)

// folder is a folder on its way: filled under a temporary name beside its final
// one, which it takes only when it is complete.
type folder struct {
	final, temporary string
	done             bool
}

// maxFolderTries bounds the search for a free temporary name.
const maxFolderTries = 1000

// newFolder begins a folder. A final name that exists is refused, unless it is
// an empty folder.
func newFolder(final string) (*folder, error) {
	final = filepath.Clean(final)
	if entries, err := os.ReadDir(final); err == nil && len(entries) > 0 {
		return nil, &pipeline.HintedError{
			Err:  fmt.Errorf("%s: exists already, with %d entries in it", final, len(entries)),
			Hint: "give another --out, or remove it first",
		}
	} else if _, serr := os.Lstat(final); err != nil && serr == nil {
		return nil, &pipeline.HintedError{Err: fmt.Errorf("%s: exists already", final), Hint: "give another --out"}
	}
	parent, base := filepath.Split(final)
	if parent != "" {
		if err := os.MkdirAll(parent, 0o777); err != nil {
			return nil, err
		}
	}
	for try := range maxFolderTries {
		name := filepath.Join(parent, fmt.Sprintf(".%s.partial-%d", base, try))
		err := os.Mkdir(name, 0o777)
		if err == nil {
			return &folder{final: final, temporary: name}, nil
		}
		if !errors.Is(err, fs.ErrExist) {
			return nil, err
		}
	}
	return nil, fmt.Errorf("%s: %d temporary folders of earlier runs stand beside it: remove those named .%s.partial-*", final, maxFolderTries, base)
}

// sound is a WAV file of a folder on its way. It is an audio.Sink.
type sound struct {
	where    string // for errors: the final place
	file     *os.File
	writer   *wav.Writer
	encoding wav.Encoding
}

// sound begins a WAV file.
func (f *folder) sound(name string, format audio.Format, encoding wav.Encoding) (*sound, error) {
	s := &sound{where: filepath.Join(f.final, name), encoding: encoding}
	var err error
	if s.file, err = f.open(name); err != nil {
		return nil, err
	}
	s.writer, err = wav.NewWriter(s.file, wav.Format{Rate: format.Rate, Channels: format.Channels, Encoding: encoding}, wav.Option{})
	if err != nil {
		return nil, errors.Join(fmt.Errorf("%s: %w", s.where, err), s.file.Close())
	}
	return s, nil
}

// Write implements audio.Sink.
func (s *sound) Write(src audio.Block) error {
	if err := s.writer.Write(src); err != nil {
		return fmt.Errorf("%s: %w", s.where, bare(err))
	}
	return nil
}

// close finishes the file and makes it last. A file that would clip is refused.
func (s *sound) close() error {
	err := s.writer.Close()
	if over := s.writer.Written(); err == nil && over.Over > 0 && !s.encoding.Float() {
		err = &pipeline.HintedError{
			Err:  fmt.Errorf("%d frames beyond full scale, the largest %+.1f dBFS: %s would clip", over.Over, audio.AmplitudeDB(over.Peak), s.encoding),
			Hint: "lower the levels of the scenario, or give --format float32",
		}
	}
	return finish(s.file, s.where, err)
}

// abandon closes an unfinished file; its folder removes it.
func (s *sound) abandon() {
	if s != nil {
		_ = s.file.Close() // nothing of it is kept
	}
}

// open makes a file in the folder.
func (f *folder) open(name string) (*os.File, error) {
	return os.OpenFile(filepath.Join(f.temporary, name), os.O_RDWR|os.O_CREATE|os.O_EXCL, 0o666)
}

// write makes a file of data.
func (f *folder) write(name string, data []byte) error {
	file, err := f.open(name)
	if err != nil {
		return err
	}
	_, err = file.Write(data)
	return finish(file, filepath.Join(f.final, name), err)
}

// finish syncs a file whose writing ended with err, and closes it.
func finish(file *os.File, where string, err error) error {
	if err == nil {
		err = file.Sync()
	}
	if cerr := file.Close(); err == nil {
		err = cerr
	}
	if err != nil {
		return fmt.Errorf("%s: %w", where, bare(err))
	}
	return nil
}

// commit gives the folder its final name.
func (f *folder) commit() error {
	// Remove takes away an empty folder and nothing else, Rename replaces none.
	if err := os.Remove(f.final); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	if err := os.Rename(f.temporary, f.final); err != nil {
		return err
	}
	f.done = true
	parent, err := os.Open(filepath.Dir(f.final))
	if err != nil {
		return nil // it has its name; what lasts is up to the system
	}
	_ = parent.Sync() // some file systems cannot sync a folder
	return parent.Close()
}

// abandon removes what was written, unless the folder has its final name.
func (f *folder) abandon() {
	if !f.done {
		_ = os.RemoveAll(f.temporary) // the run has failed already
	}
}
