package scan

import (
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/kernel"
	"alidade/pkg/measure"
	"alidade/pkg/spectral"
)

// What a window must hold.
const (
	leastSeconds = 0.06
	leastSpreads = 110 // of the delays of the filters
	leastPeriods = 18  // of a band in the short windows
	longPeriods  = 16  // of 50 Hz in the long ones
	lowestHz     = 50
)

// batch is how many windows are taken through all beams at once, a multiple of
// four, so that the weights of a beam come from memory once for all of them. Bins
// are taken in chunks such that rowBytes hold the microphones of one window, four
// of which stay in the first-level cache while beams pass them; and beams in
// groups whose weights, groupBytes, stay in the second-level cache while the
// windows pass them.
const (
	batch      = 32
	rowBytes   = 4 << 10
	groupBytes = 128 << 10
	lineBytes  = 2 * kernel.Line * 4 // of one microphone
)

// grid is one window length with the bands that are taken from it.
type grid struct {
	size, hop int
	seconds   float64   // hop
	scale     float64   // from the sum of bin powers to power re a full-scale sine
	bands     []int     // indices of the bands
	pieces    [][]piece // pieces[chunk]: the parts of the bands in it
	low, bins int       // the bins low..low+bins are needed, whole lines of them
	mics      int
	chunk     int // bins, a multiple of kernel.Line
	group     int // beams
	stft      *spectral.STFT

	pairs   *pairs      // nil where microphones are taken one by one
	weights [][]float32 // [beam], in lines as kernel.PowerOfSums takes them, or PowerOfPairs
	row     int         // values of a window in x
	x       []float32   // the windows of a batch, in such lines
	filled  int
	p       []float32 // [one of four windows][bin of a chunk]
	all     []float32 // power of all microphones in each bin of a window
	powers  []float64 // [beam][band][window] of a batch
	one     []float64 // [band] of one window
	beams   []*store
	ref     *store
}

// piece is what a chunk of bins holds of a band, in whole lines.
type piece struct {
	band  int
	first int       // bin of the chunk
	parts []float32 // of each bin that lies in the band
}

// sizes returns the window lengths, frames: the short ones and, where bands
// need them, the long ones, else 0.
func sizes(rate int, sets []*beam.Filters) (short, long int) {
	r, least := float64(rate), leastSeconds*float64(rate)
	for _, f := range sets {
		least = math.Max(least, leastSpreads*spread(f))
	}
	for short = 256; float64(short) < least && short < spectral.MaxSize; {
		short *= 2
	}
	for long = 256; float64(long) < longPeriods/float64(lowestHz)*r; {
		long *= 2
	}
	if long <= short {
		long = 0
	}
	return short, long
}

// spread is the root mean square of the delays that filters make, frames, each
// with the energy of its tap.
func spread(f *beam.Filters) float64 {
	moment, energy := 0.0, 0.0
	for m, h := range f.H {
		for t, v := range h {
			d := float64(f.Start[m] + t)
			moment += v * v * d * d
			energy += v * v
		}
	}
	if !(energy > 0) {
		return 0
	}
	return math.Sqrt(moment / energy)
}

// newGrid makes a grid of windows of size frames for the bands from..to of all.
func newGrid(format audio.Format, size int, all []measure.Band, from, to int, sets []*beam.Filters, o Options) (*grid, error) {
	g := &grid{mics: format.Channels, size: size, hop: size / 2, seconds: float64(size/2) / float64(format.Rate)}
	window := spectral.Periodic(size, spectral.Hann)
	energy := 0.0
	for _, w := range window {
		energy += w * w
	}
	// Σ_k |X_k|² over the positive bins is size·energy/4 for a full-scale sine,
	// by Parseval's relation.
	g.scale = 4 / (float64(size) * energy)
	spacing := float64(format.Rate) / float64(size)
	g.low = int(math.Floor(all[from].LowHz/spacing + 0.5))
	g.chunk = max(1, min(16, rowBytes/(lineBytes*g.mics))) * kernel.Line
	g.group = max(1, groupBytes/(g.chunk/kernel.Line*lineBytes*g.mics))
	for b := from; b < to; b++ {
		first, parts := all[b].Cells(spacing)
		g.bands = append(g.bands, b)
		for at := first - g.low; len(parts) > 0; {
			for at/g.chunk >= len(g.pieces) {
				g.pieces = append(g.pieces, nil)
			}
			n := min(len(parts), g.chunk-at%g.chunk)
			begin := at % g.chunk / kernel.Line * kernel.Line
			lines := make([]float32, (at%g.chunk+n-begin+kernel.Line-1)/kernel.Line*kernel.Line)
			copy(lines[at%g.chunk-begin:], parts[:n])
			g.pieces[at/g.chunk] = append(g.pieces[at/g.chunk], piece{b - from, begin, lines})
			parts, at = parts[n:], at+n
			g.bins = at
		}
	}
	g.bins = (g.bins + kernel.Line - 1) / kernel.Line * kernel.Line
	var err error
	if g.stft, err = spectral.NewSTFT(format.Channels, size, g.hop, window, g.take); err != nil {
		return nil, err
	}
	g.p = make([]float32, 4*g.chunk)
	g.all = make([]float32, g.bins)
	g.powers = make([]float64, len(sets)*batch*len(g.bands))
	g.one = make([]float64, len(g.bands))
	g.ref = newStore(len(g.bands), o.Entries)
	plan, err := spectral.NewFFT[float64](size)
	if err != nil {
		return nil, err
	}
	g.row = 2 * g.mics * g.bins
	if g.pairs = g.pairsOf(sets, plan); g.pairs != nil {
		g.row = 4 * len(g.pairs.a) * g.bins
	} else {
		g.weights = g.weights[:0]
		for _, f := range sets {
			g.weights = append(g.weights, g.responses(nil, f, plan))
		}
	}
	g.x = make([]float32, batch*g.row)
	for range sets {
		g.beams = append(g.beams, newStore(len(g.bands), o.Entries))
	}
	return g, nil
}

// at is the place of the real part of bin k of microphone m in lines; the
// imaginary part lies kernel.Line further.
func (g *grid) at(m, k int) int {
	return (k/kernel.Line*g.mics+m)*2*kernel.Line + k%kernel.Line
}

// responses are those of the filters at the bins, in lines as kernel.PowerOfSums
// takes them and in the room of w if that is not nil. Taps wrapped around the
// transform keep their phase at its bins exactly.
func (g *grid) responses(w []float32, f *beam.Filters, plan *spectral.FFT[float64]) []float32 {
	if w == nil {
		w = make([]float32, 2*g.mics*g.bins)
	}
	top := min(g.bins, g.size/2+1-g.low)
	if 32*g.bins < g.size {
		var at []complex128
		for k := range top {
			at = f.Response(at, float64(g.low+k)*float64(f.Rate)/float64(g.size))
			for m, z := range at {
				i := g.at(m, k)
				w[i], w[i+kernel.Line] = float32(real(z)), float32(imag(z))
			}
		}
		return w
	}
	h := make([]float64, g.size)
	re, im := make([]float64, plan.Bins()), make([]float64, plan.Bins())
	for m, taps := range f.H {
		clear(h)
		for t, v := range taps {
			at := (f.Start[m] + t) % g.size
			if at < 0 {
				at += g.size
			}
			h[at] += v
		}
		plan.Forward(re, im, h)
		for k := range top {
			i := g.at(m, k)
			w[i], w[i+kernel.Line] = float32(re[g.low+k]), float32(im[g.low+k])
		}
	}
	return w
}

// take is given each window by the transform.
func (g *grid) take(_ int64, s *spectral.Spectra) error {
	x := g.x[g.filled*g.row:]
	top := min(g.bins, s.Bins()-g.low)
	all := g.all[:top]
	clear(all)
	for m := range g.mics {
		re, im := s.Re[m][g.low:g.low+top], s.Im[m][g.low:g.low+top]
		for k := 0; k < top && g.pairs == nil; k += kernel.Line {
			i := g.at(m, k)
			copy(x[i:i+kernel.Line], re[k:min(k+kernel.Line, top)])
			copy(x[i+kernel.Line:i+2*kernel.Line], im[k:min(k+kernel.Line, top)])
		}
		for k, r := range re {
			all[k] += r*r + im[k]*im[k]
		}
	}
	if g.pairs != nil {
		g.pairs.fold(x, s.Re, s.Im, g.low, top)
	}
	clear(g.one)
	for c, list := range g.pieces {
		for _, part := range list {
			sum := kernel.Dot(g.all[c*g.chunk+part.first:][:len(part.parts)], part.parts)
			g.one[part.band] += g.scale * float64(sum) / float64(g.mics)
		}
	}
	g.ref.add(g.one)
	if g.filled++; g.filled == batch {
		g.beamsOf()
	}
	return nil
}

// beamsOf takes the windows of the batch through all beams, chunk by chunk.
func (g *grid) beamsOf() {
	clear(g.powers)
	for c, list := range g.pieces {
		for i := 0; i < len(g.weights); i += g.group {
			g.beamsIn(c, list, i, min(i+g.group, len(g.weights)))
		}
	}
	for i, s := range g.beams {
		powers := g.powers[i*len(g.bands)*batch:]
		for t := range g.filled {
			for b := range g.one {
				g.one[b] = g.scale * powers[b*batch+t]
			}
			s.add(g.one)
		}
	}
	g.filled = 0
}

// beamsIn adds what a chunk of bins holds of the bands to the powers of the beams
// from..to. Windows beyond those filled are of no use and do no harm.
func (g *grid) beamsIn(c int, list []piece, from, to int) {
	line, n := c*g.chunk/kernel.Line, min(g.chunk, g.bins-c*g.chunk)
	var sums [4]float32
	for t := 0; t < g.filled; t += 4 {
		x := g.x[t*g.row:]
		for i := from; i < to; i++ {
			if g.pairs != nil {
				at := line * len(g.pairs.a) * 2 * kernel.Line
				kernel.PowerOfPairs(g.p, g.chunk, x[2*at:], g.row, g.weights[i][at:], len(g.pairs.a), n)
			} else {
				at := g.at(0, c*g.chunk)
				kernel.PowerOfSums(g.p, g.chunk, x[at:], g.row, g.weights[i][at:], g.mics, n)
			}
			powers := g.powers[i*len(g.bands)*batch+t:]
			for _, part := range list {
				kernel.WeightedSums(&sums, g.p[part.first:], g.chunk, part.parts)
				p := powers[part.band*batch:][:4]
				p[0] += float64(sums[0])
				p[1] += float64(sums[1])
				p[2] += float64(sums[2])
				p[3] += float64(sums[3])
			}
		}
	}
}
