package bearing

import (
	"math"
	"slices"
	"sort"
)

// Constants of bringing windows together.
const (
	priorFreedom     = 4.0   // weight of the theoretical error against the observed spread, in windows
	leadLimit        = 0.06  // mean lead from which the later of two is a reflection
	blurLine         = 0.04  // the same for a line rig, whose reflections mostly are sources of their own
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
	trailOf := make([]int, len(f.sightings))
	for i := range trailOf {
		trailOf[i] = -1
	}
	var moving [][]int
	for k, t := range trails {
		for _, s := range t.heard {
			trailOf[s] = k
		}
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
	r.Sources = f.sources(taken, moving, trailOf)
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
// trailOf is the track of each sighting, -1 for none.
func (f *Finder) sources(taken []bool, moving [][]int, trailOf []int) []Source {
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
		src.Track = mostOf(g.members, trailOf)
		if g.moves {
			src.StandardError = math.Max(src.StandardError, f.scatter(g.members))
		}
		out = append(out, src)
	}
	return out
}

// mostOf returns the track that most of the members belong to, the first of
// several, -1 if none belongs to any.
func mostOf(members, trailOf []int) int {
	count := map[int]int{}
	best := -1
	for _, s := range members {
		if k := trailOf[s]; k >= 0 {
			count[k]++
		}
	}
	for k, n := range count {
		if best < 0 || n > count[best] || n == count[best] && k < best {
			best = k
		}
	}
	return best
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
