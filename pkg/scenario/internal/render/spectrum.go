package render

import (
	"math"
)

// TapResponse returns Σ_t h[t]·e^{-jω(start+t)}, ω in radians a sample.
func TapResponse(h []float64, start int, omega float64) complex128 {
	s, c := math.Sincos(-omega)
	step := complex(c, s)
	var sum complex128
	for t := len(h) - 1; t >= 0; t-- {
		sum = sum*step + complex(h[t], 0)
	}
	s, c = math.Sincos(-omega * float64(start))
	return sum * complex(c, s)
}

// Spectra of noise.
const (
	SpectrumWhite    = "white"
	SpectrumPink     = "pink"     // power density falls by 3 dB an octave above 20 Hz
	SpectrumOutdoors = "outdoors" // wind and distant traffic: 5 dB an octave above 40 Hz, over a faint white floor
	SpectrumSpeech   = "speech"   // long-term spectrum of speech
)

// spectrumWind is the spectrum of wind on a microphone; see gusts.
const spectrumWind = "wind"

// speechLevels is the standard speech spectrum level for normal vocal effort,
// dB, at the one-third-octave bands from 160 Hz on [ANSI S3.5-1997, table 3].
var speechLevels = [...]float64{32.41, 34.48, 34.75, 33.98, 34.59, 34.27, 32.06, 28.30, 25.01,
	23.00, 20.15, 17.32, 13.18, 11.55, 9.33, 5.31, 2.59, 1.13}

// density returns the power density of a spectrum at a frequency, hertz, up to
// a factor.
func density(spectrum string, hz float64) float64 {
	switch spectrum {
	case SpectrumPink:
		return 1 / math.Max(hz, 20)
	case SpectrumOutdoors:
		const fall, floor = 5.0, -62.0 // dB an octave, dB re the density at 40 Hz
		return math.Pow(math.Max(hz, 40)/40, -fall/3.0103) + math.Pow(10, floor/10)
	case spectrumWind:
		return math.Pow(math.Max(hz, 30)/30, -4)
	case SpectrumSpeech:
		// Bands lie at 160 Hz·10^(b/10); outside them the level falls by 12 dB an
		// octave (common practice).
		at := 10 * math.Log10(math.Max(hz, 1)/158.489)
		last := float64(len(speechLevels) - 1)
		var level float64
		switch {
		case at < 0:
			level = speechLevels[0] + 12*at/3.0103
		case at >= last:
			level = speechLevels[len(speechLevels)-1] - 12*(at-last)/3.0103
		default:
			b := int(at)
			level = speechLevels[b] + (at-float64(b))*(speechLevels[b+1]-speechLevels[b])
		}
		return math.Pow(10, level/10)
	}
	return 1
}

// Shape returns the filter that gives white noise a spectrum, its power kept,
// nil for white. It is even around its middle, so that it holds a whole number
// of frames of delay, len/2; its resolution is about 25 Hz.
func Shape(spectrum string, rate int) []float64 {
	if spectrum == "" || spectrum == SpectrumWhite {
		return nil
	}
	n := 1024
	for n < rate/12 {
		n *= 2
	}
	re, im := make([]float64, n/2+1), make([]float64, n/2+1)
	for k := range re {
		a := math.Sqrt(density(spectrum, float64(k)*float64(rate)/float64(n)))
		if k%2 == 1 { // turns the middle of the response to len/2
			a = -a
		}
		re[k] = a
	}
	h := make([]float64, n)
	plan64(n).Inverse(h, re, im)
	var power float64
	for t := range h {
		// A Hann window [Blackman & Tukey 1958] keeps the response from being
		// cut off.
		h[t] *= 0.5 - 0.5*math.Cos(2*math.Pi*float64(t)/float64(n))
		power += h[t] * h[t]
	}
	g := 1 / math.Sqrt(power)
	for t := range h {
		h[t] *= g
	}
	return h[1:] // the first tap is 0
}

// PowerOfDBFS returns the mean square of a signal of a level in dBFS: a
// full-scale sine, mean square 1/2, reads 0 dBFS [AES17].
func PowerOfDBFS(level float64) float64 { return 0.5 * math.Pow(10, level/10) }

// DBFSOfPower is the inverse of powerOfDBFS.
func DBFSOfPower(power float64) float64 { return 10 * math.Log10(2*power) }
