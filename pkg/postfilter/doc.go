// Package postfilter lowers what is left of noise behind a beam, by gains that
// change with time and frequency and are found from the coherence of the
// microphones.
//
// # How
//
// With x_m the spectrum of microphone m, aligned by the arrival of the steered
// wave, and φ_mn the recursive mean of x_m·x_n*, the gain of a bin is
//
//	W = φ_s / φ_x     limited to  floor <= W <= 1
//
// with φ_x = Σφ_mm/M, the power at a microphone, and φ_s an estimate of the
// target's power there. Spatially white noise does not appear in the cross
// spectra, so [Zelinski 1988]
//
//	φ_s = 2/(M(M-1)) Σ_{m<n} Re φ_mn
//
// In spherically isotropic noise it does, by its coherence Γ_mn = sin(kd)/(kd),
// which alignment turns into Γ'_mn = Γ_mn cos ω(τ_m - τ_n); solving each pair
// for the target gives [McCowan & Bourlard 2003]
//
//	φ_s = 2/(M(M-1)) Σ_{m<n} [Re φ_mn - ½Γ'_mn(φ_mm + φ_nn)] / (1 - Γ'_mn)
//
// with Γ' limited to 0.99, since a pair that lies closer together than that
// tells nothing. The real part is taken since the target's is real.
//
// # What to expect
//
// Both divide by the power at the microphones and not by that of the beam. The
// noise in W is therefore larger than what the beam left of it, in white noise M
// times, and the filter lowers more than a Wiener filter behind this beam would
// [Simmer 2001]: at an SNR of 0 dB a microphone W is 1/2, where M/(M+1) would be
// best. The floor bounds what that can cost. [Zelinski 1988] takes the coherent
// part of diffuse noise for target, by 1 + mean Γ'/SNR, most at low
// frequencies, so that it does least where the beam does least.
//
// A gain that changes with time is no property of a field any more: the same
// weights give other figures for other sound. Whoever wants to know what it did
// finds the gains on a mix and runs the target and the noise alone through them
// (shadow filtering): New takes both.
//
// # Use
//
//	// both holds the microphones, then the beam of the same frames.
//	both, err := audio.With(microphones, func(src audio.Source) (audio.Source, error) {
//		return beam.NewOverlapSave(src, filters)
//	})
//	track, err := postfilter.New(both, postfilter.Options{
//		Kind: postfilter.Diffuse, FloorDB: -15, Mics: mics, Reference: ref, Look: look, Speed: speed,
//	})
//
// # Sources
//
// [Zelinski 1988] R. Zelinski, A microphone array with adaptive post-filtering
// for noise reduction in reverberant rooms, Proc. IEEE ICASSP 1988, p. 2578.
//
// [McCowan & Bourlard 2003] I. A. McCowan, H. Bourlard, Microphone array
// post-filter based on noise field coherence, IEEE Trans. Speech and Audio
// Processing 11 (2003), p. 709; the limit of 0.99 from memory.
//
// [Simmer 2001] K. U. Simmer, J. Bitzer, C. Marro, Post-filtering techniques, in
// M. Brandstein, D. Ward (eds.), Microphone Arrays, Springer 2001, chapter 3.
//
// [Griffin & Lim 1984] D. W. Griffin, J. S. Lim, Signal estimation from modified
// short-time Fourier transform, IEEE Trans. ASSP-32 (1984), p. 236: the same
// window before and after, which is the square root of Hann's here.
package postfilter
