// Package response predicts what a beam should do: what it does to sound from
// every direction, to uncorrelated and to diffuse noise, and where its rig
// cannot help.
//
// Everything is computed from the filters as they were built
// (beam.Filters.Response), not from the design they came from, and from the
// places of the microphones; never from recorded sound. So the prediction and
// the measurement are independent witnesses. Microphones are taken as
// omnidirectional in a free field.
//
// # Conventions
//
// Angles, delays and the steering vector are those of packages rig and
// acoustics. Levels are 10·log10 of power ratios. Diffuse noise is spherically
// isotropic with the coherence Γ = sin(kd)/(kd). Reference of every gain is
// the mean power over the microphones. A quantity that is not defined is nil
// or comes with ok = false, never a number.
//
// # Use
//
//	white, diffuse, target := response.BandGains(f, mics, look, ref, c, 891, 1122)
//	from, ok := response.GratingLimit(mics, look.Direction(ref), c, 24000)
//
//	b := response.Beam{Transfer: f, Mics: mics, Reference: ref, Look: look, Speed: c}
//	for _, at := range b.Predict(response.NewCut(mics, look.Direction(ref)), []float64{1000, 2000}) {
//		use(at.Beamwidth, at.SideLobes, at.DirectivityIndexDB) // Beamwidth is nil if not defined
//	}
//
// # Sources
//
// [Van Trees 2002] H. L. Van Trees, Optimum Array Processing, Wiley 2002:
// sections 2.4 (grating lobes) and 2.6 (directivity, white noise gain); section
// numbers from memory.
//
// [Cook 1955] R. K. Cook, R. V. Waterhouse, R. D. Berendt, S. Edelman, M. C.
// Thompson, Measurement of correlation coefficients in reverberant sound
// fields, J. Acoust. Soc. Am. 27 (1955), p. 1072.
//
// [Cron & Sherman 1962] B. F. Cron, C. H. Sherman, Spatial-correlation
// functions for various noise models, J. Acoust. Soc. Am. 34 (1962), p. 1732.
//
// [Gilbert & Morgan 1955] E. N. Gilbert, S. P. Morgan, Optimum design of
// directive antenna arrays subject to random variations, Bell Syst. Tech. J. 34
// (1955), p. 637.
package response
