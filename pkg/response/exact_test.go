package response

import (
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// exact is a transfer without filters: the textbook's weights at any frequency.
type exact struct {
	mics int
	at   func(m int, hz float64) complex128
}

func (e exact) Mics() int { return e.mics }

func (e exact) Response(dst []complex128, hz float64) []complex128 {
	dst = dst[:0]
	for m := range e.mics {
		dst = append(dst, e.at(m, hz))
	}
	return dst
}

// phasor is a·e^{jx}.
func phasor(a, x float64) complex128 {
	s, c := math.Sincos(x)
	return complex(a*c, a*s)
}

// ideal is delay-and-sum with exact delays; nil amplitudes are 1/N.
func ideal(at []rig.Point, look acoustics.Wave, c float64, amplitude []float64) Beam {
	return Beam{Mics: at, Look: look, Speed: c, Transfer: exact{len(at), func(m int, hz float64) complex128 {
		a := 1 / float64(len(at))
		if amplitude != nil {
			a = amplitude[m]
		}
		return phasor(a, 2*math.Pi*hz*look.Delay(at[m], rig.Point{}, c))
	}}}
}

// halfWave is the frequency at which the uniform lines of these tests, 50 mm
// spacing, stand half a wavelength apart at 343 m/s.
const (
	spacing  = 0.05
	halfWave = 343 / (2 * spacing)
)

// uniform is delay-and-sum on a line of n with d/λ at the frequency returned,
// steered to az degrees from the axis.
func uniform(n int, dOverLambda, az float64) (Beam, float64) {
	return ideal(line(n, spacing), plane(az), 343, nil), 2 * halfWave * dOverLambda
}

// figures predicts at one frequency along the cut of the rig.
func figures(b Beam, hz float64) Figures {
	return b.Predict(NewCut(b.Mics, b.Look.Direction(b.Reference)), []float64{hz})[0]
}

func deg(rad float64) float64 { return rad * 180 / math.Pi }

// levelAt is the response re the steered direction, dB.
func levelAt(b Beam, w acoustics.Wave, hz float64) float64 {
	return b.Pattern([]acoustics.Wave{w}, []float64{hz}).LevelDB(0, 0)
}

// tapered is delay-and-sum with a named taper on a line half a wavelength
// apart at broadside.
func tapered(t *testing.T, name string, n int) (Beam, float64) {
	t.Helper()
	taper, err := beam.ParseTaper(name)
	if err != nil {
		t.Fatal(err)
	}
	at := line(n, spacing)
	a, err := taper.Amplitudes(at)
	if err != nil {
		t.Fatal(err)
	}
	return ideal(at, plane(90), 343, a), halfWave
}

// within fails unless got is defined and near want.
func within(t *testing.T, what string, got *float64, want, tol float64) {
	t.Helper()
	if got == nil {
		t.Errorf("%s: not defined, want %g", what, want)
	} else if !(math.Abs(*got-want) <= tol) {
		t.Errorf("%s: %.6f, want %.6f within %g", what, *got, want, tol)
	}
}

// degrees returns an angle in degrees, nil for nil.
func degrees(rad *float64) *float64 {
	if rad == nil {
		return nil
	}
	d := deg(*rad)
	return &d
}
