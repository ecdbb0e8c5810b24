package quality

import (
	"math"
	"slices"
)

// consensus returns the leading eigenvector of the sign matrix, turned so that
// the majority is positive.
func consensus(a [][]float64) []float64 {
	M := len(a)
	v := make([]float64, M)
	for m := range v {
		v[m] = 1 + 0.1*float64(m%3)
	}
	for range 100 {
		u := make([]float64, M)
		norm := 0.0
		for i := range u {
			u[i] = float64(M) * v[i] // keeps the largest eigenvalue in front
			for j := range v {
				u[i] += a[i][j] * v[j]
			}
			norm = math.Max(norm, math.Abs(u[i]))
		}
		for i := range u {
			v[i] = u[i] / norm
		}
	}
	sum := 0.0
	for _, x := range v {
		sum += math.Copysign(1, x)
	}
	if sum < 0 || sum == 0 && v[0] < 0 {
		for i := range v {
			v[i] = -v[i]
		}
	}
	return v
}

// balance returns the times whose differences fit the delays best, with mean 0,
// and the information on each.
func balance(M int, list []pairDelay, delay, weight []float64) (t, info []float64) {
	t, info = make([]float64, M), make([]float64, M)
	rhs := make([]float64, M)
	for i, d := range list {
		info[d.i] += weight[i]
		info[d.j] += weight[i]
		rhs[d.i] -= weight[i] * delay[i]
		rhs[d.j] += weight[i] * delay[i]
	}
	// Gauss-Seidel: the matrix is a weighted Laplacian.
	for range 200 {
		change := 0.0
		next := slices.Clone(rhs)
		for i, d := range list {
			next[d.i] += weight[i] * t[d.j]
			next[d.j] += weight[i] * t[d.i]
		}
		mean := 0.0
		for m := range t {
			if info[m] > 0 {
				v := 0.5*t[m] + 0.5*next[m]/info[m]
				change = math.Max(change, math.Abs(v-t[m]))
				t[m] = v
			}
			mean += t[m] / float64(M)
		}
		for m := range t {
			t[m] -= mean
		}
		if change < 1e-12 {
			break
		}
	}
	for m := range t {
		if info[m] <= 0 {
			t[m] = math.NaN()
		}
	}
	return t, info
}

// shares splits the common power of the pairs into the gains of the
// microphones, dB: the product of two gains is what a pair has in common, so
// noise of a microphone's own leaves no trace.
func shares(M int, list []pairDelay) []float64 {
	g, n, rest := make([]float64, M), make([]float64, M), 0.0
	for _, d := range list {
		rest += d.logGain / float64(len(list))
	}
	for range 60 {
		sum := make([]float64, M)
		clear(n)
		for _, d := range list {
			v := d.logGain - rest
			sum[d.i] += v - g[d.j]
			sum[d.j] += v - g[d.i]
			n[d.i]++
			n[d.j]++
		}
		mean, count := 0.0, 0.0
		for m := range g {
			if n[m] > 0 {
				g[m] = 0.5*g[m] + 0.5*sum[m]/n[m]
				mean += g[m]
				count++
			}
		}
		for m := range g {
			g[m] -= mean / count
		}
	}
	for m := range g {
		if n[m] < 2 {
			g[m] = math.NaN()
		}
	}
	return g
}
