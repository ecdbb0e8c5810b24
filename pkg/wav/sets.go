package wav

import (
	"cmp"
	"errors"
	"fmt"
	"math/big"
	"slices"
	"strconv"
	"strings"
)

// File is what is known of a file without its samples, to find out which files
// make a take.
type File struct {
	Name     string
	Header   Header
	Metadata *Metadata
}

// FileOf describes an open file.
func FileOf(name string, r *Reader) File {
	return File{Name: name, Header: r.Header(), Metadata: r.Metadata()}
}

// Member is a file of a set, with the number its name carries.
type Member struct {
	Number int
	Name   string
}

const patternMark = "{ch}"

// MatchPattern picks the names that fit a pattern such as "roof_07_{ch}.wav",
// in which {ch} stands for a number, and orders them by it. No name, two with
// the same number, or a number missing between the first and the last is an
// error.
func MatchPattern(pattern string, names []string) ([]Member, error) {
	before, behind, ok := strings.Cut(pattern, patternMark)
	if !ok || strings.Contains(behind, patternMark) {
		return nil, fmt.Errorf("pattern %q: want %s in it once", pattern, patternMark)
	}
	var list []Member
	for _, name := range names {
		rest, starts := strings.CutPrefix(name, before)
		digits, ends := strings.CutSuffix(rest, behind)
		n, err := strconv.ParseUint(digits, 10, 31)
		if !starts || !ends || err != nil {
			continue
		}
		list = append(list, Member{int(n), name})
	}
	if len(list) == 0 {
		return nil, fmt.Errorf("pattern %q: none of %d files fits", pattern, len(names))
	}
	slices.SortStableFunc(list, func(a, b Member) int { return a.Number - b.Number })
	var faults []error
	for k, m := range list[1:] {
		switch was := list[k]; {
		case m.Number == was.Number:
			faults = append(faults, fmt.Errorf("pattern %q: %s and %s are both number %d", pattern, was.Name, m.Name, m.Number))
		case m.Number == was.Number+2:
			faults = append(faults, fmt.Errorf("pattern %q: number %d is missing", pattern, was.Number+1))
		case m.Number > was.Number+2:
			faults = append(faults, fmt.Errorf("pattern %q: numbers %d to %d are missing", pattern, was.Number+1, m.Number-1))
		}
	}
	return list, errors.Join(faults...)
}

// FindSet returns the files that make one take with files[first], by the file
// set of iXML: set[k] are the files that give its k-th group of channels, a
// chain of them where the recorder split the set, as indices into files. The
// order is that of the recorder's channels. An error says what does not fit.
func FindSet(files []File, first int) (set [][]int, err error) {
	if files[first].Metadata.fileSet().FamilyUID == "" {
		return nil, fmt.Errorf("%s: iXML names no set of files", files[first].Name)
	}
	family := files[first].Metadata.fileSet()
	rows := map[int64][]int{} // by start, in frames after the first file's
	total := 0
	for k, f := range files {
		if f.Metadata.fileSet().FamilyUID != family.FamilyUID {
			continue
		}
		at := int64(0)
		if gap, ok := gapBetween(files[first], f); ok {
			at = gap + files[first].Header.Frames
		}
		rows[at] = append(rows[at], k)
		total++
	}
	if family.TotalFiles > 0 && total != family.TotalFiles {
		return nil, fmt.Errorf("%s: its set %q has %d files, %d are here", files[first].Name, cmp.Or(family.FamilyName, family.FamilyUID), family.TotalFiles, total)
	}
	starts := make([]int64, 0, len(rows))
	for at := range rows {
		starts = append(starts, at)
	}
	slices.Sort(starts)
	set = make([][]int, len(rows[starts[0]]))
	for _, at := range starts {
		row := rows[at]
		if len(row) != len(set) {
			return nil, fmt.Errorf("%s: %d files of the set start with it, %d with %s", files[rows[starts[0]][0]].Name, len(set), len(row), files[row[0]].Name)
		}
		slices.SortStableFunc(row, func(a, b int) int { return memberOrder(files[a], files[b]) })
		for k, f := range row {
			set[k] = append(set[k], f)
		}
	}
	return set, nil
}

func (m *Metadata) fileSet() FileSet {
	if m == nil || m.IXML == nil {
		return FileSet{}
	}
	return m.IXML.FileSet
}

// memberOrder puts the files of a set in order: by the recorder's channel, by
// the index in the set, by name.
func memberOrder(a, b File) int {
	channel := func(f File) int {
		if f.Metadata.IXML != nil && len(f.Metadata.IXML.Tracks) > 0 {
			return f.Metadata.IXML.Tracks[0].Channel
		}
		return 0
	}
	index := func(f File) string { return f.Metadata.fileSet().Index }
	return cmp.Or(cmp.Compare(channel(a), channel(b)), cmp.Compare(len(index(a)), len(index(b))),
		cmp.Compare(index(a), index(b)), cmp.Compare(a.Name, b.Name))
}

// Seam is a place where two files of a chain do not meet.
type Seam struct {
	Before, After string // names of the files
	Frame         int64  // of the chain, the first of After
	Gap           int64  // frames that are missing; negative: that are there twice
}

// String says it in words.
func (s Seam) String() string {
	if s.Gap < 0 {
		return fmt.Sprintf("%s starts %d frames before the end of %s", s.After, -s.Gap, s.Before)
	}
	return fmt.Sprintf("%d frames are missing between %s and %s", s.Gap, s.Before, s.After)
}

// Seams returns the gaps and overlaps of files taken as a chain in this order,
// by their time references. Where one has none nothing is said.
func Seams(files []File) (list []Seam) {
	at := int64(0)
	for k, f := range files {
		if k > 0 {
			if gap, ok := gapBetween(files[k-1], f); ok && gap != 0 {
				list = append(list, Seam{files[k-1].Name, f.Name, at, gap})
			}
		}
		at += f.Header.Frames
	}
	return list
}

// gapBetween is the number of frames between the end of a and the start of b,
// within half a day either way, so that a chain may pass midnight.
func gapBetween(a, b File) (int64, bool) {
	ta, aok := a.Metadata.TimeBase(a.Header.Rate)
	tb, bok := b.Metadata.TimeBase(b.Header.Rate)
	if !aok || !bok {
		return 0, false
	}
	s := tb.seconds(0)
	s.Sub(s, ta.seconds(a.Header.Frames))
	s.Mul(s, big.NewRat(int64(ta.AdvanceRate), 1))
	gap := floor(s.Add(s, big.NewRat(1, 2)), 1, 1)
	day := 24 * 3600 * int64(ta.AdvanceRate)
	gap = (gap%day + day) % day
	if gap >= day/2 {
		gap -= day
	}
	return gap, true
}

// Limits at which recorders split a file: 1, 2 and 4 GiB, or somewhat before.
const (
	splitUnit  = 1 << 30
	splitSlack = splitUnit / 32
)

// FindChain returns the files that a recorder made of one take by splitting
// it, as indices into files, starting with first. The next file is the one
// that starts, by its time reference, within 50 ms of where the last one ends.
// Where neither has a time reference it is the one whose name counts on
// ("x.wav", "x-2.wav"; "x_01.wav", "x_02.wav"), if the last one is as large as
// a file that recorders split. Files of another rate, channels, iXML family,
// scene or take never follow. Of several the nearest follows; two as near are
// an error.
func FindChain(files []File, first int) ([]int, error) {
	chain := []int{first}
	for {
		last := files[chain[len(chain)-1]]
		next, tied, nearest := -1, -1, int64(0)
		for k, f := range files {
			apart, ok := follows(last, f)
			switch {
			case !ok || slices.Contains(chain, k):
			case next < 0 || apart < nearest:
				next, tied, nearest = k, -1, apart
			case apart == nearest:
				tied = k
			}
		}
		if next < 0 {
			return chain, nil
		}
		if tied >= 0 {
			return nil, fmt.Errorf("%s: both %s and %s could follow it", last.Name, files[next].Name, files[tied].Name)
		}
		chain = append(chain, next)
	}
}

// follows says whether b may be the next file of a chain after a, and how many
// frames apart they are.
func follows(a, b File) (apart int64, ok bool) {
	if a.Header.Rate != b.Header.Rate || a.Header.Channels != b.Header.Channels || a.Header.Encoding != b.Header.Encoding {
		return 0, false
	}
	if a.Metadata != nil && a.Metadata.IXML != nil && b.Metadata != nil && b.Metadata.IXML != nil {
		x, y := a.Metadata.IXML, b.Metadata.IXML
		if x.FileSet.FamilyUID != y.FileSet.FamilyUID || x.Scene != y.Scene || x.Take != y.Take || x.Tape != y.Tape {
			return 0, false
		}
		if len(x.Tracks) > 0 && len(y.Tracks) > 0 && x.Tracks[0].Channel != y.Tracks[0].Channel {
			return 0, false // the next file of another channel of the set
		}
	}
	if gap, ok := gapBetween(a, b); ok {
		apart = max(gap, -gap)
		return apart, apart <= int64(a.Header.Rate)/20
	}
	_, aok := a.Metadata.TimeBase(a.Header.Rate)
	_, bok := b.Metadata.TimeBase(b.Header.Rate)
	full := false
	for _, unit := range []int64{1, 2, 4} {
		end := a.Header.DataOffset + a.Header.DataSize
		full = full || end <= unit*splitUnit && end >= unit*(splitUnit-splitSlack)
	}
	return 0, !aok && !bok && full && countsOn(a.Name, b.Name)
}

// countsOn says whether name b follows name a.
func countsOn(a, b string) bool {
	cut := func(name string) (stem, ending string) {
		if k := strings.LastIndexByte(name, '.'); k >= 0 {
			return name[:k], strings.ToLower(name[k:])
		}
		return name, ""
	}
	as, ae := cut(a)
	bs, be := cut(b)
	if ae != be {
		return false
	}
	if rest, ok := strings.CutPrefix(bs, as); ok && len(rest) > 1 && strings.ContainsRune("-_ .", rune(rest[0])) {
		n, err := strconv.ParseUint(rest[1:], 10, 31)
		return err == nil && (n == 1 || n == 2)
	}
	number := func(stem string) (string, uint64, bool) {
		head := strings.TrimRight(stem, "0123456789")
		n, err := strconv.ParseUint(stem[len(head):], 10, 62)
		return head, n, err == nil
	}
	ah, an, aok := number(as)
	bh, bn, bok := number(bs)
	return aok && bok && ah == bh && bn == an+1
}
