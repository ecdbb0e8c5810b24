package report

import (
	"bytes"
	"fmt"
	"math"
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
	c := &pipeline.CheckResult{Version: "0.1.0", Take: r.Take, Rig: r.Rig, State: "fault", Verdict: "fault: 1 fault and 1 warning; delays held against the rig over 12.0 s",
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
		"scan": string(scanPage(t, sampleScan(true))), "nothing scanned": string(scanPage(t, &pipeline.ScanResult{})),
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

// sampleScan is an invented scan of a source at 60°, with hostile texts where
// asked.
func sampleScan(hostile bool) *pipeline.ScanResult {
	r := goodTake()
	s := &pipeline.ScanResult{Version: "0.1.0", Take: r.Take, Rig: r.Rig, Segments: r.Segments, Beam: pipeline.ScanBeam{Method: "spectral", Weights: "delay-and-sum", Taper: "uniform"},
		Reference: pipeline.ScanLevel{LevelDBFS: f(-28.5)},
		Loudest:   &pipeline.ScanPlace{AzimuthDeg: 60, LevelDBFS: f(-30.25)}, BestGain: &pipeline.ScanPlace{AzimuthDeg: 60, SNRGainDB: f(7.5)}}
	for az := 0; az <= 180; az += 10 {
		d := float64(az-60) / 10
		a := pipeline.ScanAngle{AzimuthDeg: float64(az), LevelDBFS: f(-30.25 - 0.375*d*d/4), SNRGainDB: f(7.5 - d*d/8)}
		for _, hz := range nominal {
			a.Bands = append(a.Bands, pipeline.ScanBand{NominalHz: hz, LevelDBFS: f(-45 - hz/1000 - d*d*hz/40000)})
		}
		if az == 170 {
			a.SNRGainDB, a.LevelDBFS = nil, nil
		}
		s.Angles = append(s.Angles, a)
		s.Angles = append(s.Angles, pipeline.ScanAngle{AzimuthDeg: float64(az), ElevationDeg: 20, LevelDBFS: f(-40)})
	}
	if hostile {
		s.Rig.Name, s.Version, s.Beam.Ambiguity, s.Beam.Weights, s.Segments.Source = hostileText, hostileText, hostileText, hostileText, hostileText
		s.Findings = []pipeline.Finding{{Severity: hostileText, Message: hostileText}}
	}
	return s
}

func scanPage(t testing.TB, r *pipeline.ScanResult) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := ScanHTML(&b, r); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestPageOfAScanCarriesItsFigures(t *testing.T) {
	r := sampleScan(false)
	text := string(scanPage(t, r))
	for _, a := range r.Angles {
		for name, v := range map[string]pipeline.Number{"level": a.LevelDBFS, "gain": a.SNRGainDB} {
			want := fmt.Sprintf(`data-angle="%s" data-value="%s"`, Round(a.AzimuthDeg, "x_deg"), Round(deref(v), "x_db"))
			if drawn := strings.Contains(text, want); v != nil && drawn != (a.ElevationDeg == 0) {
				t.Errorf("%g°, elevation %g°: %s drawn: %v", a.AzimuthDeg, a.ElevationDeg, name, drawn)
			}
		}
	}
	if n := strings.Count(text, "data-angle="); n != 2*18 {
		t.Errorf("%d dots, want two for each of eighteen directions", n)
	}
	for _, want := range []string{"Loudest from 60.0°", "The SNR gain is 7.5 dB there", "Level by steered angle and band", "<title>"} {
		if !strings.Contains(strings.ReplaceAll(text, "the SNR", "The SNR"), want) {
			t.Errorf("the page does not say %q", want)
		}
	}
	// The map, byte for byte level.
	p := scanPicture(r)
	for column := range p.Levels.Columns {
		for row := range p.Levels.Rows {
			want := deref(r.Angles[2*column].Bands[row].LevelDBFS)
			if got := level(p.Levels, row, column); want > p.Levels.LowDB && math.Abs(got-want) > 0.13 {
				t.Fatalf("row %d, column %d: %.2f dBFS, want %.2f", row, column, got, want)
			}
		}
	}
	// Directions that are no even row have curves and no map; one has neither.
	uneven := *r
	uneven.Angles = []pipeline.ScanAngle{r.Angles[0], r.Angles[2], r.Angles[12]}
	if p := scanPicture(&uneven); p == nil || p.Levels.Rows != 0 || len(p.AnglesDeg) != 3 {
		t.Errorf("uneven: %+v", p)
	}
	uneven.Angles = uneven.Angles[:1]
	if p := scanPicture(&uneven); p != nil {
		t.Errorf("one direction: %+v", p)
	}
}

func deref(v pipeline.Number) float64 {
	if v == nil {
		return math.NaN()
	}
	return *v
}
