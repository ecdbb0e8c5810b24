package report

import (
	"bytes"
	"crypto/sha256"
	_ "embed" // the page's own files
	"encoding/base64"
	"encoding/json"
	"fmt"
	"html/template"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

var (
	//go:embed page/take.html
	takeHTML string
	//go:embed page/page.css
	pageCSS string
	//go:embed page/page.js
	pageJS string

	takeTemplate = template.Must(template.New("take").Parse(takeHTML))
)

// Assets are links from a page to files beside it, relative to it and with
// slashes; empty ones are left out.
type Assets struct {
	Folder string // the page of the folder
	Track  string // the steered track
	Report string // the JSON report
	Bands  string // the CSV table
}

// named is a name with its text.
type named struct{ Key, Name, Value string }

type findingView struct{ Severity, Glyph, Message, Where string }

type flagView struct{ Flag, Where, Words string }

type channelView struct {
	Channel                                                      int
	Name, State, Class, Level, Against, Peak, Clipped, DC, Flags string
}

// playerView is a preview as the page takes it.
type playerView struct {
	Words, LevelOffset, TargetOffset                         string
	Jumps                                                    []jump
	Rate                                                     int
	Length, Start, ReferenceLevel, OutputLevel, TargetChange string
	Reference, Output                                        template.HTML
}

// jump is a place in the excerpt that is worth hearing, in seconds of the take.
type jump struct{ At, Words string }

// jumps are the first of the stretches that the excerpt holds, at most two of a
// kind.
func jumps(r *pipeline.Result) []jump {
	if r.Segments.Source == "isolated" {
		return nil
	}
	var list []jump
	for k, stretches := range [][][2]float64{r.Segments.Noise, r.Segments.Target} {
		count := 0
		for _, s := range stretches {
			from, to := math.Max(s[0], r.Preview.StartS), math.Min(s[1], r.Preview.EndS)
			if to-from < 0.3 || count == 2 {
				continue
			}
			count++
			list = append(list, jump{Round(from, "x_s"), [2]string{"noise, ", "target, "}[k] + clock(math.Round(10*from)/10, r.Take.DurationS)})
		}
	}
	return list
}

// takeView is everything that the template of a take's page shows.
type takeView struct {
	Policy, Version, Name, Rig, Facts, Heading, Lead, Direction, Ambiguity string
	BandHeading, TimeHeading, ChannelHeading, Command                      string
	Style                                                                  template.CSS
	Script                                                                 template.JS
	Stamp                                                                  template.HTML
	Legend                                                                 template.URL
	State                                                                  state
	Assets                                                                 Assets
	Findings, MoreFindings                                                 []findingView
	Player                                                                 *playerView
	Bands, Spectrograms, Polars, Scan                                      []chart
	RigPicture, Segments, DirectionChart, Response, Levels                 *chart
	Rows                                                                   []bandRow
	Flags                                                                  []flagView
	Totals, Made, Definitions                                              []named
	Windows                                                                [][]string
	Channels                                                               []channelView
}

// HTML writes the page of a take: one file that needs nothing else, no network
// either. It is made of the result alone, so that the JSON report gives the
// same page again.
func HTML(w io.Writer, r *pipeline.Result, assets Assets) error {
	r, err := asReported(r)
	if err != nil {
		return err
	}
	v, err := viewTake(r, assets)
	if err != nil {
		return fmt.Errorf("report: page: %w", err)
	}
	var b bytes.Buffer
	if err := takeTemplate.Execute(&b, v); err != nil {
		return fmt.Errorf("report: page: %w", err)
	}
	_, err = w.Write(b.Bytes())
	return err
}

// asReported returns a result as its JSON report has it: every figure rounded
// once, so that a page made of the report shows the same.
func asReported(r *pipeline.Result) (*pipeline.Result, error) {
	var b bytes.Buffer
	if err := JSON(&b, r); err != nil {
		return nil, err
	}
	var back pipeline.Result
	if err := json.Unmarshal(b.Bytes(), &back); err != nil {
		return nil, fmt.Errorf("report: %w", err)
	}
	return &back, nil
}

// policy is the Content-Security-Policy of a page with one style and one
// script: nothing is loaded, nothing else runs.
func policy(style, script string) string {
	hash := func(text string) string {
		sum := sha256.Sum256([]byte(text))
		return "'sha256-" + base64.StdEncoding.EncodeToString(sum[:]) + "'"
	}
	return "default-src 'none'; img-src data:; style-src " + hash(style) + "; script-src " + hash(script) + "; base-uri 'none'; form-action 'none'"
}

func viewTake(r *pipeline.Result, assets Assets) (*takeView, error) {
	v := &takeView{
		Policy: policy(pageCSS, pageJS), Style: template.CSS(pageCSS), Script: template.JS(pageJS),
		Version: clean(r.Version), Name: shorten(takeName(r), 120), Rig: shorten(clean(r.Rig.Name), 120), Facts: facts(r),
		Heading: heading(r), Lead: lead(r), Direction: pointedWords(r), Ambiguity: sentence(shorten(clean(r.Steer.Ambiguity), 400)),
		BandHeading: bandHeading(r), TimeHeading: timeHeading(r), ChannelHeading: channelHeading(r),
		Stamp: stamp(r), State: stateOf(r), Assets: assets,
		Bands: bandCharts(r), Rows: bandRows(r.Bands), RigPicture: rigPicture(r),
		Levels: channelChart(levelsOf(r.Channels)), Segments: segmentChart(r), DirectionChart: directionChart(r), Polars: polarCharts(r),
		Totals: totalsOf(r), Made: made(r), Definitions: definitions, Channels: channelViews(r), Player: playerOf(r),
	}
	list := findingViews(r)
	// Remarks wait behind a fold once there are more findings than stand beside
	// the summary; warnings never.
	const shownRemarks = 4
	for i, f := range list {
		if i >= shownRemarks && f.Severity == string(pipeline.Info) {
			v.MoreFindings = append(v.MoreFindings, f)
		} else {
			v.Findings = append(v.Findings, f)
		}
	}
	for _, note := range flagNotes {
		if where := flaggedRanges(r.Bands, note.flag); where != "" {
			v.Flags = append(v.Flags, flagView{note.flag, where, sentence(note.long) + "."})
		}
	}
	if r.Provenance != nil {
		v.Command = clean(strings.Join(r.Provenance.Command, " "))
	}
	if d := r.Direction; d != nil {
		for _, w := range d.Windows {
			if w.AzimuthDeg == nil {
				continue
			}
			v.Windows = append(v.Windows, []string{Round(w.StartS, "start_s"), Round(w.EndS, "end_s"),
				cellText(w.AzimuthDeg, "azimuth_deg"), cellText(w.ElevationDeg, "elevation_deg"), cellText(w.StandardErrorDeg, "standard_error_deg"), cellText(w.Confidence, "confidence_db")})
		}
	}
	var err error
	if v.Spectrograms, err = spectrogramCharts(r); err != nil {
		return nil, err
	}
	if v.Scan, err = scanCharts(r); err != nil {
		return nil, err
	}
	if v.Response, err = responseChart(r); err != nil {
		return nil, err
	}
	legend, err := draw.Legend()
	if err != nil {
		return nil, err
	}
	v.Legend = template.URL(legend)
	return v, nil
}

// pointedWords says where the beam was pointed.
func pointedWords(r *pipeline.Result) string {
	switch r.Steer.Kind {
	case "followed":
		return "Followed the source; on the whole it lay at " + directionWords(r) + "."
	case "estimated", "focus-estimated":
		return "Pointed to " + directionWords(r) + ", as found in the take."
	}
	return "Pointed to " + directionWords(r) + "."
}

// takeName is the file name of a take's first file.
func takeName(r *pipeline.Result) string {
	if len(r.Take.Files) == 0 {
		return "take"
	}
	p := strings.ReplaceAll(clean(r.Take.Files[0].Path), `\`, "/")
	name := p[strings.LastIndexByte(p, '/')+1:]
	if n := len(r.Take.Files); n > 1 {
		name += fmt.Sprintf(" and %d more", n-1)
	}
	return name
}

func facts(r *pipeline.Result) string {
	parts := []string{fmt.Sprintf("%d of %d microphones", r.Rig.MicrophonesUsed, len(r.Rig.Mics)), clock(math.Round(r.Take.DurationS*10)/10, r.Take.DurationS)}
	if r.Take.StartTime != "" {
		parts = append(parts, "from "+clean(r.Take.StartTime))
	}
	return strings.Join(parts, ", ")
}

// sentence begins text with a capital letter.
func sentence(text string) string {
	if text == "" {
		return ""
	}
	runes := []rune(text)
	return strings.ToUpper(string(runes[:1])) + string(runes[1:])
}

func findingViews(r *pipeline.Result) []findingView {
	glyphs := map[pipeline.Severity]string{pipeline.Error: "×", pipeline.Warning: "!", pipeline.Info: "i"}
	var list []findingView
	for _, f := range sortedFindings(r) {
		v := findingView{Severity: string(f.Severity), Glyph: glyphs[f.Severity], Message: sentence(shorten(clean(f.Message), 600))}
		if _, known := glyphs[f.Severity]; !known {
			v.Severity, v.Glyph = "info", "i"
		}
		var where []string
		for _, c := range f.Channels {
			where = append(where, strconv.Itoa(c))
		}
		if len(where) > 0 {
			v.Where = "Channels " + strings.Join(where, ", ")
			if len(where) == 1 {
				v.Where = "Channel " + where[0]
			}
		} else if n := len(f.Bands); n > 0 {
			v.Where = "Bands " + rangeWords(slices.Min(f.Bands), slices.Max(f.Bands))
			if n == 1 {
				v.Where = "Band " + frequencyWords(f.Bands[0])
			}
		}
		list = append(list, v)
	}
	return list
}

func totalsOf(r *pipeline.Result) []named {
	o := r.Overall
	var list []named
	add := func(key, name string, v pipeline.Number, ci pipeline.Interval) {
		text := levelText(v)
		if v != nil && ci != nil {
			text += fmt.Sprintf(" (%s to %s)", decimals(ci[0], 1), decimals(ci[1], 1))
		}
		list = append(list, named{key, name, text})
	}
	add("snr_gain_db", "SNR gain", o.SNRGainDB, o.SNRGainCI95)
	add("speech_weighted_snr_gain_db", "SNR gain, speech-weighted", o.SpeechWeightedSNRGainDB, nil)
	best := "SNR gain over the best microphone"
	if o.BestMicrophone != "" {
		best += ", " + shorten(clean(o.BestMicrophone), 24)
	}
	add("snr_gain_over_best_microphone_db", best, o.OverBestMicrophoneDB, nil)
	add("noise_reduction_db", "Noise reduction", o.NoiseReductionDB, o.NoiseReductionCI95)
	add("noise_reduction_a_weighted_db", "Noise reduction, A-weighted", o.NoiseReductionADB, nil)
	add("target_change_db", "Target change", o.TargetChangeDB, o.TargetChangeCI95)
	return list
}

func channelViews(r *pipeline.Result) []channelView {
	var levels []float64
	for _, c := range r.Channels {
		if c.Used && c.RMSDBFS != nil {
			levels = append(levels, *c.RMSDBFS)
		}
	}
	slices.Sort(levels)
	var list []channelView
	for _, c := range r.Channels {
		v := channelView{Channel: c.Channel, Name: shorten(clean(c.Name), 60), State: "✓ in use", Class: "good", Level: bothLevels(c), Against: "–", Peak: levelText(c.PeakDBFS),
			Clipped: strconv.FormatInt(c.ClippedFrames, 10), DC: strconv.FormatFloat(c.DC, 'g', 2, 64), Flags: clean(strings.Join(c.Flags, ", "))}
		switch {
		case !c.Used:
			v.State, v.Class = "× left out", "fault"
		case len(c.Flags) > 0:
			v.State, v.Class = "! look", "caution"
		}
		if c.RMSDBFS != nil && len(levels) > 0 {
			n := len(levels)
			v.Against = decimals(*c.RMSDBFS-(levels[(n-1)/2]+levels[n/2])/2, 1)
		}
		list = append(list, v)
	}
	return list
}

// gainOfExcerpt says what was done to the level of both excerpts.
func gainOfExcerpt(db float64) string {
	switch {
	case db >= 0.05:
		return "raised by " + decimals(db, 1) + " dB"
	case db <= -0.05:
		return "lowered by " + decimals(-db, 1) + " dB"
	}
	return "at their level"
}

// playerOf prepares the excerpts; nil where the report carries none.
func playerOf(r *pipeline.Result) *playerView {
	p := r.Preview
	if p == nil || len(p.Reference.Audio) == 0 || len(p.Output.Audio) == 0 || p.EndS <= p.StartS {
		return nil
	}
	v := &playerView{
		Rate: p.SampleRateHz, Length: Round(p.EndS-p.StartS, "x_s"), Start: Round(p.StartS, "x_s"),
		ReferenceLevel: Round(p.Reference.LevelDBFS, "x_dbfs"), OutputLevel: Round(p.Output.LevelDBFS, "x_dbfs"), TargetChange: "0",
		// Base64 has no character that HTML knows.
		Reference: template.HTML(base64.StdEncoding.EncodeToString(p.Reference.Audio)),
		Output:    template.HTML(base64.StdEncoding.EncodeToString(p.Output.Audio)),
	}
	v.Jumps = jumps(r)
	before := "the reference"
	if g := r.Pictures; g != nil && g.Reference != nil && g.Reference.Of != "" {
		before = "microphone " + shorten(clean(g.Reference.Of), 24)
	}
	v.Words = fmt.Sprintf("%s s of the take from %s on: before is %s, after is the steered track, both %s, at most 6 dB below full scale.",
		draw.Number(p.EndS-p.StartS), clock(math.Round(10*p.StartS)/10, r.Take.DurationS), before, gainOfExcerpt(p.GainDB))
	down := func(difference float64) string {
		switch text := decimals(math.Abs(difference), 1) + " dB down"; {
		case math.Abs(difference) < 0.05:
			return "no change"
		case difference > 0:
			return "after " + text
		default:
			return "before " + text
		}
	}
	v.LevelOffset = down(p.Output.LevelDBFS - p.Reference.LevelDBFS)
	v.TargetOffset = down(0)
	if t := r.Overall.TargetChangeDB; t != nil {
		v.TargetChange, v.TargetOffset = Round(*t, "x_db"), down(*t)
	}
	return v
}

// bothLevels is the level of a channel in dBFS, and in dB SPL where it is known.
func bothLevels(c pipeline.Channel) string {
	if c.RMSDBSPL == nil {
		return levelText(c.RMSDBFS)
	}
	return levelText(c.RMSDBFS) + " (" + levelText(c.RMSDBSPL) + " dB SPL)"
}
