package bearing

import (
	"math"
	"testing"
)

// delayBound is the Cramér–Rao bound of the delay between two sensors, flat
// spectra, seconds.
// H1: Knapp & Carter 1976; Quazi 1981, IEEE Trans. ASSP 29, p. 527.
func delayBound(T, snr, f1, f2 float64) float64 {
	return math.Sqrt(3 * (1 + 2*snr) / (8 * math.Pi * math.Pi * T * snr * snr * (f2*f2*f2 - f1*f1*f1)))
}

func TestDelayBoundAgreesWithPublishedForm(t *testing.T) {
	// H1: the values of Knapp & Carter's integral, microseconds.
	cases := [][4]float64{{1, 1, 300, 3400}, {1, 10, 300, 3400}, {1, 100, 300, 3400}, {0.1, 1, 300, 3400}, {1, 0.1, 300, 3400}, {1, 1, 100, 8000}, {0.064, 10, 300, 7000}}
	want := []float64{1.703559, 0.4507194, 0.1394423, 5.387127, 10.77425, 0.4718368, 0.6029141}
	for i, c := range cases {
		if got := 1e6 * delayBound(c[0], c[1], c[2], c[3]); math.Abs(got/want[i]-1) > 1e-5 {
			t.Errorf("case %d: %.7g µs, want %.7g", i, got, want[i])
		}
		// The same by numerical integration of {2T ∫(2πf)² C/(1-C) df}⁻¹.
		const n = 20000
		sum := 0.0
		for k := range n {
			f := c[2] + (c[3]-c[2])*(float64(k)+0.5)/n
			C := math.Pow(c[1]/(1+c[1]), 2)
			sum += 4 * math.Pi * math.Pi * f * f * C / (1 - C) * (c[3] - c[2]) / n
		}
		if got := 1e6 / math.Sqrt(2*c[0]*sum); math.Abs(got/want[i]-1) > 1e-5 {
			t.Errorf("case %d by integration: %.7g µs, want %.7g", i, got, want[i])
		}
	}
	// H2: the limits at low and high ratio, Quazi 1981.
	for i, c := range []struct{ snr, want float64 }{{0.01, 98.35504}, {100, 0.139095}} {
		f3 := math.Pow(3400, 3) - math.Pow(300, 3)
		got := 1e6 * math.Sqrt(3/(8*math.Pi*math.Pi*c.snr*c.snr*f3))
		if i == 1 {
			got = 1e6 * math.Sqrt(3/(4*math.Pi*math.Pi*c.snr*f3))
		}
		exact := 1e6 * delayBound(1, c.snr, 300, 3400)
		if math.Abs(got/c.want-1) > 1e-4 || math.Abs(got/exact-1) > 0.011 {
			t.Errorf("limit at %g: %.7g, want %.7g; bound %.7g", c.snr, got, c.want, exact)
		}
	}
}

// H8: Knapp & Carter 1976 (phase transform): two circular copies a whole number
// of samples apart correlate to 1 at that lag and 0 elsewhere.
func TestPhaseTransformOfCopiesIsAnImpulse(t *testing.T) {
	for _, n := range []int{16, 256, 1024} {
		for _, lag := range []int{0, 1, 5, n - 3} {
			x := white(n, uint64(n+lag))
			a, b := make([]float32, n), make([]float32, n)
			for i := range x {
				a[i] = float32(x[i])
				b[(i+lag)%n] = float32(x[i])
			}
			p, err := NewPair(n, 48000, 0, 0, PhaseTransform)
			if err != nil {
				t.Fatal(err)
			}
			r := p.Correlation(nil, a, b)
			for l, v := range r {
				want := 0.0
				if l == lag {
					want = 1
				}
				if math.Abs(v-want) > 1e-12 {
					t.Fatalf("n %d, lag %d: correlation %g at lag %d, want %g", n, lag, v, l, want)
				}
			}
		}
	}
}

// H7: Jacovitti & Scarano 1993: a parabola through three points of a sinc is
// biased by up to 0.12 sample; the delay found here by less than 1e-3.
func TestDelayBetweenSamplesIsNotBiasedLikeAParabola(t *testing.T) {
	const n = 1024
	parabola := map[float64]float64{0.05: 0.02512563, 0.1: 0.05102041, 0.2: 0.1086957, 0.25: 0.1428571, 0.3: 0.1829268, 0.4: 0.2941176, 0.5: 0.5}
	for _, d := range []float64{0, 0.05, 0.1, 0.2, 0.25, 0.3, 0.4, 0.5} {
		if want, ok := parabola[d]; ok {
			sinc := func(x float64) float64 {
				if x == 0 {
					return 1
				}
				return math.Sin(math.Pi*x) / (math.Pi * x)
			}
			l, m, r := sinc(-1-d), sinc(-d), sinc(1-d)
			if got := (l - r) / (2 * (l - 2*m + r)); math.Abs(got-want) > 1e-6 {
				t.Errorf("parabola at %g: %.7f, want %.7f", d, got, want)
			}
		}
		for _, whole := range []float64{-7, 0, 12} {
			x := white(n, 3)
			y := delayed(x, []float64{whole + d}, 1)
			a, b := make([]float32, n), make([]float32, n)
			for i := range x {
				a[i], b[i] = float32(x[i]), float32(y[0][i])
			}
			p, err := NewPair(n, 1, 0.01, 0.49, PhaseTransform)
			if err != nil {
				t.Fatal(err)
			}
			got, height, ok := p.Delay(a, b, 20)
			if !ok || math.Abs(got-whole-d) > 1e-3 || height < 0.999 {
				t.Errorf("delay %g: got %.5f, height %.4f, ok %v", whole+d, got, height, ok)
			}
		}
	}
}

// H3: Knapp & Carter 1976: plain cross-correlation reaches the bound for flat
// spectra (accepted 0.88 to 1.15); one block of the phase transform does not,
// at about 1.67 of it (±0.25).
func TestDelaySpreadAgainstTheBound(t *testing.T) {
	const rate, n, trials = 8000.0, 4096, 300
	for _, c := range []struct {
		snr       float64
		w         Weighting
		low, high float64
	}{{10, CrossPower, 0.88, 1.15}, {1, CrossPower, 0.88, 1.15}, {10, PhaseTransform, 1.42, 1.92}} {
		p, err := NewPair(n, rate, 300, 3400, c.w)
		if err != nil {
			t.Fatal(err)
		}
		sum := 0.0
		for trial := range trials {
			x := white(n, uint64(trial)+7)
			truth := 0.37 + 0.01*float64(trial%50)
			y := delayed(x, []float64{truth}, 1)[0]
			na, nb := white(n, uint64(trial)+1e6), white(n, uint64(trial)+2e6)
			a, b := make([]float32, n), make([]float32, n)
			g := 1 / math.Sqrt(c.snr)
			for i := range x {
				a[i], b[i] = float32(x[i]+g*na[i]), float32(y[i]+g*nb[i])
			}
			got, _, _ := p.Delay(a, b, 8)
			sum += (got - truth) * (got - truth)
		}
		ratio := math.Sqrt(sum/trials) / rate / delayBound(n/rate, c.snr, 300, 3400)
		t.Logf("%v at %g: %.3f of the bound", c.w, c.snr, ratio)
		if ratio < c.low || ratio > c.high {
			t.Errorf("%v at ratio %g: RMS error %.3f of the bound, want %.2f to %.2f", c.w, c.snr, ratio, c.low, c.high)
		}
	}
}

func TestGeometryOfAPair(t *testing.T) {
	const c = 343.0
	// H6: delay over 0.2 m, microseconds; elementary geometry.
	s := newSpace(lineMics(2, 0.2), lineMics(2, 0.2)[0], c, nil)
	tau := make([]float64, 2)
	jac := make([][maxDims]float64, 2)
	for i, th := range []float64{0, 30, 60, 90, 120} {
		want := []float64{583.0904, 504.9711, 291.5452, 0, -291.5452}[i]
		s.delays(tau, place{y: [3]float64{math.Cos(th * deg)}})
		if got := 1e6 * (tau[0] - tau[1]); math.Abs(got-want) > 1e-3 {
			t.Errorf("%g°: %.4f µs, want %.4f", th, got, want)
		}
	}
	// H14: 5 µs of delay as an angle, degrees; elementary geometry.
	for i, th := range []float64{90, 60, 30} {
		want := []float64{0.4913113, 0.5673174, 0.9826226}[i]
		p := place{y: [3]float64{math.Cos(th * deg)}}
		s.slopes(jac, p)
		sd := 5e-6 / math.Abs(jac[0][0]-jac[1][0])
		if got := sd / math.Sin(th*deg) / deg; math.Abs(got-want) > 1e-4 {
			t.Errorf("%g°: %.6f°, want %.6f°", th, got, want)
		}
	}
	// H4, H5: one sample at broadside, degrees; lags that a pair can have.
	for i, rate := range []float64{16000, 48000} {
		for k, d := range []float64{0.05, 0.1, 0.2} {
			want := [][]float64{{25.38826, 12.37886, 6.153212}, {8.216657, 4.097753, 2.047566}}[i][k]
			s := newSpace(lineMics(2, d), lineMics(2, d)[0], c, nil)
			s.slopes(jac, place{})
			cosine := 1 / rate / math.Abs(jac[0][0]-jac[1][0])
			if got := math.Asin(cosine) / deg; math.Abs(got-want) > 1e-4 {
				t.Errorf("rate %g, %g m: %.5f°, want %.5f°", rate, d, got, want)
			}
			s.delays(tau, place{y: [3]float64{1}})
			lags := 2*int(math.Abs(tau[0]-tau[1])*rate+1e-9) + 1
			if want := [][]int{{5, 9, 19}, {13, 27, 55}}[i][k]; lags != want {
				t.Errorf("rate %g, %g m: %d lags, want %d", rate, d, lags, want)
			}
		}
	}
	// H9: the limit c/(2d), by which the upper frequency is chosen: one and a
	// half times it, between 3 and 8 kHz. Sampling theorem.
	for i, d := range []float64{0.042, 0.05, 0.1, 0.2} {
		limit := []float64{4083.333, 3430.0, 1715.0, 857.5}[i]
		f, err := NewFinder(lineMics(4, d), lineMics(4, d)[0], 48000, Options{Speed: c})
		if err != nil {
			t.Fatal(err)
		}
		want := math.Max(1.5*limit, 3000)
		if math.Abs(f.set.ToHz-want) > 0.01 {
			t.Errorf("spacing %g m: up to %.3f Hz, want %.3f", d, f.set.ToHz, want)
		}
	}
}

func TestPairRefusesBadArguments(t *testing.T) {
	for _, c := range []struct {
		size           int
		rate, from, to float64
		w              Weighting
	}{
		{15, 48000, 0, 0, PhaseTransform}, {1 << 19, 48000, 0, 0, PhaseTransform}, {100, 48000, 0, 0, PhaseTransform},
		{256, 0, 0, 0, PhaseTransform}, {256, math.NaN(), 0, 0, PhaseTransform}, {256, 48000, 500, 400, PhaseTransform},
		{256, 48000, 0, 30000, PhaseTransform}, {256, 48000, 100, 120, PhaseTransform}, {256, 48000, 0, 0, Weighting(9)},
	} {
		if _, err := NewPair(c.size, c.rate, c.from, c.to, c.w); err == nil {
			t.Errorf("NewPair(%+v) gave no error", c)
		}
	}
	p, err := NewPair(64, 48000, 0, 0, PhaseTransform)
	if err != nil {
		t.Fatal(err)
	}
	if _, _, ok := p.Delay(make([]float32, 64), make([]float32, 64), 10); ok {
		t.Error("a delay was found in silence")
	}
}
