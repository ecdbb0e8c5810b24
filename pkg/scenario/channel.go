package scenario

import (
	"math"
	"slices"

	"alidade/pkg/scenario/internal/render"
)

// wire sets up the channels from the rig and the faults.
func (p *plan) wire() {
	rate := float64(p.sc.RateHz)
	p.channels = make([]render.Strip, p.sc.channels())
	for ch := range p.channels {
		c := &p.channels[ch]
		*c = render.Strip{Mic: -1, Factor: 1, ClipAt: math.Inf(1)}
		if p.sc.SensorDBFS != nil {
			c.Sensor = math.Sqrt(render.PowerOfDBFS(*p.sc.SensorDBFS))
		}
	}
	for i, m := range p.sc.Rig.Mics {
		c := &p.channels[m.Channel-1]
		c.Mic = i
		c.Factor = 1 / m.Factor()
		c.Delay = -m.Delay
		c.ClockPPM = m.ClockPPM
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
			a.Mic, b.Mic = b.Mic, a.Mic
		}
	}
	// A channel that is late or drifts reads frames from before the take.
	needed := 0.0
	for ch := range p.channels {
		needed = math.Max(needed, -p.channels[ch].Position(0, rate)+render.KernelTaps)
	}
	p.lead = leadFrames
	for float64(p.lead) < needed {
		p.lead += render.HopFrames
	}
}

// apply adds fault k to a channel. Its random parts do not depend on the
// channel, so that a fault of several channels strikes them together.
func (p *plan) apply(c *render.Strip, f *Fault, k int, rate float64) {
	c.Factor *= math.Pow(10, f.GainDB/20)
	if f.Polarity == "inverted" {
		c.Factor = -c.Factor
	}
	c.Delay += f.DelayUS * 1e-6
	c.ClockPPM += f.ClockPPM
	c.Dead = c.Dead || f.Dead
	c.DC += f.DC
	if f.ClipDBFS != nil {
		c.ClipAt = math.Min(c.ClipAt, math.Pow(10, *f.ClipDBFS/20))
	}
	c.Share = math.Max(c.Share, f.ClippedFraction)
	if f.HumDBFS != nil {
		rng := render.Stream(p.sc.Seed, "hum", k)
		omega := 2 * math.Pi * or(f.HumHz, 50) / rate
		for n := 1; n <= or(f.HumHarmonics, 5) && float64(n)*omega < math.Pi; n++ {
			c.Hum = append(c.Hum, render.Partial{Amplitude: math.Pow(10, *f.HumDBFS/20) / float64(n), Omega: float64(n) * omega, Phase: 2 * math.Pi * rng.Float64()})
		}
	}
	if f.WindDBFS != nil {
		c.Wind = math.Hypot(c.Wind, math.Sqrt(render.PowerOfDBFS(*f.WindDBFS)))
	}
	if f.HandlingDBFS != nil {
		rng := render.Stream(p.sc.Seed, "handling", k)
		for range or(f.HandlingCount, max(1, int(p.sc.DurationS/3))) {
			c.Thumps = append(c.Thumps, render.Thump{
				At: rng.Int64N(max(1, p.frames)), Amplitude: math.Pow(10, *f.HandlingDBFS/20) * (0.5 + 0.5*rng.Float64()),
				Omega: 2 * math.Pi * (30 + 90*rng.Float64()) / rate, Decay: 1 / ((0.01 + 0.04*rng.Float64()) * rate)})
		}
	}
	if f.DropOuts > 0 {
		rng := render.Stream(p.sc.Seed, "drop-outs", k)
		length := max(1, int64(or(f.DropOutMS, 20)*rate/1000))
		for range f.DropOuts {
			at := rng.Int64N(max(1, p.frames-length))
			c.Silent = append(c.Silent, [2]int64{at, at + length})
		}
		slices.SortFunc(c.Silent, func(a, b [2]int64) int { return int(min(max(a[0]-b[0], -1), 1)) })
	}
	if f.RepeatedBlocks > 0 {
		rng := render.Stream(p.sc.Seed, "repeats", k)
		c.Repeat = int64(or(f.RepeatBlockFrames, 512))
		for range f.RepeatedBlocks {
			c.Repeated = append(c.Repeated, 1+rng.Int64N(max(1, p.frames/c.Repeat-1)))
		}
		slices.Sort(c.Repeated)
		c.Repeated = slices.Compact(c.Repeated)
	}
}
