// Package scenario renders takes of imagined places whose truth is known: what
// sounded where, how loud, in which room, and what was wrong with the rig.
//
// # Conventions
//
// A source's level is that of its direct sound at the rig's reference point
// while it is on (while it is at its place of time 0, if it moves). Its clock
// is set so that sound it gives off at its time 0 passes the reference point at
// frame 0 of the take; from then on distance takes its time, so that a source
// that comes nearer is heard higher. Amplitude falls with distance; a far
// source has plane waves. Outdoors there is no ground, and the air takes
// nothing away.
//
// The rig file is right unless a fault says otherwise: the hardware of each
// channel has the opposite of the rig's corrections.
//
// Reflections reach down to 20 Hz; walls have no phase of their own.
//
// A take is targets plus noise; noise is interferers, diffuse noise, sensor
// noise and whatever faulty channels add. Sensor noise has its level in the take,
// whatever the gain of its channel. Noise and tones sound before frame 0 and
// after the end, where sources do not say otherwise; talkers, chirps, claps and
// recordings begin at time 0 of their source. A talker's level is the mean over
// the time it is on, its pauses included. Levels in dBFS are AES17's: a
// full-scale sine reads 0.
//
// Everything random comes from the seed. The same scenario gives the same
// samples on every run, for blocks of every size and any number of processors.
// Memory does not grow with the length of the take, unless a fault asks for a
// fraction of clipped frames.
//
// # Accuracy
//
// Delays of direct sound and of plane waves are exact within -115 dB up to 0.9
// of Nyquist, moving sources included; those of reflections within -85 dB up to
// 0.85 of Nyquist. A source that moves in a room has exact direct sound; the
// responses of its reflections are renewed every 50 mm. NoiseCovariance is that
// of the filters that make the noise, not of an ideal field.
//
// # Use
//
//	sc, err := scenario.Load("quay.yaml", data, open)
//	r, err := sc.Render(scenario.Options{})
//	meter := r.NewMeter()
//	err = r.Each(func(mix, target, noise audio.Block) error {
//		meter.Add(mix, target, noise)
//		return errors.Join(take.Write(mix), alone.Write(target), rest.Write(noise))
//	})
//	truth := meter.Truth()
//	long, err := r.FreshNoise(600, 7) // for the expected gain of some weights
//
// Longer than 2,000 lines because every word of the file has its checks, its
// default and its part in the truth.
//
// # Sources
//
// [Eyring 1930] see package acoustics: reverberation time and absorption. The
// published methods of rooms, fields and voices are named in the packages
// beneath this one, which carry them out: internal/render and internal/voice.
package scenario
