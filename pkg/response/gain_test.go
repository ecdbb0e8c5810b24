package response

import (
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// line returns n microphones d metres apart along x, centred on the origin.
func line(n int, d float64) []rig.Point {
	at := make([]rig.Point, n)
	for m := range at {
		at[m].X = (float64(m) - float64(n-1)/2) * d
	}
	return at
}

// ring returns n microphones on a circle of radius r metres in the horizontal
// plane.
func ring(n int, r float64) []rig.Point {
	at := make([]rig.Point, n)
	for m := range at {
		s, c := math.Sincos(2 * math.Pi * float64(m) / float64(n))
		at[m] = rig.Point{X: r * c, Y: r * s}
	}
	return at
}

// plane returns a plane wave from azimuth az degrees in the horizontal plane.
func plane(az float64) acoustics.Plane { return acoustics.Plane{From: rig.Degrees(az, 0)} }

// delaySum returns delay-and-sum filters of 128 taps a microphone, a
// Blackman-weighted sinc, made here so that the package under test meets
// filters it knows nothing about. a nil amplitude is 1/M.
func delaySum(at []rig.Point, look acoustics.Wave, c float64, rate int, amplitude []float64) *beam.Filters {
	f := &beam.Filters{Rate: rate}
	const half = 64
	for m, p := range at {
		a := 1 / float64(len(at))
		if amplitude != nil {
			a = amplitude[m]
		}
		shift := -look.Delay(p, rig.Point{}, c) * float64(rate) // frames
		first := int(math.Floor(shift)) - half + 1
		h := make([]float64, 2*half)
		for t := range h {
			x := float64(first+t) - shift
			w := 0.42 + 0.5*math.Cos(math.Pi*x/half) + 0.08*math.Cos(2*math.Pi*x/half)
			if x != 0 {
				w *= math.Sin(math.Pi*x) / (math.Pi * x)
			}
			h[t] = a * w
		}
		f.H = append(f.H, h)
		f.Start = append(f.Start, first)
	}
	return f
}

// A21: Van Trees 2002, section 2.6.3 (from memory): uniform weights gain
// 10 log10 N in white noise.
func TestWhiteGainOfUniformWeights(t *testing.T) {
	want := map[int]float64{2: 3.0103, 4: 6.0206, 8: 9.0309, 16: 12.0412, 32: 15.0515, 64: 18.0618}
	for _, n := range []int{2, 4, 8, 16, 32, 64} {
		at, look := line(n, 0.03), plane(47)
		white, _, target := BandGains(delaySum(at, look, 343, 48000, nil), at, look, rig.Point{}, 343, 891, 1122)
		if math.Abs(white-want[n]) > 1e-4 || math.Abs(target) > 1e-4 {
			t.Errorf("%d microphones: white %.5f dB, want %.4f; target change %.6f dB, want 0", n, white, want[n], target)
		}
	}
}

// L11: the gain in spherically isotropic noise is the directivity index (A17):
// N = 4, d = 0.05 m, broadside, c = 343 m/s. Bands of 0.2 Hz stand for the
// single frequencies of the check.
func TestDiffuseGainIsTheDirectivityIndex(t *testing.T) {
	at, look := line(4, 0.05), plane(90)
	f := delaySum(at, look, 343, 48000, nil)
	for hz, want := range map[float64]float64{500: 0.3728174, 1000: 1.402414, 2000: 4.005221, 3430: 6.0206} {
		_, got, _ := BandGains(f, at, look, rig.Point{}, 343, hz-0.1, hz+0.1)
		if math.Abs(got-want) > 1e-4 {
			t.Errorf("%g Hz: diffuse gain %.6f dB, want %.6f", hz, got, want)
		}
	}
}

// The mean over a band, against the mean of many single frequencies in the
// closed form of A17 (Van Trees 2002, section 2.6).
func TestBandGainsAverageThePower(t *testing.T) {
	const n, d, c, az = 8, 0.04, 343.0, 50.0
	at, look := line(n, d), plane(az)
	f := delaySum(at, look, c, 48000, nil)
	for _, band := range [][2]float64{{112, 141}, {1778, 2239}, {3548, 4467}, {8913, 11220}} {
		var mean float64
		const points = 4001
		for i := range points {
			hz := band[0] + (band[1]-band[0])*(float64(i)+0.5)/points
			k := 2 * math.Pi * hz / c
			s := 1.0
			for m := 1; m < n; m++ {
				x := k * float64(m) * d
				s += 2 / float64(n) * float64(n-m) * math.Sin(x) / x * math.Cos(x*math.Cos(az*math.Pi/180))
			}
			mean += s / n / points
		}
		_, got, _ := BandGains(f, at, look, rig.Point{}, c, band[0], band[1])
		if want := -10 * math.Log10(mean); math.Abs(got-want) > 2e-3 {
			t.Errorf("%v Hz: diffuse gain %.5f dB, want %.5f", band, got, want)
		}
	}
}

// L1: two microphones 0.1 m apart steered to 90 degrees, a tone from another
// direction, |cos[(kd/2)(cos ph - cos ph0)]|; elementary.
func TestTargetChangeOfAWaveFromElsewhere(t *testing.T) {
	at := line(2, 0.1)
	f := delaySum(at, plane(90), 343, 48000, nil)
	for _, v := range []struct{ hz, az, want float64 }{
		{500, 0, -0.9445664}, {1000, 0, -4.306739}, {1000, 45, -1.965349}, {1697.85, 0, -36.07796}, {2000, 30, -36.12834},
	} {
		_, _, got := BandGains(f, at, plane(v.az), rig.Point{}, 343, v.hz-1e-3, v.hz+1e-3)
		if math.Abs(got-v.want) > 1e-3 {
			t.Errorf("%g Hz from %g°: %.5f dB, want %.5f", v.hz, v.az, got, v.want)
		}
	}
}

// A plane wave of the right direction loses a near source, and a spherical
// wave with equal amplitudes keeps it but for the unequal levels: the loss is
// that of the mean amplitude against the root mean square (Cauchy-Schwarz).
func TestNearSourceLosesInAPlaneWaveBeam(t *testing.T) {
	at := line(8, 0.08)
	source := acoustics.Spherical{At: rig.Point{X: 0.2, Y: 0.8}}
	toward := acoustics.Plane{From: source.Direction(rig.Point{})}
	var mean, square float64
	for _, p := range at {
		g := source.Spreading(p, rig.Point{})
		mean += g / 8
		square += g * g / 8
	}
	_, _, near := BandGains(delaySum(at, source, 343, 48000, nil), at, source, rig.Point{}, 343, 3548, 4467)
	if want := 10 * math.Log10(mean*mean/square); math.Abs(near-want) > 1e-4 || want > -0.01 {
		t.Errorf("steered to the point: target change %.5f dB, want %.5f", near, want)
	}
	_, _, far := BandGains(delaySum(at, toward, 343, 48000, nil), at, source, rig.Point{}, 343, 3548, 4467)
	if !(far < near-1) {
		t.Errorf("steered to the direction: target change %.3f dB, want well below %.3f", far, near)
	}
}

func TestBandGainsOfSilentFilters(t *testing.T) {
	at := line(3, 0.1)
	f := &beam.Filters{Rate: 48000, Start: []int{0, 0, 0}, H: [][]float64{{0}, {0}, {0}}}
	white, diffuse, target := BandGains(f, at, plane(0), rig.Point{}, 343, 900, 1100)
	if !math.IsInf(white, 1) || !math.IsInf(diffuse, 1) || !math.IsInf(target, -1) {
		t.Errorf("silent filters: %g, %g, %g dB, want +Inf, +Inf, -Inf", white, diffuse, target)
	}
}

func TestBandGainsPanicsOnMismatch(t *testing.T) {
	at := line(3, 0.1)
	f := delaySum(at, plane(0), 343, 48000, nil)
	for name, call := range map[string]func(){
		"two microphones": func() { BandGains(f, at[:2], plane(0), rig.Point{}, 343, 900, 1100) },
		"empty band":      func() { BandGains(f, at, plane(0), rig.Point{}, 343, 900, 900) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			call()
		}()
	}
}
