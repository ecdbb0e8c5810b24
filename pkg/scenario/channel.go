package scenario

import (
	"math"
	"slices"
)

// channel is what a channel of the take does to the sound at its microphone:
// the opposite of the rig's corrections, and the faults.
type channel struct {
	mic      int     // index into the rig's microphones, -1: none feeds it
	factor   float64 // amplitude, negative if inverted
	delay    float64 // lateness, seconds
	clockPPM float64 // how much too fast the clock runs
	sensor   float64 // amplitude of its own noise
	dead     bool
	dc       float64
	clipAt   float64 // +Inf: never
	share    float64 // of frames to clip, until clipAt is found
	hum      []partial
	wind     float64
	thumps   []thump
	silent   [][2]int64 // drop-outs, frames
	repeat   int64      // length of blocks, frames; 0: none is repeated
	repeated []int64    // numbers of the blocks that repeat the one before, ascending
}

// partial is one partial of hum: amplitude, radians a frame, phase.
type partial struct{ amplitude, omega, phase float64 }

// thump is a knock on the rig: a dull decaying sine.
type thump struct {
	at               int64
	amplitude, omega float64 // omega in radians a frame
	decay            float64 // a frame
}

// shifts reports whether the channel reads the sound field at other instants
// than its frames.
func (c *channel) shifts() bool { return c.delay != 0 || c.clockPPM != 0 }

// position returns the frame of the sound field that the channel's frame holds.
func (c *channel) position(frame int64, rate float64) float64 {
	return float64(frame)/(1+c.clockPPM*1e-6) - c.delay*rate
}

// wire sets up the channels from the rig and the faults.
func (p *plan) wire() {
	rate := float64(p.sc.RateHz)
	p.channels = make([]channel, p.sc.channels())
	for ch := range p.channels {
		c := &p.channels[ch]
		*c = channel{mic: -1, factor: 1, clipAt: math.Inf(1)}
		if p.sc.SensorDBFS != nil {
			c.sensor = math.Sqrt(powerOfDBFS(*p.sc.SensorDBFS))
		}
	}
	for i, m := range p.sc.Rig.Mics {
		c := &p.channels[m.Channel-1]
		c.mic = i
		c.factor = 1 / m.Factor()
		c.delay = -m.Delay
		c.clockPPM = m.ClockPPM
	}
	for k := range p.sc.Faults {
		f := &p.sc.Faults[k]
		for ch := range p.channels {
			if f.names(ch + 1) {
				p.apply(&p.channels[ch], f, k, rate)
			}
		}
		if f.SwapWith > 0 && len(f.Channels) == 1 {
			a, b := &p.channels[f.Channels[0]-1], &p.channels[f.SwapWith-1]
			a.mic, b.mic = b.mic, a.mic
		}
	}
	// A channel that is late or drifts reads frames from before the take.
	needed := 0.0
	for ch := range p.channels {
		needed = math.Max(needed, -p.channels[ch].position(0, rate)+kernelTaps)
	}
	p.lead = leadFrames
	for float64(p.lead) < needed {
		p.lead += hopFrames
	}
}

// apply adds fault k to a channel. Its random parts do not depend on the
// channel, so that a fault of several channels strikes them together.
func (p *plan) apply(c *channel, f *Fault, k int, rate float64) {
	c.factor *= math.Pow(10, f.GainDB/20)
	if f.Polarity == "inverted" {
		c.factor = -c.factor
	}
	c.delay += f.DelayUS * 1e-6
	c.clockPPM += f.ClockPPM
	c.dead = c.dead || f.Dead
	c.dc += f.DC
	if f.ClipDBFS != nil {
		c.clipAt = math.Min(c.clipAt, math.Pow(10, *f.ClipDBFS/20))
	}
	c.share = math.Max(c.share, f.ClippedFraction)
	if f.HumDBFS != nil {
		rng := stream(p.sc.Seed, "hum", k)
		omega := 2 * math.Pi * or(f.HumHz, 50) / rate
		for n := 1; n <= or(f.HumHarmonics, 5) && float64(n)*omega < math.Pi; n++ {
			c.hum = append(c.hum, partial{math.Pow(10, *f.HumDBFS/20) / float64(n), float64(n) * omega, 2 * math.Pi * rng.Float64()})
		}
	}
	if f.WindDBFS != nil {
		c.wind = math.Hypot(c.wind, math.Sqrt(powerOfDBFS(*f.WindDBFS)))
	}
	if f.HandlingDBFS != nil {
		rng := stream(p.sc.Seed, "handling", k)
		for range or(f.HandlingCount, max(1, int(p.sc.DurationS/3))) {
			c.thumps = append(c.thumps, thump{
				at: rng.Int64N(max(1, p.frames)), amplitude: math.Pow(10, *f.HandlingDBFS/20) * (0.5 + 0.5*rng.Float64()),
				omega: 2 * math.Pi * (30 + 90*rng.Float64()) / rate, decay: 1 / ((0.01 + 0.04*rng.Float64()) * rate)})
		}
	}
	if f.DropOuts > 0 {
		rng := stream(p.sc.Seed, "drop-outs", k)
		length := max(1, int64(or(f.DropOutMS, 20)*rate/1000))
		for range f.DropOuts {
			at := rng.Int64N(max(1, p.frames-length))
			c.silent = append(c.silent, [2]int64{at, at + length})
		}
		slices.SortFunc(c.silent, func(a, b [2]int64) int { return int(min(max(a[0]-b[0], -1), 1)) })
	}
	if f.RepeatedBlocks > 0 {
		rng := stream(p.sc.Seed, "repeats", k)
		c.repeat = int64(or(f.RepeatBlockFrames, 512))
		for range f.RepeatedBlocks {
			c.repeated = append(c.repeated, 1+rng.Int64N(max(1, p.frames/c.repeat-1)))
		}
		slices.Sort(c.repeated)
		c.repeated = slices.Compact(c.repeated)
	}
}

// line is a channel at work: it turns the sound at the microphone into the
// samples of the take, frame after frame.
type line struct {
	*channel
	rate    float64
	frame   int64
	noise   mono // its own, nil if none or not wanted
	wanted  bool // whether what the channel adds itself is wanted
	gusts   *gusts
	last    int // of thumps that have begun
	lsb     mono
	scratch []float64
	block   []float32 // the block before the present frame, for repeats
	drop    int       // of silent, the first that is not over
	again   int       // of repeated, the first that is not over
	clipped int64     // frames cut so far
}

func (p *plan) newLine(ch int, seed uint64, additions bool) *line {
	c := &p.channels[ch]
	l := &line{channel: c, rate: float64(p.sc.RateHz), wanted: additions, scratch: make([]float64, hopFrames)}
	if additions {
		if c.sensor > 0 {
			l.noise = &gaussian{stream(seed, "sensor", ch)}
		}
		if c.wind > 0 {
			l.gusts = newGusts(p.sc.RateHz, seed, ch)
		}
		if c.dead {
			l.lsb = &gaussian{stream(seed, "dead", ch)}
		}
	}
	if c.repeat > 0 {
		l.block = make([]float32, c.repeat)
	}
	return l
}

// run turns x, the sound at the microphone, into samples. It overwrites x.
func (l *line) run(dst []float32, x []float64) {
	for i := range x {
		x[i] *= l.factor
	}
	if l.dead {
		clear(x)
	}
	if l.wanted {
		l.additions(x)
	}
	l.faults(x)
	for i, v := range x {
		dst[i] = float32(v)
	}
	if l.block != nil {
		l.repeats(dst)
	}
	l.frame += int64(len(x))
}

// additions adds what the channel makes by itself.
func (l *line) additions(x []float64) {
	s := l.scratch[:len(x)]
	if l.lsb != nil {
		l.lsb.next(s)
		for i, v := range s {
			x[i] = math.Round(math.Max(-1, math.Min(1, v))) / 32768
		}
		return
	}
	if l.noise != nil {
		l.noise.next(s)
		for i, v := range s {
			x[i] += l.sensor * v
		}
	}
	if l.gusts != nil {
		l.gusts.next(s)
		for i, v := range s {
			x[i] += l.wind * v
		}
	}
	for _, h := range l.hum {
		for i := range x {
			x[i] += h.amplitude * math.Sin(h.omega*float64(l.frame+int64(i))+h.phase)
		}
	}
	for _, k := range l.thumps {
		for i := range x {
			t := float64(l.frame + int64(i) - k.at)
			if t >= 0 && t*k.decay < 12 {
				x[i] += k.amplitude * math.Sin(k.omega*t) * math.Exp(-t*k.decay)
			}
		}
	}
	if l.dc != 0 {
		for i := range x {
			x[i] += l.dc
		}
	}
}

// faults clips and silences.
func (l *line) faults(x []float64) {
	if !math.IsInf(l.clipAt, 1) {
		for i, v := range x {
			if math.Abs(v) > l.clipAt {
				x[i] = math.Copysign(l.clipAt, v)
				l.clipped++
			}
		}
	}
	for _, s := range l.silent {
		from, to := max(s[0]-l.frame, 0), min(s[1]-l.frame, int64(len(x)))
		if from < to {
			clear(x[from:to])
		}
	}
}

// repeats replaces the blocks that are copies of the one before.
func (l *line) repeats(dst []float32) {
	for i := range dst {
		at := l.frame + int64(i)
		number := at / l.repeat
		for l.again < len(l.repeated) && l.repeated[l.again] < number {
			l.again++
		}
		if l.again < len(l.repeated) && l.repeated[l.again] == number {
			dst[i] = l.block[at%l.repeat]
		} else {
			l.block[at%l.repeat] = dst[i]
		}
	}
}

// gusts is wind noise of unit power in the mean: a spectrum that falls by
// 12 dB an octave above 30 Hz, its level wandering by some decibels over
// seconds (common practice).
type gusts struct {
	rumble mono
	rng    interface{ NormFloat64() float64 }
	swell  float64
	keep   float64 // of the swell, each step
	level  float64
	frame  int64
	step   int64
}

func newGusts(rate int, seed uint64, ch int) *gusts {
	g := &gusts{rng: stream(seed, "gusts", ch), step: int64(max(1, rate/100))}
	g.rumble = newFiltered(shape(spectrumWind, rate), &gaussian{stream(seed, "wind", ch)})
	g.keep = math.Exp(-0.01 / 0.8) // steps of 10 ms, time constant 0.8 s
	g.swell = g.rng.NormFloat64()
	return g
}

func (g *gusts) next(dst []float64) {
	const depth = 0.6 // standard deviation of the logarithm of the amplitude
	g.rumble.next(dst)
	glide := 1 / float64(g.step)
	for i := range dst {
		if g.frame%g.step == 0 {
			g.swell = g.keep*g.swell + math.Sqrt(1-g.keep*g.keep)*g.rng.NormFloat64()
		}
		// The mean square of exp(depth·z - depth²), z Gaussian, is 1.
		aim := math.Exp(depth*g.swell - depth*depth)
		if g.frame == 0 {
			g.level = aim
		}
		g.level += glide * (aim - g.level)
		dst[i] *= g.level
		g.frame++
	}
}
