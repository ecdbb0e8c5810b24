package measure

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
)

// residuals takes the mean out of z and counts the places.
func residuals(z []float64, gap func(i int) int) []int {
	sum := 0.0
	for _, v := range z {
		sum += v
	}
	at := make([]int, len(z))
	for i := range z {
		z[i] -= sum / float64(len(z))
		at[i] = i + gap(i)
	}
	return at
}

func TestSpreadOfIndependentValues(t *testing.T) {
	// Variance of the mean σ²/n, whatever the gaps; more values than mostUnits
	// go through sums of neighbours.
	for _, n := range []int{20, 200, 2000, 9000} {
		for name, gap := range map[string]func(int) int{
			"in a row": func(int) int { return 0 },
			"gaps":     func(i int) int { return 13 * (i / 7) },
		} {
			sum, dof := 0.0, 0.0
			const trials = 60
			for seed := range uint64(trials) {
				r := rand.New(rand.NewPCG(seed, uint64(n)))
				z := make([]float64, n)
				for i := range z {
					z[i] = 3 * r.NormFloat64()
				}
				at := residuals(z, gap)
				s := kernelSpread(z, at, 0)
				sum += s.variance
				dof += s.dof
			}
			// Each variance has a relative standard deviation of √(2/dof).
			limit := 4 * math.Sqrt(2/(dof/trials)/trials)
			if got := sum / trials * float64(n) / 9; math.Abs(got-1) > limit+0.02 {
				t.Errorf("%d values %s: variance %.3f of the true one, within %.3f", n, name, got, limit)
			}
			if dof/trials > float64(n)-1 || dof/trials < math.Cbrt(float64(n)) {
				t.Errorf("%d values %s: %.1f degrees of freedom", n, name, dof/trials)
			}
		}
	}
}

func TestSpreadOfAutoregressiveValues(t *testing.T) {
	// Long-run variance of AR(1) with parameter a is σ²/(1-a)²; Bartlett's
	// kernel takes at most a fifth off at this length.
	for _, a := range []float64{0.3, 0.6, 0.8} {
		sum := 0.0
		const trials, n = 60, 2000
		for seed := range uint64(trials) {
			r := rand.New(rand.NewPCG(seed, 11))
			z, x := make([]float64, n), 0.0
			for i := range z {
				x = a*x + r.NormFloat64()
				z[i] = x
			}
			at := residuals(z, func(int) int { return 0 })
			sum += kernelSpread(z, at, 0).variance
		}
		if got := sum / trials * n * (1 - a) * (1 - a); got < 0.8 || got > 1.05 {
			t.Errorf("AR(1) with %g: variance %.3f of the true one", a, got)
		}
	}
}

// The sums distance by distance against the definition pair by pair, for values
// in a row, with gaps within a block and with gaps beyond it.
func TestQuadraticFormTwoWays(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 31))
	for _, n := range []int{2, 3, 4, 7, 24, 60, 61, 350} {
		for name, gap := range map[string]func(int) int{
			"in a row": func(int) int { return 0 },
			"close":    func(i int) int { return i / 5 },
			"far":      func(i int) int { return 90 * (i / 9) },
			"mixed":    func(i int) int { return 3*(i/11) + 70*(i/30) },
		} {
			for _, least := range []int{0, 1, 5, 40} {
				z := make([]float64, n)
				for i := range z {
					z[i] = r.NormFloat64()
				}
				at := residuals(z, gap)
				plain := form{block: blockLength(z, at, least)}
				plain.scattered(z, at)
				trace, second, fourth := float64(n)-plain.sum/float64(n), 0.0, 0.0
				for _, v := range z {
					second, fourth = second+v*v, fourth+v*v*v*v
				}
				want := spread{plain.q / (float64(n) * trace), 0, plain.block}
				want.dof = trace * trace / (plain.square - 2*plain.rows/float64(n) + plain.sum*plain.sum/float64(n*n))
				if k := float64(n) * fourth / (second * second); k > 3 {
					want.dof *= 2 / (k - 1)
				}
				want.dof = math.Max(want.dof, 1)
				if trace < 0.5 {
					want = spread{0, math.Max(1, float64(n)-1), plain.block}
				}
				got := unitSpread(z, at, least)
				if got.block != want.block || math.Abs(got.variance-want.variance) > 1e-9*(second/float64(n*n)) || math.Abs(got.dof/want.dof-1) > 1e-9 {
					t.Errorf("%d values %s, least block %d: %+v, want %+v", n, name, least, got, want)
				}
			}
		}
	}
}

// The series against the distribution of gonum, which stands for tables.
func TestStudentSeries(t *testing.T) {
	for dof := 1.0; dof < 1e5; dof *= 1.037 {
		want := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: dof}.Quantile(0.975)
		if got := studentT(dof); math.Abs(got/want-1) > 1e-8 {
			t.Errorf("%g degrees of freedom: %.12g, want %.12g", dof, got, want)
		}
	}
	if got := studentT(math.Inf(1)); math.Abs(got-1.959963985) > 1e-7 {
		t.Errorf("normal distribution: %.10g", got)
	}
}

func TestDriftAndNothingElseMakesBatchesCount(t *testing.T) {
	// A random walk under noise: the batches must tell more than the kernel, in
	// the median at least half of the truth. Without drift they count in at
	// most 12 % (two tests at 5 %, by four standard deviations of 300 draws less).
	const n = 400
	drifting, steady, held := 0, 0, 0
	for seed := range uint64(300) {
		r := rand.New(rand.NewPCG(seed, 21))
		z, walk := make([]float64, n), 0.0
		for i := range z {
			walk += 0.03 * r.NormFloat64()
			z[i] = walk + r.NormFloat64()
		}
		at := residuals(z, func(int) int { return 0 })
		s := meanSpread(z, at, 0)
		if s.variance > kernelSpread(z, at, 0).variance {
			drifting++
		}
		for i := range z {
			z[i] = r.NormFloat64()
		}
		residuals(z, func(int) int { return 0 })
		if s := meanSpread(z, at, 0); s.variance > kernelSpread(z, at, 0).variance {
			steady++
		} else if s.dof > 20 {
			held++
		}
	}
	if drifting < 150 || steady > 36+9 || held < 250 {
		t.Errorf("of 300 draws batches count in %d with drift and %d without", drifting, steady)
	}
}

func TestHeavyTailsLowerTheDegreesOfFreedom(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	normal, heavy := make([]float64, 300), make([]float64, 300)
	for i := range normal {
		normal[i] = r.NormFloat64()
		heavy[i] = math.Pow(r.NormFloat64(), 5)
	}
	none := func(int) int { return 0 }
	at := residuals(normal, none)
	n := meanSpread(normal, at, 0)
	at = residuals(heavy, none)
	if h := meanSpread(heavy, at, 0); h.dof > n.dof/4 {
		t.Errorf("%.1f degrees of freedom with heavy tails, %.1f without", h.dof, n.dof)
	}
}

func TestSpreadsOfSumsFollowWelch(t *testing.T) {
	// Satterthwaite 1946: equal parts double the degrees of freedom; a part
	// without variance leaves them.
	a := spread{2, 10, 1}
	if s := a.plus(spread{2, 10, 3}); s.variance != 4 || math.Abs(s.dof-20) > 1e-12 || s.block != 3 {
		t.Errorf("sum of equal parts: %+v", s)
	}
	if s := a.plus(spread{0, 5, 1}); s.variance != 2 || math.Abs(s.dof-10) > 1e-12 {
		t.Errorf("sum with a certain part: %+v", s)
	}
	// Student's 97.5 % points, from tables.
	for dof, want := range map[float64]float64{1: 12.706, 5: 2.571, 10: 2.228, 30: 2.042, 1e6: 1.960} {
		if got := studentT(dof); math.Abs(got-want) > 0.001 {
			t.Errorf("Student %g: %.4f, want %.3f", dof, got, want)
		}
	}
}

func TestOvershootHoldsTheTruthAfterSelection(t *testing.T) {
	// z = µ + noise is reported only above 1.96. The lower end z - 1.96 -
	// overshoot must lie above µ in 2.5 % of the reports; for µ where the end is
	// not cut off at 0. Three standard deviations of 2.5 % in 40000.
	for _, mu := range []float64{0.5, 1, 2, 3, 5} {
		r := rand.New(rand.NewPCG(uint64(10*mu), 1))
		reports, missed, plain := 0, 0, 0
		for reports < 40000 {
			z := mu + r.NormFloat64()
			if z <= 1.959964 {
				continue
			}
			reports++
			if z-1.959964-overshoot(z, 1.959964) > mu {
				missed++
			}
			if z-1.959964 > mu {
				plain++
			}
		}
		if p := 100 * float64(missed) / float64(reports); p < 2.26 || p > 2.74 {
			t.Errorf("µ = %g: %.2f %% of the lower ends lie above, want 2.5 (%.2f %% without)", mu, p, 100*float64(plain)/float64(reports))
		}
	}
	if got := overshoot(40, 1.96); math.Abs(got) > 1e-6 {
		t.Errorf("far above the limit the interval is %.2g longer, want 0", got)
	}
}
