package bearing

import (
	"math"
	"math/cmplx"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// The side lobes of the window, summed up directly, for tones anywhere between
// two lines: the envelope is never below them nor 1 dB above the highest
// (Harris 1978: the lobes of a Hann window fall by 18 dB an octave).
func TestLeakIsTheEnvelopeOfHannSideLobes(t *testing.T) {
	const size = 1024
	line := func(tone, k float64) float64 {
		var sum complex128
		for i := range size {
			w := 0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/size)
			sum += complex(w, 0) * cmplx.Rect(1, 2*math.Pi*(tone-k)*float64(i)/size)
		}
		return real(sum)*real(sum) + imag(sum)*imag(sum)
	}
	for _, d := range []int{leakNear, 4, 7, 20, leakFar} {
		highest := 0.0
		for off := -0.5; off <= 0.5; off += 0.0625 {
			highest = max(highest, line(off, float64(d))/line(off, 0))
		}
		if over := 10 * math.Log10(hannLeak[d]/highest); !(over > -0.01 && over < 1) {
			t.Errorf("%d lines off: the envelope is %.2f dB above the highest side lobe, want 0 to 1", d, over)
		}
	}
}

// A machine that hums on many clean partials is heard where it stands, although
// most lines between them hold nothing but side lobes, whose phase says
// otherwise. Delays from the geometry.
func TestCleanHarmonicsAreHeardWhereTheyStand(t *testing.T) {
	const rate, frames = 48000, 48000
	mics := lineMics(6, 0.04)
	tau := acoustics.Delays(nil, acoustics.Plane{From: rig.Degrees(60, 0)}, mics, rig.Point{}, 343.2)
	for _, f0 := range []float64{220, 440} {
		b := audio.NewBlock(len(mics), frames)
		for m := range mics {
			own := white(frames, uint64(m+1))
			for i := range frames {
				at := float64(i)/rate - tau[m]
				x := 1e-4 * own[i]
				for h := 1.0; h < 20; h++ {
					x += 0.05 / h * math.Sin(2*math.Pi*f0*h*at+h*h)
				}
				b.Channel(m)[i] = float32(x)
			}
		}
		r := find(t, mics, rate, b, Options{Speed: 343.2})
		if len(r.Sources) != 1 || !(math.Abs(r.Sources[0].Direction.AzimuthDeg()-60) < 1) {
			for _, s := range r.Sources {
				t.Logf("%.1f° ± %.1f°", s.Direction.AzimuthDeg(), s.StandardError*180/math.Pi)
			}
			t.Errorf("partials of %g Hz: %d sources, want one at 60° (1° off at most)", f0, len(r.Sources))
		}
	}
}

// Four microphones in no plane, one of them a few centimetres out of that of the
// others: a point 0.3 m away explains the delays of this far source exactly
// (Schmidt 1972: range differences of four receivers meet in two points).
func TestFourMicrophonesInNoPlaneTakeAFarSourceAsFar(t *testing.T) {
	const rate, frames = 44100, 44100
	mics := []rig.Point{
		{X: 0.727843, Y: -0.132359, Z: 0.279876}, {X: 0.748236, Y: -0.144444, Z: 0.310422},
		{X: 0.839729, Y: -0.296176, Z: 0.451321}, {X: 0.885324, Y: -0.173920, Z: 0.350911},
	}
	m := newMixture(mics, rate, frames).plane(white(frames, 3), rig.Degrees(46.5, 0), 1).noise(0.1, 4)
	r := find(t, mics, rate, m.block(), Options{})
	if len(r.Sources) != 1 {
		t.Fatalf("%d sources, want 1", len(r.Sources))
	}
	if d := r.Sources[0].Direction; math.Abs(d.AzimuthDeg()-46.5) > 1 || math.Abs(d.ElevationDeg()) > 1 {
		t.Errorf("%.1f°, %.1f°, want 46.5°, 0°", d.AzimuthDeg(), d.ElevationDeg())
	}
}
