package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"alidade/pkg/pipeline"
)

// predicted runs the command on a rig with c = 343 m/s and returns its JSON.
func predicted(t *testing.T, rig, line string) *pipeline.Prediction {
	t.Helper()
	path := filepath.Join(t.TempDir(), "rig.yaml")
	if err := os.WriteFile(path, []byte("rig: of the check\n"+rig+"\n"), 0o666); err != nil {
		t.Fatal(err)
	}
	var out, errs bytes.Buffer
	args := append([]string{"predict", "--rig", path, "--speed-of-sound", "343", "--json"}, strings.Fields(line)...)
	if !strings.Contains(line, "12000") {
		args = append(args, "--rate", "16000") // less to compute
	}
	if code := run(context.Background(), args, strings.NewReader(""), &out, &errs, func(string) string { return "" }); code != 0 {
		t.Fatalf("%s: exit code %d\n%s", line, code, errs.String())
	}
	p := &pipeline.Prediction{}
	if err := json.Unmarshal(out.Bytes(), p); err != nil {
		t.Fatal(err)
	}
	return p
}

// halfWave is the frequency at which 50 mm are half a wavelength at 343 m/s.
const halfWave = "3430"

func lineOf(n int) string { return fmt.Sprintf("line: {count: %d, spacing_mm: 50}", n) }

// spaced is a line of n whose spacing is d wavelengths at 1 kHz and 343 m/s.
func spaced(n int, d float64) string {
	return fmt.Sprintf("line: {count: %d, spacing_mm: %.9g}", n, 343*d)
}

// patternAt is the level at an angle of the first frequency's response.
func patternAt(p *pipeline.Prediction, angle float64) float64 {
	for i, a := range p.Response.AnglesDeg {
		if math.Abs(a-angle) < 1e-6 && p.Response.LevelDB[0][i] != nil {
			return *p.Response.LevelDB[0][i]
		}
	}
	return math.NaN()
}

// realAt is the real part of the response at an angle.
func realAt(p *pipeline.Prediction, angle float64) float64 {
	for i, a := range p.Response.AnglesDeg {
		if math.Abs(a-angle) < 1e-6 && p.Response.LevelDB[0][i] != nil {
			return math.Pow(10, *p.Response.LevelDB[0][i]/20) * math.Cos(*p.Response.PhaseDeg[0][i]*math.Pi/180)
		}
	}
	return math.NaN()
}

// value is what a figure of the document says, NaN where it is null.
func value(n pipeline.Number) float64 {
	if n == nil {
		return math.NaN()
	}
	return *n
}

// The figures of the first frequency.
func width(p *pipeline.Prediction) float64 { return value(p.Frequencies[0].BeamwidthDeg) }
func side(p *pipeline.Prediction) float64  { return value(p.Frequencies[0].HighestSideLobeDB) }
func lobes(p *pipeline.Prediction) float64 { return float64(p.Frequencies[0].SideLobeCount) }
func index(p *pipeline.Prediction) float64 { return value(p.Frequencies[0].DirectivityIndexDB) }
func white(p *pipeline.Prediction) float64 { return value(p.Frequencies[0].WhiteNoiseGainDB) }
func diffuse(p *pipeline.Prediction) float64 {
	return value(p.Frequencies[0].DiffuseGainDB)
}
func factor(p *pipeline.Prediction) float64 { return math.Pow(10, index(p)/10) }
func null(k int) func(*pipeline.Prediction) float64 {
	return func(p *pipeline.Prediction) float64 {
		if k >= len(p.Frequencies[0].FirstNullsDeg) {
			return math.NaN()
		}
		return p.Frequencies[0].FirstNullsDeg[k]
	}
}
func level(angle float64) func(*pipeline.Prediction) float64 {
	return func(p *pipeline.Prediction) float64 { return patternAt(p, angle) }
}

// undefined is a figure that must be null.
var undefined = math.NaN()

// arrayGain is that against an interferer of 20 dB re the white noise at an
// angle, by the figures of the document: (1 + INR)/(1/WNG + INR·|B|²).
func arrayGain(angle float64) func(*pipeline.Prediction) float64 {
	return func(p *pipeline.Prediction) float64 {
		const inr = 100
		noise := math.Pow(10, -white(p)/10) + inr*math.Pow(10, patternAt(p, angle)/10)
		return 10 * math.Log10((1+inr)/noise)
	}
}

// check is one figure of the catalogue of checks that the command gives.
type check struct {
	id, rig, line string
	figure        func(*pipeline.Prediction) float64
	want, within  float64
}

// The checks that the command's own document answers. Levels are claimed to
// 0.001 dB and angles to 0.001°, so no bound is below that.
func checksOfTheCommand() (list []check) {
	add := func(id, rig, line string, figure func(*pipeline.Prediction) float64, want, within float64) {
		list = append(list, check{id, rig, line, figure, want, within})
	}
	at := func(toward any, more string) string {
		return fmt.Sprintf("--toward %v --at-hz %s %s", toward, halfWave, more)
	}

	// A2: Balanis, Antenna Theory, ch. 6; Van Trees 2002, section 2.4.
	for off, want := range map[float64]float64{5: -1.784598, 10: -8.405171, 20: -13.01162, 25: -15.51338, 40: -16.83486, 50: -31.42981, 60.5: -17.89523, 70: -21.27911, 80: -32.49552} {
		add("A2", lineOf(8), at(90, "--pattern --pattern-step 0.5"), level(90-off), want, 0.01)
	}
	// A3 to A5: half-power widths by the closed form of the array factor, of
	// the same books.
	for toward, widths := range map[float64][5]float64{
		90: {26.32295, 12.80253, 10.20918, 6.358726, 3.174114},
		60: {30.8922, 14.83561, 11.81494, 7.348742, 3.665934},
		30: {undefined, 28.84252, 21.75466, 12.99346, 6.380501},
	} {
		for k, n := range []int{4, 8, 10, 16, 32} {
			add("A3 to A5", lineOf(n), at(toward, ""), width, widths[k], 0.003)
		}
	}
	// A7: Balanis (6-22a), a rule that the exact width of ten is 0.04° above;
	// A6: the rule of 0.886 λ/(Nd), which the exact width of 32 is 0.002° above
	// (common practice).
	add("A7", lineOf(10), at(90, ""), width, 10.17, 0.05)
	add("A6", lineOf(32), at(90, ""), width, 3.172396, 0.003)
	// A8: Balanis ch. 6.
	for _, c := range []struct {
		rig, line string
		nulls     [2]float64
	}{
		{lineOf(8), at(90, ""), [2]float64{75.52249, 104.4775}}, {lineOf(32), at(90, ""), [2]float64{86.41668, 93.58332}},
		{lineOf(8), at(60, ""), [2]float64{41.40962, 75.52249}}, {twentyFour, "--toward 52 --at-hz 2000", [2]float64{38.20524, 63.54322}},
	} {
		add("A8", c.rig, c.line, null(0), c.nulls[0], 0.005)
		add("A8", c.rig, c.line, null(1), c.nulls[1], 0.005)
	}
	// A9, A10: side lobes of uniform lines and their limit (Van Trees 2002,
	// Harris 1978). A11: Van Trees 2002, section 2.4.
	for n, want := range map[int]float64{4: -11.30334, 8: -12.79735, 10: -12.96617, 16: -13.14683, 32: -13.23289, 64: -13.25432} {
		add("A9", lineOf(n), at(90, ""), side, want, 0.002)
	}
	add("A10", lineOf(100), at(90, ""), side, -13.2615, 0.004)
	for n, want := range map[int]float64{4: 2, 8: 6, 16: 14, 32: 30} {
		add("A11", lineOf(n), "--toward 60 --at-hz 3429.99", lobes, want, 0)
	}
	// A12: largest spacing in wavelengths that is free of grating lobes (Van
	// Trees 2002).
	for toward, want := range map[float64]float64{90: 1, 75: 0.7943954, 60: 0.6666667, 45: 0.5857864, 30: 0.5358984, 0: 0.5} {
		add("A12", lineOf(8), at(toward, ""), func(p *pipeline.Prediction) float64 { return value(p.GratingFreeBelowHz) * 0.05 / 343 }, want, 1e-6)
	}
	// A16, A25: definitions.
	add("A16", twentyFour, at(52, ""), func(p *pipeline.Prediction) float64 { return value(p.Aperture.HalfWavelengthHz) }, 4083.333, 0.1)
	add("A25", twentyFour, at(52, ""), func(p *pipeline.Prediction) float64 { return p.Aperture.ExtentM }, 0.966, 1e-6)
	add("A25", twentyFour, at(52, ""), func(p *pipeline.Prediction) float64 { return p.Aperture.EffectiveM }, 1.008, 1e-6)
	add("A25", twentyFour, at(52, ""), func(p *pipeline.Prediction) float64 { return value(p.Aperture.LowerUsefulHz) }, 340.2778, 0.001)
	// A17: Van Trees 2002, section 2.6. A18: the same at half a wavelength. A19:
	// Balanis ch. 6, end-fire 4Nd/λ, which is exact here.
	for _, c := range []struct {
		n      int
		d, az  float64
		factor float64
	}{
		{8, 0.5, 90, 8}, {8, 0.25, 90, 4.163234}, {8, 0.25, 0, 8}, {8, 0.75, 90, 11.54725}, {16, 0.4, 60, 12.94333},
		{32, 0.5, 60, 32}, {10, 0.25, 90, 5.16601}, {10, 0.25, 0, 10}, {4, 0.1, 90, 1.172217}, {4, 0.1, 0, 1.745844},
	} {
		add("A17, A19", spaced(c.n, c.d), fmt.Sprintf("--toward %g --at-hz 1000", c.az), factor, c.factor, 3e-4*c.factor)
	}
	for n, want := range map[int]float64{2: 3.01029996, 4: 6.02059991, 8: 9.03089987, 16: 12.0411998, 32: 15.0514998} {
		add("A18", lineOf(n), at(37, ""), index, want, 0.001)
		add("A21", lineOf(n), at(37, ""), white, want, 0.001) // Van Trees 2002, section 2.6.3
	}
	// A23: closed form.
	add("A23", lineOf(8), at(90, "--pattern"), level(85), -1.784598, 0.005)
	add("A23", lineOf(32), at(90, "--pattern"), level(88), -5.024404, 0.005)

	// B3 to B10, B22: Dolph 1946; scipy.signal.windows.chebwin; the widths of
	// B22 by the closed form. B3 is 26.0206 dB.
	for _, c := range []struct {
		n                int
		db, width, share float64
	}{
		{10, 26.0206, 12.34963, 0.8925145}, {10, 20, 11.186, 0.96219}, {10, 26, 12.3459, 0.892761}, {10, 30, 13.0376, 0.847255},
		{8, 26, 15.6301, 0.884635}, {5, 20, 23.707, 0.937153}, {32, 30, 3.89595, 0.875554}, {16, 40, 8.99242, 0.764173},
	} {
		line := at(90, fmt.Sprintf("--taper dolph-chebyshev:%g", c.db))
		add("B3 to B10, B22", lineOf(c.n), line, side, -c.db, 0.002)
		add("B3 to B10, B22", lineOf(c.n), line, width, c.width, 0.002)
		add("B3 to B10, B22", lineOf(c.n), line, white, 10*math.Log10(float64(c.n)*c.share), 0.001)
	}
	// B13 to B16: Taylor 1955; scipy.signal.windows.taylor.
	for _, c := range []struct {
		n                       int
		taper                   string
		lobe, width, efficiency float64
	}{
		{16, "taylor:30:4", -30.0546, 8.06821, 0.853386}, {32, "taylor:30:4", -30.243, 4.02916, 0.853386},
		{32, "taylor:35:5", -35.18, 4.25397, 0.807981}, {20, "taylor:25:4", -25.2224, 6.0602, 0.905277},
	} {
		add("B13 to B16", lineOf(c.n), at(90, "--taper "+c.taper), side, c.lobe, 0.002)
		add("B13 to B16", lineOf(c.n), at(90, "--taper "+c.taper), width, c.width, 0.002)
		add("B13 to B16", lineOf(c.n), at(90, "--taper "+c.taper), white, 10*math.Log10(float64(c.n)*c.efficiency), 0.002)
	}
	// B17: Harris 1978, numpy, scipy. B19: ratio of widths to the uniform 32.
	for taper, want := range map[string][3]float64{
		"uniform": {-12.7973, 12.8025, 9.0309}, "hann": {-31.7518, 18.428, 7.78151}, "hamming": {-33.6212, 20.4073, 7.27851},
		"kaiser:2": {-20.2199, 14.8571, 8.7051}, "kaiser:4": {-34.4167, 19.1798, 7.60165}, "kaiser:6": {-43.4391, 23.0621, 6.79362},
	} {
		for k, figure := range []func(*pipeline.Prediction) float64{side, width, white} {
			add("B17", lineOf(8), at(90, "--taper "+taper), figure, want[k], 0.002)
		}
	}
	for taper, want := range map[string]float64{"hamming": 1.501099, "hann": 1.576497, "dolph-chebyshev:30": 1.227413, "taylor:30:4": 1.269382} {
		add("B19", lineOf(32), at(90, "--taper "+taper), func(p *pipeline.Prediction) float64 { return width(p) / 3.174114 }, want, 0.001)
	}
	// B21: a beam of 35° from null to null, exact: side lobes at -20.271 dB; the
	// worked example of a textbook companion prints rounded excitations.
	add("B21", lineOf(8), at(90, "--taper dolph-chebyshev:20.271"), null(0), 90-17.5, 0.01)

	// C1, C3, C4, C7: end-fire superdirective without a floor that binds, which
	// tends to N² as the spacing goes to 0, 9.54 dB for three (Uzkov
	// 1946; Cox, Zeskind & Kooij 1986, 1987). The filters as built.
	for _, c := range []struct {
		n            int
		d            float64
		factor, gain float64
	}{
		{2, 0.05, 3.97371, -10.6447}, {2, 0.1, 3.89514, -4.85231}, {2, 0.25, 3.36295, 1.53266}, {2, 0.4, 2.51603, 2.95265}, {2, 0.5, 2, 3.0103},
		{3, 0.05, 8.93226, -26.363}, {3, 0.1, 8.72831, -14.4816}, {3, 0.25, 7.27898, 0.0434356}, {3, 0.4, 4.68232, 4.49676}, {4, 0.25, 12.7704, -3.14857}, {4, 0.5, 4, 6.0206}, {8, 0.4, 27.1505, 4.22644},
	} {
		line := "--toward 0 --at-hz 1000 --weights superdirective --white-noise-gain-floor-db -60"
		add("C3", spaced(c.n, c.d), line, factor, c.factor, 0.005*c.factor)
		add("C3", spaced(c.n, c.d), line, white, c.gain, 0.03)
	}
	// C8, C9: delay-and-subtract cardioid, d = 20 mm: a null behind a pair
	// (Elko 2000).
	for hz, want := range map[int][2]float64{500: {-11.78062, 4.751732}, 1000: {-5.906572, 4.692685}, 2000: {-0.4824282, 4.447046}, 4000: {2.962028, 3.283482}} {
		line := fmt.Sprintf("--toward 0 --null 180 --white-noise-gain-floor-db -40 --at-hz %d", hz)
		add("C8", "line: {count: 2, spacing_mm: 20}", line, white, want[0], 0.01)
		add("C9", "line: {count: 2, spacing_mm: 20}", line, index, want[1], 0.01)
	}
	// C5: cardioid and hypercardioid of a small pair (Elko 2000); C6 rounds them.
	pair := "line: {count: 2, spacing_mm: 10}"
	const first = "--toward 0 --at-hz 500 --white-noise-gain-floor-db -40 --pattern --null "
	add("C5", pair, first+"180", level(90), -6.02, 0.02)
	add("C5", pair, first+"180", index, 4.77, 0.01)
	add("C5", pair, first+"180", func(p *pipeline.Prediction) float64 { return 2 * value(p.Frequencies[0].EdgesDeg[1]) }, 131.06, 0.3)
	add("C5", pair, first+"109.4712", index, 6.02, 0.02)
	add("C5", pair, first+"109.4712", level(180), -6.02, 0.02)
	add("C5", pair, first+"109.4712", level(90), -12.04, 0.03)
	add("C5", pair, first+"125.2644", level(180), -11.44, 0.03)
	// C16: unit response and an exact null in white noise, N(1 - ρ²) (Frost
	// 1972; Van Trees 2002, section 6.7). u = cos of the angle from the axis.
	for _, c := range []struct {
		n       int
		u, want float64
	}{{10, 0.3, 9.784004}, {10, 0.0433, 1.573972}, {8, 0.5, 9.0309}, {4, 0.6, 5.874903}, {2, 0.5, 0}} {
		line := at(90, fmt.Sprintf("--null %.9g --white-noise-gain-floor-db -20", math.Acos(c.u)*180/math.Pi))
		add("C16", lineOf(c.n), line, white, c.want, 0.005)
	}
	// C17: superdirective is delay-and-sum at half a wavelength.
	add("C17", lineOf(8), at(90, "--weights superdirective"), white, 9.0309, 0.001)

	// D5: Van Trees 2002, section 4.2. Rings of ka = 5 and 2 at 1 kHz.
	ring := func(n int, ka float64) string {
		return fmt.Sprintf("ring: {count: %d, radius_mm: %.9g}", n, ka*343/(2*math.Pi))
	}
	for _, c := range []struct {
		n               int
		ka, angle, want float64
	}{{16, 5, 30, -0.09122551}, {16, 5, 180, -0.2428023}, {8, 2, 45, 0.4946106}, {8, 5, 180, 0.3929061}} {
		add("D5", ring(c.n, c.ka), "--toward 0 --at-hz 1000 --pattern", func(p *pipeline.Prediction) float64 { return realAt(p, c.angle) }, c.want, 2e-4)
	}
	// D4: a ring of many looked at from above is J0(ka sin θ): Van Trees 2002,
	// section 4.2.2; first null, first side lobe, half-power point.
	add("D4", ring(32, 5), "--toward 0,90 --at-hz 1000", side, -7.9, 0.01)
	add("D4", ring(32, 5), "--toward 0,90 --at-hz 1000", width, 2*math.Asin(1.1264/5)*180/math.Pi, 0.02)
	add("D4", ring(32, 5), "--toward 0,90 --at-hz 1000", null(0), 90-math.Asin(2.4048/5)*180/math.Pi, 0.01)
	// D7: the formula for isotropic noise (Van Trees 2002, section 2.6;
	// Brandstein & Ward 2001, ch. 2).
	for hz, want := range map[int]float64{500: 1.188212, 1000: 1.91046, 2000: 4.292717, 4000: 7.538763} {
		add("D7", "ring: {count: 8, radius_mm: 50}", fmt.Sprintf("--toward 0 --at-hz %d", hz), factor, want, 3e-4*want)
	}
	// D8: pattern multiplication (Balanis ch. 6).
	const grid = "grid: {columns: 4, rows: 4, spacing_mm: 50}"
	for _, c := range []struct{ zenith, az, want float64 }{{20, 0, 0.4090991}, {20, 45, 0.4533351}, {50, 30, 0.07337619}, {70, 80, 0.09584212}} {
		add("D8", grid, at(fmt.Sprintf("%g,90", c.az), "--pattern"), level(90-c.zenith), 20*math.Log10(c.want), 0.01)
	}

	// L3: Gilbert & Morgan 1955; Ruze 1952; Van Trees 2002, section 2.6.3. The
	// relative amplitude of a gain error is ln 10/20 a decibel.
	for _, c := range []struct {
		n                 int
		gain, phase, want float64
	}{{32, 0.122, 5, -31.5023}, {8, 0.05, 2, -33.32283}, {32, 0.01, 1, -48.98023}} {
		line := at(90, fmt.Sprintf("--gain-error-db %.9g --phase-error-deg %g --trials 20", c.gain*20/math.Ln10, c.phase))
		add("L3", lineOf(c.n), line, func(p *pipeline.Prediction) float64 { return value(p.Tolerance.Frequencies[0].ErrorFloorDB) }, c.want, 0.001)
	}
	// L4: the same by trials at an exact null; the floor's power is
	// exponentially distributed, so that its median lies at ln 2 of its mean.
	add("L4", lineOf(32), at(90, fmt.Sprintf("--gain-error-db %.9g --phase-error-deg 5 --trials 5000", 0.122*20/math.Ln10)), func(p *pipeline.Prediction) float64 {
		return value(p.Tolerance.Frequencies[0].FirstNulls[0].P50DB) - 10*math.Log10(math.Ln2) - 20*math.Log10(math.Exp(-0.5*math.Pow(5*math.Pi/180, 2)))
	}, -31.5023, 0.3)
	// L10: Van Trees 2002, sections 2.6 and 6.3. L11: the diffuse gain is the
	// directivity index; L12 is its Monte Carlo.
	for hz, want := range map[int]float64{500: 1.340642, 1000: 5.876485, 2000: 15.67769, 4000: 16.46331} {
		add("L10", "line: {count: 8, spacing_mm: 40}", fmt.Sprintf("--toward 90 --pattern --at-hz %d", hz), arrayGain(50), want, 0.002)
	}
	for hz, want := range map[int]float64{500: 0.3728174, 1000: 1.402414, 2000: 4.005221, 3430: 6.0206} {
		add("L11", lineOf(4), fmt.Sprintf("--toward 90 --at-hz %d", hz), diffuse, want, 0.001)
	}
	return list
}

const twentyFour = "line: {count: 24, spacing_mm: 42}"

func TestPredictAnswersTheCatalogueOfChecks(t *testing.T) {
	documents := map[string]*pipeline.Prediction{}
	for _, c := range checksOfTheCommand() {
		key := c.rig + " " + c.line
		if documents[key] == nil {
			documents[key] = predicted(t, c.rig, c.line)
		}
		got := c.figure(documents[key])
		if math.IsNaN(c.want) != math.IsNaN(got) || math.Abs(got-c.want) > c.within+5e-4 {
			t.Errorf("%s: %s, predict %s: %.6g, want %.6g within %g", c.id, c.rig, c.line, got, c.want, c.within)
		}
	}
}

// B18: F. J. Harris 1978, Table I (rows from memory, recomputed with numpy; its
// tolerances), of the tapers that are windows: a line of 256 is long enough to
// have the figures of a continuous window. A bin is λ/(Nd) in the cosine, so half
// of one lies at 89.5°; noise bandwidth is N over the white noise gain. Coherent
// gain, 6 dB width and overlap are no figures of a beam (package spectral has
// them).
func TestPredictAnswersHarrisForLongLines(t *testing.T) {
	const n, hz = 256, 6000
	bin := 2 * math.Cos(89.5*math.Pi/180) // in the cosine
	rig := fmt.Sprintf("line: {count: %d, spacing_mm: %.9g}", n, 343e3/hz/(n*bin))
	for _, c := range []struct {
		taper                             string
		lobe, noise, width, scallop, loss float64
		loose                             float64 // bins, and 1.75 times that in dB
	}{
		{"hamming", -43, 1.36, 1.3, 1.7514, 3.1, 0.013}, // scalloping: B18x
		{"uniform", -13, 1, 0.89, 3.92, 3.92, 0.013}, {"hann", -32, 1.5, 1.44, 1.42, 3.18, 0.013},
		{fmt.Sprintf("kaiser:%.9g", 2*math.Pi), -46, 1.5, 1.43, 1.46, 3.2, 0.013}, {fmt.Sprintf("kaiser:%.9g", 2.5*math.Pi), -57, 1.65, 1.57, 1.2, 3.38, 0.013},
		{fmt.Sprintf("kaiser:%.9g", 3*math.Pi), -69, 1.8, 1.71, 1.02, 3.56, 0.013}, {fmt.Sprintf("kaiser:%.9g", 3.5*math.Pi), -82, 1.93, 1.83, 0.89, 3.74, 0.013},
		{"dolph-chebyshev:50", -50, 1.39, 1.33, 1.7, 3.12, 0.02}, {"dolph-chebyshev:60", -60, 1.51, 1.44, 1.44, 3.23, 0.02},
		{"dolph-chebyshev:70", -70, 1.63, 1.55, 1.25, 3.35, 0.02}, {"dolph-chebyshev:80", -80, 1.73, 1.65, 1.1, 3.48, 0.02},
	}[:map[bool]int{true: 11, false: 1}[os.Getenv("ALIDADE_LONG") == "1"]] {
		p := predicted(t, rig, fmt.Sprintf("--toward 90 --at-hz %d --pattern --pattern-step 0.5 --taper %s", hz, c.taper))
		enbw := n * math.Pow(10, -white(p)/10)
		half := -patternAt(p, 89.5)
		for _, v := range []struct {
			name              string
			got, want, within float64
		}{
			{"side lobe", side(p), c.lobe, 1.2},
			{"noise bandwidth", enbw, c.noise, c.loose},
			{"3 dB width", 2 * math.Sin(width(p)/2*math.Pi/180) / bin, c.width, c.loose},
			{"scalloping", half, c.scallop, 1.75 * c.loose},
			{"worst loss", half + 10*math.Log10(enbw), c.loss, 1.75 * c.loose},
		} {
			if !(math.Abs(v.got-v.want) <= v.within) {
				t.Errorf("%s: %s %.4f, want %g within %g", c.taper, v.name, v.got, v.want, v.within)
			}
		}
	}
}

// A13, A14, A15: phase-ambiguity condition (Balanis; Van Trees 2002): 24
// microphones 42 mm apart steered to 52°: one grating lobe at 155° at 5,366 Hz,
// two at 12 kHz, none at 5 kHz.
func TestPredictFindsTheGratingLobesOfTwentyFour(t *testing.T) {
	p := predicted(t, twentyFour, "--toward 52 --at-hz 5000,5365.855,6000,7000,9000,12000")
	want := [][]float64{{}, {155}, {138.1977}, {123.436}, {106.9625}, {93.72077, 138.1977}}
	for i, f := range p.Frequencies {
		same := slices.EqualFunc(f.GratingLobesDeg, want[i], func(a, b float64) bool { return math.Abs(a-b) < 0.01 })
		if !same {
			t.Errorf("%g Hz: grating lobes at %v, want %v", f.Hz, f.GratingLobesDeg, want[i])
		}
	}
	entries := []pipeline.GratingEntry{{Order: 1, Hz: 5054.689, AngleDeg: 180}, {Order: 2, Hz: 10109.38, AngleDeg: 180}, {Order: 3, Hz: 15164.07, AngleDeg: 180}, {Order: 4, Hz: 20218.76, AngleDeg: 180}, {Order: -1, Hz: 21248.63, AngleDeg: 0}}
	same := slices.EqualFunc(p.GratingEntries, entries, func(a, b pipeline.GratingEntry) bool {
		return a.Order == b.Order && a.AngleDeg == b.AngleDeg && math.Abs(a.Hz-b.Hz) < 0.1
	})
	if !same || math.Abs(value(p.GratingFreeBelowHz)-5054.689) > 0.1 {
		t.Errorf("entries %v, free below %v Hz, want %v", p.GratingEntries, value(p.GratingFreeBelowHz), entries)
	}
}
