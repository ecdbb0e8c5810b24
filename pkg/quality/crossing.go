package quality

import (
	"math"
	"slices"

	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// crossing turns the sound of all channels into delays: stretch by stretch
// (a window), the cross-spectra of the pairs, from them the delay of each pair
// by generalised cross-correlation with weights by coherence [Knapp & Carter
// 1976], and from those the arrival time of each microphone.
type crossing struct {
	at         []rig.Point
	rate, size int
	hop        int
	speed      float64
	extent     float64 // of the rig, metres
	pairs      [][2]int
	low        []int // first bin of each pair: below, diffuse sound is coherent
	bins, from int
	levelBins  int // of the bins, those up to 9 kHz: above, levels of good microphones differ
	stft       *spectral.STFT
	frames     int // in the window under way
	perWindow  int
	count      int64     // windows begun
	start      int64     // frame of the take that the stretch under way begins at
	inStretch  int64     // windows of it that have ended
	lead       []float64 // times of the last window solved; nil before
	auto       [][]float64
	re, im     [][]float64
	inverse    *spectral.FFT[float64]
	zr, zi, z  []float64
	windows    []window
	every      int64 // one window in so many is kept
	logAuto    []float64
	logBand    [][levelBands]float64 // the same by part of the band
	coherence  []float64             // sum over the windows of the mean coherence with others
	measured   int64                 // windows in logAuto
}

// window is what a stretch of the take says.
type window struct {
	at      float64   // its middle, seconds
	seconds float64   // how long it is
	time    []float64 // arrival of each microphone, seconds, mean 0; NaN unknown
	info    []float64 // 1/variance of each
	gain    []float64 // dB, mean 0; NaN unknown
	sign    []float64 // consensus of the polarities, -1..1
	quality float64   // mean height of the peaks, 0..1
}

// maxWindows bounds the windows that are kept: beyond, every second is dropped.
const maxWindows = 2048

// crossPairs bounds the pairs.
const crossPairs = 496

// levelBands is into how many parts levels are split, for their doubt.
const levelBands = 12

// leastLines is the fewest bins in which a pair is coherent, and with one pair
// alone, of like weight.
const leastLines = 8

// oversampling of the correlations.
const finer = 8

func newCrossing(at []rig.Point, rate int, speed float64) (*crossing, error) {
	c := &crossing{at: at, rate: rate, speed: speed, every: 1, size: 256}
	c.extent = rig.Spread(at).Extent
	for float64(c.size) < 0.02*float64(rate) || float64(c.size) < 6*c.extent/speed*float64(rate) && c.size < 1<<15 {
		c.size *= 2
	}
	c.hop = c.size / 2
	c.perWindow = max(24, rate/c.hop)
	c.pairs = pairsOf(len(at))
	df := float64(rate) / float64(c.size)
	c.from = max(1, int(math.Ceil(200/df)))
	c.bins = int(math.Min(16000, 0.42*float64(rate))/df) + 1 - c.from
	c.levelBins = min(c.bins, int(9000/df)+1-c.from)
	for _, p := range c.pairs {
		hz := math.Min(2000, 0.5*speed/math.Max(1e-6, at[p[0]].Distance(at[p[1]])))
		c.low = append(c.low, max(0, int(math.Ceil(hz/df))-c.from))
		c.re = append(c.re, make([]float64, c.bins))
		c.im = append(c.im, make([]float64, c.bins))
	}
	for range at {
		c.auto = append(c.auto, make([]float64, c.bins))
	}
	c.logBand = make([][levelBands]float64, len(at))
	c.logAuto, c.coherence = make([]float64, len(at)), make([]float64, len(at))
	n := c.size * finer
	var err error
	if c.inverse, err = spectral.NewFFT[float64](n); err != nil {
		return nil, err
	}
	c.zr, c.zi, c.z = make([]float64, n/2+1), make([]float64, n/2+1), make([]float64, n)
	return c, c.begin(0)
}

// begin begins a stretch of the take at a frame; what is under way ends.
func (c *crossing) begin(frame int64) (err error) {
	if c.frames > 0 {
		c.endWindow()
	}
	c.start, c.inStretch = frame, 0
	c.stft, err = spectral.NewSTFT(len(c.at), c.size, c.hop, spectral.Periodic(c.size, spectral.Hann), c.take)
	return err
}

// pairsOf returns all pairs, or for many microphones those a few places apart.
func pairsOf(mics int) [][2]int {
	var list [][2]int
	reach := mics
	if mics*(mics-1)/2 > crossPairs {
		reach = max(2, crossPairs/mics)
	}
	for i := range mics {
		for d := 1; d < min(reach, mics); d++ {
			switch k := i + d; {
			case k < mics:
				list = append(list, [2]int{i, k})
			case reach < mics:
				list = append(list, [2]int{k - mics, i})
			}
		}
	}
	return list
}

func (c *crossing) take(_ int64, s *spectral.Spectra) error {
	to := c.from + c.bins
	for m := range c.auto {
		a := c.auto[m]
		re, im := s.Re[m][c.from:to], s.Im[m][c.from:to]
		for k, x := range re {
			a[k] += float64(x)*float64(x) + float64(im[k])*float64(im[k])
		}
	}
	for p, ij := range c.pairs {
		ar, ai := s.Re[ij[0]][c.from:to], s.Im[ij[0]][c.from:to]
		br, bi := s.Re[ij[1]][c.from:to], s.Im[ij[1]][c.from:to]
		gr, gi := c.re[p], c.im[p]
		for k := range gr {
			gr[k] += float64(ar[k]*br[k] + ai[k]*bi[k])
			gi[k] += float64(ar[k]*bi[k] - ai[k]*br[k])
		}
	}
	if c.frames++; c.frames == c.perWindow {
		c.endWindow()
	}
	return nil
}

// endWindow turns the sums into a window, if they hold enough.
func (c *crossing) endWindow() {
	n := c.frames
	at := (float64(c.start) + (float64(c.inStretch)*float64(c.perWindow)+float64(n)/2)*float64(c.hop)) / float64(c.rate)
	c.frames = 0
	c.count++
	c.inStretch++
	if n >= 16 {
		c.levels(n)
		if (c.count-1)%c.every == 0 {
			if w, ok := c.solve(float64(n)); ok {
				w.at, w.seconds = at, float64(n*c.hop)/float64(c.rate)
				c.windows = append(c.windows, w)
				if w.quality > 0.45 {
					c.lead = w.time
				}
			}
		}
		if len(c.windows) >= maxWindows {
			keep := c.windows[:0]
			for i, w := range c.windows {
				if i%2 == 0 {
					keep = append(keep, w)
				}
			}
			c.windows = keep
			c.every *= 2
		}
	}
	for _, list := range [][][]float64{c.auto, c.re, c.im} {
		for _, x := range list {
			clear(x)
		}
	}
}

// levels adds the window to the mean log spectra and coherences.
func (c *crossing) levels(n int) {
	sum := make([]float64, len(c.at))
	for m, a := range c.auto {
		for _, p := range a[:c.levelBins] {
			sum[m] += 10 * math.Log10(p+1e-30) / float64(c.levelBins)
		}
	}
	if slices.Max(sum) < -100 { // silence
		return
	}
	for m, v := range sum {
		c.logAuto[m] += v
		for b := range levelBands {
			from, to := b*c.levelBins/levelBands, (b+1)*c.levelBins/levelBands
			for k := from; k < to; k++ {
				c.logBand[m][b] += 10 * math.Log10(c.auto[m][k]+1e-30) / float64(to-from)
			}
		}
	}
	total, counts := make([]float64, len(c.at)), make([]float64, len(c.at))
	for p, ij := range c.pairs {
		coherent := 0.0
		for k := range c.levelBins {
			coherent += c.msc(p, ij, k, float64(n)) / float64(c.levelBins)
		}
		for _, m := range ij {
			total[m] += coherent
			counts[m]++
		}
	}
	for m := range total {
		c.coherence[m] += total[m] / counts[m]
	}
	c.measured++
}

// msc is the squared coherence of pair p in bin k without its bias; frames
// overlap by half, and 1.9 of them count as one (common practice).
func (c *crossing) msc(p int, ij [2]int, k int, n float64) float64 {
	pp := c.auto[ij[0]][k] * c.auto[ij[1]][k]
	if pp <= 1e-40 {
		return 0
	}
	g := (c.re[p][k]*c.re[p][k] + c.im[p][k]*c.im[p][k]) / pp
	bias := 1.9 / n
	return math.Min(math.Max(0, (g-bias)/(1-bias)), 1)
}

// pairDelay is what a pair says.
type pairDelay struct {
	i, j       int
	plus, less float64 // highest peak of the correlation and of its negative, 0..1
	at         [2]float64
	info       float64
	logGain    float64 // of the common part: sum of both gains, dB
	ok         bool
}

// correlate measures pair p.
func (c *crossing) correlate(p int, n float64) pairDelay {
	ij := c.pairs[p]
	d := pairDelay{i: ij[0], j: ij[1]}
	clear(c.zr)
	clear(c.zi)
	total, squares, bend, bins := 0.0, 0.0, 0.0, 0
	for k := c.low[p]; k < c.bins; k++ {
		msc := c.msc(p, ij, k, n)
		// Below four times the bias, chance is most of it.
		if msc < 4*1.9/n {
			continue
		}
		msc = math.Min(msc, 0.95)
		w := msc / (1 - msc)
		g := math.Hypot(c.re[p][k], c.im[p][k])
		c.zr[k+c.from], c.zi[k+c.from] = w*c.re[p][k]/g, w*c.im[p][k]/g
		omega := 2 * math.Pi * float64(k+c.from) * float64(c.rate) / float64(c.size)
		total += w
		squares += w * w
		bins++
		bend += w * omega * omega
	}
	if bins < leastLines {
		return d
	}
	// A few tones of two sources stand in a field of nulls and turned phases. More
	// than two microphones contradict one another there; one pair cannot.
	if len(c.at) == 2 && total*total < leastLines*squares {
		return d
	}
	c.inverse.Inverse(c.z, c.zr, c.zi)
	size := len(c.z)
	scale := float64(size) / 2 / total
	reach := int(math.Ceil((1.3*c.at[d.i].Distance(c.at[d.j])/c.speed + 0.5e-3) * float64(c.rate) * finer))
	// Swapped microphones may hear as far apart as the rig is wide.
	reach = min(max(reach, int((1.1*c.extent/c.speed+0.2e-3)*float64(c.rate)*finer)), size/2-2)
	first, last := -reach, reach
	if c.lead != nil && !math.IsNaN(c.lead[d.i]+c.lead[d.j]) {
		// Clocks that run apart take the delay out of what the rig allows, a little
		// from window to window.
		lead := int((c.lead[d.j] - c.lead[d.i]) * float64(c.rate) * finer)
		aside := int(0.3e-3 * float64(c.rate) * finer)
		first, last = max(min(first, lead-aside), 2-size/2), min(max(last, lead+aside), size/2-2)
	}
	for side, sign := range []float64{1, -1} {
		best, at := math.Inf(-1), 0
		for l := first; l <= last; l++ {
			if v := sign * c.z[(l+size)%size]; v > best {
				best, at = v, l
			}
		}
		a, b, e := sign*c.z[(at-1+size)%size], best, sign*c.z[(at+1+size)%size]
		shift := 0.0
		if q := a - 2*b + e; q < 0 {
			shift = 0.5 * (a - e) / q
		}
		// conj(A)·B turns with -ω times the time by which B is later.
		d.at[side] = (float64(at) + shift) / finer / float64(c.rate)
		if side == 0 {
			d.plus = best * scale
		} else {
			d.less = best * scale
		}
	}
	d.info = bend * n / 1.9
	d.ok = true
	return d
}

// solve turns the pairs into arrival times; false if too little is coherent.
func (c *crossing) solve(n float64) (window, bool) {
	M := len(c.at)
	var list []pairDelay
	quality := 0.0
	signs := make([][]float64, M)
	for m := range signs {
		signs[m] = make([]float64, M)
	}
	for p := range c.pairs {
		d := c.correlate(p, n)
		if !d.ok || math.Max(d.plus, d.less) < 0.35 {
			continue
		}
		list = append(list, d)
		quality += math.Max(d.plus, d.less)
		signs[d.i][d.j] = d.plus - d.less
		signs[d.j][d.i] = d.plus - d.less
	}
	if len(list) < M-1 {
		return window{}, false
	}
	w := window{quality: quality / float64(len(list)), sign: consensus(signs)}
	delay := make([]float64, len(list))
	weight := make([]float64, len(list))
	for i, d := range list {
		side := 0
		if w.sign[d.i]*w.sign[d.j] < 0 {
			side = 1
		}
		delay[i], weight[i] = d.at[side], d.info
	}
	base := slices.Clone(weight)
	for range 6 {
		w.time, w.info = balance(M, list, delay, weight)
		var size []float64
		for i, d := range list {
			size = append(size, math.Abs(delay[i]-(w.time[d.j]-w.time[d.i])))
		}
		s := math.Max(3*median(slices.Clone(size)), 2e-6)
		for i := range weight {
			if math.IsNaN(size[i]) {
				size[i] = 0
			}
			q := size[i] / s
			weight[i] = base[i] / (1 + q*q*q*q)
		}
	}
	c.common(list, n)
	w.gain = shares(M, list)
	return w, true
}

// common measures the power that each pair has in common, over bins in which
// most pairs are coherent: the same bins for all, so that the spectrum of the
// sound drops out. It is NaN with fewer than 8 such bins.
func (c *crossing) common(list []pairDelay, n float64) {
	at := map[[2]int]int{}
	for p, ij := range c.pairs {
		at[ij] = p
	}
	bins := 0
	sum := make([]float64, len(list))
	db := make([]float64, len(list))
	low := int(800*float64(c.size)/float64(c.rate)) - c.from
	for k := max(0, low); k < c.levelBins; k++ {
		clear := 0
		for i, d := range list {
			p := at[[2]int{d.i, d.j}]
			msc := c.msc(p, c.pairs[p], k, n)
			db[i] = 10 * math.Log10(math.Max(msc, 1e-6)*c.auto[d.i][k]*c.auto[d.j][k]+1e-60)
			if msc > 4*1.9/n {
				clear++
			}
		}
		if 10*clear < 9*len(list) {
			continue
		}
		bins++
		for i, v := range db {
			sum[i] += v
		}
	}
	for i := range list {
		list[i].logGain = math.NaN()
		if bins >= 8 {
			list[i].logGain = sum[i] / float64(bins)
		}
	}
}
