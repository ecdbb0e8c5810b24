package bearing

import (
	"math"

	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// maxGridPoints bounds the grid; a finer one is thinned.
const maxGridPoints = 30000

// maxGridPairs bounds the pairs that the grid search looks at. The refinement
// uses all.
const maxGridPairs = 64

// gridStep is the step of the grid in direction cosines, as a part of the
// shortest wavelength over the extent of the rig. The width of the main lobe
// of a line at -3 dB is 0.886 of that [Van Trees 2002, 2.4.1.1].
const gridStep = 0.2

// grid is a search over places: the steered response with phase transform
// [DiBiase 2000], read from tables of lags. It holds scratch memory.
type grid struct {
	points []place
	units  []rig.Point
	pairs  []int   // indices into the finder's pairs
	lag    []int32 // [d*len(pairs)+p], index into corr
	corr   []float32
	reach  int // lags -reach..reach are kept of each pair
	fft    *spectral.FFT[float32]
	re, im []float32
	x      []float32
	value  []float64 // of the last search, one a point
	from   int       // first bin
}

// gridPlaces returns places that are step apart in direction cosines, for each
// of the curvatures.
func gridPlaces(s *space, step float64, curvatures []float64) []place {
	var ys [][3]float64
	switch s.dim {
	case 1:
		n := max(90, int(math.Ceil(2/step)))
		for i := range n + 1 {
			ys = append(ys, [3]float64{-1 + 2*float64(i)/float64(n)})
		}
	case 2:
		step = math.Min(step, 0.1)
		n := int(math.Ceil(1 / step))
		for i := -n; i <= n; i++ {
			for j := -n; j <= n; j++ {
				p, q := float64(i)*step, float64(j)*step
				if p*p+q*q < (1-step/2)*(1-step/2) {
					ys = append(ys, [3]float64{p, q})
				}
			}
		}
		rim := int(math.Ceil(2 * math.Pi / step))
		for i := range rim {
			sin, cos := math.Sincos(2 * math.Pi * float64(i) / float64(rim))
			ys = append(ys, [3]float64{cos, sin})
		}
	default:
		// A Fibonacci lattice: equal areas of step² [Swinbank & Purser 2006].
		step = math.Min(step, 0.15)
		n := int(math.Ceil(4 * math.Pi / (step * step)))
		golden := math.Pi * (3 - math.Sqrt(5))
		for i := range n {
			z := 1 - (2*float64(i)+1)/float64(n)
			r := math.Sqrt(1 - z*z)
			sin, cos := math.Sincos(golden * float64(i))
			ys = append(ys, [3]float64{r * cos, r * sin, z})
		}
	}
	var out []place
	for _, k := range curvatures {
		for _, y := range ys {
			out = append(out, place{y: y, kappa: k})
		}
	}
	return out
}

// newGrid returns the grid for the rig and settings.
func newGrid(s *space, set *settings, pairs []pairIndex) (*grid, error) {
	curvatures := []float64{0}
	if set.near {
		for k := set.dKappa; k <= set.maxKappa && len(curvatures) < 32; k += set.dKappa {
			curvatures = append(curvatures, k)
		}
	}
	step := gridStep * set.Speed / set.ToHz / s.geo.Extent
	// Of a solid or flat rig the number of points grows with 1/step².
	for {
		size := 2 / step
		switch s.dim {
		case 2:
			size = math.Pi / (step * step)
		case 3:
			size = 4 * math.Pi / (step * step)
		}
		if size*float64(len(curvatures)) <= maxGridPoints {
			break
		}
		step *= 1.1
	}
	g := &grid{points: gridPlaces(s, step, curvatures), from: set.binFrom}
	chosen := choosePairs(len(s.at), maxGridPairs)
	for _, q := range chosen {
		for i, p := range pairs {
			if p == q {
				g.pairs = append(g.pairs, i)
				break
			}
		}
	}
	if len(g.pairs) == 0 {
		for i := range min(len(pairs), maxGridPairs) {
			g.pairs = append(g.pairs, i)
		}
	}
	// At least twelve points a period of the highest frequency, so that the
	// nearest point is wrong by 3 % of the height at most.
	n := set.size
	rate := float64(set.rate)
	for rate*float64(n)/float64(set.size) < 12*set.ToHz {
		n *= 2
	}
	for n/2 >= 2*set.binTo && rate*float64(n)/2/float64(set.size) >= 12*set.ToHz {
		n /= 2
	}
	n = max(n, spectral.MinSize)
	var err error
	if g.fft, err = spectral.NewFFT[float32](n); err != nil {
		return nil, err
	}
	g.re, g.im, g.x = make([]float32, n/2+1), make([]float32, n/2+1), make([]float32, n)
	fine := rate * float64(n) / float64(set.size)
	tau := make([]float64, len(s.at))
	longest := 0.0
	for _, p := range g.points {
		s.delays(tau, p)
		for _, i := range g.pairs {
			longest = math.Max(longest, math.Abs(tau[pairs[i].i]-tau[pairs[i].j]))
		}
	}
	g.reach = min(int(math.Ceil(longest*fine))+1, n/2-1)
	width := 2*g.reach + 1
	g.corr = make([]float32, width*len(g.pairs))
	g.lag = make([]int32, len(g.points)*len(g.pairs))
	g.value = make([]float64, len(g.points))
	for d, p := range g.points {
		g.units = append(g.units, s.unit(p.y))
		s.delays(tau, p)
		for c, i := range g.pairs {
			// The cross-spectrum of microphones i and j has the phase
			// -omega (tau_i - tau_j): its transform peaks at tau_i - tau_j.
			l := int(math.Round((tau[pairs[i].i] - tau[pairs[i].j]) * fine))
			l = min(max(l, -g.reach), g.reach)
			g.lag[d*len(g.pairs)+c] = int32(c*width + l + g.reach)
		}
	}
	return g, nil
}

// twin returns a grid of the same points with scratch memory of its own.
func (g *grid) twin() (*grid, error) {
	t := *g
	var err error
	if t.fft, err = spectral.NewFFT[float32](len(g.x)); err != nil {
		return nil, err
	}
	t.re, t.im, t.x = make([]float32, len(g.re)), make([]float32, len(g.im)), make([]float32, len(g.x))
	t.corr, t.value = make([]float32, len(g.corr)), make([]float64, len(g.value))
	return &t, nil
}

// search fills value with the steered response, in units of one pair and all
// of the weight: 1 where every line of every pair is in phase. Shapes:
// re[p*K+k], weight[p*K+k] already contains the phase transform.
func (g *grid) search(re, im, weight []float64, bins int, total float64) {
	width := 2*g.reach + 1
	n := len(g.x)
	scale := 0.5 * float64(n) / math.Max(total, 1e-300)
	for c, p := range g.pairs {
		pr, pi, pw := re[p*bins:p*bins+bins], im[p*bins:p*bins+bins], weight[p*bins:p*bins+bins]
		clear(g.re)
		clear(g.im)
		for k := range bins {
			g.re[g.from+k] = float32(pr[k] * pw[k] * scale)
			g.im[g.from+k] = float32(pi[k] * pw[k] * scale)
		}
		g.fft.Inverse(g.x, g.re, g.im)
		// x[l] is the sum over lines at lag l; negative lags stand at the end.
		// The sign: the spectrum -omega·(tau_i - tau_j) peaks at +lag.
		row := g.corr[c*width : c*width+width]
		copy(row[g.reach:], g.x[:g.reach+1])
		copy(row[:g.reach], g.x[n-g.reach:])
	}
	P := len(g.pairs)
	for d := range g.value {
		lags := g.lag[d*P : d*P+P]
		var sum float32
		for _, l := range lags {
			sum += g.corr[l]
		}
		g.value[d] = float64(sum)
	}
}

// best returns the highest point and its value, leaving out points less than
// radius direction cosines from any of the places taken.
func (g *grid) best(s *space, taken []place, radius float64) (d int, value float64) {
	d, value = -1, math.Inf(-1)
	for i, v := range g.value {
		if v <= value {
			continue
		}
		free := true
		for _, t := range taken {
			if s.apart(g.points[i].y, t.y) < radius {
				free = false
				break
			}
		}
		if free {
			d, value = i, v
		}
	}
	return d, value
}
