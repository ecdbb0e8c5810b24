package bearing

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"alidade/pkg/rig"
)

// narrow returns a looker for a line of M microphones half a wavelength apart
// at 2 kHz that uses lines lines of the transform about it.
func narrow(t *testing.T, M, lines int) *looker {
	t.Helper()
	const rate, f = 48000, 2000.0
	mics := lineMics(M, testSpeed/(2*f))
	df := float64(rate) / 2048
	from := math.Round(f/df) - float64(lines/2)
	set, err := settle(Options{Speed: testSpeed, FromHz: from * df, ToHz: (from + float64(lines) - 1) * df, FarField: true}, mics, rig.Spread(mics), rate)
	if err != nil {
		t.Fatal(err)
	}
	if set.size != 2048 || set.binTo-set.binFrom != lines {
		t.Fatalf("frames of %d, %d lines, want 2048 and %d", set.size, set.binTo-set.binFrom, lines)
	}
	l, err := newLooker(newSpace(mics, rig.Point{}, testSpeed, nil), &set, choosePairs(M, maxPairs))
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// snapshots adds frames independent frames of sources (power, cosine) in noise
// of power 1 to sum.
func snapshots(l *looker, sum *crossSum, r *rand.Rand, frames int, powers, cosines []float64) {
	M, K := len(l.space.at), l.bins
	gauss := func(p float64) complex128 {
		s := math.Sqrt(p / 2)
		return complex(s*r.NormFloat64(), s*r.NormFloat64())
	}
	tau := make([]float64, M)
	x := make([]complex128, M*K)
	f := frameSpectra{re: make([]float64, M*K), im: make([]float64, M*K)}
	for range frames {
		for i := range x {
			x[i] = gauss(1)
		}
		for s, p := range powers {
			l.space.delays(tau, place{y: [3]float64{cosines[s]}})
			for k := range K {
				a := gauss(p)
				for m := range M {
					x[m*K+k] += a * cmplx.Rect(1, -l.omega[k]*tau[m])
				}
			}
		}
		for i, v := range x {
			f.re[i], f.im[i] = real(v), imag(v)
		}
		sum.add(&f, l.pairs, nil)
	}
}

// H12: Stoica & Nehorai 1989; Van Trees 2002, ch. 8 and 9: for one source in
// white noise the maximum of the beam scan is the maximum of likelihood, and
// its RMS error is the stochastic bound, within 5 %, for the cases (10
// microphones, 100 snapshots, 0 dB, 90°) and (8, 50, 10 dB, 60°). The bend of
// the likelihood is its information.
func TestLikelihoodReachesTheStochasticBound(t *testing.T) {
	trials := 600
	if long() {
		trials = 4000
	}
	for _, c := range []struct {
		M, lines, frames int
		snr, angle       float64
	}{{10, 4, 25, 1, 90}, {8, 5, 10, 10, 60}} {
		l := narrow(t, c.M, c.lines)
		sum := newCrossSum(c.M, len(l.pairs), l.bins)
		r := rand.New(rand.NewPCG(12, uint64(c.M)))
		truth := math.Cos(c.angle * deg)
		m, K := float64(c.M), float64(c.lines*c.frames)
		bound := math.Sqrt(6/(K*c.snr*m*(m*m-1))*(1+1/(m*c.snr))) / math.Pi
		z := make([]float64, l.bins)
		total := 0.0
		for range trials {
			sum.clear()
			snapshots(l, sum, r, c.frames, []float64{c.snr}, []float64{truth})
			if reason := l.load(sum, nil); reason != "" {
				t.Fatal(reason)
			}
			copy(l.rr, l.gr)
			copy(l.ri, l.gi)
			p := l.refine(place{y: [3]float64{truth + 0.02}}, l.cos[0], l.sin[0], z)
			total += (p.y[0] - truth) * (p.y[0] - truth)
		}
		// 600 trials scatter by 2.9 %, and the few lines here share their weight.
		ratio := math.Sqrt(total/float64(trials)) / bound
		t.Logf("%d microphones, %g dB: %.3f of the bound", c.M, 10*math.Log10(c.snr), ratio)
		if ratio < 0.92 || ratio > 1.08 {
			t.Errorf("%d microphones, ratio %g: RMS error %.3f of the bound, want 1 within 5 %% and the scatter", c.M, c.snr, ratio)
		}
	}
}

// Two sources at once, exact covariances: the parts of each line come out as
// they went in, and nothing is left.
func TestApportionTakesExactWavesApart(t *testing.T) {
	l := narrow(t, 8, 12)
	K := l.bins
	want := [][]float64{make([]float64, K), make([]float64, K)}
	places := []place{{y: [3]float64{0.1}}, {y: [3]float64{-0.6}}}
	for j, p := range places {
		l.phases(l.cos[j], l.sin[j], p)
	}
	for k := range K {
		want[0][k], want[1][k] = 0.3+0.02*float64(k), 0.5-0.03*float64(k)
		l.level[k], l.snap[k] = 1, 100
	}
	for m := range l.alive {
		l.alive[m] = true
	}
	l.alivePairs = len(l.pairs)
	clear(l.fieldNorm)
	clear(l.fieldPart)
	for c := range l.pairs {
		for k := range K {
			l.gr[c*K+k] = want[0][k]*l.cos[0][c*K+k] + want[1][k]*l.cos[1][c*K+k]
			l.gi[c*K+k] = -want[0][k]*l.sin[0][c*K+k] - want[1][k]*l.sin[1][c*K+k]
			g := l.diffuse[c*K+k]
			l.fieldNorm[k] += g * g / float64(len(l.pairs))
			l.fieldPart[k] += g * l.gr[c*K+k] / float64(len(l.pairs))
		}
	}
	l.apportion(2)
	for j := range want {
		for k, v := range want[j] {
			if math.Abs(l.amp[j][k]-v) > 0.02 {
				t.Errorf("source %d, line %d: %.4f, want %.4f", j+1, k, l.amp[j][k], v)
			}
		}
	}
	for i := range l.rr {
		if math.Hypot(l.rr[i], l.ri[i]) > 0.04 {
			t.Fatalf("%.3f is left at %d", math.Hypot(l.rr[i], l.ri[i]), i)
		}
	}
}

// The slope and bend of the likelihood against differences of its value.
func TestSlopeOfTheLikelihood(t *testing.T) {
	mics := solidMics(0.1)
	set, err := settle(Options{Speed: testSpeed}, mics, rig.Spread(mics), 16000)
	if err != nil {
		t.Fatal(err)
	}
	l, err := newLooker(newSpace(mics, rig.Point{}, testSpeed, nil), &set, choosePairs(8, maxPairs))
	if err != nil {
		t.Fatal(err)
	}
	sum := newCrossSum(8, len(l.pairs), l.bins)
	u := rig.Degrees(40, 20).Unit()
	r := rand.New(rand.NewPCG(2, 2))
	f := frameSpectra{re: make([]float64, 8*l.bins), im: make([]float64, 8*l.bins)}
	for range 20 {
		for k := range l.bins {
			a := complex(r.NormFloat64(), r.NormFloat64())
			for m, q := range l.space.at {
				x := a*cmplx.Rect(1, l.omega[k]*q.Dot(u)/testSpeed) + complex(0.5*r.NormFloat64(), 0.5*r.NormFloat64())
				f.re[m*l.bins+k], f.im[m*l.bins+k] = real(x), imag(x)
			}
		}
		sum.add(&f, l.pairs, nil)
	}
	if reason := l.load(sum, nil); reason != "" {
		t.Fatal(reason)
	}
	p := place{y: [3]float64{u.X, u.Y, u.Z}}
	z := make([]float64, l.bins)
	l.phases(l.cos[0], l.sin[0], p)
	l.aligned(z, l.rr, l.ri, l.cos[0], l.sin[0])
	l.likelihood(z)
	groups := make([]groupSum, l.groups)
	_, slope, bend := l.climb(p, groups)
	// Along a tangent.
	tangent := rig.Point{X: -u.Y, Y: u.X}
	tangent = tangent.Scale(1 / tangent.Norm())
	at := func(h float64) float64 {
		v, _, _ := l.climb(place{y: [3]float64{u.X + h*tangent.X, u.Y + h*tangent.Y, u.Z + h*tangent.Z}}, nil)
		return v
	}
	const h = 1e-4
	got := slope[0]*tangent.X + slope[1]*tangent.Y
	want := (at(h) - at(-h)) / (2 * h)
	curve := bend.quad(vec4{tangent.X, tangent.Y})
	if math.Abs(got-want) > 1e-3*math.Sqrt(curve) {
		t.Errorf("slope %.5g, by differences %.5g", got, want)
	}
	second := -(at(h) - 2*at(0) + at(-h)) / (h * h)
	if math.Abs(curve/second-1) > 0.1 {
		t.Errorf("bend %.5g, by differences %.5g: want within 10 %% at the peak", curve, second)
	}
	var s [3]float64
	for _, g := range groups {
		for a := range s {
			s[a] += float64(g.s[a])
		}
	}
	for a := range s {
		if math.Abs(s[a]-slope[a]) > 1e-3*math.Sqrt(bend[a][a]) {
			t.Errorf("groups add up to a slope of %.4g in coordinate %d, want %.4g", s[a], a, slope[a])
		}
	}
}

// A late copy from elsewhere is said to be a reflection and ranks behind, even
// where it is the louder of the two.
func TestReflectionRanksBehindItsSource(t *testing.T) {
	const rate, n = 16000, 5 * 16000
	mics := ringMics(8, 0.06)
	voice := bursts(n, rate, 8)
	echo := make([]float64, n)
	copy(echo[int(0.006*rate):], voice)
	r := find(t, mics, rate, newMixture(mics, rate, n).plane(voice, rig.Degrees(20, 0), 1).plane(echo, rig.Degrees(120, 0), 1.1).noise(0.05, 3).block(), Options{})
	if len(r.Sources) < 2 {
		t.Fatalf("%d sources, want the source and its reflection: %+v", len(r.Sources), r.Findings)
	}
	if a := r.Sources[0].Direction.AzimuthDeg(); math.Abs(a-20) > 3 || r.Sources[0].Reflection {
		t.Errorf("first source at %.1f°, reflection %v, want 20°, the sound that comes first", a, r.Sources[0].Reflection)
	}
	if a := r.Sources[1].Direction.AzimuthDeg(); math.Abs(a-120) > 3 || !r.Sources[1].Reflection {
		t.Errorf("second source at %.1f°, reflection %v, want the reflection at 120°", a, r.Sources[1].Reflection)
	}
	// Two voices of their own are not each other's reflection.
	other := bursts(n, rate, 9)
	r = find(t, mics, rate, newMixture(mics, rate, n).plane(voice, rig.Degrees(20, 0), 1).plane(other, rig.Degrees(120, 0), 1).noise(0.05, 3).block(), Options{})
	for i, s := range r.Sources {
		if i < 2 && s.Reflection {
			t.Errorf("source %d of two voices is called a reflection", i+1)
		}
	}
}
