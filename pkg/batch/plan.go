package batch

import (
	"bytes"
	"cmp"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"path"
	"slices"
	"strings"
)

// PlanSchema is the version of the form of a plan. A change that removes or
// redefines a key raises it.
const PlanSchema = "alidade-plan/1"

// MaxPlanBytes bounds a plan that is read.
const MaxPlanBytes = 256 << 20

// Plan is what is to be done, as plain data. Make it with NewPlan or ReadPlan.
type Plan struct {
	Schema   string    `json:"schema"`
	PlanID   string    `json:"plan_id"` // hash of everything but the parts
	Version  string    `json:"version"` // of the program
	Job      string    `json:"job"`     // name of the job file
	Root     string    `json:"root"`    // of the takes, relative to the plan's folder
	Folder   string    `json:"folder"`  // of the outputs, relative to the plan's folder
	TimeoutS float64   `json:"timeout_s"`
	Parts    int       `json:"parts"`
	Recipes  []Recipe  `json:"recipes"`
	Takes    []Take    `json:"takes"`
	LeftOut  []LeftOut `json:"left_out"`
}

// Recipe is how takes are made: the same recipe and the same files give the
// same outputs.
type Recipe struct {
	ID        string          `json:"id"`  // hash of the rest and of the version
	Rig       string          `json:"rig"` // relative to the plan's folder
	RigSHA256 string          `json:"rig_sha256"`
	Options   json.RawMessage `json:"options"`
	MemoryMiB int             `json:"memory_mib"` // a worker needs at most; 0 is not known
}

// Take is one take of a plan.
type Take struct {
	Key    string   `json:"key"`   // its folder below the output folder
	Paths  []string `json:"paths"` // as they are named to the work: a set may be one pattern
	Files  []File   `json:"files"` // all files, with path and size
	Recipe int      `json:"recipe"`
	Part   int      `json:"part"` // from 0
	// OutputBytes is what its outputs need at most; 0 is not known.
	OutputBytes int64 `json:"output_bytes,omitempty"`
}

// Bytes is the size of all files of the take.
func (t Take) Bytes() (n int64) {
	for _, f := range t.Files {
		n += f.Bytes
	}
	return n
}

// Draft is what a plan is made of. The recipes need no ID and the takes no
// part; ModifiedNS of their files does not enter the plan.
type Draft struct {
	Version, Job, Root, Folder string
	TimeoutS                   float64
	Recipes                    []Recipe
	Takes                      []Take
	LeftOut                    []LeftOut
	Parts                      int // 0 is 1
}

// NewPlan puts a draft in order, checks that no two takes get in each other's
// way, and cuts it into parts. All faults are returned together.
func NewPlan(d Draft) (*Plan, error) {
	p := &Plan{Schema: PlanSchema, Version: d.Version, Job: d.Job, Root: d.Root, Folder: d.Folder, TimeoutS: d.TimeoutS,
		Recipes: append([]Recipe{}, d.Recipes...), Takes: append([]Take{}, d.Takes...), LeftOut: append([]LeftOut{}, d.LeftOut...)}
	for k := range p.Recipes {
		r := &p.Recipes[k]
		var err error
		if r.Options, err = compact(r.Options); err != nil {
			return nil, fmt.Errorf("plan: recipe %d: options: %w", k, err)
		}
		r.ID = r.id(d.Version)
	}
	for k := range p.Takes {
		t := &p.Takes[k]
		t.Files = slices.Clone(t.Files)
		for i := range t.Files {
			t.Files[i].ModifiedNS, t.Files[i].SHA256 = 0, ""
		}
	}
	slices.SortStableFunc(p.Takes, func(a, b Take) int { return cmp.Compare(a.Key, b.Key) })
	if err := p.check(); err != nil {
		return nil, err
	}
	id, err := p.hash()
	if err != nil {
		return nil, err
	}
	p.PlanID = id
	return p, p.Divide(max(d.Parts, 1))
}

// compact is JSON without blanks, {} for none.
func compact(text json.RawMessage) (json.RawMessage, error) {
	if len(text) == 0 {
		return json.RawMessage("{}"), nil
	}
	var b bytes.Buffer
	err := json.Compact(&b, text)
	return b.Bytes(), err
}

// id is the hash of what a recipe says; memory changes no output.
func (r Recipe) id(version string) string {
	r.ID, r.MemoryMiB, r.Rig = "", 0, ""
	text, err := json.Marshal(struct {
		Recipe
		Version string
	}{r, version})
	if err != nil {
		return ""
	}
	return digest(text)
}

func digest(text []byte) string {
	sum := sha256.Sum256(text)
	return hex.EncodeToString(sum[:])
}

// hash is the plan's ID: of everything but the ID itself and the parts.
func (p *Plan) hash() (string, error) {
	bare := *p
	bare.PlanID, bare.Parts = "", 0
	bare.Takes = slices.Clone(p.Takes)
	for k := range bare.Takes {
		bare.Takes[k].Part = 0
	}
	text, err := json.Marshal(&bare)
	if err != nil {
		return "", fmt.Errorf("plan: %w", err)
	}
	return digest(text), nil
}

// reserved are names in the output folder that no take may have.
var reserved = []string{"summary.json", "summary.txt", "summary.previous.json", "index.html", outcomeName}

// CheckKey reports a key that cannot be the name of a take's folder.
func CheckKey(key string) error {
	const longest = 1000
	if key == "" || key != path.Clean(key) || path.IsAbs(key) || strings.ContainsAny(key, "\\\x00") || len(key) > longest {
		return fmt.Errorf("take %q: not the name of a folder below the output folder", key)
	}
	for _, part := range strings.Split(key, "/") {
		if strings.HasPrefix(part, ".") {
			return fmt.Errorf("take %q: a name that begins with a dot", key)
		}
		if len(part) > 255 {
			return fmt.Errorf("take %q: a name of %d bytes, want at most 255", key, len(part))
		}
	}
	for _, r := range reserved {
		if strings.EqualFold(key, r) {
			return fmt.Errorf("take %q: the name is that of a file of the batch itself", key)
		}
	}
	return nil
}

// check reports everything that is wrong with a plan.
func (p *Plan) check() error {
	var faults []error
	fault := func(format string, a ...any) {
		if len(faults) < 20 {
			faults = append(faults, fmt.Errorf("plan: "+format, a...))
		}
	}
	if p.TimeoutS < 0 {
		fault("time-out of %g s", p.TimeoutS)
	}
	folded := make(map[string]string, len(p.Takes))
	for _, t := range p.Takes {
		if err := CheckKey(t.Key); err != nil {
			fault("%v", err)
			continue
		}
		low := strings.ToLower(t.Key)
		if before, ok := folded[low]; ok {
			if before == t.Key {
				fault("take %s: two takes of that name: outputs.name must tell them apart", t.Key)
			} else {
				fault("takes %s and %s: differ only in case: on many disks that is the same folder", before, t.Key)
			}
		}
		folded[low] = t.Key
		if t.Recipe < 0 || t.Recipe >= len(p.Recipes) {
			fault("take %s: recipe %d of %d", t.Key, t.Recipe, len(p.Recipes))
		}
		if t.OutputBytes < 0 {
			fault("take %s: outputs of %d bytes", t.Key, t.OutputBytes)
		}
		if len(t.Paths) == 0 || len(t.Files) == 0 {
			fault("take %s: no files", t.Key)
		}
		for _, f := range t.Files {
			if f.Bytes < 0 || path.IsAbs(f.Path) || f.Path == ".." || strings.HasPrefix(path.Clean(f.Path), "../") {
				fault("take %s: file %q lies outside the root of the takes", t.Key, f.Path)
			}
		}
	}
	for _, t := range p.Takes {
		for up := path.Dir(strings.ToLower(t.Key)); up != "."; up = path.Dir(up) {
			if above, ok := folded[up]; ok {
				fault("takes %s and %s: the folder of one would lie in that of the other: give outputs.name another form", above, t.Key)
			}
		}
	}
	return errors.Join(faults...)
}

// Divide cuts the plan into n parts balanced by bytes: the largest take first,
// ties in the order of the plan, each to the part that has the least so far,
// ties to the first.
func (p *Plan) Divide(n int) error {
	if most := max(1, min(len(p.Takes), MaxParts)); n < 1 || n > most {
		return fmt.Errorf("plan: %d parts: want 1 to %d for %d takes", n, most, len(p.Takes))
	}
	order := make([]int, len(p.Takes))
	size := make([]int64, len(p.Takes))
	for k, t := range p.Takes {
		order[k], size[k] = k, t.Bytes()
	}
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(size[b], size[a]) })
	load, count := make([]int64, n), make([]int, n)
	for _, k := range order {
		least := 0
		for i := range load {
			if load[i] < load[least] || load[i] == load[least] && count[i] < count[least] {
				least = i
			}
		}
		p.Takes[k].Part = least
		load[least] += size[k]
		count[least]++
	}
	p.Parts = n
	return nil
}

// MaxParts is the most parts of a plan: the highest array index of Slurm is
// 1000 unless its administrator raised it.
const MaxParts = 1000

// Write writes the plan as JSON, a line a take. The same plan gives the same
// bytes.
func (p *Plan) Write(w io.Writer) error {
	head := *p
	head.Recipes, head.Takes, head.LeftOut = nil, nil, nil
	text, err := json.Marshal(head)
	if err != nil {
		return fmt.Errorf("plan: %w", err)
	}
	var b bytes.Buffer
	b.Write(bytes.TrimSuffix(text, []byte(`"recipes":null,"takes":null,"left_out":null}`)))
	list := func(name string, n int, at func(int) any, end string) error {
		fmt.Fprintf(&b, "\n%q:[", name)
		for k := range n {
			text, err := json.Marshal(at(k))
			if err != nil {
				return fmt.Errorf("plan: %w", err)
			}
			if k > 0 {
				b.WriteByte(',')
			}
			b.WriteByte('\n')
			b.Write(text)
		}
		b.WriteString("]" + end)
		return nil
	}
	err = errors.Join(
		list("recipes", len(p.Recipes), func(k int) any { return p.Recipes[k] }, ","),
		list("takes", len(p.Takes), func(k int) any { return p.Takes[k] }, ","),
		list("left_out", len(p.LeftOut), func(k int) any { return p.LeftOut[k] }, "}\n"))
	if err != nil {
		return err
	}
	_, err = w.Write(b.Bytes())
	return err
}

// ReadPlan reads a plan that Write wrote. One that was changed since, or cut
// off, is refused.
func ReadPlan(name string, data []byte) (*Plan, error) {
	if len(data) > MaxPlanBytes {
		return nil, fmt.Errorf("%s: %d bytes, want at most %d", name, len(data), MaxPlanBytes)
	}
	d := json.NewDecoder(bytes.NewReader(data))
	d.DisallowUnknownFields()
	p := &Plan{}
	if err := d.Decode(p); err != nil {
		return nil, fmt.Errorf("%s: not a plan: %w", name, err)
	}
	if _, err := d.Token(); err != io.EOF {
		return nil, fmt.Errorf("%s: more after the plan", name)
	}
	if p.Schema != PlanSchema {
		return nil, fmt.Errorf("%s: plan of the form %q, want %q", name, p.Schema, PlanSchema)
	}
	if err := p.check(); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	if id, err := p.hash(); err != nil || id != p.PlanID {
		return nil, errors.Join(fmt.Errorf("%s: plan_id %.12s does not fit what the plan says (%.12s): the file was changed; make it again", name, p.PlanID, id), err)
	}
	// The parts are no part of the hash, but follow from the takes.
	part := make([]int, len(p.Takes))
	for k, t := range p.Takes {
		part[k] = t.Part
	}
	if err := p.Divide(p.Parts); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	for k, t := range p.Takes {
		if t.Part != part[k] {
			return nil, fmt.Errorf("%s: take %s is in part %d, want %d of %d: the file was changed; make it again", name, t.Key, part[k], t.Part, p.Parts)
		}
	}
	return p, nil
}
