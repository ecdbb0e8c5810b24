// Package render is sound on its way from a source to the samples of a channel:
// the dry signals, where their sources are, what the place does to them, what
// diffuse fields are made of, and what a channel does at last.
//
// # Conventions
//
// A Mono is a dry signal, an Emitter adds sound at all microphones, a Line makes
// samples of the sound at one. All of them give frame after frame, HopFrames at
// a time where it matters, and hold no clock and no randomness of their own:
// random streams come from Stream, named by a seed, a label and an index.
// Values are float64, full scale 1. Frames before the take have negative
// numbers; whoever needs the past of its input says how much (Lead).
//
//	bank := render.DirectBank(track, mics, rate)
//	in := render.Starting(first-bank.Lead(), render.NewTalker(rate, 115, rng))
//	e := render.NewMixer(bank, []render.Mono{in})
//	e.Add(rows) // rows[m][i], HopFrames more frames
//
// # Sources
//
// See package scenario.
package render
