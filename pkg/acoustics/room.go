package acoustics

import (
	"fmt"
	"math"
)

// EyringTime returns the reverberation time, seconds, of a room of volume m³
// whose walls, surface m², absorb the share absorption of the energy, in which
// the air takes airPerM nepers of energy a metre and sound runs at speed m/s:
// (24 ln 10/c)·V/(-S·ln(1-α) + 4mV) [Eyring 1930].
func EyringTime(volume, surface, absorption, airPerM, speed float64) float64 {
	return 24 * math.Ln10 / speed * volume / (-surface*math.Log(1-absorption) + 4*airPerM*volume)
}

// EyringAbsorption is the inverse of EyringTime: the absorption that gives a
// room a reverberation time, seconds. It returns an error if no
// absorption between 0 and 0.99 gives the time.
func EyringAbsorption(volume, surface, seconds, airPerM, speed float64) (float64, error) {
	walls := 24*math.Ln10/speed*volume/seconds - 4*airPerM*volume
	alpha := 1 - math.Exp(-walls/surface)
	if !(alpha >= 0) {
		return 0, fmt.Errorf("reverberation time %.3g s: the air alone gives %.3g s", seconds, 24*math.Ln10/speed/(4*airPerM))
	}
	if alpha > 0.99 {
		return 0, fmt.Errorf("reverberation time %.3g s: too short for a room of %.3g m³ and %.3g m² of wall, even walls that absorb 99 %% give %.3g s",
			seconds, volume, surface, EyringTime(volume, surface, 0.99, airPerM, speed))
	}
	return alpha, nil
}
