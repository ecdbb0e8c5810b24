// Package beam holds the weights of a beam, the designs that find them, and
// the stages that form the beam with them.
//
// # Conventions
//
// A beam is y = wᴴx: weight w_m of microphone m is conjugated. The time factor
// is e^{+jωt}; a wave that arrives τ seconds later than at the reference point
// and with amplitude a times that there is a·e^{-jωτ} in the steering vector
// d, and a beam is free of distortion where wᴴd = 1. Weights are laid out
// w[k*M+m], bin k = 0..N/2 of an N-point transform at k·rate/N hertz, M
// microphones; covariances R[k][m*M+n] = E[x_m·x_n*], row-major. Filters are
// the real impulse responses that are run; their frequency response G_m is the
// conjugate of w_m. Frame i out describes the instant at which the wavefront
// of frame i passes the reference point.
//
// White noise gain is |wᴴd|²/(wᴴw). A floor on it bounds how much a design
// raises the noise of the microphones themselves and how much placement, gain
// and phase errors can spoil it.
//
// # Use
//
//	taper, err := beam.ParseTaper("taylor:30:4")
//	w, err := beam.Tapered{Taper: taper}.Weights(beam.Task{
//		Mics: mics, Reference: ref, Look: acoustics.Plane{From: direction},
//		Speed: air.Speed(), Rate: 48000, FFTSize: 1024,
//	})
//	filters, fit, err := w.Filters(0)
//
// Longer than 2,000 lines because the engines that run filters (the program's
// hot path) and the designs that make them share one type and one contract.
//
// # Sources
//
// [Dolph 1946] C. L. Dolph, A current distribution for broadside arrays which
// optimizes the relationship between beam width and side-lobe level, Proc. IRE
// 34 (1946), p. 335.
//
// [Kaiser 1974] J. F. Kaiser, Nonrecursive digital filter design using the
// I0-sinh window function, Proc. IEEE Symp. Circuits and Systems (1974),
// p. 20.
//
// [Taylor 1955] T. T. Taylor, Design of line-source antennas for narrow
// beamwidth and low side lobes, IRE Trans. Antennas Propag. AP-3 (1955), p. 16.
//
// [Harris 1978] F. J. Harris, On the use of windows for harmonic analysis with
// the discrete Fourier transform, Proc. IEEE 66 (1978), p. 51: Hann and
// Hamming. Hann is taken without its two zeros, sin²(π(n+1)/(N+1)), since a
// microphone with weight zero would be thrown away.
//
// [Capon 1969] J. Capon, High-resolution frequency-wavenumber spectrum
// analysis, Proc. IEEE 57 (1969), p. 1408: minimum variance.
//
// [Frost 1972] O. L. Frost, An algorithm for linearly constrained adaptive
// array processing, Proc. IEEE 60 (1972), p. 926.
//
// [Cox 1986] H. Cox, R. M. Zeskind, T. Kooij, Practical supergain, IEEE Trans.
// ASSP-34 (1986), p. 393: diagonal loading for a floor on white noise gain.
//
// [Cox 1987] H. Cox, R. M. Zeskind, M. M. Owen, Robust adaptive beamforming,
// IEEE Trans. ASSP-35 (1987), p. 1365.
//
// [Parra 2006] L. C. Parra, Steerable frequency-invariant beamforming for
// arbitrary arrays, J. Acoust. Soc. Am. 119 (2006), p. 3839: least squares over
// the sphere; page from memory.
//
// [Welch 1967] P. D. Welch, The use of fast Fourier transform for the
// estimation of power spectra, IEEE Trans. Audio Electroacoust. AU-15 (1967),
// p. 70.
//
// [Mou & Duhamel 1991] Z. J. Mou and P. Duhamel, Short-length FIR filters and
// their use in fast nonrecursive filtering, IEEE Trans. Signal Processing 39
// (1991), p. 1322.
//
// [Oppenheim & Schafer 1989] A. V. Oppenheim and R. W. Schafer, Discrete-Time
// Signal Processing, Prentice Hall 1989, section 8.9: overlap-save.
package beam
