package quality

import (
	"fmt"
	"math"
	"slices"
)

// Clocks are how fast the clocks of the channels run against the one that most
// of them share.
type Clocks struct {
	PPM      []float64 // of each microphone given, parts per million, positive: fast; NaN for a dead one
	Groups   [][]int   // microphones on one clock each, the reference first
	ErrorPPM float64   // largest standard error of a group; of one clock that of a microphone
	SpanS    float64   // from the first to the last window behind it, seconds
	Moved    bool      // the source moved, and that was told from the clocks by the geometry
}

// Clocks measures the clocks from the delays of all windows: each window has a
// direction of its own, each group of microphones one clock. What the rig file
// states (rig.Mic.ClockPPM) is taken into account: the figures come on top. Nil
// comes with the reason where the take cannot tell.
//
// A source that moves makes delays grow too, as a plane over the places; clocks
// are told from it by the microphones that share one. As many clocks as
// microphones cannot be.
func (q *Inspector) Clocks() (*Clocks, string) {
	g, why := q.timed()
	if g == nil {
		return nil, why
	}
	return g.clocks()
}

// ClocksOf measures the clocks of groups of microphones that are known to share
// one each, the reference first, and whether the source moved, as Clocks found
// them in another part of the take: however little they are apart, that and its
// standard error are told.
func (q *Inspector) ClocksOf(groups [][]int, moved bool) (*Clocks, string) {
	g, why := q.timed()
	if g == nil {
		return nil, why
	}
	var living [][]int
	for _, group := range groups {
		group = slices.DeleteFunc(slices.Clone(group), func(m int) bool { return !slices.Contains(g.alive, m) })
		if len(group) == 0 {
			return nil, "all microphones on one of the clocks are dead"
		}
		living = append(living, group)
	}
	if len(living) == 0 {
		return nil, "no microphones on any clock"
	}
	c, why := g.told(living, moved)
	if c == nil {
		return nil, why
	}
	for k, group := range groups {
		for _, m := range group {
			c.PPM[m] = c.PPM[living[k][0]]
		}
	}
	c.Groups = groups
	return c, ""
}

// timed is the geometry of the windows behind the clocks; nil comes with the
// reason.
func (q *Inspector) timed() (*geometry, string) {
	if q.Close() != nil || q.cross == nil {
		return nil, "one microphone has no second clock"
	}
	j := &judgement{Inspector: q, result: &Result{Channels: slices.Clone(q.result.Channels)}, dead: make([]bool, len(q.mics))}
	for _, m := range q.result.Dead {
		j.dead[m] = true
	}
	alive := j.alive()
	list := j.windows(alive)
	if len(list) < 8 || list[len(list)-1].at-list[0].at < 8 {
		return nil, fmt.Sprintf("%d stretches of a second hold sound from one direction that all channels share, and 8 over 8 s are needed", len(list))
	}
	g := newGeometry(j, alive, list)
	if g == nil {
		return nil, "too few microphones with sound, or all in one place"
	}
	return g, ""
}

// sameClock is how near slopes of one clock lie at least, a part in one.
const sameClock = 0.05e-6

// mostPlanes bounds the planes that are tried.
const mostPlanes = 2000

// trends are the slopes of the microphones' times, and the middle one of their
// standard errors.
func (g *geometry) trends() (slope []float64, doubt float64) {
	slope = make([]float64, len(g.mics))
	var doubts []float64
	for _, m := range g.alive {
		var se float64
		slope[m], se = trend(g.list, g.times, m)
		doubts = append(doubts, se)
	}
	return slope, median(doubts)
}

func (g *geometry) clocks() (*Clocks, string) {
	slope, doubt := g.trends()
	reach := math.Max(sameClock, 5*doubt)
	groups, moved, twice := g.groups(slope, reach)
	switch {
	case groups == nil:
		return nil, "the delays grow in a way that neither a few clocks nor a source that moves explain"
	case twice:
		return nil, "the source moves, and on this rig more than one way of sharing clocks explains the delays"
	}
	return g.told(groups, moved)
}

// told is by how much the clocks of groups are apart. Of one clock the error is
// that of a single microphone's.
func (g *geometry) told(groups [][]int, moved bool) (*Clocks, string) {
	c := &Clocks{Groups: groups, Moved: moved, PPM: make([]float64, len(g.mics)), SpanS: g.list[len(g.list)-1].at - g.list[0].at}
	for m := range c.PPM {
		c.PPM[m] = math.NaN()
	}
	for k, group := range groups {
		ppm := 0.0
		if k > 0 {
			apart, err := g.apart(groups, k, moved)
			if math.IsInf(err, 0) {
				return nil, "the geometry cannot tell the clocks from a source that moves"
			}
			ppm = 1e6 * apart
			c.ErrorPPM = math.Max(c.ErrorPPM, 1e6*err)
		}
		for _, m := range group {
			c.PPM[m] = ppm
		}
	}
	if len(groups) == 1 {
		_, doubt := g.trends()
		c.ErrorPPM = 1e6 * doubt
	}
	if c.ErrorPPM > 1 {
		return nil, fmt.Sprintf("the clocks can be told to no better than %.1f ppm", c.ErrorPPM)
	}
	return c, ""
}

// groups finds the microphones on one clock each, and whether the source
// moved: the explanation with the fewest unknowns, which must leave two
// microphones more than it has. Twice says that there is another as good.
func (g *geometry) groups(slope []float64, reach float64) (best [][]int, moved, twice bool) {
	fewest := len(g.alive) - 1
	try := func(rest []float64, freedoms int) {
		list := g.cluster(rest, reach)
		switch unknowns := len(list) + freedoms; {
		case unknowns < fewest:
			best, moved, twice, fewest = list, freedoms > 0, false, unknowns
		case unknowns == fewest && best != nil && !alike(best, list):
			twice = true
		}
	}
	try(slope, 0)
	rest := make([]float64, len(slope))
	// A plane through each few that may share a clock.
	n := g.pl.dim + 1
	pick := make([]int, 0, n)
	count := 0
	var choose func(from int)
	choose = func(from int) {
		if count >= mostPlanes {
			return
		}
		if len(pick) == n {
			count++
			a := make([][]float64, n)
			for r := range a {
				a[r] = make([]float64, n+1)
			}
			for _, m := range pick {
				p := [4]float64{1, g.pl.p[g.order[m]][0], g.pl.p[g.order[m]][1], g.pl.p[g.order[m]][2]}
				for r := range n {
					for c := range n {
						a[r][c] += p[r] * p[c]
					}
					a[r][n] += p[r] * slope[m]
				}
			}
			x, ok := solved(a)
			if !ok {
				return
			}
			for m := range rest {
				p := g.pl.p[g.order[m]]
				rest[m] = slope[m] - x[0]
				for d := range g.pl.dim {
					rest[m] -= x[d+1] * p[d]
				}
			}
			try(rest, g.pl.dim)
			return
		}
		for k := from; k < len(g.alive); k++ {
			pick = append(pick, g.alive[k])
			choose(k + 1)
			pick = pick[:len(pick)-1]
		}
	}
	choose(0)
	return best, moved, twice
}

// alike reports whether two lists of groups, each in order, are the same.
func alike(a, b [][]int) bool {
	return len(a) == len(b) && !slices.ContainsFunc(a, func(x []int) bool {
		return !slices.ContainsFunc(b, func(y []int) bool { return slices.Equal(x, y) })
	})
}

// cluster parts the living microphones into those whose values lie together,
// the largest group first, of two the one with the first microphone.
func (g *geometry) cluster(v []float64, reach float64) (list [][]int) {
	left := slices.Clone(g.alive)
	for len(left) > 0 {
		var group []int
		for _, a := range left {
			var near []int
			for _, b := range left {
				if math.Abs(v[a]-v[b]) <= reach {
					near = append(near, b)
				}
			}
			if len(near) > len(group) {
				group = near
			}
		}
		left = slices.DeleteFunc(left, func(m int) bool { return slices.Contains(group, m) })
		list = append(list, group)
	}
	return list
}

// apart is how much faster the clock of group k runs than that of the first, a
// part in one, and its standard error. Of a source that moved each window has
// its own direction, fitted together with the groups' offsets.
func (g *geometry) apart(groups [][]int, k int, moved bool) (slope, err float64) {
	offsets := make([][]float64, len(g.list))
	for i := range g.list {
		offsets[i] = []float64{math.NaN()}
		if !moved {
			offsets[i][0] = g.mean(i, groups[k]) - g.mean(i, groups[0])
			continue
		}
		if v, ok := g.offsets(i, groups); ok {
			offsets[i][0] = v[k-1]
		}
	}
	for _, o := range offsets {
		if math.IsNaN(o[0]) {
			return 0, math.Inf(1)
		}
	}
	return trend(g.list, offsets, 0)
}

// mean of the times of a window over a group.
func (g *geometry) mean(i int, group []int) (t float64) {
	for _, m := range group {
		t += g.times[i][m] / float64(len(group))
	}
	return t
}

// offsets are how much later each group but the first is in a window, with a
// direction fitted beside it by least squares: unknowns are the constant, the
// offsets and the direction cosines.
func (g *geometry) offsets(i int, groups [][]int) ([]float64, bool) {
	n := len(groups) + g.pl.dim
	a := make([][]float64, n)
	for r := range a {
		a[r] = make([]float64, n+1)
	}
	row := make([]float64, n)
	for k, group := range groups {
		for _, m := range group {
			clear(row)
			row[0] = 1
			if k > 0 {
				row[k] = 1
			}
			for d := range g.pl.dim {
				row[len(groups)+d] = g.pl.p[g.order[m]][d]
			}
			for r := range row {
				for c := range row {
					a[r][c] += row[r] * row[c]
				}
				a[r][n] += row[r] * g.times[i][m]
			}
		}
	}
	x, ok := solved(a)
	if !ok {
		return nil, false
	}
	return x[1:len(groups)], true
}

// solved solves the equations whose right side is the last column, by
// elimination with pivots; false if they are singular.
func solved(a [][]float64) ([]float64, bool) {
	n := len(a)
	scale := make([]float64, n)
	for i := range a {
		scale[i] = math.Sqrt(a[i][i])
		if scale[i] == 0 {
			return nil, false
		}
	}
	for i := range a {
		for k := range n {
			a[i][k] /= scale[i] * scale[k]
		}
		a[i][n] /= scale[i]
	}
	for c := range n {
		best := c
		for r := c + 1; r < n; r++ {
			if math.Abs(a[r][c]) > math.Abs(a[best][c]) {
				best = r
			}
		}
		if math.Abs(a[best][c]) < 1e-6 {
			return nil, false
		}
		a[c], a[best] = a[best], a[c]
		for r := c + 1; r < n; r++ {
			f := a[r][c] / a[c][c]
			for k := c; k <= n; k++ {
				a[r][k] -= f * a[c][k]
			}
		}
	}
	x := make([]float64, n)
	for c := n - 1; c >= 0; c-- {
		v := a[c][n]
		for k := c + 1; k < n; k++ {
			v -= a[c][k] * x[k]
		}
		x[c] = v / a[c][c]
	}
	for i := range x {
		x[i] /= scale[i]
	}
	return x, true
}
