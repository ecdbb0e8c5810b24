package measure

import "fmt"

// Isolated is a scene recorded once with only the noise and once with only the
// target sounding, both through the weights of the mix.
type Isolated struct {
	Noise, Target Pair
	// NoiseIn and TargetIn are the stretches to use of each; nil is all.
	NoiseIn, TargetIn []Stretch
	// Named is the microphone (0-based) to compare with, -1 for none.
	Named int
	// NoIntervals leaves the intervals nil, which are most of the work.
	NoIntervals bool
}

// IsolatedGain returns the figures of every band from isolated noise and
// isolated target: the gain of these weights for what sounded, with no
// estimate in it (shadow filtering). The intervals of the noise reduction and
// of the SNR gain say how far the expected figure of the noise field may lie
// from it; the target counts as it is, so its change has no interval.
func IsolatedGain(s Isolated) (*Gains, error) {
	if err := s.Noise.validate("isolated noise"); err != nil {
		return nil, err
	}
	if err := s.Target.validate("isolated target"); err != nil {
		return nil, err
	}
	if len(s.Noise.Reference.Tracks) != len(s.Target.Reference.Tracks) {
		return nil, fmt.Errorf("measure: %d bands of isolated noise, %d of isolated target",
			len(s.Noise.Reference.Tracks), len(s.Target.Reference.Tracks))
	}
	if count := min(len(s.Noise.Microphones), len(s.Target.Microphones)); s.Named >= count && s.Named >= 0 {
		return nil, fmt.Errorf("measure: named microphone %d: there are %d", s.Named+1, count)
	}
	g := &Gains{Best: -1, named: s.Named, isolated: true, plain: s.NoIntervals}
	for b := range s.Noise.Reference.Tracks {
		nr, no, err := align(s.Noise.Reference.Tracks[b], s.Noise.Output.Tracks[b])
		if err != nil {
			return nil, fmt.Errorf("measure: isolated noise: %w", err)
		}
		tr, to, err := align(s.Target.Reference.Tracks[b], s.Target.Output.Tracks[b])
		if err != nil {
			return nil, fmt.Errorf("measure: isolated target: %w", err)
		}
		if nr.Band != tr.Band {
			return nil, fmt.Errorf("measure: isolated noise in the band %g Hz beside target in %g Hz", nr.Band.NominalHz, tr.Band.NominalHz)
		}
		d := bandData{isolated: true,
			noise:  newPart(nr, no, nr.inside(s.NoiseIn)),
			target: newPart(tr, to, tr.inside(s.TargetIn)),
		}
		noise, err := micLevels(s.Noise.Microphones, b, nr, s.NoiseIn)
		if err != nil {
			return nil, fmt.Errorf("measure: isolated noise: %w", err)
		}
		target, err := micLevels(s.Target.Microphones, b, tr, s.TargetIn)
		if err != nil {
			return nil, fmt.Errorf("measure: isolated target: %w", err)
		}
		for m := range min(len(noise), len(target)) {
			d.mics = append(d.mics, micPower{noise[m] * d.noise.refMean, target[m] * d.target.refMean})
		}
		g.data = append(g.data, d)
	}
	g.fill(s.Noise.Reference.Bands())
	return g, nil
}
