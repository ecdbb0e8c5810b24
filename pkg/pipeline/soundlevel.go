package pipeline

import (
	"fmt"
	"math"

	"alidade/pkg/measure"
)

// maxSensitivitySpread is how far sensitivities with their gain corrections may
// lie apart before a report says so, dB: they should all be one.
const maxSensitivitySpread = 0.5

// fullScaleSPL is what is added to a level of the corrected microphones in dBFS
// to make it one in dB re 20 µPa: from the mean of the sensitivities that the
// rig has, each with its gain correction. known is how many of the used
// microphones have one, spread how far they lie apart, dB.
func (l *loadedRig) fullScaleSPL() (offset float64, known int, spread float64) {
	sum, low, high := 0.0, math.Inf(1), math.Inf(-1)
	for _, m := range l.Used() {
		mic := l.Mics[m]
		if mic.SensitivityDBFS == nil {
			continue
		}
		v := *mic.SensitivityDBFS + mic.GainDB
		sum += v
		low, high = math.Min(low, v), math.Max(high, v)
		known++
	}
	if known == 0 {
		return math.NaN(), 0, 0
	}
	return measure.FullScaleSPL(sum / float64(known)), known, high - low
}

// channelSPL is the level of a raw channel in dB re 20 µPa, nil where the rig
// does not know its sensitivity.
func (l *loadedRig) channelSPL(channel int, dbfs Number) Number {
	for _, mic := range l.Mics {
		if mic.Channel == channel && mic.SensitivityDBFS != nil && dbfs != nil {
			return number(*dbfs + measure.FullScaleSPL(*mic.SensitivityDBFS))
		}
	}
	return nil
}

// soundLevels gives the levels of a result in dB re 20 µPa too, where the rig
// knows a sensitivity.
func (r *run) soundLevels(res *Result) {
	for i := range res.Channels {
		c := &res.Channels[i]
		c.RMSDBSPL = r.rig.channelSPL(c.Channel, c.RMSDBFS)
	}
	offset, known, spread := r.rig.fullScaleSPL()
	if known == 0 {
		return
	}
	res.Rig.FullScaleDBSPL = number(offset)
	shift := func(v Number) Number {
		if v == nil {
			return nil
		}
		return number(*v + offset)
	}
	for _, bands := range [][]Band{res.Bands, res.OctaveBands} {
		for i := range bands {
			b := &bands[i]
			b.NoiseInDBSPL, b.NoiseOutDBSPL = shift(b.NoiseInDBFS), shift(b.NoiseOutDBFS)
			b.TargetInDBSPL, b.TargetOutDBSPL = shift(b.TargetInDBFS), shift(b.TargetOutDBFS)
		}
	}
	used := len(r.rig.Used())
	text := fmt.Sprintf("levels are given in dB SPL too: a full-scale sine is %.1f dB re 20 µPa by the sensitivity of %d of %d microphones", offset, known, used)
	if known < used {
		text += "; the others follow by their gain corrections"
	}
	r.report(Finding{Code: "calibrated-levels", Severity: Info, Message: text})
	if spread > maxSensitivitySpread {
		r.report(Finding{Code: "sensitivity-spread", Severity: Warning, Message: fmt.Sprintf(
			"the sensitivities of the microphones with their gain corrections lie %.1f dB apart, and should be one: calibrate the gains (alidade calibrate), or the levels again", spread)})
	}
}
