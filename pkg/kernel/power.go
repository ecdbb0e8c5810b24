package kernel

import "fmt"

// Line is how many real parts, and how many imaginary ones after them, lie
// together in the complex values that PowerOfSums takes.
const Line = 8

// PowerOfSums sets, for four rows t,
//
//	p[t·pStride + k] = |Σ_m x[t·xStride + at(m, k)] · w[at(m, k)]|²
//
// for bins k below bins, a multiple of Line, and sources m. Complex values lie in
// lines of Line bins: the real parts of source m in line l from
// (l·sources + m)·2·Line on, the imaginary parts Line further. It panics if a
// slice is too short for that.
func PowerOfSums(p []float32, pStride int, x []float32, xStride int, w []float32, sources, bins int) {
	if bins%Line != 0 || sources < 1 || bins < 0 || pStride < bins || xStride < 2*sources*bins ||
		len(p) < 3*pStride+bins || len(x) < 3*xStride+2*sources*bins || len(w) < 2*sources*bins {
		panic(fmt.Sprintf("kernel: powers of %d bins of %d sources: rows of %d and %d values in %d and %d, %d weights",
			bins, sources, pStride, xStride, len(p), len(x), len(w)))
	}
	if bins == 0 {
		return
	}
	if vector {
		powerOfSumsAVX2(&p[0], 4*pStride, &x[0], 4*xStride, &w[0], sources, bins/Line)
		return
	}
	for t := range 4 {
		powerOfSums(p[t*pStride:][:bins], x[t*xStride:], w, sources)
	}
}

// powerOfSums is the definition, of one row.
func powerOfSums(p, x, w []float32, sources int) {
	for k := 0; k < len(p); k += Line {
		var re, im [Line]float32
		for range sources {
			xr, xi, wr, wi := x[:Line], x[Line:2*Line], w[:Line], w[Line:2*Line]
			for j := range Line {
				re[j] += xr[j]*wr[j] - xi[j]*wi[j]
				im[j] += xr[j]*wi[j] + xi[j]*wr[j]
			}
			x, w = x[2*Line:], w[2*Line:]
		}
		for j := range Line {
			p[k+j] = re[j]*re[j] + im[j]*im[j]
		}
	}
}

// PowerOfPairs is PowerOfSums for sources in pairs whose weights are each other's
// conjugates: with their sum s and their difference d a pair adds
//
//	s·Re w + j·d·Im w
//
// for what two sources of PowerOfSums would. Of x there are four parts of a line
// after one another, the real and imaginary ones of s and those of d; pair q in
// line l begins at (l·pairs + q)·4·Line, its weights at (l·pairs + q)·2·Line. It
// panics if a slice is too short for that.
func PowerOfPairs(p []float32, pStride int, x []float32, xStride int, w []float32, pairs, bins int) {
	if bins%Line != 0 || pairs < 1 || bins < 0 || pStride < bins || xStride < 4*pairs*bins ||
		len(p) < 3*pStride+bins || len(x) < 3*xStride+4*pairs*bins || len(w) < 2*pairs*bins {
		panic(fmt.Sprintf("kernel: powers of %d bins of %d pairs: rows of %d and %d values in %d and %d, %d weights",
			bins, pairs, pStride, xStride, len(p), len(x), len(w)))
	}
	if bins == 0 {
		return
	}
	if vector {
		powerOfPairsAVX2(&p[0], 4*pStride, &x[0], 4*xStride, &w[0], pairs, bins/Line)
		return
	}
	for t := range 4 {
		powerOfPairs(p[t*pStride:][:bins], x[t*xStride:], w, pairs)
	}
}

// powerOfPairs is the definition, of one row.
func powerOfPairs(p, x, w []float32, pairs int) {
	for k := 0; k < len(p); k += Line {
		var re, im [Line]float32
		for range pairs {
			sr, si, dr, di, wr, wi := x[:Line], x[Line:2*Line], x[2*Line:3*Line], x[3*Line:4*Line], w[:Line], w[Line:2*Line]
			for j := range Line {
				re[j] += sr[j]*wr[j] - di[j]*wi[j]
				im[j] += si[j]*wr[j] + dr[j]*wi[j]
			}
			x, w = x[4*Line:], w[2*Line:]
		}
		for j := range Line {
			p[k+j] = re[j]*re[j] + im[j]*im[j]
		}
	}
}

// FoldPair writes the lines of a pair for PowerOfPairs, each stride values after
// the one before: the sum and the difference of a and k·b, in split form, for the
// bins of a, a multiple of Line. It panics if the lengths differ or y is too short.
func FoldPair(y []float32, stride int, ar, ai, br, bi, kr, ki []float32) {
	n := len(ar)
	equal("pair", n, len(ai), len(br), len(bi), len(kr), len(ki))
	if n%Line != 0 || stride < 4*Line || n > 0 && len(y) < (n/Line-1)*stride+4*Line {
		panic(fmt.Sprintf("kernel: pairs of %d bins: lines %d apart in %d values", n, stride, len(y)))
	}
	if vector && n > 0 {
		foldPairAVX2(&y[0], 4*stride, &ar[0], &ai[0], &br[0], &bi[0], &kr[0], &ki[0], n/Line)
		return
	}
	for k := range ar {
		to := y[k/Line*stride+k%Line:]
		re, im := kr[k]*br[k]-ki[k]*bi[k], kr[k]*bi[k]+ki[k]*br[k]
		to[0], to[Line], to[2*Line], to[3*Line] = ar[k]+re, ai[k]+im, ar[k]-re, ai[k]-im
	}
}

// WeightedSums sets dst[t] = Σ_k p[t·stride + k]·w[k] for four rows t and the
// values of w, a multiple of Line. It panics if a slice is too short for that.
func WeightedSums(dst *[4]float32, p []float32, stride int, w []float32) {
	n := len(w)
	if n%Line != 0 || stride < n || len(p) < 3*stride+n {
		panic(fmt.Sprintf("kernel: weighted sums of %d values: rows of %d in %d", n, stride, len(p)))
	}
	if vector && n > 0 {
		weightedSumsAVX2(&dst[0], &p[0], 4*stride, &w[0], n/Line)
		return
	}
	for t := range dst {
		dst[t] = dot(p[t*stride:][:n], w)
	}
}
