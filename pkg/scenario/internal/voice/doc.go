// Package voice is a talker of our own making: speech-like sound without words.
// Glottal pulses run through moving formant resonators, with hisses and bursts
// between them, in phrases with pauses. Its long-term spectrum, its pauses and
// its level over time are like those of a voice; it says nothing.
//
//	t := voice.New(48000, 115, rng) // frames per second, pitch in hertz
//	t.Next(x)                       // the next len(x) frames, at no certain level
//
// # Sources
//
// [Peterson & Barney 1952] G. E. Peterson, H. L. Barney, Control methods used
// in a study of the vowels, J. Acoust. Soc. Am. 24 (1952), p. 175.
//
// [Klatt 1980] D. H. Klatt, Software for a cascade/parallel formant
// synthesizer, J. Acoust. Soc. Am. 67 (1980), p. 971.
//
// [Rosenberg 1971] A. E. Rosenberg, Effect of glottal pulse shape on the
// quality of natural vowels, J. Acoust. Soc. Am. 49 (1971), p. 583.
//
// [Box & Jenkins] G. E. P. Box, G. M. Jenkins, Time Series Analysis (1976),
// section 3.2: the autocorrelation of an autoregression of order 2.
package voice
