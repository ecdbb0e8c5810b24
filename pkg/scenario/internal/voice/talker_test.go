package voice

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"
)

func said(rate int, pitch float64, seed uint64, frames int) []float64 {
	x := make([]float64, frames)
	New(rate, pitch, rand.New(rand.NewPCG(seed, 1))).Next(x)
	return x
}

func meanSquare(x []float64) float64 {
	var e float64
	for _, v := range x {
		e += v * v
	}
	return e / float64(len(x))
}

// octaveHz is the exact mid-band frequency of octave b, 125 Hz being 0 (IEC
// 61260-1:2014, 5.3).
func octaveHz(b int) float64 { return 1000 * math.Pow(10, 0.3*float64(b-3)) }

// octaveLevels returns the level of each octave 125 Hz to 8 kHz, dB.
func octaveLevels(x []float64, rate int) []float64 {
	const size = 4096
	fft := fourier.NewFFT(size)
	power := make([]float64, 7)
	w := make([]float64, size)
	for at := 0; at+size <= len(x); at += size / 2 {
		for i := range w {
			w[i] = x[at+i] * (0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/size))
		}
		for k, c := range fft.Coefficients(nil, w) {
			hz := float64(k) * float64(rate) / size
			if b := int(math.Floor(math.Log10(hz/octaveHz(0))/0.3 + 0.5)); hz > 50 && b >= 0 && b < len(power) {
				power[b] += real(c)*real(c) + imag(c)*imag(c)
			}
		}
	}
	for b := range power {
		power[b] = 10 * math.Log10(power[b])
	}
	return power
}

// A talker sounds like a voice to a meter: it pauses, its power lies where that
// of speech does, and its level swings.
func TestTalkerLooksLikeSpeech(t *testing.T) {
	speech := [...]float64{math.NaN(), -2.2, 0, -5.0, -10.3, -15.6, -22.1} // octaves against 500 Hz
	for _, rate := range []int{8000, 16000, 48000} {
		x := said(rate, 115, 9, 40*rate)
		total := meanSquare(x)
		var quiet, frames int
		step := rate / 50
		var levels []float64
		for at := 0; at+step <= len(x); at += step {
			l := 10 * math.Log10(meanSquare(x[at:at+step])/total+1e-12)
			levels = append(levels, l)
			if l < -30 {
				quiet++
			}
			frames++
		}
		if share := float64(quiet) / float64(frames); share < 0.08 || share > 0.5 {
			t.Errorf("%d Hz: silent for %.0f %% of the time, want 8 to 50 %%", rate, 100*share)
		}
		slices.Sort(levels)
		if spread := levels[len(levels)*9/10] - levels[len(levels)/2]; spread < 2 || spread > 15 {
			t.Errorf("%d Hz: loud parts stand %.1f dB above the median, want 2 to 15 dB", rate, spread)
		}
		octaves := octaveLevels(x, rate)
		for b, v := range octaves {
			if octaveHz(b)*1.4 > float64(rate)/2 {
				continue
			}
			// Against the standard speech spectrum (ANSI S3.5-1997, table 3, normal
			// effort) in octaves; talkers differ by several decibels (common practice).
			if d := v - octaves[2] - speech[b]; b > 0 && math.Abs(d) > 8 {
				t.Errorf("%d Hz: octave %.0f Hz stands %.1f dB above 500 Hz, that of speech %.1f", rate, octaveHz(b), v-octaves[2], speech[b])
			}
		}
		for i, v := range x {
			if math.IsNaN(v) || math.Abs(v) > 100*math.Sqrt(total) {
				t.Fatalf("%d Hz: sample %d is %g", rate, i, v)
			}
		}
		t.Logf("%d Hz: octaves %.1f", rate, octaves)
	}
}

func TestTalkerHasItsPitch(t *testing.T) {
	const rate = 16000
	for _, pitch := range []float64{90, 200} {
		x := said(rate, pitch, 4, 20*rate)
		// The autocorrelation of a voice peaks at its period.
		best, at := 0.0, 0
		for lag := int(rate / (1.6 * pitch)); lag < int(rate/(0.6*pitch)); lag++ {
			var r float64
			for i := lag; i < len(x); i++ {
				r += x[i] * x[i-lag]
			}
			if r > best {
				best, at = r, lag
			}
		}
		if got := float64(rate) / float64(at); got < 0.75*pitch || got > 1.3*pitch {
			t.Errorf("pitch %.0f Hz, want about %.0f", got, pitch)
		}
	}
}

func TestTalkerDoesNotDependOnHowItIsRead(t *testing.T) {
	whole := said(16000, 115, 3, 9000)
	parts := New(16000, 115, rand.New(rand.NewPCG(3, 1)))
	got := make([]float64, len(whole))
	for at, n := 0, 1; at < len(got); at, n = at+n, n*3%1009+1 {
		n = min(n, len(got)-at)
		parts.Next(got[at : at+n])
	}
	if !slices.Equal(got, whole) {
		t.Error("other samples when read in pieces")
	}
	if slices.Equal(said(16000, 115, 4, 9000), whole) {
		t.Error("two seeds say the same")
	}
}
