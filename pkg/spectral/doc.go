// Package spectral takes blocks into the frequency domain and back.
//
// # Conventions
//
// Time factor e^{+jωt}. The forward transform is
//
//	X[k] = Σ_i x[i]·e^{-j2πki/n},   k = 0..n/2
//
// without a factor; the inverse holds 1/n. Spectra of real signals are
// one-sided: bin k is k·rate/n hertz, bins 0 and n/2 are real. Real and
// imaginary parts lie in two slices (split format). The generic plans run in
// float32 for samples and in float64 for whatever is designed or fitted;
// largest error, relative to the largest bin, at 4096 points: below -125 dB in
// float32, below -295 dB in float64.
//
// A plan is for one goroutine at a time; Clone gives another goroutine its own,
// with shared tables.
//
// Windows are float64, periodic where they serve averaging of spectra, symmetric
// where they serve filter design.
//
// # Use
//
//	window := spectral.Periodic(2048, spectral.Hann)
//	stft, err := spectral.NewSTFT(8, 2048, 1024, window, func(frame int64, s *spectral.Spectra) error {
//		for k := range s.Bins() {
//			use(s.Re[ch][k], s.Im[ch][k])
//		}
//		return nil
//	})
//	audio.Copy(take, 4096, stft)
//	stft.Flush() // the last frames, with silence after the end
//
// # Sources
//
// [Stockham 1966] T. G. Stockham, High-speed convolution and correlation, AFIPS
// Spring Joint Computer Conference 28 (1966), pp. 229-233; the autosort form of
// the transform is described in [Van Loan 1992] C. Van Loan, Computational
// Frameworks for the Fast Fourier Transform, SIAM 1992, section 1.7.
//
// [Harris 1978] F. J. Harris, On the use of windows for harmonic analysis with
// the discrete Fourier transform, Proc. IEEE 66 (1978), pp. 51-83.
//
// [Kaiser 1974] J. F. Kaiser, Nonrecursive digital filter design using the
// I0-sinh window function, Proc. IEEE Int. Symp. Circuits and Systems (1974),
// pp. 20-23.
//
// [Oppenheim & Schafer 1989] A. V. Oppenheim and R. W. Schafer, Discrete-Time
// Signal Processing, Prentice Hall 1989, section 8.9 (overlap-save) and 7.1
// (Butterworth filters by the bilinear transform).
package spectral
