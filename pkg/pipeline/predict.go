package pipeline

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"alidade/pkg/acoustics"
	"alidade/pkg/measure"
	"alidade/pkg/response"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

// PredictOptions are the options of predict: those of a steer run that shape
// the beam, and its own.
type PredictOptions struct {
	Options

	AtHz    string  `json:"at_hz,omitempty"` // frequencies, commas between; default one-third octaves
	RateHz  int     `json:"rate,omitempty"`  // of the takes to come; default 48000
	Pattern bool    `json:"pattern,omitempty"`
	StepDeg float64 `json:"pattern_step,omitempty"` // default 1
	Picture bool    `json:"-"`                      // fill in what the page draws

	PlacementMM       float64 `json:"placement_mm,omitempty"` // standard deviations of errors
	GainErrorDB       float64 `json:"gain_error_db,omitempty"`
	PhaseErrorDeg     float64 `json:"phase_error_deg,omitempty"`
	TemperatureErrorC float64 `json:"temperature_error_c,omitempty"`
	Trials            int     `json:"trials,omitempty"` // default 1000
	Seed              uint64  `json:"seed,omitempty"`   // default 1
}

// What predict takes where nothing is said, and the most that it takes.
const (
	predictRate     = 48000
	predictFromHz   = 125 // nominal
	predictStepDeg  = 1
	predictTrials   = 1000
	predictSeed     = 1
	mostFrequencies = 1000
	mostPattern     = 1000000 // frequencies times angles
	mostTrials      = 20000
	leastRate       = 8000
	mostRate        = 384000
)

// predictSettings are predict options with their texts understood.
type predictSettings struct {
	PredictOptions
	beam *settings
	hz   []float64
}

// resolve reads the texts of the options and reports everything that is wrong
// with them at once.
func (o PredictOptions) resolve() (*predictSettings, error) {
	s := &predictSettings{PredictOptions: o}
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf(format, args...)) }
	// Minimum variance is refused for what it is, not for what it lacks.
	if o.Weights == WeightsMinimumVariance {
		fault("--weights %s: found from the noise of a take, and there is none here: steer reports what they should do with the take at hand", WeightsMinimumVariance)
		o.Options.Weights = ""
	}
	var err error
	if s.beam, err = o.Options.resolve(); err != nil {
		faults = append(faults, err)
	} else if !s.beam.aimed() {
		option, place := "--toward "+o.Toward, "--toward AZ[,EL]"
		if o.Focus != "" {
			option, place = "--focus "+o.Focus, "--focus X,Y,Z"
		}
		fault("%s: found in a take, and there is none here; give %s", option, place)
	}
	if s.RateHz == 0 {
		s.RateHz = predictRate
	}
	if s.RateHz < leastRate || s.RateHz > mostRate {
		fault("--rate %d: want %d to %d Hz", s.RateHz, leastRate, mostRate)
	}
	nyquist := float64(s.RateHz) / 2
	if o.AtHz == "" {
		for _, b := range measure.ThirdOctaves(s.RateHz) {
			if b.NominalHz >= predictFromHz {
				s.hz = append(s.hz, b.CentreHz)
			}
		}
	} else if s.hz, err = parseNumbers(o.AtHz, 1, mostFrequencies); err != nil {
		fault("--at-hz %q: want frequencies in Hz with commas between: %w", short(o.AtHz), err)
	}
	for _, hz := range s.hz {
		if !(hz >= 1 && hz < nyquist) {
			fault("--at-hz %g: want 1 Hz to below half the rate, %g Hz (--rate)", hz, nyquist)
		}
	}
	slices.Sort(s.hz)
	s.hz = slices.Compact(s.hz)
	inRange := func(option string, v, low, high float64, unit string) {
		if !(v >= low && v <= high) {
			fault("--%s %g: want %g to %g %s", option, v, low, high, unit)
		}
	}
	if s.StepDeg == 0 {
		s.StepDeg = predictStepDeg
	} else if !o.Pattern {
		fault("--pattern-step %g: belongs to --pattern", s.StepDeg)
	}
	inRange("pattern-step", s.StepDeg, 0.05, 45, "°")
	inRange("placement-mm", o.PlacementMM, 0, 1000, "mm")
	inRange("gain-error-db", o.GainErrorDB, 0, 6, "dB")
	inRange("phase-error-deg", o.PhaseErrorDeg, 0, 180, "°")
	inRange("temperature-error-c", o.TemperatureErrorC, 0, 30, "°C")
	switch {
	case !s.tolerant() && (o.Trials != 0 || o.Seed != 0):
		fault("--trials or --seed without an error to try: give --placement-mm, --gain-error-db, --phase-error-deg or --temperature-error-c")
	case o.Trials < 0 || o.Trials > mostTrials:
		fault("--trials %d: want 1 to %d", o.Trials, mostTrials)
	}
	if s.Trials == 0 {
		s.Trials = predictTrials
	}
	if s.Seed == 0 {
		s.Seed = predictSeed
	}
	if len(faults) > 0 {
		return nil, &UsageError{Err: errors.Join(faults...)}
	}
	return s, nil
}

// short cuts an option's value to what an error has room for.
func short(text string) string {
	if r := []rune(text); len(r) > 60 {
		return string(r[:57]) + "..."
	}
	return text
}

// tolerant says that some error is to be tried.
func (s *predictSettings) tolerant() bool {
	return s.PlacementMM > 0 || s.GainErrorDB > 0 || s.PhaseErrorDeg > 0 || s.TemperatureErrorC > 0
}

// Validate reports everything that is wrong with the options that can be seen
// without a rig, as one *UsageError.
func (o PredictOptions) Validate() error {
	_, err := o.resolve()
	return err
}

// Predict returns what the beam that the options ask for can do on the rig of
// the file at rigPath. version is the program's, for the document. The sheets
// are staged before the work and appear with the result. The errors are those of
// the options and the rig (*UsageError) and of the sheets.
func Predict(rigPath string, o PredictOptions, version string, show ...Sheet[*Prediction]) (*Prediction, error) {
	s, err := o.resolve()
	if err != nil {
		return nil, err
	}
	l, err := loadRig(rigPath, o.Options)
	if err != nil {
		return nil, err
	}
	shown, err := stageSheets(show, o.Overwrite, l.files, nil)
	if err != nil {
		return nil, err
	}
	defer shown.abandon()
	line, err := newBeamline(l, s.beam, s.RateHz)
	if err != nil {
		return nil, err
	}
	// A run without a take, for what its design finds to say.
	r := &run{spec: Spec{Options: o.Options}, set: s.beam, rig: l, line: line, take: &take{header: wav.Header{Rate: s.RateHz}}}
	if s.beam.designed() {
		if err := r.design(); err != nil {
			return nil, err
		}
		r.nullsHeld()
	}
	p := &predictor{set: s, line: line, run: r, beam: response.Beam{
		Transfer: line.model, Mics: line.at, Reference: line.ref, Look: line.look, Speed: l.speed,
	}}
	out, err := p.predict(version)
	if err != nil {
		return nil, err
	}
	if err := shown.finish(out); err != nil {
		return nil, err
	}
	return out, nil
}

// predictor holds what a prediction is made from.
type predictor struct {
	set  *predictSettings
	line *beamline
	run  *run
	beam response.Beam
	cut  response.Cut
}

func (p *predictor) predict(version string) (*Prediction, error) {
	if err := p.beam.Validate(); err != nil {
		return nil, err
	}
	toward := p.beam.Look.Direction(p.beam.Reference)
	nyquist := float64(p.set.RateHz) / 2
	p.cut = response.NewCut(p.beam.Mics, toward)
	out := &Prediction{
		Schema: PredictionSchema, Version: version,
		Rig: p.line.rig.summary(), Steer: p.line.summary(),
		SpeedOfSoundMS: p.beam.Speed, SampleRateHz: p.set.RateHz,
		GratingEntries: []GratingEntry{}, Findings: []Finding{},
		Cut: Cut{Name: p.cut.Name, AtDeg: p.degrees(p.cut.At)},
	}
	out.Cut.LowDeg, out.Cut.HighDeg = p.span()
	if d, ok := p.beam.CutDistance(); ok {
		out.Cut.DistanceM = number(d)
	}
	if hz, ok := response.GratingLimit(p.beam.Mics, toward, p.beam.Speed, nyquist); ok {
		out.GratingFreeBelowHz = number(hz)
	}
	if list, ok := response.GratingEntries(p.beam.Mics, toward, p.beam.Speed, nyquist); ok {
		for _, e := range list {
			out.GratingEntries = append(out.GratingEntries, GratingEntry{e.Order, e.Hz, e.Angle * 180 / math.Pi})
		}
	}
	a := response.ApertureOf(p.beam.Mics, p.beam.Speed)
	out.Aperture = Aperture{ExtentM: a.Extent, EffectiveM: a.Effective, HalfWavelengthHz: a.HalfWavelengthHz}
	if a.LowerUsefulHz > 0 {
		out.Aperture.LowerUsefulHz = number(a.LowerUsefulHz)
	}
	if n := p.angleCount(); p.set.Pattern && n*len(p.set.hz) > mostPattern {
		return nil, &UsageError{
			Err:  fmt.Errorf("--pattern-step %g: %d angles at %d frequencies, %d values of the pattern: want at most %d", p.set.StepDeg, n, len(p.set.hz), n*len(p.set.hz), mostPattern),
			Hint: "take a larger --pattern-step, or fewer frequencies (--at-hz)",
		}
	}
	figures := p.beam.Predict(p.cut, p.set.hz)
	for _, f := range figures {
		out.Frequencies = append(out.Frequencies, p.frequency(f, toward))
	}
	out.Bands = p.bands()
	if p.set.Pattern {
		out.Response = p.pattern()
	}
	if p.set.Picture {
		out.Picture = p.line.pattern()
	}
	if p.set.tolerant() {
		var err error
		if out.Tolerance, err = p.tolerance(figures); err != nil {
			return nil, err
		}
	}
	out.Answer = answer(out)
	p.remarks(out)
	return out, nil
}

// degrees is an angle of the cut in the range that the document names.
func (p *predictor) degrees(angle float64) float64 {
	if p.cut.Closed {
		return rig.WrapDeg(angle * 180 / math.Pi)
	}
	return angle * 180 / math.Pi
}

func (p *predictor) angle(v *float64) Number {
	if v == nil {
		return nil
	}
	return number(p.degrees(*v))
}

func (p *predictor) angles(list []float64) []float64 {
	out := make([]float64, len(list))
	for i, v := range list {
		out[i] = p.degrees(v)
	}
	return out
}

func (p *predictor) frequency(f response.Figures, toward rig.Direction) PredictedFrequency {
	out := PredictedFrequency{
		Hz: f.Hz, EdgesDeg: [2]Number{p.angle(f.Edges[0]), p.angle(f.Edges[1])},
		FirstNullsDeg: p.angles(f.FirstNulls), HighestSideLobeDB: f.HighestSideLobeDB,
		SideLobeCount: len(f.SideLobes), SideLobes: []PatternPoint{},
		GratingLobesDeg:    p.angles(f.GratingLobes),
		DirectivityIndexDB: number(f.DirectivityIndexDB), WhiteNoiseGainDB: number(f.WhiteNoiseGainDB), DiffuseGainDB: number(f.DiffuseGainDB),
		NearFieldReachM: number(response.NearFieldReach(p.beam.Mics, toward, f.Hz, p.beam.Speed)),
	}
	if f.Beamwidth != nil {
		out.BeamwidthDeg = number(*f.Beamwidth * 180 / math.Pi)
	}
	if out.WhiteNoiseGainDB != nil {
		out.PeakDeg = number(p.degrees(f.Peak))
	}
	for _, lobe := range f.SideLobes {
		out.SideLobes = append(out.SideLobes, PatternPoint{p.degrees(lobe.Angle), number(lobe.LevelDB)})
	}
	return out
}

// bands are the gains in one-third octaves.
func (p *predictor) bands() []PredictedBand {
	list := []PredictedBand{}
	for _, b := range p.line.predict(measure.ThirdOctaves(p.set.RateHz), 0) {
		list = append(list, PredictedBand{b.NominalHz, b.CentreHz, b.LowHz, b.HighHz, b.PredictedWhiteDB, b.PredictedDiffuseDB, b.Flags})
	}
	return list
}

// span is the cut from end to end, degrees; a full circle from -180 to 180.
func (p *predictor) span() (low, high float64) {
	if p.cut.Closed {
		return -180, 180
	}
	return p.cut.Low * 180 / math.Pi, p.cut.High * 180 / math.Pi
}

// angleCount is the number of angles of the pattern.
func (p *predictor) angleCount() int {
	low, high := p.span()
	return int(math.Floor((high-low)/p.set.StepDeg+1e-9)) + 1
}

// pattern is the response along the cut.
func (p *predictor) pattern() *PredictedResponse {
	out := &PredictedResponse{Hz: p.set.hz}
	var waves []acoustics.Wave
	low, _ := p.span()
	for i := range p.angleCount() {
		deg := low + float64(i)*p.set.StepDeg
		out.AnglesDeg = append(out.AnglesDeg, deg)
		waves = append(waves, p.beam.CutWave(p.cut, deg*math.Pi/180))
	}
	pattern := p.beam.Pattern(waves, p.set.hz)
	for _, row := range pattern.Response {
		levels, phases := make([]Number, len(row)), make([]Number, len(row))
		for d, z := range row {
			if levels[d] = number(20 * math.Log10(cmplx.Abs(z))); levels[d] != nil {
				phases[d] = number(cmplx.Phase(z) * 180 / math.Pi)
			}
		}
		out.LevelDB, out.PhaseDeg = append(out.LevelDB, levels), append(out.PhaseDeg, phases)
	}
	return out
}

// tolerance tries the errors at each frequency.
func (p *predictor) tolerance(figures []response.Figures) (*Tolerance, error) {
	s := p.set
	out := &Tolerance{
		PlacementMM: s.PlacementMM, GainErrorDB: s.GainErrorDB, PhaseErrorDeg: s.PhaseErrorDeg, TemperatureErrorC: s.TemperatureErrorC,
		Trials: s.Trials, Seed: s.Seed, Frequencies: []ToleranceAt{},
	}
	e := response.Errors{
		// To first order; 1 dB is a relative amplitude of 0.115.
		Gain:     s.GainErrorDB * math.Ln10 / 20,
		PhaseRad: s.PhaseErrorDeg * math.Pi / 180, PlacementM: s.PlacementMM / 1000, TemperatureC: s.TemperatureErrorC,
	}
	for _, f := range figures {
		at := ToleranceAt{Hz: f.Hz, FirstNulls: []TolerantLevel{}}
		reference := math.Pow(cmplx.Abs(p.beam.To(p.beam.Look, f.Hz)), 2)
		if !(reference > 0) {
			out.Frequencies = append(out.Frequencies, at)
			continue
		}
		angles := []float64{p.cut.At}
		waves := []acoustics.Wave{p.beam.Look}
		add := func(angle float64) {
			angles = append(angles, angle)
			waves = append(waves, p.beam.CutWave(p.cut, angle))
		}
		if i := highestLobe(f.SideLobes); i >= 0 {
			add(f.SideLobes[i].Angle)
		}
		nulls := len(waves)
		for _, a := range f.FirstNulls {
			add(a)
		}
		trials, err := p.beam.Trials(e, waves, f.Hz, s.Trials, s.Seed)
		if err != nil {
			return nil, err
		}
		for i, w := range waves {
			level := TolerantLevel{
				AngleDeg:   p.degrees(angles[i]),
				LevelDB:    number(20*math.Log10(cmplx.Abs(p.beam.To(w, f.Hz))) - 10*math.Log10(reference)),
				ExpectedDB: number(10 * math.Log10(p.beam.Expected(e, w, f.Hz)/reference)),
				P5DB:       number(response.Percentile(trials[i], 5)),
				P50DB:      number(response.Percentile(trials[i], 50)),
				P95DB:      number(response.Percentile(trials[i], 95)),
			}
			switch {
			case i == 0:
				at.Steered = level
			case i < nulls:
				at.HighestSideLobe = &level
			default:
				at.FirstNulls = append(at.FirstNulls, level)
			}
		}
		at.ErrorFloorDB = number(10 * math.Log10(p.beam.ErrorFloor(e, f.Hz)))
		out.Frequencies = append(out.Frequencies, at)
	}
	return out, nil
}

// highestLobe is the index of the highest lobe, -1 for none.
func highestLobe(lobes []response.Lobe) int {
	best := -1
	for i, l := range lobes {
		if best < 0 || l.LevelDB > lobes[best].LevelDB {
			best = i
		}
	}
	return best
}

// remarks adds the findings: what the design had to say, and why figures are
// null.
func (p *predictor) remarks(out *Prediction) {
	out.Findings = append(out.Findings, p.run.findings...)
	var broad []float64
	for _, f := range out.Frequencies {
		if f.BeamwidthDeg == nil {
			broad = append(broad, f.Hz)
		}
	}
	if len(broad) > 0 {
		out.Findings = append(out.Findings, Finding{Code: "beamwidth-not-defined", Severity: Info, Bands: broad, Message: fmt.Sprintf(
			"at %d of %d frequencies the beam has no half-power point on one side of the steered direction at least, so no beamwidth is defined there", len(broad), len(out.Frequencies))})
	}
	if out.GratingFreeBelowHz == nil {
		out.Findings = append(out.Findings, Finding{Code: "no-grating-lobe", Severity: Info, Message: fmt.Sprintf(
			"no grating lobe comes in up to half the rate, %g Hz", float64(p.set.RateHz)/2)})
	}
	if slices.ContainsFunc(p.line.used, func(m int) bool { return p.line.rig.Mics[m].Delay != 0 }) {
		out.Findings = append(out.Findings, Finding{Code: "corrections-taken-as-right", Severity: Info, Message: "the delay corrections of the rig file are taken as right"})
	}
	out.Findings = append(out.Findings, Finding{Code: "free-field", Severity: Info, Message: "microphones are taken as omnidirectional in a free field: body, baffle, windshield, foam and room are not modelled"})
	sortFindings(out.Findings)
}
