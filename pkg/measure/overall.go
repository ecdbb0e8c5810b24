package measure

import (
	"math"

	"alidade/pkg/audio"
)

// SpeechLeast is the least part of the band importance that has to be measured
// for a speech-weighted figure.
const SpeechLeast = 0.8

// Overall sums bands up. Nil is not measurable.
type Overall struct {
	// NoiseReduction is 10·log10(ΣR/ΣY) over the bands whose noise is measured,
	// R and Y the noise powers at the reference and in the output.
	NoiseReduction   *float64
	NoiseReductionCI *[2]float64
	// NoiseReductionA is the same with every band under the A-weighting at its
	// mid-band frequency.
	NoiseReductionA *float64
	// TargetChange is 10·log10(ΣS_out/ΣS_ref) over the bands whose target is
	// measured.
	TargetChange   *float64
	TargetChangeCI *[2]float64
	// SNRGain is 10·log10[(ΣS_out/ΣY)/(ΣS_ref/ΣR)] with all four sums over the
	// bands whose target is measured, so it is not the sum of NoiseReduction
	// and TargetChange where some bands have noise only.
	SNRGain   *float64
	SNRGainCI *[2]float64
	// SpeechWeighted is the SNR gain of the bands weighted with the band
	// importance of ANSI S3.5-1997 (one-third octaves, or octaves where the
	// bands are octaves), over the measured bands and divided by
	// their importance [Greenberg Peterson Zurek 1993]. It needs SpeechLeast of
	// the importance. It is no measure of intelligibility.
	SpeechWeighted *float64
	SpeechMeasured float64 // part of the importance that is measured

	// OverBest and OverNamed are SNRGain against the best and the named
	// microphone instead of the mean.
	OverBest, OverNamed *float64
}

// Overall sums up the bands for which use is true; a nil use takes all.
func (g *Gains) Overall(use func(Band) bool) Overall {
	var noise, both []int
	for b := range g.Bands {
		if use != nil && !use(g.Bands[b].Band) {
			continue
		}
		if g.Bands[b].NoiseReduction != nil {
			noise = append(noise, b)
		}
		if g.Bands[b].SNRGain != nil {
			both = append(both, b)
		}
	}
	var o Overall
	if len(noise) > 0 {
		g.overallNoise(&o, noise)
	}
	if len(both) > 0 {
		g.overallTarget(&o, both)
	}
	g.speech(&o, both)
	return o
}

func (g *Gains) overallNoise(o *Overall, bands []int) {
	var r, y, ra, ya float64
	for _, b := range bands {
		n := &g.data[b].noise
		r, y = r+n.refMean, y+n.outMean
		w := audio.FromPowerDB(AWeightingDB(g.Bands[b].Band.CentreHz))
		ra, ya = ra+w*n.refMean, ya+w*n.outMean
	}
	o.NoiseReduction = level(r / y)
	o.NoiseReductionA = level(ra / ya)
	if g.plain {
		return
	}
	if s, ok := g.cells(bands, false, 1/r, -1/y, 0); ok {
		o.NoiseReductionCI = interval(math.Log(r/y), s)
	}
}

func (g *Gains) overallTarget(o *Overall, bands []int) {
	var r, y, sr, sy float64
	for _, b := range bands {
		d := &g.data[b]
		r, y = r+d.noise.refMean, y+d.noise.outMean
		ref, out := d.powers()
		sr, sy = sr+ref, sy+out
	}
	o.TargetChange = level(sy / sr)
	o.SNRGain = level(sy / y / (sr / r))
	o.OverBest = g.overall(bands, g.Best, *o.SNRGain, sr/r)
	o.OverNamed = g.overall(bands, g.named, *o.SNRGain, sr/r)
	if g.plain {
		return
	}
	if g.isolated {
		if s, ok := g.cells(bands, false, 1/r, -1/y, 0); ok {
			o.SNRGainCI = interval(math.Log(sy/sr*r/y), s)
		}
		return
	}
	a, okA := g.cells(bands, true, -1/sr, 1/sy, g.slowS)
	n, okN := g.cells(bands, false, 1/sr, -1/sy, g.slowS)
	if okA && okN {
		o.TargetChangeCI = interval(math.Log(sy/sr), a.plus(n))
	}
	n, okN = g.cells(bands, false, 1/sr+1/r, -1/sy-1/y, g.slowS)
	if okA && okN {
		o.SNRGainCI = interval(math.Log(sy/sr*r/y), a.plus(n))
	}
}

// overall is gain against microphone mic instead of the mean whose SNR is snr.
func (g *Gains) overall(bands []int, mic int, gain, snr float64) *float64 {
	if mic < 0 {
		return nil
	}
	var s, n float64
	for _, b := range bands {
		m := g.data[b].mic(mic)
		if m == nil {
			return nil
		}
		s, n = s+m.target, n+m.noise
	}
	if !(s > 0) || !(n > 0) {
		return nil
	}
	return number(gain - audio.PowerDB(s/n/snr))
}

func (g *Gains) speech(o *Overall, bands []int) {
	sum, all, gain := 0.0, 0.0, 0.0
	for _, b := range bands {
		band := g.Bands[b].Band
		i := SpeechImportance(band)
		if band.HighHz > 1.5*band.LowHz {
			i = SpeechImportanceOctave(band)
		}
		sum += i
		gain += i * *g.Bands[b].SNRGain
	}
	all = 1
	o.SpeechMeasured = sum / all
	if o.SpeechMeasured >= SpeechLeast {
		o.SpeechWeighted = number(gain / sum)
	}
}

// cells returns the spread of the mean of Σ_b (a·ref_b + c·out_b) over the
// noise or target entries. Bands come in windows of several lengths; their
// entries are averaged into cells as long as the longest hop, by their
// centres, blocks are at least slowS seconds, and cells that some band has no entry in are left out. So what the
// bands have in common (a gust raises them all) counts in full. ok is false
// where fewer than LeastEntries cells are left.
func (g *Gains) cells(bands []int, target bool, a, c, slowS float64) (spread, bool) {
	pick := func(b int) *part {
		if target {
			return &g.data[b].target
		}
		return &g.data[b].noise
	}
	width, last := 0.0, 0.0
	for _, b := range bands {
		p := pick(b)
		width = math.Max(width, p.hopS)
		if k := len(p.runs) - 1; k >= 0 {
			last = math.Max(last, p.startS+float64(p.runs[k].to-1)*p.hopS)
		}
	}
	if !(width > 0) {
		return spread{}, false
	}
	count := int(last/width+1e-6) + 1
	sum := make([]float64, count)
	seen := make([]int, count)
	own, n := make([]float64, count), make([]int, count)
	var w values
	for _, b := range bands {
		p := pick(b)
		clear(own)
		clear(n)
		w.z, w.at = p.residuals(w.z[:0], w.at[:0], a, c)
		for i, j := range w.at {
			cell := int((p.startS+float64(j)*p.hopS)/width + 1e-6)
			own[cell] += w.z[i]
			n[cell]++
		}
		for i := range sum {
			if n[i] > 0 {
				sum[i] += own[i] / float64(n[i])
				seen[i]++
			}
		}
	}
	var z []float64
	var at []int
	mean := 0.0
	for i, v := range sum {
		if seen[i] == len(bands) {
			z, at = append(z, v), append(at, i)
			mean += v
		}
	}
	if len(z) < LeastEntries {
		return spread{}, false
	}
	mean /= float64(len(z))
	for i := range z {
		z[i] -= mean
	}
	return meanSpread(z, at, int(math.Round(slowS/width))), true
}
