package acoustics

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"alidade/pkg/rig"
)

func TestPlaneWaveReachesTheNearSideFirst(t *testing.T) {
	w := Plane{From: rig.Degrees(0, 0)} // from +x
	if d := w.Delay(rig.Point{X: 0.343}, rig.Point{}, 343); math.Abs(d+0.001) > 1e-15 {
		t.Errorf("delay 343 mm towards the source = %g s, want -1 ms", d)
	}
	if d := w.Delay(rig.Point{Y: 2, Z: -1}, rig.Point{}, 343); math.Abs(d) > 1e-15 {
		t.Errorf("delay abeam = %g s, want 0", d)
	}
	up := Plane{From: rig.Degrees(33, 90)}
	if d := up.Delay(rig.Point{Z: 3.43}, rig.Point{}, 343); math.Abs(d+0.01) > 1e-15 {
		t.Errorf("delay above for a source above = %g s, want -10 ms", d)
	}
}

// Far away a spherical wave is a plane one: the difference in delay is at most
// |p|²/(2·r·c).
func TestSphericalWaveBecomesPlane(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	for range 200 {
		dir := rig.Degrees(360*rng.Float64()-180, 180*rng.Float64()-90)
		p := rig.Point{X: rng.Float64() - 0.5, Y: rng.Float64() - 0.5, Z: rng.Float64() - 0.5}
		ref := rig.Point{X: 0.1, Y: -0.2, Z: 0.05}
		r := 50 + 1000*rng.Float64()
		near := Spherical{At: ref.Add(dir.Unit().Scale(r))}
		d := near.Delay(p, ref, 343) - Plane{From: dir}.Delay(p, ref, 343)
		if bound := p.Sub(ref).Dot(p.Sub(ref)) / (2 * r * 343); d < -1e-13 || d > bound+1e-13 {
			t.Fatalf("spherical minus plane delay at %g m = %g s, want 0 to %g", r, d, bound)
		}
		if a := rig.AngleBetween(near.Direction(ref), dir); a > 1e-9 {
			t.Fatalf("direction of the source is off by %g rad", a)
		}
	}
}

// F9: the inverse distance law: -6.0206 dB for twice the distance, -20 dB for
// ten times (elementary acoustics).
func TestSpreadingIsInverseDistance(t *testing.T) {
	w := Spherical{At: rig.Point{X: 1, Y: 1}}
	ref := rig.Point{X: 1, Y: 3}
	for _, v := range []struct{ y, db float64 }{{5, -6.0206}, {21, -20}, {3, 0}, {2, 6.0206}} {
		got := 20 * math.Log10(w.Spreading(rig.Point{X: 1, Y: v.y}, ref))
		if math.Abs(got-v.db) > 1e-4 {
			t.Errorf("spreading at %g m = %.4f dB, want %.4f", v.y-1, got, v.db)
		}
	}
}

// Steering vectors are what a shifted sine shows: e^{-jωτ} for lateness τ.
func TestSteeringIsAShiftedSine(t *testing.T) {
	omega := 2 * math.Pi * 700
	delays := []float64{0, 1e-4, -3e-4}
	v := Steering(nil, delays, []float64{1, 0.5, 2}, omega)
	for m, tau := range delays {
		want := cmplx.Rect([]float64{1, 0.5, 2}[m], -omega*tau)
		if cmplx.Abs(v[m]-want) > 1e-12 {
			t.Errorf("steering[%d] = %v, want %v", m, v[m], want)
		}
	}
	if w := Steering(v, delays, nil, omega); len(w) != 3 || cmplx.Abs(w[1])-1 > 1e-12 {
		t.Errorf("steering without spreading = %v, want unit amplitudes", w)
	}
}

// The coherence of isotropic sound is the mean of plane waves over the sphere
// (Cook et al. 1955): compared with that mean, taken over a fine lattice.
func TestDiffuseCoherenceIsTheMeanOverTheSphere(t *testing.T) {
	const waves = 200000
	for _, v := range []struct{ d, hz float64 }{{0.04, 100}, {0.04, 4000}, {0.28, 600}, {0.28, 3000}, {1, 50}} {
		var mean float64
		for j := range waves {
			// Evenly spread over the sphere, the cosine of the angle is uniform.
			z := 1 - (2*float64(j)+1)/waves
			mean += math.Cos(2 * math.Pi * v.hz / 343 * v.d * z)
		}
		mean /= waves
		if got := DiffuseCoherence(v.d, v.hz, 343); math.Abs(got-mean) > 1e-8 {
			t.Errorf("coherence at %g m, %g Hz = %.9f, mean over the sphere %.9f", v.d, v.hz, got, mean)
		}
	}
	if got := DiffuseCoherence(0, 1000, 343); got != 1 {
		t.Errorf("coherence at 0 m = %g, want 1", got)
	}
}

func TestDelaysFollowTheOrderOfPlaces(t *testing.T) {
	at := rig.Line(5, 0.1)
	w := Plane{From: rig.Degrees(60, 0)}
	got := Delays(make([]float64, 3), w, at, rig.Point{}, 343.2)
	if len(got) != len(at) {
		t.Fatalf("%d delays for %d places", len(got), len(at))
	}
	for m, p := range at {
		if want := -p.X * 0.5 / 343.2; math.Abs(got[m]-want) > 1e-15 {
			t.Errorf("delay %d = %g, want %g", m, got[m], want)
		}
	}
}
