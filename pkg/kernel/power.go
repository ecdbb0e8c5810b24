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
