package measure

import "math"

// Band is a fractional-octave band of IEC 61260-1:2014, base ten.
type Band struct {
	NominalHz float64 // the rounded name in print
	CentreHz  float64 // exact mid-band frequency
	LowHz     float64 // exact lower edge
	HighHz    float64 // exact upper edge
}

// Width is the width of the band, hertz.
func (b Band) Width() float64 { return b.HighHz - b.LowHz }

// TopOfRate is the part of the frame rate that the upper edge of the highest
// measured band stays below.
const TopOfRate = 0.45

// Nominal mid-band frequencies of one-third octaves from 50 Hz, IEC
// 61260-1:2014 Annex E and ISO 266.
var nominalThirds = [...]float64{50, 63, 80, 100, 125, 160, 200, 250, 315, 400, 500, 630, 800,
	1000, 1250, 1600, 2000, 2500, 3150, 4000, 5000, 6300, 8000, 10000, 12500, 16000}

// Nominal mid-band frequencies of octaves from 63 Hz.
var nominalOctaves = [...]float64{63, 125, 250, 500, 1000, 2000, 4000, 8000, 16000}

// third returns the one-third-octave band x steps above 1 kHz:
// f_m = 1000·G^(x/3), edges f_m·G^(∓1/6), G = 10^(3/10) (IEC 61260-1:2014,
// 5.2 to 5.5). All three are powers of ten in steps of 1/20.
func third(x int, nominal float64) Band {
	return Band{nominal, pow10th(2 * x), pow10th(2*x - 1), pow10th(2*x + 1)}
}

// octave returns the octave band x steps above 1 kHz.
func octave(x int, nominal float64) Band {
	return Band{nominal, pow10th(6 * x), pow10th(6*x - 3), pow10th(6*x + 3)}
}

// pow10th is 1000·10^(n/20) Hz. One expression for centres and edges makes the
// upper edge of a band the very number that is the lower edge of the next.
func pow10th(n int) float64 { return 1000 * math.Pow(10, float64(n)/20) }

// ThirdOctaves returns the one-third-octave bands from 50 Hz to 16 kHz whose
// upper edge lies below 0.45 of the frame rate, lowest first. A rate that
// carries none gives an empty list.
func ThirdOctaves(rate int) []Band {
	var list []Band
	for i, nominal := range nominalThirds {
		if b := third(i-13, nominal); b.HighHz < TopOfRate*float64(rate) {
			list = append(list, b)
		}
	}
	return list
}

// Octaves returns the octave bands from 63 Hz to 16 kHz whose upper edge lies
// below 0.45 of the frame rate, lowest first. Octave i is made of the thirds
// 3i, 3i+1 and 3i+2 of ThirdOctaves.
func Octaves(rate int) []Band {
	var list []Band
	for i, nominal := range nominalOctaves {
		if b := octave(i-4, nominal); b.HighHz < TopOfRate*float64(rate) {
			list = append(list, b)
		}
	}
	return list
}
