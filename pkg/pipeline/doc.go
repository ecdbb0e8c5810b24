// Package pipeline takes one recording from file to result.
//
// Run reads the rig and the take, designs the beam, and makes one pass: the
// take's channels in rig order, with gain and polarity corrections and the
// high-pass, go into the input meter and the beam; the beam goes into the
// output meter and the track. From the two meters come the segments, the gains
// and their intervals; from the filters as built comes what they should be.
// Everything is gathered in a Result, plain data whose JSON form is the report.
//
// The reference of every level is the mean power over the used microphones,
// corrected and high-passed; the gain of the track is in none of them. Files
// appear under their names whole or not at all.
//
// A take is one file or several: a set of files whose channels lie side by side
// (a name with {ch} in it, files listed, or the set that iXML names), a chain
// of files that follow each other (listed, or found by time reference and
// name), or both. The track carries what the take carries, as far as it holds.
//
// Where the direction is to be found, a pass over the take comes first: package
// bearing hears the same corrected channels, and the beam points to the source
// that was asked for, or goes along its track. Locate is that pass alone.
//
// # Use
//
//	spec := pipeline.Spec{Take: []string{"take.wav"}, RigPath: "rig.yaml",
//		Options: pipeline.Options{Toward: "60"}}
//	render := pipeline.Renderers{pipeline.ReportJSON: report.JSON, pipeline.ReportCSV: report.CSV}
//	result, err := pipeline.Run(ctx, spec, render, pipeline.Watch{})
//
// Longer than 2,000 lines because the plain data of the result, the words of
// the options, the files of a take and their metadata are half of it, and the run needs all
// three.
//
// # Sources
//
// The figures are those of packages measure (levels, bands, gains) and response
// (predictions), which name theirs.
package pipeline
