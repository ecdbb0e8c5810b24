// Package bearing finds and follows the direction of sound.
//
// A Finder listens to a take, frame by frame of a short-time transform, and
// answers with sources, directions over time and tracks. Angles are radians in
// the axes of package rig, seen from the reference point; times are seconds.
//
// # What is found
//
// A line rig measures the cone angle around its axis; the direction given for
// it is the one in front of the line, cos(angle)·axis + sin(angle)·side, with
// side = z × axis (+y for a line along x, so that azimuth is the angle from
// the axis, 0 to pi; +y as well for a vertical line, whose elevation then is
// what was measured). A flat rig is answered on the side its normal points to
// (up, if it lies level). Result.Ambiguity says so in words.
//
// # How
//
// Cross-spectra of all pairs are averaged over a window. Where the sound rises
// above its stationary floor (minimum statistics), frames count by how far
// they rise above floor and reverberation, and the floor's own cross-spectra
// are taken out; a steady sound is taken as it is. The steered response with
// phase transform over a grid gives the peaks, each line weighted by the
// coherence of the channels; lines that hold no more than side lobes of
// stronger ones do not count. Each peak is refined by maximum likelihood of one
// source in uncorrelated noise and taken out before the next is looked for.
// The windows' likelihoods, quadratic about their maxima, are added for a
// source that keeps its place, and joined into tracks by a Kalman smoother.
// The standard error comes from the spread over windows, from theory, and from
// the spread over groups of lines, which shows the reflections that shift all
// windows alike.
//
// The files follow the sound: spectra and floor (frames into cross-spectra),
// look, grid, detect and fit (one window), fuse and solve (the take), track,
// findings. They are twice as long as a package here should be because the
// window, the take and the track share one model of a place and its error,
// which would otherwise have to be exported.
//
// # Limits
//
// Four microphones that lie in no plane are taken to hear far sources: two places
// explain their three delays alike.
//
// Microphones are omnidirectional and the field is free: bodies and baffles are
// not modelled. A line in a room cannot tell a source near abeam from its
// images in floor and ceiling; its standard error allows for that. In a room
// whose reverberation is 8 dB and more above the direct sound a strong first
// reflection may be taken for the source; then two sources of like share are
// found, and the confidence is low.
//
// # Use
//
//	f, err := bearing.NewFinder(r.Positions(), r.ReferencePoint(), rate, bearing.Options{})
//	if err != nil {
//		return err
//	}
//	if _, err := audio.Copy(take, 4096, f); err != nil { // channels in rig order, corrected
//		return err
//	}
//	best, err := f.Result().Best(1)
//	if err != nil {
//		return err // no direction found: why
//	}
//	fmt.Println(best.Direction.AzimuthDeg(), best.StandardError*180/math.Pi, best.Confidence)
//
// Longer than 2,000 lines because one estimate needs all of it at once: the
// steered response, the likelihood that refines it, the floor, the reflections
// and the standard error that rests on them, and the tracks over time.
//
// # Sources
//
// [Knapp & Carter 1976] C. H. Knapp, G. C. Carter, The generalized correlation
// method for estimation of time delay, IEEE Trans. ASSP 24, p. 320.
//
// [DiBiase 2000] J. H. DiBiase, A high-accuracy, low-latency technique for
// talker localization in reverberant environments, PhD thesis, Brown
// University: steered response power with phase transform; also ch. 8 of
// M. Brandstein, D. Ward (eds.), Microphone Arrays, Springer 2001.
//
// [Jacovitti & Scarano 1993] G. Jacovitti, G. Scarano, Discrete time
// techniques for time delay estimation, IEEE Trans. SP 41, p. 525.
//
// [Martin 2001] R. Martin, Noise power spectral density estimation based on
// optimal smoothing and minimum statistics, IEEE Trans. SAP 9, p. 504.
//
// [Stoica & Nehorai 1990] P. Stoica, A. Nehorai, Performance study of
// conditional and unconditional direction-of-arrival estimation, IEEE Trans.
// ASSP 38, p. 1783.
//
// [Rauch, Tung & Striebel 1965] H. E. Rauch, F. Tung, C. T. Striebel, Maximum
// likelihood estimates of linear dynamic systems, AIAA J. 3, p. 1445.
//
// [Singer 1970] R. A. Singer, Estimating optimal tracking filter performance
// for manned maneuvering targets, IEEE Trans. AES 6, p. 473.
//
// [Schmidt 1972] R. O. Schmidt, A new approach to geometry of range difference
// location, IEEE Trans. AES 8, p. 821 (from memory).
//
// [Harris 1978] F. J. Harris, On the use of windows for harmonic analysis with
// the discrete Fourier transform, Proc. IEEE 66, p. 51.
//
// [Huber 1964] P. J. Huber, Robust estimation of a location parameter, Ann.
// Math. Statist. 35, p. 73.
//
// [Satterthwaite 1946] F. E. Satterthwaite, An approximate distribution of
// estimates of variance components, Biometrics Bulletin 2, p. 110.
//
// [Welch 1967] P. D. Welch, The use of fast Fourier transform for the
// estimation of power spectra, IEEE Trans. Audio Electroacoust. 15, p. 70.
//
// [Swinbank & Purser 2006] R. Swinbank, R. J. Purser, Fibonacci grids: a novel
// approach to global modelling, Q. J. R. Meteorol. Soc. 132, p. 1769.
//
// [Van Trees 2002] H. L. Van Trees, Optimum Array Processing, Wiley.
//
// [Abramowitz & Stegun 1964] M. Abramowitz, I. A. Stegun, Handbook of
// Mathematical Functions, NBS.
package bearing
