package calibration

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
)

// calibrated is a take in which a tone sits on one channel after the other for
// the given seconds, with a second of noise alone between; the other channels
// hear it 25 dB lower. rms are root mean squares of the tone, full scale 1.
func calibrated(rms []float64, hz, seconds, noise float64, rate int) audio.Block {
	rng := rand.New(rand.NewPCG(1, uint64(len(rms))))
	step := int((seconds + 1) * float64(rate))
	b := audio.NewBlock(len(rms), step*len(rms)+rate/2)
	for ch := range rms {
		x := b.Channel(ch)
		for i := range x {
			v := noise * rng.NormFloat64()
			turn := i / step
			if at := i - turn*step; turn < len(rms) && at >= rate/2 && at < rate/2+int(seconds*float64(rate)) {
				level := rms[ch]
				if turn != ch {
					level *= math.Pow(10, -25.0/20)
				}
				v += level * math.Sqrt2 * math.Sin(2*math.Pi*hz*float64(i)/float64(rate)+float64(ch))
			}
			x[i] = float32(v)
		}
	}
	return b
}

// F13, F15, F16: 94 dB is 1.00237 Pa re 20 µPa (ISO 1683), a factor of 10 below
// 114 dB; a full-scale sine has a root mean square of -3.0103 dB re 1 and reads
// 0 dBFS (AES17); a microphone that reads -26 dBFS at 94 dB takes 120 dB to full
// scale.
func TestCalibratorGivesSensitivities(t *testing.T) {
	if p := measure.SoundPressure(94); math.Abs(p-1.00237) > 1e-5 {
		t.Errorf("94 dB is %.5f Pa, want 1.00237 Pa", p)
	}
	for k, rate := range []int{48000, 44100, 96000} {
		want := []float64{-26, -20.5, -31.25} // dBFS at 94 dB
		for _, db := range [][]float64{{94}, {94, 114}, {114}}[k] {
			var rms []float64
			for _, s := range want {
				rms = append(rms, math.Pow(10, (s+db-94-3.0103)/20))
			}
			hz := 1000 * (1 + 0.006*float64(rate%7))
			b := calibrated(rms, hz, 1.5, 1e-4, rate)
			tones, err := Tones(audio.FromBlock(rate, b), Calibrator{LevelDB: db, Hz: 1000, Tolerance: 0.25}, -1)
			if err != nil {
				t.Fatal(err)
			}
			for ch, tone := range tones {
				if !tone.Found {
					t.Errorf("%d Hz, %g dB, channel %d: %s", rate, db, ch+1, tone.Why)
					continue
				}
				if math.Abs(tone.SensitivityDBFS-want[ch]) > 0.005 {
					t.Errorf("%d Hz, %g dB, channel %d: 94 dB reads %.4f dBFS, want %.4f", rate, db, ch+1, tone.SensitivityDBFS, want[ch])
				}
				if math.Abs(tone.Hz-hz) > 0.5 {
					t.Errorf("%d Hz, channel %d: %.2f Hz, want %.2f Hz", rate, ch+1, tone.Hz, hz)
				}
				from := 0.5 + 2.5*float64(ch)
				if math.Abs(tone.From-from) > 0.15 || math.Abs(tone.To-from-1.5) > 0.15 {
					t.Errorf("%d Hz, channel %d: tone from %.2f to %.2f s, want %.1f to %.1f s", rate, ch+1, tone.From, tone.To, from, from+1.5)
				}
				// The class and nothing else to speak of: 0.25 dB/√3 for class 1.
				if math.Abs(tone.Std-0.1443) > 0.005 {
					t.Errorf("channel %d: standard uncertainty %.4f dB, want 0.144 dB", ch+1, tone.Std)
				}
				if got := measure.FullScaleSPL(tone.SensitivityDBFS); ch == 0 && math.Abs(got-120) > 0.005 {
					t.Errorf("full scale at %.3f dB, want 120 dB", got)
				}
			}
		}
	}
}

// F14: the tolerances of the classes [IEC 60942:2017, table 2].
func TestCalibratorClasses(t *testing.T) {
	for class, want := range map[string]float64{"LS": 0.10, "1": 0.25, "2": 0.40} {
		if got, ok := CalibratorTolerance(class); !ok || got != want {
			t.Errorf("class %s: %g dB, want %g dB", class, got, want)
		}
	}
	if _, ok := CalibratorTolerance("3"); ok {
		t.Error("there is no class 3")
	}
}

func TestTonesThatAreNoCalibrator(t *testing.T) {
	rate := 48000
	cal := Calibrator{LevelDB: 94, Hz: 1000, Tolerance: 0.25}
	first := func(b audio.Block, only int) Tone {
		tones, err := Tones(audio.FromBlock(rate, b), cal, only)
		if err != nil {
			t.Fatal(err)
		}
		return tones[0]
	}
	same := calibrated([]float64{0.05, 0.05}, 1000, 2, 1e-4, rate)
	both := audio.NewBlock(2, same.Frames())
	copy(both.Channel(0), same.Channel(0))
	copy(both.Channel(1), same.Channel(0))
	wavy := calibrated([]float64{0.05, 0.05}, 1000, 3, 1e-4, rate)
	for i, v := range wavy.Channel(0) {
		wavy.Channel(0)[i] = v * float32(1+0.1*math.Sin(2*math.Pi*float64(i)/float64(rate)))
	}
	for _, c := range []struct {
		name string
		b    audio.Block
		want string
	}{
		{"too short", calibrated([]float64{0.05, 0.05}, 1000, 0.6, 1e-4, rate), "steady for"},
		{"another frequency", calibrated([]float64{0.05, 0.05}, 1080, 2, 1e-4, rate), "no pure tone"},
		{"in noise", calibrated([]float64{0.01, 0.01}, 1000, 2, 0.01, rate), "no pure tone"},
		{"a loudspeaker", both, "never 10 dB above"},
		{"not steady", wavy, "steady for"},
		{"clipped", calibrated([]float64{0.7, 0.05}, 1000, 2, 1e-4, rate), "clipped"},
		{"silence", audio.NewBlock(2, rate), "no pure tone"},
		{"nothing", audio.NewBlock(2, 0), "no pure tone"},
	} {
		if tone := first(c.b, -1); tone.Found || !strings.Contains(tone.Why, c.want) {
			t.Errorf("%s: found %v, %q, want %q", c.name, tone.Found, tone.Why, c.want)
		}
	}
	// One take each: the channel is given.
	if tone := first(both, 0); !tone.Found {
		t.Errorf("the channel that is given: %s", tone.Why)
	}
	if _, err := Tones(audio.FromBlock(8000, audio.NewBlock(1, 100)), Calibrator{LevelDB: 94, Hz: 4000}, -1); err == nil {
		t.Error("a tone near half the rate is taken")
	}
}
