package pipeline

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

func (s scene) scan(o ScanOptions, watch Watch) (*ScanResult, error) {
	return RunScan(context.Background(), ScanSpec{Take: []string{s.take}, RigPath: s.rig, Options: o, Version: "test"}, watch)
}

func (s scene) mustScan(t *testing.T, o ScanOptions) *ScanResult {
	t.Helper()
	r, err := s.scan(o, Watch{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// from is a scan over azimuths.
func from(a, b, step float64) ScanOptions { return ScanOptions{From: &a, To: &b, Step: &step} }

// burst are the stretches of a scene.
var burst = Options{Noise: "0..1,2..3,4..5,6..7", Target: "1..2,3..4,5..6,7..8"}

// What scan says of a direction is what steer measures there: gains within 0.25
// dB in bands with enough sound, and level and gain of the whole closer.
func TestScanMeasuresWhatSteerDoes(t *testing.T) {
	s := newScene(t, 8, wav.Float32)
	o := from(0, 180, 45)
	o.Options, o.Intervals = burst, true
	scanned := s.mustScan(t, o)
	if len(scanned.Angles) != 5 || scanned.Segments.Source != SegmentsGiven {
		t.Fatalf("%d angles, segments %s", len(scanned.Angles), scanned.Segments.Source)
	}
	for _, i := range []int{1, 2} {
		a := scanned.Angles[i]
		options := burst
		options.Toward, options.Reports = directionText(directionOf(a)), "none"
		r := s.must(t, options)
		compared := 0
		for b, band := range r.Bands {
			got := a.Bands[b]
			if band.SNRGainDB == nil || got.SNRGainDB == nil || hasFlag(band, "sparse") || band.CentreHz < 350 {
				continue
			}
			compared++
			if math.Abs(*band.NoiseReductionDB-*got.NoiseReductionDB) > 0.25 || math.Abs(*band.SNRGainDB-*got.SNRGainDB) > 0.35 {
				t.Errorf("%g°, %g Hz: noise reduction %.3f and gain %.3f dB, steer has %.3f and %.3f", a.AzimuthDeg, band.NominalHz,
					*got.NoiseReductionDB, *got.SNRGainDB, *band.NoiseReductionDB, *band.SNRGainDB)
			}
			if ci := got.SNRGainCI95; ci == nil || ci[0] > *got.SNRGainDB || ci[1] < *got.SNRGainDB {
				t.Errorf("%g°, %g Hz: gain %v with interval %v", a.AzimuthDeg, band.NominalHz, *got.SNRGainDB, ci)
			}
		}
		if compared < 10 {
			t.Errorf("%g°: %d bands compared", a.AzimuthDeg, compared)
		}
		if math.Abs(*a.SNRGainDB-*r.Overall.SNRGainDB) > 0.1 {
			t.Errorf("%g°: gain %.3f dB, steer has %.3f", a.AzimuthDeg, *a.SNRGainDB, *r.Overall.SNRGainDB)
		}
	}
	if p := scanned.Loudest; p == nil || p.AzimuthDeg != 90 || scanned.BestGain == nil || scanned.BestGain.AzimuthDeg != 90 {
		t.Errorf("loudest %+v, best %+v, want broadside", p, scanned.BestGain)
	}
}

func directionOf(a ScanAngle) (d rig.Direction) {
	d.Azimuth, d.Elevation = a.AzimuthDeg*math.Pi/180, a.ElevationDeg*math.Pi/180
	return d
}

// Several passes, where memory holds one direction only, give the same figures,
// with given stretches and with those that had to be found.
func TestScanInSeveralPassesIsTheSame(t *testing.T) {
	s := newScene(t, 16, wav.PCM16)
	for name, options := range map[string]Options{"given": burst, "found": {}} {
		o := from(60, 120, 30)
		o.Options = options
		whole := s.mustScan(t, o)
		before := scanBytes
		scanBytes = 1
		parts := s.mustScan(t, o)
		scanBytes = before
		if !reflect.DeepEqual(whole, parts) {
			t.Errorf("%s: several passes give other figures", name)
		}
		if whole.Angles[1].SNRGainDB == nil {
			t.Errorf("%s: no gain: %+v", name, whole.Findings)
		}
		if name == "found" && whole.Segments.Source != SegmentsAutomatic {
			t.Errorf("segments %s", whole.Segments.Source)
		}
	}
}

// The tracks of a scan are those of steer to the rounding of the transforms. A
// scan that was stopped leaves whole tracks only, and the same command goes on:
// what is there stays, and all bytes are those of one run.
func TestTracksOfAScanAreResumed(t *testing.T) {
	s := newScene(t, 3, wav.PCM24)
	o := from(0, 170, 10) // two passes
	o.NoMeasure = true
	o.Tracks = filepath.Join(s.dir, "whole")
	whole := s.mustScan(t, o)
	options := Options{Toward: "60", NoMeasure: true, Reports: "none", Out: filepath.Join(s.dir, "one.wav")}
	s.must(t, options)
	one, many := readTrack(t, options.Out), readTrack(t, whole.Angles[6].Track.Path)
	worst := 0.0
	for i, v := range one.Channel(0) {
		worst = math.Max(worst, math.Abs(float64(v-many.Channel(0)[i])))
	}
	if worst > 3.0/(1<<23) {
		t.Errorf("largest difference from the track of steer %g, want a step of 24 bits or two", worst)
	}

	o.Tracks = filepath.Join(s.dir, "resumed")
	ctx, cancel := context.WithCancelCause(context.Background())
	stop := errors.New("stopped for the test")
	spec := ScanSpec{Take: []string{s.take}, RigPath: s.rig, Options: o, Version: "test"}
	_, err := RunScan(ctx, spec, Watch{Progress: func(stage string, done, _ int64) {
		if strings.HasPrefix(stage, "steering tracks 17") && done > 0 {
			cancel(stop)
		}
	}})
	if !errors.Is(err, stop) {
		t.Fatalf("got %v, want the cause of the stop", err)
	}
	left, err := filepath.Glob(filepath.Join(o.Tracks, "*"))
	hidden, _ := filepath.Glob(filepath.Join(o.Tracks, ".*"))
	if err != nil || len(left) != 32 || len(hidden) != 0 {
		t.Fatalf("%d files and %d hidden ones left, want 16 tracks with their records", len(left), len(hidden))
	}
	// One is lost, one is damaged, a record stands alone.
	if err := errors.Join(os.Remove(filepath.Join(o.Tracks, "take_az+030.0.wav")), os.Truncate(filepath.Join(o.Tracks, "take_az+040.0.wav"), 1000)); err != nil {
		t.Fatal(err)
	}
	if _, err := s.scan(o, Watch{}); err == nil || !strings.Contains(err.Error(), "take_az+040.0.wav: exists already, and was not made from this take") {
		t.Fatalf("got %v for a damaged track", err)
	}
	if err := os.Remove(filepath.Join(o.Tracks, "take_az+040.0.wav")); err != nil {
		t.Fatal(err)
	}
	resumed := s.mustScan(t, o)
	kept := 0
	for i, a := range resumed.Angles {
		if a.Track.Kept {
			kept++
		}
		if a.Track.SHA256 != whole.Angles[i].Track.SHA256 || a.Track.SHA256 == "" {
			t.Errorf("%g°: other bytes than in one run", a.AzimuthDeg)
		}
	}
	if kept != 14 {
		t.Errorf("%d tracks kept, want 14", kept)
	}
	// Another taper is another track.
	o.Taper = "hann"
	if _, err := s.scan(o, Watch{}); err == nil || !strings.Contains(err.Error(), "exists already") {
		t.Errorf("got %v for another taper", err)
	}
}

func readTrack(t *testing.T, path string) audio.Block {
	t.Helper()
	in, err := openInput(path, false)
	if err != nil {
		t.Fatal(err)
	}
	defer in.Close()
	r, err := wav.Open(in, in.info.Size())
	if err != nil {
		t.Fatal(err)
	}
	b, err := audio.ReadAll(r)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// Weights that depend on frequency, isolated takes and minimum variance go
// through a scan as through steer.
func TestScanWithDesignedWeights(t *testing.T) {
	s := newScene(t, 8, wav.PCM24)
	o := from(80, 100, 20)
	o.Options = burst
	for _, weights := range []string{WeightsSuperdirective, WeightsMinimumVariance} {
		o.Weights = weights
		r := s.mustScan(t, o)
		options := o.Options
		options.Toward, options.Reports, options.Out = "80", "none", filepath.Join(s.dir, weights+".wav")
		want := s.must(t, options)
		if got := r.Angles[0].SNRGainDB; got == nil || math.Abs(*got-*want.Overall.SNRGainDB) > 0.2 {
			t.Errorf("%s: gain %v, steer has %.3f", weights, got, *want.Overall.SNRGainDB)
		}
	}
	// The take itself as noise and as target alone: a gain of nothing.
	o = from(90, 90, 1)
	o.IsolatedNoise, o.IsolatedTarget = s.take, s.take
	if r := s.mustScan(t, o); r.Segments.Source != SegmentsIsolated || r.Angles[0].SNRGainDB == nil || math.Abs(*r.Angles[0].SNRGainDB) > 1e-9 {
		t.Errorf("segments %s, gain %v of the same take as noise and target", r.Segments.Source, r.Angles[0].SNRGainDB)
	}
}

func TestDirectionsOfAScan(t *testing.T) {
	v := func(x float64) *float64 { return &x }
	for name, c := range map[string]struct {
		o           ScanOptions
		count       int
		first, last string
	}{
		"both ends":    {from(0, 180, 5), 37, "0,0", "180,0"},
		"end missed":   {from(0, 10, 4), 3, "0,0", "8,0"},
		"one":          {from(30, 30, 1), 1, "30,0", "30,0"},
		"whole turn":   {from(-180, 180, 90), 4, "180,0", "90,0"},
		"thirds":       {from(0, 1, 0.1), 11, "0,0", "1,0"},
		"elevation":    {ScanOptions{From: v(0), To: v(20), Step: v(10), Elevation: v(-15)}, 3, "0,-15", "20,-15"},
		"field":        {ScanOptions{From: v(0), To: v(20), Step: v(10), ElevationFrom: v(-10), ElevationTo: v(30), ElevationStep: v(20)}, 9, "0,-10", "20,30"},
		"list":         {ScanOptions{Directions: []string{"30", "-40,20"}}, 2, "30,0", "-40,20"},
		"the most":     {from(0, 199.99, 0.01), 20000, "0,0", "-160.01,0"},
		"one too many": {from(0, 200, 0.01), 0, "", ""},
	} {
		list, err := c.o.directions()
		if c.count == 0 {
			if err == nil || !strings.Contains(err.Error(), "want at most 20000") {
				t.Errorf("%s: %v", name, err)
			}
			continue
		}
		if err != nil || len(list) != c.count || directionText(list[0]) != c.first || directionText(list[len(list)-1]) != c.last {
			t.Errorf("%s: %d directions, %v", name, len(list), err)
		}
	}
}

// The record beside a track of minimum-variance weights says by content what
// they were found on: other isolated noise under the same name makes another
// track. Neither its folder nor the label of a cue is told.
func TestRecordsKnowTheNoiseByContent(t *testing.T) {
	s := newScene(t, 2, wav.PCM16)
	noise := filepath.Join(s.dir, "deep", "noise.wav")
	text, err := os.ReadFile(s.take)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(os.Mkdir(filepath.Dir(noise), 0o777), os.WriteFile(noise, text, 0o666)); err != nil {
		t.Fatal(err)
	}
	o := from(60, 60, 1)
	o.Weights, o.IsolatedNoise, o.NoMeasure, o.Private, o.Tracks = WeightsMinimumVariance, noise, true, true, filepath.Join(s.dir, "tracks")
	s.mustScan(t, o)
	record, err := os.ReadFile(filepath.Join(o.Tracks, "take_az+060.0.track.json"))
	if err != nil || strings.Contains(string(record), "deep") || !strings.Contains(string(record), digestOf(text)) {
		t.Errorf("%v, the record names the folder or not the content: %s", err, record)
	}
	if r := s.mustScan(t, o); !r.Angles[0].Track.Kept {
		t.Error("the same noise, and the track was not kept")
	}
	text[len(text)-1] ^= 1
	if err := os.WriteFile(noise, text, 0o666); err != nil {
		t.Fatal(err)
	}
	if _, err := s.scan(o, Watch{}); err == nil || !strings.Contains(err.Error(), "exists already, and was not made") {
		t.Errorf("got %v for other noise", err)
	}
	o.IsolatedNoise, o.Noise, o.Tracks = "", "0..1", filepath.Join(s.dir, "other")
	s.mustScan(t, o)
	if record, err = os.ReadFile(filepath.Join(o.Tracks, "take_az+060.0.track.json")); err != nil || !strings.Contains(string(record), "noise_s") {
		t.Errorf("%v, the record lacks the stretches: %s", err, record)
	}
}

func findingsOf(list []Finding, code string) (found []Finding) {
	for _, f := range list {
		if f.Code == code {
			found = append(found, f)
		}
	}
	return found
}

// What holds in some directions only is said once, with the directions: a null
// near the steered direction costs more white noise gain than one far away. The
// frequencies are those that steer says of each direction by itself.
func TestScanSaysWhereNullsAreHeld(t *testing.T) {
	s := newScene(t, 1, wav.PCM16)
	floor := 0.0
	o := ScanOptions{Directions: []string{"20", "60", "85"}}
	o.Null, o.WhiteNoiseGainFloorDB, o.NoMeasure = []string{"100"}, &floor, true
	list := findingsOf(s.mustScan(t, o).Findings, "nulls-held-from")
	var low, high float64
	var named []string
	for _, toward := range o.Directions {
		options := o.Options
		options.Toward, options.Reports, options.Overwrite = toward, "none", true
		for _, f := range findingsOf(s.must(t, options).Findings, "nulls-held-from") {
			var from float64
			if _, err := fmt.Sscanf(f.Message, "the nulls are exact from %g Hz", &from); err != nil {
				t.Fatal(err)
			}
			if named = append(named, toward); len(named) == 1 || from < low {
				low = from
			}
			high = max(high, from)
		}
	}
	if len(named) < 2 || low == high {
		t.Fatalf("%v with nulls from %g to %g Hz: the test needs some", named, low, high)
	}
	if want := fmt.Sprintf("from %.0f to %.0f Hz up in ", low, high); len(list) != 1 || !strings.Contains(list[0].Message, want) {
		t.Errorf("%+v, want one that has %q", list, want)
	}

	by := &scanner{run: &run{set: &settings{}}, nullsFrom: map[rig.Direction]float64{}}
	for i := range 6 {
		by.directions = append(by.directions, rig.Degrees(10*float64(i), 0))
		if i > 0 {
			by.nullsFrom[by.directions[i]] = 100 * float64(i)
		}
	}
	by.nullsFrom[by.directions[2]] = math.Inf(1)
	by.nulls()
	for code, want := range map[string]string{"nulls-not-held": "at no frequency in 1 of 6 directions (20.0°", "nulls-held-from": "from 100 to 500 Hz up in 4 of 6 directions (the first 10.0°, the last 50.0°"} {
		if list := findingsOf(by.findings, code); len(list) != 1 || !strings.Contains(list[0].Message, want) {
			t.Errorf("%s: %+v, want %q", code, list, want)
		}
	}
}

// Null gains have their reason, whichever direction they are missing in and
// however the noise is known.
func TestScanSaysWhyGainsAreMissing(t *testing.T) {
	s := newScene(t, 2, wav.PCM16)
	for name, c := range map[string]struct {
		options Options
		code    string
	}{
		"short stretches": {Options{Noise: "0..0.1", Target: "1..2"}, "gain-unmeasured-too-short"},
		"the same sound":  {Options{Noise: "0..0.45", Target: "0.5..0.95"}, "gain-unmeasured-not-above-noise"},
		"half":            {Options{IsolatedNoise: s.take}, "isolated-half"},
	} {
		o := from(60, 120, 30)
		o.Options = c.options
		r := s.mustScan(t, o)
		list := findingsOf(r.Findings, c.code)
		if len(list) != 1 || c.code != "isolated-half" && (!strings.Contains(list[0].Message, "directions") || len(list[0].Bands) == 0) {
			t.Errorf("%s: %+v", name, r.Findings)
		}
		for _, a := range r.Angles {
			if a.SNRGainDB != nil && c.code != "gain-unmeasured-not-above-noise" {
				t.Errorf("%s: gain %g", name, *a.SNRGainDB)
			}
		}
	}
	// A take too short for the low bands, as noise and as target alone.
	short := newScene(t, 1, wav.PCM16)
	o := from(60, 60, 1)
	o.IsolatedNoise, o.IsolatedTarget = short.take, short.take
	r := s.mustScan(t, o)
	null := 0
	for _, b := range r.Angles[0].Bands {
		if b.SNRGainDB == nil {
			null++
		}
	}
	told := 0
	for _, f := range r.Findings {
		if strings.HasPrefix(f.Code, "gain-unmeasured-") {
			told += len(f.Bands)
		}
	}
	if null == 0 || told != null {
		t.Errorf("%d bands without a gain on isolated takes, %d told of", null, told)
	}
}

// The best gain is looked for over the same bands in all directions: one band
// that is known by luck does not win over all.
func TestBestGainComparesTheSameBands(t *testing.T) {
	v := func(x float64) Number { return &x }
	s := &scanner{run: &run{set: &settings{}}, result: &ScanResult{Angles: []ScanAngle{
		{SNRGainDB: v(10), Bands: []ScanBand{{NominalHz: 500, SNRGainDB: v(10)}, {NominalHz: 1000}}}, // loses the target at 1 kHz
		{SNRGainDB: v(6), Bands: []ScanBand{{NominalHz: 500, SNRGainDB: v(6)}, {NominalHz: 1000, SNRGainDB: v(6)}}},
	}}, powers: [][]measure.Powers{
		{{NoiseIn: 1, NoiseOut: 0.1, TargetIn: 1, TargetOut: 1}, {NoiseIn: 1, NoiseOut: 0.5, TargetIn: 9, TargetOut: -0.01}},
		{{NoiseIn: 1, NoiseOut: 0.25, TargetIn: 1, TargetOut: 1}, {NoiseIn: 1, NoiseOut: 0.25, TargetIn: 9, TargetOut: 9}},
	}}
	if best := s.bestGain(); best != &s.result.Angles[1] {
		t.Errorf("best %+v", best)
	}
	list := findingsOf(s.findings, "gains-over-different-bands")
	if len(list) != 1 || !reflect.DeepEqual(list[0].Bands, []float64{500, 1000}) || !strings.Contains(list[0].Message, "1 to 2 of 2") {
		t.Errorf("%+v", s.findings)
	}
	// By hand: 0.99/0.6 of the target over the noise, 10/2 at the microphones.
	if got, want := gainOver(s.powers[0], []int{0, 1}), 10*math.Log10(0.99/0.6/5); math.Abs(got-want) > 1e-12 {
		t.Errorf("gain %g dB over both bands, want %g", got, want)
	}
}
