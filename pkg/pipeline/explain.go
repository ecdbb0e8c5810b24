package pipeline

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/measure"
)

// How far measured and predicted may lie apart before it is a finding, dB.
const (
	gainShortDB  = 2.0 // measured gain below the smaller prediction
	targetLossDB = 1.0 // target lost overall
)

// explain adds the findings that the gains give rise to: every figure that is
// null has its reason, and figures that disagree have their likely causes.
func (r *run) explain(res *Result, g *measure.Gains) {
	r.reasons(res, g)
	r.flagged(res)
	var noise, target []float64
	for _, b := range res.Bands {
		if b.SNRGainDB == nil || b.SNRGainCI95 == nil || b.PredictedWhiteDB == nil || b.PredictedDiffuseDB == nil || hasFlag(b, measure.Sparse) {
			continue
		}
		if b.SNRGainCI95[1] >= math.Min(*b.PredictedWhiteDB, *b.PredictedDiffuseDB)-gainShortDB {
			continue
		}
		// Either the noise is not what the models say, or the target is not.
		if b.PredictedInNoiseDB != nil && *b.PredictedInNoiseDB-*b.SNRGainDB > gainShortDB/2 {
			target = append(target, b.NominalHz)
		} else {
			noise = append(noise, b.NominalHz)
		}
	}
	if len(noise) > 0 {
		r.report(Finding{Code: "gain-below-prediction", Severity: Warning, Bands: noise, Message: fmt.Sprintf(
			"the measured gain lies more than %g dB below what the filters give in white and in diffuse noise in %s, as it should in the noise that was measured: the noise may come from near the steered direction or from a grating lobe; else suspect the direction or the noise stretches",
			gainShortDB, bandCount(len(noise)))})
	}
	if len(target) > 0 {
		r.report(Finding{Code: "gain-below-prediction", Severity: Warning, Bands: target, Message: fmt.Sprintf(
			"the measured gain lies more than %g dB below what the filters give in white, in diffuse and in the measured noise in %s: the target is lost there, not the noise kept; suspect the direction, a near source (give --focus X,Y,Z), the spacing, the channel order, a polarity, the air temperature, or reverberation",
			gainShortDB, bandCount(len(target)))})
	}
	if o := res.Overall; o.TargetChangeDB != nil && *o.TargetChangeDB < -targetLossDB && (o.TargetChangeCI95 == nil || o.TargetChangeCI95[1] < -targetLossDB) {
		postfilter := ""
		if r.set.Postfilter != PostfilterNone {
			postfilter = "the postfilter takes part of it (steer.postfilter.target_change_db; raise --postfilter-floor-db); "
		}
		r.report(Finding{Code: "target-loss", Severity: Warning, Message: fmt.Sprintf(
			"the target is %.1f dB lower in the track than at the microphones: %sin a room 2 to 4 dB are normal, since the beam takes away the target's own reverberation; outdoors or beyond that, suspect the direction, a near source (give --focus X,Y,Z), the spacing, a polarity or the air temperature",
			-*o.TargetChangeDB, postfilter)})
	}
}

// reasonWords says why a figure is missing, and what helps.
var reasonWords = map[measure.Reason]string{
	measure.NoNoise:       "no stretch with noise alone is known; give --noise A..B",
	measure.NoTarget:      "no stretch with the target is known; give --target A..B",
	measure.TooShort:      "the stretches are too short for the band; give longer ones",
	measure.Silent:        "there is no sound in the band",
	measure.NotAboveNoise: "the level with the target does not exceed the noise significantly; their noise is not in the overall SNR gain either",
}

// reasons adds a finding for each reason that figures are missing for.
func (r *run) reasons(res *Result, g *measure.Gains) {
	for _, part := range []struct {
		code, what string
		reason     func(measure.BandGain) measure.Reason
	}{
		{"noise-unmeasured", "noise figures", func(b measure.BandGain) measure.Reason { return b.NoiseReason }},
		{"target-unmeasured", "target figures", func(b measure.BandGain) measure.Reason { return b.TargetReason }},
	} {
		bands := map[measure.Reason][]float64{}
		for _, b := range g.Bands {
			if why := part.reason(b); why != "" {
				bands[why] = append(bands[why], b.Band.NominalHz)
			}
		}
		for _, why := range []measure.Reason{measure.NoNoise, measure.NoTarget, measure.TooShort, measure.Silent, measure.NotAboveNoise} {
			if list := bands[why]; len(list) > 0 {
				r.report(Finding{Code: part.code, Severity: Info, Bands: list, Message: fmt.Sprintf(
					"no %s in %d of %d bands: %s", part.what, len(list), len(g.Bands), reasonWords[why])})
			}
		}
	}
	if res.Overall.SpeechWeightedSNRGainDB == nil && res.Overall.SNRGainDB != nil {
		r.report(Finding{Code: "speech-weight-unmeasured", Severity: Info, Message: fmt.Sprintf(
			"no speech-weighted gain: the bands that carry at least %.0f %% of the band importance (160 Hz to 8 kHz) were not all measured", 100*measure.SpeechLeast)})
	}
}

// flagged adds a finding for each flag on bands.
func (r *run) flagged(res *Result) {
	for _, f := range []struct{ flag, code, message string }{
		{"grating", "grating-lobe", "in %s another direction is heard as loud as the steered one or within 3 dB of it (grating lobe): the microphones stand too far apart there"},
		{"no-aperture", "no-aperture", "in %s the rig is too small for the wavelength: less than 1 dB of diffuse noise can go away there"},
		{measure.Sparse, "sparse-bands", "in %s too little sound stands behind the figures for a good interval: longer stretches help"},
	} {
		var list []float64
		for _, b := range res.Bands {
			if hasFlag(b, f.flag) {
				list = append(list, b.NominalHz)
			}
		}
		if len(list) > 0 {
			r.report(Finding{Code: f.code, Severity: Info, Bands: list, Message: fmt.Sprintf(f.message, bandCount(len(list)))})
		}
	}
}

// taperTells says where a taper that was asked for weights nothing, as on a ring,
// whose microphones stand equally far from their centre.
func (r *run) taperTells() {
	if r.set.taper.Uniform() {
		return
	}
	a, err := r.set.taper.Amplitudes(r.line.at)
	if err != nil {
		return // newBeamline would have refused it
	}
	const same = 1e-6 // of an amplitude: places in files are rounded
	if low, high := slices.Min(a), slices.Max(a); high-low <= same*high {
		r.report(Finding{Code: "taper-without-effect", Severity: Info, Message: fmt.Sprintf(
			"the taper %s weights all microphones of this rig alike, as uniform does", r.set.taper)})
	}
}

// bandCount puts a number of bands into words.
func bandCount(n int) string {
	if n == 1 {
		return "1 band"
	}
	return fmt.Sprintf("%d bands", n)
}

func hasFlag(b Band, flag string) bool { return slices.Contains(b.Flags, flag) }

// sortFindings puts the severe ones first and keeps the order within each.
func sortFindings(list []Finding) {
	rank := map[Severity]int{Error: 0, Warning: 1, Info: 2}
	slices.SortStableFunc(list, func(a, b Finding) int { return rank[a.Severity] - rank[b.Severity] })
}

// median returns the middle of the values, -Inf for none.
func median(v []float64) float64 {
	if len(v) == 0 {
		return math.Inf(-1)
	}
	v = slices.Clone(v)
	slices.Sort(v)
	if n := len(v); n%2 == 0 {
		return (v[n/2-1] + v[n/2]) / 2
	}
	return v[len(v)/2]
}
