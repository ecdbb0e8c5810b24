package report

import (
	"fmt"
	"io"
	"math"
	"strings"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

// CheckHTML writes the page of an inspection: one file that needs nothing else.
func CheckHTML(w io.Writer, r *pipeline.CheckResult) error {
	about := rigFacts(r.Rig, pipeline.Steer{})
	about.Take = r.Take
	used := map[int]bool{}
	for _, m := range r.Rig.Mics {
		used[m.Channel] = m.Used
	}
	var levels []channelLevel
	for _, c := range r.Channels {
		about.Channels = append(about.Channels, pipeline.Channel{Channel: c.Channel, Name: c.Name, Used: used[c.Channel], Flags: c.Flags})
		levels = append(levels, channelLevel{c.Channel, c.Name, used[c.Channel], len(c.Flags) > 0, c.RMSDBFS, c.PeakDBFS})
	}
	for _, f := range r.Findings {
		message := f.Message
		if f.Expected != "" || f.Do != "" {
			message = f.Measured
			if f.Expected != "" {
				message += "; expected: " + f.Expected
			}
			if f.Do != "" {
				message += ". " + sentence(f.Do)
			}
		}
		about.Findings = append(about.Findings, pipeline.Finding{Code: f.Code, Severity: f.Severity, Message: message, Channels: f.Channels})
	}
	worst := map[string]state{"good": {"good", "✓"}, "caution": {"caution", "!"}, "fault": {"fault", "×"}}
	state, known := worst[r.State]
	if !known {
		state = worst["fault"]
	}
	_, words, _ := strings.Cut(clean(r.Verdict), ": ")
	v := &plainView{
		Version: clean(r.Version), Name: shorten(takeName(about), 120), Facts: shorten(clean(r.Rig.Name), 120) + ", " + facts(about), State: &state,
		Heading: checkHeading(r), Lead: []string{sentence(shorten(words, 400)) + "."}, Findings: findingViews(about),
		NoFindings: "No findings: nothing about this take or its rig stood out.",
		MadeKind:   "What was looked at",
		Stamp:      stamp(about),
	}
	channels := plainSection{ID: "channels", Heading: channelHeading(about), Kind: "Every channel as it was recorded", Rig: rigPicture(about)}
	if c := channelChart(levels); c != nil {
		channels.Charts = append(channels.Charts, *c)
	}
	channels.Table = &plainTableView{ID: "channeltable", Name: "Channels", Fold: "Figures by channel", Caption: "Levels in dBFS. A dash: not measured.",
		Head: []string{"Channel", "Microphone", "RMS", "Peak", "Peak between samples", "Clipped frames", "DC", "Drop-outs", "Repeated blocks", "Thumps", "Noise floor", "Hum, Hz", "Hum", "Wind", "Remarks"}}
	together := plainSection{ID: "together", Heading: "The channels against each other and the rig", Kind: "Level and delay after the rig's corrections",
		Table: &plainTableView{ID: "betweentable", Name: "Channels together", Fold: "Figures by channel", Caption: "A dash: not measured.",
			Head: []string{"Channel", "Microphone", "Level against the middle channel, dB", "Delay against the geometry, µs", "Clock drift, ppm", "Coherence"}}}
	var level, delay, drift []pipeline.Number
	for _, c := range r.Channels {
		name := shorten(clean(c.Name), 40)
		channels.Table.Rows = append(channels.Table.Rows, []string{fmt.Sprint(c.Channel), name, dash(cellText(c.RMSDBFS, "x_dbfs")), dash(cellText(c.PeakDBFS, "x_dbfs")), dash(cellText(c.TruePeakDBFS, "x_dbfs")),
			fmt.Sprint(c.ClippedFrames), Round(c.DC, "dc"), fmt.Sprint(c.DropOuts), fmt.Sprint(c.RepeatedBlocks), fmt.Sprint(c.Thumps), dash(cellText(c.NoiseFloorDBFS, "x_dbfs")),
			dash(cellText(c.HumHz, "x_db")), dash(cellText(c.HumDBFS, "x_dbfs")), dash(cellText(c.WindDBFS, "x_dbfs")), clean(strings.Join(c.Flags, ", "))})
		together.Table.Rows = append(together.Table.Rows, []string{fmt.Sprint(c.Channel), name, dash(cellText(c.LevelDB, "x_db")), dash(cellText(c.DelayUS, "x_db")), dash(cellText(c.DriftPPM, "x_db")), dash(cellText(c.MeanSquaredCoher, "x_db"))})
		level, delay, drift = append(level, c.LevelDB), append(delay, c.DelayUS), append(drift, c.DriftPPM)
	}
	for _, part := range []struct {
		key, name, unit, caption string
		values                   []pipeline.Number
	}{
		{"level-db", "Level against the middle channel, dB", "dB", "0 dB is as the others. A gain correction in the rig file makes up for what stands out.", level},
		{"delay-us", "Delay against the geometry, µs", "µs", "0 µs is where the place of the microphone says. One that stands out is late or early, misplaced or on another's channel; values that rise along the rig say that the spacing or the speed of sound is wrong.", delay},
		{"drift-ppm", "Clock against the others, ppm", "ppm", "0 ppm runs as the others do.", drift},
	} {
		if c := deviationChart(levels, part.values, part.key, part.name, part.unit, part.caption); c != nil {
			together.Charts = append(together.Charts, *c)
		}
	}
	if len(together.Charts) == 0 {
		together.Note = "Nothing could be held against the rig: " + shorten(clean(r.NotJudged), 300) + "."
	}
	v.Sections = []plainSection{channels, together}
	v.Made = made(&pipeline.Result{Version: r.Version, Take: r.Take, Rig: r.Rig})
	kept := v.Made[:0]
	for _, m := range v.Made {
		if m.Name != "Direction" && m.Name != "Method" && m.Name != "Weights" {
			kept = append(kept, m)
		}
	}
	v.Made = kept
	v.Definitions = definitionsOf("Levels", "Directions")
	return v.write(w)
}

// checkHeading is the result in a few words.
func checkHeading(r *pipeline.CheckResult) string {
	at := map[int]bool{}
	for _, f := range r.Findings {
		if f.Severity == pipeline.Error || f.Severity == pipeline.Warning {
			for _, c := range f.Channels {
				at[c] = true
			}
		}
	}
	switch {
	case r.State == "good":
		return "Fit to use"
	case len(at) == 1:
		return "1 channel to look at"
	case len(at) > 1:
		return fmt.Sprintf("%d channels to look at", len(at))
	case r.State == "fault":
		return "Not fit to use as it is"
	}
	return "Look before you use it"
}

// deviationChart draws a value of every channel that should be 0; nil where no
// channel has one.
func deviationChart(channels []channelLevel, values []pipeline.Number, key, name, unit, caption string) *chart {
	low, high, worst, known := 0.0, 0.0, -1, 0
	for i, v := range values {
		if v == nil {
			continue
		}
		known++
		low, high = math.Min(low, *v), math.Max(high, *v)
		if worst < 0 || math.Abs(*v) > math.Abs(*values[worst]) {
			worst = i
		}
	}
	if known == 0 {
		return nil
	}
	// Around 0, at least one unit wide, with some room.
	room := math.Max(0.12*(high-low), 0.5)
	low, high = low-room, high+room
	y := draw.Linear(high, low)
	var s draw.SVG
	s.Open("deviation", fmt.Sprintf("%s of %d channels, measured in %d: farthest from 0 is channel %d with %s %s.", name, len(channels), known, channels[worst].channel, decimals(*values[worst], 1), unit))
	for _, v := range draw.Ticks(low, high, 6) {
		s.Line(0, y.At(v), 100, y.At(v), "grid")
		s.Text(0, y.At(v), "tick left", draw.Number(v), "dx", "-8", "dy", "4")
	}
	s.Line(0, y.At(0), 100, y.At(0), "zero")
	step := 100 / float64(len(channels))
	every := (len(channels) + 15) / 16
	for i, c := range channels {
		x := (float64(i) + 0.5) * step
		if v := values[i]; v != nil {
			class := "fix"
			if c.remarks {
				class += " unsure"
			}
			s.Line(x, y.At(0), x, y.At(*v), "stem")
			s.Dot(x, y.At(*v), 4, class, "data-channel", fmt.Sprint(c.channel), "data-value", Round(*v, "x_db"))
		}
		if i%every == 0 {
			text := shorten(clean(c.name), 5)
			if text == "" || every > 1 {
				text = fmt.Sprint(c.channel)
			}
			s.Text(x, 100, "tick mid", text, "dy", "18")
		}
	}
	return &chart{Key: key, Name: name, Picture: s.Close(), Caption: caption + " Hollow dots are channels with a remark."}
}
