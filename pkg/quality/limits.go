package quality

import (
	"errors"
	"fmt"

	"alidade/pkg/rig"
)

// Limits say from where on something is a finding. A zero field takes its
// default (withDefaults has them, and so does the schema of a rig file); a
// negative one turns the check off.
type Limits rig.Limits

// defaultClippedShare is the default limit of clipped frames. Up to it three
// frames in a row at full scale are clipping whatever their share.
const defaultClippedShare = 0.0005

// withDefaults returns the limits with every zero field at its default.
func (l Limits) withDefaults() Limits {
	return l.Over(Limits{DeadDB: 35, SilentDBFS: -110, LevelDB: 1, ClippedShare: defaultClippedShare, DC: 0.002, HumDB: 9, WindShare: 0.25,
		HandlingDB: 20, NoiseFloorDB: 6, DelayUS: 6, DriftPPM: 0.5, ScalePct: 2, CoherenceLoss: 0.25})
}

// Over returns l with what is not zero in it, and base elsewhere.
func (l Limits) Over(base Limits) Limits {
	out, from := l.fields(), base.fields()
	for k, v := range out {
		if *v == 0 {
			*v = *from[k]
		}
	}
	return l
}

// fields are the limits in order.
func (l *Limits) fields() []*float64 {
	return []*float64{&l.DeadDB, &l.SilentDBFS, &l.LevelDB, &l.ClippedShare, &l.DC, &l.HumDB, &l.WindShare, &l.HandlingDB,
		&l.NoiseFloorDB, &l.DelayUS, &l.DriftPPM, &l.ScalePct, &l.CoherenceLoss}
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
