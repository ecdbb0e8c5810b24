package quality

import (
	"errors"
	"fmt"
)

// Limits say from where on something is a finding. A zero field takes its
// default; a negative one turns the check off.
type Limits struct {
	DeadDB        float64 // a channel this far below the middle one is dead; 35
	SilentDBFS    float64 // and one below this level whatever the others do; -110
	LevelDB       float64 // level against the middle channel; 1
	ClippedShare  float64 // share of frames on a flat top; 0.0005
	DC            float64 // constant offset re 1.0; 0.002
	HumDB         float64 // mains lines above the spectrum around them; 9
	WindShare     float64 // incoherent part of the power from 20 to 120 Hz; 0.25
	HandlingDB    float64 // thumps above the middle level below 80 Hz; 20
	NoiseFloorDB  float64 // quietest moments above those of the middle channel; 6
	DelayUS       float64 // a late or early channel, microseconds; 6
	DriftPPM      float64 // one clock against the others; 0.5
	ScalePct      float64 // delays against the geometry, per cent; 2
	CoherenceLoss float64 // coherence against the middle channel; 0.25
}

// withDefaults returns the limits with every zero field at its default.
func (l Limits) withDefaults() Limits {
	for _, v := range []struct {
		field *float64
		def   float64
	}{
		{&l.DeadDB, 35}, {&l.SilentDBFS, -110}, {&l.LevelDB, 1}, {&l.ClippedShare, 0.0005},
		{&l.DC, 0.002}, {&l.HumDB, 9}, {&l.WindShare, 0.25}, {&l.HandlingDB, 20},
		{&l.NoiseFloorDB, 6}, {&l.DelayUS, 6}, {&l.DriftPPM, 0.5}, {&l.ScalePct, 2}, {&l.CoherenceLoss, 0.25},
	} {
		if *v.field == 0 {
			*v.field = v.def
		}
	}
	return l
}

// Validate reports every limit that is not a number that can be compared with.
func (l Limits) Validate() error {
	var faults []error
	for _, v := range []struct {
		name  string
		value float64
		most  float64
	}{
		{"dead", l.DeadDB, 200}, {"silent", l.SilentDBFS, 200}, {"level", l.LevelDB, 200}, {"clipped share", l.ClippedShare, 1},
		{"dc", l.DC, 1}, {"hum", l.HumDB, 200}, {"wind share", l.WindShare, 1}, {"handling", l.HandlingDB, 200},
		{"noise floor", l.NoiseFloorDB, 200}, {"delay", l.DelayUS, 1e5}, {"drift", l.DriftPPM, 1e4},
		{"scale", l.ScalePct, 100}, {"coherence loss", l.CoherenceLoss, 1},
	} {
		if !(v.value >= -200 && v.value <= v.most) {
			faults = append(faults, fmt.Errorf("quality: limit of %s: %g: want at most %g, or a negative number to turn the check off", v.name, v.value, v.most))
		}
	}
	return errors.Join(faults...)
}
