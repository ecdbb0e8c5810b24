package beam

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Superdirective has the largest gain in spherically isotropic noise that its
// floor on white noise gain allows [Cox 1986]: R is the coherence
// sin(kd)/(kd). With Nulls it is subject to zeros in their directions as well.
type Superdirective struct {
	FloorDB float64 // white noise gain, dB; 0 keeps sensor noise as it is, -Inf is no floor
	Nulls   []acoustics.Wave
}

var _ Design = Superdirective{}

// Weights implements Design. It returns an error for a task with faults, fewer
// than two microphones, more constraints than microphones, a floor above what
// the microphones can reach, and nulls that no frequency can hold.
func (d Superdirective) Weights(t Task) (*Weights, error) {
	o := optimum{name: "superdirective", task: t, nulls: d.Nulls, model: func(b *binJob) { diffuse(b.r, t, t.Hz(b.k)) }}
	return o.weights(d.FloorDB)
}

// diffuse fills r with the coherence of spherically isotropic noise.
func diffuse(r []complex128, t Task, hz float64) {
	for m, p := range t.Mics {
		for n, q := range t.Mics {
			r[m*len(t.Mics)+n] = complex(acoustics.DiffuseCoherence(p.Distance(q), hz, t.Speed), 0)
		}
	}
}

// MVDR lets through the least noise of a measured covariance [Capon 1969]; the
// loading that its floor on white noise gain asks for makes it robust [Cox
// 1987]. With Nulls it is the linearly constrained minimum variance beam of
// [Frost 1972], solved bin by bin. A microphone that hears nothing would get all
// the weight: leave it out (see Covariance.Powers).
type MVDR struct {
	Noise   *Covariance // of noise alone, with the rate, microphones and transform of the task
	FloorDB float64     // white noise gain, dB; -Inf is no floor
	Nulls   []acoustics.Wave
}

var _ Design = MVDR{}

// Weights implements Design. Besides the errors of Superdirective it returns
// one for a covariance that is absent, of another shape, or of fewer frames
// than microphones.
func (d MVDR) Weights(t Task) (*Weights, error) {
	const name = "minimum-variance"
	if d.Noise == nil || d.Noise.Frames() == 0 {
		return nil, fmt.Errorf("beam: %s: no noise to find the weights from", name)
	}
	if n := d.Noise; n.mics != len(t.Mics) || n.size != t.FFTSize || n.rate != t.Rate {
		return nil, fmt.Errorf("beam: %s: covariance of %d microphones at %d Hz in %d points for a task of %d at %d in %d", name, n.mics, n.rate, n.size, len(t.Mics), t.Rate, t.FFTSize)
	}
	if d.Noise.Frames() < len(t.Mics) {
		return nil, fmt.Errorf("beam: %s: %d frames of noise for %d microphones: want at least as many frames, %.2f s of noise", name, d.Noise.Frames(), len(t.Mics), float64(t.FFTSize*(len(t.Mics)+1))/2/float64(t.Rate))
	}
	o := optimum{name: name, task: t, nulls: d.Nulls, model: func(b *binJob) { d.Noise.Matrix(b.r, b.k) }}
	return o.weights(d.FloorDB)
}

// LCMV is delay-and-sum with zeros in the directions of Nulls: the weights
// closest to those of Tapered that fulfil the constraints [Frost 1972], in
// spatially white noise.
type LCMV struct {
	Taper   Taper
	FloorDB float64 // white noise gain, dB; -Inf is no floor
	Nulls   []acoustics.Wave
}

var _ Design = LCMV{}

// Weights implements Design, with the errors of Superdirective and of Tapered.
func (d LCMV) Weights(t Task) (*Weights, error) {
	t.UndoSpreading = true
	plain, err := Tapered{d.Taper}.Weights(t)
	if err != nil {
		return nil, err
	}
	o := optimum{name: "linearly constrained", task: t, nulls: d.Nulls, model: func(b *binJob) {
		clear(b.r)
		for m := range b.mics {
			b.r[m*b.mics+m] = 1
		}
		copy(b.p, plain.Bin(b.k))
	}}
	w, err := o.weights(d.FloorDB)
	if err == nil {
		copy(w.rest, plain.rest)
	}
	return w, err
}

// ConstantBeamwidth keeps at every frequency, in the mean square over the
// sphere, the pattern that Tapered has at FromHz [Parra 2006]: with d(u) the
// steering vector of direction u and B(u) that pattern, it minimises
// ∫|wᴴd(u) - B(u)|²du, whose matrix is sin(kd)/(kd) and whose right side has a
// closed form, subject to no distortion in the steered direction and the floor
// on white noise gain. Below about half FromHz the floor lets the beam widen;
// above the grating limit no rig can keep it.
type ConstantBeamwidth struct {
	Taper   Taper
	FromHz  float64 // 0 is the frequency at which the rig is two wavelengths wide
	FloorDB float64 // white noise gain, dB; -Inf is no floor
}

var _ Design = ConstantBeamwidth{}

// Weights implements Design, with the errors of Superdirective and of Tapered,
// and one for a FromHz outside of 0 to Nyquist.
func (d ConstantBeamwidth) Weights(t Task) (*Weights, error) {
	const name = "constant-beamwidth"
	if err := t.Validate(); err != nil {
		return nil, err
	}
	a, err := d.Taper.Amplitudes(t.Mics)
	if err != nil {
		return nil, err
	}
	from := d.FromHz
	extent := rig.Spread(t.Mics).Extent
	if from == 0 && extent > 0 {
		from = math.Min(2*t.Speed/extent, 0.4*float64(t.Rate))
	}
	if extent > 0 && !(from > 0 && from <= float64(t.Rate)/2) {
		return nil, fmt.Errorf("beam: %s: pattern of %g Hz at %d frames per second: want a frequency up to Nyquist", name, from, t.Rate)
	}
	k0 := 2 * math.Pi * from / t.Speed
	u0 := t.Look.Direction(t.Reference).Unit()
	o := optimum{name: name, task: t, model: func(b *binJob) {
		hz := t.Hz(b.k)
		diffuse(b.r, t, hz)
		k := 2 * math.Pi * hz / t.Speed
		// ∫ d_n(u) B*(u) du = Σ_m a_m e^{jk0 u0·p_m} sinc(|k p_n - k0 p_m|).
		for n, q := range t.Mics {
			for m, p := range t.Mics {
				p0 := p.Sub(t.Reference).Scale(k0)
				x := q.Sub(t.Reference).Scale(k).Sub(p0).Norm()
				v := a[m]
				if x > 1e-8 {
					v *= math.Sin(x) / x
				}
				s, c := math.Sincos(u0.Dot(p0))
				b.p[n] += complex(v*c, v*s)
			}
		}
	}}
	return o.weights(d.FloorDB)
}
