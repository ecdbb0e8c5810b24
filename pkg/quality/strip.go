package quality

import (
	"math"

	"alidade/pkg/kernel"
)

// The histogram of magnitudes has a bin for every value of the exponent and
// the first nine bits of the mantissa: steps of 0.1 to 0.2 %.
const (
	topShift = 14
	topLow   = (127 - 16) << 9 // 2^-16
	topBins  = 18 << 9
)

// history is how far back repeats are looked for, frames: a power of two.
const history = 1 << 13

// The hash of repeats covers hashed samples; hashFactor is odd, hashLast is its
// power of that number.
const (
	hashed     = 8
	hashFactor = 0x85ebca6b
	slots      = 1 << 13
	leastBlock = 32 // frames
)

// strip is one channel sample by sample.
type strip struct {
	rate   float64
	frames int64
	sums   kernel.Squares
	peak   float32
	true4  float64 // largest magnitude between samples, 0 where none is near full scale
	tops   [2][topBins]uint32
	full   int64 // at full scale, in runs
	fullIn int64

	// Stretches that stand still.
	last  float32
	run   int64
	step  float64 // smallest change that is not 0
	still []still
	lost  int64 // beyond what still holds

	// Repeats.
	past    [history]float32
	hash    uint32
	power   uint32 // hashFactor^hashed
	slot    [slots]struct{ hash, at uint32 }
	lag     int64 // of the copy under way, 0 without one
	since   int64 // its first frame
	copies  int64
	copyEnd int64

	// Moments: short stretches.
	moment      int // frames of one
	inMoment    int
	energy      float64
	low, high   float64 // energies below 80 and above 500 Hz
	lowPass     biquad
	highPass    biquad
	block       biquad             // keeps DC out of low
	mean        float64            // sum of the moment's samples
	meanSquare  float64            // sum of the squares of the moments' means
	before      [2]float64         // low and high of the moment before
	rise        float64            // of high, in the moment before
	levels      [momentBins]uint32 // of moments, 1 dB a bin
	lows        [momentBins]uint32 // of their energy below 80 Hz
	onsets      [momentBins]uint32 // of sudden low moments
	moments     int64
	settling    int // moments to go until the filters have settled after a gap
	oversampler oversampler
}

// momentBins span -200 to +20 dBFS.
const momentBins = 220

// still is a stretch of equal samples, with the step into and out of it.
type still struct {
	from, to int64
	edge     float64
	value    float32
}

// maxStill bounds the stretches that are kept; more are counted.
const maxStill = 512

func newStrip(rate int) *strip {
	s := &strip{rate: float64(rate), step: math.Inf(1), moment: max(64, rate/48), power: 1}
	for range hashed {
		s.power *= hashFactor
	}
	s.lowPass = butterworth(80, s.rate, false)
	s.highPass = butterworth(500, s.rate, true)
	s.block = butterworth(15, s.rate, true)
	s.oversampler = newOversampler()
	return s
}

// add takes samples, all finite.
func (s *strip) add(x []float32) {
	least := s.leastStill()
	s.sums.Add(x)
	s.peak = max(s.peak, kernel.Peak(x))
	for _, v := range x {
		f := s.frames
		w := float64(v)
		side, mag := 0, v
		if v < 0 {
			side, mag = 1, -v
		}
		if b := int(math.Float32bits(mag)>>topShift) - topLow; b >= 0 {
			s.tops[side][min(b, topBins-1)]++
		}
		if mag >= 32767.0/32768 && mag <= 1 { // beyond, a float take is not cut
			if s.fullIn++; s.fullIn == 3 {
				s.full += 3
			} else if s.fullIn > 3 {
				s.full++
			}
		} else {
			s.fullIn = 0
		}
		if p := s.oversampler.next(v); p > s.true4 {
			s.true4 = p
		}
		if v == s.last && s.run > 0 {
			s.run++
		} else {
			d := math.Abs(w - float64(s.last))
			if s.run > 0 && d < s.step {
				s.step = d
			}
			if s.run >= least {
				s.stood(f, d)
			}
			s.run = 1
		}
		s.repeats(v, f)
		s.last = v
		s.frames++

		s.energy += w * w
		s.mean += w
		l := s.lowPass.next(s.block.next(w))
		h := s.highPass.next(w)
		s.low += l * l
		s.high += h * h
		if s.inMoment++; s.inMoment == s.moment {
			s.endMoment()
		}
	}
}

// addLevel takes samples, all finite, for the level alone.
func (s *strip) addLevel(x []float32) {
	s.sums.Add(x)
	s.peak = max(s.peak, kernel.Peak(x))
	s.frames += int64(len(x))
}

// gap says that frames are missing before the next sample: what is under way
// ends, and nothing is compared across.
func (s *strip) gap() {
	s.close()
	s.run, s.lag, s.fullIn = 0, 0, 0
	s.copyEnd = s.frames + history
	s.settling = 12
	s.inMoment, s.mean, s.energy, s.low, s.high = 0, 0, 0, 0, 0
}

// leastStill is from how many frames on a stretch of equal samples counts: 2 ms.
func (s *strip) leastStill() int64 { return max(24, int64(s.rate*0.002)) }

// stood ends a stretch of equal samples before frame f; out is the step to it.
func (s *strip) stood(f int64, out float64) {
	from := f - s.run
	edge := out
	if from > 0 {
		in := math.Abs(float64(s.past[(from-1)&(history-1)]) - float64(s.last))
		if s.run < history {
			edge = math.Max(edge, in)
		}
	}
	if len(s.still) == maxStill {
		s.lost++
		return
	}
	s.still = append(s.still, still{from, f, edge, s.last})
}

// repeats looks for stretches that copy the one just before.
func (s *strip) repeats(v float32, f int64) {
	old := s.past[(f-hashed)&(history-1)]
	s.past[f&(history-1)] = v
	s.hash = s.hash*hashFactor + math.Float32bits(v) - math.Float32bits(old)*s.power
	if s.lag > 0 {
		if s.past[(f-s.lag)&(history-1)] == v {
			return
		}
		s.copied(f)
		s.lag = 0
	}
	if f < hashed {
		return
	}
	e := &s.slot[(s.hash*0x9e3779b1)>>19]
	lag := int64(uint32(f) - e.at)
	if e.hash == s.hash && lag >= leastBlock && lag < history-hashed && lag <= f-hashed && s.run < hashed && f > s.copyEnd {
		n := int64(0)
		for n < history-lag && n < f && s.past[(f-n)&(history-1)] == s.past[(f-n-lag)&(history-1)] {
			n++
		}
		if n >= hashed {
			s.lag, s.since = lag, f-n+1
		}
	}
	e.hash, e.at = s.hash, uint32(f)
}

// copied ends a copy before frame f. A block that is repeated once is a copy
// as long as its lag; what goes on for longer is a periodic sound.
func (s *strip) copied(f int64) {
	n := float64(f - s.since)
	lag := float64(s.lag)
	if n >= 0.95*lag && n <= 1.05*lag+16 {
		s.copies++
		s.copyEnd = f + s.lag
	}
}

// endMoment books the moment that is full.
func (s *strip) endMoment() {
	n := float64(s.moment)
	s.levels[momentBin(s.energy/n)]++
	low, high := s.low/n, s.high/n
	if s.settling == 0 {
		s.lows[momentBin(low)]++
	}
	// A thump rises below 80 Hz and leaves the sound above 500 Hz as it was. The
	// low part of a clap, late through its filter, may rise in the moment after.
	if s.settling > 0 {
		s.settling--
	} else if rise := math.Max(0, math.Max(high-s.before[1], s.rise)); s.moments > 0 && low > 10*s.before[0] && low > s.before[0]+3*rise {
		s.onsets[momentBin(low)]++
	}
	s.rise = high - s.before[1]
	s.before = [2]float64{low, high}
	s.moments++
	s.meanSquare += s.mean * s.mean / (n * n)
	s.inMoment, s.mean, s.energy, s.low, s.high = 0, 0, 0, 0, 0
}

// momentBin is the bin of a mean square.
func momentBin(power float64) int {
	db := 10*math.Log10(2*power+1e-30) + 200
	return int(math.Min(math.Max(db, 0), momentBins-1))
}

// momentLevel is the level, dBFS, under which the given share of the moments of
// a histogram lies, those of a bin taken as evenly spread over its 1 dB.
func momentLevel(bins *[momentBins]uint32, share float64) float64 {
	total := 0.0
	for _, n := range bins {
		total += float64(n)
	}
	sum := 0.0
	for b, n := range bins {
		if sum += float64(n); n > 0 && sum >= share*total {
			return float64(b) + 1 - (sum-share*total)/float64(n) - 200
		}
	}
	return math.NaN()
}

// close ends what is under way at the end of the take.
func (s *strip) close() {
	if s.run >= s.leastStill() && s.frames > 0 {
		s.stood(s.frames, 0)
	}
	if s.lag > 0 {
		s.copied(s.frames)
	}
}

// rms is the root mean square without the constant part.
func (s *strip) rms() float64 {
	if s.frames == 0 {
		return 0
	}
	mean := s.sums.Sum() / float64(s.frames)
	return math.Sqrt(math.Max(0, s.sums.Square()/float64(s.frames)-mean*mean))
}

// wide reports that the signal spans enough steps of its number format for
// equal samples to mean something.
func (s *strip) wide() bool { return s.rms() >= 8*s.step }

// flat returns how many frames lie on a flat top: more in the uppermost 0.2 to
// 0.4 % of the magnitudes than the 1 % below them explains, as no smooth
// distribution of magnitudes has it.
func (s *strip) flat() int64 {
	flat := int64(0)
	for side := range s.tops {
		bins := &s.tops[side]
		top := topBins - 1
		for top >= 0 && bins[top] == 0 {
			top--
		}
		const low = 7 << 9 // 2^-9 or -54 dB: below, steps of 16 bits are as wide as the bins
		if top < low+8 {
			continue
		}
		at := int64(bins[top]) + int64(bins[top-1])
		below := int64(0)
		for k := 2; k < 7; k++ {
			below += int64(bins[top-k])
		}
		if at >= 10 && at > 3*below {
			flat += at - below*2/5
		}
	}
	return flat
}

// biquad is a filter of second order, direct form II transposed.
type biquad struct{ b0, b1, b2, a1, a2, z1, z2 float64 }

func (b *biquad) next(x float64) float64 {
	y := b.b0*x + b.z1
	b.z1 = b.b1*x - b.a1*y + b.z2
	b.z2 = b.b2*x - b.a2*y
	return y
}

// butterworth is a low- or high-pass of second order by the bilinear
// transform: K = tan(π·hz/rate), denominator 1 + √2·K + K².
func butterworth(hz, rate float64, high bool) biquad {
	k := math.Tan(math.Pi * hz / rate)
	n := 1 / (1 + math.Sqrt2*k + k*k)
	b := biquad{a1: 2 * (k*k - 1) * n, a2: (1 - math.Sqrt2*k + k*k) * n}
	if high {
		b.b0, b.b1, b.b2 = n, -2*n, n
	} else {
		b.b0, b.b1, b.b2 = k*k*n, 2*k*k*n, k*k*n
	}
	return b
}

// oversampler finds peaks between samples at the quarters, by a windowed sinc
// of 24 taps.
type oversampler struct {
	taps [3][overTaps]float64
	ring [2 * overTaps]float64
	at   int
	warm int // samples to go in which a loud one is near
}

const overTaps = 24

func newOversampler() oversampler {
	var o oversampler
	for q := range o.taps {
		sum := 0.0
		for i := range overTaps {
			t := float64(i-overTaps/2) + float64(q+1)/4
			w := math.Cos(math.Pi * t / (overTaps + 1))
			o.taps[q][i] = math.Sin(math.Pi*t) / (math.Pi * t) * w * w
			sum += o.taps[q][i]
		}
		for i := range o.taps[q] {
			o.taps[q][i] /= sum
		}
	}
	return o
}

// next takes a sample and returns the largest magnitude at the three places
// between two samples some way back, and 0 where nothing near reaches half of
// full scale.
func (o *oversampler) next(v float32) float64 {
	w := float64(v)
	o.ring[o.at], o.ring[o.at+overTaps] = w, w
	if o.at++; o.at == overTaps {
		o.at = 0
	}
	if w > 0.5 || w < -0.5 {
		o.warm = overTaps
	}
	if o.warm == 0 {
		return 0
	}
	o.warm--
	x := o.ring[o.at : o.at+overTaps]
	peak := 0.0
	for q := range o.taps {
		y := 0.0
		for i, t := range &o.taps[q] {
			y += t * x[i]
		}
		peak = math.Max(peak, math.Abs(y))
	}
	return peak
}
