package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"reflect"
	"regexp"
	"slices"
	"strings"
	"time"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/sheet"
	"alidade/pkg/wav"
)

// rigChoice chooses a rig for the takes that fit all it asks for.
type rigChoice struct {
	Match    string       `json:"match,omitempty" jsonschema_description:"pattern of a take's path or of its file's name"`
	Metadata takeMetadata `json:"metadata,omitempty" jsonschema_description:"what the take's first file must say of itself"`
	Rig      string       `json:"rig" jsonschema_description:"rig file"`
}

// takeMetadata are patterns for what a file says of itself, and two numbers of
// its header. What is absent is not asked for.
type takeMetadata struct {
	Description         string `json:"description,omitempty" jsonschema_description:"pattern of the bext description"`
	Originator          string `json:"originator,omitempty" jsonschema_description:"pattern of the bext originator"`
	OriginatorReference string `json:"originator_reference,omitempty" jsonschema_description:"pattern of the bext originator reference"`
	Project             string `json:"project,omitempty" jsonschema_description:"pattern of the iXML project"`
	Scene               string `json:"scene,omitempty" jsonschema_description:"pattern of the iXML scene"`
	Take                string `json:"take,omitempty" jsonschema_description:"pattern of the iXML take"`
	Tape                string `json:"tape,omitempty" jsonschema_description:"pattern of the iXML tape"`
	Note                string `json:"note,omitempty" jsonschema_description:"pattern of the iXML note"`
	FamilyName          string `json:"family_name,omitempty" jsonschema_description:"pattern of the family name of the iXML file set"`
	Channels            int    `json:"channels,omitempty" jsonschema:"minimum=1" jsonschema_description:"channels of the file"`
	SampleRateHz        int    `json:"sample_rate_hz,omitempty" jsonschema:"minimum=1" jsonschema_description:"sample rate of the file"`
}

// texts are the patterns by their keys, each with what a file says there.
func (m takeMetadata) texts(f *wav.File) map[string][2]string {
	var bext wav.Bext
	var ixml wav.IXML
	if f != nil && f.Metadata != nil {
		if f.Metadata.Bext != nil {
			bext = *f.Metadata.Bext
		}
		if f.Metadata.IXML != nil {
			ixml = *f.Metadata.IXML
		}
	}
	return map[string][2]string{
		"description": {m.Description, bext.Description}, "originator": {m.Originator, bext.Originator},
		"originator_reference": {m.OriginatorReference, bext.OriginatorReference},
		"project":              {m.Project, ixml.Project}, "scene": {m.Scene, ixml.Scene}, "take": {m.Take, ixml.Take},
		"tape": {m.Tape, ixml.Tape}, "note": {m.Note, ixml.Note}, "family_name": {m.FamilyName, ixml.FileSet.FamilyName},
	}
}

// textPattern is a pattern of a whole text, in which a slash is a character as
// any other.
func textPattern(pattern, text string) (bool, error) {
	hide := strings.NewReplacer("/", "\x01", "\n", "\x02", "\r", "")
	return path.Match(hide.Replace(pattern), hide.Replace(text))
}

// fits reports whether a file says all that is asked for.
func (m takeMetadata) fits(f *wav.File) bool {
	for _, t := range m.texts(f) {
		if t[0] == "" {
			continue
		}
		if ok, err := textPattern(t[0], t[1]); err != nil || !ok {
			return false
		}
	}
	return (m.Channels == 0 || m.Channels == f.Header.Channels) && (m.SampleRateHz == 0 || m.SampleRateHz == f.Header.Rate)
}

// of reports whether a take fits a pattern and says of itself what is asked
// for; sure is false where its file cannot be read.
func (m takeMetadata) of(match string, g group) (fits, sure bool) {
	if match != "" && !batch.Match(match, g.name) && !batch.Match(match, path.Base(g.name)) {
		return false, true
	}
	if m == (takeMetadata{}) {
		return true, true
	}
	if g.head == nil {
		return true, false
	}
	return m.fits(g.head), true
}

// check holds a pattern and what is asked for against what they may be.
func (m takeMetadata) check(doc *sheet.Document, at, match string) {
	if doc.Has(at + ".match") {
		if err := batch.CheckPattern(match); err != nil {
			doc.Fault(at+".match", "%v", err)
		}
	}
	texts := m.texts(nil)
	for _, key := range sortedKeys(texts) {
		if _, err := textPattern(texts[key][0], ""); err != nil {
			doc.Fault(at+".metadata."+key, "%q: not a pattern", texts[key][0])
		}
	}
}

// checkRigChoices holds the entries of rigs against what they may be.
func (j *job) checkRigChoices(doc *sheet.Document) {
	for k, c := range j.Rigs {
		at := fmt.Sprintf("rigs[%d]", k)
		if c.Match == "" && c.Metadata == (takeMetadata{}) {
			doc.Fault(at, "neither match nor metadata says which takes the rig is for")
		}
		c.Metadata.check(doc, at, c.Match)
	}
}

// previewRule says which part of the takes that fit is heard in their pages.
type previewRule struct {
	Match    string       `json:"match,omitempty" jsonschema_description:"pattern of a take's path or of its file's name; all takes if absent"`
	Metadata takeMetadata `json:"metadata,omitempty" jsonschema_description:"what the take's first file must say of itself"`
	At       string       `json:"at,omitempty" jsonschema_description:"A..B, at most 30 s: this part; chosen by itself if absent"`
	None     bool         `json:"none,omitempty" jsonschema_description:"none of it is heard"`
}

// checkPreviews holds the rules of excerpts against what they may be.
func (j *job) checkPreviews(doc *sheet.Document) {
	if len(j.Outputs.Previews) > 0 && j.Outputs.Reports != nil && !slices.Contains(j.Outputs.Reports, pipeline.ReportHTML) {
		doc.KeyFault("outputs.previews", "they are heard in pages, and outputs.reports has no html")
	}
	for _, option := range []string{"preview", "preview_at"} {
		if at := "steer." + option; doc.Has(at) && len(j.Outputs.Previews) > 0 {
			doc.KeyFault(at, "outputs.previews says which takes are heard, and where")
		}
	}
	for k, p := range j.Outputs.Previews {
		at := fmt.Sprintf("outputs.previews[%d]", k)
		p.Metadata.check(doc, at, p.Match)
		if p.None && p.At != "" {
			doc.Fault(at+".at", "%q, and none of it is to be heard", p.At)
		} else if p.At != "" {
			if list, err := pipeline.ParseStretches(p.At); err != nil {
				doc.Fault(at+".at", "%v", err)
			} else if len(list) != 1 {
				doc.Fault(at+".at", "%d stretches, want one", len(list))
			}
		}
	}
}

// preview gives a take the excerpt of the first rule that it fits, unless its
// own settings speak of one.
func (j *job) preview(g group, o *override, options *pipeline.Options) {
	if o != nil {
		_, itself := o.options["preview"]
		if _, at := o.options["preview_at"]; itself || at {
			return
		}
	}
	for _, p := range j.Outputs.Previews {
		if fits, sure := p.Metadata.of(p.Match, g); fits && sure {
			options.Preview, options.PreviewAt = !p.None, p.At
			return
		}
	}
}

// rigFor is the rig file of a take. A file that cannot be read says nothing of
// itself: it gets the rig of the others, or else of the first entry whose match
// it fits, and the batch will say what is wrong with it.
func (j *job) rigFor(g group, o *override) (string, error) {
	if o != nil && o.rig != "" {
		return o.rig, nil
	}
	unread := ""
	for _, c := range j.Rigs {
		switch fits, sure := c.Metadata.of(c.Match, g); {
		case fits && sure:
			return c.Rig, nil
		case fits && unread == "":
			unread = c.Rig
		}
	}
	switch {
	case j.Rig != "":
		return j.Rig, nil
	case unread != "":
		return unread, nil
	}
	return "", fmt.Errorf("%s: no entry of rigs matches it, and no rig is given for the others", g.name)
}

// places are what may stand in braces in outputs.name.
var places = []string{"{take}", "{folder}", "{file}", "{rig}", "{date}", "{direction}"}

var placePattern = regexp.MustCompile(`\{[^{}]*\}?|\}`)

// checkName holds outputs.name against what it may be.
func (j *job) checkName(doc *sheet.Document) {
	for _, p := range placePattern.FindAllString(j.Outputs.Name, -1) {
		if !slices.Contains(places, p) {
			doc.Fault("outputs.name", "%q: want only %s in braces", p, strings.Join(places, ", "))
		}
	}
}

// undated stands for the date of a take that carries none.
const undated = "undated"

// dateOf is the day a file says it was recorded on, as yyyy-mm-dd whatever it has
// between them: of bext, else of LIST INFO. What is no day of a calendar counts
// as none. The time of the file itself is that of the last copy, and does not count.
func dateOf(f *wav.File) string {
	if f == nil || f.Metadata == nil {
		return undated
	}
	if b := f.Metadata.Bext; b != nil {
		if day, ok := wav.ParseDay(b.OriginationDate); ok {
			return day.Format(time.DateOnly)
		}
	}
	for _, e := range f.Metadata.Info {
		if day, ok := wav.ParseDay(e.Text); ok && e.ID == "ICRD" {
			return day.Format(time.DateOnly)
		}
	}
	return undated
}

// keyOf is the folder of a take.
func (j *job) keyOf(g group, rigName string, o pipeline.Options) string {
	name := j.Outputs.Name
	if name == "" {
		name = "{take}"
	}
	take := strings.TrimSuffix(g.name, path.Ext(g.name))
	folder := path.Dir(take)
	if folder == "." {
		folder = ""
	}
	rigBase := path.Base(filepath.ToSlash(rigName))
	direction, err := o.AimName()
	if err != nil {
		direction = "" // the options are good: they were checked
	}
	name = strings.NewReplacer("{take}", take, "{folder}", folder, "{file}", path.Base(take),
		"{rig}", strings.TrimSuffix(rigBase, path.Ext(rigBase)), "{date}", dateOf(g.head), "{direction}", direction).Replace(name)
	return strings.TrimPrefix(path.Clean(strings.ReplaceAll(name, `\`, "_")), "/")
}

// sidecarEnding ends the name of a file of settings beside a take: roof_07.wav
// has roof_07.alidade.yaml.
const sidecarEnding = ".alidade.yaml"

// sidecarSchemaID is the $id of the JSON Schema of a file beside a take.
const sidecarSchemaID = "urn:alidade:schema:sidecar:1"

// sidecar is the form of a file of settings beside a take.
type sidecar struct {
	Rig    string    `json:"rig,omitempty" jsonschema_description:"rig file, relative to the folder of the job file"`
	Steer  jobSteer  `json:"steer,omitempty" jsonschema_description:"options of alidade steer that this take has otherwise, by their long names with _ for -"`
	Limits jobLimits `json:"limits,omitempty" jsonschema_description:"limits that this take has otherwise"`
}

func sidecarSchema() ([]byte, error) {
	return sheet.SchemaOf(sidecar{}, sidecarSchemaID, "Alidade settings beside a take")
}

// sidecars are the settings beside the takes of a job.
type sidecars struct {
	job    *job
	schema *sheet.Schema
	// names of the files by the path of the take without its ending, of each
	// folder that was looked into.
	byFolder map[string]map[string]string
}

// readSidecars looks for settings beside the takes and reads them. A file of
// settings whose take is not there is remarked on. All faults come together.
func (u *ui) readSidecars(j *job, groups []group) error {
	s := sidecars{job: j, byFolder: map[string]map[string]string{}}
	j.beside = map[string]*override{}
	var faults []error
	for _, g := range groups {
		stem := strings.TrimSuffix(g.name, path.Ext(g.name))
		name, err := s.take(stem)
		if err != nil {
			return err
		}
		if name == "" {
			continue
		}
		if err := s.read(name, stem); err != nil {
			faults = append(faults, err)
		}
	}
	for _, dir := range sortedKeys(s.byFolder) {
		for _, stem := range sortedKeys(s.byFolder[dir]) {
			u.remark("alidade: %s: no take of that name beside it", s.byFolder[dir][stem])
		}
	}
	return errors.Join(faults...)
}

// take takes the file of settings of a take off the list of its folder.
func (s *sidecars) take(stem string) (name string, err error) {
	dir := path.Dir(stem)
	list, ok := s.byFolder[dir]
	if !ok {
		list = map[string]string{}
		entries, err := os.ReadDir(filepath.Join(s.job.root(), filepath.FromSlash(dir)))
		if err != nil && !errors.Is(err, fs.ErrNotExist) {
			return "", err
		}
		for _, e := range entries {
			if base, ok := strings.CutSuffix(e.Name(), sidecarEnding); ok && !strings.HasPrefix(base, ".") {
				list[path.Join(dir, base)] = path.Join(dir, e.Name())
			}
		}
		s.byFolder[dir] = list
	}
	name = list[stem]
	delete(list, stem)
	return name, nil
}

// read reads the settings of a take. Where a line of the overrides names the
// take too, the line counts, option by option: it is the job's own.
func (s *sidecars) read(name, stem string) error {
	at := filepath.Join(s.job.root(), filepath.FromSlash(name))
	data, err := readBounded(at, sheet.MaxBytes)
	if err != nil {
		return &usageError{err: err}
	}
	if s.schema == nil {
		text, err := sidecarSchema()
		if err != nil {
			return err
		}
		if s.schema, err = sheet.NewSchema(text); err != nil {
			return err
		}
	}
	doc := sheet.Parse(at, data, s.schema)
	var f sidecar
	doc.Fill(&f)
	f.Steer.settle()
	for _, option := range sortedKeys(jobOptions) {
		if at := "steer." + option; doc.Has(at) && option != "format" {
			doc.KeyFault(at, "%s", jobOptions[option])
		}
	}
	for _, option := range sortedKeys(groupOptions) {
		if at := "steer." + option; doc.Has(at) {
			doc.KeyFault(at, "%s", groupOptions[option])
		}
	}
	o := override{take: stem, rig: f.Rig, options: map[string]any{}, used: true}
	value := reflect.ValueOf(f.Steer.Options)
	for k := range value.NumField() {
		option, _, _ := strings.Cut(value.Type().Field(k).Tag.Get("json"), ",")
		if option != "-" && option != "" && doc.Has("steer."+option) {
			o.options[option] = value.Field(k).Interface()
		}
	}
	if doc.Has("limits.fail_on") {
		o.limits.FailOn = f.Limits.FailOn
	}
	o.limits.MinimumSNRGainDB, o.limits.Limits = f.Limits.MinimumSNRGainDB, f.Limits.Limits
	if doc.Err() == nil {
		if err := s.job.recipe(&o).validate(); err != nil {
			for _, line := range strings.Split(err.Error(), "\n") {
				doc.Fault("steer", "%s", line)
			}
		}
	}
	if err := doc.Err(); err != nil {
		return err
	}
	s.job.beside[stem] = &o
	return nil
}

// over puts a line of the overrides over the settings of a file beside the
// take; either may be nil.
func (line *override) over(beside *override) *override {
	if line == nil || beside == nil {
		if line == nil {
			return beside
		}
		return line
	}
	both := override{take: line.take, rig: line.rig, options: map[string]any{}, limits: beside.limits}
	if both.rig == "" {
		both.rig = beside.rig
	}
	for name, v := range beside.options {
		both.options[name] = v
	}
	_, toward := line.options["toward"]
	_, focus := line.options["focus"]
	if toward || focus { // one place only
		delete(both.options, "toward")
		delete(both.options, "focus")
	}
	for name, v := range line.options {
		both.options[name] = v
	}
	return &both
}

// reportRoom is what the reports of a take and its outcome need on a disk at
// most, bytes; a page with the pictures in the report on top of that, and the
// listening excerpts in both.
const (
	reportRoom  = 192 << 10
	pageRoom    = 1536 << 10
	excerptRoom = 16 << 20
)

// roomFor is what the outputs of a take need at most, bytes; 0 where its header
// could not be read, and it will have none.
func roomFor(g group, r jobRecipe) int64 {
	if g.head == nil {
		return 0
	}
	frames := g.frames
	width := int64(map[string]int{pipeline.FormatPCM16: 2, pipeline.FormatPCM24: 3}[r.Steer.Format])
	if width == 0 || r.Steer.OverRange == pipeline.OverRangeFloat32 {
		width = 4
	}
	if r.Steer.WithReference {
		frames *= 2
	}
	room := frames*width + reportRoom
	if slices.Contains(r.Reports, pipeline.ReportHTML) {
		room += pageRoom
	}
	if r.Steer.Preview {
		room += excerptRoom
	}
	return room
}
