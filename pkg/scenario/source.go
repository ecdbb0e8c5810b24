package scenario

import (
	"fmt"
	"math"

	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
	"alidade/pkg/scenario/internal/voice"
)

// newTrack returns the track of a valid source.
func newTrack(s *Source, ref rig.Point, speed float64) *render.Track {
	tr := &render.Track{Ref: ref, Speed: speed}
	stops := s.Path
	if s.At != nil {
		stops = []Waypoint{{Place: *s.At}}
	}
	for i, w := range stops {
		tr.Times = append(tr.Times, w.AtS)
		if w.PointM != nil {
			tr.Knots = append(tr.Knots, [3]float64{w.PointM[0], w.PointM[1], w.PointM[2]})
			continue
		}
		tr.Polar = true
		tr.Far = w.DistanceM == 0
		azimuth := *w.AzimuthDeg
		if i > 0 {
			last := tr.Knots[i-1][0] * 180 / math.Pi
			azimuth = last + rig.WrapDeg(azimuth-last)
		}
		tr.Knots = append(tr.Knots, [3]float64{azimuth * math.Pi / 180, w.ElevationDeg * math.Pi / 180, w.DistanceM})
	}
	if !tr.Far {
		tr.Origin = tr.Point(0).Distance(ref)
	}
	return tr
}

// signal returns the dry signal of source i from frame first on, before its
// level; calibrated reports that its power is 1 in the mean already.
func (p *plan) signal(i int, seed uint64, first int64) (sig render.Mono, calibrated bool, err error) {
	s := &p.sc.Sources[i]
	rate := p.sc.RateHz
	rng := render.Stream(seed, "source", i)
	switch s.Kind {
	case KindNoise:
		sig, calibrated = render.Noise(s.Spectrum, rate, rng), true
	case KindTone:
		omega := 2 * math.Pi * or(s.Hz, 1000) / float64(rate)
		sig = &render.Indexed{Frame: first, Value: func(frame int64) float64 { return math.Sqrt2 * math.Sin(omega*float64(frame)) }}
		calibrated = true
	case KindChirp:
		sig = &render.Indexed{Frame: first, Value: render.Chirp(or(s.FromHz, 100), or(s.ToHz, 0.4*float64(rate)), or(s.EveryS, 1), rate)}
	case KindClaps:
		sig = render.Starting(first, &render.Claps{Rng: rng, Rate: float64(rate), Period: max(1, int64(or(s.EveryS, 1)*float64(rate)))})
	case KindTalker:
		sig = render.Starting(first, voice.New(rate, or(s.Hz, 115), rng))
	case KindFile:
		sig = &render.Recording{X: p.recordings[i], Frame: first}
	default:
		return nil, false, fmt.Errorf("source %q: kind %q is not known", s.Name, s.Kind)
	}
	if s.OnS != nil {
		g := &render.Gated{In: sig, Frame: first, Edge: int64(0.005 * float64(rate))}
		for _, on := range s.OnS {
			g.On = append(g.On, [2]int64{int64(math.Round(on[0] * float64(rate))), int64(math.Round(on[1] * float64(rate)))})
		}
		sig = g
	}
	return sig, calibrated, nil
}
