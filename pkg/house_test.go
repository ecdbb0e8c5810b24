package pkg

import (
	"bytes"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// The most lines of a file, and of a package without its tests. More needs a
// sentence in the file, or in the package's doc.go, that begins with reason.
const (
	maxFileLines    = 500
	maxPackageLines = 2000
	reason          = "Longer than"
)

// drawerNames say nothing about what is in them.
var drawerNames = []string{"helper", "helpers", "misc", "util", "utils", "common", "types", "models", "shared", "base"}

// goroutineRooms are the packages that may start goroutines outside tests.
var goroutineRooms = []string{"pkg/audio", "pkg/spectral", "pkg/beam", "pkg/bearing", "pkg/batch", "pkg/scenario", "cmd/alidade", "pkg/scenario/internal/render"}

// unfinished is what a thing left for later is marked with, written so that
// this line is not one.
var unfinished = regexp.MustCompile(`\b(TO` + `DO|FIX` + `ME|XX` + `X)\b`)

// machinePath is a path of somebody's own machine.
var machinePath = regexp.MustCompile(`(^|[\s"'` + "`" + `(=])/(work|root|home|Users)/[A-Za-z0-9_]`)

// openingWords are what an error does not begin with: it states the fact.
var openingWords = regexp.MustCompile(`(?i)^(%[a-z]:? )?(failed|failure|could not|cannot|can't|unable|invalid|error)\b`)

// house is what is wrong with the files of a module.
type house struct {
	faults []string
	lines  map[string]int  // lines of each package without its tests
	excuse map[string]bool // packages whose doc.go says why they are large
	docs   map[string]bool // packages with a doc.go
}

func (h *house) fault(format string, args ...any) {
	h.faults = append(h.faults, fmt.Sprintf(format, args...))
}

// checkHouse holds every text file under root against the rules of the house
// that a program can check.
func checkHouse(root fs.FS) ([]string, error) {
	h := &house{lines: map[string]int{}, excuse: map[string]bool{}, docs: map[string]bool{}}
	err := fs.WalkDir(root, ".", func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		base := d.Name()
		if d.IsDir() {
			if base == ".git" || name == "fixtures" || base == "testdata" && path.Base(path.Dir(name)) != "alidade" {
				return fs.SkipDir
			}
			if slices.Contains(drawerNames, base) {
				h.fault("%s: a folder is named after what is in it", name)
			}
			return nil
		}
		if !d.Type().IsRegular() || name == ".git" { // a second working tree has a file of that name
			return nil
		}
		data, err := fs.ReadFile(root, name)
		if err != nil {
			return err
		}
		if bytes.IndexByte(data, 0) >= 0 {
			return nil // not a text
		}
		h.text(name, string(data))
		if strings.HasSuffix(name, ".go") {
			h.source(name, data)
		}
		return nil
	})
	var packages []string
	for p := range h.lines {
		packages = append(packages, p)
	}
	slices.Sort(packages)
	for _, p := range packages {
		if h.lines[p] > maxPackageLines && !h.excuse[p] {
			h.fault("%s: %d lines without tests, want at most %d, or a sentence in doc.go that begins %q", p, h.lines[p], maxPackageLines, reason)
		}
		if !h.docs[p] && (strings.HasPrefix(p, "pkg/") || strings.HasPrefix(p, "cmd/")) {
			h.fault("%s: no doc.go", p)
		}
	}
	return h.faults, err
}

// text checks what holds for any text.
func (h *house) text(name, text string) {
	base := strings.TrimSuffix(path.Base(name), path.Ext(name))
	if slices.Contains(drawerNames, strings.TrimSuffix(base, "_test")) {
		h.fault("%s: a file is named after its central thing", name)
	}
	for k, line := range strings.Split(text, "\n") {
		if m := unfinished.FindString(line); m != "" && !strings.HasSuffix(name, ".sum") {
			h.fault("%s:%d: %s: what is missing is an issue, what is limited a sentence", name, k+1, m)
		}
		if machinePath.MatchString(line) && !strings.HasSuffix(name, "pkg/house_test.go") {
			h.fault("%s:%d: a path of one machine: %q", name, k+1, strings.TrimSpace(line))
		}
	}
}

// source checks a Go file.
func (h *house) source(name string, data []byte) {
	dir, count := path.Dir(name), bytes.Count(data, []byte("\n"))
	excused := bytes.Contains(data, []byte("// "+reason))
	if count > maxFileLines && !excused {
		h.fault("%s: %d lines, want at most %d, or a sentence that begins %q", name, count, maxFileLines, reason)
	}
	files := token.NewFileSet()
	file, err := parser.ParseFile(files, name, data, parser.ParseComments)
	if err != nil {
		h.fault("%v", err)
		return
	}
	if strings.HasSuffix(name, "_test.go") {
		return
	}
	h.lines[dir] += count
	if path.Base(name) == "doc.go" {
		h.docs[dir] = file.Doc != nil
		h.excuse[dir] = excused
	}
	at := func(n ast.Node) string {
		p := files.Position(n.Pos())
		return fmt.Sprintf("%s:%d", p.Filename, p.Line)
	}
	inLibrary := strings.HasPrefix(name, "pkg/")
	imports := map[string]string{} // local name to path
	for _, spec := range file.Imports {
		p, _ := strconv.Unquote(spec.Path.Value)
		local := path.Base(p)
		if strings.HasPrefix(local, "v") && strings.Trim(local[1:], "0123456789") == "" {
			local = path.Base(path.Dir(p))
		}
		if spec.Name != nil {
			local = spec.Name.Name
		}
		imports[local] = p
		if inLibrary && (p == "log" || p == "log/slog") {
			h.fault("%s: a package does not log: %s", at(spec), p)
		}
	}
	ast.Inspect(file, func(n ast.Node) bool {
		switch n := n.(type) {
		case *ast.GoStmt:
			if !slices.Contains(goroutineRooms, dir) && !strings.HasPrefix(name, "scripts/") {
				h.fault("%s: only %s start goroutines", at(n), strings.Join(goroutineRooms, ", "))
			}
		case *ast.CallExpr:
			if inLibrary {
				h.call(at(n), imports, n)
			}
		}
		return true
	})
	if inLibrary {
		for _, d := range file.Decls {
			h.documented(at, d)
		}
	}
}

// forbidden are calls that only the command may make, and why.
var forbidden = map[string]string{
	"fmt.Print": "a package does not print", "fmt.Printf": "a package does not print", "fmt.Println": "a package does not print",
	"os.Exit": "a package does not end the program", "os.Getenv": "only the command reads the environment",
	"os.LookupEnv": "only the command reads the environment", "time.Now": "only the command reads the clock",
	"time.Since": "only the command reads the clock",
}

// call checks one call of a function of another package.
func (h *house) call(at string, imports map[string]string, call *ast.CallExpr) {
	sel, ok := call.Fun.(*ast.SelectorExpr)
	if !ok {
		return
	}
	x, ok := sel.X.(*ast.Ident)
	if !ok || x.Obj != nil || imports[x.Name] == "" {
		return
	}
	from := imports[x.Name]
	full := path.Base(from) + "." + sel.Sel.Name
	if why, bad := forbidden[from+"."+sel.Sel.Name]; bad {
		h.fault("%s: %s: %s", at, full, why)
	}
	if strings.HasPrefix(from, "math/rand") && !strings.HasPrefix(sel.Sel.Name, "New") {
		h.fault("%s: %s: a seed is always an argument", at, sel.Sel.Name)
	}
	if (full == "fmt.Errorf" || full == "errors.New") && len(call.Args) > 0 {
		if lit, ok := call.Args[0].(*ast.BasicLit); ok && lit.Kind == token.STRING {
			text, _ := strconv.Unquote(lit.Value)
			if openingWords.MatchString(text) {
				h.fault("%s: %q: an error states the fact", at, text)
			}
			if strings.HasSuffix(text, ".") || strings.HasSuffix(text, "!") {
				h.fault("%s: %q: an error ends without a full stop", at, text)
			}
		}
	}
}

// documented checks that exported names say what they are.
func (h *house) documented(at func(ast.Node) string, d ast.Decl) {
	begins := func(doc *ast.CommentGroup, name string) bool {
		if doc == nil {
			return false
		}
		text := doc.Text()
		for _, article := range []string{"", "A ", "An ", "The "} {
			rest, ok := strings.CutPrefix(text, article+name)
			if ok && (rest == "" || strings.ContainsRune(" ,.:;'\n", rune(rest[0]))) {
				return true
			}
		}
		return false
	}
	switch d := d.(type) {
	case *ast.FuncDecl:
		if d.Name.IsExported() && exportedReceiver(d.Recv) && !begins(d.Doc, d.Name.Name) {
			h.fault("%s: %s: its comment begins with its name", at(d), d.Name.Name)
		}
	case *ast.GenDecl:
		for _, spec := range d.Specs {
			switch s := spec.(type) {
			case *ast.TypeSpec:
				if s.Name.IsExported() && !begins(s.Doc, s.Name.Name) && !begins(d.Doc, s.Name.Name) {
					h.fault("%s: %s: its comment begins with its name", at(s), s.Name.Name)
				}
			case *ast.ValueSpec:
				for _, n := range s.Names {
					if n.IsExported() && d.Doc == nil && s.Doc == nil && s.Comment == nil {
						h.fault("%s: %s: no comment says what it is", at(s), n.Name)
					}
				}
			}
		}
	}
}

// exportedReceiver reports whether a function has no receiver or one whose type
// can be named from outside.
func exportedReceiver(recv *ast.FieldList) bool {
	if recv == nil {
		return true
	}
	t := recv.List[0].Type
	for {
		switch x := t.(type) {
		case *ast.StarExpr:
			t = x.X
		case *ast.IndexExpr:
			t = x.X
		case *ast.IndexListExpr:
			t = x.X
		case *ast.Ident:
			return x.IsExported()
		default:
			return false
		}
	}
}

func TestTheHouseIsInOrder(t *testing.T) {
	faults, err := checkHouse(os.DirFS(".."))
	if err != nil {
		t.Fatal(err)
	}
	for _, fault := range faults {
		t.Error(fault)
	}
}
