package pipeline

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"alidade/pkg/quality"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

// withDead is a scene whose channel 2 holds a unit of 16 bits up and down, as an
// open input does.
func withDead(t *testing.T, seconds float64) scene {
	s := newScene(t, seconds, wav.PCM24)
	for i := range s.mix.Channel(1) {
		s.mix.Channel(1)[i] = float32(i%3-1) / 32768
	}
	writeWAV(t, s.take, sceneRate, wav.PCM24, s.mix)
	return s
}

// A dead microphone is left out by itself: the track is that of a rig file that
// leaves it out, around the reference point of the whole rig.
func TestADeadMicrophoneIsLeftOut(t *testing.T) {
	s := withDead(t, 10)
	r := s.must(t, Options{Toward: "70", ReferencePoint: "M1"})
	f := findingOf(r, quality.CodeDead)
	if f == nil || f.Severity != Warning || !slices.Equal(f.Channels, []int{2}) || !strings.Contains(f.Message, "left out") {
		t.Errorf("finding %+v", f)
	}
	if findingOf(r, "channel-silent") != nil {
		t.Error("said twice")
	}
	if c := r.Channels[1]; c.Used || !slices.Contains(c.Flags, "left-out") || !slices.Contains(c.Flags, quality.CodeDead) {
		t.Errorf("channel 2: %+v", c)
	}
	if r.Rig.MicrophonesUsed != 3 {
		t.Errorf("%d microphones used, want 3", r.Rig.MicrophonesUsed)
	}
	track, err := os.ReadFile(r.Output.Path)
	if err != nil {
		t.Fatal(err)
	}
	writeText(t, s.rig, "microphones:\n  - {channel: 1, at_mm: [-75, 0]}\n  - {channel: 2, at_mm: [-25, 0], use: false}\n  - {channel: 3, at_mm: [25, 0]}\n  - {channel: 4, at_mm: [75, 0]}\n")
	q := s.must(t, Options{Toward: "70", ReferencePoint: "M1", Overwrite: true})
	other, err := os.ReadFile(q.Output.Path)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(samplesOf(track), samplesOf(other)) {
		t.Error("the track differs from that of a rig file that leaves channel 2 out")
	}
	writeText(t, s.rig, fourLine)
	r = s.must(t, Options{Toward: "70", Overwrite: true})
	if p := r.Rig.ReferencePointM; p != [3]float64{} {
		t.Errorf("the reference point moved to %v", p)
	}
	// The named reference is dead: its place stands, another's track is written.
	r = s.must(t, Options{Toward: "70", ReferencePoint: "M2", CompareTo: "M2", WithReference: true, Overwrite: true})
	if p := r.Rig.ReferencePointM; p[0] != -0.025 || !strings.Contains(r.OtherOutputs[0].Description, "M1") && !strings.Contains(r.OtherOutputs[0].Description, "M3") {
		t.Errorf("reference at %v: %s", p, r.OtherOutputs[0].Description)
	}
	if findingOf(r, "compared-left-out") == nil {
		t.Error("no word on --compare-to a dead microphone")
	}
}

// samplesOf is the data chunk of a WAV file.
func samplesOf(file []byte) []byte {
	return file[bytes.Index(file, []byte("data"))+8:]
}

func TestDeadMicrophonesCanBeKept(t *testing.T) {
	s := withDead(t, 6)
	r := s.must(t, Options{Toward: "90", KeepDead: true})
	if f := findingOf(r, quality.CodeDead); f == nil || !strings.Contains(f.Message, "still part of the beam") || f.Severity != Warning {
		t.Errorf("finding %+v", f)
	}
	if r.Rig.MicrophonesUsed != 4 || !r.Channels[1].Used || slices.Contains(r.Channels[1].Flags, "left-out") {
		t.Errorf("used %d, channel %+v", r.Rig.MicrophonesUsed, r.Channels[1])
	}
}

// Without measurement dead channels are found by their level all the same.
func TestDeadWithoutMeasurement(t *testing.T) {
	s := withDead(t, 6)
	r := s.must(t, Options{Toward: "90", NoMeasure: true})
	if findingOf(r, quality.CodeDead) == nil || r.Rig.MicrophonesUsed != 3 {
		t.Errorf("%d microphones, findings %+v", r.Rig.MicrophonesUsed, r.Findings)
	}
	r = s.must(t, Options{Toward: "90", NoMeasure: true, KeepDead: true, Overwrite: true})
	if findingOf(r, quality.CodeDead) != nil || r.Rig.MicrophonesUsed != 4 {
		t.Errorf("%d microphones, findings %+v", r.Rig.MicrophonesUsed, r.Findings)
	}
}

// A beam of one microphone is none.
func TestOneLiveMicrophoneIsRefused(t *testing.T) {
	s := withDead(t, 6)
	writeText(t, s.rig, "microphones:\n  - {channel: 2, at_mm: [-25, 0]}\n  - {channel: 3, at_mm: [25, 0]}\n")
	_, err := s.run(Options{Toward: "90"})
	var hint *HintedError
	if !errors.As(err, &hint) || !strings.Contains(err.Error(), "1 of 2 microphones hold sound") || !strings.Contains(hint.Hint, "--keep-dead") {
		t.Errorf("%v", err)
	}
	s.onlyInputs(t)
	if r := s.must(t, Options{Toward: "90", KeepDead: true}); r.Rig.MicrophonesUsed != 2 {
		t.Errorf("%d used", r.Rig.MicrophonesUsed)
	}
}

// Silence throughout is no reason to leave out every microphone.
func TestASilentTakeIsSteeredWithAWord(t *testing.T) {
	s := newScene(t, 5, wav.PCM24)
	for ch := range 4 {
		clear(s.mix.Channel(ch))
	}
	writeWAV(t, s.take, sceneRate, wav.PCM24, s.mix)
	for _, o := range []Options{{}, {AlignClocks: true}} {
		o.Toward, o.Overwrite = "90", true
		r := s.must(t, o)
		if f := findingOf(r, "channel-silent"); f == nil || len(f.Channels) != 4 || r.Rig.MicrophonesUsed != 4 || findingOf(r, quality.CodeDead) != nil {
			t.Errorf("%+v: %+v", o, r.Findings)
		}
		for _, c := range r.Channels {
			if slices.Sort(c.Flags); len(slices.Compact(slices.Clone(c.Flags))) != len(c.Flags) {
				t.Errorf("channel %d: flags twice: %v", c.Channel, c.Flags)
			}
		}
	}
}

// Faults that are not mended are findings of the report, with the severity that
// check gives them, and the same from blocks of any size.
func TestFaultsStandInTheReport(t *testing.T) {
	s := newScene(t, 9, wav.PCM24)
	for i, v := range s.mix.Channel(2) {
		s.mix.Channel(2)[i] = -v
	}
	for i, v := range s.mix.Channel(3) {
		s.mix.Channel(3)[i] = 2 * v
	}
	writeWAV(t, s.take, sceneRate, wav.PCM24, s.mix)
	var want []byte
	for _, block := range []int{0, 1000, 1 << 16} {
		r := s.must(t, Options{Toward: "90", BlockFrames: block, Overwrite: true})
		if f := findingOf(r, quality.CodePolarity); f == nil || f.Severity != Error || !slices.Equal(f.Channels, []int{3}) {
			t.Errorf("polarity: %+v", f)
		}
		if f := findingOf(r, quality.CodeLevel); f == nil || f.Severity != Warning || !slices.Equal(f.Channels, []int{4}) {
			t.Errorf("level: %+v", f)
		}
		if !slices.Contains(r.Channels[2].Flags, quality.CodePolarity) {
			t.Errorf("flags %v", r.Channels[2].Flags)
		}
		text, err := json.Marshal(r.Findings)
		if err != nil {
			t.Fatal(err)
		}
		if want == nil {
			want = text
		} else if !bytes.Equal(text, want) {
			t.Errorf("blocks of %d: %s, others %s", block, text, want)
		}
	}
	// The rig file can say that this is how it is, and the run has the last word.
	writeText(t, s.rig, fourLine+"limits: {level_db: 8}\n")
	if r := s.must(t, Options{Toward: "90", Overwrite: true}); findingOf(r, quality.CodeLevel) != nil {
		t.Error("the limit of the rig file did not count")
	}
	spec := Spec{Take: []string{s.take}, RigPath: s.rig, Options: Options{Toward: "90", Overwrite: true}, Limits: quality.Limits{LevelDB: 2}}
	r, err := Run(t.Context(), spec, jsonRenderers, Watch{})
	if err != nil {
		t.Fatal(err)
	}
	if findingOf(r, quality.CodeLevel) == nil {
		t.Error("the limit of the run did not count over that of the rig file")
	}
}

func TestInspectedStretches(t *testing.T) {
	const rate = 1000
	for _, c := range []struct {
		frames int64
		count  int
		total  int64
	}{
		{1, 1, 1}, {4000, 1, 4000}, {4001, 2, 4000}, {40000, 2, 4000}, {120000, 3, 6000}, {600000, 15, 30000}, {1e9, 30, 60000},
	} {
		list := inspected(c.frames, rate)
		at, total := int64(0), int64(0)
		for _, s := range list {
			if s[0] < at || s[1] <= s[0] || s[1] > c.frames {
				t.Errorf("%d frames: %v", c.frames, list)
			}
			at = s[1]
			total += s[1] - s[0]
		}
		if len(list) != c.count || total != c.total {
			t.Errorf("%d frames: %d stretches of %d frames, want %d of %d", c.frames, len(list), total, c.count, c.total)
		}
	}
}

// Channel 1 of the second real take is dead (data set's notes) and goes by
// itself; nothing of the first one is left out.
func TestRealTakesLeaveOutWhatIsDead(t *testing.T) {
	dir := dataDir(t)
	line := writeText(t, filepath.Join(t.TempDir(), "line.yaml"), "line: {count: 8, spacing_mm: 120}\n")
	for name, want := range map[string]int{"noise_rec_one.wav": 8, "noise_rec_two.wav": 7} {
		spec := Spec{Take: []string{filepath.Join(dir, "line8-room", name)}, RigPath: line, Options: Options{Toward: "60", Out: filepath.Join(t.TempDir(), "o.wav"), Reports: "none"}}
		r, err := Run(t.Context(), spec, jsonRenderers, Watch{})
		if err != nil {
			t.Fatal(err)
		}
		if r.Rig.MicrophonesUsed != want || (findingOf(r, quality.CodeDead) != nil) != (want == 7) {
			t.Errorf("%s: %d microphones, findings %+v", name, r.Rig.MicrophonesUsed, r.Findings)
		}
		if want == 7 && !slices.Contains(r.Channels[0].Flags, "left-out") {
			t.Errorf("%s: channel 1: %+v", name, r.Channels[0])
		}
		for _, f := range r.Findings {
			if f.Severity == Error {
				t.Errorf("%s: %s: %s", name, f.Code, f.Message)
			}
		}
	}
}

// Corrections of the rig are its own affair: limits of it are those of quality.
func TestLimitsOfTheRigAreThoseOfTheInspection(t *testing.T) {
	l := quality.Limits(rig.Limits{LevelDB: 3})
	if got := (quality.Limits{DC: 0.1}).Over(l); got.LevelDB != 3 || got.DC != 0.1 || got.DriftPPM != 0 {
		t.Errorf("%+v", got)
	}
}
