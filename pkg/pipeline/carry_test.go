package pipeline

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// metaOf reads what a track carries.
func metaOf(t *testing.T, path string) wav.Description {
	t.Helper()
	d, err := Describe(path)
	if err != nil {
		t.Fatal(err)
	}
	if len(d.Warnings) > 0 {
		t.Errorf("%s: %v", path, d.Warnings)
	}
	return d
}

const clockIXML = `<PROJECT>PIER SECRET</PROJECT><SCENE>7A</SCENE><TAKE>3</TAKE><NOTE>at the house of K.</NOTE><LOCATION><LOCATION_NAME>PIER SECRET</LOCATION_NAME></LOCATION>` +
	`<SPEED><TIMECODE_RATE>25/1</TIMECODE_RATE><TIMECODE_FLAG>NDF</TIMECODE_FLAG><FILE_SAMPLE_RATE>16000</FILE_SAMPLE_RATE><AUDIO_BIT_DEPTH>16</AUDIO_BIT_DEPTH></SPEED>` +
	`<TRACK_LIST><TRACK_COUNT>4</TRACK_COUNT><TRACK><CHANNEL_INDEX>1</CHANNEL_INDEX><INTERLEAVE_INDEX>1</INTERLEAVE_INDEX><NAME>M1</NAME></TRACK>` +
	`<TRACK><CHANNEL_INDEX>2</CHANNEL_INDEX><INTERLEAVE_INDEX>2</INTERLEAVE_INDEX><NAME>M3</NAME></TRACK><TRACK><CHANNEL_INDEX>3</CHANNEL_INDEX><INTERLEAVE_INDEX>3</INTERLEAVE_INDEX><NAME>M2</NAME></TRACK></TRACK_LIST>`

const tenOClock = 36000 * 16000

// recorderTake is a take of two seconds as a recorder leaves it.
func recorderTake(b *bench) string {
	s := b.base
	s.chunks = []chunk{bextChunk("take seven", "REC OF K.", "2026-05-01", "10:00:00", tenOClock, "A=PCM,F=16000,W=16,M=multitrack,T=SERIAL-4711\r\n"), ixmlChunk(clockIXML), {"LIST", []byte("INFOIART\x0a\x00\x00\x00SECRET IA\x00")}}
	s.tail = append(cueChunks(mark{4000, 0, "noise"}, mark{12000, 6000, "Wanted"}, mark{20000, 0, "end"}), chunk{"xyz ", []byte("SECRET")})
	return put(b.t, b.at("take.wav"), s.file(b.x))
}

// The track of an excerpt carries what still holds, at the time it is of.
func TestTrackCarriesMetadata(t *testing.T) {
	b := newBench(t, 32000)
	r := b.must(Options{NoMeasure: true, Excerpt: "10:00:00.500..10:00:01:20", WithReference: true}, recorderTake(b))
	if r.Output.FirstFrame != 8000 || r.Output.Frames != 20800 { // FF 20 of 25: 0.8 s
		t.Errorf("the excerpt is %d frames from %d, want 20800 from 8000", r.Output.Frames, r.Output.FirstFrame)
	}
	d := metaOf(t, r.Output.Path)
	if d.Bext == nil || d.IXML == nil {
		t.Fatalf("%+v: no bext or no iXML", d)
	}
	if d.Bext.TimeReference != tenOClock+8000 || d.StartTime != "10:00:00.500" || d.Timecode != "10:00:00:12" {
		t.Errorf("time reference %d, %s, %s", d.Bext.TimeReference, d.StartTime, d.Timecode)
	}
	if d.Bext.UMID != "" || d.Bext.Description != "take seven" || d.Bext.Originator != "REC OF K." {
		t.Errorf("bext %+v: want texts kept and no UMID", d.Bext)
	}
	lines := strings.Split(strings.TrimSpace(d.Bext.CodingHistory), "\r\n")
	if len(lines) != 2 || !strings.HasPrefix(lines[1], "A=PCM,F=16000,W=24,M=mono,T=alidade 9.9; az+060.0 of 4 microphones; spectral; delay-and-sum") {
		t.Errorf("coding history %q", lines)
	}
	if d.IXML.Scene != "7A" || d.IXML.Take != "3" || len(d.IXML.Tracks) != 1 || d.IXML.Tracks[0].Name != "az+060.0" || d.IXML.Speed.BitDepth != 24 {
		t.Errorf("iXML %+v", d.IXML)
	}
	// Frames 8000 to 28800: one region inside, a point, and one point before it.
	want := []wav.Cue{{Frame: 4000, Frames: 6000, Label: "Wanted"}, {Frame: 12000, Label: "end"}}
	for k := range d.Cues {
		d.Cues[k].ID = 0
	}
	if !slices.Equal(d.Cues, want) {
		t.Errorf("cues %v, want %v", d.Cues, want)
	}
	if f := finding(r, "metadata-left-out"); f == nil || !strings.Contains(f.Message, "xyz") || !strings.Contains(f.Message, "cue 1") {
		t.Errorf("left out: %v", f)
	}
	if ref := metaOf(t, r.OtherOutputs[0].Path); ref.IXML.Tracks[0].Name != "M2" && ref.IXML.Tracks[0].Name != "M3" {
		t.Errorf("the reference track is called %q", ref.IXML.Tracks[0].Name)
	}
	if r.Take.StartTime != "10:00:00.000" {
		t.Errorf("the take starts at %s", r.Take.StartTime)
	}
	if f := finding(r, "track-names-disagree"); f == nil || !slices.Equal(f.Channels, []int{2, 3}) {
		t.Errorf("track names M1, M3, M2 against a rig of M1, M2, M3: %v", f)
	}
}

// With --private nothing of what was put there as a secret is anywhere.
func TestPrivateLeavesSecretsOut(t *testing.T) {
	b := newBench(t, 32000)
	take := recorderTake(b)
	r := b.must(Options{NoMeasure: true, Private: true, Reports: "json", Out: b.at("out") + "/", WithReference: true}, take)
	report, err := json.Marshal(r)
	if err != nil {
		t.Fatal(err)
	}
	files := map[string][]byte{"result": report}
	for _, name := range entries(t, b.at("out")) {
		if files[name], err = os.ReadFile(filepath.Join(b.at("out"), name)); err != nil {
			t.Fatal(err)
		}
	}
	if len(files) != 4 {
		t.Fatalf("outputs %d, want result, two tracks and a report", len(files))
	}
	for name, data := range files {
		for _, secret := range []string{"SECRET", "house of K", "REC OF K", "SERIAL", "4711", b.dir, "take seven"} {
			if strings.Contains(string(data), secret) {
				t.Errorf("%s holds %q", name, secret)
			}
		}
	}
	if r.Provenance.Command != nil || r.Take.Files[0].Path != "take.wav" {
		t.Errorf("command %v, file %s", r.Provenance.Command, r.Take.Files[0].Path)
	}
	d := metaOf(t, b.at("out/take_az+060.0.wav"))
	if d.Bext.TimeReference != tenOClock || d.IXML.Scene != "7A" || d.StartTime != "10:00:00.000" {
		t.Errorf("time and scene are not private: %+v", d)
	}
	// The same run in the open does hold them, so the search above can fail.
	open := b.must(Options{NoMeasure: true, Out: b.at("open.wav")}, take)
	data, err := os.ReadFile(open.Output.Path)
	if err != nil {
		t.Fatal(err)
	}
	for _, secret := range []string{"SECRET", "house of K", "REC OF K", "SERIAL"} {
		if !strings.Contains(string(data), secret) {
			t.Errorf("without --private the track lacks %q", secret)
		}
	}
}

// cuedScene is the take of newScene (noise in the even seconds, noise and
// target in the odd ones) with cues and a time reference.
func cuedScene(t *testing.T, seconds int, marks ...mark) scene {
	s := newScene(t, float64(seconds), wav.PCM24)
	f, err := os.Create(s.take)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	m := &wav.Metadata{Bext: &wav.Bext{TimeReference: tenOClock}}
	for k, q := range marks {
		m.Cues = append(m.Cues, wav.Cue{ID: uint32(k + 1), Frame: int64(q.frame), Frames: int64(q.frames), Label: q.label})
	}
	w, err := wav.NewWriter(f, wav.Format{Rate: sceneRate, Channels: 4, Encoding: wav.PCM24}, wav.Option{Metadata: m})
	if err != nil {
		t.Fatal(err)
	}
	if err := w.Write(s.mix); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	return s
}

// Cues, seconds and times of day that mean the same stretches give the same
// figures, bit by bit.
func TestStretchesByCueBySecondsAndByTimeOfDayAreTheSame(t *testing.T) {
	const sec = sceneRate
	s := cuedScene(t, 12, mark{0, sec, "noise"}, mark{sec, 0, "target"}, mark{2 * sec, 0, "NOISE "}, mark{3 * sec, sec, "target"},
		mark{4 * sec, 2 * sec, "other"}, mark{6 * sec, sec, "Noise"}, mark{7 * sec, sec, "target"}, mark{8 * sec, sec, "noise"}, mark{9 * sec, 0, "target"}, mark{10 * sec, 0, "stop"})
	run := func(o Options) *Result {
		o.Toward, o.Reports, o.Overwrite = "90", "none", true
		return s.must(t, o)
	}
	cues := run(Options{NoiseCue: "noise", TargetCue: "target"})
	given := run(Options{Noise: "0..1,2..3,6..7,8..9", Target: "1..2,3..4,7..8,9..10"})
	clock := run(Options{Noise: "10:00:00..10:00:01,10:00:02..10:00:03.000,10:00:06..10:00:07,10:00:08..10:00:09", Target: "10:00:01..10:00:02,10:00:03..10:00:04,10:00:07..10:00:08,10:00:09..10:00:10"})
	for _, r := range []*Result{given, clock} {
		if fmt.Sprint(r.Segments.Noise, r.Segments.Target) != fmt.Sprint(cues.Segments.Noise, cues.Segments.Target) {
			t.Errorf("segments %v, by cue %v", r.Segments, cues.Segments)
		}
		if r.Segments.Source != SegmentsGiven || *r.Overall.SNRGainDB != *cues.Overall.SNRGainDB {
			t.Errorf("%s: gain %v dB, by cue %v dB", r.Segments.Source, *r.Overall.SNRGainDB, *cues.Overall.SNRGainDB)
		}
	}
	if cues.Segments.Source != SegmentsCues {
		t.Errorf("source %s", cues.Segments.Source)
	}
	// Noise that differs on four microphones: 10·lg 4 = 6.02 dB.
	if g := *cues.Overall.SNRGainDB; math.Abs(g-6.02) > 0.5 {
		t.Errorf("gain %.2f dB, want 6.02", g)
	}
	if got := fmt.Sprint(cues.Segments.NoiseTime[1]); got != "[10:00:02.000 10:00:03.000]" {
		t.Errorf("the second noise stretch is at %s", got)
	}
	// Given before cues.
	both := run(Options{Noise: "0..1,2..3", NoiseCue: "noise"})
	if both.Segments.Source != SegmentsGiven || finding(both, "cues-unused") == nil || len(both.Segments.Noise) != 2 {
		t.Errorf("given and cues: %v, %v", both.Segments, both.Findings)
	}
	// Each half may come from where it is known.
	mixed := run(Options{NoiseCue: "noise", Target: "1..2,3..4,7..8,9..10"})
	if mixed.Segments.Source != SegmentsCues || *mixed.Overall.SNRGainDB != *cues.Overall.SNRGainDB {
		t.Errorf("noise by cue, target given: %v", mixed.Segments)
	}
	mixed = run(Options{Noise: "0..1,2..3,6..7,8..9", TargetCue: "target"})
	if mixed.Segments.Source != SegmentsGiven || *mixed.Overall.SNRGainDB != *cues.Overall.SNRGainDB || finding(mixed, "cues-unused") != nil {
		t.Errorf("noise given, target by cue: %v", mixed.Segments)
	}
	// Weights learn the noise from cues as from seconds.
	learnt := run(Options{Weights: WeightsMinimumVariance, NoiseCue: "noise"})
	told := run(Options{Weights: WeightsMinimumVariance, Noise: "0..1,2..3,6..7,8..9"})
	if *learnt.Overall.SNRGainDB != *told.Overall.SNRGainDB {
		t.Errorf("minimum variance: %v dB by cue, %v dB by seconds", *learnt.Overall.SNRGainDB, *told.Overall.SNRGainDB)
	}
	// Cues before automatic; without target cues the rest holds the target.
	half := run(Options{NoiseCue: "noise"})
	if half.Segments.Source != SegmentsCues || finding(half, "target-taken") == nil || len(half.Segments.Target) == 0 {
		t.Errorf("noise cues alone: %v", half.Segments)
	}
}

func TestFaultsOfCuesAndTimes(t *testing.T) {
	s := cuedScene(t, 4, mark{0, sceneRate, "noise"}, mark{sceneRate / 2, sceneRate, "target"})
	bare := newScene(t, 2, wav.PCM16)
	for _, c := range []struct {
		o    Options
		want string
		in   scene
	}{
		{Options{NoiseCue: "nose"}, `--noise-cue "nose": no cue of`, s},
		{Options{NoiseCue: "nose"}, `there are "noise", "target"`, s},
		{Options{NoiseCue: "noise"}, "it has no cues", bare},
		{Options{NoiseCue: "noise", TargetCue: "target"}, "--noise-cue 0..1 and --target-cue 0.5..1.5 overlap", s},
		{Options{NoiseCue: "noise", Target: "0.5..2"}, "--noise-cue 0..1 and --target 0.5..2 overlap", s},
		{Options{TargetCue: "target"}, "--target-cue without --noise-cue", s},
		{Options{NoiseCue: "noise", NoMeasure: true}, "--noise-cue with --no-measure", s},
		{Options{Noise: "10:00:00..10:00:01"}, "has no time reference", bare},
		{Options{Excerpt: "10:00:00:00..10:00:01:00"}, "no frame rate", s},
		{Options{Noise: "09:00:00..09:00:01"}, "lasts from 10:00:00.000 to 10:00:04.000", s},
		{Options{Noise: "10:00:02..10:00:01"}, "lasts from 10:00:00.000 to 10:00:04.000", s},
		{Options{Excerpt: "10:00:04..10:00:05"}, "lasts from 10:00:00.000 to 10:00:04.000", s},
		{Options{Excerpt: "10::01..10:00:05"}, "neither seconds nor a time of day", s},
	} {
		c.o.Toward = "90"
		_, err := c.in.run(c.o)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%+v: %v, want %q", c.o, err, c.want)
		}
		c.in.onlyInputs(t)
	}
}

// Samples that are not numbers, in a file of a set, are named with the channel
// of the take they are on.
func TestSamplesThatAreNoNumbersAreNamedByChannel(t *testing.T) {
	b := newBench(t, 4000)
	for ch := range 4 {
		block := audio.NewBlock(1, 4000)
		for i := range 4000 {
			block.Channel(0)[i] = float32(b.x[ch][i]) / 128
		}
		path := b.at(fmt.Sprintf("f%d.wav", ch+1))
		writeWAV(t, path, 16000, wav.Float32, block)
		if ch == 2 {
			data, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			le.PutUint32(data[len(data)-4*100:], math.Float32bits(float32(math.Inf(1))))
			put(t, path, data)
		}
	}
	r := b.must(Options{NoMeasure: true}, b.at("f{ch}.wav"))
	f := finding(r, "take-"+wav.WarnNonFinite)
	if f == nil || !slices.Equal(f.Channels, []int{3}) || !strings.Contains(f.Message, "f3.wav") {
		t.Errorf("%v", f)
	}
}

// Times of day count the clock's seconds: in a recording pulled up by 0.1 % one
// of them is 16,016 frames of a file marked 16,000 Hz; labels in drop frame are
// those of SMPTE ST 12-1 (10:00:00;15 at 30000/1001: 36000 s of labels are
// 1,078,920 picture frames and 15 more, 36000.464 s of the clock).
func TestTimesOfDayOfPulledAndDropFrameTakes(t *testing.T) {
	b := newBench(t, 48000)
	speed := func(rate, flag, digitizer string) chunk {
		return ixmlChunk(`<SPEED><TIMECODE_RATE>` + rate + `</TIMECODE_RATE><TIMECODE_FLAG>` + flag + `</TIMECODE_FLAG><FILE_SAMPLE_RATE>16000</FILE_SAMPLE_RATE>` +
			`<DIGITIZER_SAMPLE_RATE>` + digitizer + `</DIGITIZER_SAMPLE_RATE><TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI>0</TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI>` +
			`<TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO>576000000</TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO><TIMESTAMP_SAMPLE_RATE>16000</TIMESTAMP_SAMPLE_RATE></SPEED>`)
	}
	pulled := b.put("pulled.wav", 0, 4, 0, 48000, speed("25/1", "NDF", "16016"))
	r := b.must(Options{NoMeasure: true, Excerpt: "10:00:01..10:00:02"}, pulled)
	if r.Output.FirstFrame != 16016 || r.Output.Frames != 16016 {
		t.Errorf("pulled up: %d frames from %d, want 16016 from 16016", r.Output.Frames, r.Output.FirstFrame)
	}
	drop := b.put("drop.wav", 0, 4, 0, 48000, speed("30000/1001", "DF", "16000"))
	r = b.must(Options{NoMeasure: true, Excerpt: "10:00:00;15..10:00:02"}, drop)
	// 1,078,935 picture frames of 1001/30000 s are 36000.4645 s.
	if want := int64(math.Ceil((1078935*1001.0/30000 - 36000) * 16000)); r.Output.FirstFrame != want {
		t.Errorf("drop frame: from frame %d, want %d", r.Output.FirstFrame, want)
	}
	// Without the rate of the labels FF has no length, and none is guessed.
	bare := b.put("bare.wav", 0, 4, 0, 48000, bextChunk("", "", "2026-05-01", "10:00:00", tenOClock, ""))
	if _, err := b.run(Options{NoMeasure: true, Excerpt: "10:00:00:12..10:00:01:00"}, bare); err == nil || !strings.Contains(err.Error(), "no frame rate") {
		t.Errorf("labels without a rate: %v", err)
	}
}
