package report

import (
	"bytes"
	"strings"
	"testing"

	"alidade/pkg/pipeline"
)

const hostileText = `<script>window.hacked=1</script><img src=x onerror="window.hacked=1">"'>` + "\u202e\u0000\x1b[31m"

// samplePrediction is an invented prediction, with hostile texts where asked.
func samplePrediction(hostile bool) *pipeline.Prediction {
	r := goodTake()
	p := &pipeline.Prediction{
		Version: "0.1.0", Rig: r.Rig, Steer: r.Steer, SpeedOfSoundMS: 342, SampleRateHz: 48000, Picture: lineResponse(),
		Answer: []string{"In diffuse noise this beam helps from the 400 Hz band up."}, GratingFreeBelowHz: f(5720), Cut: pipeline.Cut{Name: "angle from the axis of the line"},
		Findings: []pipeline.Finding{{Code: "free-field", Severity: pipeline.Info, Message: "microphones are taken as omnidirectional", Bands: []float64{125.892541}}},
	}
	for _, b := range r.Bands {
		p.Bands = append(p.Bands, pipeline.PredictedBand{NominalHz: b.NominalHz, CentreHz: b.CentreHz, LowHz: b.LowHz, HighHz: b.HighHz, PredictedWhiteDB: b.PredictedWhiteDB, PredictedDiffuseDB: b.PredictedDiffuseDB, Flags: b.Flags})
		p.Frequencies = append(p.Frequencies, pipeline.PredictedFrequency{Hz: b.CentreHz, BeamwidthDeg: f(b.CentreHz / 100), DirectivityIndexDB: f(3.25), FirstNullsDeg: []float64{20.5, 100.25}})
	}
	level := pipeline.TolerantLevel{AngleDeg: 60, ExpectedDB: f(-0.1), P5DB: f(-0.4), P50DB: f(-0.1), P95DB: f(0.2)}
	p.Tolerance = &pipeline.Tolerance{PlacementMM: 2, Trials: 100, Seed: 1, Frequencies: []pipeline.ToleranceAt{{Hz: 1000, Steered: level}}}
	if hostile {
		p.Rig.Name, p.Version, p.Cut.Name, p.Steer.Ambiguity = hostileText, hostileText, hostileText, hostileText
		p.Answer, p.Findings[0].Message = []string{hostileText}, hostileText
	}
	return p
}

// sampleCheck is an invented inspection, with hostile texts where asked.
func sampleCheck(hostile bool) *pipeline.CheckResult {
	r := goodTake()
	c := &pipeline.CheckResult{Version: "0.1.0", Take: r.Take, Rig: r.Rig, State: "fault", Verdict: "fault: 1 fault and 1 warning; delays held against the rig over 12 seconds",
		Findings: []pipeline.CheckFinding{
			{Code: "channel-dead", Severity: pipeline.Error, Message: "m", Channels: []int{2}, Measured: "channel 2 (M2) lies 58 dB below the middle channel", Expected: "within 35 dB", Do: "look at its cable"},
			{Code: "level-mismatch", Severity: pipeline.Warning, Message: "m", Channels: []int{6}, Measured: "channel 6 (M6) is 8.9 dB softer", Do: "set its gain"},
		}}
	for i, ch := range r.Channels {
		k := pipeline.CheckChannel{Channel: ch.Channel, Name: ch.Name, RMSDBFS: ch.RMSDBFS, PeakDBFS: ch.PeakDBFS, LevelDB: f(float64(i) - 3.5), DelayUS: f(1.25 * float64(i)), MeanSquaredCoher: f(0.5)}
		if i == 1 {
			k.RMSDBFS, k.PeakDBFS, k.LevelDB, k.DelayUS, k.Flags = nil, nil, nil, nil, []string{"channel-dead"}
		}
		c.Channels = append(c.Channels, k)
	}
	if hostile {
		c.Rig.Name, c.Verdict, c.State, c.NotJudged, c.Version = hostileText, "fault: "+hostileText, hostileText, hostileText, hostileText
		c.Take.Files[0].Path = hostileText
		for i := range c.Channels {
			c.Channels[i].Name, c.Channels[i].Flags = hostileText, []string{hostileText}
		}
		c.Findings[0].Measured, c.Findings[0].Do = hostileText, hostileText
	}
	return c
}

func predictionPage(t testing.TB, p *pipeline.Prediction) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := PredictionHTML(&b, p); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func checkPage(t testing.TB, r *pipeline.CheckResult) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := CheckHTML(&b, r); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestHostileTextsStayTextsOnEveryPage(t *testing.T) {
	for name, text := range map[string]string{
		"prediction": string(predictionPage(t, samplePrediction(true))), "check": string(checkPage(t, sampleCheck(true))),
		"nothing known": string(checkPage(t, &pipeline.CheckResult{})), "nothing predicted": string(predictionPage(t, &pipeline.Prediction{})),
	} {
		if n := strings.Count(strings.ToLower(text), "<script"); n != 1 {
			t.Errorf("%s: %d scripts, want its own", name, n)
		}
		for _, bad := range []string{"<img src=x", "\u202e", "\x1b", "\x00"} {
			if strings.Contains(text, bad) {
				t.Errorf("%s: %q got through", name, bad)
			}
		}
	}
}

// The charts of an inspection carry its figures, and say what was found.
func TestPageOfAnInspectionCarriesItsFigures(t *testing.T) {
	r := sampleCheck(false)
	text := string(checkPage(t, r))
	for _, want := range []string{"2 channels to look at", "Channel 2 (M2) lies 58 dB below the middle channel; expected: within 35 dB. Look at its cable", `class="state fault"`} {
		if !strings.Contains(text, want) {
			t.Errorf("the page does not say %q", want)
		}
	}
	for _, c := range r.Channels {
		for key, v := range map[string]pipeline.Number{"level-db": c.LevelDB, "delay-us": c.DelayUS} {
			if v != nil && !strings.Contains(text, `data-value="`+Round(*v, "x_db")+`"`) {
				t.Errorf("channel %d: %s %s is in no chart", c.Channel, key, Round(*v, "x_db"))
			}
		}
	}
	if n := strings.Count(text, `class="fix`); n != 2*7 {
		t.Errorf("%d dots, want two for each of seven channels", n)
	}
}

func TestPageOfAPredictionCarriesItsFigures(t *testing.T) {
	p := samplePrediction(false)
	text := string(predictionPage(t, p))
	for _, b := range p.Bands {
		if !strings.Contains(text, `data-value="`+Round(*b.PredictedDiffuseDB, "x_db")+`"`) {
			t.Errorf("%g Hz: %s dB is in no chart", b.NominalHz, Round(*b.PredictedDiffuseDB, "x_db"))
		}
	}
	for _, want := range []string{"What this rig can do toward 60.0°", "Band 125 Hz", "20.5 100.2", "-0.4 to 0.2", `id="response"`, "2 mm of placement"} {
		if !strings.Contains(text, want) {
			t.Errorf("the page does not say %q", want)
		}
	}
}
