package acoustics

import (
	"math"
	"strings"
	"testing"
)

// I7: room of 10 x 8 x 3 m, absorption 0.2, c = 343 m/s: Eyring 0.6465839 s
// (Eyring 1930; Kuttruff, Room Acoustics).
func TestEyringWorkedRoom(t *testing.T) {
	const volume, surface = 240, 268
	if got := EyringTime(volume, surface, 0.2, 0, 343); math.Abs(got-0.6465839) > 1e-4 {
		t.Errorf("Eyring time = %.7f s, want 0.6465839", got)
	}
	alpha, err := EyringAbsorption(volume, surface, 0.6465839, 0, 343)
	if err != nil || math.Abs(alpha-0.2) > 1e-6 {
		t.Errorf("absorption for 0.6465839 s = %g, %v, want 0.2", alpha, err)
	}
}

// I6 and I7: for little absorption Eyring's rule becomes Sabine's, (24 ln 10/c)
// V/(αS + 4mV): 0.161114 V/A at 343 m/s, and 0.7077894 s for the worked room
// with air of 4.6647 dB/km.
func TestEyringBecomesSabine(t *testing.T) {
	const volume, surface = 240, 268
	if got := EyringTime(volume, surface, 1e-6, 0, 343) * surface * 1e-6 / volume; math.Abs(got-0.161114) > 1e-5 {
		t.Errorf("Sabine constant = %.6f, want 0.161114", got)
	}
	// Sabine's absorption 0.2 is Eyring's 1 - e^-0.2; m = dB/m over 10 lg e.
	m := 4.6647e-3 / (10 * math.Log10(math.E))
	if got := EyringTime(volume, surface, 1-math.Exp(-0.2), m, 343); math.Abs(got-0.7077894) > 1e-4 {
		t.Errorf("Sabine time with air = %.7f s, want 0.7077894", got)
	}
}

// I8: the room of Allen & Berkley 1979 as 10 x 15 x 12.5 ft, 1 ft/ms, mean
// absorption 0.2937838 (scale from memory): Eyring 0.3220436 s.
func TestEyringAllenBerkleyRoom(t *testing.T) {
	const x, y, z = 10, 15, 12.5
	surface := 2.0 * (x*y + x*z + y*z)
	walls, ends := 2.0*(x*z+y*z)*(1-0.81), 2.0*x*y*(1-0.49)
	alpha := (walls + ends) / surface
	if math.Abs(alpha-0.2937838) > 1e-6 {
		t.Fatalf("mean absorption = %.7f, want 0.2937838", alpha)
	}
	if got := EyringTime(x*y*z, surface, alpha, 0, 1000); math.Abs(got-0.3220436) > 1e-6 {
		t.Errorf("Eyring time = %.7f s, want 0.3220436", got)
	}
}

func TestImpossibleReverberationTimesAreRefused(t *testing.T) {
	if _, err := EyringAbsorption(240, 268, 0.01, 0, 343); err == nil || !strings.Contains(err.Error(), "too short") {
		t.Errorf("0.01 s in 240 m³: %v, want too short", err)
	}
	if _, err := EyringAbsorption(240, 268, 9, 0.02, 343); err == nil || !strings.Contains(err.Error(), "the air alone") {
		t.Errorf("9 s in absorbing air: %v, want the air alone", err)
	}
}
