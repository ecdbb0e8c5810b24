package bearing

import (
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"

	"alidade/pkg/rig"
)

// Constants of bringing windows together.
const (
	priorFreedom     = 4.0   // weight of the theoretical error against the observed spread, in windows
	leadLimit        = 0.06  // mean lead from which the later of two is a reflection
	blurSolid        = 0.04  // the same for a solid rig, which tells reflections apart best
	floorShift       = 0.3   // part of the cosine by which floor and ceiling can pull a line's angle, see spread
	blurFactor       = 0.055 // of the shift that reflections alike at all lines would make
	blurFreedom      = 4.0   // degrees of freedom where they are the larger part
	reverbFactor     = 1.0   // of the spread over frequency beyond that of noise, for early reflections
	distanceSigma    = 3.0   // standard errors of the curvature from which a distance is given
	leastShare       = 0.12  // a source holds at least this part of what the first one holds
	movingSpan       = 0.20  // radians from which a track moves, if its errors are small against it
	misfitConfidence = 0.4   // most that is trusted while a microphone fits no direction
	misfitRatio      = 0.55  // agreement of a microphone, re the middle one, from which it is a misfit
	inactiveWeight   = 0.3   // of windows that do not rise above the floor, where others do
)

// peakConfidence is 0..1 from the height of a peak and that of the best
// separate one.
func peakConfidence(value, rest float64) float64 {
	if !(value > 0) {
		return 0
	}
	return math.Min(1, math.Max(0, (value-rest)/value))
}

// agreementFactor is 1 if the microphones agree with the direction. It falls
// with the share of coherence that does not fit it, and if one microphone fits
// far worse than the middle one: then that one is swapped or late, and has
// pulled the direction its way.
func agreementFactor(fit []float32) float64 {
	var all []float64
	for _, v := range fit {
		if v >= -0.99 {
			all = append(all, float64(v))
		}
	}
	if len(all) == 0 {
		return 0
	}
	sum := 0.0
	for _, v := range all {
		sum += math.Max(v, 0)
	}
	slices.Sort(all)
	middle := all[len(all)/2]
	if middle <= 0 {
		return 0
	}
	even := math.Min(1, math.Max(0, all[0])/(0.8*middle))
	return math.Min(1, sum/float64(len(all))/0.7) * even * math.Sqrt(even)
}

// weightOf is how much a sighting counts in finding the sources.
func (f *Finder) weightOf(s *sighting, anyActive bool) float64 {
	w := math.Max(0, s.value-s.rest)
	if anyActive && !s.active {
		w *= inactiveWeight
	}
	return w
}

// summarise brings the windows together.
func (f *Finder) summarise() *Result {
	r := &Result{
		Windows: f.windows, Ambiguity: f.space.geo.Ambiguity(),
		FromHz: f.set.FromHz, ToHz: f.set.ToHz, WindowSec: f.set.Window, HopSec: f.set.Hop,
		GridPoints: len(f.look.grid.points), Shape: f.space.geo.Shape, NearField: f.set.near,
		FrameSize: f.set.size, FrameHop: f.set.hop,
	}
	r.Picture = f.drawPicture()
	trails := f.associate()
	sort.SliceStable(trails, func(a, b int) bool { return len(trails[a].heard) > len(trails[b].heard) })
	taken := make([]bool, len(f.sightings))
	var moving [][]int
	for _, t := range trails {
		track := f.smoothTrail(t)
		r.Tracks = append(r.Tracks, track)
		se := 0.0
		for _, k := range track.Knots {
			se += k.StandardError / float64(len(track.Knots))
		}
		if track.Span > math.Max(movingSpan, 6*se) && track.Heard >= 8 {
			moving = append(moving, t.heard)
			for _, s := range t.heard {
				taken[s] = true
			}
		}
	}
	r.Sources = f.sources(taken, moving)
	bad := f.misfits()
	for i := range r.Sources {
		if len(bad) > 0 {
			r.Sources[i].Confidence = math.Min(r.Sources[i].Confidence, misfitConfidence)
		}
	}
	r.Findings = f.findings(r, bad)
	return r
}

// sources finds the sources of the whole take: those that move, by their
// tracks, and the others where the sightings of many windows lie together.
func (f *Finder) sources(taken []bool, moving [][]int) []Source {
	anyActive := false
	for _, s := range f.sightings {
		anyActive = anyActive || s.active
	}
	type group struct {
		members []int
		moves   bool
		late    bool
		weight  float64
	}
	var groups []group
	weigh := func(members []int) float64 {
		sum := 0.0
		for _, s := range members {
			sum += f.weightOf(&f.sightings[s], anyActive)
		}
		return sum
	}
	for _, m := range moving {
		groups = append(groups, group{members: m, moves: true, weight: weigh(m)})
	}
	radius := math.Min(math.Max(f.look.radius/2, 0.12), 0.2)
	cells := f.cells(radius/4, anyActive, taken)
	for range f.set.Sources + 2 {
		centre, ok := densest(f.space, cells, radius, taken)
		if !ok {
			break
		}
		var members []int
		// The gate follows the mean of what lies within it.
		for range 5 {
			members = members[:0]
			var sum [3]float64
			total := 0.0
			for i := range f.sightings {
				s := &f.sightings[i]
				if taken[i] || f.space.apart(s.at.y, centre) > 1.5*radius {
					continue
				}
				members = append(members, i)
				w := f.weightOf(s, anyActive) + 1e-12
				total += w
				for a := range sum {
					sum[a] += w * s.at.y[a]
				}
			}
			if total == 0 {
				break
			}
			for a := range sum {
				sum[a] /= total
			}
			centre = f.space.clamp(place{y: sum}, 0).y
		}
		if len(members) == 0 {
			break
		}
		for _, s := range members {
			taken[s] = true
		}
		groups = append(groups, group{members: slices.Clone(members), weight: weigh(members)})
	}
	sort.SliceStable(groups, func(a, b int) bool { return groups[a].weight > groups[b].weight })
	total := 0.0
	for _, g := range groups {
		total += g.weight
	}
	// A reflection ranks behind its source, however loud.
	owner := make([]int, len(f.sightings))
	for i := range owner {
		owner[i] = -1
	}
	for n, g := range groups {
		for _, m := range g.members {
			owner[m] = n
		}
	}
	late := make([]bool, len(groups))
	type pair struct{ a, b int }
	sum, square, count := map[pair]float64{}, map[pair]float64{}, map[pair]float64{}
	for _, d := range f.leads {
		a, b, v := owner[d.a], owner[d.b], d.amount
		if a < 0 || b < 0 || a == b {
			continue
		}
		if a > b {
			a, b, v = b, a, -v
		}
		sum[pair{a, b}] += v
		square[pair{a, b}] += v * v
		count[pair{a, b}]++
	}
	for a := range groups {
		for b := a + 1; b < len(groups); b++ {
			n := count[pair{a, b}]
			if n < 3 {
				continue
			}
			mean := sum[pair{a, b}] / n
			sd := math.Sqrt(math.Max(0, square[pair{a, b}]/n-mean*mean) / (n - 1))
			if math.Abs(mean) < leadLimit || math.Abs(mean) < 2.5*sd {
				continue
			}
			if mean > 0 {
				late[b] = true
			} else if groups[b].weight > 0.35*groups[a].weight {
				late[a] = true
			}
		}
	}
	ordered := make([]group, 0, len(groups))
	for _, behind := range []bool{false, true} {
		for n, g := range groups {
			if late[n] == behind {
				g.late = behind
				ordered = append(ordered, g)
			}
		}
	}
	groups = ordered
	need := min(3, max(1, len(f.windows)/3))
	var out []Source
	for i, g := range groups {
		if len(out) == f.set.Sources {
			break
		}
		if i > 0 && g.weight < leastShare*groups[0].weight {
			continue
		}
		if windowsOf(f.sightings, g.members) < need || g.weight <= 0 {
			continue
		}
		src, ok := f.solve(g.members)
		if !ok {
			continue
		}
		src.Moves = g.moves
		src.Reflection = g.late
		src.Share = g.weight / total
		if g.moves {
			src.StandardError = math.Max(src.StandardError, f.scatter(g.members))
		}
		out = append(out, src)
	}
	return out
}

// windowsOf counts the windows that members stand in; they are in order.
func windowsOf(all []sighting, members []int) int {
	n, last := 0, -1
	for _, s := range members {
		if all[s].window != last {
			n++
			last = all[s].window
		}
	}
	return n
}

// scatter is the standard deviation of the sightings' cosines, as an angle.
func (f *Finder) scatter(members []int) float64 {
	var mean [3]float64
	n := float64(len(members))
	for _, s := range members {
		for a := range mean {
			mean[a] += f.sightings[s].at.y[a] / n
		}
	}
	sum := 0.0
	for _, s := range members {
		d := f.space.apart(f.sightings[s].at.y, mean)
		sum += d * d / n
	}
	return math.Asin(math.Min(1, math.Sqrt(sum)))
}

// cell is a part of direction space with what was seen in it.
type cell struct {
	y       [3]float64 // mean
	weight  float64
	members []int
}

// cells sorts the sightings into cubes of cosines with edges of size.
func (f *Finder) cells(size float64, anyActive bool, taken []bool) []cell {
	var out []cell
	at := map[[3]int]int{}
	for i := range f.sightings {
		if taken[i] {
			continue
		}
		s := &f.sightings[i]
		var key [3]int
		for a := range f.space.dim {
			key[a] = int(math.Floor(s.at.y[a] / size))
		}
		c, ok := at[key]
		if !ok {
			c = len(out)
			at[key] = c
			out = append(out, cell{})
		}
		w := f.weightOf(s, anyActive) + 1e-12
		out[c].weight += w
		out[c].members = append(out[c].members, i)
		for a := range f.space.dim {
			out[c].y[a] += (s.at.y[a] - out[c].y[a]) * w / out[c].weight
		}
	}
	return out
}

// densest returns the centre of the cell with the most weight around it.
func densest(s *space, cells []cell, radius float64, taken []bool) ([3]float64, bool) {
	left := make([]float64, len(cells))
	for i, c := range cells {
		free := 0
		for _, m := range c.members {
			if !taken[m] {
				free++
			}
		}
		left[i] = c.weight * float64(free) / float64(len(c.members))
	}
	best, at := 0.0, -1
	for i, c := range cells {
		if left[i] == 0 {
			continue
		}
		sum := 0.0
		for j, d := range cells {
			if r := s.apart(c.y, d.y) / radius; left[j] > 0 && r < 1 {
				sum += left[j] * (1 - r*r)
			}
		}
		if sum > best {
			best, at = sum, i
		}
	}
	if at < 0 {
		return [3]float64{}, false
	}
	return cells[at].y, true
}

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
	if dim == 3 {
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

// drawPicture turns the summed responses of the grid into a picture.
func (f *Finder) drawPicture() Picture {
	n := 181
	angle := func(i int) float64 { return math.Pi * float64(i) / 180 }
	if f.space.dim > 1 {
		n = 120
		angle = func(i int) float64 { return math.Pi * (float64(i+1)/60 - 1) }
	}
	p := Picture{}
	for i := range n {
		p.Angles = append(p.Angles, angle(i))
	}
	if f.pictureWindows == 0 {
		return p
	}
	top := make([]float64, n)
	for d, v := range f.picture {
		// The response at the angle of the point; the nearest is kept where
		// several fall on one, the larger where none is better.
		var i int
		if f.space.dim == 1 {
			i = int(math.Round(math.Acos(math.Min(1, math.Max(-1, f.look.grid.points[d].y[0]))) * 180 / math.Pi))
		} else {
			az := rig.Toward(f.look.grid.units[d]).Azimuth
			i = int(math.Round((az/math.Pi+1)*60)) - 1
			i = (i + n) % n
		}
		top[i] = math.Max(top[i], v)
	}
	// Angles between the points of a coarse grid take the larger neighbour.
	filled := slices.Clone(top)
	for i := range top {
		for d := 1; top[i] == 0 && filled[i] == 0 && d < n/8; d++ {
			left, right := i-d, i+d
			if f.space.dim > 1 {
				left, right = (left+n)%n, right%n
			}
			if left >= 0 {
				filled[i] = top[left]
			}
			if right < n {
				filled[i] = math.Max(filled[i], top[right])
			}
		}
	}
	most := slices.Max(filled)
	if !(most > 0) {
		return p
	}
	for _, v := range filled {
		p.LevelDB = append(p.LevelDB, math.Max(-30, 10*math.Log10(math.Max(v/most, 1e-9))))
	}
	return p
}

// findings says what a person should know.
func (f *Finder) findings(r *Result, bad []int) []Finding {
	var out []Finding
	if len(r.Sources) == 0 {
		out = append(out, Finding{Code: CodeNoDirection, Message: f.whyNone()})
	}
	if dead := f.deadMics(); len(dead) > 0 {
		out = append(out, Finding{Code: CodeDeadMic, Mics: dead,
			Message: fmt.Sprintf("%s more than 30 dB below the middle one: left out of the search", names(dead))})
	}
	if len(bad) > 0 {
		out = append(out, Finding{Code: CodeMisfit, Mics: bad,
			Message: fmt.Sprintf("%s out of the direction that the others share: swapped, late, turned round or misplaced", names(bad))})
	}
	for i, s := range r.Sources {
		if s.Moves {
			out = append(out, Finding{Code: CodeMoves, Message: fmt.Sprintf("source %d moves: its direction is a mean, the track says where it was when", i+1)})
		}
		if s.Distance != nil {
			out = append(out, Finding{Code: CodeNearField, Message: fmt.Sprintf("source %d is %.2f m away (standard error %.2f m): its wavefront is curved at the rig, focus on the point instead of steering to the direction", i+1, *s.Distance, *s.DistanceError)})
		}
	}
	return out
}

// names lists microphones, counted from 1, with their verb.
func names(mics []int) string {
	var s []string
	for _, m := range mics {
		s = append(s, fmt.Sprint(m+1))
	}
	if len(s) == 1 {
		return "microphone " + s[0] + " lies"
	}
	return "microphones " + strings.Join(s, ", ") + " lie"
}

// whyNone says why no source was found.
func (f *Finder) whyNone() string {
	if len(f.windows) == 0 {
		return fmt.Sprintf("the take is too short: %d samples", f.samples)
	}
	if len(f.sightings) > 0 {
		return fmt.Sprintf("%d of %d windows show a peak, but not in the same place", windowsOf(f.sightings, indices(len(f.sightings))), len(f.windows))
	}
	best, at := 0, ""
	var all []string
	for reason := range f.reasons {
		all = append(all, reason)
	}
	slices.Sort(all)
	for _, reason := range all {
		if f.reasons[reason] > best {
			best, at = f.reasons[reason], reason
		}
	}
	return fmt.Sprintf("%s (%d of %d windows)", at, best, len(f.windows))
}

func indices(n int) []int {
	out := make([]int, n)
	for i := range out {
		out[i] = i
	}
	return out
}

// deadMics returns the microphones whose power lies below deadRatio times that
// of the middle one, over the whole take.
func (f *Finder) deadMics() []int {
	sorted := slices.Clone(f.micLevel)
	slices.Sort(sorted)
	middle := sorted[len(sorted)/2]
	var dead []int
	for m, e := range f.micLevel {
		if middle > 0 && e <= deadRatio*middle {
			dead = append(dead, m)
		}
	}
	return dead
}

// misfits returns the microphones that agree far less with the directions
// found than the middle one does.
func (f *Finder) misfits() []int {
	M := len(f.mics)
	if M < 4 || len(f.sightings) == 0 {
		return nil
	}
	sum, weight := make([]float64, M), make([]float64, M)
	last := -1
	for i := range f.sightings {
		s := &f.sightings[i]
		// Only the strongest of a window: what a misplaced microphone adds looks
		// like further sources, and those fit it.
		if s.window == last {
			continue
		}
		last = s.window
		for m, v := range s.fit {
			if v >= -0.99 {
				sum[m] += float64(v) * s.value
				weight[m] += s.value
			}
		}
	}
	var mean []float64
	for m := range sum {
		if weight[m] > 0 {
			sum[m] /= weight[m]
			mean = append(mean, sum[m])
		}
	}
	if len(mean) == 0 {
		return nil
	}
	slices.Sort(mean)
	middle := mean[len(mean)/2]
	var bad []int
	for m := range sum {
		if weight[m] > 0 && sum[m] < misfitRatio*middle {
			bad = append(bad, m)
		}
	}
	return bad
}
