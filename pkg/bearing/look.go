package bearing

import (
	"math"
	"slices"

	"alidade/pkg/acoustics"
)

// Limits of the search in one window, in units of the steered response, which
// is 1 where every line of every pair is in phase.
const (
	detectSigma = 5.0    // peaks below this many standard deviations of pure noise are none
	detectFloor = 0.06   // nor are peaks lower than this
	secondPeak  = 0.3    // a further source reaches this part of the first
	maxCoherent = 0.9995 // more is not believed
	maxGroups   = 16
	groupHz     = 150 // least width of a group of lines
)

// groupSum is the slope and the bend of the likelihood over one group of lines.
type groupSum struct {
	s [maxDims]float32
	h [10]float32 // upper triangle, by rows
}

// sighting is one source in one window.
type sighting struct {
	window int
	at     place
	info   mat4 // information about (cosines, curvature)
	score  vec4 // slope of the likelihood left at the place
	value  float64
	rest   float64 // best separate peak once all sources are taken out
	fit    []float32
	groups []groupSum
	active bool
	level  float64 // mean power of the window
	blur   float64 // coherent sound that no source explains: see (*looker).blur
	rest2  float64 // its power re the source's
}

// looker analyses windows one at a time. It holds scratch memory.
type looker struct {
	space  *space
	set    *settings
	pairs  []pairIndex
	grid   *grid
	bins   int
	omega  []float64
	group  []int // of each bin
	groups int
	radius float64 // two peaks nearer than this, in cosines, are one

	alive      []bool
	alivePairs int
	gr, gi     []float64 // coherence, [p*K+k]
	rr, ri     []float64 // what is left of it
	mag        []float64 // |gamma|
	phat       []float64
	coh        []float64
	snap       []float64 // effective number of averaged frames
	smooth     []float64
	power      []float64 // [m*K+k], 1/sqrt of the smoothed power
	level      []float64 // power of the line itself re the smoothed one, mean over the living
	levelMean  []float64
	total      float64 // weight of the steered response over the grid's pairs, per bin sum
	pairTotal  float64
	noise      float64     // standard deviation of the steered response without a source
	cos, sin   [][]float64 // phases of each source found, [j][p*K+k]
	amp        [][]float64 // coherent part of each source, [j][k]
	w          []float64
	tau        []float64
	jac        [][maxDims]float64
	val, slope []float64
	bend       []float64
	diffuse    []float64 // Gamma, coherence of diffuse sound, [p*K+k]
	field      []float64 // coherent part of diffuse sound, [k]
	fieldNorm  []float64 // mean over the living pairs of Gamma²
	fieldPart  []float64 // mean over the living pairs of Gamma·Re gamma
	leaked     []bool    // lines that hold no more than side lobes of others
	places     []place   // of the last look
	leads      []lead    // between its sightings
	firstMap   []float64 // steered response before any source was taken out
}

func newLooker(s *space, set *settings, pairs []pairIndex) (*looker, error) {
	g, err := newGrid(s, set, pairs)
	if err != nil {
		return nil, err
	}
	return newLookerOn(s, set, pairs, g), nil
}

// twin returns a looker like l with scratch memory of its own.
func (l *looker) twin() (*looker, error) {
	g, err := l.grid.twin()
	if err != nil {
		return nil, err
	}
	return newLookerOn(l.space, l.set, l.pairs, g), nil
}

func newLookerOn(s *space, set *settings, pairs []pairIndex, g *grid) *looker {
	K := set.binTo - set.binFrom
	l := &looker{space: s, set: set, pairs: pairs, grid: g, bins: K}
	df := float64(set.rate) / float64(set.size)
	l.groups = min(maxGroups, max(1, int(float64(K)*df/groupHz)))
	for k := range K {
		l.omega = append(l.omega, 2*math.Pi*df*float64(set.binFrom+k))
		l.group = append(l.group, k*l.groups/K)
	}
	// The main lobe at the middle of the range, but not less than 0.12 (7°
	// abeam) nor more than 0.5.
	middle := set.Speed / (0.5 * (set.FromHz + set.ToHz))
	l.radius = math.Min(math.Max(0.7*middle/s.geo.Extent, 0.12), 0.5)
	n := len(pairs) * K
	l.alive = make([]bool, len(s.at))
	l.leaked = make([]bool, K)
	for _, p := range []*[]float64{&l.gr, &l.gi, &l.rr, &l.ri, &l.mag, &l.phat, &l.diffuse} {
		*p = make([]float64, n)
	}
	for _, p := range []*[]float64{&l.coh, &l.snap, &l.smooth, &l.w, &l.level, &l.levelMean, &l.field, &l.fieldNorm, &l.fieldPart} {
		*p = make([]float64, K)
	}
	l.power = make([]float64, len(s.at)*K)
	for range set.Sources {
		l.cos = append(l.cos, make([]float64, n))
		l.sin = append(l.sin, make([]float64, n))
		l.amp = append(l.amp, make([]float64, K))
	}
	l.firstMap = make([]float64, len(g.points))
	l.tau = make([]float64, len(s.at))
	l.jac = make([][maxDims]float64, len(s.at))
	for _, p := range []*[]float64{&l.val, &l.slope, &l.bend} {
		*p = make([]float64, len(pairs)*l.groups)
	}
	for p, q := range pairs {
		d := s.at[q.i].Distance(s.at[q.j])
		for k := range K {
			l.diffuse[p*K+k] = acoustics.DiffuseCoherence(d, l.omega[k]/(2*math.Pi), set.Speed)
		}
	}
	return l
}

// boxSmooth puts the mean of src over up to half entries to each side into dst.
func boxSmooth(dst, src []float64, half int) {
	n := len(src)
	sum := 0.0
	from, to := 0, 0
	for i := range src {
		for to < min(n, i+half+1) {
			sum += src[to]
			to++
		}
		for from < i-half {
			sum -= src[from]
			from++
		}
		dst[i] = sum / float64(to-from)
	}
}

// load takes the sums of one window. noise, if not nil, holds cross-spectra of
// the stationary noise for a weight of 1, whose coherent part is taken out.
// It returns a reason if there is nothing to look at.
func (l *looker) load(sum, noise *crossSum) string {
	K, M := l.bins, len(l.space.at)
	level := make([]float64, 0, M)
	for m := range M {
		e := 0.0
		for _, v := range sum.auto[m*K : m*K+K] {
			e += v
		}
		level = append(level, e)
	}
	sorted := slices.Clone(level)
	slices.Sort(sorted)
	middle := sorted[M/2]
	living := 0
	for m, e := range level {
		l.alive[m] = e > 0 && e > deadRatio*middle
		if l.alive[m] {
			living++
		}
	}
	if living < 2 {
		return "silence"
	}
	for m := range M {
		row := l.power[m*K : m*K+K]
		boxSmooth(row, sum.auto[m*K:m*K+K], 2)
		for k := range row {
			row[k] = 1 / math.Sqrt(math.Max(row[k], 1e-300))
		}
	}
	for k := range K {
		// Half-overlapped Hann frames: 1.056 times the variance of independent
		// ones [Welch 1967].
		l.snap[k] = 0
		if sum.weightSq[k] > 0 {
			l.snap[k] = math.Max(1, sum.weight[k]*sum.weight[k]/sum.weightSq[k]/1.056)
		}
	}
	clear(l.level)
	for m := range M {
		if !l.alive[m] {
			continue
		}
		for k, f := range l.power[m*K : m*K+K] {
			l.level[k] += sum.auto[m*K+k] * f * f / float64(living)
		}
	}
	boxSmooth(l.levelMean, l.level, weightSmoothing)
	clear(l.coh)
	l.alivePairs = 0
	for p, q := range l.pairs {
		gr, gi, mag := l.gr[p*K:p*K+K], l.gi[p*K:p*K+K], l.mag[p*K:p*K+K]
		if !l.alive[q.i] || !l.alive[q.j] {
			clear(gr)
			clear(gi)
			clear(mag)
			continue
		}
		l.alivePairs++
		sr, si := sum.re[p*K:p*K+K], sum.im[p*K:p*K+K]
		pi, pj := l.power[q.i*K:q.i*K+K], l.power[q.j*K:q.j*K+K]
		for k := range gr {
			f := pi[k] * pj[k]
			re, im := sr[k], si[k]
			if noise != nil {
				re -= sum.weight[k] * noise.re[p*K+k]
				im -= sum.weight[k] * noise.im[p*K+k]
			}
			re, im = re*f, im*f
			e := re*re + im*im
			gr[k], gi[k] = re, im
			mag[k] = math.Sqrt(e)
		}
	}
	if l.alivePairs == 0 {
		return "silence"
	}
	// What diffuse sound could explain is left out of the first search: the
	// reverberation of a room is coherent at low frequencies, and looks there
	// like a wave from abeam.
	clear(l.fieldNorm)
	clear(l.fieldPart)
	for p, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		gamma, gr := l.diffuse[p*K:p*K+K], l.gr[p*K:p*K+K]
		for k, v := range gamma {
			l.fieldNorm[k] += v * v / float64(l.alivePairs)
			l.fieldPart[k] += v * gr[k] / float64(l.alivePairs)
		}
	}
	for p, q := range l.pairs {
		rr, ri := l.rr[p*K:p*K+K], l.ri[p*K:p*K+K]
		copy(rr, l.gr[p*K:p*K+K])
		copy(ri, l.gi[p*K:p*K+K])
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		gamma := l.diffuse[p*K : p*K+K]
		for k := range rr {
			if l.alivePairs > 2 {
				rr[k] -= l.fieldPart[k] / math.Max(l.fieldNorm[k], 1e-9) * gamma[k]
			}
			l.coh[k] += rr[k]*rr[k] + ri[k]*ri[k]
		}
	}
	for k := range K {
		l.coh[k] = l.coh[k]/float64(l.alivePairs) - 1/math.Max(l.snap[k], 1)
	}
	boxSmooth(l.smooth, l.coh, 4)
	l.leaks(sum)
	sum1, sum2 := 0.0, 0.0
	for k, c := range l.smooth {
		c = math.Min(math.Max(c, 0), 1)
		if l.snap[k] == 0 || l.leaked[k] {
			c = 0
		}
		l.coh[k] = c
		sum1 += c
		sum2 += c * c
	}
	if sum1 <= 0 {
		return "the channels are not coherent"
	}
	gridPairs := 0
	for _, p := range l.grid.pairs {
		if l.alive[l.pairs[p].i] && l.alive[l.pairs[p].j] {
			gridPairs++
		}
	}
	if gridPairs == 0 {
		return "silence"
	}
	l.pairTotal = sum1
	l.total = sum1 * float64(gridPairs)
	// Neighbouring lines of Hann windows are correlated: 1.5 lines count as one.
	l.noise = math.Sqrt(1.5*sum2/(2*float64(gridPairs))) / sum1
	for p := range l.pairs {
		mag, phat := l.mag[p*K:p*K+K], l.phat[p*K:p*K+K]
		for k, m := range mag {
			phat[k] = 0
			if m > 0 {
				phat[k] = l.coh[k] / m
			}
		}
	}
	return ""
}

// deadRatio is the power, re the middle microphone, below which a microphone
// counts as dead: -30 dB.
const deadRatio = 1e-3
