package bearing

import (
	"math"
)

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

// weightSmoothing is how many lines to each side the coherence behind the
// weights is averaged over.
const weightSmoothing = 6

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
	boxSmooth(l.smooth, z, weightSmoothing)
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
		least := 1 / math.Sqrt(2*float64(l.alivePairs)*math.Max(l.snap[k], 1)*float64(2*weightSmoothing+1))
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
