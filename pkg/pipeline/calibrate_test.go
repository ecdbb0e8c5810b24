package pipeline

import (
	"context"
	"errors"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
	"alidade/pkg/wav"
)

// yardTake renders noise from 60° on a line of six, colours channel 3, and
// writes take and rig into a folder.
func yardTake(t *testing.T, color bool) (take, rigPath string) { return madeTake(t, color, nil) }

// madeTake is yardTake of a scenario that change may alter.
func madeTake(t *testing.T, color bool, change func(*scenario.Scenario)) (take, rigPath string) {
	t.Helper()
	dir := t.TempDir()
	r := &rig.Rig{Name: "yard", Reference: rig.CentreReference}
	for m, p := range rig.Line(6, 0.04) {
		r.Mics = append(r.Mics, rig.Mic{Name: string(rune('A' + m)), Channel: m + 1, At: p, Use: true})
	}
	az, level, sensor := 60.0, -22.0, -75.0
	s := &scenario.Scenario{Name: "yard", RateHz: 48000, DurationS: 1.5, Seed: 3, Rig: r, SensorDBFS: &sensor,
		Sources: []scenario.Source{{Name: "horn", Kind: scenario.KindNoise, LevelDBFS: &level, At: &scenario.Place{AzimuthDeg: &az}}},
		Faults:  []scenario.Fault{{Channels: []int{2}, GainDB: 1.7, DelayUS: 9}},
	}
	if change != nil {
		change(s)
	}
	made, err := s.Render(scenario.Options{})
	if err != nil {
		t.Fatal(err)
	}
	b, err := audio.ReadAll(made.Mix())
	if err != nil {
		t.Fatal(err)
	}
	if color {
		x := b.Channel(2)
		for i := len(x) - 1; i > 1; i-- {
			x[i] = 0.9*x[i] + 0.3*x[i-1] + 0.1*x[i-2]
		}
	}
	take, rigPath = filepath.Join(dir, "yard.wav"), filepath.Join(dir, "yard.yaml")
	f, err := os.Create(take)
	if err != nil {
		t.Fatal(err)
	}
	w, err := wav.NewWriter(f, wav.Format{Rate: 48000, Channels: 6, Encoding: wav.Float32}, wav.Option{})
	if err != nil {
		t.Fatal(err)
	}
	if err := w.Write(b); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(rigPath, r.YAML(), 0o666); err != nil {
		t.Fatal(err)
	}
	return take, rigPath
}

// agreement is the largest difference of a corrected channel from the mean of
// all of them, steered to 60°, dB re the mean.
func agreement(t *testing.T, take, rigPath string) float64 {
	t.Helper()
	l, err := loadRig(rigPath, Options{})
	if err != nil {
		t.Fatal(err)
	}
	opened, err := openTake([]string{take}, joining{}, false)
	if err != nil {
		t.Fatal(err)
	}
	defer opened.close()
	set, err := Options{Toward: "60"}.resolve()
	if err != nil {
		t.Fatal(err)
	}
	line, err := newBeamline(l, set, 48000)
	if err != nil {
		t.Fatal(err)
	}
	line.shift = nil
	src, err := l.corrected(opened.source())
	if err != nil {
		t.Fatal(err)
	}
	b, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	// The beam's own filters, without the division by the number of microphones.
	n, frames := b.Channels(), b.Frames()
	y := make([][]float64, n)
	for m := range n {
		y[m] = make([]float64, frames)
		for i := range frames {
			sum := 0.0
			for k, h := range line.filters.H[m] {
				if j := i - line.filters.Start[m] - k; j >= 0 && j < frames {
					sum += float64(n) * float64(h) * float64(b.Channel(m)[j])
				}
			}
			y[m][i] = sum
		}
		// Three times (1, 2, 1)/4: what lies above 16 kHz, which no calibration heard,
		// is 36 dB down.
		for range 3 {
			last := 0.0
			for i := 1; i < frames-1; i++ {
				v := (last + 2*y[m][i] + y[m][i+1]) / 4
				last, y[m][i] = y[m][i], v
			}
		}
	}
	worst := 0.0
	for m := range n {
		left, all := 0.0, 0.0
		for i := 500; i < frames-500; i++ {
			mean := 0.0
			for k := range n {
				mean += y[k][i] / float64(n)
			}
			left += (y[m][i] - mean) * (y[m][i] - mean)
			all += mean * mean
		}
		worst = math.Max(worst, left/all)
	}
	return 10 * math.Log10(worst)
}

// A channel that is louder, late, and another that differs over frequency: the
// new rig makes a steered beam's channels agree, and with response filters the
// coloured one too.
func TestCalibratedRigMakesChannelsAgree(t *testing.T) {
	take, rigPath := yardTake(t, true)
	var got []float64
	for k, o := range []CalibrateOptions{{}, {Responses: true}} {
		o.Toward, o.Out = "60", filepath.Join(filepath.Dir(rigPath), []string{"plain.yaml", "even.yaml"}[k])
		res, err := Calibrate(context.Background(), CalibrateSpec{Take: []string{take}, RigPath: rigPath, Options: o}, Watch{})
		if err != nil {
			t.Fatal(err)
		}
		if res.Output.Path != o.Out || len(res.Microphones) != 6 {
			t.Fatalf("wrote %s with %d microphones", res.Output.Path, len(res.Microphones))
		}
		got = append(got, agreement(t, take, o.Out))
	}
	before := agreement(t, take, rigPath)
	t.Logf("largest difference of a channel from the mean of all: %.1f dB before, %.1f dB calibrated, %.1f dB with response filters", before, got[0], got[1])
	if before < -20 || got[0] < -20 || got[1] > -45 {
		t.Errorf("differences of %.1f, %.1f and %.1f dB", before, got[0], got[1])
	}

	// Filters of one rate are refused at another, by name.
	l, err := loadRig(filepath.Join(filepath.Dir(rigPath), "even.yaml"), Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := l.corrected(audio.FromBlock(96000, audio.NewBlock(6, 10))); err == nil || !strings.Contains(err.Error(), "made for 48000 Hz, the take has 96000 Hz") {
		t.Errorf("at another rate: %v", err)
	}

	// Calibrated again without --responses, the filters stay, and nothing is left.
	again := filepath.Join(filepath.Dir(rigPath), "again.yaml")
	res, err := Calibrate(context.Background(), CalibrateSpec{Take: []string{take}, RigPath: filepath.Join(filepath.Dir(rigPath), "even.yaml"),
		Options: CalibrateOptions{Toward: "60", Out: again}}, Watch{})
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range res.Microphones {
		if math.Abs(m.GainDB-m.GainBeforeDB) > 0.05 || math.Abs(m.DelayUS-m.DelayBeforeUS) > 0.5 {
			t.Errorf("microphone %s: gain %.3f after %.3f dB, delay %.2f after %.2f µs", m.Name, m.GainDB, m.GainBeforeDB, m.DelayUS, m.DelayBeforeUS)
		}
	}
	if text, err := os.ReadFile(again); err != nil || strings.Count(string(text), "response: {rate_hz: 48000, taps: [") != 6 {
		t.Errorf("the filters are not kept (%v)", err)
	}
}

// A microphone whose clock the rig file states (clock_ppm) is late by what its
// channel is late, in a part of the take that does not begin with it too: 300
// ppm are 300 µs after one second. The rendered hardware has the opposite of
// what the rig file corrects, and channel 2 is late by 9 µs in truth.
func TestCalibrationHeedsClocks(t *testing.T) {
	take, rigPath := madeTake(t, false, func(s *scenario.Scenario) {
		s.DurationS = 3
		for m := 3; m < 6; m++ {
			s.Rig.Mics[m].ClockPPM = 300
		}
	})
	for _, excerpt := range []string{"", "1.5..2.9"} {
		res, err := Calibrate(context.Background(), CalibrateSpec{Take: []string{take}, RigPath: rigPath,
			Options: CalibrateOptions{Toward: "60", Excerpt: excerpt, RelativeTo: "A", Overwrite: true}}, Watch{})
		if err != nil {
			t.Fatal(err)
		}
		for m, mic := range res.Microphones {
			want := 0.0
			if m == 1 {
				want = -9
			}
			if math.Abs(mic.DelayUS-want) > 0.3 {
				t.Errorf("excerpt %q, microphone %s: delay %.2f µs, want %.2f µs", excerpt, mic.Name, mic.DelayUS, want)
			}
		}
	}
}

// delay-large is about the change that is written: of a late channel that the
// others are compared with, the others change; of delays that are kept, none.
func TestLargeDelaysAreThoseWritten(t *testing.T) {
	take, rigPath := madeTake(t, false, func(s *scenario.Scenario) {
		s.Faults = []scenario.Fault{{Channels: []int{1}, DelayUS: 120}}
	})
	for _, c := range []struct {
		o    CalibrateOptions
		want []int
	}{{CalibrateOptions{}, []int{1}}, {CalibrateOptions{RelativeTo: "A"}, []int{2, 3, 4, 5, 6}}, {CalibrateOptions{Keep: KeepDelay}, nil}} {
		c.o.Toward, c.o.Overwrite = "60", true
		res, err := Calibrate(context.Background(), CalibrateSpec{Take: []string{take}, RigPath: rigPath, Options: c.o}, Watch{})
		if err != nil {
			t.Fatal(err)
		}
		var got []int
		for _, f := range res.Findings {
			if f.Code == "delay-large" {
				got = f.Channels
			}
		}
		if !slices.Equal(got, c.want) {
			t.Errorf("relative to %q, keep %q: large in %v, want %v", c.o.RelativeTo, c.o.Keep, got, c.want)
		}
		if a := res.Microphones[0]; c.o.RelativeTo == "A" && (*a.DelayUncertaintyUS != 0 || *a.GainUncertaintyDB != 0) {
			t.Errorf("the reference itself: ± %g µs, ± %g dB", *a.DelayUncertaintyUS, *a.GainUncertaintyDB)
		}
	}
}

// A calibrator seated three times: the mean of all, its uncertainty by their
// spread (JCGM 100:2008, 4.2: the experimental standard deviation), in whatever
// order the takes are named; refused where any two lie too far apart.
func TestSeatingsOfACalibrator(t *testing.T) {
	dir := t.TempDir()
	rigPath := filepath.Join(dir, "pair.yaml")
	if err := os.WriteFile(rigPath, []byte("rig: pair\nline: {count: 2, spacing_mm: 40}\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	seat := func(name string, dbfs float64) string {
		b := audio.NewBlock(2, 2*48000)
		for i := range b.Frames() {
			b.Channel(0)[i] = float32(math.Pow(10, dbfs/20) * math.Sin(2*math.Pi*1000*float64(i)/48000))
		}
		path := filepath.Join(dir, name)
		f, err := os.Create(path)
		if err != nil {
			t.Fatal(err)
		}
		w, err := wav.NewWriter(f, wav.Format{Rate: 48000, Channels: 2, Encoding: wav.Float32}, wav.Option{})
		if err == nil {
			err = errors.Join(w.Write(b), w.Close(), f.Close())
		}
		if err != nil {
			t.Fatal(err)
		}
		return path
	}
	calibrate := func(takes ...string) (*Calibration, error) {
		spec := CalibrateSpec{Take: takes[:1], RigPath: rigPath, Options: CalibrateOptions{CalibratorDB: 94, Overwrite: true}}
		for _, p := range takes[1:] {
			spec.More = append(spec.More, []string{p})
		}
		return Calibrate(context.Background(), spec, Watch{})
	}
	a, b, c, far := seat("a.wav", -26), seat("b.wav", -26.2), seat("c.wav", -25.95), seat("far.wav", -26.27)
	var first *CalibratedMic
	for _, takes := range [][]string{{a, b, c}, {c, b, a}, {b, a, c}} {
		res, err := calibrate(takes...)
		if err != nil {
			t.Fatal(err)
		}
		m := res.Microphones[0]
		if math.Abs(*m.SensitivityDBFS+26.05) > 0.001 || len(m.Tones) != 3 {
			t.Errorf("%.4f dBFS of %d seatings, want -26.05 dBFS of 3", *m.SensitivityDBFS, len(m.Tones))
		}
		// The standard deviation of 0, 0.2 and -0.05 dB is 0.1323 dB.
		if want := 2 * math.Hypot(0.25/math.Sqrt(3), 0.1323); math.Abs(*m.SensitivityUncertaintyDB-want) > 0.001 {
			t.Errorf("± %.4f dB, want ± %.4f dB", *m.SensitivityUncertaintyDB, want)
		}
		if first == nil {
			first = &m
		} else if *m.SensitivityDBFS != *first.SensitivityDBFS || *m.SensitivityUncertaintyDB != *first.SensitivityUncertaintyDB {
			t.Errorf("in another order %g ± %g dBFS, was %g ± %g dBFS", *m.SensitivityDBFS, *m.SensitivityUncertaintyDB, *first.SensitivityDBFS, *first.SensitivityUncertaintyDB)
		}
	}
	// Each lies within 0.3 dB of the first, the outermost two do not.
	for _, takes := range [][]string{{a, far, c}, {c, far, a}, {far, a, c}} {
		if _, err := calibrate(takes...); err == nil || !strings.Contains(err.Error(), "c.wav: carries no calibration: channel 1 reads -25.95 dBFS here and -26.27 dBFS in "+far) {
			t.Errorf("too far apart: %v", err)
		}
	}
}
