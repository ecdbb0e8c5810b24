package pipeline

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
	"alidade/pkg/response"
)

// The sources of the segments.
const (
	SegmentsIsolated  = "isolated"
	SegmentsGiven     = "given"
	SegmentsAutomatic = "automatic"
	SegmentsNone      = "none"
)

// gains fills in the bands, the overall figures, the segments and what there
// is to say about them.
func (r *run) gains(res *Result) error {
	res.Segments = Segments{Source: SegmentsNone, Noise: [][2]float64{}, Target: [][2]float64{}}
	rate := r.take.header.Rate
	thirds, octaves := measure.ThirdOctaves(rate), measure.Octaves(rate)
	res.Bands = r.line.predict(thirds, r.take.header.Frames)
	res.OctaveBands = r.line.predict(octaves, r.take.header.Frames)
	if r.set.NoMeasure {
		return r.unfixed(res, listened{}, listened{})
	}
	named, err := r.comparedTo()
	if err != nil {
		return err
	}
	if r.set.CompareTo != "" && named < 0 {
		r.report(Finding{Code: "compared-left-out", Severity: Warning, Message: fmt.Sprintf("no gain over %s (--compare-to): it was left out as dead", r.set.CompareTo)})
	}
	var third, octave *measure.Gains
	noise, target := r.heard, r.heard
	if r.set.IsolatedNoise != "" || r.set.IsolatedTarget != "" {
		third, octave, err = r.isolated(res, named, &noise, &target)
	} else {
		third, octave, err = r.blind(res, named)
	}
	if err != nil || third == nil {
		return err
	}
	fill(res.Bands, third)
	fill(res.OctaveBands, octave)
	o := third.Overall(nil)
	res.Overall = Overall{
		SNRGainDB: o.SNRGain, SNRGainCI95: o.SNRGainCI,
		SpeechWeightedSNRGainDB: o.SpeechWeighted,
		NoiseReductionDB:        o.NoiseReduction, NoiseReductionCI95: o.NoiseReductionCI,
		NoiseReductionADB: o.NoiseReductionA,
		TargetChangeDB:    o.TargetChange, TargetChangeCI95: o.TargetChangeCI,
		OverBestMicrophoneDB: o.OverBest,
	}
	if third.Best >= 0 {
		res.Overall.BestMicrophone = r.rig.Mics[r.line.used[third.Best]].Name
	}
	if r.set.IsolatedNoise != r.set.IsolatedTarget && (r.set.IsolatedNoise == "" || r.set.IsolatedTarget == "") {
		r.half(res)
	}
	if err := r.unfixed(res, noise, target); err != nil {
		return err
	}
	if err := r.predictInNoise(res); err != nil {
		return err
	}
	r.explain(res, third)
	return nil
}

// predict returns the bands with what the filters, as built, should do in them
// to microphones whose corrections are right, in a take of so many frames (which
// only weights that change with time ask for).
func (b *beamline) predict(bands []measure.Band, frames int64) []Band {
	models := b.models(frames)
	nyquist := float64(b.filters.Rate) / 2
	grating, found := response.GratingLimit(b.at, b.look.Direction(b.ref), b.rig.speed, nyquist)
	list := make([]Band, len(bands))
	for i, band := range bands {
		white, diffuse, target := b.bandGains(models, band)
		list[i] = Band{
			NominalHz: band.NominalHz, CentreHz: band.CentreHz, LowHz: band.LowHz, HighHz: band.HighHz,
			PredictedWhiteDB: number(white + target), PredictedDiffuseDB: number(diffuse + target), Flags: []string{},
		}
		if found && grating <= band.HighHz {
			list[i].Flags = append(list[i].Flags, "grating")
		}
		if diffuse < response.NoApertureDB {
			list[i].Flags = append(list[i].Flags, "no-aperture")
		}
	}
	return list
}

// bandGains are the gains of response.BandGains of models that follow each
// other: means of powers over time.
func (b *beamline) bandGains(models []model, band measure.Band) (whiteDB, diffuseDB, targetDB float64) {
	if len(models) == 1 {
		return response.BandGains(models[0].filters, b.at, b.look, b.ref, b.rig.speed, band.LowHz, band.HighHz)
	}
	var white, diffuse, target float64
	for _, m := range models {
		w, d, t := response.BandGains(m.filters, b.at, b.look, b.ref, b.rig.speed, band.LowHz, band.HighHz)
		white += m.share * audio.FromPowerDB(-w)
		diffuse += m.share * audio.FromPowerDB(-d)
		target += m.share * audio.FromPowerDB(t)
	}
	return -audio.PowerDB(white), -audio.PowerDB(diffuse), audio.PowerDB(target)
}

// fill copies the measured figures into the bands.
func fill(bands []Band, g *measure.Gains) {
	for i := range bands {
		b, m := &bands[i], g.Bands[i]
		b.NoiseInDBFS, b.NoiseOutDBFS = m.NoiseIn, m.NoiseOut
		b.NoiseReductionDB, b.NoiseReductionCI95 = m.NoiseReduction, m.NoiseReductionCI
		b.TargetInDBFS, b.TargetOutDBFS = m.TargetIn, m.TargetOut
		b.TargetChangeDB, b.TargetChangeCI95 = m.TargetChange, m.TargetChangeCI
		b.SNRInDB, b.SNROutDB = m.SNRIn, m.SNROut
		b.SNRGainDB, b.SNRGainCI95 = m.SNRGain, m.SNRGainCI
		b.OverBestMicrophoneDB, b.OverNamedMicrophone = m.OverBest, m.OverNamed
		b.Flags = append(b.Flags, m.Flags...)
	}
}

// blind measures the mix itself: stretches given or found.
func (r *run) blind(res *Result, named int) (third, octave *measure.Gains, err error) {
	noise, target, err := r.stretches(res)
	if err != nil {
		return nil, nil, err
	}
	mix := r.heard
	if third, err = measure.SNRGain(measure.Scene{Pair: mix.thirds(), Noise: noise, Target: target, Named: named}); err != nil {
		return nil, nil, err
	}
	octave, err = measure.SNRGain(measure.Scene{Pair: mix.octaves(), Noise: noise, Target: target, Named: named})
	return third, octave, err
}

// targetGuardS is kept between a noise stretch and what is taken as target
// where only the noise was given, seconds.
const targetGuardS = 0.25

// stretches returns where the noise and where the target sounds.
func (r *run) stretches(res *Result) (noise, target []measure.Stretch, err error) {
	noise, target, res.Segments.Source, err = r.known()
	if err != nil {
		return nil, nil, err
	}
	if res.Segments.Source == SegmentsNone {
		found, err := measure.FindSegments(r.heard.in.Thirds(), r.heard.beam().Thirds(), measure.SegmentOptions{ExpectedReductionDB: speechDiffuse(res.Bands)})
		if err != nil {
			return nil, nil, err
		}
		noise, target = found.Noise, found.Target
		if len(noise) > 0 || len(target) > 0 {
			res.Segments.Source = SegmentsAutomatic
		}
		if len(noise) == 0 || len(target) == 0 {
			r.report(Finding{Code: "no-segments", Severity: Warning, Message: fmt.Sprintf(
				"no gain could be measured: %s; give --noise A..B and --target A..B, or takes of the noise and the target alone", found.Explanation)})
		}
	}
	res.Segments.Noise, res.Segments.Target = spans(noise), spans(target)
	return noise, target, nil
}

// given turns stretches of the command line into seconds of this take.
func (r *run) given(option string, list []Stretch, duration float64) ([]measure.Stretch, error) {
	var out []measure.Stretch
	for _, s := range list {
		v, err := r.seconds(s)
		if err != nil {
			return nil, &UsageError{Err: fmt.Errorf("--%s: %w", option, err)}
		}
		if v[0] >= duration {
			return nil, &UsageError{Err: fmt.Errorf("--%s %s..%s: starts after the end of %s, which is %.3f s long", option, s.From, s.To, r.take.path(), duration), Hint: "times count in seconds from the take's first frame"}
		}
		out = append(out, measure.Stretch{From: v[0], To: math.Min(v[1], duration)})
	}
	slices.SortFunc(out, func(a, b measure.Stretch) int { return cmp.Compare(a.From, b.From) })
	for i := 1; i < len(out); i++ {
		if out[i].From < out[i-1].To {
			return nil, &UsageError{Err: fmt.Errorf("--%s: %g..%g and %g..%g overlap", option, out[i-1].From, out[i-1].To, out[i].From, out[i].To), Hint: "give one stretch from the start of the first to the end of the last, or stretches that leave each other alone"}
		}
	}
	return out, nil
}

// complement is what lies outside sorted stretches, with a guard around them.
func complement(list []measure.Stretch, duration float64) []measure.Stretch {
	var out []measure.Stretch
	at := 0.0
	for _, s := range append(slices.Clone(list), measure.Stretch{From: duration + targetGuardS, To: duration}) {
		if s.From-targetGuardS > at {
			out = append(out, measure.Stretch{From: at, To: s.From - targetGuardS})
		}
		at = s.To + targetGuardS
	}
	return out
}

func spans(list []measure.Stretch) [][2]float64 {
	out := make([][2]float64, len(list))
	for i, s := range list {
		out[i] = [2]float64{s.From, s.To}
	}
	return out
}

// speechDiffuse is the mean predicted gain in diffuse noise from 250 Hz to
// 5 kHz, dB, 0 where no band lies there.
func speechDiffuse(bands []Band) float64 {
	sum, n := 0.0, 0
	for _, b := range bands {
		if b.PredictedDiffuseDB != nil && b.CentreHz > 245 && b.CentreHz < 5100 {
			sum += *b.PredictedDiffuseDB
			n++
		}
	}
	if n == 0 {
		return 0
	}
	return sum / float64(n)
}

// isolated measures with takes of the noise and of the target alone, through
// the weights of the mix. With only one of them the figures of the other are
// left out (see half).
func (r *run) isolated(res *Result, named int, noise, target *listened) (third, octave *measure.Gains, err error) {
	*noise, *target = listened{}, listened{}
	res.Segments.Source = SegmentsIsolated
	r.passedOver()
	if path := r.set.IsolatedNoise; path != "" {
		if *noise, err = r.through(path); err != nil {
			return nil, nil, err
		}
		res.Segments.Noise = [][2]float64{{0, noise.seconds}}
	}
	if path := r.set.IsolatedTarget; path != "" {
		if *target, err = r.through(path); err != nil {
			return nil, nil, err
		}
		res.Segments.Target = [][2]float64{{0, target.seconds}}
	}
	switch {
	case noise.in == nil:
		*noise = *target
		r.report(Finding{Code: "isolated-noise-missing", Severity: Info, Message: "only the target alone was given: no noise reduction and no SNR gain; give --isolated-noise TAKE too"})
	case target.in == nil:
		*target = *noise
		r.report(Finding{Code: "isolated-target-missing", Severity: Info, Message: "only the noise alone was given: no target change and no SNR gain; give --isolated-target TAKE too"})
	}
	third, err = measure.IsolatedGain(measure.Isolated{Noise: noise.thirds(), Target: target.thirds(), Named: named})
	if err != nil {
		return nil, nil, err
	}
	octave, err = measure.IsolatedGain(measure.Isolated{Noise: noise.octaves(), Target: target.octaves(), Named: named})
	return third, octave, err
}

// passedOver says which of the options that mark stretches of the mix had
// nothing to say, since isolated takes come before them.
func (r *run) passedOver() {
	var unused []string
	for _, o := range []struct {
		option, value string
		learns        bool // minimum variance listens to it
	}{
		{"--noise", r.set.Noise, true}, {"--noise-cue", r.set.NoiseCue, true},
		{"--target", r.set.Target, false}, {"--target-cue", r.set.TargetCue, false},
	} {
		learned := o.learns && r.set.Weights == WeightsMinimumVariance
		if o.value != "" && !learned {
			unused = append(unused, o.option)
		}
	}
	if len(unused) > 0 {
		r.report(Finding{Code: "stretches-unused", Severity: Warning, Message: "the gain was measured on isolated takes, so " + strings.Join(unused, " and ") + " had nothing to say; leave out --isolated-noise and --isolated-target to measure the take itself"})
	}
}

// half leaves out the figures of the isolated take that was not given.
func (r *run) half(res *Result) {
	for _, bands := range [][]Band{res.Bands, res.OctaveBands} {
		for i := range bands {
			b := &bands[i]
			if r.set.IsolatedNoise == "" {
				b.NoiseInDBFS, b.NoiseOutDBFS, b.NoiseReductionDB, b.NoiseReductionCI95 = nil, nil, nil, nil
			} else {
				b.noiseOnly()
			}
			b.SNRInDB, b.SNROutDB, b.SNRGainDB, b.SNRGainCI95 = nil, nil, nil, nil
			b.OverBestMicrophoneDB, b.OverNamedMicrophone = nil, nil
		}
	}
	o := Overall{TargetChangeDB: res.Overall.TargetChangeDB, TargetChangeCI95: res.Overall.TargetChangeCI95}
	if r.set.IsolatedNoise != "" {
		o = res.Overall.noiseOnly()
	}
	res.Overall = o
}

// listened is what the meters heard of one take.
type listened struct {
	in, out *measure.Meter // nil under --no-measure
	before  *measure.Meter // the beam in front of a postfilter; nil without one
	seconds float64
}

func (l listened) thirds() measure.Pair {
	return measure.Pair{Reference: l.in.Thirds(), Output: l.out.Thirds(), Microphones: l.in.ChannelThirds()}
}

func (l listened) octaves() measure.Pair {
	return measure.Pair{Reference: l.in.Octaves(), Output: l.out.Octaves(), Microphones: l.in.ChannelOctaves()}
}

// through runs the beam over another take.
func (r *run) through(path string) (l listened, err error) {
	t, err := openTake([]string{path}, r.isolatedJoining(), false)
	if err != nil {
		return l, err
	}
	defer func() { err = joinErrors(err, t.close()) }()
	if err := r.fitsTake(path, t); err != nil {
		return l, err
	}
	src := audio.Source(&watched{Source: t.source(), ctx: r.ctx, tell: r.tell("measuring "+path, t.header.Frames)})
	var along audio.Source
	if r.set.Postfilter != PostfilterNone {
		var done func() error
		if along, done, err = r.alongside(); err != nil {
			return l, err
		}
		defer func() { err = joinErrors(err, done()) }()
	}
	if l, err = r.driveTrack(src, along); err != nil {
		return l, err
	}
	if err := t.unchanged(); err != nil {
		return l, err
	}
	for _, f := range t.findings() {
		f.Message = strings.TrimSpace(path + ": " + f.Message)
		r.report(f)
	}
	l.seconds = float64(t.header.Frames) / float64(t.header.Rate)
	return l, nil
}
