package pipeline

import (
	"context"
	"errors"
	"fmt"

	"alidade/pkg/beam"
	"alidade/pkg/measure"
	"alidade/pkg/response"
	"alidade/pkg/scan"
)

// gains fills in the gains of the directions from..to.
func (s *scanner) gains(a *scan.Analysis, from, to int) error {
	switch {
	case s.set.NoMeasure:
		return nil
	case s.result.Segments.Source == SegmentsIsolated:
		return s.isolatedGains(from, to)
	case len(s.noise) == 0:
		return nil
	}
	reference := a.Reference()
	for i := from; i < to; i++ {
		if err := context.Cause(s.ctx); err != nil {
			return err
		}
		g, err := measure.SNRGain(measure.Scene{
			Pair:  measure.Pair{Reference: reference, Output: a.Beam(i - from)},
			Noise: s.noise, Target: s.target, Named: -1, NoIntervals: !s.spec.Options.Intervals,
		})
		if err != nil {
			return err
		}
		s.result.Angles[i].fill(g)
		if i == from && from == 0 {
			s.missing(g)
		}
	}
	return nil
}

// missing says why figures of the first direction are null; those of the others
// are for the same reasons.
func (s *scanner) missing(g *measure.Gains) {
	bands := map[measure.Reason][]float64{}
	for _, b := range g.Bands {
		if b.TargetReason != "" {
			bands[b.TargetReason] = append(bands[b.TargetReason], b.Band.NominalHz)
		}
	}
	for _, why := range []measure.Reason{measure.NoNoise, measure.NoTarget, measure.TooShort, measure.Silent, measure.NotAboveNoise} {
		if list := bands[why]; len(list) > 0 {
			s.report(Finding{Code: "gain-unmeasured-" + string(why), Severity: Info, Bands: list, Message: fmt.Sprintf(
				"no SNR gain in %d of %d bands of the first direction: %s", len(list), len(g.Bands), reasonWords[why])})
		}
	}
}

// isolatedGains runs the takes of noise and target alone through the beams.
func (s *scanner) isolatedGains(from, to int) (err error) {
	if s.set.IsolatedNoise == "" || s.set.IsolatedTarget == "" {
		return nil
	}
	sets, err := s.beams(from, to, nil)
	if err != nil {
		return err
	}
	var heard [2]*scan.Analysis
	for k, path := range []string{s.set.IsolatedNoise, s.set.IsolatedTarget} {
		if heard[k], err = s.alone(path, sets, k == 0, from == 0); err != nil {
			return err
		}
	}
	pair := func(a *scan.Analysis, i int) measure.Pair {
		return measure.Pair{Reference: a.Reference(), Output: a.Beam(i)}
	}
	for i := from; i < to; i++ {
		g, err := measure.IsolatedGain(measure.Isolated{Noise: pair(heard[0], i-from), Target: pair(heard[1], i-from), Named: -1, NoIntervals: !s.spec.Options.Intervals})
		if err != nil {
			return err
		}
		s.result.Angles[i].fill(g)
	}
	return nil
}

// alone analyses an isolated take.
func (s *scanner) alone(path string, sets []*beam.Filters, noise, first bool) (a *scan.Analysis, err error) {
	t, err := openTake([]string{path}, s.isolatedJoining(), false)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, t.close()) }()
	mix := s.take.header
	if t.header.Rate != mix.Rate || t.header.Channels != mix.Channels {
		return nil, &UsageError{Err: fmt.Errorf("%s: %d channels at %d Hz, but %s has %d at %d Hz: isolated takes are recorded with the same rig and settings",
			path, t.header.Channels, t.header.Rate, s.take.path(), mix.Channels, mix.Rate), Hint: "give a take that fits, or leave the option out"}
	}
	if first {
		whole := [][2]float64{{0, t.duration()}}
		if noise {
			s.result.Segments.Noise = whole
		} else {
			s.result.Segments.Target = whole
		}
	}
	return s.analyse(sets, t, "measuring "+path)
}

// fill copies measured gains into a direction.
func (a *ScanAngle) fill(g *measure.Gains) {
	o := g.Overall(nil)
	a.NoiseReductionDB, a.TargetChangeDB, a.SNRGainDB, a.SNRGainCI95 = o.NoiseReduction, o.TargetChange, o.SNRGain, o.SNRGainCI
	for i := range a.Bands {
		b, m := &a.Bands[i], g.Bands[i]
		b.NoiseReductionDB, b.TargetChangeDB, b.SNRGainDB, b.SNRGainCI95 = m.NoiseReduction, m.TargetChange, m.SNRGain, m.SNRGainCI
		b.Flags = append([]string{}, m.Flags...)
	}
}

// expected are the gains that the filters should have in diffuse noise in the
// bands from 250 Hz to 5 kHz, dB.
func (b *beamline) expected() (list []float64) {
	for _, band := range measure.ThirdOctaves(b.filters.Rate) {
		if band.CentreHz > 245 && band.CentreHz < 5100 {
			_, diffuse, target := response.BandGains(b.model, b.at, b.look, b.ref, b.rig.speed, band.LowHz, band.HighHz)
			list = append(list, diffuse+target)
		}
	}
	return list
}
