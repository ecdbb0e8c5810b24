package delay

import (
	"math"
	"math/cmplx"
	"testing"
)

// transfer is Σ h[n]·e^{-j2πfn}.
func transfer(h []float64, f float64) complex128 {
	var sum complex128
	for n, v := range h {
		sum += complex(v, 0) * cmplx.Rect(1, -2*math.Pi*f*float64(n))
	}
	return sum
}

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.12g, want %.12g ± %g", what, got, want, tolerance)
	}
}

func decibels(h complex128) float64 { return 20 * math.Log10(cmplx.Abs(h)) }

// phaseDelay is the phase delay of h at f, samples, near the delay expected.
func phaseDelay(h complex128, f, expected float64) float64 {
	turn := math.Remainder(-cmplx.Phase(h)-2*math.Pi*f*expected, 2*math.Pi)
	return expected + turn/(2*math.Pi*f)
}

// E1: Laakso, Välimäki, Karjalainen and Laine 1996; orders 1 to 3 also from
// J. O. Smith, Physical Audio Signal Processing (explicit Lagrange formulas).
func TestLagrangeTaps(t *testing.T) {
	for _, c := range []struct {
		order int
		delay float64
		want  []float64
	}{
		{1, 0.25, []float64{0.75, 0.25}},
		{1, 0.50, []float64{0.5, 0.5}},
		{2, 1.25, []float64{-0.09375, 0.9375, 0.15625}},
		{2, 1.50, []float64{-0.125, 0.75, 0.375}},
		{3, 1.25, []float64{-0.0546875, 0.8203125, 0.2734375, -0.0390625}},
		{3, 1.50, []float64{-0.0625, 0.5625, 0.5625, -0.0625}},
		{4, 2.25, []float64{0.01708984375, -0.123046875, 0.9228515625, 0.205078125, -0.02197265625}},
		{4, 2.50, []float64{0.0234375, -0.15625, 0.703125, 0.46875, -0.0390625}},
		{5, 2.25, []float64{0.009399414062, -0.08459472656, 0.8459472656, 0.2819824219, -0.06042480469, 0.007690429688}},
		{5, 2.50, []float64{0.01171875, -0.09765625, 0.5859375, 0.5859375, -0.09765625, 0.01171875}},
	} {
		got := Lagrange(c.order, c.delay)
		if len(got) != len(c.want) {
			t.Fatalf("order %d: %d taps, want %d", c.order, len(got), len(c.want))
		}
		for n := range got {
			near(t, "tap", got[n], c.want[n], 5e-11) // the table has 10 digits
		}
	}
}

// E2: Lagrange at half a sample, magnitude (Laakso et al. 1996).
func TestLagrangeMagnitudeAtHalfASample(t *testing.T) {
	at := []float64{0.05, 0.1, 0.2, 0.25, 0.3, 0.4, 0.45}
	for order, want := range map[int][]float64{
		1: {-0.1076015, -0.4358735, -1.840847, -3.0103, -4.615626, -10.20035, -16.11335},
		3: {-0.001966989, -0.03075532, -0.4567697, -1.0721, -2.156544, -6.9595, -12.66267},
		5: {-4.015007e-05, -0.002453694, -0.131415, -0.4439304, -1.164167, -5.294764, -10.79514},
	} {
		h := Lagrange(order, float64(order)/2)
		for i, f := range at {
			near(t, "magnitude", decibels(transfer(h, f)), want[i], 1e-4)
		}
	}
}

// E3: Lagrange at a quarter of a sample, magnitude and error of the phase delay
// (Laakso et al. 1996).
func TestLagrangeAtAQuarterOfASample(t *testing.T) {
	at := []float64{0.1, 0.2, 0.25, 0.4}
	for _, c := range []struct {
		order int
		delay float64
		want  [][2]float64
	}{
		{1, 0.25, [][2]float64{{-0.3227358, -0.006323469}, {-1.302513, -0.02728651}, {-2.0412, -0.04516724}, {-4.926588, -0.1457125}}},
		{3, 1.25, [][2]float64{{-0.022231, -0.0005140477}, {-0.3194483, -0.007586961}, {-0.7253139, -0.01780261}, {-3.4543, -0.1109695}}},
		{5, 2.25, [][2]float64{{-0.001754892, -4.346072e-05}, {-0.09118995, -0.002295539}, {-0.2995099, -0.007702368}, {-2.70528, -0.08849006}}},
	} {
		h := Lagrange(c.order, c.delay)
		for i, f := range at {
			r := transfer(h, f)
			near(t, "magnitude", decibels(r), c.want[i][0], 1e-6*(1+math.Abs(c.want[i][0])))
			near(t, "phase delay error", phaseDelay(r, f, c.delay)-c.delay, c.want[i][1], 1e-6)
		}
	}
}

// E4: the Farrow matrix of the cubic Lagrange interpolator (Farrow 1988;
// Välimäki 1995).
func TestFarrowMatrixOfTheCubic(t *testing.T) {
	want := [][]float64{
		{0, -1. / 3, 0.5, -1. / 6},
		{1, -0.5, -1, 0.5},
		{0, 1, 0.5, -0.5},
		{0, -1. / 6, 0, 1. / 6},
	}
	f, err := NewLagrange(3)
	if err != nil {
		t.Fatal(err)
	}
	for n, row := range f.Matrix() {
		for k, v := range row {
			near(t, "coefficient", v, want[n][k], 1e-12)
		}
	}
	// And as a kernel it gives the taps of the formula.
	for _, d := range []float64{0, 0.2, 0.5, 0.99} {
		start, taps := f.Taps(nil, d)
		direct := Lagrange(3, 1+d)
		for n, v := range taps {
			if start+n < -1 || start+n > 2 {
				t.Fatalf("delay %g: a tap of delay %d", d, start+n)
			}
			near(t, "tap", v, direct[start+n+1], 1e-12)
		}
	}
}

// E5: the moments of a Lagrange filter up to its order are those of the pure
// delay: maximally flat at zero frequency (Laakso et al. 1996).
func TestLagrangeMoments(t *testing.T) {
	want := []float64{1, 2.25, 5.0625, 11.390625, 25.62890625, 57.6650390625}
	h := Lagrange(5, 2.25)
	for m, w := range want {
		sum := 0.0
		for n, v := range h {
			sum += v * math.Pow(float64(n), float64(m))
		}
		near(t, "moment", sum, w, 1e-9)
	}
}

// E6, E7: Thiran all-pass denominators (Thiran 1971; Laakso et al. 1996; the
// case of order 3 and delay 2.4 is also a worked example of a manual).
func TestThiranDenominators(t *testing.T) {
	for _, c := range []struct {
		order int
		delay float64
		want  []float64
	}{
		{1, 0.5, []float64{1, 0.3333333333}},
		{1, 1.25, []float64{1, -0.1111111111}},
		{2, 2.25, []float64{1, -0.1538461538, 0.02262443439}},
		{2, 1.5, []float64{1, 0.4, -0.02857142857}},
		{3, 2.4, []float64{1, 0.5294117647, -0.04812834225, 0.004159239453}},
		{3, 3.25, []float64{1, -0.1764705882, 0.04201680672, -0.005042016807}},
	} {
		got, err := Thiran(c.order, c.delay)
		if err != nil {
			t.Fatal(err)
		}
		for k := range c.want {
			near(t, "coefficient", got[k], c.want[k], 1e-9)
		}
	}
	for k, w := range []float64{1, 0.5294, -0.04813, 0.004159} {
		got, err := Thiran(3, 2.4)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "coefficient of thiran(2.4)", got[k], w, 5e-5)
	}
	for _, c := range []struct {
		order int
		delay float64
	}{{0, 1}, {65, 70}, {3, 2}, {3, math.NaN()}} {
		if _, err := Thiran(c.order, c.delay); err == nil {
			t.Errorf("order %d, delay %g: accepted", c.order, c.delay)
		}
	}
}

// E8: error of the phase delay of Thiran all-passes (Laakso et al. 1996).
func TestThiranPhaseDelay(t *testing.T) {
	at := []float64{0.05, 0.1, 0.2, 0.25}
	for _, c := range []struct {
		order int
		delay float64
		want  []float64
	}{
		{2, 2.25, []float64{-0.0001290383, -0.001953739, -0.02488631, -0.05121374}},
		{1, 0.5, []float64{0.003103363, 0.01264694, 0.05457302, 0.09033447}},
	} {
		a, err := Thiran(c.order, c.delay)
		if err != nil {
			t.Fatal(err)
		}
		b := make([]float64, len(a))
		for k := range a {
			b[k] = a[len(a)-1-k]
		}
		for i, f := range at {
			h := transfer(b, f) / transfer(a, f)
			near(t, "magnitude", cmplx.Abs(h), 1, 1e-12)
			near(t, "phase delay error", phaseDelay(h, f, c.delay)-c.delay, c.want[i], 1e-5)
		}
	}
}

func rect(float64) float64 { return 1 }

func hann(u float64) float64 { return 0.5 + 0.5*math.Cos(math.Pi*u) }

func hamming(u float64) float64 { return 0.54 + 0.46*math.Cos(math.Pi*u) }

func blackman(u float64) float64 {
	return 0.42 + 0.5*math.Cos(math.Pi*u) + 0.08*math.Cos(2*math.Pi*u)
}

// windowed is the error of a windowed sinc over 0 to 0.4 of the rate: the
// largest complex error in dB, the largest gain error in dB and the largest
// error of the phase delay in samples.
func windowed(t *testing.T, taps int, window func(float64) float64, frac float64) [3]float64 {
	t.Helper()
	s, err := NewSincWindow(taps, window)
	if err != nil {
		t.Fatal(err)
	}
	start, h := s.Taps(nil, frac)
	delay := frac - float64(start)
	var worst [3]float64
	const n = 4000
	for i := range n + 1 {
		f := 0.4 * float64(i) / n
		r := transfer(h, f)
		worst[0] = math.Max(worst[0], cmplx.Abs(r-cmplx.Rect(1, -2*math.Pi*f*delay)))
		worst[1] = math.Max(worst[1], math.Abs(decibels(r)))
		if f >= 0.001 { // the table starts there: next to zero a phase delay is a ratio of two small numbers
			worst[2] = math.Max(worst[2], math.Abs(phaseDelay(r, f, delay)-delay))
		}
	}
	worst[0] = 20 * math.Log10(worst[0])
	return worst
}

// E9 at half a sample, E10 at a quarter: the table of windowed sincs (design:
// Laakso et al. 1996, "windowing"; 0.5 %).
func TestWindowedSincTable(t *testing.T) {
	type row struct {
		taps   int
		name   string
		window func(float64) float64
		want   [3]float64
	}
	k6, k8 := Kaiser(6), Kaiser(8.6)
	check := func(frac float64, rows []row) {
		for _, r := range rows {
			got := windowed(t, r.taps, r.window, frac)
			for i, unit := range []string{"error, dB", "gain error, dB", "phase delay error"} {
				// The table was taken on another grid of frequencies; phase
				// delays that are exact by symmetry round to nothing.
				if math.Abs(got[i]-r.want[i]) > 0.005*math.Abs(r.want[i])+1e-9 {
					t.Errorf("%d taps, %s, %g: %s %.6g, want %.6g", r.taps, r.name, frac, unit, got[i], r.want[i])
				}
			}
		}
	}
	check(0.5, []row{
		{16, "rect", rect, [3]float64{-20.016, 0.91342, 0}},
		{16, "hann", hann, [3]float64{-37.909, 0.1098, 0}},
		{16, "hamming", hamming, [3]float64{-41.369, 0.07451, 0}},
		{16, "blackman", blackman, [3]float64{-22.353, 0.68908, 0}},
		{16, "kaiser 6", k6, [3]float64{-32.684, 0.20403, 0}},
		{16, "kaiser 8.6", k8, [3]float64{-22.333, 0.69071, 0}},
		{32, "rect", rect, [3]float64{-25.253, 0.4619, 0}},
		{32, "hann", hann, [3]float64{-50.413, 0.02623, 0}},
		{32, "hamming", hamming, [3]float64{-51.488, 0.023174, 0}},
		{32, "blackman", blackman, [3]float64{-69.246, 0.0029953, 0}},
		{32, "kaiser 6", k6, [3]float64{-61.862, 0.0070073, 0}},
		{32, "kaiser 8.6", k8, [3]float64{-81.496, 0.00073119, 0}},
		{64, "rect", rect, [3]float64{-30.63, 0.25176, 0}},
		{64, "hann", hann, [3]float64{-70.617, 0.0025586, 0}},
		{64, "hamming", hamming, [3]float64{-53.631, 0.018063, 0}},
		{64, "blackman", blackman, [3]float64{-80.543, 0.00081603, 0}},
		{64, "kaiser 6", k6, [3]float64{-67.041, 0.0038626, 0}},
		{64, "kaiser 8.6", k8, [3]float64{-88.109, 0.00034148, 0}},
	})
	check(0.25, []row{
		{16, "hann", hann, [3]float64{-40.931, 0.055399, 0.0026706}},
		{16, "blackman", blackman, [3]float64{-25.363, 0.33087, 0.015768}},
		{16, "kaiser 8.6", k8, [3]float64{-25.345, 0.33162, 0.015799}},
		{32, "hann", hann, [3]float64{-53.427, 0.013112, 0.00059951}},
		{32, "blackman", blackman, [3]float64{-72.276, 0.0015048, 7.2537e-05}},
		{32, "kaiser 8.6", k8, [3]float64{-84.87, 0.00033923, 0.00015948}},
		{64, "hann", hann, [3]float64{-73.635, 0.0012816, 5.9801e-05}},
		{64, "blackman", blackman, [3]float64{-83.561, 0.00040889, 1.9064e-05}},
		{64, "kaiser 8.6", k8, [3]float64{-90.863, 0.0001677, 8.419e-05}},
	})
}

// E11, E12, A24: what rounding delays to whole samples would cost, which is
// why nothing here does: phase, angle, and the loss of the main lobe, as the
// nearest whole-sample filter shows it (elementary; A24: Dudgeon 1977, from
// memory).
func TestRoundingToWholeSamples(t *testing.T) {
	const rate = 48000
	for i, hz := range []float64{1000, 4000, 8000, 16000} {
		want := []float64{3.75, 15, 30, 60}[i]
		half := transfer([]float64{1}, hz/rate) * cmplx.Conj(cmplx.Rect(1, -2*math.Pi*hz/rate*0.5))
		near(t, "phase of half a sample, degrees", cmplx.Phase(half)*180/math.Pi, want, 1e-9)
	}
	for i, d := range []float64{0.042, 23 * 0.042} {
		near(t, "angle of half a sample, degrees", math.Asin(343*0.5/rate/d)*180/math.Pi, []float64{4.880018, 0.2119187}[i], 1e-4)
	}
	for i, f := range []float64{0.05, 0.1, 0.2, 0.25, 0.4} {
		want := []float64{-0.03574871, -0.1433502, -0.5792237, -0.9120976, -2.420071}[i]
		var mean complex128
		const n = 20001
		for k := range n {
			frac := (float64(k)+0.5)/n - 0.5
			mean += cmplx.Rect(1.0/n, 2*math.Pi*f*frac)
		}
		near(t, "mean loss of the main lobe, dB", decibels(mean), want, 1e-3)
		// The kernels at hand lose nothing.
		s, err := NewSinc(64)
		if err != nil {
			t.Fatal(err)
		}
		mean = 0
		for k := range 101 {
			d := (float64(k)+0.5)/101 - 0.5
			mean += Response(s, d, f) * cmplx.Rect(1.0/101, 2*math.Pi*f*d)
		}
		near(t, "loss with fractional delays, dB", decibels(mean), 0, 1e-5)
	}
}

// E13, E14: delay of a block by its own transform, circular: the bin at half
// the rate must be real, cos(πD), and an impulse becomes a Dirichlet kernel.
// The windowed sinc of an equally long period agrees with it far from the band
// edge (common practice; DFT symmetry).
func TestCircularDelay(t *testing.T) {
	const n = 16
	circular := func(x []float64, d float64) []float64 {
		y := make([]float64, len(x))
		for k := 0; k <= n/2; k++ {
			var bin complex128
			for i, v := range x {
				bin += complex(v, 0) * cmplx.Rect(1, -2*math.Pi*float64(k*i)/n)
			}
			turn := cmplx.Rect(1, -2*math.Pi*float64(k)*d/n)
			weight := 2.0 / n
			if k == 0 || k == n/2 {
				turn, weight = complex(real(turn), 0), 1.0/n
			}
			for i := range y {
				y[i] += weight * real(bin*turn*cmplx.Rect(1, 2*math.Pi*float64(k*i)/n))
			}
		}
		return y
	}
	for d, want := range map[float64]float64{0.25: 0.7071068, 0.5: 0, 1: -1} {
		nyquist := make([]float64, n)
		for i := range nyquist {
			nyquist[i] = 1 - 2*float64(i%2)
		}
		near(t, "Nyquist tone", circular(nyquist, d)[0], want, 1e-7)
	}
	impulse := make([]float64, n)
	impulse[0] = 1
	want := []float64{0.116929275737, -0.206034888059, 0.634573149226, 0.634573149226, -0.206034888059, 0.116929275737, -0.0761564703492, 0.0512924244268}
	got := circular(impulse, 2.5)
	for i, w := range want {
		near(t, "sample", got[i], w, 1e-12)
	}
}

// E15: a sinc that is cut off overshoots by 8.949 % of a jump whatever its
// length: (2/π)·Si(π) - 1 = 0.17898 of half the jump (Gibbs).
func TestCutOffSincOvershoots(t *testing.T) {
	const want = 0.17898
	si, steps := 0.0, 100000
	for k := range steps {
		x := math.Pi * (float64(k) + 0.5) / float64(steps)
		si += math.Sin(x) / x * math.Pi / float64(steps)
	}
	near(t, "overshoot of the integral", 2/math.Pi*si-1, want, 5e-5)
	for _, taps := range []int{64, 256, 1024} {
		// A sinc of half the band, cut off: its response around the edge. The
		// overshoot over the flat part is that of the jump from 1 to 0.
		h := make([]float64, taps+1)
		for n := range h {
			if x := float64(n) - float64(taps)/2; x == 0 {
				h[n] = 0.5
			} else {
				h[n] = math.Sin(math.Pi*x/2) / (math.Pi * x)
			}
		}
		peak := 0.0
		for k := range 20000 {
			f := 0.25 - 3.0/float64(taps)*float64(k)/20000
			peak = math.Max(peak, cmplx.Abs(transfer(h, f)))
		}
		near(t, "overshoot of the filter", peak-1, want/2, 0.002)
	}
}

// E16: Lagrange filters never amplify within one sample around the middle, and
// do outside (Laakso et al. 1996, range from memory).
func TestLagrangeIsPassiveInTheMiddle(t *testing.T) {
	for _, c := range []struct {
		order int
		delay float64
		want  float64
	}{{3, 1.25, 1}, {3, 1.5, 1}, {3, 2, 1}, {3, 0.5, 1.088662}, {3, 2.5, 1.088662}, {5, 2.25, 1}, {5, 1.5, 1.019325}} {
		h := Lagrange(c.order, c.delay)
		top := 0.0
		for i := range 2001 {
			top = math.Max(top, cmplx.Abs(transfer(h, 0.5*float64(i)/2000)))
		}
		near(t, "largest magnitude", top, c.want, 1e-4)
	}
}
