package pipeline

import (
	"fmt"
	"path/filepath"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/quality"
	"alidade/pkg/rig"
)

// result gathers what is known, finishes the files and commits them.
func (r *run) result() (*Result, error) {
	res := &Result{
		Schema: ReportSchema, Version: r.spec.Version, CreatedUTC: r.spec.Created,
		Rig:      r.rig.summary(),
		Steer:    r.line.summary(),
		Bands:    []Band{},
		Findings: []Finding{}, OctaveBands: []Band{},
		Direction:  r.found,
		Clocks:     r.aligned,
		Provenance: &Provenance{Command: r.spec.Command, Kernel: kernel.Name()},
	}
	if err := r.gains(res); err != nil {
		return nil, err
	}
	r.channels(res)
	r.taperTells()
	r.soundLevels(res)
	err := r.pictures(res)
	if err != nil {
		return nil, err
	}
	if res.Output, err = r.track.output(!r.set.NoVerify); err != nil {
		return nil, err
	}
	if res.Output.SHA256, err = r.digest(r.track); err != nil {
		return nil, err
	}
	if r.reference != nil {
		o, err := r.reference.output(!r.set.NoVerify)
		if err != nil {
			return nil, err
		}
		if o.SHA256, err = r.digest(r.reference); err != nil {
			return nil, err
		}
		m := r.rig.Mics[r.line.referenceMic()]
		o.Description = fmt.Sprintf("microphone %s (channel %d), untouched", m.Name, m.Channel)
		res.OtherOutputs = append(res.OtherOutputs, o)
	}
	if res.Take, err = r.take.finish(); err != nil {
		return nil, err
	}
	res.Segments.NoiseTime, res.Segments.TargetTime = r.times(res.Segments.Noise), r.times(res.Segments.Target)
	if res.Segments.Source == SegmentsIsolated {
		res.Segments.NoiseTime, res.Segments.TargetTime = nil, nil // those stretches are of other takes
	}
	if r.set.Preview {
		if err := r.preview(res); err != nil {
			return nil, err
		}
	}
	res.Findings = append(append(res.Findings, r.take.findings()...), r.findings...)
	sortFindings(res.Findings)
	if r.set.Private {
		r.hide(res)
	}

	for i, kind := range r.set.reports {
		if err := r.render[kind](r.reports[i], res); err != nil {
			return nil, fmt.Errorf("%s: %w", r.reports[i].final, err)
		}
	}
	// The track last: where it stands, its report does.
	files := append([]*staged(nil), r.reports...)
	if r.reference != nil {
		files = append(files, r.reference.file)
	}
	if err := commitAll(append(files, r.track.file)); err != nil {
		return nil, err
	}
	return res, nil
}

// summary is where and how the beam points.
func (b *beamline) summary() Steer {
	d := b.look.Direction(b.ref)
	s := Steer{
		Kind: "given", AzimuthDeg: d.AzimuthDeg(), ElevationDeg: d.ElevationDeg(),
		Ambiguity: rig.Spread(b.at).Ambiguity(),
		Method:    b.set.Method, MethodErrorDB: b.errorDB,
		Weights: b.set.Weights, Taper: b.set.taper.String(),
		UndoSpreading: b.set.UndoSpreading, GainDB: b.set.GainDB, FilterTaps: len(b.filters.H[0]),
	}
	if heading, ok := b.rig.Compass(d); ok {
		s.CompassDeg = &heading
	}
	if p := b.set.point; p != nil {
		s.Kind = "focus"
		s.PointM = &[3]float64{p.X, p.Y, p.Z}
		s.DistanceM = number(p.Distance(b.ref))
	}
	if b.set.aim != aimGiven {
		s.Kind = b.set.aim.kind()
	}
	for _, d := range b.set.nulls {
		s.NullsDeg = append(s.NullsDeg, [2]float64{d.AzimuthDeg(), d.ElevationDeg()})
	}
	if b.set.designed() {
		s.FloorDB = number(b.set.floorDB)
	}
	if b.changes != nil {
		s.Changes = &b.changes.report
	}
	if b.set.HighpassHz > 0 {
		s.HighpassHz = number(b.set.HighpassHz)
	}
	return s
}

// referenceMic is the index into the rig's microphones of the one that stands
// for the reference point: the named one, or the used one nearest to it.
func (b *beamline) referenceMic() int {
	if m, ok := b.rig.Find(b.rig.Reference); ok && b.rig.Mics[m].Use {
		return m
	}
	best := 0
	for i, p := range b.at {
		if p.Distance(b.ref) < b.at[best].Distance(b.ref)-1e-9 {
			best = i
		}
	}
	return b.used[best]
}

// silentBelowDB is how far below the median of the used channels a channel
// counts as silent over the whole take, and silentDBFS where it does whatever
// the others do.
const (
	silentBelowDB = 40
	silentDBFS    = -110
)

// channels describes every channel of the rig as it was recorded; nothing under
// --no-measure.
func (r *run) channels(res *Result) {
	res.Channels = []Channel{}
	if r.totals == nil {
		r.report(Finding{Code: "not-measured", Severity: Info, Message: "nothing was measured (--no-measure): no levels, no gains; of the channels only dead ones were looked for, by their level"})
		return
	}
	levels := r.totals.Levels()
	var used []float64
	for _, m := range r.line.used {
		used = append(used, levels[r.rig.Mics[m].Channel-1].RMSDBFS)
	}
	typical := median(used)
	var silent, clipped []int
	for i, m := range r.rig.Mics {
		c := Channel{Channel: m.Channel, Name: m.Name, Used: m.Use, Flags: append([]string{}, r.flags[m.Channel]...)}
		if slices.Contains(r.left, i) {
			c.Flags = append(c.Flags, "left-out")
		}
		if m.Channel <= len(levels) {
			l := levels[m.Channel-1]
			c.RMSDBFS, c.PeakDBFS = number(l.RMSDBFS), number(l.PeakDBFS)
			c.ClippedFrames, c.DC = l.ClippedFrames, l.DC
			if l.RMSDBFS < silentDBFS || l.RMSDBFS < typical-silentBelowDB {
				c.Flags = append(c.Flags, "silent")
				if m.Use && (!slices.Contains(r.dead, i) || len(r.dead) == len(r.line.used)) {
					silent = append(silent, m.Channel)
				}
			}
			if l.ClippedFrames > 0 {
				c.Flags = append(c.Flags, "clipped")
				if m.Use {
					clipped = append(clipped, m.Channel)
				}
			}
		} else {
			c.Flags = append(c.Flags, "not-in-take")
		}
		res.Channels = append(res.Channels, c)
	}
	if len(silent) > 0 {
		r.report(Finding{Code: "channel-silent", Severity: Warning, Channels: silent, Message: fmt.Sprintf(
			"%s nothing or is %d dB below the others, and is still part of the beam: look at its cable and gain, or leave it out with use: false in the rig file",
			plural(silent, "channel %s holds", "channels %s each hold"), silentBelowDB)})
	}
	if len(clipped) > 0 {
		// The whole take was counted here, parts of it by the inspection.
		r.findings = slices.DeleteFunc(r.findings, func(f Finding) bool {
			return f.Code == quality.CodeClipped && len(f.Channels) == 1 && slices.Contains(clipped, f.Channels[0])
		})
		r.report(Finding{Code: "channel-clipped", Severity: Warning, Channels: clipped, Message: fmt.Sprintf(
			"%s at full scale: the beam and its gain figures contain the distortion; record with less gain",
			plural(clipped, "channel %s stands", "channels %s stand"))})
	}
}

// plural puts a list of channel numbers into one or many.
func plural(list []int, one, many string) string {
	text := ""
	for i, n := range list {
		switch {
		case i == 0:
		case i == len(list)-1:
			text += " and "
		default:
			text += ", "
		}
		text += fmt.Sprint(n)
	}
	if len(list) == 1 {
		return fmt.Sprintf(one, text)
	}
	return fmt.Sprintf(many, text)
}

// digest returns the SHA-256 of a finished track, and empty if no hashes are
// wanted.
func (r *run) digest(t *track) (string, error) {
	if r.spec.NoHashes {
		return "", nil
	}
	if _, err := t.file.Seek(0, 0); err != nil {
		return "", err
	}
	sum, err := digestFile(t.file)
	if err != nil {
		return "", fmt.Errorf("%s: %w", filepath.Base(t.file.final), err)
	}
	return sum, nil
}

var _ audio.Sink = (*track)(nil)
