package scan

import (
	"math"

	"alidade/pkg/beam"
	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// pairs are microphones whose responses mirror one another: on a rig that is the
// same seen from the other side, microphone b leads by what microphone a lags, in
// every beam. With corrections of the channels, which are those of all beams,
//
//	G_b[k] = K[k]·G_a*[k]
//
// so that a·X_a + b·X_b is one product with the sum of X_a and K·X_b and one with
// their difference: half the work. A microphone without such a partner is a pair
// with silence: sum and difference are both its spectrum.
type pairs struct {
	a, b   []int       // the same for a microphone by itself
	re, im [][]float32 // K[pair][bin], 0 for a microphone by itself
}

// What makes microphones a pair.
const (
	pairBeams     = 8    // with fewer beams it is not worth looking
	pairTolerance = 1e-3 // of the larger response at a bin: 30 dB below what windows leave
	pairLooks     = 3    // beams that a pair is looked for in
)

// pairsOf finds the pairs in some of the beams and fills the weights of all, in
// lines as kernel.PowerOfPairs takes them; nil where there are none in
// every beam.
func (g *grid) pairsOf(sets []*beam.Filters, plan *spectral.FFT[float64]) *pairs {
	if len(sets) < pairBeams || g.mics < 2 {
		return nil
	}
	var looks [pairLooks][]float32
	for i := range looks {
		looks[i] = g.responses(nil, sets[i*(len(sets)-1)/(pairLooks-1)], plan)
	}
	p := &pairs{}
	taken, none := make([]bool, g.mics), make([]float32, g.bins)
	found := false
	for a := range g.mics {
		if taken[a] {
			continue
		}
		p.a, p.b, p.re, p.im = append(p.a, a), append(p.b, a), append(p.re, none), append(p.im, none)
		for b := a + 1; b < g.mics; b++ {
			if taken[b] {
				continue
			}
			if re, im := g.mirror(looks[:], a, b); re != nil {
				n := len(p.a) - 1
				p.b[n], p.re[n], p.im[n] = b, re, im
				taken[b], found = true, true
				break
			}
		}
	}
	if !found {
		return nil
	}
	g.weights = g.weights[:0]
	var own []float32
	for _, f := range sets {
		own = g.responses(own, f, plan)
		w := make([]float32, 2*len(p.a)*g.bins)
		for q, a := range p.a {
			if p.b[q] != a && !g.mirrored(own, a, p.b[q], p.re[q], p.im[q]) {
				return nil
			}
			for k := 0; k < g.bins; k += kernel.Line {
				copy(w[(k/kernel.Line*len(p.a)+q)*2*kernel.Line:][:2*kernel.Line], own[g.at(a, k):])
			}
		}
		g.weights = append(g.weights, w)
	}
	return p
}

// mirror returns K of microphones a and b, by least squares over the beams looked
// at, or nil where they are no pair.
func (g *grid) mirror(looks [][]float32, a, b int) (re, im []float32) {
	k := func(bin int) complex128 {
		var cross complex128
		power := 0.0
		for _, w := range looks {
			x, y := g.response(w, a, bin), g.response(w, b, bin)
			cross += y * x
			power += real(x)*real(x) + imag(x)*imag(x)
		}
		if !(power > 0) {
			return 0
		}
		return cross / complex(power, 0)
	}
	// A few bins tell most of those that are none.
	for bin := 0; bin < g.bins; bin += 1 + g.bins/5 {
		z := k(bin)
		for _, w := range looks {
			if !g.mirroredAt(w, a, b, bin, z) {
				return nil, nil
			}
		}
	}
	re, im = make([]float32, g.bins), make([]float32, g.bins)
	for bin := range re {
		z := k(bin)
		re[bin], im[bin] = float32(real(z)), float32(imag(z))
	}
	for _, w := range looks {
		if !g.mirrored(w, a, b, re, im) {
			return nil, nil
		}
	}
	return re, im
}

// mirrored tells whether the responses w of a beam at microphone b are K times the
// conjugates of those at a, in all bins.
func (g *grid) mirrored(w []float32, a, b int, re, im []float32) bool {
	for bin := range re {
		if !g.mirroredAt(w, a, b, bin, complex(float64(re[bin]), float64(im[bin]))) {
			return false
		}
	}
	return true
}

func (g *grid) mirroredAt(w []float32, a, b, bin int, k complex128) bool {
	i, j := g.at(a, bin), g.at(b, bin)
	xr, xi, yr, yi := float64(w[i]), float64(w[i+kernel.Line]), float64(w[j]), float64(w[j+kernel.Line])
	re, im := yr-real(k)*xr-imag(k)*xi, yi-imag(k)*xr+real(k)*xi
	return re*re+im*im <= pairTolerance*pairTolerance*math.Max(xr*xr+xi*xi, yr*yr+yi*yi)
}

// response is that of microphone m at a bin.
func (g *grid) response(w []float32, m, bin int) complex128 {
	i := g.at(m, bin)
	return complex(float64(w[i]), float64(w[i+kernel.Line]))
}

// fold writes the sums and differences of the pairs of a window to x; re and im
// are the bins of each microphone, from bin low on.
func (p *pairs) fold(x []float32, re, im [][]float32, low, top int) {
	stride := 4 * len(p.a) * kernel.Line
	whole := top / kernel.Line * kernel.Line
	var last [6][kernel.Line]float32 // of the line that the spectrum does not fill
	for q, a := range p.a {
		y := x[q*4*kernel.Line:]
		b, kr, ki := p.b[q], p.re[q], p.im[q]
		ar, ai, br, bi := re[a][low:low+top], im[a][low:low+top], re[b][low:low+top], im[b][low:low+top]
		kernel.FoldPair(y, stride, ar[:whole], ai[:whole], br[:whole], bi[:whole], kr[:whole], ki[:whole])
		if whole == top {
			continue
		}
		for i, v := range [][]float32{ar, ai, br, bi, kr[:top], ki[:top]} {
			copy(last[i][:], v[whole:])
		}
		kernel.FoldPair(y[whole/kernel.Line*stride:], stride, last[0][:], last[1][:], last[2][:], last[3][:], last[4][:], last[5][:])
	}
}
