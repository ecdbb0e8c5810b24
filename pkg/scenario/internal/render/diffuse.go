package render

import (
	"math"
	"math/rand/v2"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Fields of diffuse noise.
const (
	FieldSpherical   = "spherical"   // from all sides alike: coherence sin(kd)/(kd)
	FieldCylindrical = "cylindrical" // from all sides of the horizontal plane: coherence J0(kd)
)

// coherenceLoading is added to the diagonal of coherence matrices, so that
// they can be factored where the microphones lie close together against the
// wavelength: an incoherent part of -90 dB.
const coherenceLoading = 1e-9

// coherence returns the coherence of a diffuse field between two places at a
// frequency, hertz.
func coherence(field string, p, q rig.Point, hz, speed float64) float64 {
	if field == FieldCylindrical {
		// Waves from all sides of the horizontal plane [Cook et al. 1955]; height
		// makes no difference to them.
		return math.J0(2 * math.Pi * hz / speed * math.Hypot(p.X-q.X, p.Y-q.Y))
	}
	return acoustics.DiffuseCoherence(p.Distance(q), hz, speed)
}

// MixingBank returns the filters that turn as many independent unit noises as
// there are microphones into noises of unit power and the coherence of the
// field: at each frequency the Cholesky factor of the coherence matrix
// [Habets, Cohen & Gannot 2008], which is real and even in frequency here, made
// into filters of finite length. Unlike there, the filters run by linear, not
// circular, convolution, so that the covariance of the noise is exactly what
// the filters say.
func MixingBank(field string, mics []rig.Point, rate int, speed float64) *Bank {
	extent := rig.Spread(mics).Extent
	n := 512
	for n < rate/24 || float64(n) < 8*extent/speed*float64(rate) {
		n *= 2
	}
	count := len(mics)
	bins := n/2 + 1
	factors := make([][]float64, bins)
	parallel(bins, func(k int) {
		hz := float64(k) * float64(rate) / float64(n)
		g := make([]float64, count*count)
		for a := range mics {
			for b := range mics {
				g[a*count+b] = coherence(field, mics[a], mics[b], hz, speed)
			}
			g[a*count+a] += coherenceLoading
		}
		factors[k] = cholesky(g, count)
	})
	bank := &Bank{Start: -n / 2, Taps: make([][][]float64, count)}
	re, im := make([]float64, bins), make([]float64, bins)
	fft := plan64(n)
	for m := range mics {
		for j := range mics {
			h := make([]float64, n)
			if j <= m {
				for k := range bins {
					re[k] = factors[k][m*count+j]
					if k%2 == 1 { // turns time 0 to tap n/2
						re[k] = -re[k]
					}
				}
				fft.Inverse(h, re, im)
			}
			bank.Taps[m] = append(bank.Taps[m], h)
		}
	}
	return bank
}

// cholesky returns the lower factor L of the symmetric matrix a = L·Lᵀ, row by
// row. Pivots that rounding has made negative count as 0.
func cholesky(a []float64, n int) []float64 {
	l := make([]float64, n*n)
	for i := range n {
		for j := range i + 1 {
			s := a[i*n+j]
			for k := range j {
				s -= l[i*n+k] * l[j*n+k]
			}
			switch {
			case i == j:
				l[i*n+i] = math.Sqrt(math.Max(s, 0))
			case l[j*n+j] > 0:
				l[i*n+j] = s / l[j*n+j]
			}
		}
	}
	return l
}

// WaveBank returns the filters of count plane waves of equal power from evenly
// spread directions: a spiral lattice on the sphere, or a circle, turned at
// random. Together they have unit power.
func WaveBank(field string, mics []rig.Point, ref rig.Point, count, rate int, speed float64, rng *rand.Rand) *Bank {
	// A random turn about each axis.
	var turn [3]float64
	for i := range turn {
		turn[i] = 2 * math.Pi * rng.Float64()
	}
	golden := math.Pi * (3 - math.Sqrt(5))
	extent := 0.0
	for _, p := range mics {
		extent = math.Max(extent, p.Distance(ref))
	}
	reach := int(math.Ceil(extent / speed * float64(rate)))
	bank := &Bank{Start: -reach - KernelTaps/2, Taps: make([][][]float64, len(mics))}
	gain := 1 / math.Sqrt(float64(count))
	for m := range mics {
		bank.Taps[m] = make([][]float64, count)
	}
	parallel(count, func(j int) {
		u := rig.Point{X: math.Cos(turn[0] + 2*math.Pi*float64(j)/float64(count)), Y: math.Sin(turn[0] + 2*math.Pi*float64(j)/float64(count))}
		if field != FieldCylindrical {
			z := 1 - (2*float64(j)+1)/float64(count)
			s, c := math.Sincos(golden*float64(j) + turn[0])
			r := math.Sqrt(1 - z*z)
			u = turned(rig.Point{X: r * c, Y: r * s, Z: z}, turn[1], turn[2])
		}
		for m, p := range mics {
			start, h := delayTaps(-p.Sub(ref).Dot(u) / speed * float64(rate))
			taps := make([]float64, 2*reach+2+KernelTaps)
			for t, v := range h {
				taps[start-bank.Start+t] = v * gain
			}
			bank.Taps[m][j] = taps
		}
	})
	return bank
}

// turned returns p turned about the x axis by a, then about the z axis by b.
func turned(p rig.Point, a, b float64) rig.Point {
	s, c := math.Sincos(a)
	p.Y, p.Z = c*p.Y-s*p.Z, s*p.Y+c*p.Z
	s, c = math.Sincos(b)
	p.X, p.Y = c*p.X-s*p.Y, s*p.X+c*p.Y
	return p
}

// Diffuse is diffuse noise made ready.
type Diffuse struct {
	Bank  *Bank     // scaled to its level
	Shape []float64 // nil for white
}

// Emitter returns the noise from frame first on.
func (d *Diffuse) Emitter(seed uint64, index int) Emitter {
	in := make([]Mono, d.Bank.Inputs())
	for j := range in {
		in[j] = &Gaussian{Stream(seed, "diffuse", index<<16|j)}
		if d.Shape != nil {
			in[j] = NewFiltered(d.Shape, in[j])
		}
	}
	return NewMixer(d.Bank, in)
}

// Covariance adds the covariance at omega, radians a sample, to r[m*M+n].
func (d *Diffuse) Covariance(r []complex128, omega float64) {
	count, inputs := d.Bank.Outputs(), d.Bank.Inputs()
	shape := 1.0
	if d.Shape != nil {
		v := TapResponse(d.Shape, 0, omega)
		shape = real(v)*real(v) + imag(v)*imag(v)
	}
	h := make([]complex128, count)
	for j := range inputs {
		for m := range count {
			h[m] = d.Bank.Response(m, j, omega)
		}
		AddOuter(r, h, shape)
	}
}

// AddOuter adds power·h·hᴴ to r[m*M+n].
func AddOuter(r, h []complex128, power float64) {
	n := len(h)
	for a, x := range h {
		for b, y := range h {
			r[a*n+b] += complex(power, 0) * x * complex(real(y), -imag(y))
		}
	}
}
