package bearing

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"alidade/pkg/rig"
)

// H13: DiBiase 2000; Brandstein & Ward 2001, ch. 8: whitened exact plane waves
// add up to one a pair at the true direction, (M choose 2) in all, and off it
// to the array factor: |AF|² M² = M + 2 (sum over pairs).
func TestSteeredResponseOfAnExactWave(t *testing.T) {
	for _, M := range []int{4, 8, 16} {
		mics := lineMics(M, 0.05)
		set, err := settle(Options{Speed: testSpeed, FarField: true}, mics, rig.Spread(mics), 48000)
		if err != nil {
			t.Fatal(err)
		}
		s := newSpace(mics, rig.Point{}, testSpeed, nil)
		pairs := choosePairs(M, maxPairs)
		g, err := newGrid(s, &set, pairs)
		if err != nil {
			t.Fatal(err)
		}
		K := set.binTo - set.binFrom
		if want := M * (M - 1) / 2; len(pairs) != want {
			t.Fatalf("%d pairs of %d microphones, want %d", len(pairs), M, want)
		}
		truth := g.points[len(g.points)/3]
		re, im, w := make([]float64, len(pairs)*K), make([]float64, len(pairs)*K), make([]float64, len(pairs)*K)
		tau := make([]float64, M)
		s.delays(tau, truth)
		df := 48000 / float64(set.size)
		for p, q := range pairs {
			for k := range K {
				z := cmplx.Rect(1, -2*math.Pi*df*float64(set.binFrom+k)*(tau[q.i]-tau[q.j]))
				re[p*K+k], im[p*K+k], w[p*K+k] = real(z), imag(z), 1
			}
		}
		g.search(re, im, w, K, float64(K))
		d, v := g.best(s, nil, 0)
		if got, want := v, float64(len(g.pairs)); d != len(g.points)/3 || math.Abs(got/want-1) > 0.03 {
			t.Errorf("M %d: response %.3f at point %d, want %d pairs at point %d", M, got, d, len(g.pairs), len(g.points)/3)
		}
		if M > 11 {
			continue // a choice of pairs
		}
		for _, d := range []int{3, len(g.points) / 2, len(g.points) - 10} {
			factor := 0.0
			other := make([]float64, M)
			s.delays(other, g.points[d])
			for k := range K {
				var sum complex128
				for m := range M {
					sum += cmplx.Rect(1, -2*math.Pi*df*float64(set.binFrom+k)*(tau[m]-other[m]))
				}
				factor += (real(sum)*real(sum) + imag(sum)*imag(sum)) / float64(K)
			}
			if got := float64(M) + 2*g.value[d]; math.Abs(got-factor) > 0.03*float64(M*M) {
				t.Errorf("M %d, point %d: %.3f, want %.3f", M, d, got, factor)
			}
		}
	}
}

// The table search against the plain sum over lines, on random spectra.
func TestGridSearchAgreesWithThePlainSum(t *testing.T) {
	for _, mics := range [][]rig.Point{lineMics(6, 0.05), ringMics(5, 0.07), solidMics(0.1)} {
		set, err := settle(Options{Speed: testSpeed, ToHz: 4000}, mics, rig.Spread(mics), 16000)
		if err != nil {
			t.Fatal(err)
		}
		s := newSpace(mics, rig.Point{}, testSpeed, nil)
		pairs := choosePairs(len(mics), maxPairs)
		g, err := newGrid(s, &set, pairs)
		if err != nil {
			t.Fatal(err)
		}
		K := set.binTo - set.binFrom
		r := rand.New(rand.NewPCG(5, 6))
		n := len(pairs) * K
		re, im, w := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range n {
			re[i], im[i], w[i] = r.NormFloat64(), r.NormFloat64(), r.Float64()
		}
		g.search(re, im, w, K, float64(K))
		tau := make([]float64, len(mics))
		var diff, size float64
		for d := 0; d < len(g.points); d += 1 + len(g.points)/50 {
			s.delays(tau, g.points[d])
			sum := 0.0
			for p, q := range pairs {
				for k := range K {
					ph := 2 * math.Pi * 16000 / float64(set.size) * float64(set.binFrom+k) * (tau[q.i] - tau[q.j])
					sin, cos := math.Sincos(ph)
					sum += w[p*K+k] * (re[p*K+k]*cos - im[p*K+k]*sin)
				}
			}
			sum /= float64(K)
			diff += (sum - g.value[d]) * (sum - g.value[d])
			size += sum * sum
		}
		// The nearest of twelve points a period: a phase error of up to pi/12,
		// uniform: rms 0.15 at the top of the range, less below.
		if rel := math.Sqrt(diff / size); rel > 0.15 {
			t.Errorf("%v: table search differs from the plain sum by %.3f of its size", rig.Spread(mics).Shape, rel)
		}
	}
}

// The grid covers every direction that the rig can tell apart, no farther from
// a point than the step allows.
func TestGridCoversAllDirections(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for _, mics := range [][]rig.Point{lineMics(8, 0.04), ringMics(8, 0.06), solidMics(0.08), {{Z: 0.1}, {Z: 0.2}, {Z: 0.4}}} {
		s := newSpace(mics, rig.Point{}, testSpeed, nil)
		points := gridPlaces(s, 0.1, []float64{0})
		for range 300 {
			u := rig.Point{X: r.NormFloat64(), Y: r.NormFloat64(), Z: r.NormFloat64()}
			u = u.Scale(1 / u.Norm())
			var y [3]float64
			for a := range s.dim {
				y[a] = u.Dot(s.basis[a])
			}
			best := math.Inf(1)
			for _, p := range points {
				best = math.Min(best, s.apart(p.y, y))
			}
			if best > 0.11 {
				t.Fatalf("%v: %v is %.3f cosines from the nearest point", s.geo.Shape, u, best)
			}
		}
	}
}

func TestDirectionsOfEveryShapeComeBack(t *testing.T) {
	vertical := []rig.Point{{Z: 0}, {Z: 0.1}, {Z: 0.25}}
	for _, c := range []struct {
		name string
		mics []rig.Point
		in   rig.Direction
		want rig.Direction
	}{
		{"line: the cone angle as azimuth", lineMics(4, 0.1), rig.Degrees(40, 0), rig.Degrees(40, 0)},
		{"line: behind is mirrored to the front", lineMics(4, 0.1), rig.Degrees(-40, 0), rig.Degrees(40, 0)},
		{"line: elevation widens the cone", lineMics(4, 0.1), rig.Degrees(0, 60), rig.Degrees(60, 0)},
		{"vertical line: the elevation", vertical, rig.Degrees(200, 35), rig.Degrees(90, 35)},
		{"flat: above", ringMics(6, 0.1), rig.Degrees(-120, 50), rig.Degrees(-120, 50)},
		{"flat: below is mirrored above", ringMics(6, 0.1), rig.Degrees(100, -30), rig.Degrees(100, 30)},
		{"solid", solidMics(0.1), rig.Degrees(100, -30), rig.Degrees(100, -30)},
	} {
		s := newSpace(c.mics, rig.Point{}, testSpeed, nil)
		u := c.in.Unit()
		var p place
		for a := range s.dim {
			p.y[a] = u.Dot(s.basis[a])
		}
		got := s.fix(p, mat4{}, 10).Direction
		if rig.AngleBetween(got, c.want) > 1e-6 {
			t.Errorf("%s: %.3f°, %.3f°, want %.3f°, %.3f°", c.name, got.AzimuthDeg(), got.ElevationDeg(), c.want.AzimuthDeg(), c.want.ElevationDeg())
		}
	}
}

// The delays and their slopes against package acoustics' definition: the
// spherical wave by distances, the plane wave as its limit.
func TestDelaysFollowTheWavefront(t *testing.T) {
	mics := solidMics(0.3)
	s := newSpace(mics, rig.Point{}, testSpeed, nil)
	tau, more := make([]float64, 8), make([]float64, 8)
	jac := make([][maxDims]float64, 8)
	u := rig.Degrees(70, 20).Unit()
	for _, kappa := range []float64{0, 1e-9, 0.01, 0.7, 2} {
		p := place{y: [3]float64{u.X, u.Y, u.Z}, kappa: kappa}
		s.delays(tau, p)
		for m, q := range s.at {
			want := -q.Dot(u) / testSpeed
			if kappa > 1e-6 {
				src := u.Scale(1 / kappa)
				want = (src.Distance(q) - src.Norm()) / testSpeed
			}
			if math.Abs(tau[m]-want) > 1e-11 {
				t.Errorf("kappa %g, microphone %d: %.9g s, want %.9g", kappa, m, tau[m], want)
			}
		}
		s.slopes(jac, p)
		const h = 1e-6
		q := p
		q.kappa += h
		s.delays(more, q)
		for m := range more {
			if got, want := jac[m][3], (more[m]-tau[m])/h; math.Abs(got-want) > 1e-4*math.Abs(want)+1e-8 {
				t.Errorf("kappa %g, microphone %d: slope %.6g over curvature, want %.6g", kappa, m, got, want)
			}
		}
	}
}
