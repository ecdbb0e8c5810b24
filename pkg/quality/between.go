package quality

import (
	"fmt"
	"math"
	"slices"
)

// between compares the channels with each other and with the rig.
func (j *judgement) between() {
	alive := j.alive()
	if len(alive) < 2 {
		j.result.NotJudged = fmt.Sprintf("%d channels with sound", len(alive))
		return
	}
	j.coherences(alive)
	alive = j.alive()
	list := j.windows(alive)
	j.result.Windows = len(list)
	for _, w := range list {
		j.result.JudgedS += w.seconds
	}
	j.result.JudgedS = math.Min(j.result.JudgedS, float64(j.frames)/float64(j.rate))
	j.levels(alive, list)
	if len(list) == 0 {
		j.result.NotJudged = "no stretch of the take holds sound from one direction that most channels share"
		if j.frames > int64(j.rate) {
			j.add(CodeNotJudged, Info, nil, "polarity, order and delays of the channels were not judged: "+j.result.NotJudged, "",
				"check a stretch with a talker, a clap or noise from one side")
		}
		return
	}
	j.polarities(alive, list)
	g := newGeometry(j, alive, list)
	if g == nil {
		j.result.NotJudged = "too few microphones, or all in one place, for delays to contradict"
		return
	}
	g.judge()
}

// windows are the stretches in which all living microphones have a time.
func (j *judgement) windows(alive []int) []window {
	var list []window
	best := 0.0
	for _, w := range j.cross.windows {
		best = math.Max(best, w.quality)
	}
	for _, w := range j.cross.windows {
		known := 0
		for _, m := range alive {
			if !math.IsNaN(w.time[m]) {
				known++
			}
		}
		if known == len(alive) && !j.twofold(w, alive) && w.quality >= math.Max(0.45, 0.7*best) {
			list = append(list, w)
		}
	}
	return list
}

// turnedOver is the least share of the middle certainty of the polarities with
// which a channel is said to be turned over. A channel that is has the
// certainty of the others; where two sources sound together, the phase at some
// microphones stands upside down for a part of the band, and theirs is low.
const turnedOver = 0.6

// oriented returns the polarities of the living microphones as window w has
// them, the rig file's taken out, positive for most of them, and their middle
// certainty.
func (j *judgement) oriented(w window, alive []int) (sign []float64, middle float64) {
	sign = make([]float64, len(j.mics))
	sum := 0.0
	var size []float64
	for _, m := range alive {
		sign[m] = w.sign[m]
		if j.mics[m].Inverted {
			sign[m] = -sign[m]
		}
		sum += math.Copysign(1, sign[m])
		size = append(size, math.Abs(sign[m]))
	}
	if sum < 0 {
		for _, m := range alive {
			sign[m] = -sign[m]
		}
	}
	return sign, median(size)
}

// twofold reports whether a microphone hears the sound of window w neither
// upright nor turned over: more than one source is at work.
func (j *judgement) twofold(w window, alive []int) bool {
	sign, middle := j.oriented(w, alive)
	for _, m := range alive {
		if sign[m] < 0 && sign[m] > -turnedOver*middle {
			return true
		}
	}
	return false
}

// coherences finds channels that have nothing in common with the others.
func (j *judgement) coherences(alive []int) {
	c := j.cross
	if c.measured < 2 {
		return
	}
	var all []float64
	for _, m := range alive {
		v := c.coherence[m] / float64(c.measured)
		j.result.Channels[m].Coherence = known(v)
		all = append(all, v)
	}
	middle := median(all)
	if len(alive) < 3 || middle < 0.08 || j.limits.CoherenceLoss < 0 {
		return
	}
	var spectra []float64
	for _, m := range alive {
		spectra = append(spectra, c.logAuto[m]/float64(c.measured)+j.mics[m].GainDB)
	}
	level := median(spectra)
	for _, m := range alive {
		v := c.coherence[m] / float64(c.measured)
		below := level - (c.logAuto[m]/float64(c.measured) + j.mics[m].GainDB)
		loss := j.limits.CoherenceLoss
		if below > 20 { // half of it is noise of its own, and little is left of the sound
			loss *= 2
		}
		if v >= loss*middle {
			continue
		}
		j.dead[m] = true
		if below > 10 {
			j.result.Dead = append(j.result.Dead, m)
			j.add(CodeDead, Error, []int{m}, fmt.Sprintf("%s holds noise of its own, %.1f dB below the middle channel and not coherent with it (%.3f)", j.names([]int{m}), below, v),
				fmt.Sprintf("the sound that the others hear (coherence %.3f)", middle), "look at its cable, plug and power; leave it out until then")
		} else {
			j.add(CodeIncoherent, Error, []int{m}, fmt.Sprintf("%s shares a mean squared coherence of %.3f with the others", j.names([]int{m}), v),
				fmt.Sprintf("%.3f, as the middle channel", middle), "it does not hear this scene: a wrong input, a broken cable or another recording; leave it out")
		}
	}
}

// levels compares the levels of the channels.
func (j *judgement) levels(alive []int, list []window) {
	c := j.cross
	if c.measured < 2 || len(alive) < 3 {
		return
	}
	auto := j.against(alive, func(m int) float64 { return c.logAuto[m]/float64(c.measured) + j.mics[m].GainDB })
	shared := j.against(alive, func(m int) float64 {
		var v []float64
		for _, w := range list {
			if !math.IsNaN(w.gain[m]) {
				v = append(v, w.gain[m])
			}
		}
		return median(v) + j.mics[m].GainDB
	})
	for _, m := range alive {
		j.result.Channels[m].LevelDB = known(auto[m])
	}
	if j.limits.LevelDB < 0 {
		return
	}
	doubt := j.levelDoubt(alive)
	off := func(rest []float64) (n int) {
		for _, m := range alive {
			if math.Abs(rest[m]) > math.Max(j.limits.LevelDB, 3.5*doubt[m]) {
				n++
			}
		}
		return n
	}
	if off(auto) == 0 {
		return
	}
	// A source close by is louder on the near side: levels that a slope over the
	// rig or the curved wavefront explains better are no fault.
	rest, low := auto, off(auto)
	for _, other := range [][]float64{j.sloped(alive, auto), j.spreading(alive, list, auto)} {
		// An explanation must leave less altogether, not less at one channel.
		if other == nil || sumOf(alive, other) > 0.6*sumOf(alive, auto) {
			continue
		}
		if n := off(other); n < low {
			rest, low = other, n
		}
	}
	if low == 0 {
		span := 0.0
		for _, a := range alive {
			for _, b := range alive {
				span = math.Max(span, (auto[a]-rest[a])-(auto[b]-rest[b]))
			}
		}
		j.add(CodeLevelSlope, Info, nil, fmt.Sprintf("levels rise by %.1f dB over the rig", span), "", "a source close by does that")
		return
	}
	for _, m := range alive {
		db := rest[m]
		// What is louder by noise of its own is not so by what it shares with the
		// others.
		if math.Abs(db) <= math.Max(j.limits.LevelDB, 3.5*doubt[m]) || shared[m]*db < 0 && math.Abs(shared[m]) > 0.3 {
			continue
		}
		severity := Warning
		if math.Abs(db) > 12 {
			severity = Error
		}
		j.add(CodeLevel, severity, []int{m}, fmt.Sprintf("%s is %.1f dB %s than the middle channel", j.names([]int{m}), math.Abs(db), louder(db)),
			fmt.Sprintf("within %.1f dB", j.limits.LevelDB), fmt.Sprintf("set the gain right, or gain_db: %.1f in the rig file (alidade calibrate measures it)", j.mics[m].GainDB-db))
	}
}

// levelDoubt is the standard error of each level, dB: from how much it differs
// between parts of the band. Echoes make it differ, a gain does not.
func (j *judgement) levelDoubt(alive []int) []float64 {
	c := j.cross
	n := float64(c.measured)
	parts := make([][]float64, len(j.mics))
	for b := range levelBands {
		v := j.against(alive, func(m int) float64 { return c.logBand[m][b] / n })
		for _, m := range alive {
			parts[m] = append(parts[m], v[m])
		}
	}
	doubt := make([]float64, len(j.mics))
	for _, m := range alive {
		doubt[m] = spread(parts[m]) / math.Sqrt(levelBands)
	}
	return doubt
}

func louder(db float64) string {
	if db > 0 {
		return "louder"
	}
	return "softer"
}

// against returns values against the middle of those of the living ones.
func (j *judgement) against(alive []int, of func(m int) float64) []float64 {
	v := make([]float64, len(j.mics))
	var all []float64
	for _, m := range alive {
		v[m] = of(m)
		if !math.IsNaN(v[m]) {
			all = append(all, v[m])
		}
	}
	middle := median(all)
	for _, m := range alive {
		v[m] -= middle
	}
	return v
}

// sumOf is the sum of the magnitudes over the living ones.
func sumOf(alive []int, db []float64) (sum float64) {
	for _, m := range alive {
		sum += math.Abs(db[m])
	}
	return sum
}

// sloped takes a slope over the rig out of levels. A channel that is off is
// held against the slope of the others: it would bend one to itself.
func (j *judgement) sloped(alive []int, db []float64) []float64 {
	rest := j.levelled(alive, db)
	if rest == nil {
		return nil
	}
	for _, m := range alive {
		if math.Abs(db[m]) <= j.limits.LevelDB || len(alive) < 6 {
			continue
		}
		others := slices.DeleteFunc(slices.Clone(alive), func(n int) bool { return n == m })
		if alone := j.levelled(others, db); alone != nil && math.Abs(alone[m]) > math.Abs(rest[m]) {
			rest[m] = math.Copysign(math.Min(math.Abs(alone[m]), math.Abs(db[m])), alone[m])
		}
	}
	return rest
}

// levelled takes a slope over the rig out of levels, fitted by least absolute
// deviations; nil where too few channels are left to tell, or the slope is more
// than 9 dB.
func (j *judgement) levelled(alive []int, db []float64) []float64 {
	pl := newPlacing(j.at, 1)
	if len(alive) < pl.dim+4 {
		return nil
	}
	w := make([]float64, len(db))
	at := make([]int, len(db))
	for m := range at {
		at[m] = m
	}
	for _, m := range alive {
		w[m] = 1
	}
	pl.near = false
	rest := make([]float64, len(db))
	for range 20 {
		if _, _, ok := pl.fit(db, w, at, rest); !ok {
			return nil
		}
		for _, m := range alive {
			w[m] = 1 / math.Max(0.05, math.Abs(rest[m]))
		}
	}
	low, high := math.Inf(1), math.Inf(-1)
	for _, m := range alive {
		low, high = math.Min(low, db[m]-rest[m]), math.Max(high, db[m]-rest[m])
	}
	if high-low > 9 {
		return nil
	}
	return rest
}

// spreading takes out of levels what the curved wavefront of the source nearby
// explains, as the delays show it; nil without one.
func (j *judgement) spreading(alive []int, list []window, db []float64) []float64 {
	pl := newPlacing(j.at, j.speed)
	if !pl.near || pl.dim == 0 || len(list) == 0 {
		return nil
	}
	w, t, at := make([]float64, len(db)), make([]float64, len(db)), make([]int, len(db))
	for m := range at {
		at[m] = m
	}
	for _, m := range alive {
		w[m] = 1
	}
	parts := make([][]float64, len(db))
	for _, win := range list {
		for m := range t {
			t[m] = win.time[m] + j.mics[m].Delay - j.mics[m].ClockPPM*1e-6*win.at
		}
		s, _, ok := pl.fit(t, w, at, nil)
		if !ok || s.kappa <= 0 {
			continue
		}
		for _, m := range alive {
			parts[m] = append(parts[m], pl.nearness(s, m))
		}
	}
	if len(parts[alive[0]]) == 0 {
		return nil
	}
	return j.against(alive, func(m int) float64 { return db[m] - median(parts[m]) })
}

// polarities finds channels that are turned over.
func (j *judgement) polarities(alive []int, list []window) {
	sign, certain := make([]float64, len(j.mics)), 0.0
	for _, w := range list {
		one, middle := j.oriented(w, alive)
		certain += middle / float64(len(list))
		for _, m := range alive {
			sign[m] += one[m] / float64(len(list))
		}
	}
	var flipped []int
	for _, m := range alive {
		if sign[m] < -math.Max(0.3, turnedOver*certain) {
			flipped = append(flipped, m)
		}
	}
	if len(flipped) == 0 {
		return
	}
	do := "turn polarity over in the rig file (inverted or normal), or mend the cable"
	if 2*len(flipped) == len(alive) {
		do = "or the other half is; " + do
	}
	j.add(CodePolarity, Error, flipped, fmt.Sprintf("%s: turned over against the other channels", j.names(flipped)), "all alike", do)
}

// spread is a standard deviation from the middle of the absolute deviations.
func spread(v []float64) float64 {
	mid := median(slices.Clone(v))
	var d []float64
	for _, x := range v {
		d = append(d, math.Abs(x-mid))
	}
	return 1.4826 * median(d)
}
