package pipeline

import (
	"errors"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/wav"
)

// Stretches that isolated takes stand before are not passed over in silence.
func TestStretchesThatIsolatedTakesMakeVoidAreSaid(t *testing.T) {
	s := newScene(t, 8, wav.PCM24)
	noise := filepath.Join(s.dir, "noise.wav")
	writeWAV(t, noise, sceneRate, wav.PCM24, s.mix)
	for _, c := range []struct {
		options Options
		want    string
	}{
		{Options{IsolatedNoise: noise}, ""},
		{Options{IsolatedNoise: noise, Target: "1..2"}, "--target had"},
		{Options{IsolatedNoise: noise, Noise: "0..1", Target: "1..2"}, "--noise and --target had"},
		{Options{IsolatedTarget: noise, Noise: "0..1", Weights: WeightsMinimumVariance}, ""},
		{Options{IsolatedTarget: noise, IsolatedNoise: noise, Noise: "0..1", Weights: WeightsMinimumVariance}, ""}, // the weights learn from it
	} {
		c.options.Toward, c.options.Overwrite = "60", true
		got := ""
		for _, f := range s.must(t, c.options).Findings {
			if f.Code == "stretches-unused" {
				got = f.Message
			}
		}
		if (got == "") != (c.want == "") || !strings.Contains(got, c.want) {
			t.Errorf("%+v: %q, want %q in it", c.options, got, c.want)
		}
	}
}

// A name that no microphone has, a point where none can be and air outside the
// formula are refused with what helps.
func TestRefusedNamesAndPlacesSayWhatHelps(t *testing.T) {
	s := newScene(t, 1, wav.PCM24)
	cold := -300.0
	for _, c := range []struct {
		options    Options
		what, hint string
	}{
		{Options{Toward: "60", CompareTo: "Q"}, `--compare-to "Q"`, "give one of M1, M2, M3, M4"},
		{Options{Toward: "60", ReferencePoint: "Q"}, `--reference-point "Q"`, "M4, or centre"},
		{Options{Focus: "0,0,0"}, "--focus 0,0,0: at the reference point", "metres"},
		{Options{Focus: "0.075,0,0"}, "0.0 mm from microphone M4", "metres"},
		{Options{Toward: "60", TemperatureC: &cold}, "air: temperature -300", "--speed-of-sound"},
		{Options{Toward: "60", Noise: "0..0.5,0.4..0.6"}, "--noise: 0..0.5 and 0.4..0.6 overlap", "one stretch"},
	} {
		_, err := s.run(c.options)
		var usage *UsageError
		if !errors.As(err, &usage) || !strings.Contains(err.Error(), c.what) || !strings.Contains(usage.Hint, c.hint) {
			t.Errorf("%+v: %v, want %q and a hint with %q", c.options, err, c.what, c.hint)
		}
	}
	s.onlyInputs(t)
	s.take = s.dir
	_, err := s.run(Options{Toward: "60"})
	var hinted *HintedError
	if !errors.As(err, &hinted) || !strings.Contains(err.Error(), "is a folder") || !strings.Contains(hinted.Hint, "batch") {
		t.Errorf("a folder: %v", err)
	}
}

func TestOneBandIsNotManyBands(t *testing.T) {
	if got := bandCount(1) + ", " + bandCount(2); got != "1 band, 2 bands" {
		t.Error(got)
	}
}
