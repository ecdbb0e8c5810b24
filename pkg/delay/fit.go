package delay

import (
	"math"

	"alidade/pkg/kernel"
)

// leastMaximum returns the a for which the largest |rows·a - want| is least, to
// the accuracy of the given rounds of reweighting [Lawson 1961]: a weighted
// least-squares fit whose weights are multiplied with the size of the error.
// weight holds the first weights and is overwritten. Of all rounds, the best
// one counts.
func leastMaximum(rows [][]float64, want, weight []float64, rounds int) []float64 {
	var best []float64
	least := math.Inf(1)
	for range rounds {
		a := leastSquares(rows, want, weight)
		sum, worst := 0.0, 0.0
		for i, r := range rows {
			e := -want[i]
			for n, v := range r {
				e += v * a[n]
			}
			e = math.Abs(e)
			worst = max(worst, e)
			weight[i] *= e
			sum += weight[i]
		}
		if worst < least {
			best, least = a, worst
		}
		if sum == 0 {
			break
		}
		scale := float64(len(rows)) / sum
		for i := range weight {
			weight[i] *= scale
		}
	}
	return best
}

// leastSquares returns the a that minimises Σ_i weight[i]·(rows[i]·a - want[i])²,
// by Householder reflections of the weighted rows. Columns that depend on those
// before them get zero.
func leastSquares(rows [][]float64, want, weight []float64) []float64 {
	n := len(rows[0])
	// q[j] is column j, q[n] the right-hand side.
	q := make([][]float64, n+1)
	for j := range q {
		q[j] = make([]float64, len(rows))
		for i := range rows {
			v := want[i]
			if j < n {
				v = rows[i][j]
			}
			q[j][i] = v * math.Sqrt(weight[i])
		}
	}
	diagonal := make([]float64, n)
	for j := range n {
		v := q[j][j:]
		norm := math.Sqrt(kernel.Dot64(v, v))
		if norm == 0 {
			continue
		}
		if v[0] > 0 {
			norm = -norm
		}
		diagonal[j] = norm
		v[0] -= norm
		scale := 1 / (-norm * v[0]) // 2/|v|²
		for _, w := range q[j+1:] {
			w = w[j:]
			back := scale * kernel.Dot64(v, w)
			for i, x := range v {
				w[i] -= back * x
			}
		}
	}
	a := make([]float64, n)
	for j := n - 1; j >= 0; j-- {
		if diagonal[j] == 0 {
			continue
		}
		v := q[n][j]
		for l := j + 1; l < n; l++ {
			v -= q[l][j] * a[l]
		}
		a[j] = v / diagonal[j]
	}
	return a
}
