package main

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path"
	"path/filepath"
	"reflect"
	"slices"
	"strconv"
	"strings"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/quality"
	"alidade/pkg/rig"
	"alidade/pkg/sheet"
)

// jobSchemaID is the $id of the JSON Schema of a job file.
const jobSchemaID = "urn:alidade:schema:job:1"

// jobFile is the form of a job file. Paths in it are relative to its folder,
// those of takes to its root.
type jobFile struct {
	Rig       string      `json:"rig,omitempty" jsonschema_description:"rig file of all takes that no entry of rigs matches"`
	Rigs      []rigChoice `json:"rigs,omitempty" jsonschema_description:"rig files by the paths of takes or by what their files say of themselves; the first entry that fits counts"`
	Root      string      `json:"root,omitempty" jsonschema_description:"folder that the paths of takes are relative to; the folder of the job file if absent"`
	Takes     []string    `json:"takes" jsonschema:"minItems=1" jsonschema_description:"patterns of paths: * within a name, ** for any folders, {ch} for the channel number of a set of files"`
	Exclude   []string    `json:"exclude,omitempty" jsonschema_description:"patterns of paths that are left out"`
	Steer     jobSteer    `json:"steer" jsonschema_description:"the options of alidade steer by their long names with _ for -"`
	Outputs   jobOutputs  `json:"outputs,omitempty" jsonschema_description:"what is written, and where"`
	Limits    jobLimits   `json:"limits,omitempty" jsonschema_description:"what a take must keep; one that does not is kept and counted as missed"`
	Overrides string      `json:"overrides,omitempty" jsonschema_description:"CSV file with a column take and a column for each option that some takes have otherwise; it counts before the files TAKE.alidade.yaml beside the takes (alidade schema sidecar)"`
	TimeoutS  float64     `json:"timeout_s,omitempty" jsonschema:"minimum=0" jsonschema_description:"seconds that a take may need; 0 is no limit"`
}

// jobSteer are the options of steer; a direction may stand there as a number.
type jobSteer struct {
	pipeline.Options
	Toward any `json:"toward,omitempty" jsonschema:"oneof_type=string;number" jsonschema_description:"direction AZ or AZ,EL in degrees, auto or follow"`
}

type jobOutputs struct {
	Folder  string   `json:"folder,omitempty" jsonschema_description:"output folder; out if absent"`
	Name    string   `json:"name,omitempty" jsonschema_description:"folder of a take in it: {take} its path without ending, or its parts {folder} and {file}; {rig} the rig file's name, {date} the day of its metadata or undated, {direction} where the beam points, as in the track's name; {take} if absent"`
	Format  string   `json:"format,omitempty" jsonschema:"enum=auto,enum=pcm16,enum=pcm24,enum=float32" jsonschema_description:"format of the track"`
	Reports []string `json:"reports,omitempty" jsonschema:"enum=json,enum=csv,enum=html" jsonschema_description:"report files; all of them if absent"`
	// Previews choose the pages that sound.
	Previews []previewRule `json:"previews,omitempty" jsonschema_description:"listening excerpts in the pages of takes; the first entry that fits counts, and a take that none fits has none"`
}

type jobLimits struct {
	FailOn           string   `json:"fail_on,omitempty" jsonschema:"enum=never,enum=warning,enum=error" jsonschema_description:"level of a finding that fails a take; error if absent"`
	MinimumSNRGainDB *float64 `json:"minimum_snr_gain_db,omitempty" jsonschema_description:"least SNR gain of the whole, dB; a take whose gain could not be measured misses it"`
	rig.Limits                // of the inspection, over those of the rig file
}

// jobRecipe is what the options of a batch recipe hold.
type jobRecipe struct {
	Steer   pipeline.Options `json:"steer"`
	Reports []string         `json:"reports"`
	Limits  jobLimits        `json:"limits"`
}

// validate reports everything that is wrong with the options of a recipe.
func (r jobRecipe) validate() error {
	o := r.Steer
	if o.Reports = strings.Join(r.Reports, ","); o.Reports == "" {
		o.Reports = "none"
	}
	return o.Validate()
}

func jobSchema() ([]byte, error) {
	return sheet.SchemaOf(jobFile{}, jobSchemaID, "Alidade job file")
}

// job is a job file that was read, with what it names.
type job struct {
	jobFile
	path      string
	base      string // its folder
	overrides []override
	beside    map[string]*override // of the files beside the takes, by their paths without ending
}

// override is a line of the overrides.
type override struct {
	take    string // path or key
	rig     string
	options map[string]any
	limits  jobLimits
	used    bool
}

// jobOptions are the options that a job sets by other keys, or itself.
var jobOptions = map[string]string{
	"out":       "outputs.folder says where outputs go",
	"overwrite": "a batch replaces what is not up to date, and nothing else",
	"reports":   "outputs.reports says which",
	"format":    "outputs.format says which",
	"chain":     "takes of a job are found: find_chain finds the files of a chain",
}

// groupOptions say which files a take has: that holds for a whole job.
var groupOptions = map[string]string{
	"find_chain": "the job says for all its takes whether chains are looked for",
	"find_set":   "sets are found by themselves",
}

// settle makes a direction that stands as a number a text.
func (s *jobSteer) settle() {
	if n, ok := s.Toward.(float64); ok {
		s.Options.Toward = strconv.FormatFloat(n, 'f', -1, 64)
	} else {
		s.Options.Toward, _ = s.Toward.(string)
	}
}

// readJob reads a job file and its overrides. All faults come together.
func readJob(name string) (*job, error) {
	data, err := readBounded(name, sheet.MaxBytes)
	if err != nil {
		return nil, err
	}
	text, err := jobSchema()
	if err != nil {
		return nil, err
	}
	schema, err := sheet.NewSchema(text)
	if err != nil {
		return nil, err
	}
	doc := sheet.Parse(name, data, schema)
	if err := doc.Err(); err != nil && !doc.Readable() {
		return nil, err
	}
	j := &job{path: name, base: filepath.Dir(name)}
	doc.Fill(&j.jobFile)
	j.Steer.settle()
	for _, option := range sortedKeys(jobOptions) {
		if at := "steer." + option; doc.Has(at) {
			doc.KeyFault(at, "%s", jobOptions[option])
		}
	}
	for list, patterns := range map[string][]string{"takes": j.Takes, "exclude": j.Exclude} {
		for k, p := range patterns {
			if err := batch.CheckPattern(p); err != nil {
				doc.Fault(fmt.Sprintf("%s[%d]", list, k), "%v", err)
			}
		}
	}
	if j.Rig == "" && len(j.Rigs) == 0 {
		doc.Fault("", "neither rig nor rigs is given")
	}
	j.checkRigChoices(doc)
	j.checkName(doc)
	j.checkPreviews(doc)
	folder := j.folder()
	if filepath.IsAbs(folder) || !filepath.IsLocal(folder) || folder == "." {
		doc.Fault("outputs.folder", "%q: want a folder below that of the job file (alidade batch --out takes any)", folder)
	}
	if doc.Err() == nil {
		if err := j.recipe(nil).validate(); err != nil {
			for _, line := range strings.Split(err.Error(), "\n") {
				doc.Fault("steer", "%s", line)
			}
		}
	}
	if err := doc.Err(); err != nil {
		return nil, err
	}
	if j.Overrides != "" {
		return j, j.readOverrides()
	}
	return j, nil
}

func readBounded(name string, limit int64) ([]byte, error) {
	file, err := openBounded(name, limit)
	if err != nil {
		return nil, err
	}
	data, err := io.ReadAll(file)
	return data, errors.Join(err, file.Close())
}

func sortedKeys[V any](m map[string]V) []string {
	var keys []string
	for k := range m {
		keys = append(keys, k)
	}
	slices.Sort(keys)
	return keys
}

// folder is the output folder as the job has it.
func (j *job) folder() string {
	if j.Outputs.Folder == "" {
		return "out"
	}
	return filepath.Clean(j.Outputs.Folder)
}

// root is the folder of the takes.
func (j *job) root() string {
	if filepath.IsAbs(j.Root) {
		return j.Root
	}
	return filepath.Join(j.base, j.Root)
}

// recipe is the recipe of a take with the given override, nil for none.
func (j *job) recipe(o *override) jobRecipe {
	r := jobRecipe{Reports: j.Outputs.Reports, Limits: j.Limits}
	// A copy: what is decoded over it below must not reach the job's own lists
	// and numbers.
	if text, err := json.Marshal(j.Steer.Options); err != nil || json.Unmarshal(text, &r.Steer) != nil {
		return jobRecipe{}
	}
	r.Steer.Format = j.Outputs.Format
	if r.Reports == nil {
		r.Reports = []string{pipeline.ReportJSON, pipeline.ReportCSV, pipeline.ReportHTML}
	}
	if r.Steer.OverRange == "" {
		r.Steer.OverRange = pipeline.OverRangeFloat32
	}
	if r.Limits.FailOn == "" {
		r.Limits.FailOn = failError
	}
	if o != nil {
		if o.limits.FailOn != "" {
			r.Limits.FailOn = o.limits.FailOn
		}
		if o.limits.MinimumSNRGainDB != nil {
			r.Limits.MinimumSNRGainDB = o.limits.MinimumSNRGainDB
		}
		r.Limits.Limits = rig.Limits(quality.Limits(o.limits.Limits).Over(quality.Limits(r.Limits.Limits)))
	}
	if o != nil && len(o.options) > 0 {
		// A beam points to one place: the other says so no more.
		_, toward := o.options["toward"]
		_, focus := o.options["focus"]
		switch {
		case focus && !toward:
			r.Steer.Toward = ""
		case toward && !focus:
			r.Steer.Focus = ""
		}
		// By way of JSON, whose keys the options have; the values fit: they were
		// parsed for the fields.
		text, err := json.Marshal(o.options)
		if err == nil {
			err = json.Unmarshal(text, &r.Steer)
		}
		if err != nil {
			return jobRecipe{}
		}
	}
	return r
}

// steerFields are the options that overrides may set: their names and kinds.
func steerFields() map[string]reflect.Type {
	fields := map[string]reflect.Type{}
	t := reflect.TypeFor[pipeline.Options]()
	for k := range t.NumField() {
		name, _, _ := strings.Cut(t.Field(k).Tag.Get("json"), ",")
		_, other := jobOptions[name]
		_, grouping := groupOptions[name]
		if name != "-" && name != "" && !grouping && (!other || name == "format") {
			fields[name] = t.Field(k).Type
		}
	}
	return fields
}

func (j *job) readOverrides() error {
	name := j.Overrides
	if !filepath.IsAbs(name) {
		name = filepath.Join(j.base, name)
	}
	data, err := readBounded(name, sheet.MaxBytes)
	if err != nil {
		return &usageError{err: err}
	}
	fields := steerFields()
	columns := []sheet.Column{{Name: "take", Required: true}, {Name: "rig"}}
	for _, f := range sortedKeys(fields) {
		columns = append(columns, sheet.Column{Name: f})
	}
	table := sheet.ParseTable(name, data, columns)
	seen := map[string]bool{}
	for row := range table.Rows() {
		o := override{options: map[string]any{}}
		var ok bool
		if o.take, ok = table.Text(row, "take"); !ok {
			table.Fault(row, "take", "no take named")
			continue
		}
		if o.take = path.Clean(o.take); seen[o.take] {
			table.Fault(row, "take", "%s has a line already", o.take)
		}
		seen[o.take] = true
		o.rig, _ = table.Text(row, "rig")
		for _, f := range sortedKeys(fields) {
			text, ok := table.Text(row, f)
			if !ok {
				continue
			}
			if v, err := valueOf(text, fields[f]); err != nil {
				table.Fault(row, f, "%v", err)
			} else {
				o.options[f] = v
			}
		}
		if err := j.recipe(&o).validate(); err != nil && table.Err() == nil {
			table.Fault(row, "take", "%s", strings.ReplaceAll(err.Error(), "\n", "; "))
		}
		j.overrides = append(j.overrides, o)
	}
	return table.Err()
}

// valueOf reads a cell as a value of a field.
func valueOf(text string, t reflect.Type) (any, error) {
	if t.Kind() == reflect.Pointer {
		t = t.Elem()
	}
	switch t.Kind() {
	case reflect.Bool:
		if text != "true" && text != "false" {
			return nil, fmt.Errorf("%q: want true or false", text)
		}
		return text == "true", nil
	case reflect.Float64:
		v, err := strconv.ParseFloat(text, 64)
		if err != nil || v != v || v > 1e300 || v < -1e300 {
			return nil, fmt.Errorf("%q: not a number", text)
		}
		return v, nil
	case reflect.Int:
		v, err := strconv.Atoi(text)
		if err != nil {
			return nil, fmt.Errorf("%q: not a whole number", text)
		}
		return v, nil
	case reflect.Slice:
		return strings.Split(text, ";"), nil
	}
	return text, nil
}

// rigState is a rig file with everything it names, as a hash, and how many
// microphones it has.
func rigState(name string) (sum string, r *rig.Rig, err error) {
	data, err := readBounded(name, sheet.MaxBytes)
	if err != nil {
		return "", nil, err
	}
	h := sha256.New()
	h.Write(data)
	r, err = rig.Load(name, data, func(beside string) (io.ReadCloser, error) {
		if !filepath.IsAbs(beside) {
			beside = filepath.Join(filepath.Dir(name), beside)
		}
		text, err := readBounded(beside, sheet.MaxBytes)
		h.Write(text)
		return io.NopCloser(bytes.NewReader(text)), err
	})
	return hex.EncodeToString(h.Sum(nil)), r, err
}

// isPlan reports whether a file is a plan rather than a job file.
func isPlan(name string) (bool, error) {
	file, err := os.Open(name)
	if err != nil {
		return false, err
	}
	head := make([]byte, 64)
	n, err := io.ReadFull(file, head)
	if err == io.ErrUnexpectedEOF || err == io.EOF {
		err = nil
	}
	return bytes.HasPrefix(head[:n], []byte(`{"schema":"`+batch.PlanSchema+`"`)), errors.Join(err, file.Close())
}
