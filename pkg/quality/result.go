package quality

import (
	"math"
	"slices"
)

// Severity is how bad a finding is.
type Severity string

// The severities, from a remark to a fault.
const (
	Info    Severity = "info"
	Warning Severity = "warning"
	Error   Severity = "error"
)

// Codes of findings.
const (
	CodeDead       = "channel-dead"        // silent against the others
	CodeClipped    = "channel-clipped"     // flat tops, at full scale or below
	CodeOvers      = "peak-between"        // passes full scale between samples
	CodeDropOut    = "drop-out"            // stands still for a moment
	CodeRepeat     = "block-repeated"      // a stretch is a copy of the one before
	CodeDC         = "dc"                  // constant offset
	CodeHum        = "mains-hum"           // lines at 50 or 60 Hz and multiples
	CodeWind       = "wind"                // low rumble of each microphone for itself
	CodeHandling   = "handling-noise"      // thumps
	CodeNoiseFloor = "noise-floor"         // louder than the others where they are quiet
	CodeLevel      = "level-mismatch"      // louder or softer than the others
	CodeLevelSlope = "level-slope"         // levels rise over the rig, as from a source close by
	CodePolarity   = "polarity-flipped"    // turned over
	CodeSwapped    = "channels-swapped"    // two microphones on each other's channels
	CodePermuted   = "channels-permuted"   // several on wrong channels
	CodeLate       = "channel-late"        // late or early by a fixed time
	CodeDrift      = "clock-drift"         // late or early by a growing time
	CodeScale      = "scale-error"         // all delays too long or too short
	CodeIncoherent = "channel-incoherent"  // has no sound in common with the others
	CodeMisfit     = "geometry-misfit"     // delays fit no direction, cause unclear
	CodeNotJudged  = "geometry-not-judged" // no sound that could tell
)

// Finding is one thing that is wrong, or worth knowing.
type Finding struct {
	Code     string
	Severity Severity
	Channels []int  // of the take, counted from 1
	Measured string // with its number
	Expected string
	Do       string // what helps
}

// Message is the finding in one line.
func (f Finding) Message() string {
	text := f.Measured
	if f.Expected != "" {
		text += "; expected: " + f.Expected
	}
	if f.Do != "" {
		text += ": " + f.Do
	}
	return text
}

// Channel is what was measured on one channel. A nil pointer could not be
// measured.
type Channel struct {
	Channel       int    // of the take, counted from 1
	Name          string // of the microphone
	RMSDBFS       float64
	PeakDBFS      float64
	TruePeakDBFS  float64 // with the peaks between samples above half of full scale
	DC            float64
	ClippedFrames int64
	DropOuts      int64
	Repeats       int64
	Thumps        int64
	NoiseDBFS     *float64 // level of the quietest tenth of the moments
	HumHz         float64  // 50 or 60, 0 without hum
	HumDBFS       *float64
	WindDBFS      *float64 // incoherent level from 20 to 120 Hz
	LevelDB       *float64 // against the middle channel, corrected
	DelayUS       *float64 // against the geometry, corrected
	DriftPPM      *float64
	Coherence     *float64 // mean with the other channels
	Flags         []string // codes of its findings
}

// States of a take.
const (
	Good    = "good"
	Caution = "caution"
	Fault   = "fault"
)

// Result is all that an inspection found.
type Result struct {
	State    string // good, caution or fault
	Frames   int64
	Channels []Channel
	Findings []Finding // errors first
	Dead     []int     // indices into the microphones given, in order
	// Windows is how many stretches of the take were held against the geometry,
	// JudgedS how long they are together, and NotJudged why polarity, order and
	// delays were not judged by them; empty if they were. Of takes beyond 2048 stretches a part stands for all.
	Windows   int
	JudgedS   float64
	NotJudged string
}

// seenInSamples are the codes of what is seen in single samples.
var seenInSamples = []string{CodeClipped, CodeOvers, CodeDropOut, CodeRepeat}

// WithSamplesOf returns the result of a take that was resampled, with what is
// seen in single samples as it is in raw, the same take as it was recorded.
func (r *Result) WithSamplesOf(raw *Result) *Result {
	out := *r
	samples := func(code string) bool { return slices.Contains(seenInSamples, code) }
	out.Findings = slices.DeleteFunc(slices.Clone(r.Findings), func(f Finding) bool { return samples(f.Code) })
	for _, f := range raw.Findings {
		if samples(f.Code) {
			out.Findings = append(out.Findings, f)
		}
	}
	out.Channels = slices.Clone(r.Channels)
	for m := range out.Channels {
		c, from := &out.Channels[m], raw.Channels[m]
		c.PeakDBFS, c.TruePeakDBFS, c.ClippedFrames, c.DropOuts, c.Repeats = from.PeakDBFS, from.TruePeakDBFS, from.ClippedFrames, from.DropOuts, from.Repeats
	}
	out.settle()
	return &out
}

// settle puts findings in order, the worst first, and derives from them the
// flags of the channels and the state.
func (r *Result) settle() {
	for i := range r.Channels {
		c := &r.Channels[i]
		c.Flags = []string{}
		for _, f := range r.Findings {
			if slices.Contains(f.Channels, c.Channel) && !slices.Contains(c.Flags, f.Code) {
				c.Flags = append(c.Flags, f.Code)
			}
		}
	}
	rank := map[Severity]int{Error: 0, Warning: 1, Info: 2}
	slices.SortStableFunc(r.Findings, func(a, b Finding) int { return rank[a.Severity] - rank[b.Severity] })
	r.State = stateOf(r.Findings)
}

// stateOf returns the state that findings come to.
func stateOf(list []Finding) string {
	state := Good
	for _, f := range list {
		switch {
		case f.Severity == Error:
			return Fault
		case f.Severity == Warning:
			state = Caution
		}
	}
	return state
}

// known returns a pointer to a finite value, else nil.
func known(v float64) *float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return &v
}
