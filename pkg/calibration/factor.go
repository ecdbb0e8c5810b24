package calibration

import (
	"math"

	"alidade/pkg/spectral"
)

// factor is the model of one sound in several channels: the cross-spectrum of m
// and n is P·a_m·conj(a_n) with a_m = g_m·e^{-jω·d_m}, and noise of its own,
// N_m, adds to the power of each channel alone. It is fitted to the
// cross-spectra between different channels, so that the noise, which is in
// none of them, does not make any channel look quieter than it is.
type factor struct {
	c      *cross
	heard  []int       // channels with the sound in them
	g      []float64   // signed
	d      []float64   // seconds
	p      []float64   // source power at [line], in the units of c
	smooth []float64   // p over neighbouring lines, not below 0
	v      [][]float64 // 1/N_m at [mic][line], smoothed
	noisy  [][]float64 // scratch: N_m
	scale  []float64   // channel m of c was multiplied by it
	rest   []float64   // sum of N_m over the lines, not bounded from below by noiseFloor
	peak   []float64   // height of the correlation with the pilot, 0..1
	rival  []float64   // height of the best correlation of the other sign

	cr, ci []float64 // scratch: the instrument's cross-spectrum with one channel
	b      []float64 // scratch: Σ v·|a|² of the instrument
	// a_m over g_m is cos - j·sn: the phase of the delay, and later the channel's
	// own response.
	cos, sn [][]float64
}

// smoothing is how many lines to either side spectra are averaged over where
// they serve as weights.
const smoothing = 12

// noiseFloor bounds the noise of a channel from below, as a share of its power.
const noiseFloor = 1e-3

// newFactor starts a fit of the model, near enough to line channels up; converge
// ends it. Delays are looked for within maxLag seconds of the
// pilot channel. heard is empty where no two channels share a sound.
func newFactor(c *cross, maxLag float64) (*factor, error) {
	n := c.lines()
	f := &factor{c: c, p: make([]float64, n), smooth: make([]float64, n), cr: make([]float64, n), ci: make([]float64, n), b: make([]float64, n)}
	f.g, f.d, f.scale = make([]float64, c.mics), make([]float64, c.mics), make([]float64, c.mics)
	f.rest = make([]float64, c.mics)
	f.peak, f.rival = make([]float64, c.mics), make([]float64, c.mics)
	for range c.mics {
		f.v, f.noisy = append(f.v, make([]float64, n)), append(f.noisy, make([]float64, n))
		f.cos, f.sn = append(f.cos, make([]float64, n)), append(f.sn, make([]float64, n))
	}
	f.normalise()
	if err := f.start(maxLag); err != nil {
		return nil, err
	}
	if len(f.heard) < 2 {
		return f, nil
	}
	f.converge(roughSweeps)
	return f, nil
}

// The sweeps of a fit that shows how far channels lie apart, and the most that
// one takes to its end.
const (
	roughSweeps = 4
	mostSweeps  = 60
)

// converge fits all channels in turn, so many times at most.
func (f *factor) converge(sweeps int) {
	for sweep := range sweeps {
		f.source()
		if sweep < 5 {
			f.noise()
		}
		change := 0.0
		for _, m := range f.heard {
			g, d := f.g[m], f.d[m]
			f.update(m)
			change = max(change, math.Abs(f.g[m]/g-1), 2*math.Pi*f.c.hz(f.c.to)*math.Abs(f.d[m]-d))
		}
		f.centre()
		if sweep >= 5 && change < 1e-6 {
			break
		}
	}
	f.source()
	f.noise()
}

// normalise brings every channel to the same power.
func (f *factor) normalise() {
	c := f.c
	for m := range f.scale {
		sum := 0.0
		for _, x := range c.power(m) {
			sum += x
		}
		f.scale[m] = 0
		if sum > 0 {
			f.scale[m] = 1 / math.Sqrt(sum/float64(c.lines()))
		}
	}
	for m := range c.mics {
		for n := range m + 1 {
			re, im, _ := c.row(m, n)
			s := f.scale[m] * f.scale[n]
			for k := range re {
				re[k] *= s
				im[k] *= s
			}
		}
	}
}

// start finds the pilot channel, and delay and sign of every channel against
// it.
func (f *factor) start(maxLag float64) error {
	const finer = 4 // steps a sample of the search
	c := f.c
	fft, err := spectral.NewFFT[float64](c.size * finer)
	if err != nil {
		return err
	}
	re, im, x := make([]float64, fft.Bins()), make([]float64, fft.Bins()), make([]float64, fft.Len())
	auto := make([][]float64, c.mics)
	for m := range auto {
		auto[m] = smoothed(c.power(m), smoothing)
	}
	reach := min(int(maxLag*c.rate*finer)+1, fft.Len()/2-1)
	// lag returns where channel m lies against p: the place, the sign and the
	// height of the smoothed-coherence correlation [Knapp & Carter 1976].
	lag := func(m, p int) (at, sign, height, rival float64) {
		clear(re)
		clear(im)
		sr, si, s := c.row(m, p)
		total := 0.0
		for j := range sr {
			w := auto[m][j] * auto[p][j]
			if w <= 0 {
				continue
			}
			w = 1 / math.Sqrt(w)
			re[c.from+j], im[c.from+j] = sr[j]*w, s*si[j]*w
			total++
		}
		if total == 0 {
			return 0, 1, 0, 0
		}
		fft.Inverse(x, re, im)
		var best, worst, bestAt, worstAt float64
		for i := -reach; i <= reach; i++ {
			v := x[(i+len(x))%len(x)]
			if v > best {
				best, bestAt = v, float64(i)
			}
			if v < worst {
				worst, worstAt = v, float64(i)
			}
		}
		unit := float64(fft.Len()) / (2 * total)
		best, worst = best*unit, -worst*unit
		step := 1 / (c.rate * finer)
		// Upright unless the other is clearly higher: that of a narrow band has
		// both signs half a period apart.
		if worst > 1.1*best {
			return worstAt * step, -1, worst, best
		}
		return bestAt * step, 1, best, worst
	}
	pilot, score := 0, -1.0
	const candidates = 8
	for i := range min(candidates, c.mics) {
		p := i * c.mics / min(candidates, c.mics)
		sum := 0.0
		for m := range c.mics {
			if m != p {
				_, _, h, _ := lag(m, p)
				sum += h
			}
		}
		if sum > score {
			pilot, score = p, sum
		}
	}
	threshold := 4.5 / math.Sqrt(2*float64(c.lines())*c.weight)
	for m := range c.mics {
		f.g[m] = 1
		if m == pilot {
			f.peak[m] = 1
			continue
		}
		f.d[m], f.g[m], f.peak[m], f.rival[m] = lag(m, pilot)
	}
	for m := range c.mics {
		if f.peak[m] > threshold {
			f.heard = append(f.heard, m)
		}
	}
	if len(f.heard) < 2 {
		f.heard = nil
	}
	for _, m := range f.heard {
		for j := range f.v[m] {
			f.v[m][j] = 1
		}
		f.turn(m)
	}
	return nil
}

// turn brings the phases of channel m up to its delay: by steps of one line,
// from the exact value every so often.
func (f *factor) turn(m int) {
	const exact = 64
	ss, cs := math.Sincos(2 * math.Pi * f.c.rate / float64(f.c.size) * f.d[m])
	cos, sn := f.cos[m], f.sn[m]
	for j := range cos {
		if j%exact == 0 {
			sn[j], cos[j] = math.Sincos(f.c.omega(j) * f.d[m])
			continue
		}
		sn[j], cos[j] = sn[j-1]*cs+cos[j-1]*ss, cos[j-1]*cs-sn[j-1]*ss
	}
}

// instrument fills cr, ci with the cross-spectrum of channel m with the sum of
// the other channels, each turned to the source and weighted by its noise, and
// b with what that sum makes of the source.
func (f *factor) instrument(m int) {
	clear(f.cr)
	clear(f.ci)
	clear(f.b)
	for _, n := range f.heard {
		if n == m {
			continue
		}
		re, im, s := f.c.row(m, n)
		g, v, cs, sn := f.g[n], f.v[n], f.cos[n], f.sn[n]
		for j := range re {
			w := v[j] * g
			// times g·e^{-jω·d_n}
			f.cr[j] += w * (re[j]*cs[j] + s*im[j]*sn[j])
			f.ci[j] += w * (s*im[j]*cs[j] - re[j]*sn[j])
			f.b[j] += w * g * (cs[j]*cs[j] + sn[j]*sn[j])
		}
	}
}

// source finds the power of the source, line by line.
func (f *factor) source() {
	top, bottom := make([]float64, len(f.p)), make([]float64, len(f.p))
	for _, m := range f.heard {
		f.instrument(m)
		g, v, cs, sn := f.g[m], f.v[m], f.cos[m], f.sn[m]
		for j := range top {
			top[j] += v[j] * g * (f.cr[j]*cs[j] - f.ci[j]*sn[j])
			bottom[j] += v[j] * g * g * (cs[j]*cs[j] + sn[j]*sn[j]) * f.b[j]
		}
	}
	for j := range top {
		f.p[j] = 0
		if bottom[j] > 0 {
			f.p[j] = top[j] / bottom[j]
		}
	}
	copy(f.smooth, smoothed(f.p, smoothing))
	for j, x := range f.smooth {
		f.smooth[j] = math.Max(0, x)
	}
}

// noise finds the noise of each channel: what is left of its power once what
// the sum of the other channels foretells of it is taken out, less what that
// sum's own noise leaves. Unlike the difference of the channel's and the
// source's power it does not depend on how source and noise happen to
// correlate.
func (f *factor) noise() {
	n := len(f.p)
	whole := make([]float64, n) // power of the sum of all channels
	type part struct{ own, cross, turned []float64 }
	parts := make([]part, len(f.heard))
	for i, m := range f.heard {
		f.instrument(m)
		q := part{make([]float64, n), make([]float64, n), make([]float64, n)}
		auto, g, v, cs, sn := f.c.power(m), f.g[m], f.v[m], f.cos[m], f.sn[m]
		for j := range n {
			// The cross-spectrum turned to the source: real but for noise.
			q.cross[j] = f.cr[j]*cs[j] - f.ci[j]*sn[j]
			q.turned[j] = f.cr[j]*sn[j] + f.ci[j]*cs[j]
			q.own[j] = v[j] * g
			whole[j] += q.own[j] * (q.cross[j] + q.own[j]*auto[j])
		}
		parts[i] = q
	}
	few := f.c.weight * (2*smoothing + 1)
	for i, m := range f.heard {
		f.instrument(m) // for b
		auto, q := f.c.power(m), parts[i]
		f.rest[m] = 0
		others := make([]float64, n)
		for j := range n {
			others[j] = whole[j] - 2*q.own[j]*q.cross[j] - q.own[j]*q.own[j]*auto[j]
			// As an estimate of the source the sum has the same scale in each line.
			if b := f.b[j]; b > 0 {
				others[j] /= b * b
				q.cross[j] /= b
				q.turned[j] /= b
			}
		}
		all, others := smoothed(auto, smoothing), smoothed(others, smoothing)
		re, im := smoothed(q.cross, smoothing), smoothed(q.turned, smoothing)
		for j := range n {
			rest := all[j]
			if others[j] > 0 {
				rest -= (re[j]*re[j] + im[j]*im[j]) / others[j]
			}
			rest /= 1 - 1/math.Max(few, 2)
			rest -= f.g[m] * f.g[m] * f.smooth[j] / (1 + f.smooth[j]*f.b[j])
			if len(f.heard) == 2 {
				// The other channel's noise is taken to be like this one's: an estimate
				// too low by as much as the last was too high.
				rest = (rest + 1/f.v[m][j]) / 2
			}
			f.rest[m] += math.Max(rest, 0)
			f.noisy[m][j] = math.Max(rest, math.Max(noiseFloor*all[j], 1e-12))
		}
	}
	for _, m := range f.heard {
		for j, x := range f.noisy[m] {
			f.v[m][j] = 1 / x
		}
	}
}

// weights returns the weight of line j in the fit of channel m, after
// instrument(m): the source over the variance of what is measured there.
func (f *factor) weights(m, j int) float64 {
	return f.smooth[j] * f.v[m][j] / (1 + f.smooth[j]*f.b[j])
}

// update fits delay and gain of channel m to the others.
func (f *factor) update(m int) {
	f.instrument(m)
	sign := math.Copysign(1, f.g[m])
	for range 2 {
		var slope, bend float64
		for j := range f.p {
			w, q := f.c.omega(j), f.weights(m, j)
			re := f.cr[j]*f.cos[m][j] - f.ci[j]*f.sn[m][j]
			im := f.cr[j]*f.sn[m][j] + f.ci[j]*f.cos[m][j]
			slope -= q * w * im * sign
			bend -= q * w * w * re * sign
		}
		if !(bend < 0) {
			break
		}
		step := -slope / bend
		limit := 0.25 / f.c.rate
		f.d[m] += math.Max(-limit, math.Min(limit, step))
		f.turn(m)
	}
	var top, bottom float64
	for j := range f.p {
		q := f.weights(m, j)
		top += q * (f.cr[j]*f.cos[m][j] - f.ci[j]*f.sn[m][j])
		bottom += q * f.p[j] * f.b[j]
	}
	if g := top / bottom; bottom > 0 && g*sign > 1e-6 && !math.IsInf(g, 0) {
		f.g[m] = g
	}
}

// centre takes out what the cross-spectra do not know: a delay of all channels
// and a gain of all.
func (f *factor) centre() {
	var delay, level float64
	n := float64(len(f.heard))
	for _, m := range f.heard {
		delay += f.d[m] / n
		level += math.Log(math.Abs(f.g[m])) / n
	}
	for _, m := range f.heard {
		f.d[m] -= delay
		f.g[m] /= math.Exp(level)
		if n == 2 {
			// The one cross-spectrum knows the product of two gains alone: their
			// ratio is that of the powers.
			f.g[m] = math.Copysign(1, f.g[m])
		}
		f.turn(m)
	}
}

// smoothed returns x averaged over reach entries to either side, fewer at the
// ends.
func smoothed(x []float64, reach int) []float64 {
	sum := make([]float64, len(x)+1)
	for i, v := range x {
		sum[i+1] = sum[i] + v
	}
	out := make([]float64, len(x))
	for i := range x {
		from, to := max(0, i-reach), min(len(x), i+reach+1)
		out[i] = (sum[to] - sum[from]) / float64(to-from)
	}
	return out
}
