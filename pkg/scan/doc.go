// Package scan measures what many beams would hear, from one analysis of the
// microphones.
//
// # Definition
//
// The microphones are cut into half overlapped Hann windows and transformed
// once. In each window j and bin k a beam is the product of the spectra with the
// responses of its filters as they were built,
//
//	Y_j[k] = Σ_m G_m[k]·X_jm[k],
//
// and the power of a band is the sum of |Y_j[k]|² over its bins, each with the
// part of its cell k-1/2 to k+1/2 that lies in the band, as in package measure:
// 10·log10 of it is dBFS of AES17. No sample of a beam is formed. The reference
// is the mean over the microphones of the same sum of |X_jm[k]|².
//
// Unlike package measure, which takes a window of the beam, this takes the beam
// of a window: a filter that delays a microphone takes it from a window that lies
// a little differently. The power of what is wrong is 13·(σ/N)² of the whole, for
// delays of root mean square σ and Hann windows of N frames, so windows last at
// least 110 σ (-30 dB) and 60 ms. Bands with fewer than 18 periods in such a
// window come from windows of at least 16 periods of 50 Hz. On steady noise the
// levels agree with those that package measure finds in the steered track to
// 0.1 dB, to 0.2 dB where a beam hears 10 dB less than the microphones do; a
// direction in which a beam hears nothing at all reads about 30 dB below, not
// silence.
//
// # Cost
//
// A beam costs one complex product a microphone, bin and window, and no
// transform; half of that for microphones whose responses mirror one another in
// all beams to -60 dB, as those of every rig do that is the same seen from the
// other side, whatever the corrections of its channels, with its centre as the
// reference point and with weights that do not come from measured noise. Covariances of the microphones (which cost microphones squared once,
// and then nothing a second for each beam) were not taken: the spread of a gain
// needs the powers over time, and those would cost a covariance a window.
//
// # Use
//
//	a, err := scan.New(mics.Format(), filters, scan.Options{})
//	audio.Copy(mics, 4096, a)
//	err = a.Close()
//	for i := range filters {
//		levels := a.Level(i) // of each band, powers re a full-scale sine
//		pair := measure.Pair{Reference: a.Reference(), Output: a.Beam(i)}
//	}
//
// # Sources
//
// [Welch 1967] P. D. Welch, The use of fast Fourier transform for the estimation
// of power spectra, IEEE Trans. Audio Electroacoust. AU-15 (1967), p. 70.
//
// [Avargel & Cohen 2007] Y. Avargel, I. Cohen, On multiplicative transfer
// function approximation in the short-time Fourier transform domain, IEEE Signal
// Processing Letters 14 (2007), p. 337: the product of spectra as a filter; page
// from memory.
//
// IEC 61260-1:2014 for the bands, AES17 for the levels.
package scan
