package acoustics

import (
	"math"
	"testing"
)

// F1: ISO 9613-1:1993, 343.2·sqrt(T/293.15), values to 0.005 m/s.
func TestDrySpeedISO9613(t *testing.T) {
	want := map[float64]float64{0: 331.29, 10: 337.30, 15: 340.26, 20: 343.20, 25: 346.11, 30: 349.00, 40: 354.71}
	for temp, c := range want {
		if got := DryAir(temp).Speed(); math.Abs(got-c) > 0.005 {
			t.Errorf("DryAir(%g).Speed() = %.4f, want %.2f", temp, got, c)
		}
	}
}

// F3: IEC 61094-2:2009, annex F, table F.1 worked values, Cramer's polynomial
// with a carbon dioxide fraction of 0.0004.
func TestHumidSpeedIEC61094(t *testing.T) {
	for _, v := range []struct{ temp, hum, kpa, want float64 }{
		{23, 50, 101.325, 345.86652},
		{20, 65, 80, 344.38267},
	} {
		got := Air{v.temp, v.hum, v.kpa}.Speed()
		if math.Abs(got-v.want) > 5e-5 {
			t.Errorf("speed at %g °C, %g %%, %g kPa = %.5f, want %.5f", v.temp, v.hum, v.kpa, got, v.want)
		}
	}
}

// F2: the rule in use is named, because textbook rules differ by up to 0.8 m/s:
// humid air of 50 % at 20 °C is 343.99 m/s, not 343.2.
func TestHumidAirDiffersFromDry(t *testing.T) {
	if got := (Air{20, 50, 101.325}).Speed(); math.Abs(got-343.99) > 0.005 {
		t.Errorf("humid speed at 20 °C = %.4f, want 343.99", got)
	}
}
