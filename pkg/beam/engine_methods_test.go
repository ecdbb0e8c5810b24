package beam

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
	"alidade/pkg/delay"
	"alidade/pkg/rig"
)

// method is a kernel and the engine that runs it.
type method struct {
	name   string
	kernel delay.Kernel
	engine func(audio.Source, *Filters) (audio.Source, error)
}

// methods are sinc, spectral and farrow, as they are offered.
func methods(t *testing.T) []method {
	t.Helper()
	sinc, err := delay.NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	long, err := delay.NewSinc(128)
	if err != nil {
		t.Fatal(err)
	}
	farrow, err := delay.NewFarrow(32, 6)
	if err != nil {
		t.Fatal(err)
	}
	return []method{{"sinc", sinc, NewConvolver}, {"spectral", long, NewOverlapSave}, {"farrow", farrow, NewConvolver}}
}

// beamOf runs filters on a take and returns the beam.
func beamOf(t *testing.T, engine func(audio.Source, *Filters) (audio.Source, error), f *Filters, x audio.Block) []float32 {
	t.Helper()
	src, err := engine(audio.FromBlock(f.Rate, x), f)
	if err != nil {
		t.Fatal(err)
	}
	y, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	if y.Channels() != 1 || y.Frames() != x.Frames() {
		t.Fatalf("%d channels of %d frames, want one of %d", y.Channels(), y.Frames(), x.Frames())
	}
	return y.Channel(0)
}

// One microphone, so that no error is averaged away: 41 fractional delays and
// tones from 100 Hz to 0.8 of Nyquist through the whole float32 chain; the
// largest complex error re the signal.
func TestEachFractionThroughTheFloat32Chain(t *testing.T) {
	const rate, n, edge = 48000, 1400, 80
	bound := map[string]float64{"sinc": -100, "spectral": -100, "farrow": -85}
	x := audio.NewBlock(1, n)
	for _, m := range methods(t) {
		worst := 0.0
		for i := range 41 {
			d := (float64(i)-20)/41 + float64(i%7) - 3 // samples
			f, err := DelayAndSum(m.kernel, rate, []float64{d / rate}, []float64{1})
			if err != nil {
				t.Fatal(err)
			}
			for _, hz := range []float64{100, 999.7, 7000, 12345, 17000, 19200} {
				w := 2 * math.Pi * hz / rate
				for k := range n {
					x.Channel(0)[k] = float32(0.7 * math.Cos(w*(float64(k)-d)))
				}
				y := beamOf(t, m.engine, f, x)
				// The error as a tone of that frequency: least squares over the middle.
				re, im := fitTone(w, func(k int) float64 { return float64(y[k]) - 0.7*math.Cos(w*float64(k)) }, edge, n-edge)
				worst = math.Max(worst, math.Hypot(re, im)/0.7)
			}
		}
		db := 20 * math.Log10(worst)
		t.Logf("%s: largest error %.1f dB", m.name, db)
		if db > bound[m.name] {
			t.Errorf("%s: largest error %.1f dB, want at most %g", m.name, db, bound[m.name])
		}
	}
}

// fitTone returns the a and b for which a·cos(wk) + b·sin(wk) is nearest to
// v(k), from <= k < to, by least squares.
func fitTone(w float64, v func(k int) float64, from, to int) (a, b float64) {
	var cc, cs, ss, vc, vs float64
	for k := from; k < to; k++ {
		s, c := math.Sincos(w * float64(k))
		x := v(k)
		cc, cs, ss, vc, vs = cc+c*c, cs+c*s, ss+s*s, vc+x*c, vs+x*s
	}
	det := cc*ss - cs*cs
	return (vc*ss - vs*cs) / det, (vs*cc - vc*cs) / det
}

// waves are seeded plane waves of noise from 100 Hz to 0.8 of Nyquist, n frames
// with a period of n, a power of two: what reaches the points at, exact at any
// delay, and what the first of them alone sounds like at the reference point.
func waves(at []rig.Point, from []rig.Direction, amplitude []float64, rate, n int, c float64, seed uint64) (x audio.Block, first []float64) {
	rng := rand.New(rand.NewPCG(seed, 31))
	fft := fourier.NewFFT(n)
	low, high := int(math.Ceil(100*float64(n)/float64(rate))), int(0.4*float64(n))
	sum := make([][]complex128, len(at))
	for m := range sum {
		sum[m] = make([]complex128, n/2+1)
	}
	scale := 1 / math.Sqrt(2*float64(high-low)) // a root mean square of 1
	for j, d := range from {
		s := make([]complex128, n/2+1)
		for k := low; k < high; k++ {
			s[k] = complex(rng.NormFloat64(), rng.NormFloat64()) * complex(amplitude[j]*scale/math.Sqrt2, 0)
		}
		if j == 0 {
			first = fft.Sequence(nil, s)
		}
		for m, tau := range acoustics.Delays(nil, acoustics.Plane{From: d}, at, rig.Point{}, c) {
			for k := low; k < high; k++ {
				sum[m][k] += s[k] * cmplx.Rect(1, -2*math.Pi*float64(k)*float64(rate)/float64(n)*tau)
			}
		}
	}
	x = audio.NewBlock(len(at), n)
	for m := range at {
		for i, v := range fft.Sequence(nil, sum[m]) {
			x.Channel(m)[i] = float32(v)
		}
	}
	return x, first
}

// A noisy take: a wide-band source, noise from sixteen other directions and
// noise of each microphone's own, all from 100 Hz to 0.8 of Nyquist. The three
// methods agree to -80 dB of the beam; and the beam of the source alone is the
// source, to each method's own bound.
func TestMethodsAgreeOnANoisyTake(t *testing.T) {
	const rate, n, edge, c = 48000, 1 << 14, 200, 343.2
	rng := rand.New(rand.NewPCG(3, 33))
	at := make([]rig.Point, 8)
	for m := range at {
		at[m] = rig.Point{X: 0.8 * (float64(m)/7 - 0.5), Y: 0.2 * rng.Float64(), Z: 0.1 * rng.Float64()}
	}
	from := []rig.Direction{rig.Degrees(57, 12)}
	loudness := []float64{0.1}
	for range 16 {
		from = append(from, rig.Degrees(360*rng.Float64()-180, 90*rng.Float64()-45))
		loudness = append(loudness, 0.04)
	}
	noisy, _ := waves(at, from, loudness, rate, n, c, 1)
	for m := range at { // a wave of its own for each microphone
		own, _ := waves(at[m:m+1], []rig.Direction{{}}, []float64{0.05}, rate, n, c, uint64(10+m))
		for i, v := range own.Channel(0) {
			noisy.Channel(m)[i] += v
		}
	}
	clean, source := waves(at, from[:1], loudness[:1], rate, n, c, 1)
	taus := acoustics.Delays(nil, acoustics.Plane{From: from[0]}, at, rig.Point{}, c)
	bound := map[string]float64{"sinc": -100, "spectral": -100, "farrow": -85}
	list := methods(t)
	beams := make([][]float32, len(list))
	for j, m := range list {
		f, err := DelayAndSum(m.kernel, rate, taus, even(len(at)))
		if err != nil {
			t.Fatal(err)
		}
		beams[j] = beamOf(t, m.engine, f, noisy)
		alone := beamOf(t, m.engine, f, clean)
		var e2, s2 float64
		for i := edge; i < n-edge; i++ {
			e2 += (float64(alone[i]) - source[i]) * (float64(alone[i]) - source[i])
			s2 += source[i] * source[i]
		}
		db := 10 * math.Log10(e2/s2)
		t.Logf("%s: the source comes back to %.1f dB", m.name, db)
		if db > bound[m.name] {
			t.Errorf("%s: the source comes back to %.1f dB, want %g", m.name, db, bound[m.name])
		}
	}
	for j := range list {
		for k := range j {
			var e2, s2 float64
			for i := edge; i < n-edge; i++ {
				d := float64(beams[j][i]) - float64(beams[k][i])
				e2 += d * d
				s2 += float64(beams[j][i]) * float64(beams[j][i])
			}
			db := 10 * math.Log10(e2/s2)
			t.Logf("%s and %s differ by %.1f dB", list[k].name, list[j].name, db)
			if db > -80 {
				t.Errorf("%s and %s differ by %.1f dB, want at most -80", list[k].name, list[j].name, db)
			}
		}
	}
}

// A22 (common array theory; Van Trees 2002; Mailloux), through the engines on a
// signal of many octaves: a beam of true delays passes a wave from where it
// looks as it is at every frequency, and waves that lie as far to either side
// in cos θ less, both by the same: the peak stands there. Its value beside it is
// the array factor sin(Nψ/2)/(N·sin(ψ/2)).
func TestWideBandBeamDoesNotSquint(t *testing.T) {
	const rate, mics, d, c = 48000, 10, 0.04, 343.0
	const whole, edge = 9600, 200 // frames: whole periods of all tones, and beside them
	const n = whole + 2*edge
	at := make([]rig.Point, mics)
	for m := range at {
		at[m] = rig.Point{X: d * (float64(m) - (mics-1)/2.0)}
	}
	const look, aside = 0.5, 0.01 // cos θ
	toward := func(u float64) []float64 {
		return acoustics.Delays(nil, acoustics.Plane{From: rig.Direction{Azimuth: math.Acos(u)}}, at, rig.Point{}, c)
	}
	tones := []float64{125, 250, 500, 1000, 1500, 2000, 3000, 4000, 6000, 8000, 12000, 18000}
	for _, m := range methods(t) {
		f, err := DelayAndSum(m.kernel, rate, toward(look), even(mics))
		if err != nil {
			t.Fatal(err)
		}
		gains := map[float64][]complex128{}
		for _, u := range []float64{look - aside, look, look + aside} {
			taus := toward(u)
			x := audio.NewBlock(mics, n)
			for k := range mics {
				for i := range n {
					sum := 0.0
					for j, hz := range tones {
						sum += 0.05 * math.Cos(2*math.Pi*hz*(float64(i)/rate-taus[k])+float64(j*j))
					}
					x.Channel(k)[i] = float32(sum)
				}
			}
			y := beamOf(t, m.engine, f, x)
			for j, hz := range tones {
				var sum complex128
				for i := edge; i < n-edge; i++ {
					sum += complex(float64(y[i]), 0) * cmplx.Rect(1, -2*math.Pi*hz*float64(i)/rate-float64(j*j))
				}
				gains[u] = append(gains[u], sum/(0.05*whole/2))
			}
		}
		for j, hz := range tones {
			if e := cmplx.Abs(gains[look][j] - 1); e > 1e-4 {
				t.Errorf("%s, %g Hz: gain %.6g where it looks, want 1", m.name, hz, gains[look][j])
			}
			half := math.Pi * hz * d / c * aside
			want := math.Sin(mics*half) / (mics * math.Sin(half))
			for _, u := range []float64{look - aside, look + aside} {
				if got := cmplx.Abs(gains[u][j]); math.Abs(got-want) > 1e-4 {
					t.Errorf("%s, %g Hz: gain %.6f at cos θ = %g, want %.6f", m.name, hz, got, u, want)
				}
			}
		}
	}
}

// A24 (uniform quantisation error; Dudgeon 1977, from memory), measured: 256
// microphones whose delays are rounded to whole samples lose sinc(f/rate) of
// the main lobe on average; fractional delays lose nothing.
func TestWholeSampleDelaysLoseWhatTheyShould(t *testing.T) {
	const rate, mics, n, edge = 48000, 256, 500, 90
	taus := make([]float64, mics)
	rounded := &Filters{Rate: rate}
	samples := make([]float64, mics)
	for m := range taus {
		whole := float64(7*m%41 - 20)
		samples[m] = whole + (float64(m)+0.5)/mics - 0.5
		taus[m] = samples[m] / rate
		rounded.Start = append(rounded.Start, -int(whole))
		rounded.H = append(rounded.H, []float64{1.0 / mics})
	}
	for i, f := range []float64{0.05, 0.1, 0.2, 0.25, 0.4} {
		want := []float64{-0.03574871, -0.1433502, -0.5792237, -0.9120976, -2.420071}[i]
		w := 2 * math.Pi * f
		x := audio.NewBlock(mics, n)
		for m, d := range samples {
			for k := range n {
				x.Channel(m)[k] = float32(0.5 * math.Cos(w*(float64(k)-d)+0.4))
			}
		}
		loss := func(engine func(audio.Source, *Filters) (audio.Source, error), f *Filters) float64 {
			y := beamOf(t, engine, f, x)
			a, b := fitTone(w, func(k int) float64 { return float64(y[k]) }, edge, n-edge)
			return 20 * math.Log10(math.Hypot(a, b)/0.5)
		}
		for name, engine := range engines {
			if got := loss(engine, rounded); math.Abs(got-want) > 1e-3 {
				t.Errorf("%s, %g of the rate: loss %.5f dB with whole samples, want %.5f", name, f, got, want)
			}
		}
		for _, m := range methods(t) {
			exact, err := DelayAndSum(m.kernel, rate, taus, even(mics))
			if err != nil {
				t.Fatal(err)
			}
			if got := loss(m.engine, exact); math.Abs(got) > 1e-3 {
				t.Errorf("%s, %g of the rate: loss %.5f dB, want 0", m.name, f, got)
			}
		}
	}
}

// Filters that look far back or far ahead only, some past the whole take.
func TestEnginesWithFarFilters(t *testing.T) {
	for _, starts := range [][]int{{5000, 5100}, {-5000, -5060}, {-3000, 2000}, {41, 60}, {-41, -40}, {900, 2900}, {-2900, -100}} {
		f := randomFilters(2, 70, 0, 6)
		f.Start = starts
		for name, engine := range engines {
			for _, frames := range []int{300, 3000} {
				t.Run(fmt.Sprintf("%s, starts %v, %d frames", name, starts, frames), func(t *testing.T) {
					x := random(2, frames, 3)
					want := plain(f, x)
					y := beamOf(t, engine, f, x)
					for i, v := range y {
						if d := math.Abs(float64(v - want.Channel(0)[i])); d > 2e-6 {
							t.Fatalf("frame %d is %g, want %g", i, v, want.Channel(0)[i])
						}
					}
				})
			}
		}
	}
}

// Several beams of differing spans keep the contract of a stage, too.
func TestManyBeamsKeepTheContract(t *testing.T) {
	var sets []*Filters
	const frames = 2600
	x := random(3, frames, 8)
	want := audio.NewBlock(3, frames)
	for k, spread := range []int{0, 50, 400} {
		f := randomFilters(3, 40, spread, uint64(40+k))
		sets = append(sets, f)
		copy(want.Channel(k), plain(f, x).Channel(0))
	}
	stage := func(up audio.Source) audio.Source {
		s, err := NewOverlapSaveMany(up, sets)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	audiotest.TestStage(t, 48000, x, stage, want, audiotest.Options{Tolerance: 2e-6, Rate: 48000, Sizes: []int{256}, Lookahead: 1 << 14})
}

func TestFiltersThatCannotBeHeldAreRefused(t *testing.T) {
	src := audio.FromBlock(48000, random(2, 100, 1))
	for what, starts := range map[string][]int{
		"back": {0, largestSpan}, "ahead": {-largestSpan - 1, 0}, "apart": {-largestSpan / 2, largestSpan/2 + 1}, "far back": {math.MaxInt, 0}, "far ahead": {0, math.MinInt},
	} {
		f := &Filters{Rate: 48000, Start: starts, H: [][]float64{{1}, {1}}}
		for name, engine := range engines {
			if _, err := engine(src, f); err == nil || !strings.Contains(err.Error(), "from frame") {
				t.Errorf("%s, %s: error %v", name, what, err)
			}
		}
	}
	kernel, err := delay.NewSinc(16)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := DelayAndSum(kernel, 48000, []float64{0}, []float64{math.NaN()}); err == nil {
		t.Error("an amplitude that is not a number: accepted")
	}
	if _, err := DelayAndSum(kernel, 48000, nil, nil); err == nil {
		t.Error("no microphones: accepted")
	}
	defer func() {
		if recover() == nil {
			t.Error("two delays and one amplitude: no panic")
		}
	}()
	DelayAndSum(kernel, 48000, []float64{0, 0}, []float64{1})
}
