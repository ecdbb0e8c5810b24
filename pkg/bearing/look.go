package bearing

import (
	"math"
	"slices"

	"alidade/pkg/acoustics"
)

// Limits of the search in one window, in units of the steered response, which
// is 1 where every line of every pair is in phase.
const (
	detectSigma = 5.0  // peaks below this many standard deviations of pure noise are none
	detectFloor = 0.06 // nor are peaks lower than this
	secondPeak  = 0.3  // a further source reaches this part of the first
	maxCoherent = 0.995
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
	places     []place   // of the last look
	leads      []lead    // between its sightings
	firstMap   []float64 // steered response before any source was taken out
}

func newLooker(s *space, set *settings, pairs []pairIndex) (*looker, error) {
	g, err := newGrid(s, set, pairs)
	if err != nil {
		return nil, err
	}
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
	return l, nil
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
	boxSmooth(l.levelMean, l.level, l.weightSmoothing())
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
	sum1, sum2 := 0.0, 0.0
	for k, c := range l.smooth {
		c = math.Min(math.Max(c, 0), 1)
		if l.snap[k] == 0 {
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

// phases fills cos and sin with e^{+j omega (tau_i - tau_j)} of place p.
func (l *looker) phases(cos, sin []float64, p place) {
	K := l.bins
	l.space.delays(l.tau, p)
	step := l.omega[1] - l.omega[0]
	for c, q := range l.pairs {
		d := l.tau[q.i] - l.tau[q.j]
		s, co := math.Sincos(l.omega[0] * d)
		ss, sc := math.Sincos(step * d)
		rc, rs := cos[c*K:c*K+K], sin[c*K:c*K+K]
		for k := range rc {
			rc[k], rs[k] = co, s
			co, s = co*sc-s*ss, co*ss+s*sc
		}
	}
}

// aligned puts the mean over the pairs of Re(x e^{j omega tau}) into dst[k].
func (l *looker) aligned(dst, xr, xi, cos, sin []float64) {
	K := l.bins
	clear(dst)
	for c := range l.pairs {
		q := l.pairs[c]
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		a, b, rc, rs := xr[c*K:c*K+K], xi[c*K:c*K+K], cos[c*K:c*K+K], sin[c*K:c*K+K]
		for k := range a {
			dst[k] += a[k]*rc[k] - b[k]*rs[k]
		}
	}
	f := 1 / float64(l.alivePairs)
	for k := range dst {
		dst[k] *= f
	}
}

// ampSmoothing is how many lines to each side the coherent part is averaged
// over: more for few pairs, whose single lines say little.
func (l *looker) ampSmoothing() int { return min(8, 1+12/l.alivePairs) }

// weightSmoothing is how many lines to each side the coherence behind the
// weights is averaged over.
func (l *looker) weightSmoothing() int { return 6 }

// apportion fits the coherent part of each of the first n sources, and of
// diffuse sound, to every line, none negative, by least squares over the pairs
// (coordinate descent), and leaves the rest in rr, ri. The part of diffuse
// sound is fitted to smoothed lines: its spectrum is smooth, and over single
// lines it would take too much from the waves.
func (l *looker) apportion(n int) {
	K := l.bins
	z := make([][]float64, n)
	across := make([][]float64, n) // mean over the pairs of Gamma·cos
	gram := make([][][]float64, n)
	for j := range n {
		z[j], across[j] = make([]float64, K), make([]float64, K)
		l.aligned(z[j], l.gr, l.gi, l.cos[j], l.sin[j])
		gram[j] = make([][]float64, n)
		for c, q := range l.pairs {
			if !l.alive[q.i] || !l.alive[q.j] {
				continue
			}
			cos, gamma := l.cos[j][c*K:c*K+K], l.diffuse[c*K:c*K+K]
			for k, v := range gamma {
				across[j][k] += v * cos[k] / float64(l.alivePairs)
			}
		}
		for i := range j {
			g := make([]float64, K)
			for c, q := range l.pairs {
				if !l.alive[q.i] || !l.alive[q.j] {
					continue
				}
				for k := range K {
					g[k] += l.cos[j][c*K+k]*l.cos[i][c*K+k] + l.sin[j][c*K+k]*l.sin[i][c*K+k]
				}
			}
			for k := range g {
				g[k] /= float64(l.alivePairs)
			}
			gram[j][i], gram[i][j] = g, g
		}
	}
	// First all of it on smoothed lines, for the diffuse part.
	amp := make([]float64, n)
	clear(l.field)
	if l.alivePairs > 2 {
		// Left and right sides of the equations are summed over the same lines.
		sum := func(x []float64) []float64 {
			y := make([]float64, K)
			boxSmooth(y, x, fieldSmoothing)
			return y
		}
		zs, as := make([][]float64, n), make([][]float64, n)
		gs := make([][][]float64, n)
		for j := range n {
			zs[j], as[j] = sum(z[j]), sum(across[j])
			gs[j] = make([][]float64, n)
			for i := range j {
				gs[j][i] = sum(gram[j][i])
				gs[i][j] = gs[j][i]
			}
		}
		part, norm := sum(l.fieldPart), sum(l.fieldNorm)
		for k := range K {
			clear(amp)
			field := 0.0
			for range 24 {
				last := field
				for j := range n {
					v := zs[j][k] - as[j][k]*field
					for i := range n {
						if i != j {
							v -= gs[j][i][k] * amp[i]
						}
					}
					amp[j] = math.Min(math.Max(v, 0), 2)
				}
				v := part[k]
				for j := range n {
					v -= as[j][k] * amp[j]
				}
				field = math.Min(math.Max(v/math.Max(norm[k], 1e-9), 0), 1)
				if math.Abs(field-last) < 1e-5 {
					break
				}
			}
			l.field[k] = field
		}
	}
	for k := range K {
		clear(amp)
		for range 12 {
			for j := range n {
				v := z[j][k] - across[j][k]*l.field[k]
				for i := range n {
					if i != j {
						v -= gram[j][i][k] * amp[i]
					}
				}
				// The power of the line itself is the most there can be.
				amp[j] = math.Min(math.Max(v, 0), l.level[k])
			}
			if n <= 1 {
				break
			}
		}
		for j := range n {
			l.amp[j][k] = amp[j]
		}
	}
	for c, q := range l.pairs {
		rr, ri := l.rr[c*K:c*K+K], l.ri[c*K:c*K+K]
		copy(rr, l.gr[c*K:c*K+K])
		copy(ri, l.gi[c*K:c*K+K])
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		gamma := l.diffuse[c*K : c*K+K]
		for k := range rr {
			rr[k] -= l.field[k] * gamma[k]
			for j := range n {
				rr[k] -= l.amp[j][k] * l.cos[j][c*K+k]
				ri[k] += l.amp[j][k] * l.sin[j][c*K+k]
			}
		}
	}
}

// fieldSmoothing is how many lines to each side the part of diffuse sound is
// averaged over.
const fieldSmoothing = 8

// putBack adds (sign 1) or takes out (sign -1) source j to what is left.
func (l *looker) putBack(j int, sign float64) {
	K := l.bins
	for c, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		for k := range K {
			l.rr[c*K+k] += sign * l.amp[j][k] * l.cos[j][c*K+k]
			l.ri[c*K+k] -= sign * l.amp[j][k] * l.sin[j][c*K+k]
		}
	}
}

// likelihood sets the weight of every line for source j from its coherent part
// c: for one source in uncorrelated noise of equal power at M microphones the
// log-likelihood of the place is, up to a constant, the sum over lines of
//
//	2 n c / ((1-c)(1-c+M c)) · sum over pairs of Re(gamma e^{j omega (tau_i - tau_j)})
//
// with n the number of independent frames, so that its bend is the information
// of the stochastic Cramér–Rao bound [Stoica & Nehorai 1990].
func (l *looker) likelihood(z []float64) {
	boxSmooth(l.smooth, z, l.weightSmoothing())
	living := 0
	for _, a := range l.alive {
		if a {
			living++
		}
	}
	M := float64(living)
	share := M * (M - 1) / 2 / float64(l.alivePairs)
	frames := float64(l.set.hop) / float64(l.set.size) * 1.056 * hannEfficiency * share
	for k, c := range l.smooth {
		// Both smoothed alike, so that chance in the source's own spectrum falls
		// out of the ratio.
		c /= math.Max(l.levelMean[k], 1e-300)
		// Coherence that noise alone would show counts for nothing.
		least := 1 / math.Sqrt(2*float64(l.alivePairs)*math.Max(l.snap[k], 1)*float64(2*l.weightSmoothing()+1))
		l.w[k] = 0
		if c > least && l.snap[k] > 0 {
			c = math.Min(c, maxCoherent)
			l.w[k] = 2 * l.snap[k] * frames * c / ((1 - c) * (1 - c + M*c))
		}
	}
}

// hannEfficiency is the part of the information in a stretch of time that
// half-overlapped Hann frames use: (mean of u)²/(mean of u²) with
// u = sin⁴ + cos⁴.
const hannEfficiency = 0.9474

// climb evaluates the likelihood at place p: its slope and bend, by group if
// groups is not nil. The bend leaves out second derivatives of the delays
// (Gauss and Newton).
func (l *looker) climb(p place, groups []groupSum) (value float64, slope vec4, bend mat4) {
	K := l.bins
	l.space.delays(l.tau, p)
	l.space.slopes(l.jac, p)
	n := l.space.dim + 1
	if !l.set.near {
		n--
	}
	step := l.omega[1] - l.omega[0]
	G := l.groups
	clear(groups)
	for c, q := range l.pairs {
		if !l.alive[q.i] || !l.alive[q.j] {
			continue
		}
		d := l.tau[q.i] - l.tau[q.j]
		s, co := math.Sincos(l.omega[0] * d)
		ss, sc := math.Sincos(step * d)
		xr, xi := l.rr[c*K:c*K+K], l.ri[c*K:c*K+K]
		w, omega := l.w[:K], l.omega[:K]
		sl, be := l.slope[c*G:c*G+G], l.bend[c*G:c*G+G]
		clear(sl)
		clear(be)
		k := 0
		for g := range G {
			end := ((g+1)*K + G - 1) / G
			var va, sa, ba float64
			for ; k < end && k < K; k++ {
				re := xr[k]*co - xi[k]*s
				im := xr[k]*s + xi[k]*co
				co, s = co*sc-s*ss, co*ss+s*sc
				wo := w[k] * omega[k]
				va += w[k] * re
				sa -= wo * im
				ba += wo * omega[k] * re
			}
			value += va
			sl[g], be[g] = sa, ba
		}
		var j vec4
		for a := range n {
			j[a] = l.jac[q.i][a] - l.jac[q.j][a]
		}
		sumS, sumB := 0.0, 0.0
		for g := range G {
			sumS += sl[g]
			sumB += be[g]
			if groups != nil {
				t := 0
				for a := range maxDims {
					groups[g].s[a] += float32(sl[g] * j[a])
					for b := a; b < maxDims; b++ {
						groups[g].h[t] += float32(be[g] * j[a] * j[b])
						t++
					}
				}
			}
		}
		for a := range n {
			slope[a] += sumS * j[a]
		}
		bend.addOuter(sumB, j)
	}
	return value, slope, bend
}
