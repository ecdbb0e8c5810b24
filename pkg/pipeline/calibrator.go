package pipeline

import (
	"context"
	"fmt"
	"math"
	"slices"

	"alidade/pkg/calibration"
	"alidade/pkg/rig"
)

// The calibrator that is assumed where no more is said.
const (
	DefaultCalibratorHz    = 1000.0
	DefaultCalibratorClass = "1"
)

// maxToneDifference is how far the seatings on one channel may lie apart, dB.
const maxToneDifference = 0.3

// levels finds sensitivities from a calibrator on one microphone after the
// other.
func (c *calibrating) levels() (*rig.Rig, []string, error) {
	used, _ := c.used()
	cal := calibration.Calibrator{LevelDB: c.set.CalibratorDB, Hz: c.set.CalibratorHz}
	if cal.Hz == 0 {
		cal.Hz = DefaultCalibratorHz
	}
	class := c.set.CalibratorClass
	if class == "" {
		class = DefaultCalibratorClass
	}
	cal.Tolerance, _ = calibration.CalibratorTolerance(class)
	only := -1
	if ch := c.set.Channel; ch != 0 {
		if only = slices.IndexFunc(used, func(m int) bool { return c.rig.Mics[m].Channel == ch }); only < 0 {
			return nil, nil, &UsageError{Err: fmt.Errorf("--channel %d: rig %s has no microphone in use on it", ch, c.rig.Name)}
		}
	}
	best := make([]seatings, len(used))
	why := make([]string, len(used))
	for _, t := range c.takes {
		open, err := c.raw(t, "listening")
		if err != nil {
			return nil, nil, err
		}
		if cal.Hz > 0.4*float64(t.header.Rate) {
			return nil, nil, &UsageError{Err: fmt.Errorf("--calibrator-hz %g: above 0.4 of the rate of %s, %d Hz", cal.Hz, t.path(), t.header.Rate)}
		}
		src, err := open()
		if err != nil {
			return nil, nil, err
		}
		tones, err := calibration.Tones(src, cal, only)
		if err != nil {
			return nil, nil, explainedFor(t, err)
		}
		if err := context.Cause(c.ctx); err != nil {
			return nil, nil, err
		}
		for i, tone := range tones {
			if !tone.Found {
				why[i] = tone.Why
				continue
			}
			best[i].tones, best[i].takes = append(best[i].tones, tone), append(best[i].takes, t)
		}
	}
	for i := range best {
		if err := best[i].settle(c.rig.Mics[used[i]].Channel, cal); err != nil {
			return nil, nil, err
		}
	}
	found := 0
	for _, b := range best {
		if len(b.tones) > 0 {
			found++
		}
	}
	if found == 0 {
		i := max(only, 0)
		return nil, nil, &calibration.RefusedError{
			Why:  fmt.Sprintf("no channel carries the tone of a calibrator: channel %d: %s", c.rig.Mics[used[i]].Channel, why[i]),
			Help: "put the calibrator on one microphone after the other, at least two seconds each; --calibrator-hz gives its frequency",
		}
	}
	changed := *c.rig.Rig
	changed.Mics = slices.Clone(changed.Mics)
	var missing []int
	for i, m := range used {
		if len(best[i].tones) == 0 {
			missing = append(missing, changed.Mics[m].Channel)
			continue
		}
		v := rounded(best[i].sensitivity, 3)
		changed.Mics[m].SensitivityDBFS = &v
	}
	gains := len(missing) == 0 && !slices.Contains(c.set.keep, KeepGain)
	if gains {
		// One tone at every microphone: what gain corrections are.
		mean := 0.0
		for _, m := range used {
			mean += (changed.Mics[m].GainDB + *changed.Mics[m].SensitivityDBFS) / float64(len(used))
		}
		for _, m := range used {
			changed.Mics[m].GainDB = rounded(mean-*changed.Mics[m].SensitivityDBFS, 4)
		}
	}
	notes := make([]string, len(changed.Mics))
	for m, mic := range changed.Mics {
		old := c.rig.Mics[m]
		e := CalibratedMic{
			Channel: mic.Channel, Name: mic.Name, Used: mic.Use, GainBeforeDB: old.GainDB, GainDB: mic.GainDB,
			DelayBeforeUS: 1e6 * old.Delay, DelayUS: 1e6 * mic.Delay,
			PolarityBefore: polarityWord(old.Inverted), Polarity: polarityWord(mic.Inverted),
			SensitivityBeforeDBFS: old.SensitivityDBFS, SensitivityDBFS: mic.SensitivityDBFS,
		}
		if i := slices.Index(used, m); i >= 0 && len(best[i].tones) > 0 {
			seated := best[i]
			e.Heard = true
			e.SensitivityUncertaintyDB = number(2 * seated.std)
			for k, tone := range seated.tones {
				e.Tones = append(e.Tones, CalibratorTone{Take: seated.takes[k].path(), FromS: tone.From, ToS: tone.To, DBFS: tone.DBFS, StdDB: tone.StdDB, Hz: tone.Hz})
			}
			was := "none"
			if old.SensitivityDBFS != nil {
				was = fmt.Sprintf("%g", *old.SensitivityDBFS)
			}
			notes[m] = fmt.Sprintf("was sensitivity_dbfs %s, gain_db %g; sensitivity now ± %.2f dB", was, old.GainDB, 2*seated.std)
			if gains {
				e.GainUncertaintyDB = number(2 * math.Sqrt2 * math.Max(seated.spread, 0.02))
			}
		}
		c.res.Microphones = append(c.res.Microphones, e)
	}
	c.res.Calibrator = &CalibratorUsed{LevelDBSPL: cal.LevelDB, Hz: cal.Hz, Class: class, ToleranceDB: cal.Tolerance, GainsSet: gains}
	add := func(code string, severity Severity, channels []int, text string) {
		c.res.Findings = append(c.res.Findings, Finding{Code: code, Severity: severity, Message: text, Channels: channels})
	}
	if len(missing) > 0 {
		add("no-calibrator-tone", Info, missing, plural(missing, "channel %s", "channels %s")+" without the calibrator's tone: left as before, gain corrections too; levels follow by the gain corrections that the rig has")
	}
	for _, t := range c.takes {
		c.res.Findings = append(c.res.Findings, t.findings()...)
	}
	sortFindings(c.res.Findings)
	return &changed, notes, nil
}

// seatings are the times that the calibrator sat on one channel, in the order of
// the takes.
type seatings struct {
	tones []calibration.Tone
	takes []*take

	sensitivity float64 // dBFS: the mean
	spread, std float64 // between seatings or within one, and the standard uncertainty, dB
}

// settle takes the mean of the seatings and refuses those that lie too far apart,
// whatever their order.
func (s *seatings) settle(channel int, cal calibration.Calibrator) error {
	if len(s.tones) == 0 {
		return nil
	}
	low, high := 0, 0
	var values []float64
	for k, tone := range s.tones {
		values = append(values, tone.SensitivityDBFS)
		s.spread = math.Max(s.spread, tone.StdDB)
		if tone.DBFS < s.tones[low].DBFS {
			low = k
		}
		if tone.DBFS > s.tones[high].DBFS {
			high = k
		}
	}
	if s.tones[high].DBFS-s.tones[low].DBFS > maxToneDifference {
		return explainedFor(s.takes[high], &calibration.RefusedError{
			Why:  fmt.Sprintf("channel %d reads %.2f dBFS here and %.2f dBFS in %s", channel, s.tones[high].DBFS, s.tones[low].DBFS, s.takes[low].path()),
			Help: "seat the calibrator again, and leave the gains of the recorder alone in between",
		})
	}
	slices.Sort(values) // sums do not depend on the order of the takes
	n := float64(len(values))
	for _, v := range values {
		s.sensitivity += v / n
	}
	square := 0.0
	for _, v := range values {
		square += (v - s.sensitivity) * (v - s.sensitivity) / math.Max(1, n-1)
	}
	s.spread = math.Max(s.spread, math.Sqrt(square))
	// What the class allows is spread evenly [JCGM 100:2008, 4.3.7].
	s.std = math.Hypot(cal.Tolerance/math.Sqrt(3), s.spread)
	return nil
}
