// Package render is sound on its way from a source to the samples of a channel:
// the dry signals, where their sources are, what the place does to them, what
// diffuse fields are made of, and what a channel does at last.
//
// # Conventions
//
// A Mono is a dry signal, an Emitter adds sound at all microphones, a Line makes
// samples of the sound at one. All of them give frame after frame, HopFrames at
// a time where it matters, and hold no clock and no randomness of their own:
// random streams come from Stream, named by a seed, a label and an index.
// Values are float64, full scale 1. Frames before the take have negative
// numbers; whoever needs the past of its input says how much (Lead).
//
//	bank := render.DirectBank(track, mics, rate)
//	in := render.Starting(first-bank.Lead(), voice.New(rate, 115, rng))
//	e := render.NewMixer(bank, []render.Mono{in})
//	e.Add(rows) // rows[m][i], HopFrames more frames
//
// # Sources
//
// [Allen & Berkley 1979] J. B. Allen, D. A. Berkley, Image method for
// efficiently simulating small-room acoustics, J. Acoust. Soc. Am. 65 (1979),
// p. 943.
//
// [Oppenheim & Schafer] A. V. Oppenheim, R. W. Schafer, Discrete-Time Signal
// Processing, 3rd edition (2010), chapter 7.
//
// [Peterson 1986] P. M. Peterson, Simulating the response of multiple
// microphones to a single acoustic source in a reverberant room, J. Acoust.
// Soc. Am. 80 (1986), p. 1527: images at fractions of a sample.
//
// [Habets, Cohen & Gannot 2008] E. A. P. Habets, I. Cohen, S. Gannot,
// Generating nonstationary multisensor signals under a spatial coherence
// constraint, J. Acoust. Soc. Am. 124 (2008), p. 2911.
//
// [Cook et al. 1955] R. K. Cook, R. V. Waterhouse, R. D. Berendt, S. Edelman,
// M. C. Thompson, Measurement of correlation coefficients in reverberant sound
// fields, J. Acoust. Soc. Am. 27 (1955), p. 1072.
//
// [ANSI S3.5-1997] Methods for calculation of the speech intelligibility index,
// table 3, standard speech spectrum level, normal effort.
//
// [Kaiser 1974] J. F. Kaiser, Nonrecursive digital filter design using the
// I0-sinh window function, Proc. IEEE Int. Symp. Circuits and Systems (1974).
//
// [Blackman & Tukey 1958] R. B. Blackman, J. W. Tukey, The measurement of power
// spectra, Bell Syst. Tech. J. 37 (1958).
//
// [Farina 2000] A. Farina, Simultaneous measurement of impulse response and
// distortion with a swept-sine technique, 108th AES Convention (2000).
//
// [Steele, Lea & Flood 2014] G. L. Steele, D. Lea, C. H. Flood, Fast splittable
// pseudorandom number generators, OOPSLA (2014).
package render
