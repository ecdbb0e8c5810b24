package pkg

import (
	"fmt"
	"os"
	"regexp"
	"strings"
	"testing"
)

// documentFaults holds the two tables of DEVELOPERS.md against the layers and
// the owners of modules that the tests keep.
func documentFaults(text string) (faults []string) {
	fault := func(format string, args ...any) { faults = append(faults, fmt.Sprintf(format, args...)) }
	shown := map[string]bool{}
	row := regexp.MustCompile("(?m)^\\| (\\d+) \\| `([^`]+)` \\| (.+) \\|$")
	last := 0
	for _, m := range row.FindAllStringSubmatch(text, -1) {
		name := m[2]
		if !strings.HasPrefix(name, "cmd/") {
			name = "pkg/" + name
		}
		at, ok := layers[name]
		if !ok {
			fault("%s is in the table and on no floor", name)
			continue
		}
		if shown[name] {
			fault("%s is in the table twice", name)
		}
		shown[name] = true
		if m[1] != fmt.Sprint(at.floor) {
			fault("%s stands on floor %d, the table says %s", name, at.floor, m[1])
		}
		if at.floor < last {
			fault("%s: the table goes from floor %d back to %d", name, last, at.floor)
		}
		last = at.floor
	}
	for name := range layers {
		if !shown[name] {
			fault("%s is not in the table", name)
		}
	}
	for module, by := range owner {
		found := false
		for _, line := range strings.Split(text, "\n") {
			cells := strings.Split(line, "|")
			if len(cells) != 5 || !strings.Contains(cells[2], "`"+strings.TrimPrefix(by, "pkg/")+"`") {
				continue
			}
			for _, named := range regexp.MustCompile("`([^`]+)`").FindAllStringSubmatch(cells[1], -1) {
				found = found || module == named[1] || strings.HasPrefix(module, named[1]+"/")
			}
		}
		if !found {
			fault("%s of %s has no row that says why it is there", module, by)
		}
	}
	return faults
}

func TestDevelopersFindEveryPackageAndModuleInTheTables(t *testing.T) {
	data, err := os.ReadFile("../DEVELOPERS.md")
	if err != nil {
		t.Fatal(err)
	}
	text := string(data)
	for _, fault := range documentFaults(text) {
		t.Error(fault)
	}
	// The check itself: a row less, a wrong floor, an owner less.
	for _, c := range [][2]string{
		{"| 2 | `wav` |", "| 2 | `wave` |"}, {"| 2 | `wav` |", "| 3 | `wav` |"},
		{"| `github.com/goccy/go-yaml` | `sheet` |", "| `github.com/goccy/go-yaml` | `rig` |"},
	} {
		if strings.Count(text, c[0]) != 1 || len(documentFaults(strings.Replace(text, c[0], c[1], 1))) == 0 {
			t.Errorf("%q in place of %q goes unseen", c[1], c[0])
		}
	}
}
