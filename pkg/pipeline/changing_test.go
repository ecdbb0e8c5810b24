package pipeline

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
	"alidade/pkg/wav"
)

// rendered writes the take, the parts alone and the rig of a scenario.
func rendered(t *testing.T, text, rigText string) (s scene, noise, target string) {
	t.Helper()
	sc, err := scenario.Load("scene.yaml", []byte(text), nil)
	if err != nil {
		t.Fatal(err)
	}
	r, err := sc.Render(scenario.Options{})
	if err != nil {
		t.Fatal(err)
	}
	s = scene{dir: t.TempDir()}
	s.rig = writeText(t, filepath.Join(s.dir, "rig.yaml"), rigText)
	var mix, alone, rest audio.Collect
	err = r.Each(func(m, a, n audio.Block) error {
		return errors.Join(mix.Write(m), alone.Write(a), rest.Write(n))
	})
	if err != nil {
		t.Fatal(err)
	}
	s.mix = mix.Block()
	s.take, noise, target = filepath.Join(s.dir, "take.wav"), filepath.Join(s.dir, "noise.wav"), filepath.Join(s.dir, "target.wav")
	for path, b := range map[string]audio.Block{s.take: s.mix, noise: rest.Block(), target: alone.Block()} {
		writeWAV(t, path, r.Format().Rate, wav.Float32, b)
	}
	return s, noise, target
}

const sixRig = "rig: six\nline: {count: 6, spacing_mm: 50}\n"

// wandering is a take of a target at 60° in every second second, and an
// interferer as loud that walks from 105° to 165° on the way, with a little
// noise of the microphones.
func wandering(t *testing.T, seconds int) (s scene, noise, target string) {
	t.Helper()
	on := "[1, 2]"
	for from := 3; from < seconds; from += 2 {
		on += fmt.Sprintf(", [%d, %d]", from, from+1)
	}
	return rendered(t, `scenario: a cart goes by
rate_hz: 8000
duration_s: `+fmt.Sprint(seconds)+`
seed: 5
rig: {rig: six, line: {count: 6, spacing_mm: 50}}
sources:
  - {name: wanted, kind: noise, spectrum: speech, at: {azimuth_deg: 60}, level_dbfs: -30, on_s: [`+on+`]}
  - name: cart
    role: interferer
    kind: noise
    spectrum: speech
    level_dbfs: -30
    path: [{at_s: 0, azimuth_deg: 105}, {at_s: `+fmt.Sprint(seconds)+`, azimuth_deg: 165}]
sensor_dbfs: -70
`, sixRig)
}

// Where the target is silent: in a take of 6 s, and in one of 16 s.
const (
	wanderingShort = "0..0.9,2.1..2.9,4.1..4.9"
	wanderingNoise = wanderingShort + ",6.1..6.9,8.1..8.9,10.1..10.9,12.1..12.9,14.1..14.9"
)

// An interferer that wanders: weights that are found again follow it where
// those of the whole take cannot, and the target is kept.
func TestWeightsFollowNoiseThatMoves(t *testing.T) {
	s, noise, target := wandering(t, 16)
	floor := -6.0
	o := Options{Toward: "60", Weights: WeightsMinimumVariance, WhiteNoiseGainFloorDB: &floor, Noise: wanderingNoise, IsolatedNoise: noise, IsolatedTarget: target}
	gain := map[string]*Result{}
	for name, every := range map[string]float64{"once": 0, "again": 2} {
		o.ReestimateEvery, o.Out = every, filepath.Join(s.dir, name+".wav")
		if every == 0 {
			// Weights of the whole take: found on its noise alone as well.
			o.IsolatedNoise, o.IsolatedTarget = noise, target
		}
		gain[name] = s.must(t, o)
	}
	o.ReestimateEvery, o.Weights, o.WhiteNoiseGainFloorDB, o.Out, o.Noise = 0, "", nil, filepath.Join(s.dir, "plain.wav"), ""
	gain["plain"] = s.must(t, o)
	for name, r := range gain {
		t.Logf("%s: SNR gain %s, target change %s, speech-weighted %s", name, show(r.Overall.SNRGainDB), show(r.Overall.TargetChangeDB), show(r.Overall.SpeechWeightedSNRGainDB))
		if tc := r.Overall.TargetChangeDB; tc == nil || math.Abs(*tc) > 0.1 {
			t.Errorf("%s: target change %s, want 0", name, show(tc))
		}
	}
	once, again := *gain["once"].Overall.SNRGainDB, *gain["again"].Overall.SNRGainDB
	if again < once+3 {
		t.Errorf("found again every 2 s: SNR gain %.2f dB, want 3 dB above the %.2f dB of fixed weights", again, once)
	}
	c := gain["again"].Steer.Changes
	if c == nil || c.EveryS != 2 || c.CrossFadeS != 0.5 || len(c.NoiseAtS) != len(c.FromS) || len(c.FromS) < 7 || c.FromS[0] != 0 {
		t.Fatalf("weights over time: %+v", c)
	}
	for j := 1; j < len(c.FromS); j++ {
		if mid := (c.NoiseAtS[j-1] + c.NoiseAtS[j]) / 2; math.Abs(c.FromS[j]-mid) > 1e-4 {
			t.Errorf("set %d is in force from %g s, want %g s, half-way between its noise and that before", j+1, c.FromS[j], mid)
		}
	}
	if gain["once"].Steer.Changes != nil || !hasFinding(gain["again"], "weights-reestimated") {
		t.Error("the report does not tell weights that change from those that do not")
	}
	if f := findingOf(gain["again"], "stretches-unused"); f != nil {
		t.Errorf("the weights were found on --noise, and yet: %s", f.Message)
	}
}

func findingOf(r *Result, code string) *Finding {
	for i, f := range r.Findings {
		if f.Code == code {
			return &r.Findings[i]
		}
	}
	return nil
}

// Shadow filtering is linear: what the target and the noise alone leave behind
// filters that follow the mix adds up to the track of the mix. With the same
// bytes from blocks of any size and any number of cores, and the length and the
// timing of the take.
func TestFiltersThatFollowTheSoundAreLinearAndExact(t *testing.T) {
	s, noise, target := wandering(t, 6)
	for _, c := range []struct {
		name string
		o    Options
	}{
		{"again", Options{Weights: WeightsMinimumVariance, ReestimateEvery: 2, Noise: wanderingShort}},
		{"white", Options{Postfilter: PostfilterWhite, Method: MethodSinc}},
		{"both", Options{Weights: WeightsMinimumVariance, ReestimateEvery: 3, Noise: wanderingShort, Postfilter: PostfilterDiffuse, PostfilterFloorDB: ptr(-12)}},
	} {
		c.o.Toward, c.o.Out, c.o.Format, c.o.Overwrite = "60", filepath.Join(s.dir, "y.wav"), FormatFloat32, true
		c.o.IsolatedNoise, c.o.IsolatedTarget = noise, target
		var want []byte
		for _, block := range []int{0, 777} {
			old := runtime.GOMAXPROCS(1 + block%2)
			c.o.BlockFrames = block
			r := s.must(t, c.o)
			runtime.GOMAXPROCS(old)
			got, err := json.Marshal(r)
			if err != nil {
				t.Fatal(err)
			}
			track, err := os.ReadFile(c.o.Out)
			if err != nil {
				t.Fatal(err)
			}
			if got = append(got, track...); want == nil {
				want = got
			}
			if !bytes.Equal(got, want) {
				t.Errorf("%s: blocks of %d: other bytes", c.name, block)
			}
			if r.Output.Frames != int64(s.mix.Frames()) {
				t.Errorf("%s: %d frames, the take has %d", c.name, r.Output.Frames, s.mix.Frames())
			}
		}
		track, _ := readWAV(t, c.o.Out)
		all := track.Channel(0)
		// The gains of the mix on each part, by the pipeline's own chain: their
		// powers are in the report, their sum is the track.
		sum := make([]float64, len(all))
		for _, part := range []string{noise, target} {
			for i, x := range s.shadow(t, c.o, part) {
				sum[i] += float64(x)
			}
		}
		var off, power float64
		for i, x := range all {
			off += math.Pow(float64(x)-sum[i], 2)
			power += float64(x) * float64(x)
		}
		if db := 10 * math.Log10(off/power); !(db < -100) {
			t.Errorf("%s: target and noise alone differ from the mix by %.1f dB", c.name, db)
		}
	}
}

// shadow returns a part of the take through the chain of its track.
func (s scene) shadow(t *testing.T, o Options, part string) []float32 {
	t.Helper()
	set, err := o.resolve()
	if err != nil {
		t.Fatal(err)
	}
	l, err := loadRig(s.rig, o)
	if err != nil {
		t.Fatal(err)
	}
	r := &run{ctx: t.Context(), spec: Spec{Take: []string{s.take}, Options: o}, set: set, rig: l}
	if r.take, err = openTake(r.spec.Take, joining{}, false); err != nil {
		t.Fatal(err)
	}
	if r.line, err = newBeamline(l, set, r.take.header.Rate); err != nil {
		t.Fatal(err)
	}
	if set.designed() {
		if err := r.design(); err != nil {
			t.Fatal(err)
		}
	}
	p, err := openTake([]string{part}, joining{}, false)
	if err != nil {
		t.Fatal(err)
	}
	var along audio.Source
	if set.Postfilter != PostfilterNone {
		src, done, err := r.alongside()
		if err != nil {
			t.Fatal(err)
		}
		defer done()
		along = src
	}
	var out audio.Collect
	if _, err := r.driveTrack(p.source(), along, &out); err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(p.close(), r.take.close()); err != nil {
		t.Fatal(err)
	}
	return out.Block().Channel(0)
}

// In diffuse noise a postfilter adds to what the beam gains, more where it knows
// the noise for diffuse; the target is lowered by less. The figures are those of
// shadow filtering, and without isolated takes only the pauses are measured.
func TestPostfilterInDiffuseNoise(t *testing.T) {
	s, noise, target := rendered(t, `scenario: a hall of machines
rate_hz: 16000
duration_s: 10
seed: 11
rig: {rig: six, line: {count: 6, spacing_mm: 50}}
sources:
  - {name: caller, kind: talker, at: {azimuth_deg: 60}, level_dbfs: -30, on_s: [[2, 9.5]]}
diffuse:
  - {level_dbfs: -35, spectrum: speech}
sensor_dbfs: -80
`, sixRig)
	gain := map[string]*Result{}
	for _, kind := range []string{PostfilterNone, PostfilterWhite, PostfilterDiffuse} {
		r := s.must(t, Options{Toward: "60", Postfilter: kind, IsolatedNoise: noise, IsolatedTarget: target, Out: filepath.Join(s.dir, kind+".wav")})
		gain[kind] = r
		t.Logf("%s: noise reduction %s dB, target change %s, SNR gain %s, speech-weighted %s", kind, show(r.Overall.NoiseReductionDB),
			show(r.Overall.TargetChangeDB), show(r.Overall.SNRGainDB), show(r.Overall.SpeechWeightedSNRGainDB))
		if kind == PostfilterNone {
			if r.Steer.Postfilter != nil || hasFinding(r, "postfilter") {
				t.Error("no postfilter, and yet the report has one")
			}
			continue
		}
		p := r.Steer.Postfilter
		if p == nil || p.Kind != kind || p.FloorDB != -15 || p.NoiseReductionDB == nil || p.TargetChangeDB == nil || !hasFinding(r, "postfilter") {
			t.Fatalf("%s: postfilter %+v", kind, p)
		}
		// What the filter adds is the difference to the beam alone.
		if d := *r.Overall.NoiseReductionDB - *gain[PostfilterNone].Overall.NoiseReductionDB - *p.NoiseReductionDB; math.Abs(d) > 0.05 {
			t.Errorf("%s: %.2f dB of noise reduction beyond the beam, off by %.2f", kind, *p.NoiseReductionDB, d)
		}
	}
	none, white, diffuse := gain[PostfilterNone].Overall, gain[PostfilterWhite].Overall, gain[PostfilterDiffuse].Overall
	if *diffuse.SNRGainDB < *none.SNRGainDB+3 || *white.SNRGainDB < *none.SNRGainDB+0.5 || *diffuse.SNRGainDB < *white.SNRGainDB+1 {
		t.Errorf("SNR gain %.2f dB of the beam, %.2f with the filter for white and %.2f with that for diffuse noise: want 0.5 and 3 dB more", *none.SNRGainDB, *white.SNRGainDB, *diffuse.SNRGainDB)
	}
	if *diffuse.TargetChangeDB < -3 {
		t.Errorf("target change %.2f dB, want above -3", *diffuse.TargetChangeDB)
	}
	r := s.must(t, Options{Toward: "60", Postfilter: PostfilterDiffuse, Noise: "0..1.9", Out: filepath.Join(s.dir, "blind.wav")})
	if r.Overall.NoiseReductionDB == nil || r.Overall.SNRGainDB != nil || r.Overall.TargetChangeDB != nil || r.Steer.Postfilter.NoiseReductionDB == nil || r.Steer.Postfilter.TargetChangeDB != nil {
		t.Errorf("without isolated takes: overall %+v, postfilter %+v", r.Overall, r.Steer.Postfilter)
	}
	for _, b := range r.Bands {
		if b.SNRGainDB != nil || b.TargetOutDBFS != nil || !hasFlag(b, measure.TargetUnmeasurable) {
			t.Errorf("without isolated takes: %g Hz: %+v", b.NominalHz, b)
		}
	}
}

func TestFiltersThatCannotFollowTheSound(t *testing.T) {
	s, noise, _ := wandering(t, 6)
	short := filepath.Join(s.dir, "short.wav")
	writeWAV(t, short, 8000, wav.Float32, s.mix.Slice(0, 8000))
	mv := func(o Options) Options { o.Weights = WeightsMinimumVariance; return o }
	for _, c := range []struct {
		name, want string
		o          Options
	}{
		{"again without minimum variance", "only the weights minimum-variance", Options{ReestimateEvery: 2}},
		{"too often", "want 0.5 to 3600 s", mv(Options{ReestimateEvery: 0.1})},
		{"unknown postfilter", "want one of none, white, diffuse", Options{Postfilter: "pink"}},
		{"floor without postfilter", "a floor belongs to", Options{PostfilterFloorDB: ptr(-10)}},
		{"floor above 0", "want -60 to 0 dB", Options{Postfilter: PostfilterWhite, PostfilterFloorDB: ptr(3)}},
		{"isolated noise of another length", "frame by frame", Options{Postfilter: PostfilterWhite, IsolatedNoise: short}},
		{"again on isolated noise of another length", "frame by frame", mv(Options{ReestimateEvery: 2, Noise: wanderingShort, IsolatedNoise: short})},
		{"again on too little noise", "fewer than its 6 microphones", mv(Options{ReestimateEvery: 2, Noise: "0..0.1"})},
	} {
		t.Run(c.name, func(t *testing.T) {
			c.o.Toward, c.o.Out = "60", filepath.Join(s.dir, "out.wav")
			r, err := s.run(c.o)
			var usage *UsageError
			if r != nil || !errors.As(err, &usage) || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want a usage error with %q", err, c.want)
			}
			if _, err := os.Stat(c.o.Out); err == nil {
				t.Error("a track was left behind")
			}
		})
	}
	// Noise that is enough for one set is one set, and a warning.
	r := s.must(t, mv(Options{Toward: "60", ReestimateEvery: 3600, Noise: "0..0.6", IsolatedNoise: noise, Out: filepath.Join(s.dir, "few.wav")}))
	if f := findingOf(r, "weights-not-reestimated"); f == nil || f.Severity != Warning {
		t.Errorf("noise for one set: %+v", r.Findings)
	}
}

// Sets of weights that would outgrow memory are refused before they are found.
func TestSetsOfWeightsAreBounded(t *testing.T) {
	l := &learner{every: 24000, need: 32}
	l.task.Mics, l.task.Rate, l.task.FFTSize = make([]rig.Point, 16), 48000, 2048
	err := l.room([][2]int64{{0, 4 * 3600 * 48000}})
	var usage *UsageError
	if !errors.As(err, &usage) || !strings.Contains(err.Error(), "want at most 256 MB") || !strings.Contains(usage.Hint, "--reestimate-every") {
		t.Fatalf("four hours every 0.5 s: %v", err)
	}
	var least float64
	if _, err := fmt.Sscanf(usage.Hint, "give --reestimate-every %f", &least); err != nil {
		t.Fatal(err)
	}
	l.every = int64(48000 * least)
	if err := l.room([][2]int64{{0, 4 * 3600 * 48000}}); err != nil {
		t.Errorf("as the hint says: %v", err)
	}
	l.every = 24000
	if err := l.room([][2]int64{{0, 60 * 48000}}); err != nil {
		t.Errorf("a minute of noise: %v", err)
	}
}

// Minimum variance with a dead channel kept would listen to it alone: it is
// refused, by its channel; the other channels in use, down to two, can be used.
func TestMinimumVarianceRefusesDeadChannels(t *testing.T) {
	s, _, _ := wandering(t, 6)
	for _, ch := range []int{1, 4} {
		clear(s.mix.Channel(ch))
	}
	s.mix.Channel(1)[5] = 1e-5
	writeWAV(t, s.take, 8000, wav.Float32, s.mix)
	for _, every := range []float64{0, 2} {
		o := Options{Toward: "60", Weights: WeightsMinimumVariance, ReestimateEvery: every, Noise: wanderingShort, KeepDead: true, Out: filepath.Join(s.dir, "y.wav")}
		_, err := s.run(o)
		var usage *UsageError
		if !errors.As(err, &usage) || !strings.Contains(err.Error(), "channels 2 and 5 are in the noise more than 40 dB below") || !strings.Contains(usage.Hint, "use: false") {
			t.Errorf("two dead channels: %v", err)
		}
	}
	// What is silent everywhere tells nothing, and delay-and-sum is the answer.
	s.mix.Clear()
	writeWAV(t, s.take, 8000, wav.Float32, s.mix)
	s.must(t, Options{Toward: "60", Weights: WeightsMinimumVariance, Noise: wanderingShort, Out: filepath.Join(s.dir, "y.wav")})
}
