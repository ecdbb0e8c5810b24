package measure

import "math"

// Reference sound pressure, pascals (ISO 1683).
const referencePa = 20e-6

// SoundPressureLevelDB is the level of a sound pressure, dB re 20 µPa. The
// pressure is a root mean square, pascals; 0 gives -Inf.
func SoundPressureLevelDB(pascals float64) float64 {
	return 20 * math.Log10(math.Abs(pascals)/referencePa)
}

// SoundPressure is the root mean square sound pressure of a level in dB re
// 20 µPa, pascals.
func SoundPressure(levelDB float64) float64 { return referencePa * math.Pow(10, levelDB/20) }

// FullScaleSPL is the sound pressure level at which a sine reaches full scale,
// dB re 20 µPa, for a microphone that reads sensitivityDBFS (AES17, so a
// full-scale sine is 0) at 94 dB: what is added to a level in dBFS to make it
// one in dB SPL.
func FullScaleSPL(sensitivityDBFS float64) float64 { return 94 - sensitivityDBFS }
