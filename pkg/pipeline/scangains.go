package pipeline

import (
	"context"
	"errors"
	"strings"

	"alidade/pkg/measure"
	"alidade/pkg/response"
	"alidade/pkg/scan"
)

// gains fills in the gains of the beams, of the directions from on.
func (s *scanner) gains(a *scan.Analysis, lines []*beamline, from int) error {
	switch {
	case s.set.NoMeasure:
		return nil
	case s.result.Segments.Source == SegmentsIsolated:
		return s.isolatedGains(lines, from)
	case len(s.noise) == 0:
		return nil
	}
	reference := a.Reference()
	for i := range lines {
		if err := context.Cause(s.ctx); err != nil {
			return err
		}
		g, err := measure.SNRGain(measure.Scene{
			Pair:  measure.Pair{Reference: reference, Output: a.Beam(i)},
			Noise: s.noise, Target: s.target, Named: -1, NoIntervals: !s.spec.Options.Intervals,
		})
		if err != nil {
			return err
		}
		s.fill(from+i, g)
	}
	return nil
}

// isolatedGains runs the takes of noise and target alone through the beams.
func (s *scanner) isolatedGains(lines []*beamline, from int) (err error) {
	if s.set.IsolatedNoise == "" || s.set.IsolatedTarget == "" {
		return nil
	}
	var heard [2]*scan.Analysis
	for k, path := range []string{s.set.IsolatedNoise, s.set.IsolatedTarget} {
		if heard[k], err = s.alone(path, lines, k == 0, from == 0); err != nil {
			return err
		}
	}
	pair := func(a *scan.Analysis, i int) measure.Pair {
		return measure.Pair{Reference: a.Reference(), Output: a.Beam(i)}
	}
	for i := range lines {
		if err := context.Cause(s.ctx); err != nil {
			return err
		}
		g, err := measure.IsolatedGain(measure.Isolated{Noise: pair(heard[0], i), Target: pair(heard[1], i), Named: -1, NoIntervals: !s.spec.Options.Intervals})
		if err != nil {
			return err
		}
		s.fill(from+i, g)
	}
	return nil
}

// alone analyses an isolated take.
func (s *scanner) alone(path string, lines []*beamline, noise, first bool) (a *scan.Analysis, err error) {
	t, err := openTake([]string{path}, s.isolatedJoining(), false)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, t.close()) }()
	if err := s.fitsTake(path, t); err != nil {
		return nil, err
	}
	if first {
		whole := [][2]float64{{0, t.duration()}}
		if noise {
			s.result.Segments.Noise = whole
		} else {
			s.result.Segments.Target = whole
		}
	}
	if a, err = s.analyse(lines, t, "measuring "+path); err != nil {
		return nil, err
	}
	if first {
		for _, f := range t.findings() {
			f.Message = strings.TrimSpace(path + ": " + f.Message)
			s.report(f)
		}
	}
	return a, t.unchanged()
}

// fill copies measured gains into direction i, and keeps what they are made of.
func (s *scanner) fill(i int, g *measure.Gains) {
	a := &s.result.Angles[i]
	s.powers[i] = make([]measure.Powers, len(g.Bands))
	for b := range g.Bands {
		s.powers[i][b] = g.Powers(b)
	}
	s.gapsOf(i, g)
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
