package response

import (
	"fmt"
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// A2: Balanis ch. 6, Van Trees 2002, section 2.4 (from memory): samples of the
// array factor, N = 8, d = λ/2, broadside. The filters as built, too.
func TestPatternOfAUniformLine(t *testing.T) {
	b, hz := uniform(8, 0.5, 90)
	built := b
	built.Transfer = delaySum(b.Mics, b.Look, 343, 48000, nil)
	for off, want := range map[float64]float64{5: -1.784598, 10: -8.405171, 20: -13.01162, 25: -15.51338, 40: -16.83486,
		50: -31.42981, 60.5: -17.89523, 70: -21.27911, 80: -32.49552, 89: -72.42333} {
		for name, b := range map[string]Beam{"exact": b, "built": built} {
			if name == "built" && off == 89 {
				continue // 72 dB down is where filters of 128 taps end
			}
			if got := levelAt(b, plane(90-off), hz); math.Abs(got-want) > 0.01 {
				t.Errorf("%s, %g° off broadside: %.5f dB, want %.5f", name, off, got, want)
			}
		}
	}
}

// A3, A4, A5: half-power width of uniform lines by the closed form of the array
// factor (Balanis ch. 6; Van Trees 2002). N = 4 steered to 30 degrees from the
// axis has no upper half-power point.
func TestHalfPowerWidths(t *testing.T) {
	for _, v := range []struct {
		az   float64
		n    int
		want float64 // 0: not defined
	}{
		{90, 4, 26.32295}, {90, 8, 12.80253}, {90, 10, 10.20918}, {90, 16, 6.358726}, {90, 32, 3.174114},
		{60, 4, 30.8922}, {60, 8, 14.83561}, {60, 10, 11.81494}, {60, 16, 7.348742}, {60, 32, 3.665934},
		{30, 4, 0}, {30, 8, 28.84252}, {30, 10, 21.75466}, {30, 16, 12.99346}, {30, 32, 6.380501},
	} {
		b, hz := uniform(v.n, 0.5, v.az)
		f := figures(b, hz)
		what := fmt.Sprintf("N = %d at %g°", v.n, v.az)
		if v.want == 0 {
			if f.Beamwidth != nil || f.Edges[0] != nil || f.Edges[1] == nil {
				t.Errorf("%s: width %v, edges %v, want none towards the axis", what, f.Beamwidth, f.Edges)
			}
			continue
		}
		within(t, what, degrees(f.Beamwidth), v.want, 0.002)
	}
}

// A1, A6, A7: half-power argument 1.3916 of sin(x)/x and the 0.886 rule: what
// the exact widths of long lines tend to (Van Trees 2002, section 2.4; Balanis
// (6-22a); from memory).
func TestHalfPowerWidthOfLongLines(t *testing.T) {
	b, hz := uniform(100, 0.5, 90)
	f := figures(b, hz)
	// HPBW in rad = 0.8859 λ/(N d) for small angles, λ/d = 2.
	if f.Beamwidth == nil || math.Abs(*f.Beamwidth*100/2-0.8859) > 1e-4 {
		t.Errorf("N = 100: width %v, want 0.8859 λ/(N d)", f.Beamwidth)
	}
	b, hz = uniform(10, 0.5, 90)
	within(t, "N = 10, textbook", degrees(figures(b, hz).Beamwidth), 10.17, 0.05)
}

// A8: first nulls at cos θ = cos θ0 ± λ/(N d); Balanis ch. 6.
func TestFirstNulls(t *testing.T) {
	twentyFour := ideal(line(24, 0.042), plane(52), 343, nil)
	for _, v := range []struct {
		beam Beam
		hz   float64
		want [2]float64
	}{
		{first(uniform(8, 0.5, 90)), halfWave, [2]float64{75.52249, 104.4775}},
		{first(uniform(32, 0.5, 90)), halfWave, [2]float64{86.41668, 93.58332}},
		{first(uniform(8, 0.5, 60)), halfWave, [2]float64{41.40962, 75.52249}},
		{twentyFour, 2000, [2]float64{38.20524, 63.54322}},
	} {
		f := figures(v.beam, v.hz)
		if len(f.FirstNulls) != 2 || math.Abs(deg(f.FirstNulls[0])-v.want[0]) > 0.005 || math.Abs(deg(f.FirstNulls[1])-v.want[1]) > 0.005 {
			t.Errorf("%d microphones: first nulls %v rad, want %v°", len(v.beam.Mics), f.FirstNulls, v.want)
		}
	}
}

func first(b Beam, _ float64) Beam { return b }

// A9, A10: highest side lobe of uniform lines and its limit -13.26 dB; Van
// Trees 2002, Harris 1978. A11: N - 2 side lobes in one period of 2π, which at
// d = λ/2 steered broadside is the visible region with both its ends.
func TestSideLobesOfUniformLines(t *testing.T) {
	for n, want := range map[int]float64{4: -11.30334, 8: -12.79735, 10: -12.96617, 16: -13.14683, 32: -13.23289, 64: -13.25432} {
		b, hz := uniform(n, 0.5, 90)
		f := figures(b, hz)
		within(t, fmt.Sprintf("N = %d", n), f.HighestSideLobeDB, want, 0.002)
	}
	b, hz := uniform(160, 0.5, 90)
	within(t, "limit", figures(b, hz).HighestSideLobeDB, -13.2615, 0.002)
	for n, want := range map[int]int{4: 2, 8: 6, 16: 14, 32: 30} {
		// Just past half a wavelength would begin the next period; a little
		// less, steered to an angle, shows one whole period from ψ = -2π·cos.
		b, hz := uniform(n, 0.5-1e-6, 60)
		if f := figures(b, hz); len(f.SideLobes) != want || len(f.GratingLobes) != 0 {
			t.Errorf("N = %d: %d side lobes and %d grating lobes, want %d and none", n, len(f.SideLobes), len(f.GratingLobes), want)
		}
	}
}

// A13, A14, A15: 24 microphones 42 mm apart steered to 52 degrees, c = 343 m/s:
// phase-ambiguity condition (Balanis, Van Trees).
func TestGratingLobesOfTwentyFour(t *testing.T) {
	b := ideal(line(24, 0.042), plane(52), 343, nil)
	for hz, want := range map[float64][]float64{
		5000: nil, 5365.855: {155}, 6000: {138.1977}, 7000: {123.436}, 9000: {106.9625}, 12000: {93.72077, 138.1977},
	} {
		f := figures(b, hz)
		ok := len(f.GratingLobes) == len(want)
		for i := 0; ok && i < len(want); i++ {
			ok = math.Abs(deg(f.GratingLobes[i])-want[i]) < 0.01
			if level := levelAt(b, plane(want[i]), hz); math.Abs(level) > 0.001 {
				t.Errorf("%g Hz: level %.4f dB at %g°, want 0", hz, level, want[i])
			}
		}
		if !ok {
			t.Errorf("%g Hz: grating lobes %v rad, want %v°", hz, f.GratingLobes, want)
		}
		for _, s := range f.SideLobes {
			// At 5000 Hz the flank of the lobe to come stands at the end.
			if s.LevelDB > -10 && hz != 5000 {
				t.Errorf("%g Hz: side lobe of %.2f dB at %.2f°: a grating lobe counted twice", hz, s.LevelDB, deg(s.Angle))
			}
		}
	}
	entries, ok := GratingEntries(b.Mics, rig.Degrees(52, 0), 343, 22000)
	want := []GratingEntry{{1, 5054.689, math.Pi}, {2, 10109.38, math.Pi}, {3, 15164.07, math.Pi}, {4, 20218.76, math.Pi}, {-1, 21248.63, 0}}
	if !ok || len(entries) != len(want) {
		t.Fatalf("grating lobes come in at %v, want %v", entries, want)
	}
	for i, e := range entries {
		if e.Order != want[i].Order || math.Abs(e.Hz-want[i].Hz) > 0.1 || e.Angle != want[i].Angle {
			t.Errorf("grating lobe comes in at %v, want %v", e, want[i])
		}
	}
	if _, ok := GratingEntries(ring(8, 0.06), rig.Degrees(52, 0), 343, 22000); ok {
		t.Error("a ring has exact grating lobes")
	}
}

// A16, A25: half-wavelength frequency c/(2d), aperture N d, and the frequency
// at which it is one wavelength; definitions.
func TestApertureOfTwentyFour(t *testing.T) {
	a := ApertureOf(line(24, 0.042), 343)
	if math.Abs(a.Extent-0.966) > 1e-9 || math.Abs(a.Effective-1.008) > 1e-9 || math.Abs(a.LowerUsefulHz-340.2778) > 1e-3 {
		t.Errorf("aperture %+v, want 0.966 m, 1.008 m, 340.278 Hz", a)
	}
	within(t, "c/(2d)", a.HalfWavelengthHz, 4083.333, 0.001)
	if r := ApertureOf(ring(8, 0.06), 343); r.HalfWavelengthHz != nil || math.Abs(r.LowerUsefulHz-343/0.12) > 1e-6 {
		t.Errorf("ring: %+v", r)
	}
	if p := ApertureOf(line(1, 0), 343); p.LowerUsefulHz != 0 || p.HalfWavelengthHz != nil {
		t.Errorf("one microphone: %+v", p)
	}
}

// Fraunhofer distance 2L²/λ across the direction; common practice. Beyond it the
// curvature is below π/8 of phase.
func TestNearFieldReach(t *testing.T) {
	at := line(8, 0.12)
	if got := NearFieldReach(at, rig.Degrees(90, 0), 1000, 343); math.Abs(got-2*0.84*0.84*1000/343) > 1e-9 {
		t.Errorf("broadside: %.4f m, want %.4f", got, 2*0.84*0.84*1000/343)
	}
	if got := NearFieldReach(at, rig.Degrees(0, 0), 1000, 343); got > 1e-9 {
		t.Errorf("endfire: %g m, want 0", got)
	}
	d := NearFieldReach(at, rig.Degrees(90, 0), 1000, 343)
	near := acoustics.Spherical{At: rig.Point{Y: d}}
	if phase := 2 * math.Pi * 1000 * near.Delay(at[0], rig.Point{}, 343); math.Abs(phase/(math.Pi/8)-1) > 0.02 {
		t.Errorf("phase at the end %.4f rad, want π/8", phase)
	}
}

// A17: directivity factor of uniform lines in closed form; Van Trees 2002,
// section 2.6; Balanis ch. 6. A18: 10 log10 N at λ/2 for any steering. A19: the
// textbook's end-fire 4Nd/λ is exact there.
func TestDirectivityOfUniformLines(t *testing.T) {
	for _, v := range []struct {
		n           int
		d, az, want float64
	}{
		{8, 0.5, 90, 8}, {8, 0.25, 90, 4.163234}, {8, 0.25, 0, 8}, {8, 0.75, 90, 11.54725}, {16, 0.4, 60, 12.94333},
		{32, 0.5, 60, 32}, {10, 0.25, 90, 5.16601}, {10, 0.25, 0, 10}, {4, 0.1, 90, 1.172217}, {4, 0.1, 0, 1.745844},
	} {
		b, hz := uniform(v.n, v.d, v.az)
		if got := b.Directivity(hz); math.Abs(got/v.want-1) > 1e-4 {
			t.Errorf("N = %d, d = %g λ, %g°: %.6f, want %.6f", v.n, v.d, v.az, got, v.want)
		}
	}
	for n, want := range map[int]float64{2: 3.01029996, 4: 6.02059991, 8: 9.03089987, 16: 12.0411998, 32: 15.0515} {
		b, hz := uniform(n, 0.5, 37)
		f := figures(b, hz)
		if math.Abs(f.DirectivityIndexDB-want) > 1e-6 || math.Abs(f.WhiteNoiseGainDB-want) > 1e-6 || math.Abs(f.DiffuseGainDB-want) > 1e-6 {
			t.Errorf("N = %d: %+v, want %.6f dB", n, f, want)
		}
	}
}

// A20: end-fire with the extra phase of Hansen & Woodyard 1938, 2.92/N and π/N:
// N = 10, d = λ/4.
func TestHansenWoodyard(t *testing.T) {
	for delta, want := range map[float64]float64{2.92: 17.96093, math.Pi: 17.78987} {
		b, hz := uniform(10, 0.25, 0)
		plain := b.Transfer
		b.Transfer = exact{10, func(m int, hz float64) complex128 {
			return plain.Response(nil, hz)[m] * phasor(1, -float64(m)*delta/10)
		}}
		if got := b.Directivity(hz); math.Abs(got/want-1) > 1e-3 {
			t.Errorf("extra phase %.4f/N: %.5f, want %.5f", delta, got, want)
		}
	}
}

// A22: phases set for 2000 Hz and 60 degrees squint to cos θ = cos θ0 f0/f at
// other frequencies; true delays do not. Common array theory.
func TestSquint(t *testing.T) {
	at := line(16, 0.04)
	delays := ideal(at, plane(60), 343, nil)
	phases := delays
	phases.Transfer = exact{16, func(m int, _ float64) complex128 {
		return phasor(1.0/16, 2*math.Pi*2000*plane(60).Delay(at[m], rig.Point{}, 343))
	}}
	for hz, want := range map[float64]float64{1000: 0, 1500: 48.18969, 2000: 60, 3000: 70.52878, 4000: 75.52249} {
		if got := deg(figures(phases, hz).Peak); math.Abs(got-want) > 0.005 {
			t.Errorf("phases, %g Hz: peak at %.5f°, want %.5f", hz, got, want)
		}
		if got := deg(figures(delays, hz).Peak); math.Abs(got-60) > 0.005 {
			t.Errorf("delays, %g Hz: peak at %.5f°, want 60", hz, got)
		}
	}
}

// A23: loss of the main lobe for a look off by 5 degrees (N = 8) and 2 degrees
// (N = 32); closed form.
func TestLossOfAWrongLook(t *testing.T) {
	for _, v := range []struct {
		n         int
		off, want float64
	}{{8, 5, -1.784598}, {32, 2, -5.024404}} {
		b, hz := uniform(v.n, 0.5, 90)
		if got := levelAt(b, plane(90+v.off), hz); math.Abs(got-v.want) > 0.005 {
			t.Errorf("N = %d, %g° off: %.5f dB, want %.5f", v.n, v.off, got, v.want)
		}
	}
}

// L10: Van Trees 2002, sections 2.6 and 6.3: delay-and-sum of N = 8, d = 0.04 m,
// an interferer 40 degrees off broadside 20 dB above the sensor noise.
func TestGainAgainstAnInterferer(t *testing.T) {
	at := line(8, 0.04)
	b := ideal(at, plane(90), 343, nil)
	b.Transfer = delaySum(at, plane(90), 343, 48000, nil)
	for hz, want := range map[float64]float64{500: 1.340642, 1000: 5.876485, 2000: 15.67769, 4000: 16.46331} {
		noise := 1/b.WhiteNoiseGain(hz) + 100*power(b.To(plane(50), hz))
		if got := 10 * math.Log10(101/noise); math.Abs(got-want) > 1e-3 {
			t.Errorf("%g Hz: gain %.5f dB, want %.5f", hz, got, want)
		}
	}
}

// L11, L12: the gain in diffuse noise is the mean of the pattern over the
// sphere: N = 4, d = 0.05 m, 20,000 waves even in cos θ.
func TestDiffuseGainIsTheMeanOverTheSphere(t *testing.T) {
	b := ideal(line(4, 0.05), plane(90), 343, nil)
	for hz, want := range map[float64]float64{500: 0.3728174, 1000: 1.402414, 2000: 4.005221, 3430: 6.0206} {
		mean := 0.0
		const waves = 20000
		for i := range waves {
			u := -1 + (2*float64(i)+1)/waves
			mean += power(b.To(acoustics.Plane{From: rig.Direction{Azimuth: math.Acos(u)}}, hz)) / waves
		}
		closed := 10 * math.Log10(b.Directivity(hz))
		if got := -10 * math.Log10(mean); math.Abs(got-want) > 1e-4 || math.Abs(closed-want) > 1e-4 {
			t.Errorf("%g Hz: sum %.6f dB, closed form %.6f, want %.6f", hz, got, closed, want)
		}
	}
}
