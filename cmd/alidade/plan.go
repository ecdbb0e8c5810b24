package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"unicode/utf8"

	"github.com/urfave/cli/v2"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
)

const planHelp = `alidade plan: what a batch will do, as a file

Usage
  alidade plan JOB.yaml [OPTIONS]

Example
  $ alidade plan night.yaml --parts 2 --for slurm

The plan lists every take with its files, rig and options, and what was left
out and why. The same folder gives the same plan. alidade batch carries it out,
here or in parts on many machines; with --for the job file of an engine is
printed, ready to be submitted. Nothing is submitted.

Options
  --out FILE        the plan, in the job file's folder; by default the job
                    file's name with .plan.json in place of its ending. An
                    older plan is replaced, nothing else
  --parts N         cut it into so many parts, balanced by bytes (default 1)
  --for ENGINE      print a job file for slurm, kubernetes or parallel
  --workers N       takes at once in each part of it (default 1)
  --image NAME      container image, for kubernetes (default alidade)
  --claim NAME      volume claim, for kubernetes (default takes)
  --json            the plan on standard output too
  --help, -h        this text
`

func planVerb() verb {
	return verb{
		name: "plan", does: "what a batch will do, as a file, and job files for many machines",
		help: planHelp,
		flags: func() []cli.Flag {
			return []cli.Flag{
				&cli.StringFlag{Name: "out"}, &cli.Float64Flag{Name: "parts", Value: 1}, &cli.StringFlag{Name: "for"},
				&cli.Float64Flag{Name: "workers", Value: 1}, &cli.StringFlag{Name: "image", Value: "alidade"},
				&cli.StringFlag{Name: "claim", Value: "takes"}, &cli.BoolFlag{Name: "json"},
			}
		},
		run: runPlan,
	}
}

// whole returns a flag that is a whole number of at least low.
func whole(c *cli.Context, verb, name string, low int) (int, error) {
	v := c.Float64(name)
	if v != float64(int(v)) || int(v) < low || v > 1e6 {
		return 0, &usageError{fmt.Errorf("%s: --%s %g: want a whole number from %d", verb, name, v, low), ""}
	}
	return int(v), nil
}

func runPlan(u *ui, c *cli.Context) error {
	if c.NArg() != 1 {
		return &usageError{fmt.Errorf("plan: %d job files, want one", c.NArg()), "alidade schema job describes it"}
	}
	parts, err := whole(c, "plan", "parts", 1)
	if err != nil {
		return err
	}
	workers, err := whole(c, "plan", "workers", 1)
	if err != nil {
		return err
	}
	j, err := readJob(c.Args().First())
	if err != nil {
		return err
	}
	name := c.String("out")
	if name == "" {
		name = strings.TrimSuffix(j.path, filepath.Ext(j.path)) + ".plan.json"
	}
	if same, err := sameFolder(filepath.Dir(name), j.base); err != nil || !same {
		return &usageError{errors.Join(fmt.Errorf("plan: --out %s: a plan lies in the folder of its job file: its paths are relative to it", name), err), ""}
	}
	if err := mayBecomePlan(name); err != nil {
		return err
	}
	engine := c.String("for")
	file := batch.JobFile{Engine: engine, Plan: filepath.Base(name), Name: strings.TrimSuffix(filepath.Base(j.path), filepath.Ext(j.path)),
		Workers: workers, Image: c.String("image"), Claim: c.String("claim")}
	if engine != "" {
		if _, err := file.Text(); err != nil {
			return &usageError{fmt.Errorf("plan: --for: %w", err), ""}
		}
	}
	plan, err := u.plan(j, parts)
	if err != nil {
		return err
	}
	var text bytes.Buffer
	if err := plan.Write(&text); err != nil {
		return err
	}
	if err := writeWhole(name, text.Bytes()); err != nil {
		return err
	}
	for _, r := range plan.Recipes {
		file.MemoryMiB = max(file.MemoryMiB, r.MemoryMiB)
	}
	u.remark("%s: %s", name, planWords(plan))
	var need int64
	for _, t := range plan.Takes {
		need += t.OutputBytes
	}
	if free, ok := batch.FreeBytes(filepath.Join(j.base, j.folder())); ok && need > free {
		u.remark("alidade: %s", shortWords(need, free))
	}
	if c.Bool("json") {
		u.print(text.String())
	}
	if engine != "" {
		file.Parts = plan.Parts
		script, err := file.Text()
		u.print(script)
		return err
	}
	return nil
}

// planWords is a plan in one line.
func planWords(p *batch.Plan) string {
	var bytes int64
	for _, t := range p.Takes {
		bytes += t.Bytes()
	}
	text := fmt.Sprintf("%s, %.1f MB, %d left out, plan %.12s", takesWord(len(p.Takes)), float64(bytes)/1e6, len(p.LeftOut), p.PlanID)
	if p.Parts > 1 {
		text += fmt.Sprintf(", %d parts", p.Parts)
	}
	return text
}

// mayBecomePlan refuses a name under which something lies that is no plan: the
// job file, a rig and the takes are in the same folder.
func mayBecomePlan(name string) error {
	info, err := os.Lstat(name)
	if errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	why := "no plan"
	switch {
	case err != nil:
		return &usageError{fmt.Errorf("plan: --out: %w", err), ""}
	case info.Mode()&fs.ModeSymlink != 0:
		why = "a link"
	case info.IsDir():
		why = "a folder"
	case info.Mode().IsRegular():
		planned, err := isPlan(name)
		if err != nil {
			return err
		}
		if planned {
			return nil
		}
	}
	return &usageError{fmt.Errorf("plan: --out %s: exists and is %s: only an older plan is replaced", name, why), "give another name, or move it away"}
}

func sameFolder(a, b string) (bool, error) {
	x, err := os.Stat(a)
	if err != nil {
		return false, err
	}
	y, err := os.Stat(b)
	return err == nil && os.SameFile(x, y), err
}

// writeWhole writes a file under a temporary name and renames it.
func writeWhole(name string, text []byte) error {
	dir, base := filepath.Split(name)
	if dir == "" {
		dir = "."
	}
	file, err := os.CreateTemp(dir, "."+base+".partial-*")
	if err != nil {
		return err
	}
	_, err = file.Write(text)
	if err = finish(file, name, errors.Join(err, file.Chmod(0o644))); err == nil {
		err = os.Rename(file.Name(), name)
	}
	if err != nil {
		return errors.Join(err, os.Remove(file.Name()))
	}
	return nil
}

// channelPlace is the mark of a set in a pattern.
const channelPlace = "{ch}"

// plan makes the plan of a job: one look at the folder.
func (u *ui) plan(j *job, parts int) (*batch.Plan, error) {
	out := filepath.Join(j.base, j.folder())
	var globs []string
	var sets []*regexp.Regexp
	for _, p := range j.Takes {
		if !strings.Contains(p, channelPlace) {
			globs = append(globs, p)
			continue
		}
		if strings.Count(p, channelPlace) > 1 || strings.Contains(path.Dir(p), channelPlace) {
			return nil, &usageError{fmt.Errorf("%s: takes: %q: want %s once, in the file's name", j.path, p, channelPlace), ""}
		}
		globs = append(globs, strings.Replace(p, channelPlace, "[0-9]*", 1))
		sets = append(sets, setPattern(path.Base(p)))
	}
	found, left, err := batch.Find(j.root(), globs, j.Exclude, []string{out})
	if err != nil {
		return nil, err
	}
	found = slices.DeleteFunc(found, func(f batch.File) bool {
		if !utf8.ValidString(f.Path) {
			u.remark("alidade: %q: left out: its name is not UTF-8, which plans and reports are: rename it", f.Path)
			left = append(left, batch.LeftOut{Path: f.Path, Reason: "a name that is not UTF-8"})
			return true
		}
		beside := strings.HasSuffix(f.Path, sidecarEnding)
		if beside {
			left = append(left, batch.LeftOut{Path: f.Path, Reason: "settings of a take"})
		}
		return beside
	})
	for i, l := range left {
		left[i].Path = strings.ToValidUTF8(l.Path, "\uFFFD")
	}
	slices.SortFunc(left, func(a, b batch.LeftOut) int { return strings.Compare(a.Path, b.Path) })
	groups, err := groupTakes(j.root(), found, sets, j.Steer.FindChain)
	if err != nil {
		return nil, &usageError{err: err}
	}
	d := batch.Draft{Version: version, Job: filepath.Base(j.path), Root: j.Root, Folder: filepath.ToSlash(j.folder()), TimeoutS: j.TimeoutS, LeftOut: left, Parts: parts}
	if d.Root == "" {
		d.Root = "."
	}
	if len(groups) == 0 {
		return nil, &usageError{fmt.Errorf("%s: no file below %s fits takes", j.path, j.root()), "the patterns are relative to root, or to the job file's folder"}
	}
	if err := u.readSidecars(j, groups); err != nil {
		return nil, err
	}
	recipes := map[string]int{}
	rigs := map[string]batch.Recipe{}
	microphones := map[string]int{}
	unsound := map[string]bool{} // rigs that were complained about
	var faults []error
	for _, g := range groups {
		key := strings.TrimSuffix(g.name, path.Ext(g.name))
		o := overrideOf(j.overrides, g.paths[0], g.name, key).over(j.beside[key])
		recipe := j.recipe(o)
		j.preview(g, o, &recipe.Steer)
		if err := recipe.validate(); err != nil {
			// Each for itself was right.
			faults = append(faults, &usageError{fmt.Errorf("%s: overrides: %s: %s", j.path, g.name, strings.ReplaceAll(err.Error(), "\n", "; ")), ""})
			continue
		}
		rigName, err := j.rigFor(g, o)
		if err != nil {
			faults = append(faults, &usageError{fmt.Errorf("%s: %w", j.path, err), ""})
			break
		}
		r, ok := rigs[rigName]
		if unsound[rigName] {
			continue
		}
		if !ok {
			at := rigName
			if !filepath.IsAbs(at) {
				at = filepath.Join(j.base, at)
			}
			sum, loaded, err := rigState(at)
			if err != nil {
				faults = append(faults, &usageError{err: err})
				unsound[rigName] = true
				continue
			}
			r = batch.Recipe{Rig: filepath.ToSlash(rigName), RigSHA256: sum}
			microphones[rigName] = len(loaded.Mics)
			rigs[rigName] = r
		}
		if r.Options, err = json.Marshal(recipe); err != nil {
			return nil, err
		}
		id := rigName + "\x00" + string(r.Options)
		k, ok := recipes[id]
		if !ok {
			k = len(d.Recipes)
			recipes[id] = k
			d.Recipes = append(d.Recipes, r)
		}
		take := batch.Take{Paths: g.paths, Files: g.files, Recipe: k}
		d.Recipes[k].MemoryMiB = max(d.Recipes[k].MemoryMiB, memoryFor(microphones[rigName], take.Bytes()))
		take.Key = j.keyOf(g, rigName, recipe.Steer)
		take.OutputBytes = roomFor(g, recipe)
		d.Takes = append(d.Takes, take)
	}
	if len(faults) > 0 {
		return nil, errors.Join(faults...)
	}
	for _, o := range j.overrides {
		if !o.used {
			u.remark("alidade: %s: %s: no take of that name", j.Overrides, o.take)
		}
	}
	plan, err := batch.NewPlan(d)
	if err != nil {
		return nil, &usageError{fmt.Errorf("%s: %w", j.path, err), ""}
	}
	return plan, nil
}

// memoryFor is what a worker needs at most for a take of so many channels and
// bytes, MiB. Measured: 132 MiB for 32 channels and 10 minutes, 173 MiB for 8
// channels and an hour, of 16 bits; a budget is better kept than met.
func memoryFor(channels int, bytes int64) int { return 96 + 4*channels + int(24*(bytes>>20)>>10) }

// overrideOf finds the override of a take by any of its names.
func overrideOf(list []override, names ...string) *override {
	for k := range list {
		if slices.Contains(names, list[k].take) {
			list[k].used = true
			return &list[k]
		}
	}
	return nil
}

// recipeOf reads the options of a recipe.
func recipeOf(r batch.Recipe) (jobRecipe, error) {
	var j jobRecipe
	d := json.NewDecoder(bytes.NewReader(r.Options))
	d.DisallowUnknownFields()
	if err := d.Decode(&j); err != nil {
		return j, &pipeline.UsageError{Err: fmt.Errorf("plan: options: %w", err), Hint: "make the plan again"}
	}
	return j, nil
}
