package pipeline

import (
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/delay"
	"alidade/pkg/quality"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
	"alidade/pkg/wav"
)

// twoClocks renders a take of noise from 60° on a ring of eight, in diffuse
// noise that begins first, and the same with the clock of four channels 20 ppm
// fast. Rate and length keep the short form cheap.
func twoClocks(t *testing.T, rate int, seconds float64, ppm float64) (clean, drifting scene, clean8 audio.Block) {
	t.Helper()
	on := fmt.Sprintf("[%g, %g]", 0.2*seconds, seconds)
	clean, drifting = onClocks(t, rate, seconds, 0, -42, on), onClocks(t, rate, seconds, ppm, -42, on)
	return clean, drifting, clean.mix
}

// onClocks renders such a take with the clock of four channels fast by ppm,
// diffuse noise of a level, and the source heard in the stretches on.
func onClocks(t *testing.T, rate int, seconds, ppm, diffuse float64, on string) scene {
	t.Helper()
	text := fmt.Sprintf(`scenario: two recorders
rate_hz: %d
duration_s: %g
seed: 6
rig:
  ring: {count: 8, radius_mm: 60}
sources:
  - {name: engine, kind: noise, at: {azimuth_deg: 60}, level_dbfs: -30, on_s: [%s]}
diffuse: [{level_dbfs: %g, spectrum: pink}]
sensor_dbfs: -65
`, rate, seconds, on, diffuse)
	if ppm != 0 {
		text += fmt.Sprintf("faults:\n  - {channels: [5, 6, 7, 8], clock_ppm: %g}\n", ppm)
	}
	sc, err := scenario.Load("two.yaml", []byte(text), nil)
	if err != nil {
		t.Fatal(err)
	}
	r, err := sc.Render(scenario.Options{})
	if err != nil {
		t.Fatal(err)
	}
	b, err := audio.ReadAll(r.Mix())
	if err != nil {
		t.Fatal(err)
	}
	s := scene{dir: t.TempDir(), mix: b}
	s.rig = writeText(t, filepath.Join(s.dir, "ring.yaml"), "ring: {count: 8, radius_mm: 60}\n")
	s.take = filepath.Join(s.dir, "take.wav")
	writeWAV(t, s.take, rate, wav.Float32, b)
	return s
}

// Two recorders 20 ppm apart: measured, undone, aligned within 5 µs throughout,
// and the gain is that of a take with one clock within 0.5 dB. Over 60 s with
// ALIDADE_LONG, else over a shorter take with clocks further apart.
func TestClocksAreAligned(t *testing.T) {
	rate, seconds, ppm := 16000, 12.0, 60.0
	if os.Getenv("ALIDADE_LONG") != "" {
		rate, seconds, ppm = 48000, 60, 20
	} else if testing.Short() {
		t.Skip("renders takes")
	}
	clean, drifting, _ := twoClocks(t, rate, seconds, ppm)
	noise := fmt.Sprintf("0..%g", 0.19*seconds)
	o := Options{Toward: "60", Noise: noise}
	want := clean.must(t, o)
	apart := drifting.must(t, o)
	o.AlignClocks, o.Overwrite = true, true
	got := drifting.must(t, o)
	if got.Clocks == nil || len(got.Clocks.Groups) != 2 || findingOf(got, "clocks-aligned") == nil {
		t.Fatalf("clocks %+v, findings %+v", got.Clocks, got.Findings)
	}
	measured := got.Clocks.Groups[1].PPM - got.Clocks.Groups[0].PPM
	if c := got.Clocks.Groups[1].Channels; len(c) != 4 || c[0] != 5 {
		t.Errorf("groups %+v", got.Clocks.Groups)
	}
	gain := func(r *Result) float64 {
		if r.Overall.SNRGainDB == nil {
			t.Fatalf("no gain: %+v", r.Findings)
		}
		return *r.Overall.SNRGainDB
	}
	t.Logf("measured %.4f ppm (± %.4f), want %g: %.2f µs at the end; gain %.2f dB with one clock, %.2f with two, %.2f aligned",
		measured, *got.Clocks.StandardErrorPPM, ppm, (measured-ppm)*seconds, gain(want), gain(apart), gain(got))
	if d := math.Abs(gain(got) - gain(want)); !(d < 0.5) {
		t.Errorf("gain %.2f dB from that of one clock, want within 0.5", d)
	}
	for _, f := range got.Findings {
		if f.Severity == Error {
			t.Errorf("after alignment: %s: %s", f.Code, f.Message)
		}
	}
	// Aligned throughout: the corrected channels against those of one clock, by
	// the slope of their cross-spectrum's phase, second by second.
	l := &loadedRig{Rig: &rig.Rig{Mics: make([]rig.Mic, 8)}}
	for ch := range l.Mics {
		l.Mics[ch] = rig.Mic{Channel: ch + 1, Use: true}
	}
	for _, g := range got.Clocks.Groups {
		for _, ch := range g.Channels {
			l.Mics[ch-1].ClockPPM = g.PPM
		}
	}
	src, err := l.corrected(audio.FromBlock(rate, drifting.mix))
	if err != nil {
		t.Fatal(err)
	}
	fixed, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	worst := 0.0
	for at := int(0.2 * seconds); at < int(seconds)-1; at++ {
		for _, ch := range []int{4, 7} {
			late := latenessOf(t, clean.mix.Slice(at*rate, (at+1)*rate).Channel(ch), fixed.Slice(at*rate, (at+1)*rate).Channel(ch), rate)
			worst = math.Max(worst, math.Abs(late))
		}
	}
	t.Logf("alignment within %.2f µs of one clock throughout", worst*1e6)
	if !(worst < 5e-6) {
		t.Errorf("alignment off by up to %.2f µs, want 5", worst*1e6)
	}

	// Stated in the rig file it is undone as well, and nothing is measured.
	if os.Getenv("ALIDADE_LONG") == "" {
		text := "microphones:\n"
		for ch, p := range rig.Ring(8, 0.06) {
			text += fmt.Sprintf("  - {channel: %d, at_mm: [%.9f, %.9f]", ch+1, 1000*p.X, 1000*p.Y)
			if ch >= 4 {
				text += fmt.Sprintf(", clock_ppm: %g", ppm)
			}
			text += "}\n"
		}
		writeText(t, drifting.rig, text)
		o.AlignClocks = false
		stated := drifting.must(t, o)
		if d := math.Abs(gain(stated) - gain(want)); !(d < 0.5) || stated.Clocks != nil {
			t.Errorf("clock_ppm in the rig file: gain %.2f dB from that of one clock", d)
		}
		for _, f := range stated.Findings {
			if f.Severity == Error {
				t.Errorf("clock_ppm in the rig file: %s: %s", f.Code, f.Message)
			}
		}
	}
}

// A take longer than what is listened to at first, in which only 11 s of the
// first minute tell: the second listening, over all of it, makes the figure
// better and says how good it is.
func TestClocksOfALongTake(t *testing.T) {
	if os.Getenv("ALIDADE_LONG") == "" {
		t.Skip("renders a take of 200 s: set ALIDADE_LONG=1")
	}
	const seconds, ppm = 200.0, 20.0
	s := onClocks(t, 8000, seconds, ppm, -75, "[40, 51], [70, 200]")
	r := s.must(t, Options{Toward: "60", AlignClocks: true, NoMeasure: true})
	if r.Clocks == nil || len(r.Clocks.Groups) != 2 || r.Clocks.StandardErrorPPM == nil || findingOf(r, "clocks-from-the-start") != nil {
		t.Fatalf("clocks %+v, findings %+v", r.Clocks, r.Findings)
	}
	off, se := r.Clocks.Groups[1].PPM-r.Clocks.Groups[0].PPM-ppm, *r.Clocks.StandardErrorPPM
	t.Logf("off by %.4f ppm, standard error %.4f, over %.0f s: %.2f µs at the end", off, se, *r.Clocks.SpanS, off*seconds)
	if !(se > 0) || !(math.Abs(off) <= 4*se) || !(math.Abs(off)*seconds <= 5) || !(*r.Clocks.SpanS > 100) {
		t.Errorf("off by %.4f ppm, standard error %.4f: want within four of them, and 5 µs at the end", off, se)
	}
}

// latenessOf is by how much y is later than x, seconds, both nearly alike: the
// least squares shift, from x and its derivative.
func latenessOf(t *testing.T, x, y []float32, rate int) float64 {
	t.Helper()
	k, err := delay.NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	const h = 0.05 // frames
	a, early := k.Taps(nil, -h)
	b, late := k.Taps(nil, h)
	at := func(start int, taps []float64, i int) (v float64) {
		for n, c := range taps {
			v += c * float64(x[i-start-n])
		}
		return v
	}
	num, den := 0.0, 0.0
	for i := 100; i < len(x)-100; i += 3 {
		slope := (at(a, early, i) - at(b, late, i)) / (2 * h) // per frame
		num -= (float64(y[i]) - float64(x[i])) * slope
		den += slope * slope
	}
	return num / den / float64(rate)
}

// Without sound from one side the clocks stay as they are: no figure, and a
// finding that says why.
func TestClocksWithoutASourceAreNull(t *testing.T) {
	s := newScene(t, 5, wav.PCM24)
	r := s.must(t, Options{Toward: "90", AlignClocks: true})
	if f := findingOf(r, "clocks-not-measured"); f == nil || f.Severity != Warning || r.Clocks == nil || r.Clocks.Groups != nil || r.Clocks.StandardErrorPPM != nil {
		t.Errorf("clocks %+v, findings %+v", r.Clocks, r.Findings)
	}
}

// Clocks so far apart that much of a stretch comes from outside it, 0.6 s of 2 s
// after a minute: nothing but sound is inspected, and levels and noise floors of
// the channels are alike, as the same sound on all of them is.
func TestStretchesOnFarClocksAreWhole(t *testing.T) {
	if testing.Short() {
		t.Skip("renders takes of 80 s")
	}
	const rate = 8000
	for _, ppm := range []float64{10000, -10000} {
		text := "microphones:\n"
		for ch := range 4 {
			text += fmt.Sprintf("  - {channel: %d, at_mm: [%d, 0]", ch+1, 60*ch-90)
			if ch >= 2 {
				text += fmt.Sprintf(", clock_ppm: %g", ppm)
			}
			text += "}\n"
		}
		dir := t.TempDir()
		s := scene{dir: dir, rig: writeText(t, filepath.Join(dir, "line.yaml"), text), take: filepath.Join(dir, "take.wav")}
		sc, err := scenario.Load("far.yaml", []byte(fmt.Sprintf(`scenario: clocks far apart
rate_hz: %d
duration_s: 80
seed: 4
rig_file: line.yaml
sources:
  - {name: engine, kind: noise, at: {azimuth_deg: 60}, level_dbfs: -30}
sensor_dbfs: -65
`, rate)), func(name string) (io.ReadCloser, error) { return os.Open(filepath.Join(dir, name)) })
		if err != nil {
			t.Fatal(err)
		}
		render, err := sc.Render(scenario.Options{})
		if err != nil {
			t.Fatal(err)
		}
		b, err := audio.ReadAll(render.Mix())
		if err != nil {
			t.Fatal(err)
		}
		writeWAV(t, s.take, rate, wav.Float32, b)
		r := s.must(t, Options{Toward: "60"})
		for _, f := range r.Findings {
			if f.Severity == Error || f.Code == quality.CodeLevel || f.Code == quality.CodeNoiseFloor {
				t.Errorf("%+g ppm: %s: %s", ppm, f.Code, f.Message)
			}
		}
	}
}
