// Package quality says whether a take is fit to use: what is wrong with each
// channel, and what does not agree between the channels and the rig.
//
// # Conventions
//
// Channel m of what is written is microphone m of the list given, as it was
// recorded: the corrections of the rig are taken into account here. Findings
// count channels of the take from 1. Levels in dBFS are AES17's (a full-scale
// sine reads 0), peaks are re 1.0, delays are seconds or microseconds and
// positive where a channel is late. What could not be judged is nil or stands
// in Result.NotJudged with its reason; it never counts as good.
//
// Microphones are compared as a whole: what all channels share (one gain, one
// delay, a rig turned as one) is no fault. One direction cannot show
// everything: channels of a line mirrored end for end look like a source from
// the other side, two microphones that hear the source at the same time can be
// swapped unseen, and on a line or flat rig a scale error shows only where the
// sound comes along the rig.
//
// A take may be inspected in stretches (Inspector.Gap); Inspector.Clocks says
// how far the clocks of several recorders run apart.
//
// Memory is bounded by the number of channels, not by the length of the take.
// The findings are the same for blocks of every size.
//
// # Use
//
//	q, err := quality.New(mics, 48000, quality.Options{Speed: 343.2})
//	_, err = audio.Copy(take, 4096, q) // take: channel m is mics[m]
//	if err := q.Close(); err != nil {
//		return err
//	}
//	r := q.Result()
//	for _, f := range r.Findings {
//		use(f.Code, f.Severity, f.Channels, f.Message())
//	}
//
// Longer than 2,000 lines because every fault has its measurement, its limit and
// its words.
//
// # Sources
//
// [AES17] AES17-2020: level of a full-scale sine.
//
// [BS.1770] Recommendation ITU-R BS.1770-5, annex 2: peaks between samples by
// fourfold oversampling.
//
// [Knapp & Carter 1976] C. H. Knapp and G. C. Carter, The generalized
// correlation method for estimation of time delay, IEEE Trans. ASSP 24 (1976),
// pp. 320-327: weights by coherence.
//
// [Welch 1967] P. D. Welch, The use of fast Fourier transform for the
// estimation of power spectra, IEEE Trans. Audio Electroacoust. 15 (1967).
//
// Wind is told from sound by its coherence, which falls to nothing over
// distances at which that of sound is near one: G. M. Corcos, Resolution of
// pressure in turbulence, J. Acoust. Soc. Am. 35 (1963), p. 192.
package quality
