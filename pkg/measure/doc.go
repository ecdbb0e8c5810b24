// Package measure turns signals into numbers: levels in bands over time, and
// the gain between two signals with an interval for it.
//
// # Conventions
//
// Powers are re a full-scale sine, so that 10·log10 of them is the level in
// dBFS of AES17: white noise of variance σ² holds 2σ² between 0 and half the
// rate. Ratios of powers are 10·log10. Bands are those of IEC 61260-1:2014,
// base ten. Times are seconds from the first frame, stretches half-open. A
// figure that cannot be measured is nil, with a Reason.
//
// # Bands
//
// A Meter adds up short-time spectra under half overlapped Hann windows, bin by
// bin with the part of the bin's cell that lies in the band. Every band from
// 50 Hz to 16 kHz whose upper edge lies below 0.45 of the rate keeps to the
// class 1 limits of relative attenuation of IEC 61260-1:2014 at the rates 8 to
// 384 kHz that the tests name. That is no claim of conformity: it is no sound
// level meter. A window lasts at least 18 periods of the mid-band frequency:
// 0.4 s for the lowest bands, 23 to 45 ms for the highest.
//
// # Gains
//
// From stretches with noise only (N) and with target and noise (A):
//
//	noise reduction = 10·log10(R/Y)      R, Y: mean power in N, reference and output
//	target change   = 10·log10(S_y/S_r)  S: mean power in A less that in N
//	SNR gain        = noise reduction + target change
//
// The target figures stand only where S_r and S_y are significant, each by a
// one-sided test at 97.5 % against the spread of the noise.
//
// Intervals are 95 %, for the expected figure of these weights in this noise
// field: the delta method on the log ratio. For the noise reduction the
// influence of window t is z_t = r_t/R - y_t/Y, reference and output from the
// same draw; its long-run variance comes from Bartlett's kernel with a length
// from the autocorrelation of z, the quantile is Student's with Satterthwaite's
// degrees of freedom. It is centred on the estimate less its second-order bias.
// Noise and target stretches count as independent. Intervals of target figures
// reach further where only their significance let them be reported.
//
// Noise whose level wanders (gusts) is seen across all bands at once; then
// target figures take blocks that long, and stretches of fewer than eight
// blocks are flagged. Where means over four or eight batches in the order of
// time show that a band drifts, the batches give its spread, and four are
// flagged. With gusts of 3 dB over half a second the unflagged
// intervals hold the expected target change in 88 % only: longer stretches help.
//
// A moving-block bootstrap was not taken: the coverage of the delta method,
// counted by TestIntervalCoverage over 200 takes of two kinds, is 94 to 96 %.
//
// # Use
//
//	in, err := measure.NewMeter(take.Format(), measure.MeterOptions{PerChannel: true})
//	out, err := measure.NewMeter(track.Format(), measure.MeterOptions{})
//	// ... write the take to in and the track to out, Close both
//	pair := measure.Pair{Reference: in.Thirds(), Output: out.Thirds(), Microphones: in.ChannelThirds()}
//	found, err := measure.FindSegments(pair.Reference, pair.Output, measure.SegmentOptions{})
//	gains, err := measure.SNRGain(measure.Scene{Pair: pair, Noise: found.Noise, Target: found.Target, Named: -1})
//	for _, b := range gains.Bands {
//		fmt.Println(b.Band.NominalHz, b.SNRGain, b.SNRGainCI, b.Flags)
//	}
//	total := gains.Overall(nil)
//
// Longer than 2,000 lines: meter, gains and segments share tracks, windows and
// spreads so closely that two packages would export all of them to each other.
//
// # Sources
//
//   - IEC 61260-1:2014, Octave-band and fractional-octave-band filters, 5.2 to
//     5.16, Table 1. IEC 61672-1:2013, Sound level meters, Annex E. AES17.
//   - ANSI S3.5-1997, Speech intelligibility index, Tables 3 and 4.
//   - Andrews 1991: Heteroskedasticity and autocorrelation consistent covariance
//     matrix estimation, Econometrica 59, 817, eq. 6.2 and 6.4 (from memory).
//   - Bendat, Piersol: Random Data, ch. 8.
//   - Box 1953: Non-normality and tests on variances, Biometrika 40, 318.
//   - Carter, Knapp, Nuttall 1973: Estimation of the magnitude-squared coherence
//     function, IEEE Trans. AU-21, 337.
//   - Greenberg, Peterson, Zurek 1993: Intelligibility-weighted measures of
//     speech-to-interference ratio, JASA 94, 3009.
//   - Kaiser 1974: Nonrecursive digital filter design using the I0-sinh window,
//     Proc. IEEE Symp. Circuits and Systems, 20.
//   - Newey, West 1987: A simple positive semi-definite covariance matrix,
//     Econometrica 55, 703.
//   - Satterthwaite 1946: An approximate distribution of estimates of variance
//     components, Biometrics Bulletin 2, 110.
package measure
