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
	for range 3 {
		begin := p
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
			if moved < settledStep {
				break
			}
		}
		if l.space.apart(begin.y, p.y) < 10*settledStep {
			break // the weights would not change
		}
	}
	l.phases(cos, sin, p)
	l.aligned(z, l.rr, l.ri, cos, sin)
	return p
}

// settledStep is a step in cosines that is not worth another: 0.001°, and
// what is left of the slope is kept with the sighting.
const settledStep = 2e-5

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

// lead says how far one sighting comes before another in the same window.
type lead struct {
	a, b   int
	amount float64
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
		// All of them again, without the others and without what is diffuse.
		for range 2 {
			moved := 0.0
			for i := range places {
				before := places[i].y
				l.putBack(i, 1)
				places[i] = l.refine(places[i], l.cos[i], l.sin[i], z)
				l.apportion(len(places))
				moved = math.Max(moved, l.space.apart(before, places[i].y))
			}
			if moved < 50*settledStep {
				break
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
	l.places = places
	l.leads = l.leads[:0]
	var index []int
	for j, p := range places {
		l.putBack(j, 1)
		l.aligned(z, l.rr, l.ri, l.cos[j], l.sin[j])
		l.likelihood(z)
		g := sighting{window: window, at: p, active: active, rest: rest}
		g.groups = make([]groupSum, l.groups)
		_, g.score, g.info = l.climb(p, g.groups)
		g.value = l.response(l.cos[j], l.sin[j])
		g.blur, g.rest2 = l.blur(j)
		g.fit = l.agreement(j)
		l.putBack(j, -1)
		if _, ok := g.info.invert(l.space.dim, l.space.lift(p)); ok && g.value > rest/2 {
			found = append(found, g)
			index = append(index, j)
		}
	}
	for a := range found {
		for b := a + 1; b < len(found); b++ {
			l.leads = append(l.leads, lead{a, b, l.lead(index[a], index[b])})
		}
	}
	if len(found) == 0 {
		return nil, "no peak of the steered response is sharp enough"
	}
	return found, ""
}

// blur measures the reflections that lie in with source j, which is loaded and
// put back: epsilon² · sum over lines and pairs of w c, with epsilon² the power
// of the coherence left without the source, less what chance leaves, re that of
// the source. A perturbation of relative size epsilon that were alike at all
// lines would shift the maximum by the square root of blur/information.
func (l *looker) blur(j int) (blur, ratio float64) {
	K := l.bins
	var rest, own, weight float64
	left := make([]float64, K)
	for c, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		for k := range K {
			re := l.rr[c*K+k] - l.amp[j][k]*l.cos[j][c*K+k]
			im := l.ri[c*K+k] + l.amp[j][k]*l.sin[j][c*K+k]
			left[k] += (re*re + im*im) / float64(l.alivePairs)
		}
	}
	for k, w := range l.w {
		if w == 0 {
			continue
		}
		c := l.amp[j][k]
		chance := math.Max(0, l.level[k]*l.level[k]-c*c) / math.Max(l.snap[k], 1)
		// Below -27 dB lie the ends of the frames and the tables, not the room.
		rest += w * (left[k] - 1.2*chance - 2e-3*c*c)
		own += w * c * c
		weight += w * c * float64(l.alivePairs)
	}
	if !(own > 0) {
		return 0, 0
	}
	ratio = math.Max(0, rest/own)
	return ratio * weight, ratio
}

// lead is -1..1: how far source i comes before source j, from the correlation
// of the beams towards them. A reflection is a late copy of its source, so that
// the correlation stands on one side of lag 0 only; two sources that each have
// reflections give both sides.
func (l *looker) lead(i, j int) float64 {
	K := l.bins
	g := l.grid
	clear(g.re)
	clear(g.im)
	M := len(l.space.at)
	l.space.delays(l.tau, l.places[i])
	ti := append([]float64(nil), l.tau...)
	l.space.delays(l.tau, l.places[j])
	tj := l.tau
	// Sum over microphones of conj(a_i,m) gamma_mn a_j,n with
	// a = e^{-j omega tau}.
	add := func(re, im []float64, sign, d float64) {
		s, c := math.Sincos(l.omega[0] * d)
		ss, sc := math.Sincos((l.omega[1] - l.omega[0]) * d)
		for k := range K {
			x, y := re[k], sign*im[k]
			g.re[g.from+k] += float32(x*c - y*s)
			g.im[g.from+k] += float32(x*s + y*c)
			c, s = c*sc-s*ss, c*ss+s*sc
		}
	}
	for c, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		re, im := l.gr[c*K:c*K+K], l.gi[c*K:c*K+K]
		add(re, im, 1, ti[q.i]-tj[q.j])
		add(re, im, -1, ti[q.j]-tj[q.i])
	}
	none := make([]float64, K)
	for m := range M {
		if l.alive[m] {
			add(l.level, none, 1, ti[m]-tj[m])
		}
	}
	g.fft.Inverse(g.x, g.re, g.im)
	n := len(g.x)
	fine := float64(l.set.rate) * float64(n) / float64(l.set.size)
	from := int(math.Max(leadFrom, 1/l.set.ToHz) * fine)
	to := min(int(leadTo*fine), n/4)
	var before, after float64
	for s := from; s < to; s++ {
		// The first beam ahead puts the peak at a negative lag.
		before = math.Max(before, math.Abs(float64(g.x[n-s])))
		after = math.Max(after, math.Abs(float64(g.x[s])))
	}
	if before+after == 0 {
		return 0
	}
	return (before - after) / (before + after)
}

// Lags between which a reflection is looked for, seconds.
const (
	leadFrom = 0.0008
	leadTo   = 0.015
)

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
			re, im := l.rr[c*K+k], l.ri[c*K+k]
			m := math.Sqrt(re*re + im*im)
			if m == 0 || w == 0 {
				continue
			}
			in += w * (re*l.cos[j][c*K+k] - im*l.sin[j][c*K+k]) / m
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
