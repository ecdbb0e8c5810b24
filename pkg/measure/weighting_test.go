package measure

import (
	"math"
	"testing"
)

func TestAWeightingIsThatOfTheTable(t *testing.T) {
	// G11: IEC 61672-1:2013, Table 3; at the exact frequencies 1000·10^(k/10),
	// within 0.051 dB.
	want := []float64{-70.4, -63.4, -56.7, -50.5, -44.7, -39.4, -34.6, -30.2, -26.2, -22.5, -19.1, -16.1, -13.4, -10.9, -8.6, -6.6,
		-4.8, -3.2, -1.9, -0.8, 0, 0.6, 1.0, 1.2, 1.3, 1.2, 1.0, 0.5, -0.1, -1.1, -2.5, -4.3, -6.6, -9.3}
	for i, w := range want {
		hz := 1000 * math.Pow(10, float64(i-20)/10)
		if got := AWeightingDB(hz); math.Abs(got-w) > 0.051 {
			t.Errorf("AWeightingDB(%.1f) = %.3f, want %.1f", hz, got, w)
		}
	}
	if got := AWeightingDB(0); !math.IsInf(got, -1) {
		t.Errorf("AWeightingDB(0) = %g, want -Inf", got)
	}
}

func TestBandImportance(t *testing.T) {
	// G14: ANSI S3.5-1997, Table 3; sum 1.
	thirds := map[float64]float64{160: 0.0083, 200: 0.0095, 250: 0.015, 315: 0.0289, 400: 0.044, 500: 0.0578, 630: 0.0653, 800: 0.0711,
		1000: 0.0818, 1250: 0.0844, 1600: 0.0882, 2000: 0.0898, 2500: 0.0868, 3150: 0.0844, 4000: 0.0771, 5000: 0.0527, 6300: 0.0364, 8000: 0.0185}
	sum := 0.0
	for _, b := range ThirdOctaves(48000) {
		got := SpeechImportance(b)
		sum += got
		if got != thirds[b.NominalHz] {
			t.Errorf("third %g Hz: %g, want %g", b.NominalHz, got, thirds[b.NominalHz])
		}
	}
	if math.Abs(sum-1) > 1e-9 {
		t.Errorf("thirds sum to %.10f", sum)
	}
	// G15: ANSI S3.5-1997, Table 4. G16: each octave is the sum of its thirds,
	// and the 250 Hz octave takes the 160 Hz third too.
	octaves := map[float64]float64{250: 0.0617, 500: 0.1671, 1000: 0.2373, 2000: 0.2648, 4000: 0.2142, 8000: 0.0549}
	sum = 0
	for _, o := range Octaves(48000) {
		got, parts := SpeechImportanceOctave(o), 0.0
		sum += got
		for _, b := range ThirdOctaves(48000) {
			if b.CentreHz > o.LowHz && b.CentreHz < o.HighHz {
				if o.NominalHz != 125 {
					parts += SpeechImportance(b)
				}
			}
		}
		if o.NominalHz == 250 {
			parts += 0.0083
		}
		if got != octaves[o.NominalHz] || math.Abs(got-parts) > 1e-9 {
			t.Errorf("octave %g Hz: %g, want %g; its thirds sum to %g", o.NominalHz, got, octaves[o.NominalHz], parts)
		}
	}
	if math.Abs(sum-1) > 1e-9 {
		t.Errorf("octaves sum to %.10f", sum)
	}
}

func TestSoundPressureLevels(t *testing.T) {
	// F13: IEC 60942 (94 and 114 dB calibrators), ISO 1683.
	for _, c := range []struct{ got, want float64 }{
		{SoundPressureLevelDB(1), 93.9794}, {SoundPressure(94), 1.00237}, {SoundPressure(114), 10.02374},
		{SoundPressure(114) / SoundPressure(94), 10},
	} {
		if math.Abs(c.got-c.want) > 1e-4 {
			t.Errorf("got %.5f, want %.5f", c.got, c.want)
		}
	}
	// F15: microphone data sheets with AES17 (common practice): -26 dBFS at
	// 94 dB puts full scale at 120 dB; a floor of -87 dBFS(A) is 33 dB, 61 dB
	// below 94.
	if got := FullScaleSPL(-26); got != 120 {
		t.Errorf("FullScaleSPL(-26) = %g, want 120", got)
	}
	if floor := -87 + FullScaleSPL(-26); floor != 33 || 94-floor != 61 {
		t.Errorf("noise floor %g dB", floor)
	}
}
