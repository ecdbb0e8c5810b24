package measure

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"testing"
)

// tally counts how often intervals hold the truth.
type tally struct{ in, low, high, nulls, flagged, all int }

func (c *tally) add(ci *[2]float64, truth float64) {
	c.all++
	switch {
	case ci == nil:
		c.nulls++
	case truth < ci[0]:
		c.high++
	case truth > ci[1]:
		c.low++
	default:
		c.in++
	}
}
func (c *tally) measured() int  { return c.in + c.low + c.high }
func (c *tally) share() float64 { return 100 * float64(c.in) / float64(max(1, c.measured())) }
func (c *tally) String() string {
	return fmt.Sprintf("%5.1f%% of %4d (est low %4.1f%% high %4.1f%%; nulls %4.1f%%)", c.share(), c.measured(),
		100*float64(c.low)/float64(max(1, c.measured())), 100*float64(c.high)/float64(max(1, c.measured())), 100*float64(c.nulls)/float64(max(1, c.all)))
}

type trial struct {
	n             int
	noise, target []Stretch
	class         int
}

// newTrial lays out a take: noise, target, noise.
func newTrial(seed uint64) trial {
	r := rand.New(rand.NewPCG(seed, 3))
	var t trial
	t.class = int(seed % 3)
	t.n = 1 << 18
	tn, ta := 2+3*r.Float64(), 3+7*r.Float64()
	switch t.class {
	case 1:
		tn = 5 + 7*r.Float64()
		t.n, ta = 1<<19, 4+11*r.Float64()
	case 2:
		tn = 15 + 6*r.Float64()
		t.n, ta = 1<<19, 5+4*r.Float64()
	}
	first := tn
	if t.class > 0 && seed%2 == 0 {
		first = tn * (0.3 + 0.4*r.Float64())
	}
	t.noise = []Stretch{{0.2, 0.2 + first}}
	from := 0.2 + first + 0.3
	t.target = []Stretch{{from, from + ta}}
	if first < tn {
		t.noise = append(t.noise, Stretch{from + ta + 0.3, from + ta + 0.3 + tn - first})
	}
	return t
}

func TestCoverageExperiment(t *testing.T) {
	if os.Getenv("MEASURE_EXPERIMENT") == "" {
		t.Skip("experiment")
	}
	speech := os.Getenv("SPEECH") != ""
	amp := 1.5
	fmt.Sscan(os.Getenv("AMP"), &amp)
	seeds := 100
	fmt.Sscan(os.Getenv("SEEDS"), &seeds)
	r := newRoom(roomShape{mics: 4, spacing: 0.06, look: 60, from: 70, sensor: 0.02})
	l, _ := newLayout(r.rate)
	makers := map[int]*maker{}
	nb := l.thirds
	nr, tc, sg := make([][4]tally, nb+1), make([][4]tally, nb+1), make([][4]tally, nb+1)
	bias := make([]float64, nb)
	biasN := make([]int, nb)
	tcb := make([]float64, nb)
	tcn := make([]int, nb)
	var on, os_ tally
	for seed := uint64(1); seed <= uint64(seeds); seed++ {
		tr := newTrial(seed)
		if makers[tr.n] == nil {
			makers[tr.n] = r.maker(tr.n)
		}
		env := steady(tr.n, r.rate, amp, tr.target)
		if speech {
			env = speechlike(tr.n, r.rate, amp, tr.target, seed)
		}
		b := makers[tr.n].take(seed, env, nil)
		p, _ := r.pair(t, b)
		g, err := SNRGain(Scene{Pair: p, Noise: tr.noise, Target: tr.target, Named: -1})
		if err != nil {
			t.Fatal(err)
		}
		for i := range g.Bands {
			gb := &g.Bands[i]
			red, chg := r.truth(l, i)
			if gb.NoiseReduction != nil {
				bias[i] += *gb.NoiseReduction - red
				biasN[i]++
			}
			if gb.TargetChange != nil {
				tcb[i] += *gb.TargetChange - chg
				tcn[i]++
			}
			for _, k := range []int{tr.class, 3} {
				for _, x := range []int{i, nb} {
					if gb.Sparse() {
						nr[x][k].flagged++
						continue
					}
					nr[x][k].add(gb.NoiseReductionCI, red)
					tc[x][k].add(gb.TargetChangeCI, chg)
					sg[x][k].add(gb.SNRGainCI, red+chg)
				}
			}
		}
		_ = on
		_ = os_
	}
	for i := range nb + 1 {
		name := "all"
		red, chg, bi, ti := 0., 0., 0., 0.
		if i < nb {
			name = fmt.Sprint(l.bands[i].NominalHz)
			red, chg = r.truth(l, i)
			bi = bias[i] / float64(max(1, biasN[i]))
			ti = tcb[i] / float64(max(1, tcn[i]))
		}
		fmt.Printf("%6s %5.2f %5.2f bias %6.3f %6.3f fl %3d NR %v | TC %v | SG %v\n", name, red, chg, bi, ti, nr[i][3].flagged, &nr[i][3], &tc[i][3], &sg[i][3])
	}
	for k := range 3 {
		fmt.Printf("class %d NR %v | TC %v | SG %v\n", k, &nr[nb][k], &tc[nb][k], &sg[nb][k])
	}
	_ = math.Pi
}
