package response

import (
	"math"
	"testing"

	"alidade/pkg/rig"
)

// A12: Van Trees 2002, section 2.4 (from memory): largest spacing without
// grating lobes, d/λ = 1/(1+|cos θ0|).
func TestGratingLimitOfUniformLines(t *testing.T) {
	for deg, want := range map[float64]float64{90: 1, 75: 0.7943954, 60: 0.6666667, 45: 0.5857864, 30: 0.5358984, 0: 0.5, 120: 0.6666667} {
		hz, ok := GratingLimit(line(8, 0.05), rig.Degrees(deg, 0), 343, 48000)
		if got := 0.05 * hz / 343; !ok || math.Abs(got-want) > 1e-6 {
			t.Errorf("steered to %g°: d/λ %.7f, want %.7f", deg, got, want)
		}
	}
}

// A14: 24 microphones 42 mm apart steered to 52 degrees, c = 343 m/s: the first
// grating lobe comes in at 5054.689 Hz.
func TestGratingLimitOfTwentyFour(t *testing.T) {
	hz, ok := GratingLimit(line(24, 0.042), rig.Degrees(52, 0), 343, 24000)
	if !ok || math.Abs(hz-5054.689) > 1e-3 {
		t.Errorf("grating limit %.4f Hz, %v, want 5054.689", hz, ok)
	}
	if _, ok := GratingLimit(line(24, 0.042), rig.Degrees(52, 0), 343, 5000); ok {
		t.Error("a grating lobe below 5000 Hz")
	}
}

// A grid is a product of lines (pattern multiplication, Balanis ch. 6): its
// grating lobes are those of its lines. The search counts a lobe from half its
// power on, so it comes before the closed form, by the half-power width at
// most.
func TestGratingSearchOnAGrid(t *testing.T) {
	const d, c = 0.04, 343.0
	var at []rig.Point
	for i := range 36 {
		at = append(at, rig.Point{X: d * float64(i%6), Y: d * float64(i/6)})
	}
	// In the plane along x: the line of columns at endfire, c/(2d). Half power
	// of six elements is at 0.886/6 of the period.
	peak := c / (2 * d)
	hz, ok := GratingLimit(at, rig.Degrees(0, 0), c, 24000)
	if !ok || hz > peak*1.01 || hz < peak*(1-0.886/2/6)*0.98 {
		t.Errorf("endfire: %.0f Hz, want from %.0f to %.0f", hz, peak*(1-0.886/2/6), peak)
	}
	// Straight up: c/d, the lobe comes in along x and y at the same time.
	peak = c / d
	hz, ok = GratingLimit(at, rig.Degrees(0, 90), c, 24000)
	if !ok || hz > peak*1.01 || hz < peak*(1-0.886/2/6)*0.98 {
		t.Errorf("straight up: %.0f Hz, want from %.0f to %.0f", hz, peak*(1-0.886/2/6), peak)
	}
}

func TestGratingSearchAgreesWithABruteForceGrid(t *testing.T) {
	at := []rig.Point{{X: -0.11}, {X: -0.05}, {X: 0.01, Y: 0.09}, {X: 0.12, Y: -0.02}, {X: 0.03, Y: 0.04, Z: 0.07}}
	u0 := rig.Degrees(33, 12)
	hz, ok := GratingLimit(at, u0, 343, 12000)
	// Plain search: at every frequency every direction of a fine raster; the
	// power above one half outside the region joined to the steered direction
	// along the line in wave number space.
	want := math.Inf(1)
	for az := -180.0; az < 180; az += 2 {
		for el := -90.0; el <= 90; el += 2 {
			v := rig.Degrees(az, el).Unit().Sub(u0.Unit())
			left := false
			for f := 5.0; f < math.Min(want, 12000); f += 5 {
				var re, im float64
				for _, p := range at {
					s, c := math.Sincos(2 * math.Pi * f / 343 * p.Dot(v))
					re, im = re+c/5, im+s/5
				}
				p := re*re + im*im
				left = left || p < 0.25
				if left && p >= 0.5 {
					want = f
				}
			}
		}
	}
	if ok != !math.IsInf(want, 1) || ok && math.Abs(hz-want) > 0.015*want {
		t.Errorf("search %.0f Hz (%v), brute force %.0f Hz", hz, ok, want)
	}
}

func TestGratingLimitOfRigsWithout(t *testing.T) {
	if _, ok := GratingLimit([]rig.Point{{X: 1}}, rig.Degrees(0, 0), 343, 48000); ok {
		t.Error("one microphone has a grating lobe")
	}
	if _, ok := GratingLimit(ring(8, 0.06), rig.Degrees(20, 0), 343, 2000); ok {
		t.Error("a ring of radius 60 mm has a grating lobe below 2 kHz")
	}
	if _, ok := GratingLimit(ring(8, 0), rig.Degrees(20, 0), 343, 20000); ok {
		t.Error("eight microphones in one place have a grating lobe")
	}
}
