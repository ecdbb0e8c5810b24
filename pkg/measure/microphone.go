package measure

import (
	"math"

	"alidade/pkg/audio"
)

// micLevels returns, for every microphone, its mean power over the stretches
// divided by that of the reference over the same entries, NaN where no entry
// lies inside. Microphones may be kept in longer entries than the reference.
func micLevels(mics []*Series, b int, ref Track, stretches []Stretch) ([]float64, error) {
	list := make([]float64, len(mics))
	for m, s := range mics {
		r, t, err := align(ref, s.Tracks[b])
		if err != nil {
			return nil, err
		}
		at := r.inside(stretches)
		list[m] = mean(t.Power, at) / mean(r.Power, at)
	}
	return list, nil
}

// mic returns the powers of microphone m, nil where they are not known.
func (d *bandData) mic(m int) *micPower {
	if m < 0 || m >= len(d.mics) {
		return nil
	}
	p := &d.mics[m]
	if math.IsNaN(p.noise) || math.IsNaN(p.target) {
		return nil
	}
	return p
}

// compare finds the best microphone and fills in the gains over it and over
// the named one.
func (g *Gains) compare() {
	count := 0
	var bands []int
	for b := range g.Bands {
		if g.Bands[b].SNRGain != nil {
			bands = append(bands, b)
			count = max(count, len(g.data[b].mics))
		}
	}
	best := 0.0
	for m := range count {
		var s, n float64
		for _, b := range bands {
			if p := g.data[b].mic(m); p != nil {
				s, n = s+p.target, n+p.noise
			} else {
				s = math.NaN()
			}
		}
		if snr := s / n; snr > best && !math.IsInf(snr, 0) {
			best, g.Best = snr, m
		}
	}
	for _, b := range bands {
		band, d := &g.Bands[b], &g.data[b]
		ref, _ := d.powers()
		for _, c := range []struct {
			mic  int
			into **float64
		}{{g.Best, &band.OverBest}, {g.named, &band.OverNamed}} {
			p := d.mic(c.mic)
			if p == nil || !(p.target > 0) || !(p.noise > 0) {
				continue
			}
			*c.into = number(*band.SNRGain - audio.PowerDB(p.target/p.noise/(ref/d.noise.refMean)))
		}
	}
}
