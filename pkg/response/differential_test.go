package response

import (
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// subtract is two microphones d apart, look along the axis at the front one:
// the rear one is delayed by beta times the travel time and subtracted, not
// equalised.
func subtract(d, beta, c float64) Beam {
	at := line(2, d)
	return Beam{Mics: at, Reference: at[1], Look: plane(0), Speed: c, Transfer: exact{2, func(m int, hz float64) complex128 {
		if m == 1 {
			return 1
		}
		return phasor(-1, -2*math.Pi*hz*beta*d/c)
	}}}
}

// C5: first-order patterns a + (1-a) cos θ, Elko 2000 (from memory): directivity
// index, angle of the null, half-power arc, level behind, level at the side,
// distance factor √D. Two microphones closer than a thousandth of a wavelength
// make them with β = a/(1-a).
func TestFirstOrderPatterns(t *testing.T) {
	const none = math.MaxFloat64
	for _, v := range []struct {
		name                                       string
		a, di, null, arc, rear, side, distance, fb float64
	}{
		{"cardioid", 0.5, 4.77, 180, 131.06, none, -6.02, 1.732, 8.45},
		{"hypercardioid", 0.25, 6.02, 109.47, 104.9, -6.02, -12.04, 2.0, 8.45},
		{"supercardioid", (math.Sqrt(3) - 1) / 2, 5.72, 125.26, 114.9, -11.44, -8.73, 1.932, 11.44},
		{"dipole", 0, 4.77, 90, 90, 0, none, 1.732, 0},
		{"subcardioid", 0.7, 2.839967, none, 177.2852, -7.9588, -3.098039, 1.38675, 3.719612},
	} {
		const hz, d = 100.0, 0.0005
		b := subtract(d, v.a/(1-v.a), 343)
		f := figures(b, hz)
		if math.Abs(f.DirectivityIndexDB-v.di) > 0.01 {
			t.Errorf("%s: directivity index %.4f dB, want %.2f", v.name, f.DirectivityIndexDB, v.di)
		}
		if got := math.Sqrt(b.Directivity(hz)); math.Abs(got-v.distance) > 0.002 {
			t.Errorf("%s: distance factor %.4f, want %.3f", v.name, got, v.distance)
		}
		if v.null != none {
			if len(f.FirstNulls) == 1 {
				if got := deg(f.FirstNulls[0]); math.Abs(got-v.null) > 0.05 {
					t.Errorf("%s: null at %.3f°, want %.2f", v.name, got, v.null)
				}
			} else if v.null != 180 { // at the end of the cut there is no far side to it
				t.Errorf("%s: nulls %v", v.name, f.FirstNulls)
			}
		}
		// The cut is half of the arc: it begins in the steered direction.
		if f.Edges[1] == nil || math.Abs(2*deg(*f.Edges[1])-v.arc) > 0.05 {
			t.Errorf("%s: half-power arc %v, want %.2f", v.name, f.Edges[1], v.arc)
		}
		if v.rear != none {
			if got := levelAt(b, plane(180), hz); math.Abs(got-v.rear) > 0.01 {
				t.Errorf("%s: %.3f dB behind, want %.2f", v.name, got, v.rear)
			}
		} else if got := levelAt(b, plane(180), hz); got > -60 {
			t.Errorf("%s: %.3f dB behind, want nothing", v.name, got)
		}
		if v.side != none {
			if got := levelAt(b, plane(90), hz); math.Abs(got-v.side) > 0.01 {
				t.Errorf("%s: %.3f dB at the side, want %.2f", v.name, got, v.side)
			}
		}
		// Front to back: the mean power over the half spheres.
		var front, back float64
		for i := range 4000 {
			u := (float64(i) + 0.5) / 4000
			front += power(b.To(plane(deg(math.Acos(u))), hz))
			back += power(b.To(plane(deg(math.Acos(-u))), hz))
		}
		if got := decibels(front / back); math.Abs(got-v.fb) > 0.01 {
			t.Errorf("%s: front to back %.3f dB, want %.2f", v.name, got, v.fb)
		}
	}
}

// C6: a public table of microphone patterns, rounded; its supercardioid is
// another than that of C5, so only cardioid, hypercardioid and dipole are held:
// arcs 131, 105, 90 degrees, side -6 and -12 dB.
func TestTableOfMicrophonePatterns(t *testing.T) {
	for a, want := range map[float64][2]float64{0.5: {131, -6}, 0.25: {105, -12}} {
		b := subtract(0.0005, a/(1-a), 343)
		f := figures(b, 100)
		if f.Edges[1] == nil || math.Abs(2*deg(*f.Edges[1])-want[0]) > 1.8 || math.Abs(levelAt(b, plane(90), 100)-want[1]) > 0.1 {
			t.Errorf("a = %g: arc %v, want %g°", a, f.Edges[1], want[0])
		}
	}
}

// C8: white noise gain of the two-microphone delay-and-subtract cardioid, d = 20
// mm, c = 343 m/s: 2 sin²(kd); C9: its directivity index at finite kd; Elko
// 2000, Benesty & Chen 2013.
func TestDelayAndSubtractCardioid(t *testing.T) {
	b := subtract(0.02, 1, 343)
	for hz, want := range map[float64]float64{125: -23.77622, 250: -17.76473, 500: -11.78062, 1000: -5.906572, 2000: -0.4824282, 4000: 2.962028} {
		if got := decibels(b.WhiteNoiseGain(hz)); math.Abs(got-want) > 0.005 {
			t.Errorf("%g Hz: white noise gain %.5f dB, want %.5f", hz, got, want)
		}
	}
	for hz, want := range map[float64]float64{125: 4.769998, 500: 4.751732, 1000: 4.692685, 2000: 4.447046, 4000: 3.283482} {
		if got := decibels(b.Directivity(hz)); math.Abs(got-want) > 0.005 {
			t.Errorf("%g Hz: directivity index %.5f dB, want %.5f", hz, got, want)
		}
	}
}

// C10, C12: spherically isotropic coherence sin(kd)/(kd), Cook et al. 1955; C11:
// cylindrically isotropic J0(kd), Cron & Sherman 1962, Abramowitz & Stegun
// table 9.1. Both as what a pair's sum leaves of the noise: (1 + coherence)/2.
func TestCoherenceOfNoiseFields(t *testing.T) {
	const d, c = 0.1, 343.0
	pair := Beam{Mics: line(2, d), Look: acoustics.Plane{From: rig.Degrees(90, 0)}, Speed: c,
		Transfer: exact{2, func(int, float64) complex128 { return 0.5 }}}
	spherical := func(kd float64) float64 { return 2/pair.Directivity(kd*c/(2*math.Pi*d)) - 1 }
	cylindrical := func(kd float64) float64 { return 2/pair.CylindricalGain(kd*c/(2*math.Pi*d)) - 1 }
	for kd, want := range map[float64]float64{0.5: 0.9588511, 1: 0.841471, 2: 0.4546487, 3.141592653589793: 0, 4: -0.1892006, 5: -0.1917849, 6.283185307179586: 0} {
		if got := spherical(kd); math.Abs(got-want) > 1e-6 {
			t.Errorf("spherical, kd = %g: %.8f, want %.8f", kd, got, want)
		}
	}
	for kd, want := range map[float64]float64{0.5: 0.9384698, 1: 0.7651977, 2: 0.2238908, 3: -0.260052, 5: -0.1775968} {
		if got := cylindrical(kd); math.Abs(got-want) > 1e-6 {
			t.Errorf("cylindrical, kd = %g: %.8f, want %.8f", kd, got, want)
		}
	}
	// C12: first zeros at c/(2d) and 2.40483 c/(2πd), 0.1 m apart.
	for name, v := range map[string]struct {
		coherence func(kd float64) float64
		want      float64
	}{"spherical": {spherical, 1715}, "cylindrical": {cylindrical, 1312.798}} {
		kd := bisect(0.1, 3.5, func(kd float64) bool { return v.coherence(kd) < 0 })
		if got := kd * c / (2 * math.Pi * d); math.Abs(got-v.want) > 0.5 {
			t.Errorf("%s: first zero at %.3f Hz, want %.3f", name, got, v.want)
		}
	}
	// The cylindrical mean over azimuths, by summing.
	b := ideal(ring(5, 0.07), plane(20), c, nil)
	mean := 0.0
	for i := range 720 {
		mean += power(b.To(plane(float64(i)/2), 1500)) / 720
	}
	if got := b.CylindricalGain(1500); math.Abs(got*mean-1) > 1e-9 {
		t.Errorf("ring: cylindrical gain %.9f, sum %.9f", got, 1/mean)
	}
}
