package measure

import "math"

// AWeightingDB returns the A-weighting at frequency hz, dB, 0 at 1 kHz:
//
//	20·log10[ f4²f⁴ / ((f²+f1²)·√(f²+f2²)·√(f²+f3²)·(f²+f4²)) ] - A(1000)
//
// IEC 61672-1:2013, Annex E, with f1 = 20.599, f2 = 107.653, f3 = 737.862 and
// f4 = 12194.217 Hz. It is -Inf at 0 Hz.
func AWeightingDB(hz float64) float64 { return rawA(hz) - rawA(1000) }

func rawA(hz float64) float64 {
	const f1, f2, f3, f4 = 20.598997, 107.65265, 737.86223, 12194.217
	f := hz * hz
	return 20 * math.Log10(f4*f4*f*f/((f+f1*f1)*math.Sqrt(f+f2*f2)*math.Sqrt(f+f3*f3)*(f+f4*f4)))
}

// Band importance of the speech intelligibility index, one-third octaves 160
// to 8000 Hz, ANSI S3.5-1997 Table 3. The entries sum to 1.
var thirdImportance = [...]float64{0.0083, 0.0095, 0.0150, 0.0289, 0.0440, 0.0578, 0.0653, 0.0711, 0.0818,
	0.0844, 0.0882, 0.0898, 0.0868, 0.0844, 0.0771, 0.0527, 0.0364, 0.0185}

// Band importance in octaves 250 to 8000 Hz, ANSI S3.5-1997 Table 4.
var octaveImportance = [...]float64{0.0617, 0.1671, 0.2373, 0.2648, 0.2142, 0.0549}

// SpeechImportance returns the importance of a one-third-octave band for
// speech, 0 outside 160 Hz to 8 kHz (ANSI S3.5-1997, Table 3).
func SpeechImportance(b Band) float64 {
	for i, v := range thirdImportance {
		if nominalThirds[i+5] == b.NominalHz {
			return v
		}
	}
	return 0
}

// SpeechImportanceOctave returns the importance of an octave band for speech,
// 0 outside 250 Hz to 8 kHz (ANSI S3.5-1997, Table 4). The 250 Hz octave also
// carries the 160 Hz third.
func SpeechImportanceOctave(b Band) float64 {
	for i, v := range octaveImportance {
		if nominalOctaves[i+2] == b.NominalHz {
			return v
		}
	}
	return 0
}
