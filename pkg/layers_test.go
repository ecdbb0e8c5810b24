// Package pkg holds no code: this test keeps the layers of the house.
package pkg

import (
	"go/parser"
	"go/token"
	"io/fs"
	"path"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// layers gives every package its floor and its purpose in one line. A package
// imports only packages of a strictly lower floor.
var layers = map[string]struct {
	floor   int
	purpose string
}{
	"pkg/kernel":                   {0, "inner loops, plain and for vector units"},
	"pkg/sheet":                    {0, "YAML files read strictly, every fault with its place"},
	"pkg/report/internal/draw":     {0, "pictures in SVG and PNG, by hand"},
	"pkg/beam/internal/hermitian":  {0, "small Hermitian solves"},
	"pkg/audio":                    {1, "io for multichannel sound"},
	"pkg/batch":                    {1, "many takes, many machines, each result once"},
	"pkg/rig":                      {1, "the microphones"},
	"pkg/audio/audiotest":          {2, "the contract of audio as a test"},
	"pkg/wav":                      {2, "WAV and RF64 files"},
	"pkg/acoustics":                {2, "how sound reaches a rig"},
	"pkg/delay":                    {2, "shifts by fractions of a sample"},
	"pkg/spectral":                 {2, "blocks into frequency and back"},
	"pkg/beam":                     {3, "weights, and the beam they form"},
	"pkg/postfilter":               {3, "gains that follow the sound, from what microphones have in common"},
	"pkg/bearing":                  {3, "where sound comes from, over time"},
	"pkg/measure":                  {3, "signals into numbers"},
	"pkg/scenario/internal/voice":  {0, "a talker of our own making"},
	"pkg/scenario/internal/render": {3, "sound on its way from a source to the samples of a channel"},
	"pkg/scenario":                 {4, "takes of imagined rooms, truth known"},
	"pkg/scan":                     {4, "many directions from one analysis"},
	"pkg/response":                 {4, "what a beam should do, predicted"},
	"pkg/quality":                  {4, "is this take fit to use?"},
	"pkg/calibration":              {4, "what makes channels agree"},
	"pkg/pipeline":                 {5, "one take, from file to result"},
	"pkg/report":                   {6, "results into pages and tables"},
	"cmd/alidade":                  {7, "flags in, exit code out"},
}

// owner says which one package may import a third-party module outside tests.
var owner = map[string]string{
	"github.com/go-audio/audio":                "pkg/wav",
	"github.com/go-audio/wav":                  "pkg/wav",
	"github.com/goccy/go-yaml":                 "pkg/sheet",
	"github.com/invopop/jsonschema":            "pkg/sheet",
	"github.com/jedib0t/go-pretty/v6":          "pkg/report",
	"github.com/santhosh-tekuri/jsonschema/v6": "pkg/sheet",
	"github.com/urfave/cli/v2":                 "cmd/alidade",
	"github.com/vbauerster/mpb/v8":             "cmd/alidade",
	"golang.org/x/sys/cpu":                     "pkg/kernel",
	"golang.org/x/sys/unix":                    "pkg/pipeline",
	"github.com/mewkiz/flac":                   "pkg/pipeline",
	"golang.org/x/term":                        "cmd/alidade",
	"gonum.org/v1/gonum":                       "pkg/measure",
}

func TestLayers(t *testing.T) {
	const module = "alidade/"
	root := ".."
	seen := map[string]bool{}
	for _, top := range []string{"cmd", "pkg"} {
		err := filepath.WalkDir(filepath.Join(root, top), func(name string, d fs.DirEntry, err error) error {
			if err != nil {
				return err
			}
			if d.IsDir() && (d.Name() == "testdata" || strings.HasPrefix(d.Name(), ".")) {
				return fs.SkipDir
			}
			if d.IsDir() || !strings.HasSuffix(name, ".go") {
				return nil
			}
			rel, err := filepath.Rel(root, name)
			if err != nil {
				return err
			}
			rel = filepath.ToSlash(rel)
			pkg := path.Dir(rel)
			if pkg == "pkg" {
				return nil
			}
			seen[pkg] = true
			at, ok := layers[pkg]
			if !ok {
				t.Errorf("%s: package %s stands on no floor: give it a line in pkg/layers_test.go", rel, pkg)
				return nil
			}
			isTest := strings.HasSuffix(name, "_test.go")
			file, err := parser.ParseFile(token.NewFileSet(), name, nil, parser.ImportsOnly)
			if err != nil {
				t.Errorf("%s: %v", rel, err)
				return nil
			}
			for _, spec := range file.Imports {
				imp, err := strconv.Unquote(spec.Path.Value)
				if err != nil {
					t.Errorf("%s: import %s: %v", rel, spec.Path.Value, err)
					continue
				}
				if ours, ok := strings.CutPrefix(imp, module); ok {
					target, known := layers[ours]
					if !known {
						t.Errorf("%s imports %s, which stands on no floor", rel, ours)
					} else if !isTest && target.floor >= at.floor {
						t.Errorf("%s (floor %d) imports %s (floor %d): only lower floors may be imported", rel, at.floor, ours, target.floor)
					}
					continue
				}
				first, _, _ := strings.Cut(imp, "/")
				if !strings.Contains(first, ".") || isTest {
					continue
				}
				allowed := false
				for mod, by := range owner {
					if imp == mod || strings.HasPrefix(imp, mod+"/") {
						allowed = by == pkg
						if !allowed {
							t.Errorf("%s imports %s, which belongs to %s", rel, imp, by)
							allowed = true
						}
					}
				}
				if !allowed {
					t.Errorf("%s imports %s, which no package owns: give it a line in owner", rel, imp)
				}
			}
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	if len(seen) < 3 {
		t.Fatalf("only %d packages found: the walk is broken", len(seen))
	}
}
