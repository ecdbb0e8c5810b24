package batch

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strings"
)

// maxFound bounds the files of one job.
const maxFound = 1_000_000

// File is a file of a take as it was seen.
type File struct {
	Path       string `json:"path"`  // relative to the root, with slashes
	Bytes      int64  `json:"bytes"` // size
	ModifiedNS int64  `json:"modified_ns,omitempty"`
	SHA256     string `json:"sha256,omitempty"`
}

// LeftOut is a file that a plan leaves out, and why.
type LeftOut struct {
	Path   string `json:"path"`
	Reason string `json:"reason"`
}

// CheckPattern reports a pattern that Find could not use. In a pattern * and ?
// and [a-z] stand for characters within a name, and ** for any number of
// folders.
func CheckPattern(pattern string) error {
	switch {
	case pattern == "":
		return errors.New("an empty pattern")
	case path.IsAbs(pattern) || filepath.IsAbs(pattern):
		return fmt.Errorf("pattern %q: want a path relative to the root of the takes", pattern)
	case strings.Contains(pattern, `\`):
		return fmt.Errorf("pattern %q: want / between folders", pattern)
	}
	for _, part := range strings.Split(pattern, "/") {
		if part == ".." {
			return fmt.Errorf("pattern %q: leads out of the root of the takes", pattern)
		}
		if _, err := path.Match(part, ""); err != nil {
			return fmt.Errorf("pattern %q: %q is not a pattern", pattern, part)
		}
	}
	return nil
}

// Match reports whether a path with slashes fits a pattern as Find has it.
func Match(pattern, name string) bool {
	return matchParts(strings.Split(path.Clean(pattern), "/"), strings.Split(name, "/"))
}

func matchParts(pattern, name []string) bool {
	// Where a ** was passed last, and how much it has swallowed: going back
	// there alone keeps the work within the product of the two lengths.
	p, n, star, swallowed := 0, 0, -1, 0
	for n < len(name) {
		if p < len(pattern) && pattern[p] == "**" {
			star, swallowed = p, n
			p++
			continue
		}
		if p < len(pattern) {
			if ok, err := path.Match(pattern[p], name[n]); err == nil && ok {
				p, n = p+1, n+1
				continue
			}
		}
		if star < 0 {
			return false
		}
		swallowed++
		p, n = star+1, swallowed
	}
	for p < len(pattern) && pattern[p] == "**" {
		p++
	}
	return p == len(pattern)
}

// fixedFolder is the folder that every match of a pattern lies in.
func fixedFolder(pattern string) string {
	parts := strings.Split(path.Clean(pattern), "/")
	k := 0
	for k < len(parts)-1 && !strings.ContainsAny(parts[k], "*?[") {
		k++
	}
	return path.Join(append([]string{"."}, parts[:k]...)...)
}

// Find returns the regular files below root that fit a pattern and none of
// exclude, sorted by path, and what was left out and why. Folders in skip
// (paths as root is given, such as the output folder) and names that begin with
// a dot are not entered. Links to files are followed, links to folders are not.
func Find(root string, patterns, exclude, skip []string) (found []File, left []LeftOut, err error) {
	for _, p := range slices.Concat(patterns, exclude) {
		if err := CheckPattern(p); err != nil {
			return nil, nil, err
		}
	}
	var starts []string
	for _, p := range patterns {
		starts = append(starts, fixedFolder(p))
	}
	slices.Sort(starts)
	skipped := map[string]bool{}
	for _, s := range skip {
		skipped[filepath.Clean(s)] = true
	}
	seen := map[string]bool{}
	done := []string{}
	for _, start := range slices.Compact(starts) {
		if slices.ContainsFunc(done, func(d string) bool { return d == "." || strings.HasPrefix(start, d+"/") }) {
			continue
		}
		done = append(done, start)
		top := filepath.Join(root, filepath.FromSlash(start))
		err := filepath.WalkDir(top, func(name string, d fs.DirEntry, err error) error {
			if err != nil {
				if errors.Is(err, fs.ErrNotExist) {
					return nil // went away meanwhile, or a pattern's folder that is not there
				}
				return err
			}
			if name != top && (strings.HasPrefix(d.Name(), ".") || skipped[filepath.Clean(name)]) {
				if d.IsDir() {
					return fs.SkipDir
				}
				return nil
			}
			if d.IsDir() {
				return nil
			}
			rel, err := filepath.Rel(root, name)
			if err != nil {
				return err
			}
			rel = filepath.ToSlash(rel)
			fits := func(p string) bool { return Match(p, rel) }
			if seen[rel] || !slices.ContainsFunc(patterns, fits) {
				return nil
			}
			seen[rel] = true
			if k := slices.IndexFunc(exclude, fits); k >= 0 {
				left = append(left, LeftOut{rel, fmt.Sprintf("excluded by %q", exclude[k])})
				return nil
			}
			info, err := os.Stat(name)
			switch {
			case errors.Is(err, fs.ErrNotExist):
				left = append(left, LeftOut{rel, "a link to nothing"})
				return nil
			case err != nil:
				return err
			case !info.Mode().IsRegular():
				left = append(left, LeftOut{rel, "not a regular file"})
				return nil
			}
			if len(found) == maxFound {
				return fmt.Errorf("%s: more than %d files: cut the job into several", root, maxFound)
			}
			found = append(found, File{Path: rel, Bytes: info.Size(), ModifiedNS: info.ModTime().UnixNano()})
			return nil
		})
		if err != nil {
			return nil, nil, err
		}
	}
	slices.SortFunc(found, func(a, b File) int { return strings.Compare(a.Path, b.Path) })
	slices.SortFunc(left, func(a, b LeftOut) int { return strings.Compare(a.Path, b.Path) })
	return found, left, nil
}
