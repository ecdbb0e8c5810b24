package pipeline

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"alidade/pkg/wav"
)

// joining says how the paths of a take belong together.
type joining struct {
	chain     bool // one after the other, in the order given; else side by side
	findChain bool // each is the first file of a chain to be found
	findSet   bool // the path is a file of a set to be found by its iXML
}

// joining of the options.
func (o Options) joining() joining { return joining{o.Chain, o.FindChain, o.FindSet} }

// A row is a stretch of time of a take: the files whose channels lie side by
// side, each a strand of files one after the other. A take is rows one after
// the other, which is but one unless sets are chained.
type (
	strand []string
	row    []strand
)

// channelMark stands for the channel number in the pattern of a set.
const channelMark = "{ch}"

// gathering finds the files of a take. A path with {ch} is the set of files
// whose names fit. Several paths are a set, or with chain a chain of files or
// of sets. A file of one channel whose iXML names a set is read with the set.
type gathering struct {
	how     joining
	folders map[string][]wav.File // readable WAV files by folder
	notes   []Finding
}

// plan returns the files of the take of the paths.
func (g *gathering) plan(paths []string) ([]row, error) {
	if len(paths) == 0 {
		return nil, &UsageError{Err: errors.New("a take of no files")}
	}
	if g.how.findSet && (len(paths) > 1 || strings.Contains(paths[0], channelMark)) {
		return nil, &UsageError{Err: fmt.Errorf("--find-set with %d files named: it finds them from one", len(paths)), Hint: "name one file of the set"}
	}
	var rows []row
	for _, path := range paths {
		r, err := g.row(path, paths)
		if err != nil {
			return nil, err
		}
		if g.how.chain || len(rows) == 0 {
			rows = append(rows, r)
		} else {
			rows[0] = append(rows[0], r...)
		}
	}
	return rows, nil
}

// row returns the files that one path stands for; all are the paths given.
func (g *gathering) row(path string, all []string) (row, error) {
	dir, base := filepath.Split(path)
	switch {
	case strings.Contains(dir, channelMark):
		return nil, &UsageError{Err: fmt.Errorf("%s: %s stands in the folder: it belongs into the file's name", path, channelMark)}
	case strings.Contains(base, channelMark):
		return g.pattern(dir, base)
	case g.how.findSet:
		return g.set(dir, base)
	case len(all) == 1 && !g.how.chain:
		if total, err := announcedSet(path); err != nil {
			return nil, err
		} else if total {
			return g.set(dir, base)
		}
	}
	if g.how.findChain {
		s, err := g.chainFrom(dir, base, all)
		return row{s}, err
	}
	return row{{path}}, nil
}

// pattern returns the set of files in dir whose names fit.
func (g *gathering) pattern(dir, base string) (row, error) {
	entries, err := os.ReadDir(here(dir))
	if err != nil {
		return nil, unreadable(err)
	}
	var names []string
	for _, e := range entries {
		names = append(names, e.Name())
	}
	members, err := wav.MatchPattern(base, names)
	if err != nil {
		return nil, &HintedError{
			Err:  fmt.Errorf("%s: %w", here(dir), err),
			Hint: channelMark + " stands for the channel number, 1, 2, 3 or 01, 02, 03; put the pattern in quotes; with no number left out",
		}
	}
	var r row
	var taken []string
	for _, m := range members {
		taken = append(taken, dir+m.Name)
	}
	for _, m := range members {
		s := strand{dir + m.Name}
		if g.how.findChain {
			if s, err = g.chainFrom(dir, m.Name, taken); err != nil {
				return nil, err
			}
		}
		r = append(r, s)
	}
	return r, nil
}

// set returns the set that the iXML of a file names.
func (g *gathering) set(dir, base string) (row, error) {
	files, first, err := g.folder(dir, base)
	if err != nil {
		return nil, err
	}
	found, err := wav.FindSet(files, first)
	if err != nil {
		return nil, &HintedError{
			Err:  fmt.Errorf("%s%w", dir, err),
			Hint: "put all files of the set into one folder, or name them: \"NAME_" + channelMark + ".wav\", or --set FILE FILE ...",
		}
	}
	var r row
	count := 0
	for _, chain := range found {
		var s strand
		for _, k := range chain {
			s = append(s, dir+files[k].Name)
		}
		count += len(s)
		r = append(r, s)
	}
	if count > 1 {
		g.notes = append(g.notes, Finding{Code: "set-found", Severity: Info, Message: fmt.Sprintf(
			"%s%s names a set in its iXML: its %d files are read as one take", dir, base, count)})
	}
	return r, nil
}

// chainFrom returns the chain that starts with a file. Other files named for
// the take are no part of it.
func (g *gathering) chainFrom(dir, base string, named []string) (strand, error) {
	files, _, err := g.folder(dir, base)
	if err != nil {
		return nil, err
	}
	files = slices.DeleteFunc(slices.Clone(files), func(f wav.File) bool {
		return f.Name != base && slices.Contains(named, dir+f.Name)
	})
	first := slices.IndexFunc(files, func(f wav.File) bool { return f.Name == base })
	chain, err := wav.FindChain(files, first)
	if err != nil {
		return nil, &HintedError{Err: fmt.Errorf("%s%w", dir, err), Hint: "name the files in their order with --chain"}
	}
	var s strand
	for _, k := range chain {
		s = append(s, dir+files[k].Name)
	}
	if len(s) == 1 {
		g.notes = append(g.notes, Finding{Code: "chain-not-found", Severity: Info, Message: fmt.Sprintf(
			"no file goes on where %s%s ends, by its time reference or its name: read alone", dir, base)})
	} else {
		g.notes = append(g.notes, Finding{Code: "chain-found", Severity: Info, Message: fmt.Sprintf(
			"%s%s goes on in %s: read as one take of %d files", dir, base, filepath.Base(s[1]), len(s))})
	}
	return s, nil
}

// maxFolder bounds how many files of a folder are looked at.
const maxFolder = 20000

// folder returns the readable WAV files of a folder and which of them base is.
// What cannot be read is no part of any take, but base must be readable.
func (g *gathering) folder(dir, base string) ([]wav.File, int, error) {
	files, ok := g.folders[dir]
	if !ok {
		entries, err := os.ReadDir(here(dir))
		if err != nil {
			return nil, 0, err
		}
		if len(entries) > maxFolder {
			return nil, 0, &HintedError{
				Err:  fmt.Errorf("%s: %d entries: up to %d are looked through for the files of a take", here(dir), len(entries), maxFolder),
				Hint: "name the files in their order with --chain or --set",
			}
		}
		ending := strings.ToLower(filepath.Ext(base))
		for _, e := range entries {
			if e.Name() != base && strings.ToLower(filepath.Ext(e.Name())) != ending {
				continue
			}
			if f, err := headOf(dir + e.Name()); err == nil {
				f.Name = e.Name()
				files = append(files, f)
			}
		}
		g.folders[dir] = files
	}
	k := slices.IndexFunc(files, func(f wav.File) bool { return f.Name == base })
	if k < 0 {
		f, err := headOf(dir + base)
		if err != nil {
			return nil, 0, err
		}
		f.Name = base
		files = append(files, f)
		g.folders[dir] = files
		k = len(files) - 1
	}
	return files, k, nil
}

// headOf reads the header and the metadata of a file.
func headOf(path string) (wav.File, error) {
	in, err := openInput(path, false)
	if err != nil {
		return wav.File{}, err
	}
	defer in.Close()
	r, err := wav.Open(in, in.info.Size())
	if err != nil {
		return wav.File{}, takeError(path, err)
	}
	return wav.FileOf(path, r), nil
}

// announcedSet says whether a file of one channel is one of a set by its iXML.
func announcedSet(path string) (bool, error) {
	f, err := headOf(path)
	if err != nil {
		return false, err
	}
	x := f.Metadata.IXML
	return f.Header.Channels == 1 && x != nil && x.FileSet.FamilyUID != "" && x.FileSet.TotalFiles != 1, nil
}

// here is dir, or the current folder where a path has none.
func here(dir string) string {
	if dir == "" {
		return "."
	}
	return dir
}

// Describe returns what the header and the metadata of a file say.
func Describe(path string) (wav.Description, error) {
	in, err := openInput(path, false)
	if err != nil {
		return wav.Description{}, err
	}
	defer in.Close()
	r, err := wav.Open(in, in.info.Size())
	if err != nil {
		return wav.Description{}, takeError(path, err)
	}
	return r.Describe(path), nil
}

// Files returns the files that a path with {ch} stands for, in the order of
// their numbers, and any other path as it is.
func Files(path string) ([]string, error) {
	dir, base := filepath.Split(path)
	if !strings.Contains(base, channelMark) {
		return []string{path}, nil
	}
	r, err := (&gathering{}).pattern(dir, base)
	if err != nil {
		return nil, err
	}
	var list []string
	for _, s := range r {
		list = append(list, s...)
	}
	return list, nil
}
