package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path"
	"path/filepath"
	"regexp"
	"slices"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/wav"
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
                    file's name with .plan.json in place of its ending
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
	text := fmt.Sprintf("%d takes, %.1f MB, %d left out, plan %.12s", len(p.Takes), float64(bytes)/1e6, len(p.LeftOut), p.PlanID)
	if p.Parts > 1 {
		text += fmt.Sprintf(", %d parts", p.Parts)
	}
	return text
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
	recipes := map[string]int{}
	rigs := map[string]batch.Recipe{}
	microphones := map[string]int{}
	var faults []error
	for _, g := range groups {
		key := strings.TrimSuffix(g.name, path.Ext(g.name))
		o := j.overrideOf(g.paths[0], g.name, key)
		rigName, err := j.rigFor(g.name, o)
		if err != nil {
			faults = append(faults, &usageError{fmt.Errorf("%s: %w", j.path, err), ""})
			break
		}
		r, ok := rigs[rigName]
		if !ok {
			at := rigName
			if !filepath.IsAbs(at) {
				at = filepath.Join(j.base, at)
			}
			sum, loaded, err := rigState(at)
			if err != nil {
				faults = append(faults, &usageError{err: err})
				continue
			}
			r = batch.Recipe{Rig: filepath.ToSlash(rigName), RigSHA256: sum}
			microphones[rigName] = len(loaded.Mics)
			rigs[rigName] = r
		}
		if r.Options, err = json.Marshal(j.recipe(o)); err != nil {
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
		name := j.Outputs.Name
		if name == "" {
			name = "{take}"
		}
		rigBase := path.Base(filepath.ToSlash(rigName))
		folder := path.Dir(key)
		if folder == "." {
			folder = ""
		}
		key = path.Clean(strings.NewReplacer("{take}", key, "{folder}", folder, "{file}", path.Base(key),
			"{rig}", strings.TrimSuffix(rigBase, path.Ext(rigBase))).Replace(name))
		take.Key = strings.TrimPrefix(key, "/")
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
func (j *job) overrideOf(names ...string) *override {
	for k := range j.overrides {
		if slices.Contains(names, j.overrides[k].take) {
			j.overrides[k].used = true
			return &j.overrides[k]
		}
	}
	return nil
}

// group is the files of one take.
type group struct {
	name  string // path that names it, with ending
	paths []string
	files []batch.File
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
		return group{name: files[k].Path, paths: []string{files[k].Path}, files: []batch.File{files[k]}}
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
