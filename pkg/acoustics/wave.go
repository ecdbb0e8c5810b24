package acoustics

import (
	"math"

	"alidade/pkg/rig"
)

// Wave is a wavefront from one source.
type Wave interface {
	// Delay is the arrival time at p minus that at ref, seconds, for a speed
	// of sound in m/s.
	Delay(p, ref rig.Point, speed float64) float64
	// Spreading is the amplitude at p over that at ref in a lossless free
	// field.
	Spreading(p, ref rig.Point) float64
	// Direction is where the source lies as seen from ref.
	Direction(ref rig.Point) rig.Direction
}

// Plane is a wave from a far source in direction From.
type Plane struct{ From rig.Direction }

// Delay implements Wave: -(p - ref)·u / c with u the unit vector towards the
// source.
func (w Plane) Delay(p, ref rig.Point, speed float64) float64 {
	return -p.Sub(ref).Dot(w.From.Unit()) / speed
}

// Spreading implements Wave: 1 everywhere.
func (w Plane) Spreading(p, ref rig.Point) float64 { return 1 }

// Direction implements Wave.
func (w Plane) Direction(rig.Point) rig.Direction { return w.From }

// Spherical is a wave from a point source At, metres.
type Spherical struct{ At rig.Point }

// Delay implements Wave: (|s - p| - |s - ref|) / c.
func (w Spherical) Delay(p, ref rig.Point, speed float64) float64 {
	return (w.At.Distance(p) - w.At.Distance(ref)) / speed
}

// Spreading implements Wave: |s - ref| / |s - p|. It is +Inf at the source.
func (w Spherical) Spreading(p, ref rig.Point) float64 { return w.At.Distance(ref) / w.At.Distance(p) }

// Direction implements Wave.
func (w Spherical) Direction(ref rig.Point) rig.Direction { return rig.Toward(w.At.Sub(ref)) }

// Delays appends to dst[:0] the delay of w at each of the places at against
// ref, seconds, and returns it. dst may be nil.
func Delays(dst []float64, w Wave, at []rig.Point, ref rig.Point, speed float64) []float64 {
	dst = dst[:0]
	for _, p := range at {
		dst = append(dst, w.Delay(p, ref, speed))
	}
	return dst
}

// Steering appends to dst[:0] the transfer of w from the reference point to
// each place: spreading · e^{-j omega tau}, and returns it. omega is in rad/s;
// delays and spreading have one entry a microphone; a nil spreading is all
// ones. dst may be nil.
func Steering(dst []complex128, delays, spreading []float64, omega float64) []complex128 {
	dst = dst[:0]
	for m, tau := range delays {
		s, c := math.Sincos(-omega * tau)
		a := 1.0
		if spreading != nil {
			a = spreading[m]
		}
		dst = append(dst, complex(a*c, a*s))
	}
	return dst
}

// DiffuseCoherence is the coherence between two places that are distance
// metres apart in spherically isotropic sound at frequency hz:
// sin(kd)/(kd) with k = 2 pi hz / speed, and 1 at kd = 0.
func DiffuseCoherence(distance, hz, speed float64) float64 {
	kd := 2 * math.Pi * hz / speed * distance
	if math.Abs(kd) < 1e-8 {
		return 1
	}
	return math.Sin(kd) / kd
}
