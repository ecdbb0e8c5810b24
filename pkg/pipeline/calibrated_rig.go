package pipeline

import (
	"context"
	"fmt"
	"path/filepath"
	"strings"

	"alidade/pkg/acoustics"
	"alidade/pkg/calibration"
	"alidade/pkg/rig"
)

// channelNotes are the comments of the new rig file, one a microphone.
func (c *calibrating) channelNotes(used []int, r *calibration.Relative) []string {
	notes := make([]string, len(c.rig.Mics))
	for m, e := range c.res.Microphones {
		if !e.Heard {
			continue
		}
		notes[m] = fmt.Sprintf("was gain_db %g, delay_us %g, %s; now ± %.3f dB, ± %.2f µs", e.GainBeforeDB, rounded(e.DelayBeforeUS, 3), e.PolarityBefore, *e.GainUncertaintyDB, *e.DelayUncertaintyUS)
	}
	return notes
}

// head are the first lines of the new rig file.
func (c *calibrating) head() []string {
	lines := []string{fmt.Sprintf("Calibrated by alidade %s from the rig file %s (SHA-256 %s)", c.spec.Version, filepath.Base(c.spec.RigPath), c.rig.digest)}
	for _, t := range c.res.Takes {
		for _, f := range t.Files {
			lines = append(lines, fmt.Sprintf("by the take %s (SHA-256 %s).", filepath.Base(f.Path), f.SHA256))
		}
	}
	if s := c.res.Source; s != nil {
		where := fmt.Sprintf("azimuth %.2f°, elevation %.2f°", s.AzimuthDeg, s.ElevationDeg)
		if s.DistanceM != nil {
			where += fmt.Sprintf(", %.3f m away", *s.DistanceM)
		}
		lines = append(lines, fmt.Sprintf("Sound from %s (standard uncertainty %.2f°), air %s (%.1f °C), microphones within %.2f mm.",
			where, s.DirectionStdDeg, acoustics.Air.String(c.rig.air), s.TemperatureStdC, s.PlacementStdMM))
	}
	if s := c.res.Survey; s != nil {
		lines = append(lines, fmt.Sprintf("Places from %d sounds, arrivals within %.2f µs (%.2f µs before); not observable: %s.",
			len(s.Sounds), s.ResidualUS, s.ResidualBeforeUS, strings.Join(s.Unobservable, ", ")))
	}
	if s := c.res.Calibrator; s != nil {
		lines = append(lines, fmt.Sprintf("Sensitivities by a calibrator of %g dB SPL at %g Hz, class %s (± %g dB).", s.LevelDBSPL, s.Hz, s.Class, s.ToleranceDB))
	}
	return append(lines, "Old values stand behind each microphone; ± is twice the standard uncertainty.")
}

// write writes the new rig file, having read it back, and finishes the result.
func (c *calibrating) write(changed *rig.Rig, notes []string) error {
	for _, t := range c.takes {
		finished, err := t.finish()
		if err != nil {
			return err
		}
		c.res.Takes = append(c.res.Takes, finished)
	}
	if err := context.Cause(c.ctx); err != nil {
		return err
	}
	text := changed.Annotated(c.head(), func(m int) string { return notes[m] })
	if _, err := rig.Load(c.out, text, nil); err != nil {
		return fmt.Errorf("the calibrated rig would not be read back: %w", err)
	}
	s, err := stage(c.out, c.set.Overwrite)
	if err != nil {
		return err
	}
	defer s.abandon()
	if _, err := s.Write(text); err != nil {
		return fmt.Errorf("%s: %w", c.out, err)
	}
	if err := s.commit(); err != nil {
		return err
	}
	c.res.Output = CalibrationOutput{Path: c.out, SHA256: digestOf(text)}
	return nil
}
