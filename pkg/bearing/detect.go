package bearing

import "math"

// lift returns the direction without information at p: the direction itself
// for a solid rig, nil for the others.
func (s *space) lift(p place) []float64 {
	if s.dim < 3 {
		return nil
	}
	return []float64{p.y[0], p.y[1], p.y[2]}
}

// unknowns is the number of coordinates of a place that are fitted.
func (l *looker) unknowns() int {
	if l.set.near {
		return l.space.dim + 1
	}
	return l.space.dim
}

// refine climbs from p to the maximum of the likelihood of one source in what
// is left. cos and sin are overwritten with its phases, z with its coherent
// part.
func (l *looker) refine(p place, cos, sin, z []float64) place {
	n := l.unknowns()
	longest := l.radius / 3
	for round := range 3 {
		l.phases(cos, sin, p)
		l.aligned(z, l.rr, l.ri, cos, sin)
		l.likelihood(z)
		value, slope, bend := l.climb(p, nil)
		for range 6 {
			next, moved, ok := l.newton(p, slope, bend, n, longest)
			if !ok {
				break
			}
			v, s, b := l.climb(next, nil)
			for try := 0; v < value && try < 4; try++ {
				// Half way back.
				for a := range l.space.dim {
					next.y[a] = (next.y[a] + p.y[a]) / 2
				}
				next.kappa = (next.kappa + p.kappa) / 2
				next = l.space.clampPlace(next, l.set)
				v, s, b = l.climb(next, nil)
			}
			if v < value {
				break
			}
			p, value, slope, bend = next, v, s, b
			if moved < 1e-7 {
				break
			}
		}
		if round == 2 {
			break
		}
	}
	l.phases(cos, sin, p)
	l.aligned(z, l.rr, l.ri, cos, sin)
	return p
}

// clampPlace brings p back to what is possible; the curvature may fall a
// little below zero, so that that of a far source is not biased.
func (s *space) clampPlace(p place, set *settings) place {
	k := p.kappa
	p = s.clamp(p, set.maxKappa)
	if !set.near {
		p.kappa = 0
		return p
	}
	p.kappa = math.Min(math.Max(k, -set.dKappa), set.maxKappa)
	return p
}

// newton takes one step, at most longest in the cosines.
func (l *looker) newton(p place, slope vec4, bend mat4, n int, longest float64) (place, float64, bool) {
	for a := range n {
		if !(bend[a][a] > 0) {
			return p, 0, false
		}
		// A little damping keeps a saddle from throwing the step.
		bend[a][a] *= 1 + 1e-6
	}
	inv, ok := bend.invert(n, l.space.lift(p))
	if !ok && n > l.space.dim {
		// The curvature cannot be told from the direction here: leave it.
		n = l.space.dim
		inv, ok = bend.invert(n, l.space.lift(p))
	}
	if !ok {
		return p, 0, false
	}
	step := inv.times(slope)
	size := 0.0
	for a := range l.space.dim {
		size += step[a] * step[a]
	}
	size = math.Sqrt(size)
	f := 1.0
	if size > longest {
		f = longest / size
	}
	if k := math.Abs(step[l.space.dim]); n > l.space.dim && k*f > 2*l.set.dKappa {
		f = 2 * l.set.dKappa / k
	}
	next := p
	for a := range l.space.dim {
		next.y[a] += f * step[a]
	}
	if n > l.space.dim {
		next.kappa += f * step[l.space.dim]
	}
	next = l.space.clampPlace(next, l.set)
	return next, l.space.apart(p.y, next.y) + math.Abs(p.kappa-next.kappa)*l.space.geo.Extent, true
}

// response is the steered response at the phases given, over all pairs.
func (l *looker) response(cos, sin []float64) float64 {
	K := l.bins
	sum := 0.0
	for c := range l.pairs {
		w := l.phat[c*K : c*K+K]
		for k := range w {
			sum += w[k] * (l.rr[c*K+k]*cos[c*K+k] - l.ri[c*K+k]*sin[c*K+k])
		}
	}
	return sum / (l.pairTotal * float64(l.alivePairs))
}

// isDiffuse says whether the coherence that is loaded is that of diffuse sound
// rather than of a wave with the phases given: the sound field of every line
// is fitted with both, and the wave keeps less than half of what it has alone.
func (l *looker) isDiffuse(cos, sin []float64) bool {
	if l.alivePairs < 3 {
		return false // one complex number a line cannot tell them apart
	}
	K := l.bins
	z, d, g, dd := make([]float64, K), make([]float64, K), make([]float64, K), make([]float64, K)
	l.aligned(z, l.gr, l.gi, cos, sin)
	for c, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		for k := range K {
			gamma := l.diffuse[c*K+k]
			d[k] += gamma * l.gr[c*K+k]
			g[k] += gamma * cos[c*K+k]
			dd[k] += gamma * gamma
		}
	}
	n := float64(l.alivePairs)
	var alone, both float64
	tmp := make([]float64, K)
	for _, s := range []*[]float64{&z, &d, &g, &dd} {
		boxSmooth(tmp, *s, 4)
		copy(*s, tmp)
	}
	for k := range K {
		zk, dk, gk, ddk := z[k], d[k]/n, g[k]/n, dd[k]/n
		alone += math.Max(zk, 0)
		// Least squares of two parts, neither negative.
		det := ddk - gk*gk
		wave, field := zk, 0.0
		if det > 1e-6*ddk {
			wave, field = (zk*ddk-dk*gk)/det, (dk-zk*gk)/det
			if field < 0 {
				wave = zk
			}
			if wave < 0 {
				wave = 0
			}
		}
		both += math.Min(math.Max(wave, 0), 1)
	}
	return both < 0.5*alone
}

// look finds the sources of the window that is loaded. The reason is empty if
// there are any.
func (l *looker) look(window int, active bool) (found []sighting, reason string) {
	var places []place
	K := l.bins
	z := make([]float64, K)
	first := 0.0
	searched := false
	for len(places) < l.set.Sources {
		l.grid.search(l.rr, l.ri, l.phat, K, l.total)
		searched = true
		if len(places) == 0 {
			copy(l.firstMap, l.grid.value)
		}
		d, v := l.grid.best(l.space, places, l.radius)
		if d < 0 || v < detectSigma*l.noise || v < detectFloor || v < secondPeak*first {
			if len(places) == 0 {
				reason = "the channels are not coherent: noise without a direction"
			}
			break
		}
		j := len(places)
		p := l.refine(l.grid.points[d], l.cos[j], l.sin[j], z)
		near := false
		for _, q := range places {
			near = near || l.space.apart(p.y, q.y) < l.radius/2
		}
		if near {
			break
		}
		if j == 0 && l.isDiffuse(l.cos[0], l.sin[0]) {
			return nil, "the sound is diffuse: it comes from all sides"
		}
		if first == 0 {
			first = v
		}
		places = append(places, p)
		l.apportion(len(places))
		searched = false
		if len(places) > 1 {
			// The earlier ones again, without the new one.
			for i := range places {
				l.putBack(i, 1)
				places[i] = l.refine(places[i], l.cos[i], l.sin[i], z)
				l.apportion(len(places))
			}
		}
	}
	if len(places) == 0 {
		return nil, reason
	}
	if !searched {
		l.grid.search(l.rr, l.ri, l.phat, K, l.total)
	}
	_, rest := l.grid.best(l.space, places, l.radius)
	rest = math.Max(rest, 2*l.noise)
	for j, p := range places {
		l.putBack(j, 1)
		l.aligned(z, l.rr, l.ri, l.cos[j], l.sin[j])
		l.likelihood(z)
		g := sighting{window: window, at: p, active: active, rest: rest}
		g.groups = make([]groupSum, l.groups)
		_, g.score, g.info = l.climb(p, g.groups)
		g.value = l.response(l.cos[j], l.sin[j])
		g.fit = l.agreement(j)
		l.putBack(j, -1)
		if _, ok := g.info.invert(l.space.dim, l.space.lift(p)); ok && g.value > rest/2 {
			found = append(found, g)
		}
	}
	if len(found) == 0 {
		return nil, "no peak of the steered response is sharp enough"
	}
	return found, ""
}

// agreement returns, for each microphone, how well its pairs agree with source
// j: the part of their coherence that is in phase, 1 at best; -1 for a dead
// one.
func (l *looker) agreement(j int) []float32 {
	K := l.bins
	sum, all := make([]float64, len(l.alive)), make([]float64, len(l.alive))
	for c, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		in, mag := 0.0, 0.0
		for k := range K {
			// Lines where this source is the stronger part.
			w := l.amp[j][k] * l.coh[k]
			m := math.Hypot(l.rr[c*K+k], l.ri[c*K+k])
			if m == 0 || w == 0 {
				continue
			}
			in += w * (l.rr[c*K+k]*l.cos[j][c*K+k] - l.ri[c*K+k]*l.sin[j][c*K+k]) / m
			mag += w
		}
		sum[q.i] += in
		sum[q.j] += in
		all[q.i] += mag
		all[q.j] += mag
	}
	fit := make([]float32, len(l.alive))
	for m := range fit {
		fit[m] = -1
		if all[m] > 0 {
			fit[m] = float32(sum[m] / all[m])
		}
	}
	return fit
}
