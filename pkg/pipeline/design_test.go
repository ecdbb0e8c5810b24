package pipeline

import (
	"errors"
	"math"
	"math/rand/v2"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/delay"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

// interfered is a take of a line of six with an interferer at 150°, a target
// at 60° in every second second and a little noise of the microphones, the
// same alone, and its rig. The third channel is late by 100 µs, as the rig
// says.
func interfered(t *testing.T) (s scene, noise, target string) {
	t.Helper()
	const rate, n, mics = 16000, 12 * 16000, 6
	s = scene{dir: t.TempDir()}
	s.take, s.rig = filepath.Join(s.dir, "take.wav"), filepath.Join(s.dir, "six.yaml")
	var at []rig.Point
	text := "rig: six\nmicrophones:\n"
	for m := range mics {
		at = append(at, rig.Point{X: 0.05 * (float64(m) - 2.5)})
		late := ""
		if m == 2 {
			late = ", delay_us: -100"
		}
		text += "  - {name: S" + string(rune('1'+m)) + ", channel: " + string(rune('1'+m)) + ", at_mm: [" + show(number(1000*at[m].X)) + ", 0, 0]" + late + "}\n"
	}
	writeText(t, s.rig, text)
	kernel, err := delay.NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	plane := func(azimuth, level float64, seed uint64, sounding func(i int) bool) audio.Block {
		rng := rand.New(rand.NewPCG(seed, 3))
		x := audio.NewBlock(mics, n)
		slow := 0.0
		for i := range n {
			slow = 0.7*slow + level*rng.NormFloat64() // low-passed: in the band of the sinc
			v := 0.0
			if sounding(i) {
				v = slow
			}
			for m := range mics {
				x.Channel(m)[i] = float32(v)
			}
		}
		taus := acoustics.Delays(nil, acoustics.Plane{From: rig.Degrees(azimuth, 0)}, at, rig.Point{}, acoustics.DryAir(20).Speed())
		taus[2] += 100e-6
		src, err := delay.NewShift(audio.FromBlock(rate, x), kernel, taus)
		if err != nil {
			t.Fatal(err)
		}
		y, err := audio.ReadAll(src)
		if err != nil {
			t.Fatal(err)
		}
		return y
	}
	always := func(int) bool { return true }
	alone := plane(60, 0.05, 11, func(i int) bool { return i/rate%2 == 1 })
	rest := plane(150, 0.05, 12, always)
	rng := rand.New(rand.NewPCG(13, 3))
	for m := range mics {
		for i := range n {
			rest.Channel(m)[i] += float32(0.001 * rng.NormFloat64())
		}
	}
	noise, target = filepath.Join(s.dir, "noise.wav"), filepath.Join(s.dir, "target.wav")
	writeWAV(t, s.take, rate, wav.Float32, add(alone, 1, rest))
	writeWAV(t, noise, rate, wav.Float32, rest)
	writeWAV(t, target, rate, wav.Float32, alone)
	return s, noise, target
}

const sixNoise = "0..0.9,2.1..2.9,4.1..4.9,6.1..6.9,8.1..8.9,10.1..10.9"

// Minimum variance and a null towards the interferer take it away where
// delay-and-sum cannot, and neither loses the target, although a channel is
// late: figures from the target and the noise alone through the same weights.
func TestDesignedWeightsTakeAnInterfererAway(t *testing.T) {
	s, noise, target := interfered(t)
	floor := -6.0
	gain := map[string]*Result{}
	for _, c := range []struct {
		name string
		o    Options
	}{
		{"delay-and-sum", Options{}},
		{"minimum variance, given", Options{Weights: WeightsMinimumVariance, Noise: sixNoise, WhiteNoiseGainFloorDB: &floor}},
		{"minimum variance, isolated", Options{Weights: WeightsMinimumVariance, WhiteNoiseGainFloorDB: &floor}},
		{"null", Options{Null: []string{"150"}, WhiteNoiseGainFloorDB: &floor}},
		{"superdirective", Options{Weights: WeightsSuperdirective, Null: []string{"150"}, WhiteNoiseGainFloorDB: &floor}},
	} {
		c.o.Toward, c.o.Out = "60", filepath.Join(s.dir, strings.ReplaceAll(c.name, " ", "_")+".wav")
		if c.name != "minimum variance, given" {
			c.o.IsolatedNoise, c.o.IsolatedTarget = noise, target
		}
		r := s.must(t, c.o)
		gain[c.name] = r
		t.Logf("%s: SNR gain %s, target change %s", c.name, show(r.Overall.SNRGainDB), show(r.Overall.TargetChangeDB))
		if tc := r.Overall.TargetChangeDB; tc == nil || math.Abs(*tc) > 0.1 {
			t.Errorf("%s: target change %s, want 0", c.name, show(tc))
		}
		if r.Steer.Weights == "" || (c.name != "delay-and-sum") != (r.Steer.FloorDB != nil) {
			t.Errorf("%s: steer %+v", c.name, r.Steer)
		}
	}
	plain := *gain["delay-and-sum"].Overall.SNRGainDB
	for name, r := range gain {
		if name != "delay-and-sum" && *r.Overall.SNRGainDB < plain+6 {
			t.Errorf("%s: SNR gain %.2f dB, want 6 dB above delay-and-sum's %.2f", name, *r.Overall.SNRGainDB, plain)
		}
	}
	if !hasFinding(gain["minimum variance, given"], "weights-from-measured-noise") {
		t.Error("no word that the weights have heard the noise they are measured in")
	}
}

func hasFinding(r *Result, code string) bool {
	for _, f := range r.Findings {
		if f.Code == code {
			return true
		}
	}
	return false
}

func TestWeightsThatCannotBe(t *testing.T) {
	s := newScene(t, 1, wav.PCM16)
	for _, c := range []struct {
		name, want string
		o          Options
	}{
		{"unknown", "superdirective", Options{Weights: "best"}},
		{"in the time domain", "need the method spectral", Options{Weights: WeightsSuperdirective, Method: MethodSinc}},
		{"null in the time domain", "need the method spectral", Options{Null: []string{"10"}, Method: MethodFarrow}},
		{"null at the target", "deaf", Options{Null: []string{"60"}}},
		{"null in words", "not a number", Options{Null: []string{"behind"}}},
		{"more nulls than microphones", "constraint", Options{Null: []string{"0", "20", "100", "120", "150"}, WhiteNoiseGainFloorDB: ptr(-20)}},
		{"taper with superdirective", "without a taper", Options{Weights: WeightsSuperdirective, Taper: "hann"}},
		{"null with constant beamwidth", "nulls go with", Options{Weights: WeightsConstantBeamwidth, Null: []string{"150"}}},
		{"floor with delay-and-sum", "floor belongs", Options{WhiteNoiseGainFloorDB: ptr(-3)}},
		{"floor out of reach", "floor", Options{Weights: WeightsSuperdirective, WhiteNoiseGainFloorDB: ptr(9)}},
		{"no measuring and no noise", "the noise must be known", Options{Weights: WeightsMinimumVariance, NoMeasure: true}},
		{"noise too short", "microphones", Options{Weights: WeightsMinimumVariance, Noise: "0..0.05"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			c.o.Toward = "60"
			r, err := s.run(c.o)
			var usage *UsageError
			if r != nil || !errors.As(err, &usage) || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want a usage error with %q", err, c.want)
			}
			s.onlyInputs(t)
		})
	}
	// Nothing but noise of one level: no noise-only stretch is known.
	_, err := s.run(Options{Toward: "60", Weights: WeightsMinimumVariance})
	if err != nil && !strings.Contains(err.Error(), "no stretch with noise alone") && !strings.Contains(err.Error(), "longer noise") {
		t.Errorf("got %v", err)
	}
}
