package pipeline

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"alidade/pkg/beam"
	"alidade/pkg/bearing"
	"alidade/pkg/quality"
	"alidade/pkg/rig"
)

// Spec is one take to be steered.
type Spec struct {
	Take     []string // files of the take, in order: side by side, or a chain with Options.Chain
	RigPath  string
	Options  Options
	Limits   quality.Limits // over those of the rig file, where not zero
	Version  string         // program version, for the report
	Command  []string       // command line, for the report; nil under --private
	NoHashes bool           // leave the hashes of take and tracks out: nobody will see them
	OneCore  bool           // leave the other cores alone: other takes have them
	Created  string         // RFC 3339 time for the report; empty when reproducible
}

// Options are the options of a steer run, in the words of the command line:
// each field is the long option of that name with _ for -. The zero value of a
// field is its default.
type Options struct {
	Toward string `json:"toward,omitempty"` // AZ[,EL] in degrees, auto or follow
	Focus  string `json:"focus,omitempty"`  // X,Y,Z in metres from the rig's origin, or auto
	Pick   int    `json:"pick,omitempty"`   // for auto and follow: which of those found, 1 (default) the dominant one

	Method  string `json:"method,omitempty"`  // sinc, farrow or spectral (default)
	Weights string `json:"weights,omitempty"` // delay-and-sum (default), constant-beamwidth, superdirective or minimum-variance
	Taper   string `json:"taper,omitempty"`   // default uniform
	// Null are directions AZ[,EL] that the beam does not hear.
	Null []string `json:"null,omitempty"`
	// WhiteNoiseGainFloorDB bounds how much a design raises the noise of the
	// microphones themselves, dB; nil is 0.
	WhiteNoiseGainFloorDB *float64 `json:"white_noise_gain_floor_db,omitempty"`
	// ReestimateEvery finds minimum-variance weights again that often, seconds;
	// 0 is once for the take.
	ReestimateEvery   float64  `json:"reestimate_every,omitempty"`
	Postfilter        string   `json:"postfilter,omitempty"`          // none (default), white or diffuse
	PostfilterFloorDB *float64 `json:"postfilter_floor_db,omitempty"` // smallest gain of the postfilter, dB; nil is -15
	UndoSpreading     bool     `json:"undo_spreading,omitempty"`      // for a focus: undo the level differences of a near source

	Chain     bool `json:"chain,omitempty"`      // the files of the take follow each other
	FindChain bool `json:"find_chain,omitempty"` // find the files that the recorder split the take into
	FindSet   bool `json:"find_set,omitempty"`   // find the other files of the set by iXML

	NoiseCue       string `json:"noise_cue,omitempty"`       // label of the cues where only noise sounds
	TargetCue      string `json:"target_cue,omitempty"`      // label of the cues where the target sounds too
	Noise          string `json:"noise,omitempty"`           // A..B,... where only noise sounds
	Target         string `json:"target,omitempty"`          // A..B,... where the target sounds too
	IsolatedNoise  string `json:"isolated_noise,omitempty"`  // path of a take
	IsolatedTarget string `json:"isolated_target,omitempty"` // path of a take
	CompareTo      string `json:"compare_to,omitempty"`      // microphone name
	ReferencePoint string `json:"reference_point,omitempty"` // centre or a microphone name

	TemperatureC *float64 `json:"temperature_c,omitempty"`
	HumidityPct  *float64 `json:"humidity_pct,omitempty"`
	PressureKPa  *float64 `json:"pressure_kpa,omitempty"`
	SpeedOfSound *float64 `json:"speed_of_sound,omitempty"` // m/s

	HighpassHz float64 `json:"highpass,omitempty"` // Hz, 0 is none
	GainDB     float64 `json:"gain_db,omitempty"`  // of the track

	Format        string  `json:"format,omitempty"`     // auto (default), pcm16, pcm24 or float32
	OverRange     string  `json:"over_range,omitempty"` // fail (default) or float32
	WithReference bool    `json:"with_reference,omitempty"`
	Excerpt       string  `json:"excerpt,omitempty"`      // A..B
	Handles       float64 `json:"handles,omitempty"`      // seconds
	KeepDead      bool    `json:"keep_dead,omitempty"`    // dead microphones stay part of the beam
	AlignClocks   bool    `json:"align_clocks,omitempty"` // measure the clocks of the channels and bring them to one
	NoVerify      bool    `json:"no_verify,omitempty"`
	NoMeasure     bool    `json:"no_measure,omitempty"`
	Reports       string  `json:"reports,omitempty"`    // json,csv,html (default) or none
	Preview       bool    `json:"preview,omitempty"`    // listening excerpts in page and report
	PreviewAt     string  `json:"preview_at,omitempty"` // A..B of the take: where they are; by itself if empty
	Out           string  `json:"out,omitempty"`
	Overwrite     bool    `json:"overwrite,omitempty"`
	Private       bool    `json:"private,omitempty"` // leave out what names places, people and machines
	BlockFrames   int     `json:"-"`                 // frames a block; 0 is the default. It changes no sample.
}

// UsageError is a fault of the options, the rig or a file that describes what
// to do: the same command will fail again until it is changed.
type UsageError struct {
	Err  error
	Hint string // what helps, or empty
}

// Error implements error.
func (e *UsageError) Error() string { return e.Err.Error() }

// Unwrap gives the cause.
func (e *UsageError) Unwrap() error { return e.Err }

// HintedError is an error of the run with a word on what helps.
type HintedError struct {
	Err  error
	Hint string
}

// Error implements error.
func (e *HintedError) Error() string { return e.Err.Error() }

// Unwrap gives the cause.
func (e *HintedError) Unwrap() error { return e.Err }

// The methods of alignment.
const (
	MethodSinc     = "sinc"
	MethodFarrow   = "farrow"
	MethodSpectral = "spectral"
)

// What --toward says in place of a direction, and --focus in place of a point.
const (
	TowardAuto   = "auto"   // find the source and steer to it
	TowardFollow = "follow" // find the source's path and go with it
)

// The weights.
const (
	WeightsDelayAndSum       = "delay-and-sum"
	WeightsConstantBeamwidth = "constant-beamwidth"
	WeightsSuperdirective    = "superdirective"
	WeightsMinimumVariance   = "minimum-variance"
)

// The output formats.
const (
	FormatAuto    = "auto"
	FormatPCM16   = "pcm16"
	FormatPCM24   = "pcm24"
	FormatFloat32 = "float32"
)

// The policies for a track that leaves the range of its format.
const (
	OverRangeFail    = "fail"
	OverRangeFloat32 = "float32"
)

// The report files of a run.
const (
	ReportJSON = "json"
	ReportCSV  = "csv"
	ReportHTML = "html"
)

// settings are options with their texts understood.
type settings struct {
	Options
	aim       aim
	direction *rig.Direction // of --toward, or found; of a path the mean
	point     *rig.Point     // of --focus, or found
	path      *bearing.Track // found, of --toward follow
	taper     beam.Taper
	nulls     []rig.Direction
	floorDB   float64

	postfilterFloorDB float64
	noise             []Stretch
	target            []Stretch
	excerpt           *Stretch
	previewAt         *Stretch
	reports           []string
}

// resolve reads the texts of the options and reports everything that is wrong
// with them at once.
func (o Options) resolve() (*settings, error) {
	s := &settings{Options: o}
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf(format, args...)) }

	switch {
	case o.Toward == "" && o.Focus == "":
		fault("no direction: give --toward AZ[,EL] or --focus X,Y,Z")
	case o.Toward != "" && o.Focus != "":
		fault("both --toward %q and --focus %q: a beam points to one place", o.Toward, o.Focus)
	case o.Toward == TowardAuto:
		s.aim = aimFound
	case o.Toward == TowardFollow:
		s.aim = aimFollow
	case o.Focus == TowardAuto:
		s.aim = aimFoundPoint
	case o.Toward != "":
		d, err := ParseDirection(o.Toward)
		if err != nil {
			fault("--toward %q: %w", o.Toward, err)
		}
		s.direction = &d
	default:
		p, err := ParsePoint(o.Focus)
		if err != nil {
			fault("--focus %q: %w", o.Focus, err)
		}
		s.point = &p
	}
	s.resolvePick(fault)
	if o.UndoSpreading && o.Focus == "" {
		fault("--undo-spreading needs a point: a far source has no spreading to undo (give --focus X,Y,Z)")
	}

	choose := func(option string, value *string, def string, allowed ...string) {
		if *value == "" {
			*value = def
		}
		if !slices.Contains(allowed, *value) {
			fault("--%s %q: want one of %s", option, *value, strings.Join(allowed, ", "))
		}
	}
	choose("weights", &s.Weights, WeightsDelayAndSum, WeightsDelayAndSum, WeightsConstantBeamwidth, WeightsSuperdirective, WeightsMinimumVariance)
	method := MethodSpectral
	if s.aim == aimFollow {
		method = MethodFarrow
	}
	choose("method", &s.Method, method, MethodSinc, MethodFarrow, MethodSpectral)
	s.resolveWeights(fault)
	choose("postfilter", &s.Postfilter, PostfilterNone, PostfilterNone, PostfilterWhite, PostfilterDiffuse)
	choose("format", &s.Format, FormatAuto, FormatAuto, FormatPCM16, FormatPCM24, FormatFloat32)
	choose("over-range", &s.OverRange, OverRangeFail, OverRangeFail, OverRangeFloat32)

	if s.Taper == "" {
		s.Taper = "uniform"
	}
	taper, err := beam.ParseTaper(s.Taper)
	if err != nil {
		fault("--taper: %w", err)
	}
	s.taper = taper

	stretches := func(option, text string) []Stretch {
		if text == "" {
			return nil
		}
		list, err := ParseStretches(text)
		if err != nil {
			fault("--%s %q: %w", option, text, err)
		}
		return list
	}
	s.noise = stretches("noise", o.Noise)
	s.target = stretches("target", o.Target)
	if list := stretches("excerpt", o.Excerpt); len(list) == 1 {
		s.excerpt = &list[0]
	} else if len(list) > 1 {
		fault("--excerpt %q: one stretch A..B, not %d", o.Excerpt, len(list))
	}
	if list := stretches("preview-at", o.PreviewAt); len(list) == 1 && o.Preview {
		s.previewAt = &list[0]
	} else if len(list) > 1 {
		fault("--preview-at %q: one stretch A..B, not %d", o.PreviewAt, len(list))
	} else if len(list) == 1 {
		fault("--preview-at %s: it says where --preview listens: give that too", o.PreviewAt)
	}
	if o.Handles != 0 && o.Excerpt == "" {
		fault("--handles %g: handles belong to --excerpt A..B", o.Handles)
	}
	if o.TargetCue != "" && o.NoiseCue == "" && o.Noise == "" && o.IsolatedNoise == "" {
		fault("--target-cue without --noise-cue: the target's power is what a stretch has above the noise, so the noise must be known (give --noise-cue LABEL)")
	}
	if o.Chain && (o.FindChain || o.FindSet) {
		fault("--chain with --find-chain or --find-set: the files are named or found, not both")
	}
	if o.Target != "" && o.Noise == "" && o.NoiseCue == "" && o.IsolatedNoise == "" {
		fault("--target without --noise: the target's power is what a stretch has above the noise, so the noise must be known (give --noise A..B)")
	}

	inRange := func(option string, v, low, high float64, unit string) {
		if !(v >= low && v <= high) {
			fault("--%s %g: want %g to %g %s", option, v, low, high, unit)
		}
	}
	inRange("handles", o.Handles, 0, 3600, "s")
	inRange("gain-db", o.GainDB, -120, 120, "dB")
	inRange("highpass", o.HighpassHz, 0, 20000, "Hz")
	if o.SpeedOfSound != nil {
		inRange("speed-of-sound", *o.SpeedOfSound, 100, 2000, "m/s")
		if o.TemperatureC != nil || o.HumidityPct != nil || o.PressureKPa != nil {
			fault("--speed-of-sound with air options: the one makes the others void")
		}
	}
	if o.NoMeasure {
		for _, given := range []struct{ option, value string }{
			{"noise-cue", o.NoiseCue}, {"target-cue", o.TargetCue},
			{"noise", o.Noise}, {"target", o.Target}, {"isolated-noise", o.IsolatedNoise},
			{"isolated-target", o.IsolatedTarget}, {"compare-to", o.CompareTo},
		} {
			forWeights := s.Weights == WeightsMinimumVariance && slices.Contains([]string{"noise", "noise-cue", "isolated-noise"}, given.option)
			if given.value != "" && !forWeights {
				fault("--%s with --no-measure: nothing would be measured with it", given.option)
			}
		}
	}
	if s.reports, err = parseReports(o.Reports); err != nil {
		fault("--reports %q: %w", o.Reports, err)
	} else if o.Preview && !slices.Contains(s.reports, ReportHTML) {
		fault("--preview with --reports %s: the excerpts are for the page (give html among the reports)", o.Reports)
	}
	if len(faults) > 0 {
		return nil, &UsageError{Err: errors.Join(faults...)}
	}
	return s, nil
}

// resolveWeights reads the options that belong to the weights.
func (s *settings) resolveWeights(fault func(format string, args ...any)) {
	for _, text := range s.Null {
		d, err := ParseDirection(text)
		if err != nil {
			fault("--null %q: %w", text, err)
			continue
		}
		if s.Toward != "" {
			if look, err := ParseDirection(s.Toward); err == nil && rig.AngleBetween(look, d) < nullApart {
				fault("--null %s: the direction that is steered to: a beam cannot be deaf to what it is to hear", text)
			}
		}
		s.nulls = append(s.nulls, d)
	}
	designed := s.Weights != WeightsDelayAndSum || len(s.Null) > 0
	if s.aim == aimFollow {
		s.resolveFollow(designed, fault)
	} else if designed && s.Method != MethodSpectral {
		fault("--method %s: weights other than delay-and-sum and nulls depend on frequency and need the method %s", s.Method, MethodSpectral)
	}
	s.resolveChanging(fault)
	if s.WhiteNoiseGainFloorDB != nil {
		s.floorDB = *s.WhiteNoiseGainFloorDB
		if !designed {
			fault("--white-noise-gain-floor-db %g: a floor belongs to weights other than delay-and-sum, which have the most white noise gain there is", s.floorDB)
		}
		if !(s.floorDB >= -60 && s.floorDB <= 30) {
			fault("--white-noise-gain-floor-db %g: want -60 to 30 dB", s.floorDB)
		}
	}
	if (s.Weights == WeightsSuperdirective || s.Weights == WeightsMinimumVariance) && s.Taper != "" && s.Taper != "uniform" {
		fault("--taper %s: the weights %s are found without a taper", s.Taper, s.Weights)
	}
	if s.Weights == WeightsConstantBeamwidth && len(s.Null) > 0 {
		fault("--null with --weights %s: nulls go with %s, %s and %s", s.Weights, WeightsDelayAndSum, WeightsSuperdirective, WeightsMinimumVariance)
	}
	if s.Weights == WeightsMinimumVariance && s.NoMeasure && s.Noise == "" && s.NoiseCue == "" && s.IsolatedNoise == "" {
		fault("--weights %s with --no-measure: the noise must be known; give --noise A..B", s.Weights)
	}
}

// resolveChanging reads the options that let the filters follow the sound.
func (s *settings) resolveChanging(fault func(format string, args ...any)) {
	if every := s.ReestimateEvery; every != 0 {
		if !(every >= 0.5 && every <= 3600) {
			fault("--reestimate-every %g: want 0.5 to 3600 s", every)
		}
		if s.Weights != WeightsMinimumVariance {
			fault("--reestimate-every %g: only the weights %s are found from noise", every, WeightsMinimumVariance)
		}
	}
	s.postfilterFloorDB = postfilterFloorDB
	if s.PostfilterFloorDB != nil {
		s.postfilterFloorDB = *s.PostfilterFloorDB
		if s.Postfilter == "" || s.Postfilter == PostfilterNone {
			fault("--postfilter-floor-db %g: a floor belongs to --postfilter %s or %s", s.postfilterFloorDB, PostfilterWhite, PostfilterDiffuse)
		}
		if !(s.postfilterFloorDB >= -60 && s.postfilterFloorDB <= 0) {
			fault("--postfilter-floor-db %g: want -60 to 0 dB", s.postfilterFloorDB)
		}
	}
}

// designed says that the weights depend on frequency.
func (s *settings) designed() bool {
	return s.Weights != WeightsDelayAndSum || len(s.nulls) > 0
}

func parseReports(text string) ([]string, error) {
	switch text {
	case "":
		return []string{ReportJSON, ReportCSV, ReportHTML}, nil
	case "none":
		return nil, nil
	}
	var list []string
	for _, name := range strings.Split(text, ",") {
		name = strings.TrimSpace(name)
		if name != ReportJSON && name != ReportCSV && name != ReportHTML {
			return nil, fmt.Errorf("%q is not a report: want json, csv, html or none", name)
		}
		if !slices.Contains(list, name) {
			list = append(list, name)
		}
	}
	return list, nil
}

// Validate reports everything that is wrong with the options that can be seen
// without a take and a rig, as one *UsageError.
func (o Options) Validate() error {
	_, err := o.resolve()
	return err
}

// ParseDirection reads AZ[,EL] in degrees: azimuth -360..360, elevation
// -90..90.
func ParseDirection(text string) (rig.Direction, error) {
	v, err := parseNumbers(text, 1, 2)
	if err != nil {
		return rig.Direction{}, fmt.Errorf("want AZ or AZ,EL in degrees: %w", err)
	}
	if math.Abs(v[0]) > 360 {
		return rig.Direction{}, fmt.Errorf("azimuth %g°: want -180 to 180, or 0 to 360", v[0])
	}
	el := 0.0
	if len(v) == 2 {
		if el = v[1]; math.Abs(el) > 90 {
			return rig.Direction{}, fmt.Errorf("elevation %g°: want -90 to 90", el)
		}
	}
	return rig.Degrees(v[0], el), nil
}

// ParsePoint reads X,Y,Z in metres.
func ParsePoint(text string) (rig.Point, error) {
	v, err := parseNumbers(text, 3, 3)
	if err != nil {
		return rig.Point{}, fmt.Errorf("want X,Y,Z in metres: %w", err)
	}
	p := rig.Point{X: v[0], Y: v[1], Z: v[2]}
	if p.Norm() > 1e5 {
		return rig.Point{}, fmt.Errorf("%.3g m away: use --toward for a source that far", p.Norm())
	}
	return p, nil
}

func parseNumbers(text string, least, most int) ([]float64, error) {
	parts := strings.Split(text, ",")
	if len(parts) < least || len(parts) > most {
		if least == most {
			return nil, fmt.Errorf("got %d numbers, want %d", len(parts), least)
		}
		return nil, fmt.Errorf("got %d numbers, want %d to %d", len(parts), least, most)
	}
	var v []float64
	for _, part := range parts {
		x, err := strconv.ParseFloat(strings.TrimSpace(part), 64)
		if err != nil || math.IsNaN(x) || math.IsInf(x, 0) {
			return nil, fmt.Errorf("%q is not a number", strings.TrimSpace(part))
		}
		v = append(v, x)
	}
	return v, nil
}
