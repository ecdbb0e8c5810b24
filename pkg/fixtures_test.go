package pkg

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"io/fs"
	"os"
	"slices"
	"strings"
	"testing"
	"testing/fstest"
)

// originColumns are the columns of fixtures/ORIGINS.tsv. seed is - where
// nothing random stands behind a file.
var originColumns = []string{"file", "sha256", "maker", "version", "command", "seed", "licence"}

// The most bytes of one fixture, and of all.
const (
	maxFixture  = 200_000
	maxFixtures = 5_000_000
)

// checkOrigins returns everything that is wrong with a folder of fixtures and
// its ORIGINS.tsv.
func checkOrigins(root fs.FS) (faults []string) {
	const table = "ORIGINS.tsv"
	fault := func(format string, args ...any) { faults = append(faults, fmt.Sprintf(format, args...)) }
	text, err := fs.ReadFile(root, table)
	if err != nil {
		return []string{err.Error()}
	}
	rows := strings.Split(strings.TrimSuffix(string(text), "\n"), "\n")
	if rows[0] != strings.Join(originColumns, "\t") {
		fault("%s:1: the columns are %q, want %q", table, rows[0], originColumns)
	}
	known := map[string]bool{}
	var names []string
	total := 0
	for k, row := range rows[1:] {
		where := fmt.Sprintf("%s:%d", table, k+2)
		cells := strings.Split(row, "\t")
		if len(cells) != len(originColumns) {
			fault("%s: %d cells, want %d", where, len(cells), len(originColumns))
			continue
		}
		name := cells[0]
		if known[name] {
			fault("%s: %s has a row already", where, name)
		}
		known[name] = true
		names = append(names, name)
		for c, cell := range cells {
			if cell == "" || cell != strings.TrimSpace(cell) {
				fault("%s: %s is %q", where, originColumns[c], cell)
			}
		}
		data, err := fs.ReadFile(root, name)
		if err != nil {
			fault("%s: %v", where, err)
			continue
		}
		sum := sha256.Sum256(data)
		if got := hex.EncodeToString(sum[:]); got != cells[1] {
			fault("%s: %s has the hash %s, the row says %s", where, name, got, cells[1])
		}
		if len(data) > maxFixture {
			fault("%s: %s has %d bytes, want at most %d", where, name, len(data), maxFixture)
		}
		total += len(data)
	}
	if total > maxFixtures {
		fault("%s: the fixtures have %d bytes together, want at most %d", table, total, maxFixtures)
	}
	if !slices.IsSorted(names) {
		fault("%s: the rows are not in the order of their files", table)
	}
	err = fs.WalkDir(root, ".", func(name string, d fs.DirEntry, err error) error {
		if err == nil && !d.IsDir() && name != table && !known[name] {
			fault("%s: a file without a row in %s", name, table)
		}
		return err
	})
	if err != nil {
		fault("%v", err)
	}
	return faults
}

func TestEveryFixtureHasAnOriginAndEveryOriginAFixture(t *testing.T) {
	for _, fault := range checkOrigins(os.DirFS("../fixtures")) {
		t.Error("fixtures/" + fault)
	}
}

func TestEachFaultOfTheOriginsIsFound(t *testing.T) {
	const head = "file\tsha256\tmaker\tversion\tcommand\tseed\tlicence\n"
	// printf abc | sha256sum
	const abc = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
	row := func(name, hash string) string { return name + "\t" + hash + "\tsox\t14.4.2\tsox -n\t-\tCC0-1.0\n" }
	file := func(data string) *fstest.MapFile { return &fstest.MapFile{Data: []byte(data)} }
	for _, c := range []struct {
		name, want string
		root       fstest.MapFS
	}{
		{"sound", "", fstest.MapFS{"ORIGINS.tsv": file(head + row("a/x.wav", abc)), "a/x.wav": file("abc")}},
		{"no table", "ORIGINS.tsv", fstest.MapFS{}},
		{"other columns", "the columns are", fstest.MapFS{"ORIGINS.tsv": file("file\thash\n")}},
		{"changed", "has the hash", fstest.MapFS{"ORIGINS.tsv": file(head + row("x.wav", abc)), "x.wav": file("abd")}},
		{"gone", "x.wav", fstest.MapFS{"ORIGINS.tsv": file(head + row("x.wav", abc))}},
		{"without a row", "without a row", fstest.MapFS{"ORIGINS.tsv": file(head), "y.wav": file("abc")}},
		{"twice", "has a row already", fstest.MapFS{"ORIGINS.tsv": file(head + row("x.wav", abc) + row("x.wav", abc)), "x.wav": file("abc")}},
		{"out of order", "order of their files", fstest.MapFS{"ORIGINS.tsv": file(head + row("y.wav", abc) + row("x.wav", abc)), "x.wav": file("abc"), "y.wav": file("abc")}},
		{"no licence", `licence is ""`, fstest.MapFS{"ORIGINS.tsv": file(head + "x.wav\t" + abc + "\tsox\t1\tsox\t-\t\n"), "x.wav": file("abc")}},
		{"short row", "2 cells", fstest.MapFS{"ORIGINS.tsv": file(head + "x.wav\t" + abc + "\n"), "x.wav": file("abc")}},
		{"too large", "at most 200000", fstest.MapFS{"ORIGINS.tsv": file(head + row("x.wav", abc)), "x.wav": file(strings.Repeat("a", maxFixture+1))}},
	} {
		faults := checkOrigins(c.root)
		if c.want == "" {
			if len(faults) > 0 {
				t.Errorf("%s: %q", c.name, faults)
			}
			continue
		}
		if !strings.Contains(strings.Join(faults, "\n"), c.want) {
			t.Errorf("%s: the faults are %q, want one that says %q", c.name, faults, c.want)
		}
	}
}
