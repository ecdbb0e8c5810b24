package main

import (
	"fmt"
	"path"
	"path/filepath"
	"regexp"
	"slices"
	"strings"

	"alidade/pkg/batch"
	"alidade/pkg/wav"
)

// group is the files of one take.
type group struct {
	name   string // path that names it, with ending
	paths  []string
	files  []batch.File
	head   *wav.File // of its first file; nil if that cannot be read
	frames int64     // of the take, as far as its headers say
}

// setPattern matches the names of the files of a set: before the number, the
// number, behind it.
func setPattern(pattern string) *regexp.Regexp {
	before, behind, _ := strings.Cut(pattern, channelPlace)
	glob := func(text string) string {
		q := regexp.QuoteMeta(text)
		q = strings.ReplaceAll(q, `\*`, `.*`)
		q = strings.ReplaceAll(q, `\?`, `.`)
		return q
	}
	return regexp.MustCompile(`^(` + glob(before) + `)([0-9]+)(` + glob(behind) + `)$`)
}

// groupTakes puts the files of each take together: sets by pattern, sets that
// the metadata of one-channel files announces, and chains if they are looked
// for.
func groupTakes(root string, found []batch.File, sets []*regexp.Regexp, chains bool) ([]group, error) {
	var groups []group
	bySet := map[string]int{}
	var single []batch.File
	for _, f := range found {
		dir, base := path.Split(f.Path)
		k := slices.IndexFunc(sets, func(s *regexp.Regexp) bool { return s.MatchString(base) })
		if k < 0 {
			single = append(single, f)
			continue
		}
		m := sets[k].FindStringSubmatch(base)
		pattern := dir + m[1] + channelPlace + m[3]
		at, ok := bySet[pattern]
		if !ok {
			at = len(groups)
			bySet[pattern] = at
			groups = append(groups, group{name: dir + strings.TrimRight(m[1], "_- .") + m[3], paths: []string{pattern}})
		}
		groups[at].files = append(groups[at].files, f)
	}
	for k := range groups {
		if head, ok := headOf(filepath.Join(root, filepath.FromSlash(groups[k].files[0].Path))); ok {
			groups[k].head, groups[k].frames = &head, head.Header.Frames
		}
	}
	byFolder := map[string][]batch.File{}
	var folders []string
	for _, f := range single {
		dir := path.Dir(f.Path)
		if byFolder[dir] == nil {
			folders = append(folders, dir)
		}
		byFolder[dir] = append(byFolder[dir], f)
	}
	for _, dir := range folders {
		list, err := groupFolder(root, byFolder[dir], chains)
		if err != nil {
			return nil, err
		}
		groups = append(groups, list...)
	}
	return groups, nil
}

// groupFolder does so for files of one folder. A file that cannot be read is a
// take of its own: the batch will say what is wrong with it.
func groupFolder(root string, files []batch.File, chains bool) ([]group, error) {
	heads := make([]wav.File, len(files))
	readable := make([]bool, len(files))
	for k, f := range files {
		heads[k], readable[k] = headOf(filepath.Join(root, filepath.FromSlash(f.Path)))
	}
	taken := make([]bool, len(files))
	var groups []group
	one := func(k int) group {
		g := group{name: files[k].Path, paths: []string{files[k].Path}, files: []batch.File{files[k]}}
		if readable[k] {
			g.head, g.frames = &heads[k], heads[k].Header.Frames
		}
		return g
	}
	var known []wav.File // readable ones, for chains
	var at []int
	for k := range files {
		if readable[k] {
			known, at = append(known, heads[k]), append(at, k)
		}
	}
	for k := range files {
		if taken[k] {
			continue
		}
		g := one(k)
		taken[k] = true
		switch uid := announced(heads[k]); {
		case !readable[k]:
		case uid != "":
			for i := range files {
				if i != k && readable[i] && announced(heads[i]) == uid {
					taken[i] = true
					g.files = append(g.files, files[i])
				}
			}
		case chains:
			const most = 2000
			if len(known) > most {
				return nil, fmt.Errorf("%s: %d files: chains are looked for among at most %d in a folder", path.Dir(files[k].Path), len(known), most)
			}
			chain, err := wav.FindChain(known, slices.Index(at, k))
			if err != nil {
				return nil, err
			}
			for _, c := range chain[1:] {
				if !taken[at[c]] {
					taken[at[c]] = true
					g.files = append(g.files, files[at[c]])
					g.frames += known[c].Header.Frames
				}
			}
		}
		groups = append(groups, g)
	}
	return groups, nil
}

// headOf reads what a file says of itself.
func headOf(name string) (wav.File, bool) {
	file, err := openBounded(name, 1<<62)
	if err != nil {
		return wav.File{}, false
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return wav.File{}, false
	}
	r, err := wav.Open(file, info.Size())
	if err != nil {
		return wav.File{}, false
	}
	return wav.FileOf(filepath.Base(name), r), true
}

// announced is the set that a one-channel file says it is of; empty for none.
func announced(f wav.File) string {
	if f.Header.Channels != 1 || f.Metadata == nil || f.Metadata.IXML == nil || f.Metadata.IXML.FileSet.TotalFiles == 1 {
		return ""
	}
	return f.Metadata.IXML.FileSet.FamilyUID
}
