package response

import (
	"fmt"
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// L3: Gilbert & Morgan 1955, Ruze 1952, Van Trees 2002, section 2.6.3: floor of
// uniform lines with independent errors of gain and phase, re the main lobe,
// at an exact null. L4: the same by seeded trials.
func TestFloorOfChannelErrors(t *testing.T) {
	for _, v := range []struct {
		n                   int
		gain, phase, want   float64
		trials              int
		monteCarloTolerance float64
	}{
		{32, 0.122, 5, -31.5023, 6000, 0.15}, {8, 0.05, 2, -33.32283, 6000, 0.15}, {32, 0.01, 1, -48.98023, 0, 0},
	} {
		b, hz := uniform(v.n, 0.5, 90)
		null := acoustics.Plane{From: NewCut(b.Mics, b.Look.Direction(b.Reference)).Toward(math.Acos(2 / float64(v.n)))}
		e := Errors{Gain: v.gain, PhaseRad: v.phase * math.Pi / 180}
		mainLobe := math.Exp(-e.PhaseRad * e.PhaseRad) // the mean pattern's own loss
		if got := decibels(b.Expected(e, null, hz) / mainLobe); math.Abs(got-v.want) > 1e-3 {
			t.Errorf("N = %d: floor %.5f dB, want %.5f", v.n, got, v.want)
		}
		if v.trials == 0 {
			continue
		}
		levels, err := b.Trials(e, []acoustics.Wave{null}, hz, v.trials, 1)
		if err != nil {
			t.Fatal(err)
		}
		mean := 0.0
		for _, l := range levels[0] {
			mean += math.Pow(10, l/10) / float64(v.trials)
		}
		if got := decibels(mean); math.Abs(got-v.want) > v.monteCarloTolerance {
			t.Errorf("N = %d: mean of %d trials %.3f dB, want %.3f", v.n, v.trials, got, v.want)
		}
		// The floor's power is exponentially distributed: its median lies at ln 2
		// of the mean.
		if got := Percentile(levels[0], 50); math.Abs(got-(v.want+decibels(math.Ln2))) > 0.35 {
			t.Errorf("N = %d: median %.3f dB, want %.3f", v.n, got, v.want+decibels(math.Ln2))
		}
	}
}

// L5: the floor of any design is s²/WNG: weights with a white noise gain of -20
// dB and errors of 1 % leave -20 dB; Gilbert & Morgan 1955, Cox et al. 1987.
func TestFloorOfDesignsIsErrorOverWhiteNoiseGain(t *testing.T) {
	// A pair at end-fire with wᴴw = 100 and no response from the side.
	b, hz := uniform(2, 0.25, 90)
	b.Transfer = exact{2, func(m int, _ float64) complex128 { return complex(math.Sqrt(50)*float64(1-2*m), 0) }}
	if got := decibels(b.Expected(Errors{Gain: 0.01}, plane(90), hz)); math.Abs(got+20) > 1e-9 {
		t.Errorf("floor %.6f dB, want -20", got)
	}
}

// L6: loss of the main lobe from phase errors, 4.343 σ² dB for 5, 10, 20
// degrees; Ruze 1952. L7: a placement error of σ makes a phase error of kσ.
func TestMainLobeLossOfPhaseErrors(t *testing.T) {
	b, hz := uniform(2000, 0.5, 90) // so many that the floor does not count
	for phase, want := range map[float64]float64{5: -0.03307342, 10: -0.1322937, 20: -0.5291747} {
		e := Errors{PhaseRad: phase * math.Pi / 180}
		keep := b.Expected(e, b.Look, hz) - (1-math.Exp(-e.PhaseRad*e.PhaseRad))/2000
		if got := decibels(keep); math.Abs(got-want) > 1e-4 {
			t.Errorf("%g°: %.6f dB, want %.6f", phase, got, want)
		}
	}
	for mm, want := range map[float64][3]float64{1: {1.049563, 4.198251, 8.396501}, 2: {2.099125, 8.396501, 16.793}, 5: {5.247813, 20.99125, 41.98251}} {
		for i, khz := range []float64{1, 4, 8} {
			e := Errors{PlacementM: mm / 1000}
			if got := deg(math.Sqrt(e.phase(1000*khz, 343))); math.Abs(got-want[i]) > 1e-3 {
				t.Errorf("%g mm at %g kHz: %.5f°, want %.5f", mm, khz, got, want[i])
			}
		}
	}
}

// L2: null of two microphones under mismatch of gain (dB) and phase (degrees),
// re one microphone and re their sum; elementary, e.g. Elko 2000.
func TestNullUnderMismatch(t *testing.T) {
	for _, v := range []struct{ db, phase, one, sum float64 }{
		{0.1, 1, -33.54361, -39.61435}, {0.5, 3, -21.92848, -28.20267}, {1, 5, -16.3027, -22.83768},
		{0, 1, -35.16256, -41.18316}, {0.5, 0, -24.54569, -30.81988}, {0.05, 0.5, -39.58916, -45.6348},
	} {
		g := math.Pow(10, v.db/20)
		b, _ := uniform(2, 0.5, 90)
		b.Transfer = exact{2, func(m int, _ float64) complex128 {
			if m == 0 {
				return 1
			}
			return phasor(-g, v.phase*math.Pi/180)
		}}
		one := decibels(power(b.To(plane(90), 1000)))
		sum := one - decibels((1+g)*(1+g)) // in phase
		if math.Abs(one-v.one) > 1e-3 || math.Abs(sum-v.sum) > 1e-3 {
			t.Errorf("%+v: %.5f and %.5f dB", v, one, sum)
		}
	}
}

// Trials and closed form agree with placement errors and off the null, and a
// wrong air temperature turns the beam without spoiling it: L9's geometry,
// cos θ' = cos θ·c/c'.
func TestTrialsAgreeWithTheClosedForm(t *testing.T) {
	b := ideal(ring(8, 0.06), plane(30), 343, nil)
	e := Errors{Gain: 0.06, PhaseRad: 0.05, PlacementM: 0.002}
	waves := []acoustics.Wave{plane(30), plane(120), acoustics.Spherical{At: rig.Point{X: 0.3, Y: -0.4, Z: 0.1}}}
	levels, err := b.Trials(e, waves, 3000, 4000, 7)
	if err != nil {
		t.Fatal(err)
	}
	for d, w := range waves {
		mean := 0.0
		for _, l := range levels[d] {
			mean += math.Pow(10, l/10) / float64(len(levels[d]))
		}
		want := decibels(b.Expected(e, w, 3000))
		if got := decibels(mean); math.Abs(got-want) > 0.12 {
			t.Errorf("wave %d: mean of the trials %.3f dB, closed form %.3f", d, got, want)
		}
		if p := [3]float64{Percentile(levels[d], 5), Percentile(levels[d], 50), Percentile(levels[d], 95)}; !(p[0] < p[1] && p[1] < p[2]) {
			t.Errorf("wave %d: percentiles %v", d, p)
		}
	}
	again, err := b.Trials(e, waves, 3000, 4000, 7)
	if err != nil || fmt.Sprint(again) != fmt.Sprint(levels) {
		t.Errorf("the same seed gives other levels (%v)", err)
	}
	other, err := b.Trials(e, waves, 3000, 4000, 8)
	if err != nil || fmt.Sprint(other) == fmt.Sprint(levels) {
		t.Errorf("another seed gives the same levels (%v)", err)
	}
	// Air alone, for a line at 60 degrees: the loss is that of the phases that
	// delays for 343 m/s leave.
	line := ideal(line(16, 0.08), plane(60), 343, nil)
	warm, err := line.Trials(Errors{TemperatureC: 10}, []acoustics.Wave{plane(60)}, 4000, 500, 3)
	if err != nil {
		t.Fatal(err)
	}
	// One standard deviation of 10 °C is 1.7 % of speed, either way: the 68th
	// percentile of the loss.
	moved := line
	moved.Speed = 343 * math.Sqrt(1+10/293.15)
	want := decibels(power(moved.To(plane(60), 4000)))
	if got := Percentile(warm[0], 32); math.Abs(got-want) > 0.15*math.Abs(want) {
		t.Errorf("10 °C: loss at one standard deviation %.3f dB, want %.3f", got, want)
	}
}

func TestTrialsRefuse(t *testing.T) {
	b, hz := uniform(2, 0.5, 90)
	for _, v := range []struct {
		e Errors
		n int
	}{{Errors{}, 0}, {Errors{}, 1 << 30}, {Errors{Gain: -1}, 5}, {Errors{PhaseRad: math.NaN()}, 5}, {Errors{PlacementM: math.Inf(1)}, 5}} {
		if _, err := b.Trials(v.e, []acoustics.Wave{plane(0)}, hz, v.n, 1); err == nil {
			t.Errorf("%+v: no error", v)
		}
	}
}

func TestPercentile(t *testing.T) {
	x := []float64{1, 2, 4, 8}
	for p, want := range map[float64]float64{-5: 1, 0: 1, 50: 3, 100: 8, 120: 8, 33.333333333333336: 2} {
		if got := Percentile(x, p); math.Abs(got-want) > 1e-9 {
			t.Errorf("Percentile(%g) = %g, want %g", p, got, want)
		}
	}
	if !math.IsNaN(Percentile(nil, 50)) {
		t.Error("percentile of nothing is a number")
	}
}
