package bearing

import (
	"math"
	"slices"
)

// offset returns the coordinates of s less those of p.
func (s *sighting) offset(p place, dim int) (d vec4) {
	for a := range dim {
		d[a] = s.at.y[a] - p.y[a]
	}
	d[dim] = s.at.kappa - p.kappa
	return d
}

// solve finds the one place that explains the members best, and how well it is
// known. Each window is a quadratic likelihood about its own maximum; far-out
// windows count less [Huber 1964].
func (f *Finder) solve(members []int) (Source, bool) {
	dim := f.space.dim
	far, okFar := f.settleOn(members, dim, false)
	best := far
	if f.set.near {
		if near, ok := f.settleOn(members, dim+1, true); ok && near.p.kappa > 0 {
			se := math.Sqrt(math.Max(near.cov[dim][dim], 0))
			if near.p.kappa > distanceSigma*se && near.p.kappa > f.set.dKappa/4 {
				best, okFar = near, true
			}
		}
	}
	if !okFar {
		return Source{}, false
	}
	src := Source{Fix: f.space.fix(best.p, best.cov, best.freedom), Windows: windowsOf(f.sightings, members)}
	src.Stationary = true
	value, rest, agree := 0.0, 0.0, 0.0
	for _, i := range members {
		s := &f.sightings[i]
		value += s.value
		rest += s.rest
		agree += agreementFactor(s.fit) * s.value
		src.Stationary = src.Stationary && !s.active
	}
	src.Confidence = peakConfidence(value, rest) * agree / math.Max(value, 1e-300)
	// Windows that agree by chance are few among those that heard anything.
	heard := 0
	last := -1
	for i := range f.sightings {
		if w := f.sightings[i].window; w != last {
			heard++
			last = w
		}
	}
	src.Confidence *= math.Min(1, float64(src.Windows)/(0.2*float64(heard)))
	return src, true
}

// settled is a place with the covariance of its coordinates.
type settled struct {
	p       place
	cov     mat4
	freedom float64
}

// settleOn solves for n coordinates: the cosines, and the curvature if n is
// one more; without it the wave is taken as plane.
func (f *Finder) settleOn(members []int, n int, near bool) (settled, bool) {
	dim := f.space.dim
	p := place{}
	// Begin at the sighting in the middle, by the sum of distances.
	p = f.sightings[f.medoid(members)].at
	if !near {
		p.kappa = 0
	}
	share := 1 / float64(f.set.sections) // overlapping windows share their sound
	weights := make([]float64, len(members))
	var total, inv mat4
	scale := 1.0
	free := float64(min(n, 2))
	if near {
		free = float64(n)
	}
	for range 12 {
		// Distances in standard deviations, and their scale.
		d2 := make([]float64, len(members))
		for i, m := range members {
			s := &f.sightings[m]
			d := s.offset(p, dim)
			if !near {
				d[dim] = 0
			}
			d2[i] = s.info.quad(d) / free
		}
		sorted := slices.Clone(d2)
		slices.Sort(sorted)
		// The median of chi² of one degree is 0.455, of two 1.386/2.
		scale = math.Max(1, sorted[len(sorted)/2]/0.6)
		total = mat4{}
		var slope vec4
		for i, m := range members {
			s := &f.sightings[m]
			weights[i] = 1
			if limit := 3 * scale; d2[i] > limit {
				weights[i] = math.Sqrt(limit / d2[i])
			}
			d := s.offset(p, dim)
			pull := s.info.times(d)
			for a := range pull {
				slope[a] += share * weights[i] * (s.score[a] + pull[a])
			}
			total.addScaled(share*weights[i], &s.info)
		}
		var ok bool
		if inv, ok = total.invert(n, f.space.lift(p)); !ok {
			return settled{}, false
		}
		step := inv.times(slope)
		size := 0.0
		for a := range n {
			if a == dim {
				p.kappa += step[a]
				continue
			}
			p.y[a] += step[a]
			size += math.Abs(step[a])
		}
		p = f.space.clamp(p, f.set.maxKappa)
		if !near {
			p.kappa = 0
		}
		if size < 1e-9 {
			break
		}
	}
	out := settled{p: p, cov: inv, freedom: math.Inf(1)}
	f.spread(&out, members, weights, total, inv, n, share)
	return out, true
}

// medoid returns the sighting whose summed distance to the others is least,
// looked for among at most 200 of them.
func (f *Finder) medoid(members []int) int {
	step := max(1, len(members)/200)
	best, at := math.Inf(1), members[0]
	for i := 0; i < len(members); i += step {
		sum := 0.0
		for j := 0; j < len(members); j += step {
			sum += f.space.apart(f.sightings[members[i]].at.y, f.sightings[members[j]].at.y)
		}
		if sum < best {
			best, at = sum, members[i]
		}
	}
	return at
}

// spread replaces the theoretical covariance of a solution by one that the
// data bear out: from the spread over the windows, and from the spread over
// groups of lines, in which reflections show that shift all windows alike.
func (f *Finder) spread(out *settled, members []int, weights []float64, total, inv mat4, n int, share float64) {
	dim := f.space.dim
	var overTime, overLines mat4
	groups := make([]vec4, f.look.groups)
	expected := make([]mat4, f.look.groups)
	windows, detailed := 0.0, 0.0
	for i, m := range members {
		s := &f.sightings[m]
		d := s.offset(out.p, dim)
		if n == dim {
			d[dim] = s.at.kappa
		}
		pull := s.info.times(d)
		for a := range pull {
			pull[a] += s.score[a]
		}
		w := share * weights[i]
		overTime.addOuter(w*weights[i], pull)
		windows += w
		if s.groups == nil {
			continue
		}
		detailed += w
		for g := range s.groups {
			h := s.groups[g].matrix()
			pull := h.times(d)
			for a := range pull {
				groups[g][a] += w * (float64(s.groups[g].s[a]) + pull[a])
			}
			expected[g].addScaled(w, &h)
		}
	}
	for g := range groups {
		overLines.addOuter(1, groups[g])
	}
	if detailed > 0 && detailed < windows {
		overLines = scaled(overLines, windows/detailed)
	}
	covT, covL := overTime.sandwich(&inv), overLines.sandwich(&inv)
	if windows > 1.5 {
		covT = scaled(covT, windows/(windows-1))
	}
	G := float64(f.look.groups)
	if G > 2 {
		covL = scaled(covL, G/(G-1))
	}
	// The theory is worth a few windows; the spread over them the rest.
	nu := math.Max(0, windows-1)
	cov := scaled(inv, priorFreedom/(priorFreedom+nu))
	cov.addScaled(nu/(priorFreedom+nu), &covT)
	// What the lines differ by beyond noise, in every direction of the
	// coordinates: its largest ratio over the theory, once.
	ratio := 0.0
	for a := range n {
		if inv[a][a] > 0 {
			ratio = math.Max(ratio, covL[a][a]/math.Max(inv[a][a], cov[a][a]))
		}
	}
	if G > 2 && ratio > 1 {
		// A ratio that chance would give counts for nothing: chi² of G degrees
		// over G has the standard deviation sqrt(2/G).
		excess := math.Max(0, ratio-1-math.Sqrt(2/G))
		if excess > 0 {
			extra := scaled(covL, reverbFactor*excess/ratio)
			cov.addScaled(1, &extra)
		}
	}
	// Of a mean of a known variance and an observed one, weights priorFreedom
	// and nu [Satterthwaite 1946].
	out.freedom = (priorFreedom + nu) * (priorFreedom + nu) / math.Max(nu, 0.5)
	// Reflections that lie in with the source: their mean over the windows,
	// which more windows do not lessen.
	var blurred mat4
	factor := blurFactor
	switch dim {
	case 1:
		factor = blurLine
	case 3:
		factor = blurSolid
	}
	ratio2 := 0.0
	for i, m := range members {
		s := &f.sightings[m]
		ratio2 += share * weights[i] * s.rest2 / math.Max(windows, 1e-9)
		one, ok := s.info.invert(n, f.space.lift(s.at))
		if !ok {
			continue
		}
		blurred.addScaled(share*weights[i]*factor*factor*s.blur/math.Max(windows, 1e-9), &one)
	}
	if dim == 1 {
		// Floor and ceiling lie at the cosine of the source times that of their
		// elevation. Where the line does not tell them from the source, they pull
		// its cosine towards abeam, by a part that grows with the room's share up
		// to floorShift; where it does, they are sources of their own.
		lobe := f.set.Speed / (0.5 * (f.set.FromHz + f.set.ToHz)) / f.space.geo.Extent
		c := math.Abs(out.p.y[0])
		unresolved := math.Min(1, math.Max(0, (1.5*lobe-c)/(0.5*lobe)))
		sd := floorShift * c * unresolved * math.Min(1, math.Sqrt(ratio2)/0.4)
		blurred[0][0] += sd * sd
	}
	before := cov[0][0]
	cov.addScaled(1, &blurred)
	if blurred[0][0] > before {
		out.freedom = math.Min(out.freedom, blurFreedom)
	}
	out.cov = cov
	if lines := G - 1; ratio > 2 && lines > 1 {
		out.freedom = math.Min(out.freedom, lines)
	}
}

// matrix unpacks the bend of a group.
func (g *groupSum) matrix() (m mat4) {
	t := 0
	for a := range maxDims {
		for b := a; b < maxDims; b++ {
			m[a][b] = float64(g.h[t])
			m[b][a] = m[a][b]
			t++
		}
	}
	return m
}

// scaled returns f·m.
func scaled(m mat4, f float64) (out mat4) {
	out.addScaled(f, &m)
	return out
}
