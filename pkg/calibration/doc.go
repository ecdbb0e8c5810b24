// Package calibration finds what makes the channels of a rig agree: gain, delay
// and polarity of each against the others, from a take of one known sound
// (Channels), the places of its microphones from sounds of unknown directions
// (Arrivals, Locate), their sensitivities from a sound level calibrator (Tones),
// and filters for what the channels do over frequency (Options.Responses, Undo).
//
// # Conventions
//
// Channels are raw, as the take has them, in the order of the rig's used
// microphones. Late is positive where a channel arrives later than the
// geometry says, seconds; LevelDB is positive where it is louder, dB; both are
// against the mean over the channels that were heard, since one take cannot
// know a delay or a gain of all of them. Corrections are the opposites.
//
// # How
//
// The channels are lined up by what the geometry foretells, and their
// cross-spectra are averaged over the frames in which the source is loud, or
// over the direct sound of claps. One source in uncorrelated noise makes the
// cross-spectrum of two channels the product of their transfers: a model of
// factor analysis with one factor, fitted to the cross-spectra between
// different channels alone, each channel against the sum of the others as
// instrument. The noise of a channel is in none of them, so that it biases no
// gain: a regression on one noisy channel would read 0.086 dB too little at
// 20 dB signal-to-noise. Delays are the maximum of the correlation so weighted,
// by Newton's method. Channels that lie more than a quarter of a sample apart
// are lined up and listened to again.
//
// The standard uncertainty of a figure joins what the noise explains, or where
// it is larger the spread over 16 groups of frequencies, which shows
// reflections; what the doubt about direction, distance and speed of sound
// makes of the expected arrivals; and the doubt about each microphone's place.
// That of a gain takes in by how much the gains in its octaves differ beyond
// what noise and the spread within an octave explain [DerSimonian & Laird
// 1986]: a channel whose gain depends on frequency has none that is known better.
//
// Places are found together with the directions of the sounds: maximum a
// posteriori, Gauss and Newton's method with the rig file's places as prior,
// started from these and from the factorisation of the matrix of arrivals
// [Thrun 2005], whichever fits better. The information of the arrivals about the
// places, directions and times taken out, says what is observable: a way of
// moving microphones counts where the arrivals know it twice as well as the
// prior. Shift and turn never are, from unknown directions. Where the arrivals
// show a line or a plane and nothing is known of elevations, directions have no
// length that would settle the scale: places are then found along the line or
// plane alone, but for a linear map, and all else is left as it was.
//
// Responses are fitted by the same model, line by line over a third of an octave
// or 190 Hz, whichever is wider, each channel against the others turned and
// weighted by their own responses so far. Their filters are 1.3 ms long and undo
// what differs from the mean of all channels, by 12 dB at most, where a third of
// an octave is known within 0.3 dB; beyond that band they keep the level of its
// edge.
//
// A calibrator's stretch is the longest second or more in which a channel
// carries a pure tone of its frequency, steady within 0.15 dB and 10 dB above
// the other channels. Sensitivities are in dBFS at 94 dB (AES17: a full-scale
// sine reads 0), and their uncertainty is what the class of the calibrator
// allows, with the spread where it was seated several times; corrections for air pressure and coupler are not made.
//
// # Limits
//
// Microphones are omnidirectional in a free field. In a room a steady sound's
// reflections bias gains by up to 0.8 dB and delays by up to 2 µs (reverberation
// time 0.3 and 0.6 s, 1 and 2 m away, a solid rig of 160 mm), and the stated
// uncertainty covers fewer than nineteen of twenty figures there; take claps or measured responses there, of which only the first 2 ms are used,
// from 333 Hz up: 0.01 dB and 0.2 µs in such a room.
// A microphone that is not where the rig has it looks like a delay, and all
// channels turned over alike look like none. With two microphones gains rest on
// the same signal-to-noise ratio in both; their uncertainty allows for all of the
// noise in one of them.
//
// # Use
//
//	e, err := calibration.Expect(r.Positions(), r.ReferencePoint(), rig.Degrees(90, 0), math.Inf(1), speed,
//		calibration.Doubt{Direction: 0.5 * math.Pi / 180, Placement: 0.5e-3})
//	found, err := calibration.Channels(open, e, mics, calibration.Options{})
//	// mic.GainDB = -found.Channels[m].LevelDB, mic.Delay = -found.Channels[m].Late
//
// Longer than 2,000 lines because channels and places rest on one way of
// listening, one model of arrivals and one small dense algebra, which would
// otherwise have to be exported.
//
// # Sources
//
// [Knapp & Carter 1976] C. H. Knapp, G. C. Carter, The generalized correlation
// method for estimation of time delay, IEEE Trans. ASSP 24, p. 320: weights and
// variance of the delay.
//
// [Harman & Jones 1966] H. H. Harman, W. H. Jones, Factor analysis by minimizing
// residuals (minres), Psychometrika 31, p. 351: the fit to the elements beside
// the diagonal.
//
// [Reiersøl 1945] O. Reiersøl, Confluence analysis by means of instrumental sets
// of variables, Arkiv för Matematik, Astronomi och Fysik 32A, no. 4.
//
// [Welch 1967] P. D. Welch, The use of fast Fourier transform for the estimation
// of power spectra, IEEE Trans. Audio Electroacoust. 15, p. 70.
//
// [Thrun 2005] S. Thrun, Affine structure from sound, Advances in Neural
// Information Processing Systems 18, p. 1353: the factorisation of arrivals of
// far sounds into places and directions.
//
// [Marchenko & Pastur 1967] V. A. Marchenko, L. A. Pastur, Distribution of
// eigenvalues for some sets of random matrices, Math. USSR Sbornik 1, p. 457:
// how far the eigenvalues of noise reach.
//
// [Schönemann 1966] P. H. Schönemann, A generalized solution of the orthogonal
// Procrustes problem, Psychometrika 31, p. 1.
//
// [DerSimonian & Laird 1986] R. DerSimonian, N. Laird, Meta-analysis in clinical
// trials, Controlled Clinical Trials 7, p. 177, equation 8: the variance between
// groups from that of each.
//
// [Wilson & Hilferty 1931] E. B. Wilson, M. M. Hilferty, The distribution of
// chi-square, Proc. Nat. Acad. Sci. 17, p. 684.
//
// [Huber 1964] P. J. Huber, Robust estimation of a location parameter, Ann. Math.
// Statist. 35, p. 73.
//
// [IEC 60942:2017] Electroacoustics, sound calibrators, tables 2, 4 and 7.
//
// [Harris 1978] F. J. Harris, On the use of windows for harmonic analysis with
// the discrete Fourier transform, Proc. IEEE 66, p. 51.
//
// [JCGM 100:2008] Guide to the expression of uncertainty in measurement, 5.1 and
// 6.2.
//
// [Golub & Van Loan 2013] G. H. Golub, C. F. Van Loan, Matrix Computations, 4th
// edition, section 8.5: Jacobi rotations.
package calibration
