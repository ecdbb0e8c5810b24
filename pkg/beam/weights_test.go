package beam

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// built are the filters of a design.
func built(t *testing.T, d Design, task Task, taps int) (*Weights, *Filters, Fit) {
	t.Helper()
	w, err := d.Weights(task)
	if err != nil {
		t.Fatal(err)
	}
	f, fit, err := w.Filters(taps)
	if err != nil {
		t.Fatal(err)
	}
	return w, f, fit
}

// look responds as y to a wave at hz through filters.
func look(f *Filters, task Task, w acoustics.Wave, hz float64) complex128 {
	var y complex128
	v := steering(task, w, hz)
	for m, g := range f.Response(nil, hz) {
		y += g * v[m]
	}
	return y
}

func TestFiltersOfDelayAndSumAreFractionalDelays(t *testing.T) {
	task := Task{Mics: ring(5, 0.2), Reference: rig.Point{X: 0.03, Z: 0.1}, Look: acoustics.Plane{From: rig.Degrees(37, 21)}, Speed: 341, Rate: 48000, FFTSize: 512}
	_, f, fit := built(t, Tapered{}, task, 0)
	if fit.Taps != 64 || !math.IsInf(fit.TruncationDB, -1) {
		t.Errorf("fit %+v, want the shortest filters and no truncation", fit)
	}
	for _, hz := range []float64{100, 1234.5, 9000, 19200} {
		for m, g := range f.Response(nil, hz) {
			s, c := math.Sincos(2 * math.Pi * hz * task.Look.Delay(task.Mics[m], task.Reference, task.Speed))
			if e := cmplx.Abs(g-complex(c/5, s/5)) * 5; 20*math.Log10(e) > -110 {
				t.Errorf("%g Hz, microphone %d: error %.1f dB, want below -110", hz, m+1, 20*math.Log10(e))
			}
		}
	}
}

// At the bins the built filters are the conjugate of the weights, up to what
// truncation took, between the frequencies where they fade.
func TestFiltersMatchTheWeightsAtTheBins(t *testing.T) {
	task := Task{Mics: ring(8, 0.06), Look: wave(10), Speed: testC, Rate: 48000, FFTSize: 1024}
	w, f, fit := built(t, Superdirective{FloorDB: -3}, task, 1024)
	worst := 0.0
	for k := 12; task.Hz(k) < 0.8*24000; k++ {
		g := f.Response(nil, task.Hz(k))
		for m, v := range w.Bin(k) {
			worst = math.Max(worst, cmplx.Abs(g[m]-cmplx.Conj(v)))
		}
	}
	t.Logf("largest deviation at a bin %.1f dB, truncation %.1f dB", 20*math.Log10(worst), fit.TruncationDB)
	if 20*math.Log10(worst) > -45 {
		t.Errorf("largest deviation at a bin %.1f dB, want below -45", 20*math.Log10(worst))
	}
	if !(fit.TruncationDB < -45) {
		t.Errorf("truncation %.1f dB, want below -45", fit.TruncationDB)
	}
}

// The distortionless constraint on the built filters: no window length touches
// it, for far and near sources and a reference point away from the centre.
func TestBuiltFiltersAreDistortionless(t *testing.T) {
	near := acoustics.Spherical{At: rig.Point{X: 0.3, Y: 0.5, Z: -0.1}}
	for name, design := range map[string]Design{
		"superdirective": Superdirective{FloorDB: 0},
		"with a null":    Superdirective{FloorDB: -6, Nulls: []acoustics.Wave{wave(100)}},
		"constant width": ConstantBeamwidth{FloorDB: 0},
		"constrained":    LCMV{FloorDB: -6, Nulls: []acoustics.Wave{wave(-20)}},
	} {
		for _, look0 := range []acoustics.Wave{wave(33), near} {
			for _, taps := range []int{128, 512, 1024} {
				task := Task{Mics: ring(6, 0.07), Reference: rig.Point{X: 0.02, Y: -0.01}, Look: look0, Speed: 345, Rate: 44100, FFTSize: 1024}
				_, f, fit := built(t, design, task, taps)
				if fit.ConstraintDB > -100 {
					t.Errorf("%s, %T, %d taps: constraint off by %.1f dB", name, look0, taps, fit.ConstraintDB)
				}
				// Between the bins and the check points as well.
				for _, hz := range []float64{137.7, 1011.1, 7777.7, 17001.3} {
					if e := cmplx.Abs(look(f, task, look0, hz) - 1); 20*math.Log10(e) > -95 {
						t.Errorf("%s, %T, %d taps, %g Hz: response to the look off by %.1f dB", name, look0, taps, hz, 20*math.Log10(e))
					}
				}
			}
		}
	}
}

// Spherical spreading undone makes Tapered free of distortion for a near
// source; left alone, a near source keeps its levels.
func TestTaperedUndoesSpreading(t *testing.T) {
	near := acoustics.Spherical{At: rig.Point{X: 0.1, Y: 0.3}}
	task := Task{Mics: line(6, 0.05), Look: near, Speed: 343, Rate: 48000, FFTSize: 512}
	var mean float64
	for _, p := range task.Mics {
		mean += near.Spreading(p, rig.Point{}) / 6
	}
	for undo, want := range map[bool]float64{true: 1, false: mean} {
		task.UndoSpreading = undo
		_, f, fit := built(t, Tapered{}, task, 0)
		if y := look(f, task, near, 1500); cmplx.Abs(y-complex(want, 0)) > 1e-5 {
			t.Errorf("undo %v: response %v, want %.6f", undo, y, want)
		}
		if fit.ConstraintDB > -100 {
			t.Errorf("undo %v: constraint off by %.1f dB", undo, fit.ConstraintDB)
		}
	}
	if math.Abs(mean-1) < 0.01 {
		t.Errorf("mean level %.4f: the source is too far for this test", mean)
	}
}

// White noise gain of the built filters is above the floor at every bin and
// between: the margin covers what the window does.
func TestBuiltFiltersKeepTheFloor(t *testing.T) {
	for name, mics := range map[string][]rig.Point{"ring": ring(8, 0.06), "line": line(8, 0.04)} {
		for _, floor := range []float64{-6, 0} {
			task := Task{Mics: mics, Look: wave(0), Speed: 343, Rate: 48000, FFTSize: 1024}
			_, f, _ := built(t, Superdirective{FloorDB: floor}, task, 0)
			for i := 3; i < 2*820; i++ {
				hz := float64(i) * 48000 / 2048
				var power float64
				for _, g := range f.Response(nil, hz) {
					power += real(g)*real(g) + imag(g)*imag(g)
				}
				if got := -10 * math.Log10(power); got < floor {
					t.Errorf("%s, floor %g dB: %.1f Hz has %.3f dB", name, floor, hz, got)
					break
				}
			}
		}
	}
}

// Nulls of the built filters are deeper than -40 dB at every bin from the
// lower useful frequency of the rig (A25: c/(N d), aperture one wavelength) to
// 0.8 of Nyquist, for nulls at least a beamwidth away. Where a grating lobe of
// the steered direction passes over a null nothing can hold it: those bins, and
// the next eight on each side, are counted and left out.
func TestBuiltFiltersKeepTheirNulls(t *testing.T) {
	for _, v := range []struct {
		name   string
		mics   []rig.Point
		look   float64
		nulls  []float64
		from   float64 // lower useful frequency
		design func(nulls []acoustics.Wave) Design
		gone   int // most bins that may be left out
		rate   int
	}{
		{"line, superdirective, one", line(8, 0.04), 90, []float64{45}, 343 / 0.32, superdirectiveWith, 30, 48000},
		{"line, superdirective, two", line(8, 0.04), 90, []float64{50, 140}, 343 / 0.32, superdirectiveWith, 70, 48000},
		{"line, plain, one", line(8, 0.04), 90, []float64{45}, 343 / 0.32, plainWith, 30, 48000},
		{"ring, superdirective, one", ring(8, 0.06), 0, []float64{90}, 343 / 0.12, superdirectiveWith, 0, 48000},
		{"ring, superdirective, two", ring(8, 0.06), 20, []float64{120, -75}, 343 / 0.12, superdirectiveWith, 0, 48000},
		{"ring, plain, three", ring(8, 0.06), 20, []float64{120, -75, -150}, 343 / 0.12, plainWith, 0, 48000},
		// No grating lobe below 0.8 of Nyquist: every bin counts.
		{"line at 16 kHz, superdirective, one", line(8, 0.04), 90, []float64{45}, 343 / 0.32, superdirectiveWith, 0, 16000},
		{"line at 16 kHz, superdirective, two", line(8, 0.04), 90, []float64{50, 140}, 343 / 0.32, superdirectiveWith, 0, 16000},
		{"line at 16 kHz, plain, one", line(8, 0.04), 90, []float64{45}, 343 / 0.32, plainWith, 0, 16000},
	} {
		task := Task{Mics: v.mics, Look: wave(v.look), Speed: 343, Rate: v.rate, FFTSize: 1024}
		var nulls []acoustics.Wave
		for _, az := range v.nulls {
			nulls = append(nulls, wave(az))
		}
		w, f, _ := built(t, v.design(nulls), task, 0)
		if from, ok := w.HeldFrom(); !ok || from > v.from {
			t.Errorf("%s: nulls held from %.0f Hz (%v), want from %.0f", v.name, from, ok, v.from)
		}
		near := func(k int) bool { // to a bin that gives way
			for i := max(0, k-8); i <= k+8; i++ {
				if !w.Held[i] {
					return true
				}
			}
			return false
		}
		worst, at, gone := 0.0, 0.0, 0
		for k := int(v.from/task.Hz(1)) + 1; task.Hz(k) <= 0.4*float64(v.rate); k++ {
			if near(k) {
				gone++
				continue
			}
			for _, null := range nulls {
				if e := cmplx.Abs(look(f, task, null, task.Hz(k))); e > worst {
					worst, at = e, task.Hz(k)
				}
			}
		}
		t.Logf("%s: worst null %.1f dB at %.0f Hz, %d bins left out", v.name, 20*math.Log10(worst), at, gone)
		if 20*math.Log10(worst) > -40 {
			t.Errorf("%s: null of %.1f dB at %.0f Hz, want below -40", v.name, 20*math.Log10(worst), at)
		}
		if gone > v.gone {
			t.Errorf("%s: %d bins left out, want at most %d", v.name, gone, v.gone)
		}
	}
}

func superdirectiveWith(nulls []acoustics.Wave) Design {
	return Superdirective{FloorDB: -6, Nulls: nulls}
}

func plainWith(nulls []acoustics.Wave) Design { return LCMV{FloorDB: -6, Nulls: nulls} }

// A constant-beamwidth line keeps its half-power width within 2 % from its
// frequency on to 0.7 of c/d, and delay-and-sum does not.
func TestConstantBeamwidthKeepsItsWidth(t *testing.T) {
	task := Task{Mics: line(12, 0.03), Look: wave(90), Speed: 343, Rate: 48000, FFTSize: 1024}
	// width is the half-power width around broadside, degrees.
	width := func(f *Filters, hz float64) float64 {
		g := f.Response(nil, hz)
		edge := func(sign float64) float64 {
			for a := 0.0; a < 90; a += 0.02 {
				var y complex128
				v := steering(task, wave(90+sign*a), hz)
				for m := range g {
					y += g[m] * v[m]
				}
				if cmplx.Abs(y) < math.Sqrt(0.5) {
					return a
				}
			}
			return math.NaN()
		}
		return edge(1) + edge(-1)
	}
	from := 2 * 343 / 0.33
	_, f, _ := built(t, ConstantBeamwidth{FloorDB: 0}, task, 0)
	_, plain, _ := built(t, Tapered{}, task, 0)
	want := width(plain, from)
	for _, hz := range []float64{from, 2500, 3000, 4000, 5000, 6500, 8000} {
		got := width(f, hz)
		t.Logf("%5.0f Hz: %.2f°, delay-and-sum %.2f°", hz, got, width(plain, hz))
		if !(math.Abs(got/want-1) < 0.02) {
			t.Errorf("%g Hz: %.2f°, want %.2f° within 2 %%", hz, got, want)
		}
	}
	if r := width(plain, 8000) / want; r > 0.4 {
		t.Errorf("delay-and-sum at 8000 Hz is %.2f of its width: the test shows nothing", r)
	}
}

func TestFiltersRefuseLengths(t *testing.T) {
	w, _, _ := built(t, Tapered{}, Task{Mics: line(2, 0.1), Look: wave(0), Speed: 343, Rate: 8000, FFTSize: 64}, 0)
	for _, taps := range []int{-4, 2, 6, 128} {
		if _, _, err := w.Filters(taps); err == nil || !strings.Contains(err.Error(), "multiple of 4") {
			t.Errorf("%d taps: error %v", taps, err)
		}
	}
}

func TestFiltersRefuseNaN(t *testing.T) {
	w, _, _ := built(t, Tapered{}, Task{Mics: line(2, 0.1), Look: wave(0), Speed: 343, Rate: 8000, FFTSize: 64}, 0)
	w.W[5] = cmplx.NaN()
	if _, _, err := w.Filters(0); err == nil {
		t.Error("weights that are no numbers make filters")
	}
}

// Filters of a design run by overlap-save against their direct convolution in
// float64: no circular effects above -90 dB, at the edges of the take neither.
func TestDesignsRunWithoutCircularEffects(t *testing.T) {
	task := Task{Mics: ring(6, 0.06), Look: wave(40), Speed: 343, Rate: 48000, FFTSize: 1024}
	_, f, _ := built(t, Superdirective{FloorDB: -6, Nulls: []acoustics.Wave{wave(170)}}, task, 0)
	b := coupledNoise(9, 6, 3001)
	src, err := NewOverlapSave(audio.FromBlock(48000, b), f)
	if err != nil {
		t.Fatal(err)
	}
	out, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	var worst, power float64
	for i := range b.Frames() {
		want := 0.0
		for m, h := range f.H {
			x := b.Channel(m)
			for tap, v := range h {
				if at := i - f.Start[m] - tap; at >= 0 && at < len(x) {
					want += v * float64(x[at])
				}
			}
		}
		power += want * want / float64(b.Frames())
		worst = math.Max(worst, math.Abs(want-float64(out.Channel(0)[i])))
	}
	if got := 20 * math.Log10(worst/math.Sqrt(power)); got > -90 {
		t.Errorf("largest difference %.1f dB re the output, want below -90", got)
	} else {
		t.Logf("largest difference %.1f dB re the output", got)
	}
}
