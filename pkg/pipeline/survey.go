package pipeline

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"alidade/pkg/calibration"
	"alidade/pkg/rig"
)

// maxSurveyResidual is the root mean square residual from which arrivals do not
// agree on places, seconds.
const maxSurveyResidual = 20e-6

// places finds the places of the microphones.
func (c *calibrating) places() (*rig.Rig, []string, error) {
	used, mics := c.used()
	at, ref := c.rig.Positions(), c.rig.ReferencePoint()
	std := or(c.set.PlacementStdMM, DefaultSurveyStdMM) / 1000
	var arrivals []calibration.Arrival
	sounds := []SurveySound{}
	for _, t := range c.takes {
		open, err := c.raw(t, "listening")
		if err != nil {
			return nil, nil, err
		}
		if to := c.set.ToHz; to > 0.45*float64(t.header.Rate) {
			return nil, nil, &UsageError{Err: fmt.Errorf("--to-hz %g: above 0.45 of the rate of %s, %d Hz", to, t.path(), t.header.Rate)}
		}
		found, left, err := calibration.Arrivals(open, at, mics, c.rig.speed, std, calibration.Options{
			Claps: c.set.Sound == SoundClaps, FromHz: c.set.FromHz, ToHz: c.set.ToHz,
		})
		if err != nil {
			return nil, nil, explainedFor(t, err)
		}
		c.clapsLeftOut(t, left)
		start, _, err := c.as(t).excerpt()
		if err != nil {
			return nil, nil, err
		}
		for _, a := range found {
			sounds = append(sounds, SurveySound{Take: t.path(), AtS: a.At + float64(start)/float64(t.header.Rate)})
		}
		arrivals = append(arrivals, found...)
	}
	bearings, err := c.bearings(len(arrivals))
	if err != nil {
		return nil, nil, err
	}
	o := calibration.SurveyOptions{
		Places: std, Delays: or(c.set.DelayStdUS, DefaultDelayStdUS) * 1e-6,
		Speed: or(c.set.TemperatureStdC, DefaultTemperatureStdC) / (2 * (273.15 + c.rig.air.TemperatureC)),
	}
	s, err := calibration.Locate(at, ref, arrivals, bearings, c.rig.speed, o)
	if err != nil {
		return nil, nil, err
	}
	for k, d := range s.Directions {
		sounds[k].AzimuthDeg, sounds[k].ElevationDeg = d.AzimuthDeg(), d.ElevationDeg()
	}
	c.res.Survey = &Survey{
		Sounds: sounds, ResidualUS: 1e6 * s.Residual, ResidualBeforeUS: 1e6 * s.Before, ChiSquared: number(s.Chi2), Outliers: s.Outliers,
		Dimensions: s.Rank, Affine: s.Affine, Observable: s.Observable, Ways: s.Ways, Unobservable: append([]string{}, s.Unobservable()...),
		Modes: []SurveyMode{}, PlacementStdMM: 1000 * std, DelayStdUS: 1e6 * o.Delays,
	}
	for _, m := range s.Modes {
		c.res.Survey.Modes = append(c.res.Survey.Modes, SurveyMode{Name: m.Name, Known: m.Known})
	}
	if s.Residual > maxSurveyResidual {
		return nil, nil, &calibration.RefusedError{
			Why:  fmt.Sprintf("%d sounds agree on no places: arrivals are %.1f µs off (root mean square), want at most %.0f µs", len(arrivals), 1e6*s.Residual, 1e6*maxSurveyResidual),
			Help: "clap at least 20 rig sizes away or give --distance-m, in the open or far from walls, and leave the rig where it is; calibrate delays first",
		}
	}
	changed := c.moved(used, arrivals, s)
	c.surveyFindings(s, o)
	var notes []string
	for _, e := range c.res.Microphones {
		if e.AtMM == nil {
			notes = append(notes, "")
			continue
		}
		b, u := *e.AtBeforeMM, *e.AtUncertaintyMM
		notes = append(notes, fmt.Sprintf("was at_mm [%g, %g, %g]; now ± [%.1f, %.1f, %.1f]", rounded(b[0], 4), rounded(b[1], 4), rounded(b[2], 4), u[0], u[1], u[2]))
	}
	return changed, notes, nil
}

// clapsLeftOut says how many claps of a take were not looked at.
func (c *calibrating) clapsLeftOut(t *take, left int) {
	if left > 0 {
		c.res.Findings = append(c.res.Findings, Finding{Code: "claps-left-out", Severity: Info,
			Message: fmt.Sprintf("%s: the last %d claps were not looked at, but the first %d alone: the rest by --excerpt A..B", t.path(), left, calibration.MaxClaps)})
	}
}

// explainedFor gives the refusal of a take its place.
func explainedFor(t *take, err error) error {
	c := calibrating{takes: []*take{t}}
	return c.explained(err)
}

// bearings are what is known of so many sounds before.
func (c *calibrating) bearings(count int) ([]calibration.Bearing, error) {
	list := make([]calibration.Bearing, count)
	given := c.set.elevation
	if len(given) > 1 && len(given) != count {
		return nil, &UsageError{Err: fmt.Errorf("--elevations %s: %d elevations for %d sounds", c.set.Elevations, len(given), count), Hint: "give one for all, or one for each in order of takes and time"}
	}
	for k := range list {
		list[k].Distance = c.set.DistanceM
		if len(given) > 0 {
			el := given[min(k, len(given)-1)] * math.Pi / 180
			list[k].Elevation, list[k].ElevationStd = &el, or(c.set.ElevationStdDeg, DefaultElevationStdDeg)*math.Pi/180
		}
	}
	return list, nil
}

// moved returns the rig with the new places, and fills in the microphones of the
// result.
func (c *calibrating) moved(used []int, arrivals []calibration.Arrival, s *calibration.Survey) *rig.Rig {
	changed := *c.rig.Rig
	changed.Mics = slices.Clone(changed.Mics)
	for m, mic := range c.rig.Mics {
		e := CalibratedMic{
			Channel: mic.Channel, Name: mic.Name, Used: mic.Use,
			GainBeforeDB: mic.GainDB, GainDB: mic.GainDB, DelayBeforeUS: 1e6 * mic.Delay, DelayUS: 1e6 * mic.Delay,
			PolarityBefore: polarityWord(mic.Inverted), Polarity: polarityWord(mic.Inverted),
		}
		if i := slices.Index(used, m); i >= 0 {
			for _, a := range arrivals {
				e.Heard = e.Heard || !math.IsNaN(a.Late[i])
			}
			p := s.At[i]
			p = rig.Point{X: hundredths(p.X), Y: hundredths(p.Y), Z: hundredths(p.Z)}
			if e.Heard {
				changed.Mics[m].At = p
				e.AtBeforeMM = &[3]float64{1000 * mic.At.X, 1000 * mic.At.Y, 1000 * mic.At.Z}
				e.AtMM = &[3]float64{1000 * p.X, 1000 * p.Y, 1000 * p.Z}
				e.MovedMM = number(1000 * p.Distance(mic.At))
				u := s.ShapeStd[i]
				e.AtUncertaintyMM = &[3]float64{2000 * u[0], 2000 * u[1], 2000 * u[2]}
			}
		}
		c.res.Microphones = append(c.res.Microphones, e)
	}
	return &changed
}

// hundredths rounds metres to hundredths of a millimetre, as a rig file writes
// them.
func hundredths(metres float64) float64 {
	v, err := strconv.ParseFloat(strconv.FormatFloat(metres, 'f', 5, 64), 64)
	if err != nil {
		return metres
	}
	return v + 0
}

// surveyFindings says what a person should know.
func (c *calibrating) surveyFindings(s *calibration.Survey, o calibration.SurveyOptions) {
	add := func(code string, severity Severity, channels []int, format string, args ...any) {
		c.res.Findings = append(c.res.Findings, Finding{Code: code, Severity: severity, Channels: channels, Message: fmt.Sprintf(format, args...)})
	}
	if un := s.Unobservable(); len(un) > 0 {
		add("not-observable", Info, nil, "not observable from these sounds, and left as near to the old rig file as may be: %s", strings.Join(un, "; "))
	}
	if s.Affine {
		add("affine", Warning, nil, "the arrivals show %s, and nothing is known of the directions: places are found but for a linear map of it, which the old rig file settles; give --elevations, or clap from above and below a rig that is not flat",
			[]string{"", "a line", "a plane"}[s.Rank])
	}
	if s.Outliers > 0 {
		add("arrivals-set-aside", Info, nil, "%d arrivals do not agree with the others (reflections, a rig that moved) and were given less weight", s.Outliers)
	}
	if s.Chi2 > 4 {
		add("residual-large", Warning, nil, "arrivals are %.1f µs off, more than their uncertainty explains: claps from near, delays that are not calibrated, or a rig that moved; the uncertainties are widened accordingly", 1e6*s.Residual)
	}
	var far []int
	for _, e := range c.res.Microphones {
		if e.MovedMM != nil && *e.MovedMM > 3*math.Sqrt(3)*1000*o.Places {
			far = append(far, e.Channel)
		}
		if e.Used && !e.Heard {
			add("channel-not-heard", Warning, []int{e.Channel}, "channel %d carries none of the sounds: left as before", e.Channel)
		}
	}
	if len(far) > 0 {
		add("moved-far", Warning, far, "%s moved by more than three times what was assumed: look for swapped channels", plural(far, "channel %s", "channels %s"))
	}
	for _, t := range c.takes {
		c.res.Findings = append(c.res.Findings, t.findings()...)
	}
	sortFindings(c.res.Findings)
}
