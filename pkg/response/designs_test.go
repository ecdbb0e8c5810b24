package response

import (
	"fmt"
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// design returns the filters of a design, looking to az.
func design(t *testing.T, d beam.Design, at []rig.Point, look acoustics.Wave, size int) *beam.Filters {
	t.Helper()
	w, err := d.Weights(beam.Task{Mics: at, Look: look, Speed: 343, Rate: 48000, FFTSize: size})
	if err != nil {
		t.Fatal(err)
	}
	f, fit, err := w.Filters(0)
	if err != nil {
		t.Fatal(err)
	}
	if fit.ConstraintDB > -100 {
		t.Errorf("constraint off by %.1f dB", fit.ConstraintDB)
	}
	return f
}

// thirdOctave returns the edges of the base-ten one-third octave of index x:
// 10^(x/10) kHz · 10^(∓1/20) (IEC 61260-1:2014, formulas 2, 4 and 5).
func thirdOctave(x int) (low, high float64) {
	mid := 1000 * math.Pow(10, float64(x)/10)
	return mid * math.Pow(10, -0.05), mid * math.Pow(10, 0.05)
}

// Superdirective filters as built against delay-and-sum in diffuse noise, floor
// 0 dB: at least 4 dB more in every one-third octave from 250 to 1000 Hz for a
// ring of 8 of radius 60 mm in its plane and a line of 8 × 40 mm at end-fire.
// The broadside line is shown, whatever it is: there a line has next to nothing
// to gain. White noise never rises above the floor.
func TestSuperdirectiveGainOverDelayAndSum(t *testing.T) {
	for _, v := range []struct {
		name string
		at   []rig.Point
		look acoustics.Wave
		want float64 // dB over delay-and-sum
	}{
		{"ring of 8, 60 mm, in its plane", ring(8, 0.06), plane(0), 4},
		{"ring of 8, 60 mm, between two microphones", ring(8, 0.06), plane(22.5), 4},
		{"line of 8, 40 mm, end-fire", line(8, 0.04), plane(0), 4},
		{"line of 8, 40 mm, broadside", line(8, 0.04), plane(90), 0},
	} {
		f := design(t, beam.Superdirective{FloorDB: 0}, v.at, v.look, 2048)
		plain := design(t, beam.Tapered{}, v.at, v.look, 2048)
		row := ""
		for x := -6; x <= 0; x++ {
			low, high := thirdOctave(x)
			white, got, target := BandGains(f, v.at, v.look, rig.Point{}, 343, low, high)
			_, before, _ := BandGains(plain, v.at, v.look, rig.Point{}, 343, low, high)
			row += fmt.Sprintf(" %.0f Hz %.2f+%.2f", math.Sqrt(low*high), before, got-before)
			if got-before < v.want {
				t.Errorf("%s, %.0f Hz: %.2f dB more than delay-and-sum, want %.1f", v.name, math.Sqrt(low*high), got-before, v.want)
			}
			if white < 0 || math.Abs(target) > 1e-3 {
				t.Errorf("%s, %.0f Hz: white noise reduced by %.3f dB, target changed by %.5f dB", v.name, math.Sqrt(low*high), white, target)
			}
		}
		t.Logf("%s:%s dB", v.name, row)
	}
}

// The figures of filters as built are those of the exact weights: a beam
// steered by filters shows the same widths, lobes and gains.
func TestBuiltFiltersHaveTheFiguresOfTheirWeights(t *testing.T) {
	at, look := line(8, spacing), plane(70)
	f := design(t, beam.Tapered{}, at, look, 512)
	built := Beam{Transfer: f, Mics: at, Look: look, Speed: 343}
	want := ideal(at, look, 343, nil)
	cut := NewCut(at, look.From)
	frequencies := []float64{500, 2000, 3430, 5000, 9000}
	a, b := built.Predict(cut, frequencies), want.Predict(cut, frequencies)
	for i, hz := range frequencies {
		if (a[i].Beamwidth == nil) != (b[i].Beamwidth == nil) || len(a[i].SideLobes) != len(b[i].SideLobes) || len(a[i].GratingLobes) != len(b[i].GratingLobes) || a[i].Hz != hz {
			t.Fatalf("%g Hz: built %+v, exact %+v", hz, a[i], b[i])
		}
		if a[i].Beamwidth != nil && math.Abs(deg(*a[i].Beamwidth-*b[i].Beamwidth)) > 0.01 {
			t.Errorf("%g Hz: width %.5f°, want %.5f", hz, deg(*a[i].Beamwidth), deg(*b[i].Beamwidth))
		}
		for k := range a[i].SideLobes {
			if math.Abs(a[i].SideLobes[k].LevelDB-b[i].SideLobes[k].LevelDB) > 0.01 || math.Abs(deg(a[i].SideLobes[k].Angle-b[i].SideLobes[k].Angle)) > 0.01 {
				t.Errorf("%g Hz: side lobe %+v, want %+v", hz, a[i].SideLobes[k], b[i].SideLobes[k])
			}
		}
		if math.Abs(a[i].DirectivityIndexDB-b[i].DirectivityIndexDB) > 1e-4 || math.Abs(a[i].WhiteNoiseGainDB-b[i].WhiteNoiseGainDB) > 1e-4 {
			t.Errorf("%g Hz: gains %+v, want %+v", hz, a[i], b[i])
		}
	}
}

// A steering error of 5 degrees with 0.5 dB and 5 degrees of channel errors
// does not make a floor of 0 dB hear the target worse than 3 dB down, in any
// band in which the rig does not alias: what the floor is for.
func TestFloorBoundsWhatErrorsCost(t *testing.T) {
	at := ring(8, 0.06)
	f := design(t, beam.Superdirective{FloorDB: 0}, at, plane(5), 2048)
	b := Beam{Transfer: f, Mics: at, Look: plane(5), Speed: 343}
	e := Errors{Gain: 0.5 / 8.686, PhaseRad: 5 * math.Pi / 180}
	for _, hz := range []float64{125, 250, 500, 1000, 2000, 4000} {
		levels, err := b.Trials(e, []acoustics.Wave{plane(0)}, hz, 500, 5)
		if err != nil {
			t.Fatal(err)
		}
		if got := Percentile(levels[0], 1); got < -3 {
			t.Errorf("%g Hz: target down to %.2f dB in one trial of a hundred", hz, got)
		}
	}
}
