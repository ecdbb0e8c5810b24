// Package scenario renders takes of imagined places whose truth is known: what
// sounded where, how loud, in which room, and what was wrong with the rig.
//
// # Conventions
//
// A source's level is that of its direct sound at the rig's reference point
// while it is on (while it is at its place of time 0, if it moves). Its clock
// is set so that sound it gives off at its time 0 passes the reference point at
// frame 0 of the take; from then on distance takes its time, so that a source
// that comes nearer is heard higher. Amplitude falls with distance; a far
// source has plane waves. Outdoors there is no ground, and the air takes
// nothing away.
//
// The rig file is right unless a fault says otherwise: the hardware of each
// channel has the opposite of the rig's corrections.
//
// Reflections reach down to 20 Hz; walls have no phase of their own.
//
// A take is targets plus noise; noise is interferers, diffuse noise, sensor
// noise and whatever faulty channels add. Sound exists before frame 0 and after
// the end, where sources do not say otherwise. Levels in dBFS are AES17's: a
// full-scale sine reads 0.
//
// Everything random comes from the seed. The same scenario gives the same
// samples on every run, for blocks of every size and any number of processors.
// Memory does not grow with the length of the take.
//
// # Accuracy
//
// Delays of direct sound and of plane waves are exact within -115 dB up to 0.9
// of Nyquist, moving sources included; those of reflections within -85 dB up to
// 0.85 of Nyquist. A source that moves in a room has exact direct sound; the
// responses of its reflections are renewed every 50 mm. NoiseCovariance is that
// of the filters that make the noise, not of an ideal field.
//
// # Use
//
//	sc, err := scenario.Load("quay.yaml", data, open)
//	r, err := sc.Render(scenario.Options{})
//	meter := r.NewMeter()
//	err = r.Each(func(mix, target, noise audio.Block) error {
//		meter.Add(mix, target, noise)
//		return errors.Join(take.Write(mix), alone.Write(target), rest.Write(noise))
//	})
//	truth := meter.Truth()
//	long, err := r.FreshNoise(600, 7) // for the expected gain of some weights
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
// [Eyring 1930] C. F. Eyring, Reverberation time in "dead" rooms, J. Acoust.
// Soc. Am. 1 (1930), p. 217.
//
// [ISO 9613-1] see package acoustics. [IEC 61260-1] IEC 61260-1:2014,
// octave-band mid-band frequencies, 5.3. [AES17] AES17-2020, level in dBFS.
//
// [ANSI S3.5-1997] Methods for calculation of the speech intelligibility index,
// table 3, standard speech spectrum level, normal effort.
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
package scenario
