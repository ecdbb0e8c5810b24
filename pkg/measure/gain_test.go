package measure

import (
	"math"
	"math/rand/v2"
	"sort"
	"testing"

	"alidade/pkg/audio"
)

// track is a track of independent entries with the given mean, each the mean
// of samples squared magnitudes of complex Gaussian noise (chi-squared).
func track(n, samples int, mean float64, r *rand.Rand) Track {
	tr := Track{Band: third(0, 1000), HopS: 0.02, LengthS: 0.02, Power: make([]float32, n)}
	for j := range tr.Power {
		sum := 0.0
		for range samples {
			sum += r.ExpFloat64()
		}
		tr.Power[j] = float32(mean * sum / float64(samples))
	}
	return tr
}

func single(tr Track) *Series { return &Series{Tracks: []Track{tr}} }

// join puts b after a.
func join(a, b Track) Track {
	a.Power = append(append([]float32(nil), a.Power...), b.Power...)
	return a
}

func TestIntervalOfAPowerRatioIsThatOfTheFDistribution(t *testing.T) {
	// J5: 95 % limits of a ratio of two independent band powers; Bendat &
	// Piersol. Entries hold 10 samples each, so B·T = 10·entries.
	for _, c := range []struct {
		bt   int
		want float64
	}{{100, 1.207219}, {231, 0.7930078}, {2310, 0.2504927}} {
		var half []float64
		covered, trials := 0, 200
		for seed := range trials {
			r := rand.New(rand.NewPCG(uint64(seed), uint64(c.bt)))
			n := (c.bt + 2) / 5
			p := Pair{Reference: single(track(n, 5, 2, r)), Output: single(track(n, 5, 1, r))}
			g, err := SNRGain(Scene{Pair: p, Noise: []Stretch{{0, 1e3}}, Named: -1})
			if err != nil {
				t.Fatal(err)
			}
			ci := g.Bands[0].NoiseReductionCI
			half = append(half, (ci[1]-ci[0])/2)
			if want := 10 * math.Log10(2); ci[0] <= want && want <= ci[1] {
				covered++
			}
		}
		sort.Float64s(half)
		// The half width is itself an estimate; its median lies within 4 % with
		// the Student quantile of some tens of degrees of freedom.
		if got := half[trials/2]; math.Abs(got/c.want-1) > 0.06 {
			t.Errorf("B·T = %d: median half width %.4f dB, want %.4f", c.bt, got, c.want)
		}
		// 95 % of 200 with a standard deviation of 1.5 %: three of them.
		if s := float64(covered) / float64(trials); s < 0.904 || s > 0.996 {
			t.Errorf("B·T = %d: %.1f %% of the intervals hold the truth", c.bt, 100*s)
		}
	}
}

func TestSpreadOfALevelIsThatOfTheChiSquaredDistribution(t *testing.T) {
	// J3: standard deviation of a band level, 4.343/√(BT), Bendat & Piersol.
	for bt, want := range map[int]float64{100: 0.4342945, 1000: 0.137336, 10000: 0.04342945} {
		sum := 0.0
		for seed := range uint64(40) {
			r := rand.New(rand.NewPCG(seed, 4))
			tr := track(bt/10, 10, 3, r)
			p := newPart(tr, tr, tr.inside(nil))
			sum += p.spread(1/p.refMean, 0, 0).variance
		}
		if got := dbPerNeper * math.Sqrt(sum/40); math.Abs(got/want-1) > 0.08 {
			t.Errorf("B·T = %d: standard deviation %.4f dB, want %.4f", bt, got, want)
		}
	}
}

func TestBandwidthsGiveTheTextbookErrors(t *testing.T) {
	// J4: B = f_m·(G^(1/6)-G^(-1/6)); IEC 61260-1 with Bendat & Piersol.
	for _, b := range ThirdOctaves(48000) {
		want, ok := map[float64]float64{125: 29.0519, 1000: 230.7675, 8000: 1833.051}[b.NominalHz]
		if ok && math.Abs(b.Width()-want) > 0.001 {
			t.Errorf("band %g Hz is %.4f Hz wide, want %.4f", b.NominalHz, b.Width(), want)
		}
	}
}

func TestSpreadOfASegmentSNR(t *testing.T) {
	// J6: standard deviation of the SNR from noise with and without target,
	// B·T = 1000 each, at 10 and 0 dB: 0.2136, 0.3884 dB (tolerance 0.06). At
	// -10 dB the first-order law fails (Monte-Carlo 2.78 dB).
	for _, c := range []struct{ snr, want float64 }{{10, 0.2136446}, {0, 0.3884448}} {
		var sum, square float64
		const trials = 400
		for seed := range uint64(trials) {
			r := rand.New(rand.NewPCG(seed, 6))
			s := math.Pow(10, c.snr/10)
			tr := join(track(200, 5, 1, r), track(200, 5, 1+s, r))
			p := Pair{Reference: single(tr), Output: single(tr)}
			g, err := SNRGain(Scene{Pair: p, Noise: []Stretch{{0, 4}}, Target: []Stretch{{4, 8}}, Named: -1})
			if err != nil {
				t.Fatal(err)
			}
			if g.Bands[0].SNRIn == nil {
				t.Fatalf("SNR %g dB: not measured: %s", c.snr, g.Bands[0].TargetReason)
			}
			v := *g.Bands[0].SNRIn
			sum, square = sum+v, square+v*v
		}
		mean := sum / trials
		if got := math.Sqrt(square/trials - mean*mean); math.Abs(got-c.want) > 0.06 {
			t.Errorf("SNR %g dB: standard deviation %.4f dB, want %.4f", c.snr, got, c.want)
		}
		if math.Abs(mean-c.snr) > 0.08 {
			t.Errorf("SNR %g dB: mean %.3f", c.snr, mean)
		}
	}
}

func TestTargetWithoutPowerIsNullInNinetySevenAndAHalfPerCent(t *testing.T) {
	// The test is one-sided at 97.5 % for the reference and for the output: of
	// independent ones hardly any passes both, of equal ones 2.5 % do.
	for _, c := range []struct {
		name      string
		equal     bool
		low, high float64
	}{{"independent", false, 0, 0.006}, {"equal", true, 0.012, 0.042}} {
		passed := 0
		const trials = 1500
		for seed := range uint64(trials) {
			r := rand.New(rand.NewPCG(seed, 8))
			ref := join(track(100, 5, 1, r), track(100, 5, 1, r))
			out := ref
			if !c.equal {
				out = join(track(100, 5, 1, r), track(100, 5, 1, r))
			}
			g, err := SNRGain(Scene{Pair: Pair{Reference: single(ref), Output: single(out)},
				Noise: []Stretch{{0, 2}}, Target: []Stretch{{2, 4}}, Named: -1})
			if err != nil {
				t.Fatal(err)
			}
			b := g.Bands[0]
			if b.SNRGain != nil {
				passed++
				continue
			}
			if b.TargetReason != NotAboveNoise || b.TargetChange != nil || b.TargetIn != nil || b.SNRIn != nil || b.SNRGainCI != nil ||
				b.NoiseReduction == nil || b.Flags[len(b.Flags)-1] != TargetUnmeasurable {
				t.Fatalf("band without target: %+v", b)
			}
		}
		if s := float64(passed) / trials; s < c.low || s > c.high {
			t.Errorf("%s: %.2f %% pass, want %.1f to %.1f %%", c.name, 100*s, 100*c.low, 100*c.high)
		}
	}
}

func TestFiguresOfAKnownScene(t *testing.T) {
	// Constant powers: every figure follows by arithmetic. Noise 4 to 1,
	// target 10 to 8, microphones with the noise 6 and 2, target 5 and 15.
	constant := func(noise, mix float32) Track {
		tr := Track{Band: third(0, 1000), HopS: 0.05, LengthS: 0.1, Power: make([]float32, 200)}
		for j := range tr.Power {
			tr.Power[j] = noise
			if j >= 100 {
				tr.Power[j] = mix
			}
		}
		return tr
	}
	mics := []*Series{single(constant(6, 11)), single(constant(2, 17))}
	p := Pair{Reference: single(constant(4, 14)), Output: single(constant(1, 9)), Microphones: mics}
	g, err := SNRGain(Scene{Pair: p, Noise: []Stretch{{0, 5}}, Target: []Stretch{{5, 10}}, Named: 0})
	if err != nil {
		t.Fatal(err)
	}
	b := g.Bands[0]
	db := func(x float64) float64 { return 10 * math.Log10(x) }
	for name, c := range map[string]struct {
		got  *float64
		want float64
	}{
		"noise in": {b.NoiseIn, db(4)}, "noise out": {b.NoiseOut, 0}, "noise reduction": {b.NoiseReduction, db(4)},
		"target in": {b.TargetIn, db(10)}, "target out": {b.TargetOut, db(8)}, "target change": {b.TargetChange, db(0.8)},
		"SNR in": {b.SNRIn, db(2.5)}, "SNR out": {b.SNROut, db(8)}, "SNR gain": {b.SNRGain, db(3.2)},
		"over best": {b.OverBest, db(8 / 7.5)}, "over named": {b.OverNamed, db(8 / (5. / 6))},
	} {
		if c.got == nil || math.Abs(*c.got-c.want) > 1e-5 {
			t.Errorf("%s: got %v, want %.5f", name, c.got, c.want)
		}
	}
	if g.Best != 1 {
		t.Errorf("best microphone %d, want 1", g.Best)
	}
	o := g.Overall(nil)
	if o.SNRGain == nil || math.Abs(*o.SNRGain-db(3.2)) > 1e-5 || math.Abs(*o.OverBest-db(8/7.5)) > 1e-5 || o.SpeechWeighted != nil {
		t.Errorf("overall: %+v", o)
	}
}

func TestReasonsAndFlags(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	loud := func(n int, p float64) Track { return track(n, 5, p, r) }
	long, after := loud(400, 1), loud(400, 30)
	both := join(long, after)
	silent := both
	silent.Power = make([]float32, len(both.Power))
	wide, narrow := both, both
	narrow.Band = third(-13, 50)
	noise, target := []Stretch{{0, 8}}, []Stretch{{8, 16}}
	for _, c := range []struct {
		name          string
		ref, out      Track
		noise, target []Stretch
		nr, tr        Reason
		sparse        bool
	}{
		{"all there", wide, wide, noise, target, "", "", false},
		{"no noise", wide, wide, nil, target, NoNoise, NoNoise, false},
		{"no target", wide, wide, noise, nil, "", NoTarget, false},
		{"noise of two entries", wide, wide, []Stretch{{0, 0.041}}, target, TooShort, TooShort, false},
		{"noise of 0.2 s", wide, wide, []Stretch{{0, 0.2}}, target, TooShort, TooShort, false},
		{"target of two entries", wide, wide, noise, []Stretch{{8, 8.041}}, "", TooShort, false},
		{"silent output", wide, silent, noise, target, Silent, Silent, false},
		{"silent reference", silent, wide, noise, target, Silent, Silent, false},
		{"noise of 1 s", wide, wide, []Stretch{{0, 1}}, target, "", "", true},
		{"target of 1 s", wide, wide, noise, []Stretch{{8, 9}}, "", "", true},
		{"2 s of a band 11.6 Hz wide", narrow, narrow, []Stretch{{0, 2}}, target, "", "", true},
		{"target softer than noise", wide, wide, target, noise, "", NotAboveNoise, false},
		{"stretch behind the end", wide, wide, []Stretch{{100, 120}}, target, NoNoise, NoNoise, false},
	} {
		g, err := SNRGain(Scene{Pair: Pair{Reference: single(c.ref), Output: single(c.out)}, Noise: c.noise, Target: c.target, Named: -1})
		if err != nil {
			t.Fatal(err)
		}
		b := &g.Bands[0]
		if b.NoiseReason != c.nr || b.TargetReason != c.tr || b.Sparse() != c.sparse {
			t.Errorf("%s: reasons %q %q, sparse %t; want %q %q %t", c.name, b.NoiseReason, b.TargetReason, b.Sparse(), c.nr, c.tr, c.sparse)
		}
		if (b.NoiseReduction == nil) != (c.nr != "") || (b.NoiseReductionCI == nil) != (c.nr != "") ||
			(b.SNRGain == nil) != (c.tr != "") || (b.SNRGainCI == nil) != (c.tr != "") {
			t.Errorf("%s: figures do not follow the reasons: %+v", c.name, b)
		}
	}
}

func TestGainRefusesSeriesThatDoNotBelongTogether(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	good := track(50, 5, 1, r)
	otherBand, otherHop, late, negative, noHop, nan := good, good, good, good, good, good
	otherBand.Band = third(1, 1250)
	otherHop.HopS, otherHop.LengthS = 0.03, 0.03
	late.StartS = 0.5
	negative.Power = []float32{1, -1}
	nan.Power = []float32{1, float32(math.NaN())}
	noHop.HopS = 0
	two := &Series{Tracks: []Track{good, good}}
	for name, p := range map[string]Pair{
		"no output":       {Reference: single(good)},
		"two bands":       {Reference: single(good), Output: two},
		"other band":      {Reference: single(good), Output: single(otherBand)},
		"other hop":       {Reference: single(good), Output: single(otherHop)},
		"late":            {Reference: single(good), Output: single(late)},
		"negative power":  {Reference: single(good), Output: single(negative)},
		"power NaN":       {Reference: single(good), Output: single(nan)},
		"no hop":          {Reference: single(noHop), Output: single(noHop)},
		"microphone":      {Reference: single(good), Output: single(good), Microphones: []*Series{two}},
		"nil microphone":  {Reference: single(good), Output: single(good), Microphones: []*Series{nil}},
		"late microphone": {Reference: single(good), Output: single(good), Microphones: []*Series{single(late)}},
	} {
		if _, err := SNRGain(Scene{Pair: p, Noise: []Stretch{{0, 1}}, Named: -1}); err == nil {
			t.Errorf("%s: no error", name)
		}
		if _, err := FindSegments(p.Reference, p.Output, SegmentOptions{}); err == nil && p.Output == nil {
			t.Errorf("segments, %s: no error", name)
		}
	}
	if _, err := SNRGain(Scene{Pair: Pair{Reference: single(good), Output: single(good)}, Named: 0}); err == nil {
		t.Error("named microphone that is not there: no error")
	}
}

func TestTracksOfUnequalHopsAreMerged(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 1))
	ref := track(401, 5, 2, r)
	out := track(401, 5, 1, r)
	want, err := SNRGain(Scene{Pair: Pair{Reference: single(ref.merged(4)), Output: single(out.merged(4))}, Noise: []Stretch{{0, 9}}, Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	got, err := SNRGain(Scene{Pair: Pair{Reference: single(ref), Output: single(out.merged(4))}, Noise: []Stretch{{0, 9}}, Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	if *got.Bands[0].NoiseReduction != *want.Bands[0].NoiseReduction {
		t.Errorf("noise reduction %g, want %g", *got.Bands[0].NoiseReduction, *want.Bands[0].NoiseReduction)
	}
}

func TestIsolatedGainIsExact(t *testing.T) {
	// J11: shadow filtering. Filters frozen on the mix and applied to the parts:
	// y_s + y_n = y, and the gain is that of the parts, with no estimate in it.
	r := testRoom
	n := 1 << 17
	k := r.maker(n)
	noise := k.take(3, nil, nil)
	envelope := speechlike(n, r.rate, 2, []Stretch{{1, 7}}, 3)
	mix := k.take(3, envelope, nil)
	target := audio.NewBlock(mix.Channels(), n)
	var worst, power float64
	for ch := range mix.Channels() {
		x, y, s := mix.Channel(ch), noise.Channel(ch), target.Channel(ch)
		for i := range x {
			s[i] = x[i] - y[i]
			worst = math.Max(worst, math.Abs(float64(s[i]+y[i]-x[i])))
			power = math.Max(power, math.Abs(float64(x[i])))
		}
	}
	if worst > 1e-6*power {
		t.Fatalf("parts add up to %g of the mix", worst)
	}
	pn, _ := r.pair(t, noise)
	ps, _ := r.pair(t, target)
	g, err := IsolatedGain(Isolated{Noise: pn, Target: ps, Named: 1})
	if err != nil {
		t.Fatal(err)
	}
	for b := range g.Bands {
		band := &g.Bands[b]
		level := func(s *Series) float64 { return audio.PowerDB(s.Level(nil)[b]) }
		want := level(ps.Output) - level(pn.Output) - level(ps.Reference) + level(pn.Reference)
		if band.SNRGain == nil || math.Abs(*band.SNRGain-want) > 1e-9 {
			t.Errorf("band %g Hz: SNR gain %v, want %.6f", band.Band.NominalHz, band.SNRGain, want)
		}
		if band.TargetChangeCI != nil || band.SNRGainCI == nil || band.OverNamed == nil || band.OverBest == nil {
			t.Errorf("band %g Hz: %+v", band.Band.NominalHz, band)
		}
		// The beam looks at the target: it passes unchanged.
		if math.Abs(*band.TargetChange) > 0.01 {
			t.Errorf("band %g Hz: target change %.4f dB, want 0", band.Band.NominalHz, *band.TargetChange)
		}
	}
	o := g.Overall(nil)
	if o.SNRGain == nil || o.SNRGainCI == nil || o.NoiseReductionA == nil || o.TargetChangeCI != nil || o.OverBest == nil {
		t.Errorf("overall %+v", o)
	}
}

func TestIsolatedTargetOfSilenceIsNull(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 4))
	n, s := track(200, 5, 1, r), track(200, 5, 1, r)
	clear(s.Power)
	g, err := IsolatedGain(Isolated{Noise: Pair{Reference: single(n), Output: single(n)}, Target: Pair{Reference: single(s), Output: single(s)}, Named: -1})
	if err != nil {
		t.Fatal(err)
	}
	if b := g.Bands[0]; b.TargetReason != Silent || b.SNRGain != nil || b.NoiseReduction == nil {
		t.Errorf("silent target: %+v", b)
	}
}

func TestDelayAndSumInUncorrelatedNoiseGainsTenLogN(t *testing.T) {
	// J1: 10·log10 N; Van Trees 2002, 2.6, within the 95 % limits of J5 (twice
	// them, for 25 bands) and the 3 dB less in the reference of N channels.
	const rate, seconds = 48000, 10
	for n, want := range map[int]float64{2: 3.0103, 4: 6.0206, 8: 9.0309} {
		b := noiseBlock(n, seconds*rate, 0.1, uint64(n))
		sum := audio.NewBlock(1, b.Frames())
		for ch := range n {
			for i, x := range b.Channel(ch) {
				sum.Channel(0)[i] += x / float32(n)
			}
		}
		ref, out := metered(t, rate, b, 4096, MeterOptions{}), metered(t, rate, sum, 4096, MeterOptions{})
		g, err := SNRGain(Scene{Pair: Pair{Reference: ref.Thirds(), Output: out.Thirds()}, Noise: []Stretch{{0, seconds}}, Named: -1})
		if err != nil {
			t.Fatal(err)
		}
		for i := range g.Bands {
			limit := 4 * 4.343 / math.Sqrt(g.Bands[i].NoiseSamples)
			if d := *g.Bands[i].NoiseReduction - want; math.Abs(d) > limit {
				t.Errorf("%d channels, band %g Hz: %.3f dB off 10·log10 N", n, g.Bands[i].Band.NominalHz, d)
			}
		}
		if o := g.Overall(nil); math.Abs(*o.NoiseReduction-want) > 0.05 || math.Abs(*o.NoiseReductionA-want) > 0.1 || o.SNRGain != nil {
			t.Errorf("%d channels: overall %.3f dB, A-weighted %.3f dB, want %.3f", n, *o.NoiseReduction, *o.NoiseReductionA, want)
		}
	}
}
