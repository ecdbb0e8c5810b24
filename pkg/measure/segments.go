package measure

import (
	"fmt"
	"math"
	"sort"

	"alidade/pkg/audio"
)

// How FindSegments decides. A band at its noise floor reads 0 dB; steady noise
// stays within 1 dB of it after smoothing, so no noise is left out for being
// loud, and the levels of the noise that is kept are not biased.
const (
	segmentLowHz  = 250  // nominal mid-band frequencies that are looked at
	segmentHighHz = 5000 //
	smoothS       = 0.15 // of the level
	floorS        = 1.0  // smoothing under the search for the floor
	floorWindowS  = 300  // the floor is found anew at least this often
	floorRiseDB   = 10   // and does not rise further above the lowest of the take
	onDB          = 5    // above the floor: the target sounds
	quietDB       = 3    // below this it may not
	guardBeforeS  = 0.2  // between noise and what rises above quietDB
	guardAfterS   = 0.25 // the same after it: reverberation
	leastNoiseS   = 0.25 // of one noise stretch
	leastTargetS  = 0.15 // of one target stretch
	bridgeS       = 0.5  // shorter pauses stay in the target
	leastTotalS   = 1.5  // of all noise stretches together
	leastSoundS   = 0.5  // of all target stretches together
	tellTale      = 0.3  // part of the expected reduction that noise must show
	likeNoise     = 0.7  // part of the noise's reduction from which on loud parts are noise too
)

// SegmentOptions guide FindSegments. The zero value is useful.
type SegmentOptions struct {
	// ExpectedReductionDB is the noise reduction that the beam is predicted to
	// have in diffuse noise, mean over the one-third octaves from 250 Hz to
	// 5 kHz; 0 where it is not known. From 1 dB on it is used to tell a pause
	// from a target that only grows softer: the beam reduces the one and not
	// the other.
	ExpectedReductionDB float64
}

// Segments are the stretches found. Where one kind is missing its reason is
// set, and Explanation says in words what was seen.
type Segments struct {
	Noise, Target     []Stretch
	NoNoise, NoTarget Reason
	Explanation       string
}

// FindSegments finds the stretches with noise only and those with the target,
// from the one-third octaves of reference and output.
//
// The power of each band of the output from 250 Hz to 5 kHz is divided by its
// own floor, the quotients are averaged over the bands and smoothed over 0.15 s.
// Above 5 dB the target sounds, until the level falls below 3 dB. Noise is what
// stays below 3 dB for at least 0.25 s, 0.2 s before and 0.25 s after anything
// louder. A take whose level never rises is noise only if the beam reduces it,
// else neither; louder parts that the beam lowers like the noise (gusts, knocks)
// are no target. It returns an error for series that do not belong together.
func FindSegments(reference, output *Series, o SegmentOptions) (*Segments, error) {
	if err := (Pair{Reference: reference, Output: output}).validate("segments"); err != nil {
		return nil, err
	}
	e, err := newEnvelope(reference, output)
	if err != nil {
		return nil, fmt.Errorf("measure: segments: %w", err)
	}
	if e == nil {
		return none("the take has no band from 250 Hz to 5 kHz to tell noise from target by"), nil
	}
	if float64(len(e.level))*e.step < leastTotalS {
		return none(fmt.Sprintf("the take is too short: %.1f s of band levels, at least %.1f s are needed", float64(len(e.level))*e.step, leastTotalS)), nil
	}
	if !e.normalise(nil) {
		return none("the output is silent"), nil
	}
	noise, target := e.split()
	// The floor was a low quantile: once more from the mean of the noise found.
	if len(noise) > 0 && e.normalise(noise) {
		noise, target = e.split()
	}
	return e.judge(noise, target, o), nil
}

func none(why string) *Segments {
	return &Segments{NoNoise: NoNoise, NoTarget: NoTarget, Explanation: why}
}

// envelope is the output's level over time, in cells of step seconds.
type envelope struct {
	step     float64
	from     float64     // centre of cell 0, seconds
	ref, out [][]float64 // [band][cell], NaN where there is no entry
	level    []float64   // smoothed, re the floor, power; NaN in silence
}

// newEnvelope brings the bands onto cells of the longest hop, nil where there
// are no bands.
func newEnvelope(reference, output *Series) (*envelope, error) {
	var ref, out []Track
	e := &envelope{}
	end := math.Inf(1)
	for b := range output.Tracks {
		if f := output.Tracks[b].Band.NominalHz; f < segmentLowHz || f > segmentHighHz {
			continue
		}
		r, o, err := align(reference.Tracks[b], output.Tracks[b])
		if err != nil {
			return nil, err
		}
		ref, out = append(ref, r), append(out, o)
		e.step = math.Max(e.step, r.HopS)
		e.from = math.Max(e.from, r.StartS+r.LengthS/2)
		end = math.Min(end, r.StartS+r.LengthS/2+float64(len(r.Power)-1)*r.HopS)
	}
	if len(ref) == 0 {
		return nil, nil
	}
	cells := max(0, int((end-e.from)/e.step)+1)
	if end < e.from {
		cells = 0
	}
	e.level = make([]float64, cells)
	for b := range ref {
		e.ref = append(e.ref, e.cells(ref[b], cells))
		e.out = append(e.out, e.cells(out[b], cells))
	}
	return e, nil
}

// cells averages the entries of t whose centres lie within half a step of each
// cell's centre; a cell without one takes the nearest.
func (e *envelope) cells(t Track, n int) []float64 {
	list := make([]float64, n)
	centre := t.StartS + t.LengthS/2
	for c := range list {
		at := e.from + float64(c)*e.step
		first := int(math.Ceil((at - e.step/2 - centre) / t.HopS))
		last := int(math.Ceil((at+e.step/2-centre)/t.HopS)) - 1
		first, last = max(first, 0), min(last, len(t.Power)-1)
		if first > last {
			first = min(max(int(math.Round((at-centre)/t.HopS)), 0), len(t.Power)-1)
			last = first
		}
		for j := first; j <= last; j++ {
			list[c] += float64(t.Power[j])
		}
		list[c] /= float64(last - first + 1)
	}
	return list
}

// normalise fills level: the mean over the bands of power over floor. The
// floor of a band is the 5 % quantile of its power smoothed over a second, in
// windows of at most five minutes and interpolated between them; with noise it
// is the mean over those stretches in the window instead. It returns false for
// silence.
func (e *envelope) normalise(noise []Stretch) bool {
	n := len(e.level)
	windows := max(1, int(math.Ceil(float64(n)*e.step/floorWindowS)))
	sum := make([]float64, n)
	bands := 0
	for b := range e.out {
		smooth := boxcar(e.out[b], int(math.Round(floorS/e.step)))
		floor := make([]float64, windows)
		for w := range floor {
			from, to := w*n/windows, (w+1)*n/windows
			floor[w] = quantile(smooth[from:to], 0.05)
			if noise != nil {
				if m := e.meanIn(e.out[b], noise, from, to); m > 0 {
					floor[w] = m
				}
			}
		}
		lowest := math.Inf(1)
		for _, f := range floor {
			if f > 0 {
				lowest = math.Min(lowest, f)
			}
		}
		if math.IsInf(lowest, 1) {
			continue
		}
		bands++
		for w, f := range floor {
			if !(f > 0) {
				floor[w] = lowest
			}
			floor[w] = math.Min(floor[w], lowest*audio.FromPowerDB(floorRiseDB))
		}
		for c := range sum {
			sum[c] += e.out[b][c] / between(floor, (float64(c)+0.5)*float64(windows)/float64(n)-0.5)
		}
	}
	if bands == 0 {
		return false
	}
	for c := range sum {
		sum[c] /= float64(bands)
	}
	copy(e.level, boxcar(sum, int(math.Round(smoothS/e.step))))
	for c, v := range sum {
		if v == 0 {
			e.level[c] = math.NaN() // digital silence is neither
		}
	}
	return true
}

// meanIn is the mean of the cells from..to of x that lie inside the stretches,
// 0 for none.
func (e *envelope) meanIn(x []float64, stretches []Stretch, from, to int) float64 {
	sum, count := 0.0, 0
	for c := from; c < to; c++ {
		at := e.from + float64(c)*e.step
		for _, s := range stretches {
			if at >= s.From && at < s.To {
				sum += x[c]
				count++
				break
			}
		}
	}
	if count == 0 {
		return 0
	}
	return sum / float64(count)
}

// between interpolates the logarithm of list at place x.
func between(list []float64, x float64) float64 {
	i := int(math.Floor(x))
	if i < 0 {
		return list[0]
	}
	if i >= len(list)-1 {
		return list[len(list)-1]
	}
	t := x - float64(i)
	return math.Exp((1-t)*math.Log(list[i]) + t*math.Log(list[i+1]))
}

// boxcar is the centred mean over width cells (made odd), over fewer at the
// ends.
func boxcar(x []float64, width int) []float64 {
	half := max(0, width/2)
	y := make([]float64, len(x))
	sum := make([]float64, len(x)+1)
	for i, v := range x {
		sum[i+1] = sum[i] + v
	}
	for i := range y {
		from, to := max(0, i-half), min(len(x), i+half+1)
		y[i] = math.Max(0, sum[to]-sum[from]) / float64(to-from)
	}
	return y
}

// quantile is the q-quantile of the entries of x above 0, 0 for none.
func quantile(x []float64, q float64) float64 {
	var s []float64
	for _, v := range x {
		if v > 0 {
			s = append(s, v)
		}
	}
	if len(s) == 0 {
		return 0
	}
	sort.Float64s(s)
	return s[int(q*float64(len(s)-1))]
}

// split returns the stretches that are noise and those that hold the target.
func (e *envelope) split() (noise, target []Stretch) {
	on, quiet := audio.FromPowerDB(onDB), audio.FromPowerDB(quietDB)
	n := len(e.level)
	// Target: from where the level rises above on, back and forth to where it
	// is below quiet; short pauses stay in.
	for c := 0; c < n; c++ {
		if !(e.level[c] > on) {
			continue
		}
		from, to := c, c
		for from > 0 && e.level[from-1] >= quiet {
			from--
		}
		for to < n && e.level[to] >= quiet {
			to++
		}
		s := Stretch{e.edge(from), e.edge(to)}
		c = to
		if k := len(target) - 1; k >= 0 && s.From-target[k].To < bridgeS {
			target[k].To = s.To
		} else {
			target = append(target, s)
		}
	}
	kept := target[:0]
	for _, s := range target {
		if s.To-s.From >= leastTargetS {
			kept = append(kept, s)
		}
	}
	target = kept
	// Noise: below quiet, away from what is not.
	before, after := int(math.Ceil(guardBeforeS/e.step)), int(math.Ceil(guardAfterS/e.step))
	free := make([]bool, n)
	for c := range free {
		free[c] = e.level[c] < quiet
	}
	for c := range e.level {
		if e.level[c] >= quiet {
			for d := max(0, c-before); d <= min(n-1, c+after); d++ {
				free[d] = false
			}
		}
	}
	for c := 0; c < n; c++ {
		if !free[c] {
			continue
		}
		from := c
		for c < n && free[c] {
			c++
		}
		if s := (Stretch{e.edge(from), e.edge(c)}); s.To-s.From >= leastNoiseS {
			noise = append(noise, s)
		}
	}
	return noise, target
}

// edge is the time of the start of cell c. The first and the last cell reach to
// the ends of what was measured.
func (e *envelope) edge(c int) float64 {
	at := e.from + (float64(c)-0.5)*e.step
	if c == 0 {
		at = 0
	}
	return math.Max(at, 0)
}

// reduction is how much lower the bands are in the output than at the
// reference over the stretches, mean of the bands, dB.
func (e *envelope) reduction(at []Stretch) float64 {
	sum, count := 0.0, 0
	for b := range e.out {
		r, o := e.meanIn(e.ref[b], at, 0, len(e.level)), e.meanIn(e.out[b], at, 0, len(e.level))
		if r > 0 && o > 0 {
			sum += audio.PowerDB(r / o)
			count++
		}
	}
	if count == 0 {
		return 0
	}
	return sum / float64(count)
}

func length(list []Stretch) float64 {
	sum := 0.0
	for _, s := range list {
		sum += s.To - s.From
	}
	return sum
}

// judge decides what the stretches found may be used for.
func (e *envelope) judge(noise, target []Stretch, o SegmentOptions) *Segments {
	if s := length(noise); s < leastTotalS {
		return none(fmt.Sprintf("no noise-only part: %.1f s lie near the floor for at least %.2f s at a time, %.1f s are needed", s, leastNoiseS, leastTotalS))
	}
	quiet := e.reduction(noise)
	known := o.ExpectedReductionDB >= 1
	if len(target) == 0 || length(target) < leastSoundS {
		switch {
		case known && quiet < tellTale*o.ExpectedReductionDB:
			return none(fmt.Sprintf("an even level that the beam lowers by %.1f dB, where it would lower noise by about %.1f dB: the target may never stop", quiet, o.ExpectedReductionDB))
		case !known && quiet < 0.5:
			return none(fmt.Sprintf("an even level that the beam lowers by %.1f dB: noise and target cannot be told apart", quiet))
		}
		return &Segments{Noise: noise, NoTarget: NoTarget,
			Explanation: fmt.Sprintf("no target: nothing rises %d dB above the noise for long", onDB)}
	}
	loud := e.reduction(target)
	if known && quiet < tellTale*o.ExpectedReductionDB && quiet-loud < tellTale*o.ExpectedReductionDB {
		return none(fmt.Sprintf("the quiet parts are lowered by %.1f dB and the loud ones by %.1f dB, where noise would be lowered by about %.1f dB: the target may never stop, or the noise comes from its direction", quiet, loud, o.ExpectedReductionDB))
	}
	if excess, same := e.excess(noise, target); same >= 1 && excess > likeNoise*same {
		return &Segments{Noise: noise, NoTarget: NoTarget,
			Explanation: fmt.Sprintf("no target: the beam lowers the louder parts by %.1f dB, like the noise (%.1f dB): gusts or knocks from elsewhere, or the beam points beside the target", excess, same)}
	}
	return &Segments{Noise: noise, Target: target}
}

// excess is how much lower what the target stretches hold above the noise is in
// the output than at the reference, dB, and the same of the noise, both as
// means over the bands that stand 3 dB and more above the noise; 0, 0 where
// none does.
func (e *envelope) excess(noise, target []Stretch) (loud, quiet float64) {
	n, count := len(e.level), 0.0
	for b := range e.out {
		nr, no := e.meanIn(e.ref[b], noise, 0, n), e.meanIn(e.out[b], noise, 0, n)
		ar, ao := e.meanIn(e.ref[b], target, 0, n), e.meanIn(e.out[b], target, 0, n)
		if !(no > 0) || !(nr > 0) || ao < 2*no || !(ar > nr) {
			continue
		}
		loud += audio.PowerDB((ar - nr) / (ao - no))
		quiet += audio.PowerDB(nr / no)
		count++
	}
	if count == 0 {
		return 0, 0
	}
	return loud / count, quiet / count
}
