package calibration

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/spectral"
)

// The window of a clap's direct sound around its onset, seconds, and the fades
// at its ends. In a room the first reflection comes a few milliseconds later.
const (
	directBefore = 0.001
	directAfter  = 0.002
	directFade   = 0.00075
)

// MaxClaps is how many short sounds of a take are looked at, the first ones.
const MaxClaps = 200

const (
	envelopeStep  = 0.0005 // seconds a step of the envelope
	maxClapTake   = 3600   // seconds of a take whose claps are looked for
	clapRise      = 20     // of a clap over the 20 ms before it, a factor of power
	clapOverFloor = 10     // of a clap over the median of the take
	clapRange     = 1e-3   // of the strongest clap's power: weaker ones are left out
)

// envelope is a sink that keeps the power of the first difference of a stream,
// the sum over its channels, in steps of a fixed number of frames.
type envelope struct {
	step  int
	last  []float64
	sum   float64
	count int
	power []float32
}

// Write implements audio.Sink.
func (e *envelope) Write(src audio.Block) error {
	if e.last == nil {
		e.last = make([]float64, src.Channels())
		for ch := range e.last {
			e.last[ch] = float64(src.Channel(ch)[0])
		}
	}
	for i := 0; i < src.Frames(); {
		n := min(src.Frames()-i, e.step-e.count)
		for ch := range e.last {
			before := e.last[ch]
			for _, v := range src.Channel(ch)[i : i+n] {
				d := float64(v) - before
				e.sum += d * d
				before = float64(v)
			}
			e.last[ch] = before
		}
		i += n
		if e.count += n; e.count == e.step {
			e.power = append(e.power, float32(e.sum))
			e.sum, e.count = 0, 0
		}
	}
	return nil
}

// onsets returns the frames at which short sounds begin, ascending.
func (e *envelope) onsets() []int64 {
	p := e.power
	if len(p) == 0 {
		return nil
	}
	sorted := slices.Clone(p)
	slices.Sort(sorted)
	floor, strongest := float64(sorted[len(sorted)/2]), float64(sorted[len(sorted)-1])
	const (
		reach  = 6   // steps: the rise of a clap takes no longer
		before = 40  // steps that it rises over
		apart  = 120 // steps from one clap to the next, at least
	)
	type found struct {
		peak, onset int
		power       float64
	}
	var list []found
	for b, v := range p {
		power := float64(v)
		if power <= 0 || power < clapOverFloor*floor || power < clapRange*strongest {
			continue
		}
		// The largest of its surroundings, the first of several as large.
		if slices.Max(p[b:min(len(p), b+reach+1)]) > v || b > 0 && slices.Max(p[max(0, b-reach):b]) >= v {
			continue
		}
		sum, n := 0.0, 0
		for j := max(0, b-before); j < b-reach; j++ {
			sum += float64(p[j])
			n++
		}
		if n > 0 && power < clapRise*sum/float64(n) {
			continue
		}
		onset := b
		for j := b - 1; j >= max(0, b-reach) && float64(p[j]) >= 0.02*power; j-- {
			onset = j
		}
		if k := len(list) - 1; k >= 0 && b-list[k].peak < apart {
			// Echoes of a clap are weaker; what comes before a much louder one was none.
			if power > 10*list[k].power {
				list[k] = found{b, onset, power}
			}
			continue
		}
		list = append(list, found{b, onset, power})
	}
	var out []int64
	for _, f := range list {
		out = append(out, int64(f.onset)*int64(e.step))
	}
	return out
}

// claps returns where the short sounds of a stream begin, frames, and how many
// more there are than are looked at.
func claps(src audio.Source) (found []int64, left int, err error) {
	rate := float64(src.Format().Rate)
	e := &envelope{step: max(1, int(envelopeStep*rate+0.5))}
	limit := int64(maxClapTake * rate)
	frames, err := audio.Copy(audio.Section(src, 0, limit+1), 4096, e)
	if err != nil {
		return nil, 0, err
	}
	if frames > limit {
		return nil, 0, &RefusedError{Why: fmt.Sprintf("claps are looked for in takes of at most %d minutes", maxClapTake/60), Help: "give a part of the take with --excerpt A..B"}
	}
	found = e.onsets()
	if len(found) == 0 {
		return nil, 0, &RefusedError{Why: fmt.Sprintf("no clap: nothing rises %.0f dB above what sounds before it", 10*math.Log10(clapRise)), Help: "a clap is a short, loud sound in quiet; a steady sound goes without --sound claps"}
	}
	left = max(0, len(found)-MaxClaps)
	return found[:len(found)-left], left, nil
}

// cutter is a sink that hands out some stretches of a stream, in their order, as
// soon as they are whole; what lies outside the stream is silence. It keeps
// those that overlap.
type cutter struct {
	first  []int64 // of each stretch, ascending
	length int
	emit   func(j int, part audio.Block) error
	at     int64
	next   int           // the first that was not handed out
	open   []audio.Block // of next and those after it
	spare  []audio.Block
}

// Write implements audio.Sink.
func (c *cutter) Write(src audio.Block) error {
	n := int64(src.Frames())
	for j := c.next; j < len(c.first) && c.first[j] < c.at+n; j++ {
		first := c.first[j]
		c.reach(j, src.Channels())
		if from, to := max(first, c.at), min(first+int64(c.length), c.at+n); from < to {
			c.open[j-c.next].Slice(int(from-first), int(to-first)).CopyFrom(src.Slice(int(from-c.at), int(to-c.at)))
		}
	}
	c.at += n
	for c.next < len(c.first) && len(c.open) > 0 && c.first[c.next]+int64(c.length) <= c.at {
		if err := c.give(); err != nil {
			return err
		}
	}
	return nil
}

// reach opens the stretches up to j.
func (c *cutter) reach(j, channels int) {
	for len(c.open) <= j-c.next {
		if k := len(c.spare) - 1; k >= 0 {
			for ch := range channels {
				clear(c.spare[k].Channel(ch))
			}
			c.open, c.spare = append(c.open, c.spare[k]), c.spare[:k]
			continue
		}
		c.open = append(c.open, audio.NewBlock(channels, c.length))
	}
}

// give hands out the next stretch.
func (c *cutter) give() error {
	part := c.open[0]
	err := c.emit(c.next, part)
	c.next, c.open, c.spare = c.next+1, c.open[1:], append(c.spare, part)
	return err
}

// close hands out the stretches that the stream ended in.
func (c *cutter) close() error {
	for len(c.open) > 0 {
		if err := c.give(); err != nil {
			return err
		}
	}
	return nil
}

// cut copies src into the cutter.
func (c *cutter) cut(src audio.Source) error {
	if _, err := audio.Copy(src, 4096, c); err != nil {
		return err
	}
	return c.close()
}

// directWindow is the window of the direct sound: n weights, the onset at
// entry before.
func directWindow(rate float64) (window []float64, before int) {
	before = int(directBefore*rate + 0.5)
	n := before + int(directAfter*rate+0.5) + 1
	fade := max(1, int(directFade*rate+0.5))
	window = make([]float64, n)
	for i := range window {
		window[i] = 1
		if edge := min(i, n-1-i) + 1; edge <= fade {
			s := math.Sin(0.5 * math.Pi * float64(edge) / float64(fade+1))
			window[i] = s * s
		}
	}
	return window, before
}

// impulsive returns the cross-spectra of the direct sound of every clap, with
// the channels lined up by late, how many claps there are, and how many more were
// not looked at.
func (l *listening) impulsive(late []float64) (c *cross, taken, left int, err error) {
	rate := float64(l.format.Rate)
	lined := func() (audio.Source, error) {
		src, err := l.open()
		if err != nil {
			return nil, err
		}
		return aligned(src, late)
	}
	src, err := lined()
	if err != nil {
		return nil, 0, 0, err
	}
	found, left, err := claps(src)
	if err != nil {
		return nil, 0, 0, err
	}
	window, before := directWindow(rate)
	size := 64
	for size < 2*len(window) {
		size *= 2
	}
	c, err = newCross(l.format.Channels, size, rate, math.Max(l.fromHz, 1/(directBefore+directAfter)), l.toHz)
	if err != nil {
		return nil, 0, 0, err
	}
	fft, err := spectral.NewFFT[float32](size)
	if err != nil {
		return nil, 0, 0, err
	}
	re, im := planes(c.mics, fft.Bins()), planes(c.mics, fft.Bins())
	x := make([]float32, size)
	cut := &cutter{length: len(window), emit: func(_ int, part audio.Block) error {
		for m := range c.mics {
			clear(x)
			for i, v := range part.Channel(m) {
				x[i] = float32(window[i] * float64(v))
			}
			fft.Forward(re[m], im[m], x)
		}
		c.add(re, im)
		return nil
	}}
	for _, f := range found {
		cut.first = append(cut.first, f-int64(before))
	}
	if src, err = lined(); err != nil {
		return nil, 0, 0, err
	}
	if err := cut.cut(src); err != nil {
		return nil, 0, 0, err
	}
	sum2, sum4 := 0.0, 0.0
	for _, w := range window {
		sum2 += w * w
		sum4 += w * w * w * w
	}
	c.weight = float64(c.frames) * sum2 * sum2 / sum4 / float64(size)
	return c, c.frames, left, nil
}

// planes returns n slices of so many zeros.
func planes(n, length int) [][]float32 {
	out := make([][]float32, n)
	for i := range out {
		out[i] = make([]float32, length)
	}
	return out
}
