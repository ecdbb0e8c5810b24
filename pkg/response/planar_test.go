package response

import (
	"fmt"
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// zenith is the direction straight up.
var zenith = acoustics.Plane{From: rig.Degrees(0, 90)}

// disc is a filled circular aperture of radius a: rings at the nodes of the
// midpoint rule in r², which weighs equal areas alike.
func disc(a float64, rings, around int) []rig.Point {
	var at []rig.Point
	for i := range rings {
		r := a * math.Sqrt((float64(i)+0.5)/float64(rings))
		for j := range around {
			s, c := math.Sincos(2 * math.Pi * (float64(j) + 0.5*float64(i%2)) / float64(around))
			at = append(at, rig.Point{X: r * c, Y: r * s})
		}
	}
	return at
}

// wavenumber returns the frequency at which k·a is ka at 343 m/s.
func wavenumber(ka, a float64) float64 { return ka * 343 / (2 * math.Pi * a) }

// sines returns k·a·sin of the angle from the zenith of an elevation.
func sines(ka, elevation float64) float64 { return ka * math.Abs(math.Cos(elevation)) }

// D1, D2, D3: circular aperture, 2 J1(x)/x: first null 3.83171, side lobes at
// 5.13562, 8.41724, 11.61984 of -17.57, -23.811, -27.957 dB, half power at
// 1.6163; Abramowitz & Stegun table 9.5; Van Trees 2002, section 4.2.3. The
// aperture is of 48 rings, which moves the third side lobe by a tenth of a
// decibel.
func TestCircularAperture(t *testing.T) {
	const a, ka = 0.3, 14.0
	b := ideal(disc(a, 48, 32), zenith, 343, nil)
	f := figures(b, wavenumber(ka, a))
	if len(f.FirstNulls) != 2 || math.Abs(sines(ka, f.FirstNulls[1])-3.83171) > 0.01 {
		t.Errorf("first null at x = %.5f, want 3.83171", sines(ka, f.FirstNulls[1]))
	}
	if f.Edges[1] == nil || math.Abs(sines(ka, *f.Edges[1])-1.6163) > 0.003 {
		t.Errorf("half power at %v, want x = 1.6163", f.Edges[1])
	}
	want := [][2]float64{{5.13562, -17.57}, {8.41724, -23.811}, {11.61984, -27.957}}
	var got []Lobe
	for _, l := range f.SideLobes { // those on the far side of the zenith, outwards
		if l.Angle > math.Pi/2 && l.Angle < math.Pi {
			got = append(got, l)
		}
	}
	if len(got) < 3 {
		t.Fatalf("side lobes %v", f.SideLobes)
	}
	for i, w := range want {
		if x := sines(ka, got[i].Angle); math.Abs(x-w[0]) > 0.02 || math.Abs(got[i].LevelDB-w[1]) > 0.15 {
			t.Errorf("side lobe %d: x = %.4f, %.3f dB, want %.4f, %.3f", i+1, x, got[i].LevelDB, w[0], w[1])
		}
	}
}

// D4: ring of many microphones, J0(x): first null 2.4048, first side lobe -7.9
// dB, half power at 1.1264; Van Trees 2002, section 4.2.2.
func TestRingLookingUp(t *testing.T) {
	const a, ka = 0.2, 6.0
	f := figures(ideal(ring(64, a), zenith, 343, nil), wavenumber(ka, a))
	if len(f.FirstNulls) != 2 || math.Abs(sines(ka, f.FirstNulls[0])-2.4048) > 0.002 {
		t.Errorf("first nulls %v, want x = 2.4048", f.FirstNulls)
	}
	if f.Edges[0] == nil || math.Abs(sines(ka, *f.Edges[0])-1.1264) > 0.002 {
		t.Errorf("half power %v, want x = 1.1264", f.Edges)
	}
	nearest, level := math.Inf(1), 0.0
	for _, l := range f.SideLobes {
		if d := math.Abs(l.Angle - math.Pi/2); d < nearest {
			nearest, level = d, l.LevelDB
		}
	}
	if math.Abs(level+7.9) > 0.01 {
		t.Errorf("first side lobe %.3f dB, want -7.9", level)
	}
}

// D5, D6: uniform circular arrays, exact sum; Van Trees 2002, section 4.2. The
// angles θ are from the zenith. Where it applies, J0 of the argument is met
// within the sum of 2|J_qN| over q = 1, 2, ...
func TestRingPattern(t *testing.T) {
	const a = 0.1
	for _, v := range []struct {
		n                            int
		ka, theta, phi, theta0, phi0 float64
		want                         float64
	}{
		{16, 5, 90, 30, 90, 0, -0.09122551}, {16, 5, 90, 180, 90, 0, -0.2428023}, {16, 5, 45, 77, 60, 0, -0.1983754},
		{8, 2, 90, 45, 90, 0, 0.4946106}, {8, 5, 90, 180, 90, 0, 0.3929061},
	} {
		look := acoustics.Plane{From: rig.Degrees(v.phi0, 90-v.theta0)}
		b := ideal(ring(v.n, a), look, 343, nil)
		hz := wavenumber(v.ka, a)
		got := real(b.To(acoustics.Plane{From: rig.Degrees(v.phi, 90-v.theta)}, hz))
		if math.Abs(got-v.want) > 1e-6 {
			t.Errorf("%+v: %.8f", v, got)
		}
		// Distance of the two directions' projections, times ka.
		u, u0 := rig.Degrees(v.phi, 90-v.theta).Unit(), look.From.Unit()
		x := v.ka * math.Hypot(u.X-u0.X, u.Y-u0.Y)
		bound := 0.0
		for q := 1; q < 4; q++ {
			bound += 2 * math.Abs(math.Jn(q*v.n, 2*v.ka))
		}
		if math.Abs(got-math.J0(x)) > bound+1e-9 {
			t.Errorf("%+v: %.6f from J0, bound %.6f", v, math.Abs(got-math.J0(x)), bound)
		}
	}
	// D6: the bounds themselves.
	for _, v := range [][3]float64{{16, 5, 0.003133512}, {8, 2, 0.008057336}, {8, 5, 0.6357083}} {
		if got := 2 * math.Abs(math.Jn(int(v[0]), 2*v[1])); math.Abs(got-v[2]) > 1e-6 {
			t.Errorf("2|J_%g(%g)| = %.9f, want %g", v[0], 2*v[1], got, v[2])
		}
	}
}

// D7: directivity factor of delay-and-sum, ring of 8, radius 0.05 m, look in
// its plane; Van Trees 2002, section 2.6; Brandstein & Ward 2001, ch. 2.
func TestRingDirectivity(t *testing.T) {
	b := ideal(ring(8, 0.05), plane(0), 343, nil)
	b.Transfer = delaySum(b.Mics, plane(0), 343, 48000, nil)
	for hz, want := range map[float64]float64{500: 1.188212, 1000: 1.91046, 2000: 4.292717, 4000: 7.538763} {
		if got := b.Directivity(hz); math.Abs(got/want-1) > 1e-4 {
			t.Errorf("%g Hz: %.6f, want %.6f", hz, got, want)
		}
	}
}

// D8: grid of 4 by 4 half a wavelength apart looking up, by the product of two
// lines (pattern multiplication, Balanis ch. 6).
func TestGridIsAProductOfLines(t *testing.T) {
	var at []rig.Point
	for i := range 16 {
		at = append(at, rig.Point{X: spacing * (float64(i%4) - 1.5), Y: spacing * (float64(i/4) - 1.5)})
	}
	b := ideal(at, zenith, 343, nil)
	for dir, want := range map[[2]float64]float64{{20, 0}: 0.4090991, {20, 45}: 0.4533351, {50, 30}: 0.07337619, {70, 80}: 0.09584212} {
		got := math.Sqrt(power(b.To(acoustics.Plane{From: rig.Degrees(dir[1], 90-dir[0])}, halfWave)))
		if math.Abs(got-want) > 1e-7 {
			t.Errorf("θ, φ = %v: %.9f, want %.9f", dir, got, want)
		}
	}
}

// D9: directivity of a circular piston in a baffle, (ka)²/(1 - J1(2ka)/ka);
// Kinsler & Frey (from memory). A free aperture sees both half spaces alike,
// so that its directivity is half of that. The disc is of points, which adds
// the points' own share of the noise: about 1/N.
func TestPistonDirectivity(t *testing.T) {
	const a = 0.2
	b := ideal(disc(a, 16, 40), zenith, 343, nil)
	for ka, want := range map[float64]float64{0.5: 2.085091, 1: 2.362529, 2: 3.872136, 5: 25.21927} {
		if got := 2 * b.Directivity(wavenumber(ka, a)); math.Abs(got/want-1) > 0.005 {
			t.Errorf("ka = %g: %.5f, want %.5f", ka, got, want)
		}
	}
}

// The azimuth cut is a full circle: its figures do not depend on where the look
// stands in it, for a rig that looks the same from there.
func TestAzimuthCutTurnsWithTheRig(t *testing.T) {
	at := ring(8, 0.06)
	want := figures(ideal(at, plane(0), 343, nil), 3000)
	if want.Beamwidth == nil || len(want.SideLobes) == 0 {
		t.Fatalf("figures %+v", want)
	}
	for _, az := range []float64{45, 90, 180, -135} {
		got := figures(ideal(at, plane(az), 343, nil), 3000)
		within(t, fmt.Sprintf("width at %g°", az), got.Beamwidth, *want.Beamwidth, 1e-6)
		if len(got.SideLobes) != len(want.SideLobes) {
			t.Errorf("at %g°: %d side lobes, want %d", az, len(got.SideLobes), len(want.SideLobes))
		}
		within(t, fmt.Sprintf("highest side lobe at %g°", az), got.HighestSideLobeDB, *want.HighestSideLobeDB, 1e-6)
		if math.Abs(got.Peak-az*math.Pi/180) > 1e-6 {
			t.Errorf("at %g°: peak at %.5f°", az, deg(got.Peak))
		}
	}
}

// At low frequencies a small rig has no half-power width, nulls or lobes.
func TestSmallRigHasNoWidth(t *testing.T) {
	for name, at := range map[string][]rig.Point{"ring": ring(8, 0.06), "line": line(8, 0.04), "one": line(1, 0)} {
		f := figures(ideal(at, plane(60), 343, nil), 100)
		if f.Beamwidth != nil || f.HighestSideLobeDB != nil || len(f.FirstNulls)+len(f.SideLobes)+len(f.GratingLobes) != 0 {
			t.Errorf("%s: %+v, want nothing defined", name, f)
		}
	}
}

func TestSilentBeamHasNoFigures(t *testing.T) {
	b := Beam{Mics: line(3, 0.1), Look: plane(0), Speed: 343, Transfer: exact{3, func(int, float64) complex128 { return 0 }}}
	if f := figures(b, 1000); f.Beamwidth != nil || len(f.SideLobes) != 0 {
		t.Errorf("silent filters: %+v", f)
	}
}

func TestBeamValidate(t *testing.T) {
	if err := (Beam{}).Validate(); err == nil {
		t.Error("an empty beam validates")
	}
	b, _ := uniform(4, 0.5, 60)
	if err := b.Validate(); err != nil {
		t.Errorf("a beam in order: %v", err)
	}
	b.Mics = b.Mics[:3]
	if err := b.Validate(); err == nil {
		t.Error("four filters for three microphones validate")
	}
}
