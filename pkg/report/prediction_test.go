package report

import (
	"bytes"
	"strings"
	"testing"

	"github.com/jedib0t/go-pretty/v6/text"

	"alidade/pkg/pipeline"
)

// What does not exist is said to be so in text, and empty in the table; every
// line keeps to the width.
func TestPredictionSaysWhatIsNotDefined(t *testing.T) {
	v := func(x float64) *float64 { return &x }
	p := &pipeline.Prediction{
		Answer: []string{strings.Repeat("a long answer ", 12)},
		Cut:    pipeline.Cut{Name: "azimuth"},
		Frequencies: []pipeline.PredictedFrequency{
			{Hz: 251.188643150958, FirstNullsDeg: []float64{}, GratingLobesDeg: []float64{}, WhiteNoiseGainDB: v(6.0206)},
			{Hz: 4000, BeamwidthDeg: v(12.3456), FirstNullsDeg: []float64{20.5, 101.25}, HighestSideLobeDB: v(-12.97), SideLobeCount: 3,
				GratingLobesDeg: []float64{1, 2, 3}, DirectivityIndexDB: v(8), WhiteNoiseGainDB: v(6), DiffuseGainDB: v(8), NearFieldReachM: v(2.5)},
		},
		Bands: []pipeline.PredictedBand{{NominalHz: 250, CentreHz: 251.188643150958}},
	}
	p.Rig.Name, p.Steer.Weights, p.Steer.Taper = "a rig\x1b[2J of four", "delay-and-sum", "uniform"
	for _, width := range []int{0, 60, 100} {
		var b bytes.Buffer
		if err := Prediction(&b, p, width); err != nil {
			t.Fatal(err)
		}
		if width == 0 {
			width = 80
		}
		for _, line := range strings.Split(b.String(), "\n") {
			if text.StringWidthWithoutEscSequences(line) > width {
				t.Errorf("width %d: %q", width, line)
			}
		}
		for _, want := range []string{"250 Hz", "not defined", "12.3", "1.0 2.0 +1", "-13.0 (3)", "2.50 m"} {
			if !strings.Contains(b.String(), want) {
				t.Errorf("width %d: no %q in\n%s", width, want, b.String())
			}
		}
		if strings.Contains(b.String(), "\x1b") {
			t.Error("a name steers the terminal")
		}
	}
	var b bytes.Buffer
	if err := PredictionCSV(&b, p); err != nil {
		t.Fatal(err)
	}
	want := "hz,beamwidth_deg,first_nulls_deg,highest_side_lobe_db,side_lobe_count,grating_lobes_deg,directivity_index_db,white_noise_gain_db,diffuse_gain_db,near_field_reach_m\n" +
		"251.188643,,,,0,,,6.021,,\n4000,12.346,20.5 101.25,-12.97,3,1 2 3,8,6,8,2.5\n"
	if b.String() != want {
		t.Errorf("table\n%s, want\n%s", b.String(), want)
	}
}

// A scan of more directions than lines draws the loudest of neighbours; what
// was not measured is a dash and an empty cell.
func TestScanIsDrawnWithinItsLines(t *testing.T) {
	v := func(x float64) *float64 { return &x }
	r := &pipeline.ScanResult{}
	for i := range 500 {
		a := pipeline.ScanAngle{AzimuthDeg: float64(i) / 2, Bands: []pipeline.ScanBand{{NominalHz: 1000, CentreHz: 1000}}}
		if i > 3 {
			a.LevelDBFS = v(-60 + float64(i%100)/10)
		}
		r.Angles = append(r.Angles, a)
	}
	var b bytes.Buffer
	if err := ScanSummary(&b, r, 70); err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimRight(b.String(), "\n"), "\n")
	if len(lines) > ScanRows+6 || !strings.Contains(b.String(), "gain not measured") || !strings.Contains(b.String(), "-60.0 dBFS to -50.1 dBFS") {
		t.Errorf("%d lines\n%s", len(lines), b.String())
	}
	for _, line := range lines {
		if text.StringWidthWithoutEscSequences(line) > 70 {
			t.Errorf("too wide: %q", line)
		}
	}
	b.Reset()
	if err := ScanCSV(&b, r); err != nil || !strings.Contains(b.String(), "\n0,0,,,,,,,,,\n0,0,1000,1000,,,,,,,\n") {
		t.Errorf("table, %v:\n%.300s", err, b.String())
	}
}
