package voice

import (
	"math"
	"math/rand/v2"
)

// vowels are the mean formant frequencies of men's vowels, hertz
// [Peterson & Barney 1952, table II]; a fourth is set at 3500 Hz.
var vowels = [...][3]float64{
	{270, 2290, 3010}, {390, 1990, 2550}, {530, 1840, 2480}, {660, 1720, 2410}, {730, 1090, 2440},
	{570, 840, 2410}, {440, 1020, 2240}, {300, 870, 2240}, {640, 1190, 2390}, {490, 1350, 1690},
}

// hisses are the middle and width of fricative bands, hertz, and their level
// against the vowels (common practice).
var hisses = [...][3]float64{{6500, 3000, 0.10}, {3300, 2000, 0.20}, {5000, 5000, 0.03}, {1900, 1400, 0.20}}

// resonator is a digital formant resonator of unit gain at 0 Hz
// [Klatt 1980, formulas 1 and 2].
type resonator struct{ a, b, c, y1, y2 float64 }

func (r *resonator) tune(hz, width, rate float64) {
	e := math.Exp(-math.Pi * width / rate)
	r.c = -e * e
	r.b = 2 * e * math.Cos(2*math.Pi*hz/rate)
	r.a = 1 - r.b - r.c
}

func (r *resonator) step(x float64) float64 {
	y := r.a*x + r.b*r.y1 + r.c*r.y2
	r.y2, r.y1 = r.y1, y
	return y
}

// normal returns the factor that gives y[i] - y[i-2] unit power when white noise
// of unit power goes in, from the autocorrelation of the resonator, an
// autoregression of order 2 [Box & Jenkins].
func (r *resonator) normal() float64 {
	power := r.a * r.a * (1 - r.c) / ((1 + r.c) * ((1-r.c)*(1-r.c) - r.b*r.b))
	second := r.b*r.b/(1-r.c) + r.c // correlation at lag 2
	return 1 / math.Sqrt(2*power*(1-second))
}

// Talker makes its sound control interval after control interval.
type Talker struct {
	rate     float64
	pitchHz  float64
	rng      *rand.Rand
	tract    [4]resonator
	tuned    [4]float64 // formants now, hertz
	hiss     resonator
	hissGain float64
	dull     float64 // the voice without what the shelf lifts
	lastOut  float64

	phase      float64 // of the glottal period, 0..1
	jitter     float64
	hz         float64 // pitch now
	spoken     float64 // seconds into the phrase
	voice, air float64 // amplitudes now
	left       int     // frames to the end of the segment
	aim        segment
	phrase     []segment // what is still to be said, last first
	tick       int
	previous   float64 // glottal flow of the frame before
}

// segment is a stretch of sound of one intention.
type segment struct {
	seconds    float64
	formants   [3]float64
	voice, air float64
	hiss       [3]float64
}

// New returns a talker of a pitch in hertz.
func New(rate int, pitchHz float64, rng *rand.Rand) *Talker {
	t := &Talker{rate: float64(rate), pitchHz: pitchHz, rng: rng, hz: pitchHz, tuned: [4]float64{500, 1500, 2500, 3500}}
	t.aim.hiss = hisses[0]
	return t
}

// plan fills in the next phrase: syllables, then a pause.
func (t *Talker) plan() {
	between := func(a, b float64) float64 { return a + (b-a)*t.rng.Float64() }
	var said []segment
	for range 4 + t.rng.IntN(8) {
		v := vowels[t.rng.IntN(len(vowels))]
		stress := between(0.55, 1)
		switch t.rng.IntN(4) {
		case 0: // hiss
			h := hisses[t.rng.IntN(len(hisses))]
			said = append(said, segment{seconds: between(0.06, 0.13), formants: v, air: h[2], hiss: h})
		case 1: // stop and burst
			h := hisses[t.rng.IntN(len(hisses))]
			said = append(said, segment{seconds: between(0.03, 0.07), formants: v, hiss: h},
				segment{seconds: 0.012, formants: v, air: 1.5 * h[2], hiss: h})
		case 2: // nasal murmur
			said = append(said, segment{seconds: between(0.04, 0.09), formants: [3]float64{280, 1200, 2300}, voice: 0.3 * stress, hiss: hisses[0]})
		}
		said = append(said, segment{seconds: between(0.09, 0.26), formants: v, voice: stress, air: 0.004, hiss: hisses[2]})
	}
	said = append(said, segment{seconds: between(0.25, 0.8), formants: [3]float64{500, 1500, 2500}, hiss: hisses[0]})
	for i := len(said) - 1; i >= 0; i-- {
		t.phrase = append(t.phrase, said[i])
	}
	t.spoken = 0
}

// Next writes the next len(dst) frames.
func (t *Talker) Next(dst []float64) {
	const tickFrames = 32 // between changes of the resonators
	dt := 1 / t.rate
	glide := 1 - math.Exp(-float64(tickFrames)*dt/0.025)
	shelf := 1 - math.Exp(-2*math.Pi*1800*dt)
	breath := 0.02 * math.Sqrt(t.rate/48000)
	swell := 1 - math.Exp(-dt/0.008)
	for i := range dst {
		if t.left == 0 {
			if len(t.phrase) == 0 {
				t.plan()
			}
			t.aim = t.phrase[len(t.phrase)-1]
			t.phrase = t.phrase[:len(t.phrase)-1]
			t.left = max(1, int(t.aim.seconds*t.rate))
		}
		if t.tick == 0 {
			t.retune(glide)
		}
		t.tick = (t.tick + 1) % tickFrames
		t.left--
		t.spoken += dt
		t.voice += swell * (t.aim.voice - t.voice)
		t.air += swell * 2 * (t.aim.air - t.air)

		// Glottal flow after [Rosenberg 1971], pulse C: it opens for 40 % of the
		// period, closes in 10 %, and what is heard is its change.
		t.phase += t.hz * (1 + t.jitter) * dt
		if t.phase >= 1 {
			t.phase--
			t.jitter = 0.01 * t.rng.NormFloat64()
		}
		flow := 0.0
		switch {
		case t.phase < 0.40:
			flow = 0.5 - 0.5*math.Cos(math.Pi*t.phase/0.40)
		case t.phase < 0.50:
			flow = math.Cos(math.Pi / 2 * (t.phase - 0.40) / 0.10)
		}
		x := (flow - t.previous) * t.rate / 4000
		t.previous = flow
		white := t.rng.NormFloat64()
		x = t.voice * (x + breath*white*flow)
		for f := range t.tract {
			x = t.tract[f].step(x)
		}
		// Cascaded resonators come out too dark above the first formant: a shelf.
		t.dull += (x - t.dull) * shelf
		x += 2 * (x - t.dull)
		before := t.hiss.y2
		y := x + t.air*t.hissGain*(t.hiss.step(white)-before)
		// The mouth radiates the change of its flow; only the bass is taken off.
		dst[i] = y - t.lastOut
		t.lastOut += (y - t.lastOut) * 2 * math.Pi * 60 * dt
	}
}

// retune moves formants and pitch towards their aims by the share glide.
func (t *Talker) retune(glide float64) {
	widths := [4]float64{110, 110, 170, 250} // hertz, after [Klatt 1980, table I], the first wider
	for f := range t.tract {
		aim := 3500.0
		if f < 3 {
			aim = t.aim.formants[f]
		}
		t.tuned[f] += glide * (aim - t.tuned[f])
		t.tract[f].tune(math.Min(t.tuned[f], 0.45*t.rate), widths[f], t.rate)
	}
	t.hiss.tune(math.Min(t.aim.hiss[0], 0.4*t.rate), math.Min(t.aim.hiss[1], 0.3*t.rate), t.rate)
	t.hissGain = t.hiss.normal()
	// The pitch falls through the phrase and sways.
	aim := t.pitchHz * (1.12 - 0.06*t.spoken + 0.06*math.Sin(2*math.Pi*2.3*t.spoken))
	t.hz += glide * (math.Max(aim, 0.7*t.pitchHz) - t.hz)
}
