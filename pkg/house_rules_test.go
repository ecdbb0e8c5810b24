package pkg

import (
	"strings"
	"testing"
	"testing/fstest"
)

// Each rule of the house is broken once, to show that the check sees it.
func TestEachRuleOfTheHouseIsKept(t *testing.T) {
	todo := "TO" + "DO"
	long := strings.Repeat("// a line\n", maxFileLines)
	for _, c := range []struct{ name, file, text, want string }{
		{"unfinished", "pkg/a/a.go", "package a // " + todo + ": later\n", todo},
		{"unfinished script", "scripts/x", "# " + todo + " later\n", todo},
		{"path of a machine", "README.md", "look in /" + "home/someone\n", "a path of one machine"},
		{"drawer file", "pkg/a/helpers.go", "package a\n", "named after its central thing"},
		{"drawer test", "pkg/a/misc_test.go", "package a\n", "named after its central thing"},
		{"drawer folder", "pkg/util/a.go", "package util\n", "named after what is in it"},
		{"long file", "pkg/a/a.go", "package a\n" + long, "501 lines"},
		{"no doc.go", "pkg/a/a.go", "package a\n", "pkg/a: no doc.go"},
		{"logs", "pkg/a/a.go", "package a\n\nimport \"log\"\n\nfunc f() { log.Panic(1) }\n", "does not log"},
		{"prints", "pkg/a/a.go", "package a\n\nimport \"fmt\"\n\nfunc f() { fmt.Println(1) }\n", "does not print"},
		{"prints under another name", "pkg/a/a.go", "package a\n\nimport f \"fmt\"\n\nfunc g() { f.Println(1) }\n", "does not print"},
		{"clock", "pkg/a/a.go", "package a\n\nimport \"time\"\n\nvar t = time.Now()\n", "reads the clock"},
		{"environment", "pkg/a/a.go", "package a\n\nimport \"os\"\n\nvar t = os.Getenv(\"A\")\n", "reads the environment"},
		{"unseeded", "pkg/a/a.go", "package a\n\nimport \"math/rand/v2\"\n\nvar x = rand.Float64()\n", "a seed is always an argument"},
		{"goroutine", "pkg/a/a.go", "package a\n\nfunc f() { go f() }\n", "start goroutines"},
		{"opening word", "pkg/a/a.go", "package a\n\nimport \"errors\"\n\nvar e = errors.New(\"failed to read\")\n", "states the fact"},
		{"full stop", "pkg/a/a.go", "package a\n\nimport \"fmt\"\n\nvar e = fmt.Errorf(\"a: b.\")\n", "without a full stop"},
		{"bare function", "pkg/a/a.go", "package a\n\nfunc F() {}\n", "F: its comment"},
		{"bare method", "pkg/a/a.go", "package a\n\ntype t[T any] int\n\n// T is.\ntype T int\n\nfunc (x *T) M() {}\n\nfunc (t[T]) N() {}\n", "M: its comment"},
		{"bare type", "pkg/a/a.go", "package a\n\n// This is T.\ntype T int\n", "T: its comment"},
		{"bare constant", "pkg/a/a.go", "package a\n\nconst C = 1\n", "C: no comment"},
		{"does not parse", "pkg/a/a.go", "package a\n\nfunc {\n", "expected"},
	} {
		faults, err := checkHouse(fstest.MapFS{c.file: &fstest.MapFile{Data: []byte(c.text)}})
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
		}
		if !strings.Contains(strings.Join(faults, "\n"), c.want) {
			t.Errorf("%s: the faults are %q, want one that says %q", c.name, faults, c.want)
		}
	}
}

func TestAGoodHouseHasNoFaults(t *testing.T) {
	big := strings.Repeat("// a line\n", 499)
	root := fstest.MapFS{}
	for name, text := range map[string]string{
		"pkg/a/doc.go":       "// Package a is good.\n//\n// Longer than 2,000 lines: it holds one table.\npackage a\n",
		"pkg/a/b.go":         "package a\n" + big,
		"pkg/a/c.go":         "package a\n" + big,
		"pkg/a/d.go":         "package a\n" + big,
		"pkg/a/e.go":         "package a\n" + big,
		"pkg/a/f.go":         "package a\n\n// Longer than 500 lines: one table.\n" + big + big,
		"pkg/a/g.go":         "package a\n\nimport \"math/rand/v2\"\n\n// The Sides of a thing.\nconst (\n\tLeft = iota\n\tRight\n)\n\n// A Thing is.\ntype Thing struct{}\n\n// Draw draws.\nfunc Draw(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 1)) }\n",
		"pkg/a/g_test.go":    "package a\n\nimport \"time\"\n\nvar now = time.Now()\n",
		"cmd/alidade/doc.go": "// Command alidade.\npackage main\n",
		"cmd/alidade/a.go":   "package main\n\nimport (\n\t\"fmt\"\n\t\"time\"\n)\n\nfunc main() { go fmt.Println(time.Now()) }\n",
		"fixtures/a.txt":     "TO" + "DO",
		"picture.png":        "\x00TO" + "DO",
	} {
		root[name] = &fstest.MapFile{Data: []byte(text)}
	}
	faults, err := checkHouse(root)
	if err != nil || len(faults) > 0 {
		t.Errorf("%q, %v", faults, err)
	}
}
