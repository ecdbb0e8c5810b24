package measure

import (
	"fmt"
	"math"
	"os"
	"testing"
)

func TestThirdOctaveFrequenciesAreBaseTen(t *testing.T) {
	// G1, G2: IEC 61260-1:2014, 5.2 to 5.5; nominal names ISO 266.
	want := map[float64][3]float64{
		50: {50.118723, 44.668359, 56.234133}, 63: {63.095734, 56.234133, 70.794578},
		80: {79.432823, 70.794578, 89.125094}, 100: {100.0, 89.125094, 112.20185},
		125: {125.89254, 112.20185, 141.25375}, 160: {158.48932, 141.25375, 177.82794},
		200: {199.52623, 177.82794, 223.87211}, 250: {251.18864, 223.87211, 281.83829},
		315: {316.22777, 281.83829, 354.81339}, 400: {398.10717, 354.81339, 446.68359},
		500: {501.18723, 446.68359, 562.34133}, 630: {630.95734, 562.34133, 707.94578},
		800: {794.32823, 707.94578, 891.25094}, 1000: {1000.0, 891.25094, 1122.0185},
		1250: {1258.9254, 1122.0185, 1412.5375}, 1600: {1584.8932, 1412.5375, 1778.2794},
		2000: {1995.2623, 1778.2794, 2238.7211}, 2500: {2511.8864, 2238.7211, 2818.3829},
		3150: {3162.2777, 2818.3829, 3548.1339}, 4000: {3981.0717, 3548.1339, 4466.8359},
		5000: {5011.8723, 4466.8359, 5623.4133}, 6300: {6309.5734, 5623.4133, 7079.4578},
		8000: {7943.2823, 7079.4578, 8912.5094}, 10000: {10000.0, 8912.5094, 11220.185},
		12500: {12589.254, 11220.185, 14125.375}, 16000: {15848.932, 14125.375, 17782.794},
	}
	bands := ThirdOctaves(48000)
	if len(bands) != len(want) {
		t.Fatalf("ThirdOctaves(48000) has %d bands, want %d", len(bands), len(want))
	}
	for _, b := range bands {
		checkBand(t, b, want[b.NominalHz])
	}
	for i := 1; i < len(bands); i++ {
		if bands[i].LowHz != bands[i-1].HighHz {
			t.Errorf("band %g Hz starts at %g, the one below ends at %g", bands[i].NominalHz, bands[i].LowHz, bands[i-1].HighHz)
		}
	}
}

func TestBandRatiosAreBaseTen(t *testing.T) {
	// G1: IEC 61260-1:2014, 5.2: G, G^(1/3), G^(1/2), G^(1/6), within 1e-6.
	a, b := third(0, 1000), third(1, 1250)
	c, d := octave(0, 1000), octave(1, 2000)
	for i, got := range []float64{d.CentreHz / c.CentreHz, b.CentreHz / a.CentreHz, c.HighHz / c.CentreHz, a.HighHz / a.CentreHz} {
		if want := []float64{1.995262, 1.258925, 1.412538, 1.122018}[i]; math.Abs(got-want) > 1e-6 {
			t.Errorf("ratio %d is %.7f, want %.6f", i, got, want)
		}
	}
}

func TestOctaveFrequenciesAreBaseTen(t *testing.T) {
	// G3: IEC 61260-1:2014, 5.2 to 5.5.
	want := map[float64][3]float64{
		63: {63.095734, 44.668359, 89.125094}, 125: {125.89254, 89.125094, 177.82794},
		250: {251.18864, 177.82794, 354.81339}, 500: {501.18723, 354.81339, 707.94578},
		1000: {1000.0, 707.94578, 1412.5375}, 2000: {1995.2623, 1412.5375, 2818.3829},
		4000: {3981.0717, 2818.3829, 5623.4133}, 8000: {7943.2823, 5623.4133, 11220.185},
		16000: {15848.932, 11220.185, 22387.211},
	}
	bands := Octaves(96000)
	if len(bands) != len(want) {
		t.Fatalf("Octaves(96000) has %d bands, want %d", len(bands), len(want))
	}
	thirds := ThirdOctaves(96000)
	for i, b := range bands {
		checkBand(t, b, want[b.NominalHz])
		if top := 3*i + 2; b.LowHz != thirds[3*i].LowHz || top < len(thirds) && b.HighHz != thirds[top].HighHz {
			t.Errorf("octave %g Hz is not made of the thirds from %g Hz", b.NominalHz, thirds[3*i].NominalHz)
		}
	}
}

func checkBand(t *testing.T, b Band, want [3]float64) {
	t.Helper()
	for i, got := range []float64{b.CentreHz, b.LowHz, b.HighHz} {
		if math.Abs(got/want[i]-1) > 1e-6 { // G2, G3: 1e-6 relative
			t.Errorf("band %g Hz: got %v, want %v", b.NominalHz, got, want[i])
		}
	}
}

func TestHighestBandFollowsTheRate(t *testing.T) {
	for _, c := range []struct {
		rate          int
		third, octave float64
	}{
		{8000, 3150, 2000}, {16000, 6300, 4000}, {22050, 8000, 4000}, {32000, 12500, 8000},
		{44100, 16000, 8000}, {48000, 16000, 8000}, {96000, 16000, 16000}, {192000, 16000, 16000},
	} {
		a, o := ThirdOctaves(c.rate), Octaves(c.rate)
		if got := a[len(a)-1].NominalHz; got != c.third {
			t.Errorf("highest third at %d: got %g, want %g", c.rate, got, c.third)
		}
		if got := o[len(o)-1].NominalHz; got != c.octave {
			t.Errorf("highest octave at %d: got %g, want %g", c.rate, got, c.octave)
		}
	}
	if n := len(ThirdOctaves(90)); n != 0 {
		t.Errorf("90 frames a second carry %d bands, want 0", n)
	}
}

// limits are the relative attenuation limits of class 1 at G^x, dB: G6, IEC
// 61260-1:2014, Table 1. Between them limits run linearly in the logarithm of
// the normalised frequency.
var limits = []struct{ x, low, high float64 }{
	{0, -0.4, 0.4}, {1. / 8, -0.4, 0.5}, {1. / 4, -0.4, 0.7}, {3. / 8, -0.4, 1.4}, {0.5, -0.4, 5.3},
	{0.5, 1.2, math.Inf(1)}, {1, 16.6, math.Inf(1)}, {2, 40.5, math.Inf(1)}, {3, 60, math.Inf(1)}, {4, 70, math.Inf(1)},
}

// breakpoint is the normalised frequency of limit i for 1/b octaves: IEC
// 61260-1:2014, formulas (9) and (10).
func breakpoint(i int, b float64) float64 {
	g := math.Pow(10, 0.3)
	return 1 + (math.Pow(g, 1/(2*b))-1)/(math.Sqrt(g)-1)*(math.Pow(g, limits[i].x)-1)
}

func TestBreakpointsOfThirdOctaves(t *testing.T) {
	// G4: IEC 61260-1:2014, formulas (9) and (10) and Table F.1.
	want := map[float64][2]float64{1. / 8: {1.02667, 0.97402}, 1. / 4: {1.05575, 0.94719}, 3. / 8: {1.08746, 0.91958},
		1. / 2: {1.12202, 0.89125}, 1: {1.29437, 0.77257}, 2: {1.88173, 0.53143}, 3: {3.05365, 0.32748}, 4: {5.39195, 0.18546}}
	// G5: IEC 61260-1:2014, Table 1.
	octave := map[float64]float64{1. / 8: 1.09018, 1. / 4: 1.1885, 3. / 8: 1.29569, 1. / 2: 1.41254, 1: 1.99526, 2: 3.98107, 3: 7.94328, 4: 15.84893}
	for i, l := range limits[1:] {
		got := breakpoint(i+1, 3)
		if w := want[l.x]; math.Abs(got-w[0]) > 6e-6 || math.Abs(1/got-w[1]) > 6e-6 {
			t.Errorf("third-octave break point %g: got %.6f and %.6f, want %v", l.x, got, 1/got, w)
		}
		if got := breakpoint(i+1, 1); math.Abs(got-octave[l.x]) > 1e-5 {
			t.Errorf("octave break point %g: got %.6f, want %v", l.x, got, octave[l.x])
		}
	}
}

// mask returns the limits of the relative attenuation at normalised frequency
// omega.
func mask(omega, b float64) (low, high float64) {
	if omega < 1 {
		omega = 1 / omega
	}
	if omega >= breakpoint(len(limits)-1, b) {
		return 70, math.Inf(1)
	}
	for i := len(limits) - 2; i >= 0; i-- {
		w0, w1 := breakpoint(i, b), breakpoint(i+1, b)
		if omega < w0 || w1 == w0 {
			continue
		}
		t := math.Log(omega/w0) / math.Log(w1/w0)
		low = limits[i].low + t*(limits[i+1].low-limits[i].low)
		high = math.Inf(1)
		if !math.IsInf(limits[i+1].high, 1) {
			high = limits[i].high + t*(limits[i+1].high-limits[i].high)
		}
		return low, high
	}
	return limits[0].low, limits[0].high
}

// response is the power response of band b of grid g at frequency hz:
// |H|² = Σ_k w_k·(|W(f-f_k)|² + |W(f+f_k)|²), times the decimation filter.
func (l *layout) response(g *grid, i int, hz float64) float64 {
	r := float64(l.rate)
	anti := 1.0
	if g.decimated {
		anti = filterPower(l.taps, hz/r)
		r /= float64(l.factor)
	}
	sum := 0.0
	for k, w := range g.weights[i] {
		fk := float64(g.first[i]+k) / float64(g.size)
		sum += float64(w) * (hann(g.size, hz/r-fk) + hann(g.size, hz/r+fk))
	}
	return anti * sum * g.scale / 4 // amplitude 1 has |X_k|² = |W|²/4
}

// hann is |W|² of the periodic Hann window of n samples at frequency f re the
// rate, from the geometric series: with D(f) = sin(πnf)/sin(πf) and without the
// phase of the middle, W = ½·D(f) - ¼·(D(f-1/n)·e^(jπ(n-1)/n) + D(f+1/n)·e^(-jπ(n-1)/n)).
func hann(n int, f float64) float64 {
	sn, cn := math.Sincos(math.Pi / float64(n))
	s, c := math.Sincos(math.Pi * f)
	before, after := s*cn-c*sn, s*cn+c*sn // sin(π(f∓1/n))
	if math.Min(math.Abs(s), math.Min(math.Abs(before), math.Abs(after))) < 1e-9 {
		f += 1e-8 / float64(n) // 0/0 here; the window changes by less than 1e-7 on the way
		s, c = math.Sincos(math.Pi * f)
		before, after = s*cn-c*sn, s*cn+c*sn
	}
	// D(f∓1/n) has -sin(πnf) above; e^(±jπ(n-1)/n) = -cos(π/n) ± j·sin(π/n).
	top := math.Sin(math.Pi * float64(n) * f)
	re := top * (0.5/s - 0.25*cn*(1/before+1/after))
	im := top * 0.25 * sn * (1/before - 1/after)
	return re*re + im*im
}

func filterPower(taps []float32, f float64) float64 {
	half := len(taps) / 2
	sum := float64(taps[half])
	for i := 1; i <= half; i++ {
		sum += 2 * float64(taps[half+i]) * math.Cos(2*math.Pi*f*float64(i))
	}
	return sum * sum
}

func TestBandFiltersKeepToClass1(t *testing.T) {
	// G4 to G6, G8: IEC 61260-1:2014, 5.10, Table 1, class 1, at the break
	// points and between, and 5.12, effective bandwidth.
	rates := []int{8000, 16000, 44100, 48000, 96000, 192000}
	if os.Getenv("ALIDADE_LONG") == "1" {
		rates = append(rates, 384000)
	}
	for _, rate := range rates {
		t.Run(fmt.Sprint(rate), func(t *testing.T) {
			l, err := newLayout(rate)
			if err != nil {
				t.Fatal(err)
			}
			for gi := range l.grids {
				g := &l.grids[gi]
				for i, b := range g.bands {
					checkMask(t, l, g, i, b)
				}
			}
		})
	}
}

func checkMask(t *testing.T, l *layout, g *grid, i, b int) {
	t.Helper()
	band, per := l.bands[b], 3.0
	if b >= l.thirds {
		per = 1
	}
	var sweep []float64
	for j := range limits {
		w := breakpoint(j, per)
		sweep = append(sweep, w, 1/w, w*1.000001, 1/(w*1.000001))
	}
	step := 0.016
	if os.Getenv("ALIDADE_LONG") == "1" {
		step = 0.008
	}
	for x := -1.2; x <= 1.2; x += step {
		sweep = append(sweep, math.Pow(10, x))
	}
	worst := math.Inf(1)
	for _, w := range sweep {
		hz := w * band.CentreHz
		if hz >= float64(l.rate)/2 {
			continue
		}
		low, high := mask(w, per)
		if j := math.Abs(math.Abs(math.Log(w)) - math.Log(breakpoint(4, per))); j < 1e-9 {
			low = -0.4 // on the edge itself the limits of both sides meet
		}
		got := -10 * math.Log10(l.response(g, i, hz))
		if got < low || got > high {
			t.Errorf("rate %d, band %g Hz (1/%g octave), window %d: attenuation %.2f dB at %.4f f_m, limits %.2f to %.2f",
				l.rate, band.NominalHz, per, g.size, got, w, low, high)
		}
		worst = math.Min(worst, math.Min(got-low, high-got))
	}
	if worst < 0.05 {
		t.Errorf("rate %d, band %g Hz: only %.3f dB to the limits", l.rate, band.NominalHz, worst)
	}
	// 5.12: 10·log10 of the effective over the nominal bandwidth, ±0.4 dB.
	from, to := band.LowHz/2, math.Min(2*band.HighHz, float64(l.rate)/2)
	sum, n := 0.0, 1000
	for j := range n {
		sum += l.response(g, i, from+(to-from)*(float64(j)+0.5)/float64(n))
	}
	sum *= (to - from) / float64(n)
	if d := 10 * math.Log10(sum/band.Width()); math.Abs(d) > 0.02 {
		t.Errorf("rate %d, band %g Hz: effective bandwidth %.3f dB off", l.rate, band.NominalHz, d)
	}
}
