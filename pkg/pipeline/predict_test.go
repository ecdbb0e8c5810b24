package pipeline

import (
	"errors"
	"math"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"alidade/pkg/wav"
)

// Corrections that are right leave the rig as its geometry has it: predictions
// are those of a rig without faults, and the white one that of M equal weights,
// 10·log10(4) = 6.02 dB (J1: Van Trees 2002, section 2.6). A delay of 90 µs is
// most of a cycle at 8 kHz: taken for a fault of the aim it would cost the beam
// several decibels there.
func TestPredictionsKnowDelayCorrectionsForWhatTheyAre(t *testing.T) {
	s := newScene(t, 2, wav.PCM24)
	clean := s.must(t, Options{Toward: "60"})
	writeText(t, s.rig, `rig: four in a row
microphones:
  - {name: M1, channel: 1, at_mm: [-75, 0, 0], delay_us: 90}
  - {name: M2, channel: 2, at_mm: [-25, 0, 0], gain_db: 6}
  - {name: M3, channel: 3, at_mm: [25, 0, 0], delay_us: -90, polarity: inverted}
  - {name: M4, channel: 4, at_mm: [75, 0, 0]}
`)
	late := s.must(t, Options{Toward: "60", Overwrite: true})
	for i, b := range late.Bands {
		if b.HighHz > 0.45*sceneRate {
			continue // where the kernel ends
		}
		if math.Abs(*b.PredictedWhiteDB-6.0206) > 0.02 {
			t.Errorf("%g Hz: predicted in white noise %.3f dB, want 6.02", b.NominalHz, *b.PredictedWhiteDB)
		}
		want := clean.Bands[i]
		if math.Abs(*b.PredictedWhiteDB-*want.PredictedWhiteDB) > 0.02 || math.Abs(*b.PredictedDiffuseDB-*want.PredictedDiffuseDB) > 0.02 {
			t.Errorf("%g Hz: predicted %.3f and %.3f dB with corrections, %.3f and %.3f without",
				b.NominalHz, *b.PredictedWhiteDB, *b.PredictedDiffuseDB, *want.PredictedWhiteDB, *want.PredictedDiffuseDB)
		}
	}
}

// The pattern is bounded whatever its two sides are, and the bound is that of
// the cut: a line has half a circle.
func TestPatternsAreBounded(t *testing.T) {
	rig := filepath.Join(t.TempDir(), "rig.yaml")
	writeText(t, rig, eightRig)
	var hz []string
	for i := range 278 {
		hz = append(hz, strconv.Itoa(1000+i))
	}
	o := PredictOptions{Options: Options{Toward: "60"}, Pattern: true, StepDeg: 0.05, AtHz: strings.Join(hz, ",")} // 3601 angles
	_, err := Predict(rig, o, "test")
	var usage *UsageError
	if !errors.As(err, &usage) || !strings.Contains(err.Error(), "3601 angles at 278 frequencies, 1001078 values of the pattern: want at most 1000000") {
		t.Fatalf("got %v", err)
	}
}
