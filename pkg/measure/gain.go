package measure

import (
	"math"
	"slices"
	"sync"

	"alidade/pkg/audio"
)

// Reason says why a figure is missing. It is stable and empty where nothing is
// missing.
type Reason string

// The reasons.
const (
	NoNoise       Reason = "no-noise-stretch"  // no noise-only part is known
	NoTarget      Reason = "no-target-stretch" // no part with the target is known
	TooShort      Reason = "too-short"         // fewer than LeastEntries entries or LeastSeconds
	Silent        Reason = "silent"            // no power at the reference or in the output
	NotAboveNoise Reason = "not-above-noise"   // power with the target does not exceed the noise significantly
)

// Flags of a band.
const (
	Sparse             = "sparse"              // fewer than 30 independent samples, 8 block lengths or 1.5 s
	TargetUnmeasurable = "target-unmeasurable" // the target part is null
)

// What stands behind a figure at least.
const (
	LeastEntries  = 4   // fewer give null
	LeastSeconds  = 0.3 // shorter gives null
	SparseSamples = 30  // fewer independent band samples are flagged
	SparseBlocks  = 8   // fewer block lengths are flagged
	SparseSeconds = 1.5 // shorter is flagged
)

// Pair is what goes into a gain: the reference and the output, band by band
// and over the same time, and where known every microphone of the reference.
type Pair struct {
	Reference, Output *Series
	Microphones       []*Series
}

// Scene is a mix with known stretches of noise and of target with noise.
type Scene struct {
	Pair
	Noise, Target []Stretch
	// Named is the microphone (0-based in Microphones) to compare with, -1 for
	// none.
	Named int
	// NoIntervals leaves the intervals nil, which are most of the work; every
	// other figure stays the same.
	NoIntervals bool
}

// BandGain is what happened in one band. Levels are dBFS (AES17), ratios dB,
// intervals 95 % for the expected figure. Nil is not measurable; NoiseReason
// and TargetReason say why.
type BandGain struct {
	Band Band

	NoiseIn, NoiseOut *float64
	NoiseReduction    *float64
	NoiseReductionCI  *[2]float64

	TargetIn, TargetOut *float64
	TargetChange        *float64
	TargetChangeCI      *[2]float64

	SNRIn, SNROut *float64
	SNRGain       *float64
	SNRGainCI     *[2]float64

	OverBest, OverNamed *float64

	NoiseReason, TargetReason Reason
	Flags                     []string

	// NoiseSamples and TargetSamples are the independent samples (time times
	// bandwidth) behind the figures, NoiseBlockS and TargetBlockS the block
	// lengths of the intervals, seconds.
	NoiseSamples, TargetSamples float64
	NoiseBlockS, TargetBlockS   float64
}

// Sparse reports whether the flag Sparse stands on the band.
func (b *BandGain) Sparse() bool {
	for _, f := range b.Flags {
		if f == Sparse {
			return true
		}
	}
	return false
}

// Gains are the figures of all bands, lowest first.
type Gains struct {
	Bands []BandGain
	// Best is the microphone with the highest SNR over all measured bands,
	// 0-based in Scene.Microphones, -1 where it is not known.
	Best int

	named    int
	isolated bool
	plain    bool    // without intervals
	slowS    float64 // block length of the noise level, see slowBlock
	data     []bandData
}

// bandData is what the figures of one band are made of.
type bandData struct {
	noise, target part
	slowS         float64 // block length of the noise level, see slowBlock
	isolated      bool
	plain         bool // without intervals
	mics          []micPower
}

// micPower is the noise power and the target power of one microphone.
type micPower struct{ noise, target float64 }

// powers returns the target power at the reference and in the output.
func (d *bandData) powers() (ref, out float64) {
	if d.isolated {
		return d.target.refMean, d.target.outMean
	}
	return d.target.refMean - d.noise.refMean, d.target.outMean - d.noise.outMean
}

// Powers are the mean powers behind the figures of one band, re a full-scale
// sine, at the reference and in the output.
type Powers struct{ NoiseIn, NoiseOut, TargetIn, TargetOut float64 }

// Powers returns what band b is made of. The powers of the target are those of
// its part less the noise's (or those of the target alone), also where they do
// not exceed the noise significantly, or fall below zero; what a stretch holds no
// entry for is NaN.
func (g *Gains) Powers(b int) Powers {
	d := &g.data[b]
	in, out := d.powers()
	return Powers{d.noise.refMean, d.noise.outMean, in, out}
}

// part is one band over the entries of one kind of stretch. It shares the
// powers of its tracks: a long take has them once.
type part struct {
	runs     []run     // entries that follow each other
	count    int       // entries in all
	ref, out []float32 // of the whole tracks
	refMean  float64
	outMean  float64
	seconds  float64 // of time covered
	hopS     float64
	startS   float64 // centre of entry 0
}

// run is the entries from..to, half-open.
type run struct{ from, to int }

func newPart(ref, out Track, at []int) part {
	p := part{count: len(at), ref: ref.Power, out: out.Power, hopS: ref.HopS, startS: ref.StartS + ref.LengthS/2}
	for _, j := range at {
		p.refMean += float64(ref.Power[j])
		p.outMean += float64(out.Power[j])
		if k := len(p.runs) - 1; k >= 0 && p.runs[k].to == j {
			p.runs[k].to++
		} else {
			p.runs = append(p.runs, run{j, j + 1})
			p.seconds += ref.LengthS - ref.HopS
		}
		p.seconds += ref.HopS
	}
	p.refMean /= float64(len(at))
	p.outMean /= float64(len(at))
	return p
}

func (p *part) short() bool { return p.count < LeastEntries || p.seconds < LeastSeconds }

// residuals appends a·ref + b·out of every entry, less the mean, to z and where
// the entries stand to at.
func (p *part) residuals(z []float64, at []int, a, b float64) ([]float64, []int) {
	z, at = slices.Grow(z, p.count), slices.Grow(at, p.count)
	for _, r := range p.runs {
		out := p.out[r.from:r.to]
		for i, v := range p.ref[r.from:r.to] {
			z = append(z, a*(float64(v)-p.refMean)+b*(float64(out[i])-p.outMean))
			at = append(at, r.from+i)
		}
	}
	return z, at
}

// values are residuals and their places. A scan asks for hundreds of thousands
// of them: they are used again.
type values struct {
	z  []float64
	at []int
}

var workspace = sync.Pool{New: func() any { return new(values) }}

// spread is the spread of the mean of a·ref + b·out, with blocks of at least
// slowS seconds.
func (p *part) spread(a, b, slowS float64) spread {
	w := workspace.Get().(*values)
	defer workspace.Put(w)
	w.z, w.at = p.residuals(w.z[:0], w.at[:0], a, b)
	return meanSpread(w.z, w.at, int(math.Round(slowS/p.hopS)))
}

func number(v float64) *float64 { return &v }

func level(power float64) *float64 { return number(audio.PowerDB(power)) }

// dbPerNeper turns a natural logarithm of power into decibels.
const dbPerNeper = 10 / math.Ln10
