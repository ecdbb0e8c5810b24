package measure

import (
	"math"
	"sync"

	"gonum.org/v1/gonum/stat/distuv"

	"alidade/pkg/kernel"
)

// spread is how sure a mean is.
type spread struct {
	variance float64 // of the mean
	dof      float64 // degrees of freedom behind variance
	block    int     // entries over which the values were taken as dependent
}

// meanSpread returns the variance of the mean of z, whose values stand at the
// places at of an evenly spaced series (ascending, gaps allowed). The mean of z
// must be 0: values are residuals about their own mean.
//
// The variance is the long-run variance under Bartlett's kernel,
//
//	v = 1/n² · Q / (1 - s/n²),   Q = Σ_ij κ_ij z_i z_j,   κ_ij = 1 - |at_i - at_j|/L
//
// for distances below L and 0 beyond, with s = Σ_ij κ_ij: the second factor
// undoes what taking out the mean removes [Newey West 1987]. The block length L
// follows from the autocorrelation of z [Andrews 1991, eq. 6.2 and 6.4, AR(1)].
// The degrees of freedom are those of the quadratic form Q,
// 2·E[Q]²/var[Q] [Satterthwaite 1946], lowered where the values have heavier
// tails than a normal distribution has, by 2/(kurtosis-1) [Box 1953].
//
// Least is a block length that is known to be needed, 0 for none. More than
// mostUnits values are added up in runs of neighbours first. Where the values
// drift, so that the means of four or eight batches in the order of time differ
// significantly more than the kernel tells, the batches count instead.
func meanSpread(z []float64, at []int, least int) spread {
	s := kernelSpread(z, at, least)
	if !(s.variance > 0) {
		return s
	}
	kernel := s
	n := len(z)
	for _, batches := range []int{4, 8} {
		if n < 8*batches {
			break
		}
		square, from := 0.0, 0
		for b := range batches {
			to, sum := (b+1)*n/batches, 0.0
			for _, v := range z[from:to] {
				sum += v
			}
			square += sum * sum
			from = to
		}
		c := float64(batches)
		v := square * c / (c - 1) / (float64(n) * float64(n))
		if v <= 2*kernel.variance {
			continue // F at 95 % is above 2.01 for 7 and above 2.60 for 3 degrees of freedom
		}
		limit := distuv.F{D1: c - 1, D2: kernel.dof}.Quantile(driftLevel)
		if v > limit*kernel.variance && v > s.variance {
			s = spread{v, c - 1, n / batches}
		}
	}
	return s
}

// driftLevel is the level of the test for drift.
const driftLevel = 0.95

// kernelSpread is meanSpread by Bartlett's kernel alone.
func kernelSpread(z []float64, at []int, least int) spread {
	if len(z) < 2 {
		return spread{math.Inf(1), 0, 1}
	}
	if len(z) <= mostUnits {
		return unitSpread(z, at, least)
	}
	run := (len(z) + mostUnits - 1) / mostUnits
	var sums []float64
	var places []int
	for i, v := range z {
		if k := len(places) - 1; k >= 0 && places[k] == at[i]/run {
			sums[k] += v
		} else {
			sums, places = append(sums, v), append(places, at[i]/run)
		}
	}
	s := unitSpread(sums, places, (least+run-1)/run)
	part := float64(len(sums)) / float64(len(z))
	s.variance *= part * part
	s.block *= run
	return s
}

// mostUnits bounds the work of one spread.
const mostUnits = 3000

// unitSpread is meanSpread without the bound.
func unitSpread(z []float64, at []int, least int) spread {
	n := float64(len(z))
	block := blockLength(z, at, least)
	second, fourth := 0.0, 0.0
	for _, v := range z {
		second += v * v
		fourth += v * v * v * v
	}
	// Values further apart than a block have nothing to do with each other.
	f := form{block: block}
	for from := 0; from < len(z); {
		to := from + 1
		for to < len(z) && at[to]-at[to-1] < block {
			to++
		}
		if at[to-1]-at[from] == to-1-from {
			f.row(z[from:to])
		} else {
			f.scattered(z[from:to], at[from:to])
		}
		from = to
	}
	trace := n - f.sum/n
	if trace < 0.5 || !(second > 0) {
		return spread{0, math.Max(1, n-1), block}
	}
	dof := trace * trace / (f.square - 2*f.rows/n + f.sum*f.sum/(n*n))
	if kurtosis := n * fourth / (second * second); kurtosis > 3 {
		dof *= 2 / (kurtosis - 1)
	}
	return spread{f.q / (n * trace), math.Max(dof, 1), block}
}

// form is the quadratic form Q of values and what its spread needs of κ.
type form struct {
	block  int
	q      float64 // Σ κ_ij z_i z_j
	sum    float64 // Σ κ_ij
	square float64 // Σ κ_ij²
	rows   float64 // Σ_i (Σ_j κ_ij)²
}

// row adds values that stand in a row: sums distance by distance.
func (f *form) row(z []float64) {
	n := len(z)
	reach := min(f.block, n) - 1 // the largest distance that counts
	for d := range reach + 1 {
		k := 1 - float64(d)/float64(f.block)
		pairs := float64(n - d)
		if d > 0 {
			pairs *= 2
			f.q += 2 * k * kernel.Dot64(z[:n-d], z[d:])
		} else {
			f.q += kernel.Dot64(z, z)
		}
		f.sum += k * pairs
		f.square += k * k * pairs
	}
	// The sum of a row is that of all distances to both sides, as far as they go.
	side := func(m int) float64 {
		m = min(m, reach)
		return float64(m) - float64(m)*float64(m+1)/(2*float64(f.block))
	}
	edge := min(reach, n/2)
	for i := range edge {
		r := 1 + side(i) + side(n-1-i)
		f.rows += 2 * r * r
	}
	if inside := n - 2*edge; inside > 0 {
		r := 1 + side(edge) + side(n-1-edge)
		f.rows += float64(inside) * r * r
	}
}

// scattered adds values with gaps: pair by pair.
func (f *form) scattered(z []float64, at []int) {
	rows := make([]float64, len(z))
	for i := range z {
		rows[i]++
		f.sum++
		f.square++
		f.q += z[i] * z[i]
		for j := i + 1; j < len(z) && at[j]-at[i] < f.block; j++ {
			k := 1 - float64(at[j]-at[i])/float64(f.block)
			f.q += 2 * k * z[i] * z[j]
			f.sum += 2 * k
			f.square += 2 * k * k
			rows[i] += k
			rows[j] += k
		}
	}
	for _, r := range rows {
		f.rows += r * r
	}
}

// blockLength is the length of Bartlett's kernel for z: that of Andrews for the
// autocorrelation at distance 1, and at least 0.75·n^(1/3), which takes in the
// correlation of half overlapped windows, as far as it leaves 8 blocks.
func blockLength(z []float64, at []int, least int) int {
	length := max(1, min(int(math.Round(0.75*math.Cbrt(float64(len(z))))), len(z)/8))
	rho, n := neighbours(z, at)
	return max(length, min(max(andrews(rho, n), least), len(z)/4))
}

// neighbours is the autocorrelation of z at distance 1, 0 where fewer than
// three pairs are neighbours, and the number of values.
func neighbours(z []float64, at []int) (rho, n float64) {
	cross, square, pairs := 0.0, 0.0, 0.0
	for i := range z {
		square += z[i] * z[i]
		if i > 0 && at[i] == at[i-1]+1 {
			cross += z[i] * z[i-1]
			pairs++
		}
	}
	n = float64(len(z))
	if pairs < 3 || !(square > 0) {
		return 0, n
	}
	return cross / pairs / (square / n), n
}

// andrews is the length of Bartlett's kernel for an autocorrelation rho at
// distance 1 of n values: 1.1447·(α·n)^(1/3), α = 4ρ²/(1-ρ²)².
func andrews(rho, n float64) int {
	if rho <= 0 {
		return 1
	}
	rho = math.Min(rho, 0.97)
	alpha := 4 * rho * rho / ((1 - rho*rho) * (1 - rho*rho))
	return int(math.Ceil(1.1447 * math.Cbrt(alpha*n)))
}

// plus is the spread of the sum of two independent means, with the degrees of
// freedom of Welch and Satterthwaite.
func (s spread) plus(t spread) spread {
	v := s.variance + t.variance
	if !(v > 0) {
		return spread{0, s.dof + t.dof, max(s.block, t.block)}
	}
	dof := v * v / (s.variance*s.variance/s.dof + t.variance*t.variance/t.dof)
	return spread{v, dof, max(s.block, t.block)}
}

// half is half the width of the two-sided 95 % interval, equally the one-sided
// 97.5 % limit.
func (s spread) half() float64 {
	return studentT(s.dof) * math.Sqrt(s.variance)
}

// studentT is the 97.5 % point of Student's distribution, to 1e-8 of it.
func studentT(dof float64) float64 {
	if !(dof >= 1) {
		dof = 1
	}
	x := 4/dof - 2
	c := student()
	var b0, b1 float64 // Clenshaw's recurrence
	for k := len(c) - 1; k > 0; k-- {
		b0, b1 = c[k]+x*b0-b1, b0
	}
	return math.Exp(c[0] + x/2*b0 - b1)
}

// student is a Chebyshev series of the logarithm of that point over the inverse
// degrees of freedom, 0 to 1, where it is smooth: a scan with intervals asks for
// a hundred thousand of them, and each takes the inverse of an incomplete beta
// function.
var student = sync.OnceValue(func() (c [17]float64) {
	const n = len(c)
	for i := range n {
		angle := math.Pi * (float64(i) + 0.5) / float64(n)
		v := math.Log(distuv.StudentsT{Mu: 0, Sigma: 1, Nu: 2 / (1 + math.Cos(angle))}.Quantile(0.975))
		for k := range c {
			c[k] += 2 / float64(n) * v * math.Cos(float64(k)*angle)
		}
	}
	c[0] /= 2
	return c
})

// overshoot is how much further than a plain 95 % interval the interval about
// an estimate has to reach towards zero because the estimate was reported only
// for being significant: z is the estimate over its standard error, limit the
// one-sided 97.5 % limit that it had to pass. The result is in standard errors.
// The plain interval ends at z - 1.96; under the normal distribution cut off
// at the limit the true value µ lies below
//
//	(1 - Φ(z-µ)) / (1 - Φ(q-µ)) = 0.025
//
// with a probability of 2.5 %. Below µ = 0 nothing is looked for: powers are not
// negative.
func overshoot(z, limit float64) float64 {
	const q = 1.959964
	z *= q / limit
	tail := func(x float64) float64 { return 0.5 * math.Erfc(x/math.Sqrt2) }
	low, high := 0.0, z-q
	if tail(z) >= 0.025*tail(q) {
		return math.Max(0, high)
	}
	for range 60 {
		mid := (low + high) / 2
		if tail(z-mid) < 0.025*tail(q-mid) {
			low = mid
		} else {
			high = mid
		}
	}
	return math.Max(0, z-q-low)
}
