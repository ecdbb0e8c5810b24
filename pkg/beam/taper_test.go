package beam

import (
	"math"
	"strings"
	"testing"

	"alidade/pkg/rig"
)

// line returns n microphones d metres apart along x, centred on the origin.
func line(n int, d float64) []rig.Point {
	at := make([]rig.Point, n)
	for m := range at {
		at[m].X = (float64(m) - float64(n-1)/2) * d
	}
	return at
}

// ring returns n microphones on a circle of radius r metres in the horizontal
// plane.
func ring(n int, r float64) []rig.Point {
	at := make([]rig.Point, n)
	for m := range at {
		s, c := math.Sincos(2 * math.Pi * float64(m) / float64(n))
		at[m] = rig.Point{X: r * c, Y: r * s}
	}
	return at
}

// parse is ParseTaper for names that must parse.
func parse(t *testing.T, name string) Taper {
	t.Helper()
	taper, err := ParseTaper(name)
	if err != nil {
		t.Fatal(err)
	}
	return taper
}

// amplitudes are those of the named taper.
func amplitudes(t *testing.T, name string, at []rig.Point) []float64 {
	t.Helper()
	a, err := parse(t, name).Amplitudes(at)
	if err != nil {
		t.Fatal(err)
	}
	return a
}

// efficiency is (Σa)²/(N Σa²).
func efficiency(a []float64) float64 {
	var s, q float64
	for _, v := range a {
		s += v
		q += v * v
	}
	return s * s / (float64(len(a)) * q)
}

// B1x: Dolph 1946, exact weights for ten microphones and R0 = 20, by the zeros
// of the polynomial and by a general-purpose window function.
func TestDolphChebyshevExactTenElements(t *testing.T) {
	want := []float64{2.774537, 2.48299, 1.970907, 1.357047, 1} // centre to edge
	taper := Taper{kind: taperDolphChebyshev, parameter: 20 * math.Log10(20)}
	a, err := taper.Amplitudes(line(10, 0.05))
	if err != nil {
		t.Fatal(err)
	}
	for i, w := range want {
		for _, m := range []int{4 - i, 5 + i} {
			if got := a[m] / a[0]; math.Abs(got-w) > 1e-5 {
				t.Errorf("microphone %d: %.6f re the edge, want %.6f", m+1, got, w)
			}
		}
	}
}

// B4 to B10: Dolph 1946; weights centre to edge with the largest 1, taper
// efficiency. B13 to B16: Taylor 1955.
func TestTaperWeightsOnUniformLines(t *testing.T) {
	for _, v := range []struct {
		id, taper string
		n         int
		want      []float64
		eff       float64
		tol       float64
		byCentre  bool // the weights are as the formula gives them, not scaled
	}{
		{"B4", "dolph-chebyshev:20", 10, []float64{1, 0.921367, 0.777995, 0.594429, 0.641634}, 0.96219, 1e-5, false},
		{"B5", "dolph-chebyshev:26", 10, []float64{1, 0.895009, 0.710576, 0.489436, 0.361079}, 0.892761, 1e-5, false},
		{"B6", "dolph-chebyshev:30", 10, []float64{1, 0.878047, 0.669219, 0.429951, 0.257532}, 0.847255, 1e-5, false},
		{"B7", "dolph-chebyshev:26", 8, []float64{1, 0.836122, 0.570311, 0.349609}, 0.884635, 1e-5, false},
		{"B8", "dolph-chebyshev:20", 5, []float64{1, 0.832594, 0.517615}, 0.937153, 1e-5, false},
		{"B9", "dolph-chebyshev:30", 32, []float64{1, 0.988578, 0.966045, 0.933011, 0.890362, 0.839229, 0.780944, 0.716995,
			0.648972, 0.578509, 0.507233, 0.436706, 0.36838, 0.303548, 0.243315, 0.443884}, 0.875554, 1e-5, false},
		{"B10", "dolph-chebyshev:40", 16, []float64{1, 0.935341, 0.816336, 0.66131, 0.492603, 0.331946, 0.196365, 0.11376}, 0.764173, 1e-5, false},
		{"B13", "taylor:30:4", 16, []float64{0.993852, 0.945852, 0.855515, 0.732254, 0.588791, 0.4436, 0.322251, 0.252321}, 0.853386, 1e-5, true},
		{"B14", "taylor:30:4", 32, []float64{0.99846, 0.986215, 0.962122, 0.926918, 0.881602, 0.827357, 0.765533, 0.697684}, 0.853386, 1e-5, true},
		{"B15", "taylor:35:5", 32, []float64{0.998205, 0.983935, 0.955866, 0.914957, 0.862645, 0.800759, 0.731363, 0.656581}, 0.807981, 1e-5, true},
		{"B16", "taylor:25:4", 20, []float64{0.997018, 0.972965, 0.924269, 0.851683, 0.759637, 0.657112, 0.556231, 0.469349}, 0.905277, 1e-5, true},
	} {
		t.Run(v.id, func(t *testing.T) {
			a := amplitudes(t, v.taper, line(v.n, 0.04))
			sum := 0.0
			for _, x := range a {
				sum += x
			}
			if math.Abs(sum-1) > 1e-12 {
				t.Errorf("amplitudes add up to %.15g, want 1", sum)
			}
			// The check value of Taylor is scaled to the middle of the continuous
			// taper, so only ratios are compared.
			left, right := (v.n-1)/2, v.n/2
			for i, w := range v.want {
				for _, m := range []int{left - i, right + i} {
					if got := a[m] / a[left] * v.want[0]; math.Abs(got-w) > v.tol {
						t.Errorf("microphone %d: %.6f, want %.6f", m+1, got, w)
					}
				}
			}
			if got := efficiency(a); math.Abs(got-v.eff) > 2e-5 {
				t.Errorf("efficiency %.6f, want %.6f", got, v.eff)
			}
		})
	}
}

// B17: Harris 1978 and common practice; efficiency on a uniform line. Hann is
// without zero ends.
func TestCommonTaperEfficiency(t *testing.T) {
	for _, v := range []struct {
		taper string
		n     int
		want  float64
	}{
		{"uniform", 8, 1}, {"hann", 8, 0.75}, {"hamming", 8, 0.667976}, {"kaiser:2", 8, 0.927726}, {"kaiser:4", 8, 0.719573}, {"kaiser:6", 8, 0.59741},
		{"hann", 16, 0.708333}, {"hamming", 16, 0.700812}, {"kaiser:2", 16, 0.942605}, {"kaiser:4", 16, 0.763527}, {"kaiser:6", 16, 0.640657},
		{"hann", 32, 0.6875}, {"hamming", 32, 0.717277}, {"kaiser:2", 32, 0.949047}, {"kaiser:4", 32, 0.783404}, {"kaiser:6", 32, 0.661454},
	} {
		if got := efficiency(amplitudes(t, v.taper, line(v.n, 0.05))); math.Abs(got-v.want) > 2e-6 {
			t.Errorf("%s of %d: efficiency %.6f, want %.6f", v.taper, v.n, got, v.want)
		}
	}
}

// The order of the microphones in the rig is not their order along the line,
// and the line may lie anywhere.
func TestTaperFollowsThePlaceNotTheOrder(t *testing.T) {
	straight := amplitudes(t, "taylor:30:4", line(6, 0.05))
	order := []int{3, 0, 5, 1, 4, 2}
	at := make([]rig.Point, 6)
	for k, m := range order {
		x := line(6, 0.05)[m].X
		at[k] = rig.Point{X: 1 + 0.6*x, Y: -2 + 0.8*x, Z: 0.7}
	}
	got := amplitudes(t, "taylor:30:4", at)
	for k, m := range order {
		if math.Abs(got[k]-straight[m]) > 1e-12 {
			t.Errorf("microphone %d stands at place %d: %.6f, want %.6f", k+1, m+1, got[k], straight[m])
		}
	}
}

// A taper sampled by place on a line with one microphone left out keeps the
// weights of the others in proportion.
func TestTaperByPlaceOnALineWithAGap(t *testing.T) {
	full := line(9, 0.04)
	gap := append(append([]rig.Point(nil), full[:3]...), full[4:]...)
	for _, name := range []string{"hamming", "kaiser:5"} {
		a, b := amplitudes(t, name, full), amplitudes(t, name, gap)
		for m := range b {
			k := m
			if m >= 3 {
				k++
			}
			if math.Abs(b[m]/b[0]-a[k]/a[0]) > 1e-9 {
				t.Errorf("%s: microphone %d: %.6f re the first, want %.6f", name, m+1, b[m]/b[0], a[k]/a[0])
			}
		}
	}
	if _, err := parse(t, "dolph-chebyshev:30").Amplitudes(gap); err == nil || !strings.Contains(err.Error(), "equal spacings") {
		t.Errorf("dolph-chebyshev on a line with a gap: error %v, want a refusal", err)
	}
}

func TestTaperOnARingIsUniform(t *testing.T) {
	for _, name := range []string{"hann", "hamming", "kaiser:6", "taylor:30:4"} {
		for m, v := range amplitudes(t, name, ring(7, 0.06)) {
			if math.Abs(v-1.0/7) > 1e-9 {
				t.Errorf("%s: microphone %d: %.6f, want 1/7", name, m+1, v)
			}
		}
	}
}

func TestTaperOnAGridFallsWithTheDistance(t *testing.T) {
	var at []rig.Point
	for i := range 16 {
		at = append(at, rig.Point{X: 0.03 * (float64(i%4) - 1.5), Y: 0.03 * (float64(i/4) - 1.5)})
	}
	for _, name := range []string{"hann", "hamming", "kaiser:4", "taylor:25:3"} {
		a := amplitudes(t, name, at)
		if !(a[5] > a[1] && a[1] > a[0] && a[0] > 0) {
			t.Errorf("%s on a grid: inner %.4f, edge %.4f, corner %.4f: want falling, above 0", name, a[5], a[1], a[0])
		}
	}
}

func TestTaperOfFewMicrophones(t *testing.T) {
	for _, name := range []string{"uniform", "hann", "hamming", "kaiser:6", "dolph-chebyshev:30", "taylor:30:4"} {
		if _, err := parse(t, name).Amplitudes(nil); err == nil {
			t.Errorf("%s of no microphones: no error", name)
		}
		if a := amplitudes(t, name, line(1, 0)); a[0] != 1 {
			t.Errorf("%s of one microphone: %g, want 1", name, a[0])
		}
		for m, v := range amplitudes(t, name, line(2, 0.1)) {
			if math.Abs(v-0.5) > 1e-12 {
				t.Errorf("%s of two: microphone %d %g, want 0.5", name, m+1, v)
			}
		}
	}
}

func TestParseTaperRoundTrip(t *testing.T) {
	for in, want := range map[string]string{
		"uniform": "uniform", "hann": "hann", "hamming": "hamming",
		"kaiser": "kaiser:4", "kaiser:6.5": "kaiser:6.5",
		"dolph-chebyshev": "dolph-chebyshev:30", "dolph-chebyshev:26": "dolph-chebyshev:26",
		"taylor": "taylor:30:4", "taylor:35": "taylor:35:4", "taylor:35:5": "taylor:35:5",
	} {
		taper, err := ParseTaper(in)
		if err != nil || taper.String() != want {
			t.Errorf("ParseTaper(%q) = %s, %v, want %s", in, taper, err, want)
			continue
		}
		if again, err := ParseTaper(taper.String()); err != nil || again != taper {
			t.Errorf("ParseTaper(%q) = %v, %v, want %v", taper, again, err, taper)
		}
	}
	if (Taper{}).String() != "uniform" || !(Taper{}).Uniform() {
		t.Error("the zero taper is not uniform")
	}
}

func TestParseTaperRefusals(t *testing.T) {
	for in, want := range map[string]string{
		"":                     "there are uniform",
		"hanning":              "dolph-chebyshev:DB",
		"hann:3":               "it is written hann",
		"kaiser:-1":            "from 0 to 20",
		"kaiser:NaN":           "from 0 to 20",
		"kaiser:":              "from 0 to 20",
		"kaiser:1:2":           "too many",
		"dolph-chebyshev:5":    "from 15 to 100",
		"dolph-chebyshev:+Inf": "from 15 to 100",
		"taylor:30:1":          "from 2 to 32",
		"taylor:30:1e9":        "from 2 to 32",
		"taylor:30:4:5":        "too many",
	} {
		if _, err := ParseTaper(in); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("ParseTaper(%q): error %v, want one with %q", in, err, want)
		}
	}
}

func TestUniformLine(t *testing.T) {
	axis, d, ok := UniformLine(line(8, 0.042))
	if !ok || math.Abs(d-0.042) > 1e-12 || math.Abs(axis.X-1) > 1e-12 {
		t.Errorf("line of 8 × 42 mm: axis %v, spacing %g, %v", axis, d, ok)
	}
	bent := line(8, 0.042)
	bent[3].X += 0.002
	if _, _, ok := UniformLine(bent); ok {
		t.Error("a line with one microphone 2 mm off its place counts as uniform")
	}
	for _, at := range [][]rig.Point{nil, line(1, 0), ring(5, 0.1), {{}, {}}} {
		if _, _, ok := UniformLine(at); ok {
			t.Errorf("%v counts as a uniform line", at)
		}
	}
}
