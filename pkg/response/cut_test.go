package response

import (
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// A beam steered to a point is followed along sources as far away as the point,
// so that the steered one is heard at 0 dB and the cut goes through it.
func TestNearBeamIsFollowedAtItsDistance(t *testing.T) {
	mics := line(8, 0.05)
	at := rig.Point{X: 0.4, Y: 0.9}
	b := Beam{Mics: mics, Look: acoustics.Spherical{At: at}, Speed: 343}
	b.Transfer = delaySum(b.Mics, b.Look, 343, 48000, nil)
	metres, ok := b.CutDistance()
	if want := math.Hypot(0.4, 0.9); !ok || math.Abs(metres-want) > 1e-12 {
		t.Fatalf("distance %g m, %v, want %g", metres, ok, want)
	}
	cut := NewCut(mics, b.Look.Direction(b.Reference))
	w, isNear := b.CutWave(cut, cut.At).(acoustics.Spherical)
	if !isNear || w.At.Distance(at) > 1e-9 {
		t.Fatalf("the wave at the steered angle comes from %v, want %v", w, at)
	}
	f := b.Predict(cut, []float64{3000})[0]
	if math.Abs(f.Peak-cut.At) > 0.02 || f.Beamwidth == nil {
		t.Errorf("peak at %.3f rad, steered to %.3f, width %v", f.Peak, cut.At, f.Beamwidth)
	}
	// The half-power points are half the power of the point itself, at its
	// distance.
	for _, edge := range f.Edges {
		p := power(b.To(b.CutWave(cut, *edge), 3000)) / power(b.To(b.Look, 3000))
		if math.Abs(p-0.5) > 1e-6 {
			t.Errorf("power %.7f at an edge, want 0.5", p)
		}
	}
	// Among the microphones there is no such circle.
	b.Look = acoustics.Spherical{At: rig.Point{X: 0.12, Y: 0.02}}
	if _, ok := b.CutDistance(); ok {
		t.Error("a circle through the microphones")
	}
	if _, far := b.CutWave(cut, 1).(acoustics.Plane); !far {
		t.Error("among the microphones the cut is not for far sources")
	}
}

// A level flat rig hears the ground as it hears the sky: its steep cut ends at
// the horizon, and no image of the beam counts as a side lobe.
func TestSteepCutOfALevelRigHasNoImage(t *testing.T) {
	mics := rig.Ring(16, 0.1)
	for _, look := range []rig.Direction{rig.Degrees(20, 90), rig.Degrees(20, -70)} {
		cut := NewCut(mics, look)
		if cut.Closed || math.Abs(cut.High-cut.Low-math.Pi) > 1e-12 || cut.At < cut.Low || cut.At > cut.High {
			t.Errorf("elevation %.0f°: cut %g to %g, closed: %v", look.ElevationDeg(), cut.Low, cut.High, cut.Closed)
		}
		b := Beam{Mics: mics, Look: acoustics.Plane{From: look}, Speed: 343}
		b.Transfer = delaySum(b.Mics, b.Look, 343, 48000, nil)
		if f := b.Predict(cut, []float64{2500})[0]; f.HighestSideLobeDB != nil && *f.HighestSideLobeDB > -1 {
			t.Errorf("elevation %.0f°: side lobe of %.2f dB", look.ElevationDeg(), *f.HighestSideLobeDB)
		}
	}
	// One that stands on its edge is followed all around.
	var upright []rig.Point
	for _, p := range rig.Ring(16, 0.1) {
		upright = append(upright, rig.Point{X: p.X, Z: p.Y})
	}
	if !NewCut(upright, rig.Degrees(0, 80)).Closed {
		t.Error("the cut of an upright ring has ends")
	}
}
