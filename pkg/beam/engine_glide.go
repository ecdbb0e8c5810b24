package beam

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/delay"
	"alidade/pkg/kernel"
)

// glideHop is how many frames a glide computes at once.
const glideHop = 1024

// Glide is a delay-and-sum beam whose delays move from frame to frame.
type Glide struct {
	Kernel *delay.Farrow
	// Amplitudes are the factors of the microphones: taper over the sum of the
	// taper, polarity, gain.
	Amplitudes []float64
	// Every is the number of frames between knots, a divisor of 1024. Between
	// knots the delays run along straight lines.
	Every int
	// LargestDelay is the most that a delay may reach either way, seconds.
	LargestDelay float64
	// Delays writes to delays the arrival of the wave at each microphone
	// against the reference point, seconds, at a knot: a frame 0, Every,
	// 2·Every, ... It is called once for each, in turn, up to the next
	// multiple of 1024 from the last frame on, which is past the end.
	Delays func(frame int64, delays []float64)
}

// NewGlide returns the moving beam that g makes of src, one channel. Output
// frame i is the sound at the reference point at frame i; the length is that of
// src. It returns an error if g does not fit src; a delay that is not finite or
// larger than g.LargestDelay becomes the error of Read.
func NewGlide(src audio.Source, g Glide) (audio.Source, error) {
	f := src.Format()
	if g.Kernel == nil || g.Delays == nil {
		return nil, fmt.Errorf("beam: glide without kernel or delays")
	}
	if f.Channels < 1 || len(g.Amplitudes) != f.Channels {
		return nil, fmt.Errorf("beam: glide with %d amplitudes for a source of %d channels", len(g.Amplitudes), f.Channels)
	}
	if g.Every < 1 || glideHop%g.Every != 0 {
		return nil, fmt.Errorf("beam: glide with knots every %d frames: want a divisor of %d", g.Every, glideHop)
	}
	if most := float64(largestSpan/2) / float64(f.Rate); !(g.LargestDelay >= 0 && g.LargestDelay <= most) {
		return nil, fmt.Errorf("beam: glide with delays up to %g s: want at most %g s", g.LargestDelay, most)
	}
	for m, a := range g.Amplitudes {
		if math.IsNaN(a) || math.IsInf(a, 0) {
			return nil, fmt.Errorf("beam: glide: amplitude of microphone %d is %g", m+1, a)
		}
	}
	reach := int(math.Ceil(g.LargestDelay*float64(f.Rate))) + g.Kernel.Len()
	r := &glider{
		Glide: g, rate: float64(f.Rate), reach: reach,
		now:  make([]float64, f.Channels),
		next: make([]float64, f.Channels),
		path: make([]float64, glideHop/g.Every*f.Channels+f.Channels),
	}
	for _, c := range g.Kernel.Branches() {
		reversed := make([]float32, len(c))
		for n, v := range c {
			reversed[len(c)-1-n] = float32(v)
		}
		r.reversed = append(r.reversed, reversed)
		r.branch = append(r.branch, make([]float32, glideHop+2*reach))
	}
	hop := audio.Hop{Channels: 1, Frames: glideHop, Before: reach, After: reach}
	return audio.Hops(src, hop, r.run), nil
}

type glider struct {
	Glide
	rate      float64
	reach     int
	reversed  [][]float32 // the kernel's branches
	branch    [][]float32 // what they make of the window of one microphone
	now, next []float64
	path      []float64 // path[knot*mics+m]: delays at the knots of a hop, frames
	started   bool
}

func (r *glider) run(out, in audio.Block, first int64) error {
	mics := in.Channels()
	knots := glideHop / r.Every
	for j := 0; j <= knots; j++ {
		row := r.path[j*mics:][:mics]
		if j == 0 && r.started {
			copy(row, r.path[knots*mics:])
			continue
		}
		r.started = true
		frame := first + int64(j*r.Every)
		r.Delays(frame, row)
		for m, d := range row {
			if !(math.Abs(d) <= r.LargestDelay) {
				return fmt.Errorf("beam: glide: frame %d: delay of microphone %d is %g s, stated are at most %g s", frame, m+1, d, r.LargestDelay)
			}
			row[m] = d * r.rate
		}
	}
	y := out.Channel(0)
	clear(y)
	for m := range mics {
		if r.Amplitudes[m] != 0 {
			r.add(y, in.Channel(m), m, mics, knots)
		}
	}
	return nil
}

// add adds the aligned signal x of microphone m to y.
func (r *glider) add(y, x []float32, m, mics, knots int) {
	// Only the part of the window that the delays of this hop reach.
	low, high := math.Inf(1), math.Inf(-1)
	for j := 0; j <= knots; j++ {
		d := -r.path[j*mics+m]
		low, high = min(low, d), max(high, d)
	}
	// Frame i with a filter that starts at s takes x[i-s-t], t < taps: the
	// branches are indexed by i - s, from the largest start on.
	taps := r.Kernel.Len()
	most, _ := r.Kernel.Place(high)
	least, _ := r.Kernel.Place(low)
	count := glideHop + most - least
	from := r.reach - most - (taps - 1)
	for k, c := range r.reversed {
		b := r.branch[k][:count]
		clear(b)
		kernel.AddFIR(b, x[from:], c)
	}
	amplitude := float32(r.Amplitudes[m])
	for j := range knots {
		d0, d1 := r.path[j*mics+m], r.path[(j+1)*mics+m]
		step := (d1 - d0) / float64(r.Every)
		for i := range r.Every {
			start, t := r.Kernel.Place(-(d0 + step*float64(i)))
			at := j*r.Every + i + most - start
			t32 := float32(t)
			var v float32
			for k := len(r.branch) - 1; k >= 0; k-- {
				v = v*t32 + r.branch[k][at]
			}
			y[j*r.Every+i] += amplitude * v
		}
	}
}
