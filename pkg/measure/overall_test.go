package measure

import (
	"math"
	"math/rand/v2"
	"reflect"
	"testing"

	"alidade/pkg/acoustics"
)

// flat is a series of constant powers in all thirds at 48 kHz: before second 5
// first(b), after it second(b).
func flat(first, second func(Band) float64) *Series {
	s := &Series{}
	for _, b := range ThirdOctaves(48000) {
		tr := Track{Band: b, HopS: 0.05, LengthS: 0.1, Power: make([]float32, 200)}
		for j := range tr.Power {
			tr.Power[j] = float32(first(b))
			if j >= 100 {
				tr.Power[j] = float32(second(b))
			}
		}
		s.Tracks = append(s.Tracks, tr)
	}
	return s
}

func constant(v float64) func(Band) float64 { return func(Band) float64 { return v } }

var halves = [2][]Stretch{{{0, 5}}, {{5, 10}}}

func TestSpeechWeightedGainOfAFlatGainIsThatGain(t *testing.T) {
	// J12: flat 6 dB gives 6 dB; Greenberg, Peterson & Zurek 1993 (definition
	// from memory).
	six := math.Pow(10, -0.6)
	p := Pair{Reference: flat(constant(1), constant(3)), Output: flat(constant(six), constant(2+six))}
	g, err := SNRGain(Scene{Pair: p, Noise: halves[0], Target: halves[1], Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	o := g.Overall(nil)
	for name, v := range map[string]*float64{"speech": o.SpeechWeighted, "overall": o.SNRGain, "noise": o.NoiseReduction, "A": o.NoiseReductionA} {
		if v == nil || math.Abs(*v-6) > 1e-4 {
			t.Errorf("%s: %v, want 6", name, v)
		}
	}
	if math.Abs(o.SpeechMeasured-1) > 1e-9 || math.Abs(*o.TargetChange) > 1e-4 {
		t.Errorf("importance measured %g, target change %g", o.SpeechMeasured, *o.TargetChange)
	}
	if o.SNRGainCI == nil || o.SNRGainCI[1]-o.SNRGainCI[0] > 1e-3 {
		t.Errorf("interval of constant powers: %v", o.SNRGainCI)
	}
}

func TestSpeechWeightedGainOfALineInDiffuseNoise(t *testing.T) {
	// J12: 8 microphones 0.05 m apart, broadside, delay-and-sum, diffuse noise,
	// c = 343: 5.655203 dB from the directivity index at exact mid-bands.
	index := func(b Band) float64 {
		sum := 0.0
		for m := range 8 {
			for n := range 8 {
				sum += acoustics.DiffuseCoherence(0.05*math.Abs(float64(m-n)), b.CentreHz, 343) / 64
			}
		}
		return sum
	}
	p := Pair{
		Reference: flat(constant(1), constant(2)),
		Output:    flat(index, func(b Band) float64 { return 1 + index(b) }),
	}
	g, err := SNRGain(Scene{Pair: p, Noise: halves[0], Target: halves[1], Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	if o := g.Overall(nil); o.SpeechWeighted == nil || math.Abs(*o.SpeechWeighted-5.655203) > 1e-4 {
		t.Errorf("speech-weighted gain %v, want 5.6552", o.SpeechWeighted)
	}
}

func TestOverallFiguresAreSumsOfPowers(t *testing.T) {
	// Two bands: 100 Hz with noise 100 to 50 and no target, 1 kHz with noise 1
	// to 0.1 and target 4 to 2; all others silent.
	at := func(low, mid float64) func(Band) float64 {
		return func(b Band) float64 {
			switch b.NominalHz {
			case 100:
				return low
			case 1000:
				return mid
			}
			return 0
		}
	}
	p := Pair{Reference: flat(at(100, 1), at(100, 5)), Output: flat(at(50, 0.1), at(50, 2.1))}
	g, err := SNRGain(Scene{Pair: p, Noise: halves[0], Target: halves[1], Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	db := func(x float64) float64 { return 10 * math.Log10(x) }
	o := g.Overall(nil)
	a := math.Pow(10, AWeightingDB(100)/10)
	for name, c := range map[string]struct {
		got  *float64
		want float64
	}{
		"noise reduction": {o.NoiseReduction, db(101 / 50.1)},
		"A-weighted":      {o.NoiseReductionA, db((100*a + 1) / (50*a + 0.1))},
		"target change":   {o.TargetChange, db(0.5)},
		"SNR gain":        {o.SNRGain, db(20. / 4)},
	} {
		if c.got == nil || math.Abs(*c.got-c.want) > 1e-4 {
			t.Errorf("%s: %v, want %.4f", name, c.got, c.want)
		}
	}
	if o.SpeechWeighted != nil || math.Abs(o.SpeechMeasured-0.0818) > 1e-9 {
		t.Errorf("speech-weighted %v with %.4f of the importance measured", o.SpeechWeighted, o.SpeechMeasured)
	}
	only := g.Overall(func(b Band) bool { return b.NominalHz == 1000 })
	if math.Abs(*only.NoiseReduction-10) > 1e-4 {
		t.Errorf("1 kHz alone: %g dB, want 10", *only.NoiseReduction)
	}
	if none := g.Overall(func(Band) bool { return false }); none.SNRGain != nil || none.NoiseReduction != nil || none.SpeechWeighted != nil {
		t.Errorf("no bands: %+v", none)
	}
}

func TestOverallIntervalCountsWhatBandsHaveInCommon(t *testing.T) {
	// The same noise in every band: the sum is no surer than one band. The
	// interval of the sum must be about that of the single band.
	r := testRoom
	k := r.maker(1 << 18)
	p, _ := r.pair(t, k.take(9, nil, nil))
	one := p.Reference.Tracks[10]
	out := p.Output.Tracks[10]
	same := Pair{Reference: &Series{}, Output: &Series{}}
	for _, b := range ThirdOctaves(16000)[8:13] {
		a, c := one, out
		a.Band, c.Band = b, b
		same.Reference.Tracks = append(same.Reference.Tracks, a)
		same.Output.Tracks = append(same.Output.Tracks, c)
	}
	g, err := SNRGain(Scene{Pair: same, Noise: []Stretch{{0, 16}}, Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	width := func(ci *[2]float64) float64 { return ci[1] - ci[0] }
	all, single := width(g.Overall(nil).NoiseReductionCI), width(g.Bands[0].NoiseReductionCI)
	if math.Abs(all/single-1) > 0.05 {
		t.Errorf("interval of five equal bands %.3f dB, of one %.3f", all, single)
	}
}

// Without intervals every other figure is the same.
func TestFiguresWithoutIntervalsAreTheSame(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	series := func(noise, target float64) *Series {
		s := &Series{}
		for _, b := range ThirdOctaves(16000) {
			track := Track{Band: b, HopS: 0.05, LengthS: 0.1}
			for j := range 400 {
				p := noise
				if j >= 200 {
					p += target
				}
				track.Power = append(track.Power, float32(p*math.Abs(1+0.3*rng.NormFloat64()*rng.Float64())))
			}
			s.Tracks = append(s.Tracks, track)
		}
		return s
	}
	scene := Scene{Pair: Pair{Reference: series(1, 0.2), Output: series(0.1, 0.19)}, Noise: []Stretch{{0, 9.9}}, Target: []Stretch{{10.1, 20}}, Named: -1}
	full, err := SNRGain(scene)
	if err != nil {
		t.Fatal(err)
	}
	scene.NoIntervals = true
	plain, err := SNRGain(scene)
	if err != nil {
		t.Fatal(err)
	}
	known := 0
	for b := range full.Bands {
		f, p := full.Bands[b], plain.Bands[b]
		if p.NoiseReductionCI != nil || p.TargetChangeCI != nil || p.SNRGainCI != nil {
			t.Errorf("band %d has an interval", b)
		}
		f.NoiseReductionCI, f.TargetChangeCI, f.SNRGainCI = nil, nil, nil
		if !reflect.DeepEqual(f, p) {
			t.Errorf("band %d: %+v, want %+v", b, p, f)
		}
		if f.SNRGain != nil {
			known++
		}
	}
	o, q := full.Overall(nil), plain.Overall(nil)
	if known < 20 || o.SNRGainCI == nil || q.SNRGainCI != nil || q.NoiseReductionCI != nil || *o.SNRGain != *q.SNRGain || *o.NoiseReduction != *q.NoiseReduction {
		t.Errorf("%d bands, overall %+v and %+v", known, o, q)
	}
}
