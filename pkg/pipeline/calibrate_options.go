package pipeline

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"alidade/pkg/calibration"
	"alidade/pkg/rig"
)

// The sounds of a calibration.
const (
	SoundSteady = "steady" // noise, a sweep, speech: all of the take in which it sounds
	SoundClaps  = "claps"  // the first 2 ms of each short sound, or of measured responses
)

// RelativeToMean is the RelativeTo of corrections whose mean stays as it was.
const RelativeToMean = "mean"

// The parts of a correction that --keep names.
const (
	KeepGain     = "gain"
	KeepDelay    = "delay"
	KeepPolarity = "polarity"
)

// The standard uncertainties that are assumed where none is given.
const (
	DefaultDirectionStdDeg = 0.5
	DefaultFocusStdMM      = 10.0
	DefaultTemperatureStdC = 1.0
	DefaultPlacementStdMM  = 0.5
	DefaultSurveyStdMM     = 20.0 // of places that are to be found
	DefaultElevationStdDeg = 2.0
	DefaultDelayStdUS      = 2.0
)

// CalibrateOptions are the options of a calibration, in the words of the
// command line: each field is the long option of that name with _ for -. The
// zero value of a field is its default. Uncertainties are standard ones.
type CalibrateOptions struct {
	Toward    string  `json:"toward,omitempty"`     // AZ[,EL] in degrees
	Focus     string  `json:"focus,omitempty"`      // X,Y,Z in metres from the rig's origin
	DistanceM float64 `json:"distance_m,omitempty"` // of a source given by Toward; 0 is far

	Sound      string  `json:"sound,omitempty"`        // steady (default) or claps
	FromHz     float64 `json:"from_hz,omitempty"`      // 0 is 300
	ToHz       float64 `json:"to_hz,omitempty"`        // 0 is 16000, at most 0.4 of the rate
	MaxDelayUS float64 `json:"max_delay_us,omitempty"` // largest error looked for; 0 is 1000
	Excerpt    string  `json:"excerpt,omitempty"`      // A..B

	DirectionStdDeg *float64 `json:"direction_uncertainty_deg,omitempty"` // nil is 0.5
	FocusStdMM      *float64 `json:"focus_uncertainty_mm,omitempty"`      // of a point, each axis; nil is 10
	DistanceStdM    *float64 `json:"distance_uncertainty_m,omitempty"`    // nil is a tenth of the distance
	TemperatureStdC *float64 `json:"temperature_uncertainty_c,omitempty"` // nil is 1
	PlacementStdMM  *float64 `json:"placement_uncertainty_mm,omitempty"`  // of each microphone, each axis; nil is 0.5
	RelativeTo      string   `json:"relative_to,omitempty"`               // mean (default) or a microphone's name
	Keep            string   `json:"keep,omitempty"`                      // of gain,delay,polarity: what stays as it is

	// Responses finds what the channels do over frequency too, and writes filters
	// that undo it.
	Responses bool `json:"responses,omitempty"`

	// Positions finds the places of the microphones from sounds of unknown
	// directions instead.
	Positions       bool     `json:"positions,omitempty"`
	Elevations      string   `json:"elevations,omitempty"`                // of the sounds, degrees: one, or one for each
	ElevationStdDeg *float64 `json:"elevation_uncertainty_deg,omitempty"` // nil is 2
	DelayStdUS      *float64 `json:"delay_uncertainty_us,omitempty"`      // of the channels' delays; nil is 2

	CalibratorDB    float64 `json:"calibrator_db,omitempty"`    // level of a calibrator, dB re 20 µPa: sensitivities instead
	CalibratorHz    float64 `json:"calibrator_hz,omitempty"`    // 0 is 1000
	CalibratorClass string  `json:"calibrator_class,omitempty"` // LS, 1 (default) or 2
	Channel         int     `json:"channel,omitempty"`          // the calibrator sits on this one throughout; 0: found

	TemperatureC *float64 `json:"temperature_c,omitempty"`
	HumidityPct  *float64 `json:"humidity_pct,omitempty"`
	PressureKPa  *float64 `json:"pressure_kpa,omitempty"`
	SpeedOfSound *float64 `json:"speed_of_sound,omitempty"` // m/s

	Chain     bool `json:"chain,omitempty"`
	FindChain bool `json:"find_chain,omitempty"`
	FindSet   bool `json:"find_set,omitempty"`

	Out       string `json:"out,omitempty"` // the new rig file
	Overwrite bool   `json:"overwrite,omitempty"`
}

// calibrateSettings are the options with their texts understood.
type calibrateSettings struct {
	CalibrateOptions
	direction *rig.Direction
	point     *rig.Point
	excerpt   *Stretch
	keep      []string
	elevation []float64 // degrees
}

// shared are the options that a steered run has too.
func (o CalibrateOptions) shared() Options {
	return Options{
		TemperatureC: o.TemperatureC, HumidityPct: o.HumidityPct, PressureKPa: o.PressureKPa, SpeedOfSound: o.SpeedOfSound,
		Chain: o.Chain, FindChain: o.FindChain, FindSet: o.FindSet,
	}
}

// resolve reads the texts of the options and reports everything that is wrong
// with them at once.
func (o CalibrateOptions) resolve() (*calibrateSettings, error) {
	s := &calibrateSettings{CalibrateOptions: o}
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf(format, args...)) }
	switch {
	case o.CalibratorDB != 0:
		s.resolveCalibrator(fault)
	case o.Positions:
		s.resolvePositions(fault)
	case o.Toward == "" && o.Focus == "":
		fault("no direction: give --toward AZ[,EL] or --focus X,Y,Z of the sound")
	case o.Toward != "" && o.Focus != "":
		fault("both --toward %q and --focus %q: a sound comes from one place", o.Toward, o.Focus)
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
	if o.Focus != "" && (o.DistanceM != 0 || o.DirectionStdDeg != nil || o.DistanceStdM != nil) {
		fault("--focus with --distance-m, --direction-uncertainty-deg or --distance-uncertainty-m: a point has all three; give --focus-uncertainty-mm")
	}
	if o.Toward != "" && o.FocusStdMM != nil {
		fault("--focus-uncertainty-mm with --toward: a direction has --direction-uncertainty-deg and --distance-uncertainty-m")
	}
	if o.DistanceStdM != nil && o.DistanceM == 0 {
		fault("--distance-uncertainty-m without --distance-m: a far source has no distance")
	}
	if o.CalibratorDB == 0 && (o.CalibratorHz != 0 || o.CalibratorClass != "" || o.Channel != 0) {
		fault("--calibrator-hz, --calibrator-class and --channel belong to --calibrator-db")
	}
	if !o.Positions && (o.Elevations != "" || o.ElevationStdDeg != nil || o.DelayStdUS != nil) {
		fault("--elevations, --elevation-uncertainty-deg and --delay-uncertainty-us belong to --positions")
	}
	if s.Sound == "" {
		s.Sound = SoundSteady
		if o.Positions {
			s.Sound = SoundClaps
		}
	}
	if s.Sound != SoundSteady && s.Sound != SoundClaps {
		fault("--sound %q: want %s or %s", s.Sound, SoundSteady, SoundClaps)
	}
	if s.RelativeTo == "" {
		s.RelativeTo = RelativeToMean
	}
	inRange := func(option string, v *float64, low, high float64, unit string) {
		if v != nil && !(*v >= low && *v <= high) {
			fault("--%s %g: want %g to %g %s", option, *v, low, high, unit)
		}
	}
	given := func(v float64) *float64 {
		if v == 0 {
			return nil
		}
		return &v
	}
	inRange("distance-m", given(o.DistanceM), 0.05, 10000, "m")
	inRange("from-hz", given(o.FromHz), 20, 100000, "Hz")
	inRange("to-hz", given(o.ToHz), 50, 200000, "Hz")
	if from, to := o.FromHz, o.ToHz; to != 0 && max(from, 300)*1.2 > to && from != 0 || from == 0 && to != 0 && to < 360 {
		fault("--from-hz %g, --to-hz %g: want a range of at least a factor of 1.2", max(from, 300), to)
	}
	inRange("max-delay-us", given(o.MaxDelayUS), 10, 50000, "µs")
	inRange("direction-uncertainty-deg", o.DirectionStdDeg, 0, 30, "degrees")
	inRange("focus-uncertainty-mm", o.FocusStdMM, 0, 1000, "mm")
	inRange("distance-uncertainty-m", o.DistanceStdM, 0, 10000, "m")
	inRange("temperature-uncertainty-c", o.TemperatureStdC, 0, 30, "°C")
	inRange("placement-uncertainty-mm", o.PlacementStdMM, 0, 1000, "mm")
	inRange("elevation-uncertainty-deg", o.ElevationStdDeg, 0.01, 45, "degrees")
	inRange("delay-uncertainty-us", o.DelayStdUS, 0.01, 1000, "µs")
	inRange("speed-of-sound", o.SpeedOfSound, 100, 2000, "m/s")
	if o.SpeedOfSound != nil && (o.TemperatureC != nil || o.HumidityPct != nil || o.PressureKPa != nil) {
		fault("--speed-of-sound with air options: the one makes the others void")
	}
	if o.Chain && (o.FindChain || o.FindSet) {
		fault("--chain with --find-chain or --find-set: the files are named or found, not both")
	}
	if o.Excerpt != "" {
		list, err := ParseStretches(o.Excerpt)
		switch {
		case err != nil:
			fault("--excerpt %q: %w", o.Excerpt, err)
		case len(list) > 1:
			fault("--excerpt %q: one stretch A..B, not %d", o.Excerpt, len(list))
		default:
			s.excerpt = &list[0]
		}
	}
	if o.Keep != "" {
		known := []string{KeepGain, KeepDelay, KeepPolarity}
		for _, name := range strings.Split(o.Keep, ",") {
			if name = strings.TrimSpace(name); !slices.Contains(known, name) {
				fault("--keep %q: %q is none of %s", o.Keep, name, strings.Join(known, ", "))
			}
			s.keep = append(s.keep, name)
		}
		if slices.Contains(s.keep, KeepGain) && slices.Contains(s.keep, KeepDelay) && slices.Contains(s.keep, KeepPolarity) {
			fault("--keep %s: nothing is left to be calibrated", o.Keep)
		}
	}
	if len(faults) > 0 {
		return nil, &UsageError{Err: errors.Join(faults...)}
	}
	return s, nil
}

// resolveCalibrator reads the options of a calibrator.
func (s *calibrateSettings) resolveCalibrator(fault func(format string, args ...any)) {
	o := s.CalibrateOptions
	if o.Toward != "" || o.Focus != "" || o.Positions {
		fault("--calibrator-db with --toward, --focus or --positions: a calibrator sits on one microphone at a time")
	}
	if !(o.CalibratorDB >= 60 && o.CalibratorDB <= 140) {
		fault("--calibrator-db %g: want 60 to 140 dB (94 and 114 are usual)", o.CalibratorDB)
	}
	if o.CalibratorHz != 0 && !(o.CalibratorHz >= 160 && o.CalibratorHz <= 1250) {
		fault("--calibrator-hz %g: want 160 to 1250 Hz (250 and 1000 are usual)", o.CalibratorHz)
	}
	if _, ok := calibration.CalibratorTolerance(o.CalibratorClass); !ok && o.CalibratorClass != "" {
		fault("--calibrator-class %q: want LS, 1 or 2", o.CalibratorClass)
	}
	if o.Channel < 0 || o.Channel > rig.MaxMicrophones {
		fault("--channel %d: want 1 to %d", o.Channel, rig.MaxMicrophones)
	}
	for _, given := range []struct {
		option string
		is     bool
	}{
		{"responses", o.Responses}, {"relative-to", o.RelativeTo != ""}, {"sound", o.Sound != ""}, {"from-hz", o.FromHz != 0}, {"to-hz", o.ToHz != 0},
		{"max-delay-us", o.MaxDelayUS != 0}, {"distance-m", o.DistanceM != 0},
	} {
		if given.is {
			fault("--%s with --calibrator-db: it belongs to a sound from a distance", given.option)
		}
	}
}

// resolvePositions reads the options of a survey.
func (s *calibrateSettings) resolvePositions(fault func(format string, args ...any)) {
	o := s.CalibrateOptions
	if o.Toward != "" || o.Focus != "" {
		fault("--positions with --toward or --focus: places are found from sounds whose directions are not known (--elevations says what is)")
	}
	for _, given := range []struct {
		option string
		is     bool
	}{
		{"responses", o.Responses}, {"keep", o.Keep != ""}, {"relative-to", o.RelativeTo != ""}, {"max-delay-us", o.MaxDelayUS != 0}, {"direction-uncertainty-deg", o.DirectionStdDeg != nil},
		{"focus-uncertainty-mm", o.FocusStdMM != nil}, {"distance-uncertainty-m", o.DistanceStdM != nil},
	} {
		if given.is {
			fault("--%s with --positions: gains, delays and polarities stay as they are", given.option)
		}
	}
	if o.PlacementStdMM != nil && *o.PlacementStdMM < 0.01 {
		fault("--placement-uncertainty-mm %g: places so certain need not be found", *o.PlacementStdMM)
	}
	if o.Elevations == "" {
		if o.ElevationStdDeg != nil {
			fault("--elevation-uncertainty-deg without --elevations")
		}
		return
	}
	list, err := parseNumbers(o.Elevations, 1, 1000)
	if err != nil {
		fault("--elevations %q: %w", o.Elevations, err)
	}
	for _, v := range list {
		if !(v >= -90 && v <= 90) {
			fault("--elevations %q: %g is outside -90 to 90", o.Elevations, v)
		}
	}
	s.elevation = list
}

// Several reports whether several takes may be given.
func (o CalibrateOptions) Several() bool { return o.Positions || o.CalibratorDB != 0 }

// Validate reports everything that is wrong with the options that can be seen
// without a take and a rig, as one *UsageError.
func (o CalibrateOptions) Validate() error {
	_, err := o.resolve()
	return err
}
