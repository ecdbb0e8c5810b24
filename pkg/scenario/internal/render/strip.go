package render

import "math"

// Strip is what a channel of the take does to the sound at its microphone:
// the opposite of the rig's corrections, and the faults.
type Strip struct {
	Mic      int     // index into the rig's microphones, -1: none feeds it
	Factor   float64 // amplitude, negative if inverted
	Delay    float64 // lateness, seconds
	ClockPPM float64 // how much too fast the clock runs
	Sensor   float64 // amplitude of its own noise
	Dead     bool
	DC       float64
	ClipAt   float64 // +Inf: never
	Share    float64 // of frames to clip, until clipAt is found
	Hum      []Partial
	Wind     float64
	Thumps   []Thump
	Silent   [][2]int64 // drop-outs, frames
	Repeat   int64      // length of blocks, frames; 0: none is repeated
	Repeated []int64    // numbers of the blocks that repeat the one before, ascending
}

// Partial is one partial of hum: amplitude, radians a frame, phase.
type Partial struct{ Amplitude, Omega, Phase float64 }

// Thump is a knock on the rig: a dull decaying sine.
type Thump struct {
	At               int64   // frame
	Amplitude, Omega float64 // Omega in radians a frame
	Decay            float64 // a frame
}

// Shifts reports whether the channel reads the sound field at other instants
// than its frames.
func (c *Strip) Shifts() bool { return c.Delay != 0 || c.ClockPPM != 0 }

// Position returns which frame of the sound field a frame of the channel
// holds.
func (c *Strip) Position(frame int64, rate float64) float64 {
	return float64(frame)/(1+c.ClockPPM*1e-6) - c.Delay*rate
}

// Line is a channel at work: it turns the sound at the microphone into the
// samples of the take, frame after frame.
type Line struct {
	*Strip
	frame   int64
	noise   Mono // its own, nil if none or not wanted
	wanted  bool // whether what the channel adds itself is wanted
	gusts   *gusts
	lsb     Mono
	scratch []float64
	block   []float32 // the block before the present frame, for repeats
	again   int       // of repeated, the first that is not over
}

// NewLine returns a channel at work. The label index sets its random streams
// apart from those of other channels; additions says whether what the channel
// adds by itself is wanted.
func NewLine(c *Strip, rate int, seed uint64, index int, additions bool) *Line {
	l := &Line{Strip: c, wanted: additions, scratch: make([]float64, HopFrames)}
	if additions {
		if c.Sensor > 0 {
			l.noise = &Gaussian{Stream(seed, "sensor", index)}
		}
		if c.Wind > 0 {
			l.gusts = newGusts(rate, seed, index)
		}
		if c.Dead {
			l.lsb = &Gaussian{Stream(seed, "dead", index)}
		}
	}
	if c.Repeat > 0 {
		l.block = make([]float32, c.Repeat)
	}
	return l
}

// Run turns x, the sound at the microphone, into samples. It overwrites x.
func (l *Line) Run(dst []float32, x []float64) {
	for i := range x {
		x[i] *= l.Factor
	}
	if l.Dead {
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
func (l *Line) additions(x []float64) {
	s := l.scratch[:len(x)]
	if l.lsb != nil {
		l.lsb.Next(s)
		for i, v := range s {
			x[i] = math.Round(math.Max(-1, math.Min(1, v))) / 32768
		}
		return
	}
	if l.noise != nil {
		l.noise.Next(s)
		for i, v := range s {
			x[i] += l.Sensor * v
		}
	}
	if l.gusts != nil {
		l.gusts.Next(s)
		for i, v := range s {
			x[i] += l.Wind * v
		}
	}
	for _, h := range l.Hum {
		for i := range x {
			x[i] += h.Amplitude * math.Sin(h.Omega*float64(l.frame+int64(i))+h.Phase)
		}
	}
	for _, k := range l.Thumps {
		if l.frame+int64(len(x)) <= k.At || float64(l.frame-k.At)*k.Decay >= 12 {
			continue
		}
		for i := range x {
			t := float64(l.frame + int64(i) - k.At)
			if t >= 0 && t*k.Decay < 12 {
				x[i] += k.Amplitude * math.Sin(k.Omega*t) * math.Exp(-t*k.Decay)
			}
		}
	}
	if l.DC != 0 {
		for i := range x {
			x[i] += l.DC
		}
	}
}

// faults clips and silences.
func (l *Line) faults(x []float64) {
	if !math.IsInf(l.ClipAt, 1) {
		for i, v := range x {
			if math.Abs(v) > l.ClipAt {
				x[i] = math.Copysign(l.ClipAt, v)
			}
		}
	}
	for _, s := range l.Silent {
		from, to := max(s[0]-l.frame, 0), min(s[1]-l.frame, int64(len(x)))
		if from < to {
			clear(x[from:to])
		}
	}
}

// repeats replaces the blocks that are copies of the one before.
func (l *Line) repeats(dst []float32) {
	for i := range dst {
		at := l.frame + int64(i)
		number := at / l.Repeat
		for l.again < len(l.Repeated) && l.Repeated[l.again] < number {
			l.again++
		}
		if l.again < len(l.Repeated) && l.Repeated[l.again] == number {
			dst[i] = l.block[at%l.Repeat]
		} else {
			l.block[at%l.Repeat] = dst[i]
		}
	}
}

// gusts is wind noise of unit power in the mean: a spectrum that falls by
// 12 dB an octave above 30 Hz, its level wandering by some decibels over
// seconds (common practice).
type gusts struct {
	rumble Mono
	rng    interface{ NormFloat64() float64 }
	swell  float64
	keep   float64 // of the swell, each step
	level  float64
	frame  int64
	step   int64
}

func newGusts(rate int, seed uint64, ch int) *gusts {
	g := &gusts{rng: Stream(seed, "gusts", ch), step: int64(max(1, rate/100))}
	g.rumble = NewFiltered(Shape(spectrumWind, rate), &Gaussian{Stream(seed, "wind", ch)})
	g.keep = math.Exp(-0.01 / 0.8) // steps of 10 ms, time constant 0.8 s
	g.swell = g.rng.NormFloat64()
	return g
}

// Next implements Mono.
func (g *gusts) Next(dst []float64) {
	const depth = 0.6 // standard deviation of the logarithm of the amplitude
	g.rumble.Next(dst)
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
