package render

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"alidade/pkg/rig"
)

// designed returns the largest difference of a bank's coherence to a wanted
// one over frequencies, microphones and, on the diagonal, of its power to 1.
func designed(f *Diffuse, mics []rig.Point, rate int, top float64, want func(p, q rig.Point, hz float64) float64) float64 {
	var worst float64
	n := len(mics)
	for hz := 30.0; hz < 0.45*float64(rate) && hz < top; hz *= 1.19 {
		r := make([]complex128, n*n)
		f.Covariance(r, 2*math.Pi*hz/float64(rate))
		for a := range mics {
			for b := range mics {
				worst = math.Max(worst, cmplx.Abs(r[a*n+b]-complex(want(mics[a], mics[b], hz), 0)))
			}
		}
	}
	return worst
}

// The covariance of the filters against the closed forms: sin(kd)/(kd) on the
// sphere, J0(kd) in the plane (Cook et al. 1955).
func TestDiffuseFiltersHaveTheCoherenceOfTheirField(t *testing.T) {
	const speed = 343.0
	sinc := func(p, q rig.Point, hz float64) float64 {
		kd := 2 * math.Pi * hz / speed * p.Distance(q)
		if kd == 0 {
			return 1
		}
		return math.Sin(kd) / kd
	}
	bessel := func(p, q rig.Point, hz float64) float64 {
		return math.J0(2 * math.Pi * hz / speed * math.Hypot(p.X-q.X, p.Y-q.Y))
	}
	solid := append(rig.Ring(5, 0.09), rig.Point{Z: 0.12}, rig.Point{X: 0.02, Z: -0.1})
	for _, rate := range []int{16000, 48000} {
		rng := rand.New(rand.NewPCG(3, 1))
		for _, v := range []struct {
			name  string
			bank  *Bank
			mics  []rig.Point
			want  func(p, q rig.Point, hz float64) float64
			bound float64
		}{
			{"mixed sphere, line", MixingBank(FieldSpherical, rig.Line(8, 0.04), rate, speed), rig.Line(8, 0.04), sinc, 2e-3},
			{"mixed sphere, solid", MixingBank(FieldSpherical, solid, rate, speed), solid, sinc, 2e-3},
			{"mixed plane, ring", MixingBank(FieldCylindrical, rig.Ring(6, 0.05), rate, speed), rig.Ring(6, 0.05), bessel, 1e-3},
			{"512 waves, line", WaveBank(FieldSpherical, rig.Line(4, 0.04), rig.Point{}, 512, rate, speed, rng), rig.Line(4, 0.04), sinc, 2e-3},
			{"512 waves of the plane", WaveBank(FieldCylindrical, rig.Line(4, 0.04), rig.Point{}, 512, rate, speed, rng), rig.Line(4, 0.04), bessel, 1e-3},
		} {
			// So many waves cannot show the field beyond kd = sqrt(512) or so.
			top := math.Inf(1)
			if v.name == "512 waves, line" {
				top = 18 / (2 * math.Pi * 0.12) * speed
			}
			got := designed(&Diffuse{Bank: v.bank}, v.mics, rate, top, v.want)
			if !(got < v.bound) {
				t.Errorf("%s at %d Hz: coherence off by %.2g, want below %.2g", v.name, rate, got, v.bound)
			}
			t.Logf("%s at %d Hz: %.2g", v.name, rate, got)
		}
	}
}

// The noise itself: its measured coherence over 26 s (waves: 2.6 s) lies within what the
// number of independent averages allows (standard error of a coherence near
// 0: sqrt(1/(2·averages)), Bendat & Piersol, Random Data, table 9.1).
func TestRenderedDiffuseNoiseHasItsCoherence(t *testing.T) {
	const rate, speed, size = 16000, 343.0, 256
	mics := rig.Line(3, 0.06)
	for name, bank := range map[string]*Bank{
		"mixing": MixingBank(FieldSpherical, mics, rate, speed),
		"waves":  WaveBank(FieldSpherical, mics, rig.Point{}, 512, rate, speed, rand.New(rand.NewPCG(1, 2))),
	} {
		hops := 200
		if name == "waves" {
			hops = 20
		}
		f := &Diffuse{Bank: bank, Shape: Shape(SpectrumPink, rate)}
		got := play(f.Emitter(77, 0), len(mics), hops)
		fft := plan64(size)
		bins := size/2 + 1
		cross := make([]complex128, bins)
		var power [2][]float64
		power[0], power[1] = make([]float64, bins), make([]float64, bins)
		x := make([]float64, size)
		var spec [2][2][]float64
		for s := range spec {
			spec[s][0], spec[s][1] = make([]float64, bins), make([]float64, bins)
		}
		averages := 0
		for at := 0; at+size <= len(got[0]); at += size {
			for s, m := range []int{0, 2} {
				for i := range x {
					x[i] = got[m][at+i] * (0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/size))
				}
				fft.Forward(spec[s][0], spec[s][1], x)
			}
			for k := range bins {
				a, b := complex(spec[0][0][k], spec[0][1][k]), complex(spec[1][0][k], spec[1][1][k])
				cross[k] += a * cmplx.Conj(b)
				power[0][k] += real(a)*real(a) + imag(a)*imag(a)
				power[1][k] += real(b)*real(b) + imag(b)*imag(b)
			}
			averages++
		}
		bound := 4.5 / math.Sqrt(2*float64(averages))
		for k := 4; k < 120; k++ {
			hz := float64(k) * rate / size
			kd := 2 * math.Pi * hz / speed * 0.12
			g := cross[k] / complex(math.Sqrt(power[0][k]*power[1][k]), 0)
			if math.Abs(real(g)-math.Sin(kd)/kd) > bound || math.Abs(imag(g)) > bound {
				t.Errorf("%s: coherence at %.0f Hz = %.3f, want %.3f within %.3f", name, hz, g, math.Sin(kd)/kd, bound)
			}
		}
	}
}

func TestCholeskyFactorsItsMatrix(t *testing.T) {
	rng := rand.New(rand.NewPCG(6, 6))
	const n = 6
	b := make([]float64, n*n)
	for i := range b {
		b[i] = rng.NormFloat64()
	}
	a := make([]float64, n*n)
	product := func(l []float64, i, j int) float64 {
		var s float64
		for k := range n {
			s += l[i*n+k] * l[j*n+k]
		}
		return s
	}
	for i := range n {
		for j := range n {
			a[i*n+j] = product(b, i, j)
		}
	}
	l := cholesky(append([]float64(nil), a...), n)
	for i := range n {
		for j := range n {
			if math.Abs(product(l, i, j)-a[i*n+j]) > 1e-12 {
				t.Fatalf("entry %d,%d = %g, want %g", i, j, product(l, i, j), a[i*n+j])
			}
			if j > i && l[i*n+j] != 0 {
				t.Fatalf("entry %d,%d above the diagonal is %g", i, j, l[i*n+j])
			}
		}
	}
}
