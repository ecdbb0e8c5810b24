package quality

import (
	"fmt"
	"math"
	"slices"
)

// geometry holds the arrival times of all windows against the rig.
type geometry struct {
	*judgement
	pl     *placing
	alive  []int
	list   []window
	times  [][]float64 // [window][mic], corrected
	weight [][]float64 // [window][mic], 0 where left out; mean about 1
	order  []int       // mic m of the take stands at place order[m]
	few    []int       // windows that hypotheses are tried on
}

// mostTried bounds the windows behind each hypothesis.
const mostTried = 24

func newGeometry(j *judgement, alive []int, list []window) *geometry {
	g := &geometry{judgement: j, pl: newPlacing(j.at, j.speed), alive: alive, list: list}
	if g.pl.dim == 0 || len(alive) < g.pl.dim+2 {
		return nil
	}
	for m := range j.mics {
		g.order = append(g.order, m)
	}
	for _, w := range list {
		t, v := make([]float64, len(j.mics)), make([]float64, len(j.mics))
		var info []float64
		for _, m := range alive {
			info = append(info, w.info[m])
		}
		middle := median(info)
		for m := range t {
			t[m] = w.time[m] + j.mics[m].Delay - j.mics[m].ClockPPM*1e-6*w.at
		}
		for _, m := range alive {
			v[m] = math.Min(w.info[m]/middle, 1)
		}
		g.times, g.weight = append(g.times, t), append(g.weight, v)
	}
	by := make([]int, len(list))
	for i := range by {
		by[i] = i
	}
	slices.SortStableFunc(by, func(a, b int) int {
		switch qa, qb := list[a].quality, list[b].quality; {
		case qa > qb:
			return -1
		case qa < qb:
			return 1
		}
		return 0
	})
	g.few = by[:min(len(by), mostTried)]
	return g
}

// misfit is the root mean square residual over the tried windows, seconds, for
// an order of the microphones, without those in out.
func (g *geometry) misfit(order []int, out ...int) float64 {
	sum := 0.0
	w := make([]float64, len(g.mics))
	for _, i := range g.few {
		copy(w, g.weight[i])
		for _, m := range out {
			w[m] = 0
		}
		_, s2, ok := g.pl.fit(g.times[i], w, order, nil)
		if !ok {
			return math.Inf(1)
		}
		// Freedoms that the fit takes make its residual smaller.
		n := 0.0
		for _, v := range w {
			if v > 0 {
				n++
			}
		}
		free := n - float64(g.pl.dim) - 1
		if g.pl.near && n >= float64(g.pl.dim)+4 {
			free--
		}
		sum += s2 * n / math.Max(free, 0.5)
	}
	return math.Sqrt(sum / float64(len(g.few)))
}

// Residuals below fine are what a good take leaves; misfits above coarse are
// looked into as wrong order. Seconds.
const (
	fineFit   = 8e-6
	coarseFit = 20e-6
)

func (g *geometry) judge() {
	g.drift()
	base := g.misfit(g.order)
	if base > coarseFit {
		base = g.reorder(base)
	}
	late := g.late(base)
	base = g.misfit(g.order, late...)
	if lasting, se := g.lasting(late); base > 60e-6 && lasting > 60e-6 && lasting > 5*se && len(g.result.Findings) == 0 {
		g.add(CodeMisfit, Warning, nil, fmt.Sprintf("the delays between channels miss every direction by %.0f µs rms, alike over the take", lasting*1e6),
			fmt.Sprintf("under %.0f µs", 60.0), "compare positions and channel numbers of the rig file with the rig; strong echoes do it too")
	}
	g.scales(base, late)
}

// lasting is the root mean square over the microphones of what the fits leave
// at each in the middle of all windows, and its standard error, seconds. A rig
// that is wrong leaves the same everywhere; echoes of a voice leave something
// else in every window.
func (g *geometry) lasting(out []int) (rms, se float64) {
	rest := make([][]float64, len(g.mics))
	w, r := make([]float64, len(g.mics)), make([]float64, len(g.mics))
	for i := range g.list {
		copy(w, g.weight[i])
		for _, m := range out {
			w[m] = 0
		}
		if _, _, ok := g.pl.fit(g.times[i], w, g.order, r); !ok {
			continue
		}
		for _, m := range g.alive {
			if w[m] > 0 {
				rest[m] = append(rest[m], r[m])
			}
		}
	}
	n := 0.0
	for _, v := range rest {
		if len(v) < 3 { // nothing to tell what lasts from what does not
			continue
		}
		e, s := median(slices.Clone(v)), 1.25*spread(v)/math.Sqrt(float64(len(v)))
		rms += e * e
		se += s * s
		n++
	}
	if n == 0 {
		return 0, 0
	}
	return math.Sqrt(rms / n), math.Sqrt(se / n)
}

// reorder looks for the exchange of channels that makes the delays fit, and for
// another on top of it while that helps. It returns the misfit that is left.
func (g *geometry) reorder(base float64) float64 {
	start := base
	swaps := 0
	order := slices.Clone(g.order)
	var touched []int
	var others [][2]int // exchanges that explain the take as well
	for swaps < 4 {
		type try struct {
			a, b int
			rms  float64
		}
		best := try{rms: math.Inf(1)}
		var tries []try
		for x, a := range g.alive {
			for _, b := range g.alive[x+1:] {
				order[a], order[b] = order[b], order[a]
				rms := g.misfit(order)
				order[a], order[b] = order[b], order[a]
				tries = append(tries, try{a, b, rms})
				if rms < best.rms {
					best = tries[len(tries)-1]
				}
			}
		}
		if best.rms > 0.6*base {
			break
		}
		// Another exchange that does as well (the other half of a mirrored rig, or
		// microphones that hear the source at the same time) must be named too.
		if swaps == 0 {
			for _, o := range tries {
				if o != best && o.rms < math.Max(1.5*best.rms, best.rms+2e-6) {
					others = append(others, [2]int{o.a, o.b})
				}
			}
		}
		order[best.a], order[best.b] = order[best.b], order[best.a]
		touched = append(touched, best.a, best.b)
		base = best.rms
		swaps++
		if base < fineFit*1.5 {
			break
		}
	}
	if swaps == 0 || base > 0.35*start || base > 4*coarseFit || len(others) > 3 {
		return start
	}
	// One late channel explains as much as an exchange of it with another only
	// if leaving it out leaves less.
	if swaps == 1 {
		for _, m := range touched {
			if alone := g.misfit(g.order, m); alone < 0.7*base {
				return start
			}
		}
	} else {
		for _, m := range g.alive {
			if alone := g.misfit(g.order, m); alone < 1.3*base {
				return start
			}
		}
	}
	slices.Sort(touched)
	touched = slices.Compact(touched)
	g.order = order
	measured := fmt.Sprintf("%s: the delays fit with %.0f µs rms once exchanged, as the rig file has it with %.0f µs", g.names(touched), base*1e6, start*1e6)
	if swaps == 1 && len(others) > 0 {
		text := g.names(touched)
		for _, o := range others {
			text += ", or " + g.names(o[:])
			touched = append(touched, o[0], o[1])
		}
		slices.Sort(touched)
		g.add(CodeSwapped, Error, slices.Compact(touched), fmt.Sprintf("%s: the delays fit with %.0f µs rms once one of them is exchanged, as the rig file has it with %.0f µs", text, base*1e6, start*1e6),
			"each microphone on its channel", "this direction cannot tell which: look at the plugs, or check a take with sound from another side")
	} else if swaps == 1 {
		g.add(CodeSwapped, Error, touched, measured, "each microphone on its channel", "exchange their channel numbers in the rig file, or their plugs")
	} else {
		text := ""
		for _, m := range touched {
			text += fmt.Sprintf(", channel %d is %s", g.mics[m].Channel, g.mics[order[m]].Name)
		}
		g.add(CodePermuted, Error, touched, measured+text, "each microphone on its channel", "set the channel numbers in the rig file right")
	}
	return base
}

// late finds channels whose delay no direction explains, one after the other.
// It returns them.
func (g *geometry) late(base float64) []int {
	var out []int
	offset := map[int]float64{}
	doubt := map[int]float64{}
	limit := g.limits.DelayUS * 1e-6
	// What is left must contradict a wrong source at least twice.
	unknowns := g.pl.dim + 1
	if g.pl.near {
		unknowns++
	}
	most := min(len(g.alive)-unknowns-2, len(g.alive)/3)
	if limit < 0 {
		most = 0
	}
	for len(out) < most {
		best, at := math.Inf(1), -1
		for _, m := range g.alive {
			if slices.Contains(out, m) {
				continue
			}
			if rms := g.misfit(g.order, append(slices.Clone(out), m)...); rms < best {
				best, at = rms, m
			}
		}
		if at < 0 {
			break
		}
		e, se, rest := g.offset(at, append(slices.Clone(out), at))
		free := float64(len(g.alive) - len(out) - 1 - unknowns)
		if math.Abs(e) < limit || math.Abs(e) < 5*se || math.Abs(e) < (4+8/free)*rest || best > 0.75*base {
			break
		}
		out = append(out, at)
		offset[at], doubt[at] = e, se
		base = best
	}
	for _, m := range g.alive {
		e, _, _ := g.offset(m, append(slices.Clone(out), m))
		g.result.Channels[m].DelayUS = known(e * 1e6)
	}
	for _, m := range out {
		// All of those left out are known only now.
		e, se, _ := g.offset(m, out)
		if math.Abs(e) < limit {
			continue
		}
		us := e * 1e6
		word := "late"
		if us < 0 {
			word = "early"
		}
		severity := Warning
		if math.Abs(us) > 40 {
			severity = Error
		}
		g.add(CodeLate, severity, []int{m}, fmt.Sprintf("%s is %.1f µs (%.2f samples) %s, ± %.1f µs", g.names([]int{m}), math.Abs(us), math.Abs(e)*float64(g.rate), word, 2e6*se),
			fmt.Sprintf("within %.0f µs", g.limits.DelayUS), fmt.Sprintf("delay_us: %.1f in the rig file (alidade calibrate measures it), or correct its place", 1e6*g.mics[m].Delay-us))
	}
	return out
}

// offset is by how much microphone m is late against the source that the
// others, without out, agree on: the middle over the windows, its standard
// error, and the root mean square of what the others leave.
func (g *geometry) offset(m int, out []int) (e, se, rest float64) {
	var all, left []float64
	w, r := make([]float64, len(g.mics)), make([]float64, len(g.mics))
	for i := range g.list {
		copy(w, g.weight[i])
		for _, o := range out {
			w[o] = 0
		}
		if _, s2, ok := g.pl.fit(g.times[i], w, g.order, r); ok {
			all = append(all, r[m])
			n := float64(len(g.alive) - len(out))
			free := n - float64(g.pl.dim) - 1
			if g.pl.near && n >= float64(g.pl.dim)+4 {
				free--
			}
			left = append(left, math.Sqrt(s2*n/math.Max(free, 0.5)))
		}
	}
	if len(all) == 0 {
		return math.NaN(), math.NaN(), math.NaN()
	}
	se = 1.25 * spread(all) / math.Sqrt(float64(len(all)))
	// A single window has no spread: what the others leave stands in for it.
	rest = median(left)
	return median(all), math.Max(se, rest/4), rest
}

// drift finds channels whose delay grows. Times of a source that stays where it
// is keep still; what changes as a direction does (linear over the places) may
// be a source that moves, and is no evidence.
func (g *geometry) drift() {
	n := len(g.list)
	if n < 8 || g.limits.DriftPPM < 0 || g.list[n-1].at-g.list[0].at < 8 {
		return
	}
	slope, doubt := make([]float64, len(g.mics)), make([]float64, len(g.mics))
	for _, m := range g.alive {
		slope[m], doubt[m] = trend(g.list, g.times, m)
	}
	w, rest := make([]float64, len(g.mics)), make([]float64, len(g.mics))
	var all []float64
	for _, m := range g.alive {
		w[m] = 1
		all = append(all, doubt[m])
	}
	pl := *g.pl
	pl.near = false
	if _, _, ok := pl.fit(slope, w, g.order, rest); !ok {
		return
	}
	most := 0.0
	for _, m := range g.alive {
		most = math.Max(most, math.Abs(rest[m]))
	}
	limit := g.limits.DriftPPM * 1e-6
	err := median(all)
	var s []float64
	for _, m := range g.alive {
		s = append(s, slope[m])
	}
	middle := clustered(s, math.Max(0.25*limit, 3*err))
	// A channel that grows later has a clock that runs fast: its frames are
	// numbered faster than time goes on.
	apart := 0.0
	for m := range slope {
		slope[m] -= middle
	}
	for _, m := range g.alive {
		apart = math.Max(apart, math.Abs(slope[m]))
	}
	none := most < 0.4*limit || most < 5*err
	if none && apart > math.Max(limit, 5*err) {
		return // a source that moves: its share of the slopes hides that of the clocks
	}
	for _, m := range g.alive {
		g.result.Channels[m].DriftPPM = known(slope[m] * 1e6)
	}
	if none {
		return
	}
	var off []int
	text := ""
	for _, m := range g.alive {
		ppm := slope[m] * 1e6
		if math.Abs(ppm) > g.limits.DriftPPM && math.Abs(ppm) > 5e6*err {
			off = append(off, m)
			text += fmt.Sprintf(", channel %d by %+.2f ppm", g.mics[m].Channel, ppm)
		}
	}
	if len(off) == 0 {
		return
	}
	g.add(CodeDrift, Error, off, fmt.Sprintf("%s: delays grow over the take%s (± %.2f)", g.names(off), text, 2e6*err),
		fmt.Sprintf("one clock, within %.1f ppm", g.limits.DriftPPM), "record with a common clock; clock_ppm in the rig file states a drift")
	// Delays are judged without it.
	for i, w := range g.list {
		for _, m := range g.alive {
			g.times[i][m] -= slope[m] * (w.at - g.list[0].at)
		}
	}
}

// trend is the slope of a microphone's times, by the middle of the slopes of
// pairs half the take apart, and its standard error.
func trend(list []window, times [][]float64, m int) (slope, err float64) {
	var all []float64
	half := len(list) / 2
	for i := range half {
		k := i + len(list) - half
		if dt := list[k].at - list[i].at; dt > 0 {
			all = append(all, (times[k][m]-times[i][m])/dt)
		}
	}
	if len(all) == 0 {
		return 0, math.Inf(1)
	}
	return median(slices.Clone(all)), 1.25*spread(all)/math.Sqrt(float64(len(all))) + 1e-9
}

// clustered is the mean of the largest group of values within reach of one of
// them: the clock that most channels share.
func clustered(v []float64, reach float64) float64 {
	most, at := 0, 0.0
	for _, a := range v {
		n, sum := 0, 0.0
		for _, b := range v {
			if math.Abs(a-b) <= reach {
				n++
				sum += b
			}
		}
		if n > most {
			most, at = n, sum/float64(n)
		}
	}
	return at
}

// scales compares the size of the delays with the geometry: a solid rig shows
// any error, others only one that makes delays longer than sound can take.
func (g *geometry) scales(base float64, late []int) {
	if g.limits.ScalePct < 0 || base > 3*fineFit || len(g.alive)-len(late) < g.pl.dim+3 {
		return
	}
	var all []float64
	w := make([]float64, len(g.mics))
	for i := range g.list {
		copy(w, g.weight[i])
		for _, m := range late {
			w[m] = 0
		}
		if s, _, ok := g.pl.fit(g.times[i], w, g.order, nil); ok {
			all = append(all, s.scale())
		}
	}
	if len(all) < 3 {
		return
	}
	// The middle of a solid rig, the largest of others: sound from outside the
	// plane makes delays shorter.
	scale := median(slices.Clone(all))
	se := 1.25*spread(all)/math.Sqrt(float64(len(all))) + base/(g.pl.reach()/g.speed)/2
	pct := 100 * (scale - 1)
	if pct < 0 && (g.pl.dim < 3 || pct < -40) || math.Abs(pct) < g.limits.ScalePct || math.Abs(pct)/100 < 4*se {
		return
	}
	kelvin := 293.15 * math.Pow(g.speed/scale/343.2, 2)
	air := fmt.Sprintf("air of %.0f °C", kelvin-273.15)
	if kelvin < 223 || kelvin > 333 {
		air = "no air of this world"
	}
	g.add(CodeScale, Warning, nil, fmt.Sprintf("delays are %.1f %% %s than the rig file and the speed of sound of %.1f m/s allow (± %.1f)", math.Abs(pct), longer(pct), g.speed, 200*se),
		fmt.Sprintf("within %.0f %%", g.limits.ScalePct), fmt.Sprintf("distances %.3f times those of the rig file would explain it, or %s: measure both", scale, air))
}

func longer(pct float64) string {
	if pct > 0 {
		return "longer"
	}
	return "shorter"
}
