package render

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// octaveLevels returns the level of each octave 125 Hz to 8 kHz, dB.
func octaveLevels(x []float64, rate int) []float64 {
	const size = 4096
	fft := plan64(size)
	re, im := make([]float64, size/2+1), make([]float64, size/2+1)
	power := make([]float64, len(OctavesHz))
	w := make([]float64, size)
	for at := 0; at+size <= len(x); at += size / 2 {
		for i := range w {
			w[i] = x[at+i] * (0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/size))
		}
		fft.Forward(re, im, w)
		for k := range re {
			hz := float64(k) * float64(rate) / size
			if b := int(math.Floor(math.Log10(hz/OctaveHz(0))/0.3 + 0.5)); hz > 50 && b >= 0 && b < len(power) {
				power[b] += re[k]*re[k] + im[k]*im[k]
			}
		}
	}
	for b := range power {
		power[b] = 10 * math.Log10(power[b])
	}
	return power
}

func take(s Mono, frames int) []float64 {
	x := make([]float64, frames)
	s.Next(x)
	return x
}

func meanSquare(x []float64) float64 {
	var e float64
	for _, v := range x {
		e += v * v
	}
	return e / float64(len(x))
}

func TestShapesKeepThePower(t *testing.T) {
	for _, spectrum := range []string{SpectrumPink, SpectrumOutdoors, SpectrumSpeech, spectrumWind} {
		for _, rate := range []int{8000, 48000, 192000} {
			var energy float64
			for _, h := range Shape(spectrum, rate) {
				energy += h * h
			}
			if math.Abs(energy-1) > 1e-12 {
				t.Errorf("%s at %d Hz: power %g, want 1", spectrum, rate, energy)
			}
		}
	}
	if Shape(SpectrumWhite, 48000) != nil || Shape("", 48000) != nil {
		t.Error("white noise has a filter")
	}
}

// Pink noise has equal octaves, white ones rise by 3.0103 dB (G10: elementary);
// speech falls as the standard speech spectrum: octave levels of ANSI
// S3.5-1997, table 3, normal effort, summed from its thirds with their
// bandwidths.
func TestSpectraFallAsTheyShould(t *testing.T) {
	const rate = 48000
	thirds := []float64{32.41, 34.48, 34.75, 33.98, 34.59, 34.27, 32.06, 28.30, 25.01, 23.00, 20.15, 17.32, 13.18, 11.55, 9.33, 5.31, 2.59, 1.13}
	speech := func(first int) float64 { // of the octave whose lowest third is thirds[first]
		var p float64
		for b := first; b < first+3; b++ {
			p += math.Pow(10, thirds[b]/10) * 158.489 * math.Pow(10, float64(b)/10)
		}
		return 10 * math.Log10(p)
	}
	white := take(Noise(SpectrumWhite, rate, Stream(1, "t", 0)), 15*rate)
	pink := take(Noise(SpectrumPink, rate, Stream(1, "t", 1)), 15*rate)
	voice := take(Noise(SpectrumSpeech, rate, Stream(1, "t", 2)), 15*rate)
	w, p, v := octaveLevels(white, rate), octaveLevels(pink, rate), octaveLevels(voice, rate)
	for b := 1; b < len(w); b++ {
		// 15 s of the 125 Hz octave hold 1300 independent values: 0.12 dB of spread.
		if d := w[b] - w[b-1]; math.Abs(d-3) > 0.4 {
			t.Errorf("white octave %d rises by %.2f dB, want 3", b, d)
		}
		if d := p[b] - p[b-1]; math.Abs(d) > 0.4 {
			t.Errorf("pink octave %d rises by %.2f dB, want 0", b, d)
		}
	}
	for b := 2; b < len(v)-1; b++ { // 500 Hz to 4 kHz; the table ends inside the 8 kHz octave
		want := speech(3*(b-1)+1) - speech(1)
		if d := v[b] - v[1]; math.Abs(d-want) > 0.5 {
			t.Errorf("speech octave %g Hz stands %.2f dB above 250 Hz, want %.2f", OctavesHz[b], d, want)
		}
	}
}

func TestStreamsOfDifferentPurposeDiffer(t *testing.T) {
	a := take(&Gaussian{Stream(5, "sensor", 0)}, 20000)
	for name, rng := range map[string]*rand.Rand{"seed": Stream(6, "sensor", 0), "label": Stream(5, "diffuse", 0), "index": Stream(5, "sensor", 1)} {
		b := take(&Gaussian{rng}, len(a))
		var dot float64
		for i := range a {
			dot += a[i] * b[i]
		}
		if r := dot / float64(len(a)); math.Abs(r) > 5/math.Sqrt(float64(len(a))) {
			t.Errorf("another %s: correlation %.3f", name, r)
		}
	}
	if again := take(&Gaussian{Stream(5, "sensor", 0)}, len(a)); !slices.Equal(a, again) {
		t.Error("the same stream gives other values")
	}
}

func TestSignalsDoNotDependOnHowTheyAreRead(t *testing.T) {
	makers := map[string]func() Mono{
		"noise": func() Mono { return Noise(SpectrumPink, 16000, Stream(1, "a", 0)) },
		"late":  func() Mono { return Starting(-700, &Gaussian{Stream(1, "a", 0)}) },
		"claps": func() Mono { return &Claps{Rng: Stream(1, "a", 0), Rate: 16000, Period: 1500} },
		"chirp": func() Mono { return &Indexed{Frame: -5, Value: Chirp(100, 5000, 0.2, 16000)} },
		"gated": func() Mono {
			return &Gated{In: &Gaussian{Stream(2, "b", 0)}, Frame: -100, On: [][2]int64{{50, 900}, {3000, 3100}}, Edge: 80}
		},
		"gusts": func() Mono { return newGusts(16000, 3, 1) },
	}
	for name, open := range makers {
		whole := take(open(), 9000)
		parts := open()
		var got []float64
		for n := 1; len(got) < len(whole); n = n*3%1009 + 1 {
			got = append(got, take(parts, min(n, len(whole)-len(got)))...)
		}
		if !slices.Equal(got, whole) {
			t.Errorf("%s: other samples when read in pieces", name)
		}
		skipped := take(Skip(open(), 1234), 100)
		if !slices.Equal(skipped, whole[1234:1334]) {
			t.Errorf("%s: other samples after a skip", name)
		}
	}
}

// A sweep's phase is 2π f1 T/ln(f2/f1)·(e^{t ln(f2/f1)/T} - 1) (Farina 2000): its
// frequency, from zero crossings, runs from the first to the second.
func TestChirpRunsFromTheFirstFrequencyToTheSecond(t *testing.T) {
	const rate = 48000
	value := Chirp(200, 6400, 1, rate) // five octaves in a second
	count := func(from, to float64) float64 {
		n := 0.0
		for i := int64(from * rate); i < int64(to*rate); i++ {
			if value(i) < 0 != (value(i+1) < 0) {
				n++
			}
		}
		return n / 2 / (to - from)
	}
	for _, v := range []struct{ at, hz float64 }{{0.2, 400}, {0.6, 1600}, {0.8, 3200}} {
		if got := count(v.at-0.05, v.at+0.05); math.Abs(got/v.hz-1) > 0.05 {
			t.Errorf("at %g s: %.0f Hz, want %.0f", v.at, got, v.hz)
		}
	}
	if value(-1) != 0 || value(rate/2) != value(rate+rate/2) {
		t.Error("sweeps do not follow one another from frame 0 on")
	}
	if flat := Chirp(500, 500, 1, rate); math.Abs(flat(24000+24)-math.Sin(2*math.Pi*500*(24024.0/rate))) > 1e-9 {
		t.Error("a sweep between equal frequencies is not their sine")
	}
}

func TestClapsComeOnTheBeat(t *testing.T) {
	x := take(&Claps{Rng: Stream(1, "c", 0), Rate: 48000, Period: 12000}, 48000)
	for beat := range 4 {
		strike, rest := meanSquare(x[beat*12000:beat*12000+480]), meanSquare(x[beat*12000+6000:(beat+1)*12000])
		if strike <= 0 || rest > 1e-12*strike {
			t.Errorf("clap %d: power %g in its first 10 ms, %g in its rest", beat, strike, rest)
		}
	}
}

func TestGateOpensAndClosesInside(t *testing.T) {
	ones := &Indexed{Value: func(int64) float64 { return 1 }}
	x := take(&Gated{In: ones, On: [][2]int64{{100, 300}, {400, 410}}, Edge: 50}, 500)
	for i, v := range x {
		on := i >= 100 && i < 300 || i >= 400 && i < 410
		if on != (v > 0) {
			t.Fatalf("frame %d: gain %g", i, v)
		}
		if i >= 150 && i < 250 && v != 1 {
			t.Fatalf("frame %d, inside: gain %g, want 1", i, v)
		}
		if i > 100 && i < 150 && v <= x[i-1] {
			t.Fatalf("frame %d: the gain does not rise", i)
		}
	}
}

// Resampling keeps a sine a sine, at rates up and down, odd ratios among them,
// and lets nothing above the new Nyquist frequency through.
func TestResampleKeepsSines(t *testing.T) {
	for _, v := range []struct{ from, to int }{{16000, 48000}, {44100, 48000}, {48000, 16000}, {48000, 44100}, {22050, 22050}} {
		low := 0.7 * float64(min(v.from, v.to)) / 2
		x := make([]float32, 6000)
		for i := range x {
			x[i] = float32(math.Sin(2 * math.Pi * low * float64(i) / float64(v.from)))
		}
		y := Resample(x, v.from, v.to)
		var got, want []float64
		for i := len(y) / 4; i < len(y)*3/4; i++ {
			got = append(got, y[i])
			want = append(want, math.Sin(2*math.Pi*low*float64(i)/float64(v.to)))
		}
		if d := differenceDB(got, want); !(d < -100) {
			t.Errorf("%d to %d Hz: sine off by %.1f dB", v.from, v.to, d)
		}
		if v.to < v.from {
			high := 1.2 * float64(v.to) / 2
			if high > 0.95*float64(v.from)/2 {
				continue
			}
			for i := range x {
				x[i] = float32(math.Sin(2 * math.Pi * high * float64(i) / float64(v.from)))
			}
			y = Resample(x, v.from, v.to)
			if p := meanSquare(y[len(y)/4 : len(y)*3/4]); p > 1e-10 {
				t.Errorf("%d to %d Hz: %.0f Hz leaves %.1f dB", v.from, v.to, high, 10*math.Log10(p))
			}
		}
	}
}

// AES17: a full-scale sine, mean square 1/2, reads 0 dBFS.
func TestFullScaleSineReadsZero(t *testing.T) {
	if got := DBFSOfPower(0.5); got != 0 {
		t.Errorf("level of a full-scale sine = %g dBFS", got)
	}
	if got := DBFSOfPower(PowerOfDBFS(-37.5)); math.Abs(got+37.5) > 1e-12 {
		t.Errorf("there and back: %g dBFS, want -37.5", got)
	}
}
