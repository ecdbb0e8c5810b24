package pipeline

import (
	"context"
	"fmt"
	"slices"

	"alidade/pkg/quality"
)

// CheckResult is what an inspection of a take found, as plain data.
type CheckResult struct {
	Version   string         `json:"version"`
	Take      Take           `json:"take"`
	Rig       RigSummary     `json:"rig"`
	State     string         `json:"state"` // good, caution or fault
	Verdict   string         `json:"verdict"`
	Windows   int            `json:"windows"`              // stretches that were held against the geometry
	JudgedS   float64        `json:"judged_s"`             // how long they are together
	NotJudged string         `json:"not_judged,omitempty"` // why polarity, order and delays were not judged
	Channels  []CheckChannel `json:"channels"`
	Findings  []CheckFinding `json:"findings"`
}

// CheckChannel is what was measured on one channel.
type CheckChannel struct {
	Channel          int      `json:"channel"`
	Name             string   `json:"name"`
	RMSDBFS          Number   `json:"rms_dbfs"`
	RMSDBSPL         Number   `json:"rms_db_spl,omitempty"` // where the rig knows the sensitivity
	PeakDBFS         Number   `json:"peak_dbfs"`
	TruePeakDBFS     Number   `json:"true_peak_dbfs"`
	ClippedFrames    int64    `json:"clipped_frames"`
	DC               float64  `json:"dc"`
	DropOuts         int64    `json:"drop_outs"`
	RepeatedBlocks   int64    `json:"repeated_blocks"`
	Thumps           int64    `json:"thumps"`
	NoiseFloorDBFS   Number   `json:"noise_floor_dbfs"`
	NoiseFloorDBSPL  Number   `json:"noise_floor_db_spl,omitempty"`
	HumHz            Number   `json:"hum_hz"`
	HumDBFS          Number   `json:"hum_dbfs"`
	WindDBFS         Number   `json:"wind_dbfs"`
	LevelDB          Number   `json:"level_db"` // against the middle channel, corrected
	DelayUS          Number   `json:"delay_us"` // against the geometry, corrected
	DriftPPM         Number   `json:"drift_ppm"`
	MeanSquaredCoher Number   `json:"coherence"` // mean squared, with the other channels
	Flags            []string `json:"flags"`
}

// CheckFinding is a finding with what stands behind it.
type CheckFinding struct {
	Code     string   `json:"code"`
	Severity Severity `json:"severity"`
	Message  string   `json:"message"`
	Channels []int    `json:"channels,omitempty"`
	Measured string   `json:"measured"`
	Expected string   `json:"expected"`
	Do       string   `json:"do"`
}

// Check inspects one take against its rig. Of the options it heeds those on
// files and air, and Overwrite for the sheets, which are staged before the work
// and appear with the result. The errors are those of Run.
func Check(ctx context.Context, spec Spec, watch Watch, show ...Sheet[*CheckResult]) (res *CheckResult, err error) {
	l, err := loadRig(spec.RigPath, spec.Options)
	if err != nil {
		return nil, err
	}
	t, err := openTake(spec.Take, spec.Options.joining(), true)
	if err != nil {
		return nil, err
	}
	defer func() { err = joinErrors(err, t.close()) }()
	r := &run{ctx: ctx, spec: spec, rig: l, watch: watch, take: t}
	if err := r.fits(); err != nil {
		return nil, err
	}
	if err := t.sounds(); err != nil {
		return nil, err
	}
	shown, err := stageSheets(show, spec.Options.Overwrite, slices.Concat(t.paths(), l.files), nil)
	if err != nil {
		return nil, err
	}
	defer shown.abandon()
	found, err := r.inspectAll([][2]int64{{0, t.header.Frames}})
	if err != nil {
		return nil, err
	}
	res = &CheckResult{Version: spec.Version, Rig: l.summary(), State: found.State, Windows: found.Windows, JudgedS: found.JudgedS, NotJudged: found.NotJudged}
	if res.Take, err = t.finish(); err != nil {
		return nil, err
	}
	for _, c := range found.Channels {
		out := CheckChannel{
			Channel: c.Channel, Name: c.Name, RMSDBFS: number(c.RMSDBFS), PeakDBFS: number(c.PeakDBFS), TruePeakDBFS: number(c.TruePeakDBFS),
			ClippedFrames: c.ClippedFrames, DC: c.DC, DropOuts: c.DropOuts, RepeatedBlocks: c.Repeats, Thumps: c.Thumps,
			NoiseFloorDBFS: c.NoiseDBFS, HumDBFS: c.HumDBFS, WindDBFS: c.WindDBFS, LevelDB: c.LevelDB, DelayUS: c.DelayUS,
			DriftPPM: c.DriftPPM, MeanSquaredCoher: c.Coherence, Flags: c.Flags,
		}
		out.RMSDBSPL, out.NoiseFloorDBSPL = l.channelSPL(c.Channel, out.RMSDBFS), l.channelSPL(c.Channel, out.NoiseFloorDBFS)
		if c.HumHz > 0 {
			out.HumHz = number(c.HumHz)
		}
		res.Channels = append(res.Channels, out)
	}
	res.Findings = []CheckFinding{}
	for _, f := range found.Findings {
		res.Findings = append(res.Findings, CheckFinding{f.Code, Severity(f.Severity), f.Message(), f.Channels, f.Measured, f.Expected, f.Do})
	}
	for _, f := range t.findings() {
		res.Findings = append(res.Findings, CheckFinding{Code: f.Code, Severity: f.Severity, Message: f.Message, Channels: f.Channels, Measured: f.Message})
		if f.Severity == Warning && res.State == quality.Good {
			res.State = quality.Caution
		}
	}
	res.Verdict = verdict(res)
	if err := shown.finish(res); err != nil {
		return nil, err
	}
	return res, nil
}

// verdict is the state in one line.
func verdict(r *CheckResult) string {
	errors, warnings := 0, 0
	for _, f := range r.Findings {
		switch f.Severity {
		case Error:
			errors++
		case Warning:
			warnings++
		}
	}
	count := func(n int, what string) string {
		if n == 1 {
			return "1 " + what
		}
		return fmt.Sprintf("%d %ss", n, what)
	}
	judged := fmt.Sprintf("delays held against the rig over %.1f s", r.JudgedS)
	if r.NotJudged != "" {
		judged = "order, polarity and delays not judged: " + r.NotJudged
	}
	switch {
	case errors > 0:
		return fmt.Sprintf("fault: %s and %s; %s", count(errors, "fault"), count(warnings, "warning"), judged)
	case warnings > 0:
		return fmt.Sprintf("caution: %s; %s", count(warnings, "warning"), judged)
	}
	return "good: nothing wrong was found; " + judged
}
