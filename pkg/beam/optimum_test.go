package beam

import (
	"errors"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Bin 64 of the tasks below is exactly 2000 Hz.
const (
	testRate = 32000
	testSize = 1024
	testBin  = 64
	testHz   = 2000.0
	testC    = 343.0
)

// taskOf is a task for n microphones that are dOverLambda wavelengths apart at
// bin testBin, steered to az degrees from the axis.
func taskOf(n int, dOverLambda, az float64) Task {
	return Task{Mics: line(n, dOverLambda*testC/testHz), Look: wave(az), Speed: testC, Rate: testRate, FFTSize: testSize}
}

// wave is a plane wave from az degrees.
func wave(az float64) acoustics.Plane { return acoustics.Plane{From: rig.Degrees(az, 0)} }

// steering is the steering vector of a wave at frequency hz.
func steering(t Task, w acoustics.Wave, hz float64) []complex128 {
	spreading := make([]float64, len(t.Mics))
	for m, p := range t.Mics {
		spreading[m] = w.Spreading(p, t.Reference)
	}
	return acoustics.Steering(nil, acoustics.Delays(nil, w, t.Mics, t.Reference, t.Speed), spreading, 2*math.Pi*hz)
}

// respond is wᴴv.
func respond(w, v []complex128) complex128 {
	var y complex128
	for m := range w {
		y += cmplx.Conj(w[m]) * v[m]
	}
	return y
}

// directivity is |wᴴd|²/(wᴴΓw) of one bin, by the definition.
func directivity(t Task, w []complex128, hz float64) float64 {
	var noise complex128
	for m, p := range t.Mics {
		for n, q := range t.Mics {
			x := 2 * math.Pi * hz / t.Speed * p.Distance(q)
			s := 1.0
			if x > 0 {
				s = math.Sin(x) / x
			}
			noise += cmplx.Conj(w[m]) * w[n] * complex(s, 0)
		}
	}
	y := cmplx.Abs(respond(w, steering(t, t.Look, hz)))
	return y * y / real(noise)
}

func db(power float64) float64 { return 10 * math.Log10(power) }

// known returns a covariance that holds the given matrix in every bin, as if
// measured over many frames.
func known(t *testing.T, task Task, r func(hz float64) []complex128) *Covariance {
	t.Helper()
	c, err := NewCovariance(task.Rate, len(task.Mics), task.FFTSize, CovarianceOptions{})
	if err != nil {
		t.Fatal(err)
	}
	scale := 0.0
	for _, v := range c.window {
		scale += v * v
	}
	c.frames, c.weight = 1000, 1
	bins := task.FFTSize/2 + 1
	for k := range bins {
		a, pair := r(task.Hz(k)), 0
		for m := range c.mics {
			for n := range m + 1 {
				c.sumRe[pair*bins+k], c.sumIm[pair*bins+k] = scale*real(a[m*c.mics+n]), scale*imag(a[m*c.mics+n])
				pair++
			}
		}
	}
	return c
}

// C1, C3: end-fire superdirective without loading; Uzkov 1946 (N² as d -> 0),
// Cox, Zeskind & Kooij 1986. Directivity factor and white noise gain. The rows
// of N = 8 below d = 0.25 λ lie beyond double precision and are left out.
func TestSuperdirectiveEndfire(t *testing.T) {
	for _, v := range []struct {
		n         int
		d         float64
		dmax, wng float64
	}{
		{2, 0.05, 3.97371, -10.6447}, {2, 0.10, 3.89514, -4.85231}, {2, 0.25, 3.36295, 1.53266}, {2, 0.40, 2.51603, 2.95265}, {2, 0.50, 2.0, 3.0103},
		{3, 0.05, 8.93226, -26.363}, {3, 0.10, 8.72831, -14.4816}, {3, 0.25, 7.27898, 0.0434356}, {3, 0.40, 4.68232, 4.49676}, {3, 0.50, 3.0, 4.77121},
		{4, 0.05, 15.8745, -43.9916}, {4, 0.10, 15.4961, -26.031}, {4, 0.25, 12.7704, -3.14857}, {4, 0.40, 7.58222, 5.30324}, {4, 0.50, 4.0, 6.0206},
		{8, 0.25, 50.4634, -23.0844}, {8, 0.40, 27.1505, 4.22644}, {8, 0.50, 8.0, 9.0309},
	} {
		task := taskOf(v.n, v.d, 0)
		w, err := Superdirective{FloorDB: math.Inf(-1)}.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		if got := directivity(task, w.Bin(testBin), testHz); math.Abs(got/v.dmax-1) > 1e-4 {
			t.Errorf("N=%d d=%g λ: directivity factor %.5f, want %.5f", v.n, v.d, got, v.dmax)
		}
		if got := db(w.WhiteNoiseGain(testBin)); math.Abs(got-v.wng) > 2e-3 {
			t.Errorf("N=%d d=%g λ: white noise gain %.4f dB, want %.4f", v.n, v.d, got, v.wng)
		}
	}
}

// C1: Uzkov 1946, N² at end-fire; C2: Uzkov 1946, Gilbert & Morgan 1955, sum
// (2n+1)P_n(0)² broadside; spacings small enough for the limit within double
// precision.
func TestSuperdirectiveLimits(t *testing.T) {
	for _, v := range []struct {
		n     int
		d, az float64
		want  float64
		tol   float64
	}{
		{2, 0.005, 0, 4, 0.002}, {3, 0.005, 0, 9, 0.002}, {4, 0.02, 0, 16, 0.005},
		{2, 0.005, 90, 1, 0.003}, {3, 0.005, 90, 2.25, 0.003}, {4, 0.01, 90, 2.25, 0.003}, {5, 0.03, 90, 3.515625, 0.01},
	} {
		task := taskOf(v.n, v.d, v.az)
		w, err := Superdirective{FloorDB: math.Inf(-1)}.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		if got := directivity(task, w.Bin(testBin), testHz); math.Abs(got/v.want-1) > v.tol {
			t.Errorf("N=%d d=%g λ at %g°: directivity factor %.5f, want %.5f", v.n, v.d, v.az, got, v.want)
		}
	}
}

// C4: two microphones at end-fire, D = 2(1 - s cos kd)/(1 - s²), s =
// sin(kd)/(kd); elementary 2x2 inverse.
func TestSuperdirectivePairClosedForm(t *testing.T) {
	for d, want := range map[float64]float64{0.05: 3.973706, 0.1: 3.895141, 0.25: 3.362954, 0.5: 2.0} {
		task := taskOf(2, d, 0)
		w, err := Superdirective{FloorDB: math.Inf(-1)}.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		if got := directivity(task, w.Bin(testBin), testHz); math.Abs(got/want-1) > 1e-6 {
			t.Errorf("d=%g λ: directivity factor %.7f, want %.7f", d, got, want)
		}
	}
}

// C13, C14: Van Trees 2002, section 6.3 (from memory): MVDR against one
// interferer of power INR in white noise; response to it and white noise gain.
// C16: with an exact null, white noise gain N(1-ρ²); Frost 1972.
func TestMinimumVarianceAgainstOneInterferer(t *testing.T) {
	for _, v := range []struct {
		n                          int
		us, ui, inr                float64
		sinrOpt, response, wng     float64
		wngNull, conventionalSINR0 float64
	}{
		{10, 0, 0.3, 10, 9.7862, -52.7998, 9.78837, 9.784004, 2.32708},
		{10, 0, 0.3, 1000, 9.78403, -92.7099, 9.78405, 9.784004, -16.868},
		{10, 0, 0.0433, 10, 1.82297, -24.406, 2.06943, 1.573972, -9.37678},
		{8, 0, 0.5, 100, 9.0309, math.Inf(-1), 9.0309, 9.0309, 9.0309},
		{4, 0, 0.6, 100, 5.87527, -66.5882, 5.87564, 5.874903, -5.50124},
		{2, 0, 0.5, 100, 0.0215531, -43.0967, 0.0429987, 0, -17.0329},
	} {
		task := taskOf(v.n, 0.5, math.Acos(v.us)*180/math.Pi)
		interferer := wave(math.Acos(v.ui) * 180 / math.Pi)
		noise := func(hz float64) []complex128 {
			a := steering(task, interferer, hz)
			r := make([]complex128, v.n*v.n)
			for m := range a {
				for n := range a {
					r[m*v.n+n] = complex(v.inr, 0) * a[m] * cmplx.Conj(a[n])
				}
				r[m*v.n+m] += 1
			}
			return r
		}
		sinr := func(w []complex128) float64 {
			var noiseOut complex128
			r := noise(testHz)
			for m := range w {
				for n := range w {
					noiseOut += cmplx.Conj(w[m]) * r[m*v.n+n] * w[n]
				}
			}
			y := cmplx.Abs(respond(w, steering(task, task.Look, testHz)))
			return db(y * y / real(noiseOut))
		}
		design := MVDR{Noise: known(t, task, noise), FloorDB: math.Inf(-1)}
		w, err := design.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		if got := sinr(w.Bin(testBin)); math.Abs(got-v.sinrOpt) > 1e-3 {
			t.Errorf("N=%d ui=%g INR=%g: SINR %.5f dB, want %.5f", v.n, v.ui, v.inr, got, v.sinrOpt)
		}
		got := 20 * math.Log10(cmplx.Abs(respond(w.Bin(testBin), steering(task, interferer, testHz))))
		if math.IsInf(v.response, -1) && got > -200 || !math.IsInf(v.response, -1) && math.Abs(got-v.response) > 1e-3 {
			t.Errorf("N=%d ui=%g INR=%g: response to the interferer %.4f dB, want %.4f", v.n, v.ui, v.inr, got, v.response)
		}
		if got := db(w.WhiteNoiseGain(testBin)); math.Abs(got-v.wng) > 1e-3 {
			t.Errorf("N=%d ui=%g INR=%g: white noise gain %.5f dB, want %.5f", v.n, v.ui, v.inr, got, v.wng)
		}
		plain, err := Tapered{}.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		if got := sinr(plain.Bin(testBin)); math.Abs(got-v.conventionalSINR0) > 1e-3 {
			t.Errorf("N=%d ui=%g INR=%g: delay-and-sum SINR %.5f dB, want %.5f", v.n, v.ui, v.inr, got, v.conventionalSINR0)
		}
		exact, err := LCMV{FloorDB: math.Inf(-1), Nulls: []acoustics.Wave{interferer}}.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		if got := db(exact.WhiteNoiseGain(testBin)); math.Abs(got-v.wngNull) > 1e-6 {
			t.Errorf("N=%d ui=%g: white noise gain with a null %.7f dB, want %.7f", v.n, v.ui, got, v.wngNull)
		}
		if got := cmplx.Abs(respond(exact.Bin(testBin), steering(task, interferer, testHz))); got > 1e-13 {
			t.Errorf("N=%d ui=%g: response in the null %.2g", v.n, v.ui, got)
		}
	}
}

// C15: Carlson 1988, Cox 1987; diagonal loading L of unit noise acts as INR/(1+L)
// in the closed form of C14. The loading that a floor asks for must be the one
// whose white noise gain the table gives.
func TestLoadingMeetsTheFloor(t *testing.T) {
	task := taskOf(10, 0.5, 90)
	interferer := wave(math.Acos(0.3) * 180 / math.Pi)
	noise := func(hz float64) []complex128 {
		a := steering(task, interferer, hz)
		r := make([]complex128, 100)
		for m := range a {
			for n := range a {
				r[m*10+n] = 1000 * a[m] * cmplx.Conj(a[n])
			}
			r[m*10+m]++
		}
		return r
	}
	for _, v := range []struct{ load, response, wng float64 }{
		{10, -71.89113, 9.78449}, {100, -52.71423, 9.788409}, {1000, -33.56911, 9.822379},
	} {
		// The table's white noise gains are rounded to 1e-6 dB: the loading and
		// the response that follow are looser for small loads, where the gain
		// hardly moves.
		design := MVDR{Noise: known(t, task, noise), FloorDB: v.wng - floorMarginDB}
		w, err := design.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		tol := map[float64]float64{10: 0.2, 100: 0.02, 1000: 0.002}[v.load]
		if got := 20 * math.Log10(cmplx.Abs(respond(w.Bin(testBin), steering(task, interferer, testHz)))); math.Abs(got-v.response) > tol {
			t.Errorf("load %g: response to the interferer %.4f dB, want %.4f", v.load, got, v.response)
		}
		// Loading is stated re the mean power of a microphone, 1001.
		if got := w.Loading[testBin] * 1001; math.Abs(got/v.load-1) > tol {
			t.Errorf("load %.4f, want %g", got, v.load)
		}
	}
}

// C17: R = σ²·1 gives delay-and-sum, and so does superdirective at half a
// wavelength, where the coherence is zero; elementary.
func TestDesignsThatAreDelayAndSum(t *testing.T) {
	task := taskOf(8, 0.5, 63)
	plain, err := Tapered{}.Weights(task)
	if err != nil {
		t.Fatal(err)
	}
	white := known(t, task, func(float64) []complex128 {
		r := make([]complex128, 64)
		for m := range 8 {
			r[m*9] = 0.37
		}
		return r
	})
	for name, d := range map[string]Design{
		"minimum variance": MVDR{Noise: white, FloorDB: math.Inf(-1)},
		"superdirective":   Superdirective{FloorDB: math.Inf(-1)},
		"no nulls":         LCMV{FloorDB: 0},
	} {
		w, err := d.Weights(task)
		if err != nil {
			t.Fatal(err)
		}
		for m, v := range w.Bin(testBin) {
			if cmplx.Abs(v-plain.Bin(testBin)[m]) > 1e-12 {
				t.Errorf("%s: microphone %d: %v, want %v", name, m+1, v, plain.Bin(testBin)[m])
			}
		}
		if got := db(w.WhiteNoiseGain(testBin)); math.Abs(got-9.0309) > 1e-4 {
			t.Errorf("%s: white noise gain %.5f dB, want 9.0309", name, got)
		}
	}
}

// No weights that fulfil constraints and floor do better: random feasible
// moves away from the solution only raise its noise.
func TestOptimumIsAMinimum(t *testing.T) {
	task := Task{Mics: ring(7, 0.06), Look: wave(20), Speed: testC, Rate: testRate, FFTSize: testSize}
	null := wave(150)
	w, err := Superdirective{FloorDB: -3, Nulls: []acoustics.Wave{null}}.Weights(task)
	if err != nil {
		t.Fatal(err)
	}
	r := rand.New(rand.NewPCG(11, 12))
	for _, k := range []int{20, 40, testBin, 150} {
		if !w.Held[k] {
			t.Fatalf("bin %d does not hold its null", k)
		}
		hz := task.Hz(k)
		bin := w.Bin(k)
		d, v := steering(task, task.Look, hz), steering(task, null, hz)
		best := 1 / directivity(task, bin, hz)
		floor := w.WhiteNoiseGain(k)
		for range 200 {
			// A random direction, freed of what would change the constraints
			// (Gram-Schmidt).
			move := make([]complex128, 7)
			for m := range move {
				move[m] = complex(r.NormFloat64(), r.NormFloat64())
			}
			orthogonal := [][]complex128{append([]complex128(nil), d...), append([]complex128(nil), v...)}
			for i, q := range orthogonal {
				for _, p := range orthogonal[:i] {
					dot := respond(p, q) / respond(p, p)
					for m := range q {
						q[m] -= dot * p[m]
					}
				}
				dot := respond(q, move) / respond(q, q)
				for m := range move {
					move[m] -= dot * q[m]
				}
			}
			other := append([]complex128(nil), bin...)
			var power float64
			for m := range other {
				other[m] += move[m] * complex(1e-3/math.Sqrt(7), 0)
				power += real(other[m])*real(other[m]) + imag(other[m])*imag(other[m])
			}
			if 1/power < floor*(1-1e-12) {
				continue // not allowed by the floor
			}
			if got := 1 / directivity(task, other, hz); got < best*(1-1e-9) {
				t.Errorf("bin %d: weights with diffuse noise %.9g, below the solution's %.9g", k, got, best)
			}
		}
	}
}

func TestFloorHoldsAtEveryBin(t *testing.T) {
	for name, mics := range map[string][]rig.Point{"ring": ring(8, 0.06), "line": line(8, 0.04)} {
		for _, floor := range []float64{-6, 0, 6} {
			task := Task{Mics: mics, Look: wave(0), Speed: testC, Rate: testRate, FFTSize: testSize}
			w, err := Superdirective{FloorDB: floor}.Weights(task)
			if err != nil {
				t.Fatal(err)
			}
			for k := range w.Bins() {
				if got := db(w.WhiteNoiseGain(k)); got < floor {
					t.Errorf("%s, floor %g dB: bin %d has %.3f dB", name, floor, k, got)
				}
				if y := respond(w.Bin(k), steering(task, task.Look, task.Hz(k))); cmplx.Abs(y-1) > 1e-12 {
					t.Errorf("%s, floor %g dB: bin %d responds %v to the look, want 1", name, floor, k, y)
				}
			}
		}
	}
}

// Where a null would cost too much white noise gain it gives way, smoothly:
// the weights do not jump between the last bin without it and the first with.
func TestNullGivesWayBelowTheFloor(t *testing.T) {
	task := Task{Mics: line(8, 0.04), Look: wave(90), Speed: testC, Rate: testRate, FFTSize: testSize}
	w, err := LCMV{FloorDB: 0, Nulls: []acoustics.Wave{wave(50)}}.Weights(task)
	if err != nil {
		t.Fatal(err)
	}
	first := -1
	for k, held := range w.Held {
		if held && first < 0 {
			first = k
		}
		if got := db(w.WhiteNoiseGain(k)); got < 0 {
			t.Errorf("bin %d: white noise gain %.3f dB, below the floor", k, got)
		}
	}
	if hz := task.Hz(first); hz < 50 || hz > 1000 {
		t.Errorf("the null is held from %.0f Hz, want within 50 to 1000", hz)
	}
	var jump, size float64
	a, b := w.Bin(first-1), w.Bin(first)
	for m := range a {
		jump += real((a[m] - b[m]) * cmplx.Conj(a[m]-b[m]))
		size += real(b[m] * cmplx.Conj(b[m]))
	}
	if jump > 0.02*size {
		t.Errorf("weights jump by %.2g of their power at %.0f Hz", jump/size, task.Hz(first))
	}
}

func TestDesignRefusals(t *testing.T) {
	task := Task{Mics: line(3, 0.04), Look: wave(60), Speed: testC, Rate: testRate, FFTSize: testSize}
	one := task
	one.Mics = one.Mics[:1]
	wide := task
	wide.Mics = line(3, 5)
	empty, err := NewCovariance(testRate, 3, testSize, CovarianceOptions{})
	if err != nil {
		t.Fatal(err)
	}
	other := known(t, taskOf(4, 0.5, 90), func(float64) []complex128 { return make([]complex128, 16) })
	few := known(t, task, func(float64) []complex128 { return make([]complex128, 9) })
	few.frames = 2
	for _, v := range []struct {
		name   string
		design Design
		task   Task
		want   string
	}{
		{"one microphone", Superdirective{}, one, "1 live microphone"},
		{"floor out of reach", Superdirective{FloorDB: 6}, task, "reach 4.77 dB at most"},
		{"floor is no number", Superdirective{FloorDB: math.NaN()}, task, "NaN"},
		{"too many nulls", LCMV{Nulls: []acoustics.Wave{wave(0), wave(90), wave(150)}}, task, "4 constraints, more than the 3 microphones"},
		{"null in the look", LCMV{FloorDB: math.Inf(-1), Nulls: []acoustics.Wave{wave(60)}}, task, "lies in the steered direction"},
		{"null on the cone of the look", Superdirective{Nulls: []acoustics.Wave{wave(-60)}}, task, "lies in the steered direction"},
		{"null without direction", LCMV{Nulls: []acoustics.Wave{nil}}, task, "without a direction"},
		{"null at a microphone", LCMV{Nulls: []acoustics.Wave{acoustics.Spherical{At: task.Mics[1]}}}, task, "reference point"},
		{"no noise", MVDR{}, task, "no noise"},
		{"empty noise", MVDR{Noise: empty}, task, "no noise"},
		{"noise of another rig", MVDR{Noise: other}, task, "covariance of 4 microphones"},
		{"little noise", MVDR{Noise: few}, task, "2 frames of noise for 3 microphones"},
		{"pattern beyond Nyquist", ConstantBeamwidth{FromHz: 20000}, task, "20000 Hz"},
		{"no look", Tapered{}, Task{Mics: task.Mics, Speed: 343, Rate: 48000, FFTSize: 512}, "no direction"},
		{"nothing set", Tapered{}, Task{}, "no microphones"},
		{"odd transform", Tapered{}, Task{Mics: task.Mics, Look: wave(0), Speed: 343, Rate: 48000, FFTSize: 500}, "power of two"},
		{"focus on a microphone", Tapered{}, Task{Mics: task.Mics, Look: acoustics.Spherical{At: task.Mics[2]}, Speed: 343, Rate: 48000, FFTSize: 512}, "microphone 3"},
		{"transform too short", Tapered{}, wide, "four times"},
	} {
		w, err := v.design.Weights(v.task)
		if err == nil || !strings.Contains(err.Error(), v.want) {
			t.Errorf("%s: weights %v, error %v, want one with %q", v.name, w != nil, err, v.want)
		}
	}
	for want, design := range map[error]Design{
		ErrFloorOutOfReach:    Superdirective{FloorDB: 6},
		ErrTooManyConstraints: LCMV{Nulls: []acoustics.Wave{wave(0), wave(90), wave(150)}},
		ErrNullsNotHeld:       Superdirective{Nulls: []acoustics.Wave{wave(-60)}},
	} {
		if _, err := design.Weights(task); !errors.Is(err, want) {
			t.Errorf("%v: want %v", err, want)
		}
	}
	var joined interface{ Unwrap() []error }
	if _, err := (Tapered{}).Weights(Task{}); !errors.As(err, &joined) || len(joined.Unwrap()) < 4 {
		t.Errorf("an empty task: %v, want every fault", err)
	}
}

// A covariance of silence gives delay-and-sum, not a division by zero.
func TestMinimumVarianceOfSilence(t *testing.T) {
	task := taskOf(4, 0.5, 90)
	w, err := MVDR{Noise: known(t, task, func(float64) []complex128 { return make([]complex128, 16) })}.Weights(task)
	if err != nil {
		t.Fatal(err)
	}
	for k := range w.Bins() {
		if got := db(w.WhiteNoiseGain(k)); math.Abs(got-6.0206) > 1e-4 {
			t.Fatalf("bin %d: white noise gain %g dB, want 6.0206", k, got)
		}
	}
}
