package pipeline

import (
	"errors"
	"fmt"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
	"alidade/pkg/postfilter"
)

// The postfilters.
const (
	PostfilterNone    = "none"
	PostfilterWhite   = string(postfilter.White)
	PostfilterDiffuse = string(postfilter.Diffuse)
)

// postfilterFloorDB is the smallest gain of a postfilter where none is given:
// common practice is 10 to 20 dB, below which what is left begins to warble.
const postfilterFloorDB = -15.0

// Postfilter is the filter behind the beam, whose gains follow the sound.
type Postfilter struct {
	Kind     string  `json:"kind"` // white or diffuse
	FloorDB  float64 `json:"floor_db"`
	AverageS float64 `json:"average_s"` // time constant behind the gains
	// What it did beyond the beam, overall: null where it could not be measured.
	NoiseReductionDB Number `json:"noise_reduction_db"`
	TargetChangeDB   Number `json:"target_change_db"`
}

// chain makes the sound of a track from corrected microphones.
type chain func(src audio.Source) (audio.Source, error)

// track is the chain of the track: the beam and, where one is asked for, the
// postfilter. Its gains are found on the microphones themselves, or on those of
// mix, as long as src, where src is a part of it. before gets the beam in front
// of the postfilter; it may be nil.
func (b *beamline) track(mix audio.Source, before audio.Sink) chain {
	if b.set.Postfilter == PostfilterNone {
		return b.steered
	}
	beam := func(src audio.Source) (audio.Source, error) {
		y, err := b.steered(src)
		if err == nil && before != nil {
			y = audio.Tee(y, before)
		}
		return y, err
	}
	return func(src audio.Source) (audio.Source, error) {
		var both audio.Source
		var err error
		if mix == nil {
			both, err = audio.With(src, beam)
		} else {
			var y audio.Source
			if y, err = beam(src); err == nil {
				both, err = audio.Beside(mix, y)
			}
		}
		if err != nil {
			return nil, err
		}
		return postfilter.New(both, b.postfilter())
	}
}

// driveTrack drives the chain of the track over src; see track for mix. It
// listens to the beam in front of a postfilter as well.
func (r *run) driveTrack(src, mix audio.Source, sinks ...audio.Sink) (l listened, err error) {
	if r.set.Postfilter == PostfilterNone || r.set.NoMeasure {
		return r.drive(src, r.line.track(mix, nil), sinks...)
	}
	before, err := measure.NewMeter(audio.Format{Rate: src.Format().Rate, Channels: 1}, measure.MeterOptions{})
	if err != nil {
		return l, err
	}
	if l, err = r.drive(src, r.line.track(mix, before), sinks...); err != nil {
		return l, err
	}
	l.before = before
	return l, before.Close()
}

// beam is the meter at the beam itself, in front of a postfilter.
func (l listened) beam() *measure.Meter {
	if l.before != nil {
		return l.before
	}
	return l.out
}

// postfilter are the options of the postfilter.
func (b *beamline) postfilter() postfilter.Options {
	o := postfilter.Options{
		Kind: postfilter.Kind(b.set.Postfilter), FloorDB: b.set.postfilterFloorDB,
		Mics: b.at, Reference: b.ref, Look: b.look, Speed: b.rig.speed,
	}
	if b.shift == nil {
		// The channels are as late as they came: the filters hold the corrections.
		for _, m := range b.used {
			o.Late = append(o.Late, -b.rig.Mics[m].Delay)
		}
	}
	return o
}

// followsSound says that what is done to the sound changes with time, so that an
// isolated take has to lie frame by frame on the mix.
func (s *settings) followsSound() bool {
	return s.Postfilter != PostfilterNone || s.ReestimateEvery > 0 || s.aim == aimFollow
}

// alongside returns the corrected microphones of the mix once more, for the
// gains of a part of it, and what closes it.
func (r *run) alongside() (audio.Source, func() error, error) {
	t, err := openTake(r.spec.Take, r.set.joining(), false)
	if err != nil {
		return nil, nil, err
	}
	src, err := r.line.corrected(&watched{Source: t.source(), ctx: r.ctx})
	if err != nil {
		return nil, nil, joinErrors(err, t.close())
	}
	return src, func() error { return errors.Join(t.unchanged(), t.close()) }, nil
}

// unfixed says what the figures of a track are whose gains follow the sound, and
// leaves out those that a mix alone cannot tell.
func (r *run) unfixed(res *Result, noise, target listened) error {
	if r.set.Postfilter == PostfilterNone {
		return nil
	}
	p := &Postfilter{Kind: r.set.Postfilter, FloorDB: r.set.postfilterFloorDB, AverageS: postfilter.AverageS}
	res.Steer.Postfilter = p
	what := fmt.Sprintf("the track went through the postfilter %s (%s; gains from %g to 0 dB, found over %g s): they follow the sound, so the gain figures are no longer those of a fixed filter and hold for this take alone; the predicted ones are of the beam without it",
		p.Kind, map[string]string{PostfilterWhite: "Zelinski 1988", PostfilterDiffuse: "McCowan & Bourlard 2003"}[p.Kind], p.FloorDB, p.AverageS)
	switch {
	case r.set.NoMeasure:
		r.report(Finding{Code: "postfilter", Severity: Info, Message: what})
	case res.Segments.Source == SegmentsIsolated:
		r.report(Finding{Code: "postfilter", Severity: Info, Message: what + "; they were taken with the gains found on the mix, run through the noise alone and the target alone"})
		g, err := measure.IsolatedGain(measure.Isolated{Noise: noise.filtered(), Target: target.filtered(), Named: -1, NoIntervals: true})
		if err != nil {
			return err
		}
		o := g.Overall(nil)
		if r.set.IsolatedNoise != "" {
			p.NoiseReductionDB = o.NoiseReduction
		}
		if r.set.IsolatedTarget != "" {
			p.TargetChangeDB = o.TargetChange
		}
	default:
		r.report(Finding{Code: "postfilter", Severity: Info, Message: what + "; they are of the noise in the pauses of the target, under which it falls by less, and the target cannot be told apart from it: --isolated-noise and --isolated-target, cut like the take, tell both"})
		g, err := measure.SNRGain(measure.Scene{Pair: noise.filtered(), Noise: stretchesOf(res.Segments.Noise), Named: -1, NoIntervals: true})
		if err != nil {
			return err
		}
		p.NoiseReductionDB = g.Overall(nil).NoiseReduction
		for _, bands := range [][]Band{res.Bands, res.OctaveBands} {
			for i := range bands {
				bands[i].noiseOnly()
			}
		}
		res.Overall = res.Overall.noiseOnly()
	}
	return nil
}

// filtered is the beam in front of the postfilter and behind it.
func (l listened) filtered() measure.Pair {
	return measure.Pair{Reference: l.before.Thirds(), Output: l.out.Thirds()}
}

// stretchesOf turns the spans of a report back.
func stretchesOf(spans [][2]float64) []measure.Stretch {
	var list []measure.Stretch
	for _, s := range spans {
		list = append(list, measure.Stretch{From: s[0], To: s[1]})
	}
	return list
}

// noiseOnly leaves out the figures of the target and those that need it.
func (b *Band) noiseOnly() {
	b.TargetInDBFS, b.TargetOutDBFS, b.TargetChangeDB, b.TargetChangeCI95 = nil, nil, nil, nil
	b.SNRInDB, b.SNROutDB, b.SNRGainDB, b.SNRGainCI95 = nil, nil, nil, nil
	b.OverBestMicrophoneDB, b.OverNamedMicrophone = nil, nil
	if !hasFlag(*b, measure.TargetUnmeasurable) {
		b.Flags = append(b.Flags, measure.TargetUnmeasurable)
	}
}

// noiseOnly is o without the figures of the target and those that need it.
func (o Overall) noiseOnly() Overall {
	return Overall{NoiseReductionDB: o.NoiseReductionDB, NoiseReductionCI95: o.NoiseReductionCI95, NoiseReductionADB: o.NoiseReductionADB}
}
