package measure

import (
	"fmt"
	"math"
)

// SNRGain returns the figures of every band of a scene.
func SNRGain(s Scene) (*Gains, error) {
	if err := s.Pair.validate("mix"); err != nil {
		return nil, err
	}
	if s.Named >= len(s.Microphones) && s.Named >= 0 {
		return nil, fmt.Errorf("measure: named microphone %d: there are %d", s.Named+1, len(s.Microphones))
	}
	g := &Gains{Best: -1, named: s.Named, plain: s.NoIntervals}
	for b := range s.Reference.Tracks {
		ref, out, err := align(s.Reference.Tracks[b], s.Output.Tracks[b])
		if err != nil {
			return nil, fmt.Errorf("measure: %w", err)
		}
		d := bandData{
			noise:  newPart(ref, out, ref.inside(orNone(s.Noise))),
			target: newPart(ref, out, ref.inside(orNone(s.Target))),
		}
		noise, err := micLevels(s.Microphones, b, ref, orNone(s.Noise))
		if err != nil {
			return nil, fmt.Errorf("measure: %w", err)
		}
		target, err := micLevels(s.Microphones, b, ref, orNone(s.Target))
		if err != nil {
			return nil, fmt.Errorf("measure: %w", err)
		}
		for m := range noise {
			n := noise[m] * d.noise.refMean
			d.mics = append(d.mics, micPower{n, target[m]*d.target.refMean - n})
		}
		g.data = append(g.data, d)
	}
	g.fill(s.Reference.Bands())
	return g, nil
}

// fill makes the figures of all bands from the data.
func (g *Gains) fill(bands []Band) {
	var parts []*part
	for b := range g.data {
		parts = append(parts, &g.data[b].noise)
	}
	g.slowS = slowBlock(parts)
	for b := range g.data {
		g.data[b].slowS, g.data[b].plain = g.slowS, g.plain
		g.Bands = append(g.Bands, g.data[b].gain(bands[b]))
	}
	g.compare()
}

// orNone makes a nil list of stretches an empty one.
func orNone(s []Stretch) []Stretch {
	if s == nil {
		return []Stretch{}
	}
	return s
}

func (p Pair) validate(name string) error {
	if p.Reference == nil || p.Output == nil {
		return fmt.Errorf("measure: %s: reference or output is missing", name)
	}
	if len(p.Reference.Tracks) != len(p.Output.Tracks) {
		return fmt.Errorf("measure: %s: %d bands at the reference, %d in the output", name, len(p.Reference.Tracks), len(p.Output.Tracks))
	}
	for _, s := range append([]*Series{p.Reference, p.Output}, p.Microphones...) {
		if s == nil || len(s.Tracks) != len(p.Reference.Tracks) {
			return fmt.Errorf("measure: %s: a microphone has other bands than the reference", name)
		}
		for b := range s.Tracks {
			if err := s.Tracks[b].validate(); err != nil {
				return fmt.Errorf("measure: %s: %w", name, err)
			}
		}
	}
	return nil
}

// gain makes the figures of one band.
func (d *bandData) gain(band Band) BandGain {
	g := BandGain{Band: band}
	n, a := &d.noise, &d.target
	switch {
	case n.count == 0:
		g.NoiseReason = NoNoise
	case n.short():
		g.NoiseReason = TooShort
	case !(n.refMean > 0) || !(n.outMean > 0):
		g.NoiseReason = Silent
	}
	if g.NoiseReason != "" {
		g.TargetReason = g.NoiseReason
		g.Flags = append(g.Flags, TargetUnmeasurable)
		return g
	}
	g.NoiseSamples = n.seconds * band.Width()
	g.NoiseIn, g.NoiseOut = level(n.refMean), level(n.outMean)
	g.NoiseReduction = number(*g.NoiseIn - *g.NoiseOut)
	s := n.spread(1/n.refMean, -1/n.outMean, 0)
	g.NoiseBlockS = float64(s.block) * n.hopS
	if !d.plain {
		bias := 0.5 * (n.spread(0, 1/n.outMean, 0).variance - n.spread(1/n.refMean, 0, 0).variance)
		g.NoiseReductionCI = interval(math.Log(n.refMean/n.outMean)-bias, s)
	}
	sparse := g.NoiseSamples < SparseSamples || n.seconds < SparseSeconds || n.seconds < SparseBlocks*g.NoiseBlockS
	if sparse {
		g.Flags = append(g.Flags, Sparse)
	}
	switch {
	case a.count == 0:
		g.TargetReason = NoTarget
	case a.short():
		g.TargetReason = TooShort
	default:
		g.TargetSamples = a.seconds * band.Width()
		refS, outS := d.powers()
		if d.isolated {
			if !(refS > 0) || !(outS > 0) {
				g.TargetReason = Silent
				break
			}
			g.target(d, refS, outS)
			break
		}
		if refS <= d.above(1, 0).half() || outS <= d.above(0, 1).half() {
			g.TargetReason = NotAboveNoise
			break
		}
		g.target(d, refS, outS)
	}
	if g.TargetReason != "" {
		g.Flags = append(g.Flags, TargetUnmeasurable)
	}
	return g
}

// target fills in the figures of the target from its powers at the reference
// and in the output.
func (g *BandGain) target(d *bandData, refS, outS float64) {
	n, a := &d.noise, &d.target
	g.TargetIn, g.TargetOut = level(refS), level(outS)
	g.TargetChange = number(*g.TargetOut - *g.TargetIn)
	g.SNRIn, g.SNROut = number(*g.TargetIn-*g.NoiseIn), number(*g.TargetOut-*g.NoiseOut)
	g.SNRGain = number(*g.NoiseReduction + *g.TargetChange)
	if d.isolated {
		if d.plain {
			return
		}
		ci := [2]float64{g.NoiseReductionCI[0] + *g.TargetChange, g.NoiseReductionCI[1] + *g.TargetChange}
		g.SNRGainCI = &ci
		return
	}
	g.TargetBlockS = math.Max(float64(a.spread(-1/refS, 1/outS, 0).block)*a.hopS, d.slowS)
	if !d.plain {
		g.TargetChangeCI = d.selected(math.Log(outS/refS), -1/refS, 1/outS, 0, 0)
		g.SNRGainCI = d.selected(math.Log(outS/refS*n.refMean/n.outMean), -1/refS, 1/outS, 1/n.refMean, -1/n.outMean)
	}
	if !g.Sparse() && (g.TargetSamples < SparseSamples || math.Min(a.seconds, n.seconds) < SparseBlocks*d.slowS ||
		a.seconds < SparseSeconds || a.seconds < SparseBlocks*g.TargetBlockS) {
		g.Flags = append(g.Flags, Sparse)
	}
}

// interval is the 95 % interval in decibels about centre, a natural logarithm
// of a power ratio.
func interval(centre float64, s spread) *[2]float64 {
	h := s.half()
	return &[2]float64{dbPerNeper * (centre - h), dbPerNeper * (centre + h)}
}

// spread is the spread of an estimate with the influences a and b of the target
// power at reference and output, and c and e of the noise power. The target
// power is that of the target entries less that of the noise entries. The
// target entries hold noise too: they count at least with the spread that noise
// of their length has, so that a gust that the target hides is not taken for
// certainty.
func (d *bandData) spread(a, b, c, e float64) spread {
	t := d.target.spread(a, b, d.slowS)
	if n := d.noiseIn(a, b); n.variance > t.variance {
		t = n
	}
	return t.plus(d.noise.spread(c-a, e-b, d.slowS))
}

// noiseIn is the spread that a·ref + b·out of the noise alone has over as much
// time as the target entries cover.
func (d *bandData) noiseIn(a, b float64) spread {
	s := d.noise.spread(a, b, d.slowS)
	s.variance *= d.noise.seconds / d.target.seconds
	return s
}

// above is the spread of the target power a·ref + b·out if there is no target.
func (d *bandData) above(a, b float64) spread {
	s := d.noise.spread(a, b, d.slowS)
	over := s
	over.variance *= d.noise.seconds / d.target.seconds
	return over.plus(s)
}

// slowBlock is the block length of the noise level, seconds: of the mean of
// the bands with the shortest entries, each over its own mean. It is 0 for
// noise whose level is steady. Gusts raise all bands together and show here
// when single bands hide them; they cancel in the noise reduction, but not in
// what is left when the noise is taken from the target.
func slowBlock(parts []*part) float64 {
	hop := math.Inf(1)
	for _, p := range parts {
		if p.count > 0 && p.refMean > 0 {
			hop = math.Min(hop, p.hopS)
		}
	}
	var z []float64
	var at []int
	for _, p := range parts {
		if p.hopS > hop*(1+1e-9) || !(p.refMean > 0) {
			continue
		}
		own, places := p.residuals(nil, nil, 1/p.refMean, 0)
		if z == nil {
			z, at = own, places
			continue
		}
		for i := range min(len(z), len(own)) {
			z[i] += own[i]
		}
	}
	rho, n := neighbours(z, at)
	if rho < steadyNoise {
		return 0
	}
	return hop * float64(andrews(rho, n))
}

// steadyNoise is the autocorrelation of neighbouring entries up to which the
// noise level counts as steady. Half overlapped Hann windows have 0.03.
const steadyNoise = 0.3

// selected is the interval about centre of an estimate with the influences a
// and b of the target powers at reference and output, c and e of the noise
// powers. It reaches further on the side to which the choice of bands with
// significant power has drawn the estimate: by the overshoot of that power,
// times its correlation with the estimate.
func (d *bandData) selected(centre, a, b, c, e float64) *[2]float64 {
	s := d.spread(a, b, c, e)
	ci := interval(centre, s)
	ref, out := d.powers()
	for _, gate := range []struct{ ref, out float64 }{{1 / ref, 0}, {0, 1 / out}} {
		t := d.spread(gate.ref, gate.out, 0, 0)
		u := d.above(gate.ref, gate.out)
		if !(t.variance > 0) || !(s.variance > 0) || !(u.variance > 0) {
			continue
		}
		both := d.spread(a+gate.ref, b+gate.out, c, e)
		rho := (both.variance - s.variance - t.variance) / (2 * math.Sqrt(s.variance*t.variance))
		rho = math.Max(-1, math.Min(1, rho))
		far := dbPerNeper * math.Abs(rho) * overshoot(1/math.Sqrt(u.variance), studentT(u.dof)) * math.Sqrt(s.variance)
		if rho > 0 {
			ci[0] -= far
		} else {
			ci[1] += far
		}
	}
	return ci
}
