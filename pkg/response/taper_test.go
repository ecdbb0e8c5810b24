package response

import (
	"fmt"
	"math"
	"testing"

	"alidade/pkg/beam"
)

// B3 to B10, B13 to B17, B22: side-lobe level and half-power width of tapered
// lines of half a wavelength, broadside, white noise gain N times the taper's
// efficiency. Dolph 1946 (B22: closed form of the width, Orfanidis), Taylor
// 1955; B17: Harris 1978 and common practice.
func TestTaperedLines(t *testing.T) {
	for _, v := range []struct {
		taper           string
		n               int
		sll, width, wng float64
	}{
		{"dolph-chebyshev:26.020599913279625", 10, -26.0206, 12.34963, 9.506153},
		{"dolph-chebyshev:20", 10, -20, 11.186, 10 * math.Log10(10*0.96219)},
		{"dolph-chebyshev:26", 10, -26, 12.3459, 10 * math.Log10(10*0.892761)},
		{"dolph-chebyshev:30", 10, -30, 13.0376, 10 * math.Log10(10*0.847255)},
		{"dolph-chebyshev:26", 8, -26, 15.6301, 10 * math.Log10(8*0.884635)},
		{"dolph-chebyshev:20", 5, -20, 23.707, 10 * math.Log10(5*0.937153)},
		{"dolph-chebyshev:30", 32, -30, 3.895949, 10 * math.Log10(32*0.875554)},
		{"dolph-chebyshev:40", 16, -40, 8.992422, 10 * math.Log10(16*0.764173)},
		{"taylor:30:4", 16, -30.0546, 8.06821, 10 * math.Log10(16*0.853386)},
		{"taylor:30:4", 32, -30.243, 4.02916, 10 * math.Log10(32*0.853386)},
		{"taylor:35:5", 32, -35.18, 4.25397, 10 * math.Log10(32*0.807981)},
		{"taylor:25:4", 20, -25.2224, 6.0602, 10 * math.Log10(20*0.905277)},
		{"uniform", 8, -12.7973, 12.8025, 9.0309}, {"hann", 8, -31.7518, 18.428, 7.78151}, {"hamming", 8, -33.6212, 20.4073, 7.27851},
		{"kaiser:2", 8, -20.2199, 14.8571, 8.7051}, {"kaiser:4", 8, -34.4167, 19.1798, 7.60165}, {"kaiser:6", 8, -43.4391, 23.0621, 6.79362},
		{"uniform", 16, -13.1468, 6.35873, 12.0412}, {"hann", 16, -31.4858, 9.72243, 10.5436}, {"hamming", 16, -39.3701, 9.73856, 10.4972},
		{"kaiser:2", 16, -19.2524, 7.24987, 11.7845}, {"kaiser:4", 16, -32.5324, 9.02255, 10.8694}, {"kaiser:6", 16, -43.9256, 10.6939, 10.1075},
		{"uniform", 32, -13.2329, 3.17411, 15.0515}, {"hann", 32, -31.4685, 5.00398, 13.4242}, {"hamming", 32, -41.7623, 4.76466, 13.6084},
		{"kaiser:2", 32, -18.8366, 3.58815, 14.8244}, {"kaiser:4", 32, -31.2186, 4.39624, 13.9914}, {"kaiser:6", 32, -44.0499, 5.1748, 13.2565},
	} {
		b, hz := tapered(t, v.taper, v.n)
		f := figures(b, hz)
		what := fmt.Sprintf("%s of %d", v.taper, v.n)
		within(t, what+": highest side lobe", f.HighestSideLobeDB, v.sll, 0.002)
		within(t, what+": half-power width", degrees(f.Beamwidth), v.width, 0.002)
		// At half a wavelength diffuse noise is white to the microphones.
		if math.Abs(f.WhiteNoiseGainDB-v.wng) > 0.0005 || math.Abs(f.DirectivityIndexDB-f.WhiteNoiseGainDB) > 1e-9 {
			t.Errorf("%s: white noise gain %.5f dB, directivity index %.5f, want both %.5f", what, f.WhiteNoiseGainDB, f.DirectivityIndexDB, v.wng)
		}
	}
}

// B19: half-power width of tapers on 32 microphones re the uniform line's.
func TestTaperBroadening(t *testing.T) {
	u, hz := tapered(t, "uniform", 32)
	width := figures(u, hz).Beamwidth
	for name, want := range map[string]float64{"hamming": 1.501099, "hann": 1.576497, "dolph-chebyshev:30": 1.227413, "taylor:30:4": 1.269382} {
		b, hz := tapered(t, name, 32)
		if got := *figures(b, hz).Beamwidth / *width; math.Abs(got-want) > 0.001 {
			t.Errorf("%s: broadening %.6f, want %.6f", name, got, want)
		}
	}
}

// B2 gives textbook estimates that are 11 % and 3 % off the exact width and
// directivity (B3); B1, B11, B12, B20, B21 are textbook amplitudes, rounded by
// hand: Balanis, example 6.9 (1 %); Stutzman & Thiele (0.01); the 8-source
// example of Kraus, which is a design of 26.88 dB; a five-element design of
// R = 11; and an eight-element one for nulls 35 degrees apart, x0 = 1.094806,
// 20.271 dB. All from memory but for the last two, from a companion text.
func TestTextbookDolphChebyshevExamples(t *testing.T) {
	for _, v := range []struct {
		id   string
		n    int
		db   float64
		want []float64 // edge to centre, edge = 1
		tol  float64   // relative
	}{
		{"B1", 10, 20 * math.Log10(20), []float64{1, 1.357, 1.974, 2.496, 2.798}, 0.01},
		{"B11", 5, 20, []float64{1, 1.61, 1.94}, 0.005},
		{"B12", 8, 26.88, []float64{1, 1.7, 2.6, 3.1}, 0.03},
		{"B20", 5, 20 * math.Log10(11), []float64{1, 1.6808, 2.0339}, 0.001},
		{"B21", 8, 20.271, []float64{1, 2.191 / 1.886, 2.919 / 1.886, 3.339 / 1.886}, 0.006},
	} {
		taper, err := beam.ParseTaper(fmt.Sprintf("dolph-chebyshev:%.12f", v.db))
		if err != nil {
			t.Fatal(err)
		}
		a, err := taper.Amplitudes(line(v.n, 0.05))
		if err != nil {
			t.Fatal(err)
		}
		for i, want := range v.want {
			if got := a[i] / a[0]; math.Abs(got/want-1) > v.tol {
				t.Errorf("%s: microphone %d: %.5f re the edge, want %.5f", v.id, i+1, got, want)
			}
		}
	}
	// B21: the design's nulls are 35 degrees apart.
	b, hz := tapered(t, "dolph-chebyshev:20.271", 8)
	if n := figures(b, hz).FirstNulls; len(n) != 2 || math.Abs(deg(n[1]-n[0])-35) > 0.02 {
		t.Errorf("B21: first nulls %v rad, want 35° apart", n)
	}
}

// A taper costs the level of its grating lobes nothing: they are as high as
// the main lobe whatever the weights.
func TestTaperKeepsGratingLobes(t *testing.T) {
	b, _ := tapered(t, "hamming", 12)
	f := figures(b, 2*halfWave*1.5)
	if len(f.GratingLobes) != 2 || math.Abs(math.Cos(f.GratingLobes[0])-1/1.5) > 1e-9 {
		t.Fatalf("grating lobes %v, want at cos θ = ±1/1.5", f.GratingLobes)
	}
	if f.HighestSideLobeDB == nil || *f.HighestSideLobeDB > -30 {
		t.Errorf("highest side lobe %v dB: a grating lobe among the side lobes", f.HighestSideLobeDB)
	}
}
