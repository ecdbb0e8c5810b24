package beam

import (
	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

// convolverHop and phasesHop are how many frames a convolver computes at once
// with the plain kernels and with vectors, such that the parts of a microphone's
// signal and their sums stay in the first-level cache.
const (
	convolverHop = 2048
	phasesHop    = 760
)

// NewConvolver returns the beam that f makes of src, one channel, by
// convolution in the time domain. Output frame i is the sound at the reference
// point at frame i; the length is that of src. It returns an error if f does
// not fit src.
//
// With a vector unit the sums are formed tap by tap, by the place of a tap modulo
// eight (kernel.Phases). Else three steps of the
// fast FIR algorithm [Mou & Duhamel 1991] take the products
// down to 27/64 of one for each tap and frame: the sums over the microphones are
// formed between its additions before and after, so that the latter cost once
// for all microphones. Its rounding, relative to a sum formed tap by tap, is
// about 8 dB larger, below -115 dB of the beam.
func NewConvolver(src audio.Source, f *Filters) (audio.Source, error) {
	if err := runnable(src, f); err != nil {
		return nil, err
	}
	if kernel.Name() != kernel.Plain {
		return newPhased(src, f), nil
	}
	longest := 0
	for _, h := range f.H {
		longest = max(longest, len(h))
	}
	// A multiple of four for each part.
	longest = (longest + 31) / 32 * 32
	// The parts look a little further ahead than the taps do: the sums of the
	// last step are four longer than an eighth of the hop.
	const ahead = 40
	c := &convolver{taps: make([][27][]float32, f.Mics()), from: make([]int, f.Mics())}
	hop := audio.Hop{Channels: 1, Frames: convolverHop}
	for m, h := range f.H {
		// Reversed, with zeros where still earlier samples would be.
		reversed := make([]float64, longest)
		for t, v := range h {
			reversed[longest-1-t] = v
		}
		for j, half := range threeParts(reversed) {
			for k, quarter := range threeParts(half) {
				for l, eighth := range threeParts(quarter) {
					part := make([]float32, len(eighth))
					for t, v := range eighth {
						part[t] = float32(v)
					}
					c.taps[m][9*j+3*k+l] = part
				}
			}
		}
		hop.Before = max(hop.Before, f.Start[m]+longest-1)
		hop.After = max(hop.After, ahead+1-f.Start[m])
	}
	for m, start := range f.Start {
		c.from[m] = hop.Before - (start + longest - 1)
	}
	quarter := (convolverHop+longest+ahead)/4 - 2
	for k := range c.quarter {
		c.quarter[k] = make([]float32, quarter)
	}
	for k := range c.eighth {
		c.eighth[k] = make([]float32, (quarter-1)/2)
		c.sum[k] = make([]float32, convolverHop/8+4)
	}
	for k := range c.sum4 {
		c.sum4[k] = make([]float32, convolverHop/4+4)
	}
	for k := range c.sum2 {
		c.sum2[k] = make([]float32, convolverHop/2+2)
	}
	return audio.Hops(src, hop, c.run), nil
}

// newPhased returns the beam with the sums formed by the place of a tap modulo
// eight.
func newPhased(src audio.Source, f *Filters) audio.Source {
	p := &phased{taps: make([][]float32, f.Mics()), from: make([]int, f.Mics()), sums: kernel.NewPhases(phasesHop)}
	hop := audio.Hop{Channels: 1, Frames: phasesHop}
	for m, h := range f.H {
		// Reversed, with zeros where still earlier samples would be.
		n := (len(h) + 7) &^ 7
		p.taps[m] = make([]float32, n)
		for t, v := range h {
			p.taps[m][n-1-t] = float32(v)
		}
		hop.Before = max(hop.Before, f.Start[m]+n-1)
		hop.After = max(hop.After, 1-f.Start[m]) // one more than the taps reach
	}
	for m, start := range f.Start {
		p.from[m] = hop.Before - (start + len(p.taps[m]) - 1)
	}
	return audio.Hops(src, hop, p.run)
}

// phased forms y[i] = Σ_m Σ_t c_m[t]·z_m[i+t] with z_m the window of microphone
// m and c_m its reversed taps.
type phased struct {
	taps [][]float32
	from []int // where in the window the earliest sample lies
	sums *kernel.Phases
}

func (p *phased) run(out, in audio.Block, _ int64) error {
	p.sums.Clear()
	for m, taps := range p.taps {
		p.sums.Add(in.Channel(m)[p.from[m]:], taps)
	}
	p.sums.Join(out.Channel(0))
	return nil
}

// convolver forms y[i] = Σ_m Σ_t c_m[t]·z_m[i+t] with z_m the window of
// microphone m and c_m its reversed taps. A step writes even and odd parts,
// y[2n] = A[n] + B[n] and y[2n+1] = E[n] - A[n+1] - B[n], where
//
//	A = c[even] with z[2n], B = c[odd] with z[2n+1],
//	E = (c[even] + c[odd]) with z[2n+1] + z[2n+2],
//
// and A, B, E are each formed by a second step, and its parts by a third.
type convolver struct {
	taps    [][27][]float32 // [m][9·first + 3·second + third step], each 0, 1, 2 for A, B, E
	from    []int           // where in the window the earliest sample lies
	quarter [9][]float32    // the signal of one microphone after two steps
	eighth  [27][]float32   // and after three
	sum     [27][]float32
	sum4    [9][]float32
	sum2    [3][]float32
}

// threeParts returns the even taps, the odd ones, and their sums.
func threeParts(c []float64) [3][]float64 {
	n := len(c) / 2
	even, odd, both := make([]float64, n), make([]float64, n), make([]float64, n)
	for t := range even {
		even[t], odd[t] = c[2*t], c[2*t+1]
		both[t] = even[t] + odd[t]
	}
	return [3][]float64{even, odd, both}
}

func (c *convolver) run(out, in audio.Block, _ int64) error {
	for k := range c.sum {
		clear(c.sum[k])
	}
	for m := range c.taps {
		c.divide(in.Channel(m)[c.from[m]:])
		for k, x := range c.quarter {
			divide(c.eighth[3*k], c.eighth[3*k+1], c.eighth[3*k+2], x)
		}
		for k, taps := range c.taps[m] {
			kernel.AddFIR(c.sum[k], c.eighth[k], taps)
		}
	}
	for k := range c.sum4 {
		join(c.sum4[k], c.sum[3*k], c.sum[3*k+1], c.sum[3*k+2])
	}
	for k := range c.sum2 {
		join(c.sum2[k], c.sum4[3*k], c.sum4[3*k+1], c.sum4[3*k+2])
	}
	join(out.Channel(0), c.sum2[0], c.sum2[1], c.sum2[2])
	return nil
}

// divide writes the nine signals after two steps to c.quarter, both at once.
func (c *convolver) divide(z []float32) {
	q := &c.quarter
	n := len(q[0])
	p0, p1, p2, p3 := q[0][:n], q[3][:n], q[1][:n], q[4][:n]
	e02, e13 := q[2][:n], q[5][:n]
	e12, e34, e := q[6][:n], q[7][:n], q[8][:n]
	z = z[:4*n+3]
	z0, z1 := z[0], z[1]
	for i := range n {
		v := (*[5]float32)(z[4*i+2:])
		z2, z3, z4, z5, z6 := v[0], v[1], v[2], v[3], v[4]
		p0[i], p1[i], p2[i], p3[i] = z0, z1, z2, z3
		e02[i], e13[i] = z2+z4, z3+z5
		e12[i], e34[i] = z1+z2, z3+z4
		e[i] = z3 + z4 + (z5 + z6)
		z0, z1 = z4, z5
	}
}

// divide is one step: a[i] = x[2i], b[i] = x[2i+1], e[i] = x[2i+1] + x[2i+2].
func divide(a, b, e, x []float32) {
	n := len(a)
	b, e = b[:n], e[:n]
	x = x[:2*n+1]
	x0 := x[0]
	for i := range a {
		v := (*[2]float32)(x[2*i+1:])
		x1, x2 := v[0], v[1]
		a[i], b[i], e[i] = x0, x1, x1+x2
		x0 = x2
	}
}

// join is y[2n] = a[n] + b[n], y[2n+1] = e[n] - a[n+1] - b[n].
func join(y, a, b, e []float32) {
	n := len(y) / 2
	a, b, e = a[:n+1], b[:n], e[:n]
	for i, v := range b {
		y[2*i] = a[i] + v
		y[2*i+1] = e[i] - a[i+1] - v
	}
}
