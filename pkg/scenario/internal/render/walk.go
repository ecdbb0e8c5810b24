package render

import (
	"math"

	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// walkStep is how far, metres, a source moves in a room before the response of
// the reflections is worked out anew; in between, the sound is shared out
// between the two responses by triangular weights. The direct sound needs none
// of this: it is exact at every frame.
const walkStep = 0.05

// walker is the reflections of a source that moves in a room.
type walker struct {
	room  *Chamber
	track *Track
	mics  []rig.Point
	in    Mono
	frame int64 // of the next input chunk, source time

	times []float64 // of the responses, source time
	ready []*walkResponse

	fft        *spectral.FFT[float64]
	chunk      []float64
	part       []float64 // a weighted chunk, padded
	inRe, inIm []float64
	re, im     [][]float64 // of each microphone
	time       []float64
	tail       [][]float64 // tail[m], what is still to come out
}

// walkResponse is the bins of the responses of one place.
type walkResponse struct{ re, im [][]float64 }

// walkTimes returns when a source has moved by walkStep.
func walkTimes(tr *Track) []float64 {
	times := []float64{tr.Times[0]}
	for i := 1; i < len(tr.Times); i++ {
		a, b := tr.Times[i-1], tr.Times[i]
		// A polar stretch is an arc: its length comes from short chords.
		var length float64
		const chords = 32
		last := tr.Point(a)
		for c := 1; c <= chords; c++ {
			p := tr.Point(a + (b-a)*float64(c)/chords)
			length += p.Distance(last)
			last = p
		}
		steps := max(1, int(math.Ceil(length/walkStep)))
		for s := 1; s <= steps; s++ {
			times = append(times, a+(b-a)*float64(s)/float64(steps))
		}
	}
	return times
}

// WalkLead is how many frames before its first one a walker needs its input
// from: whole hops that cover the response.
func WalkLead(c *Chamber, tr *Track) int64 {
	start, length := c.shape(tr.Origin)
	warm := (length - 1 + HopFrames - 1) / HopFrames
	return int64(start + warm*HopFrames)
}

// NewWalker returns a walker whose input starts walkLead frames before first.
func NewWalker(c *Chamber, tr *Track, mics []rig.Point, first int64, in Mono) *walker {
	_, length := c.shape(tr.Origin)
	n := 1024
	for n < HopFrames+length-1 {
		n *= 2
	}
	w := &walker{room: c, track: tr, mics: mics, in: in, frame: first - WalkLead(c, tr), times: walkTimes(tr),
		fft: plan64(n), chunk: make([]float64, HopFrames), part: make([]float64, n), time: make([]float64, n),
		inRe: make([]float64, n/2+1), inIm: make([]float64, n/2+1)}
	w.ready = make([]*walkResponse, len(w.times))
	for range mics {
		w.re, w.im = append(w.re, make([]float64, n/2+1)), append(w.im, make([]float64, n/2+1))
		w.tail = append(w.tail, make([]float64, n))
	}
	for range (length - 1 + HopFrames - 1) / HopFrames {
		w.run()
	}
	return w
}

// Add implements Emitter.
func (w *walker) Add(dst [][]float64) {
	w.run()
	for m := range dst {
		to, from := dst[m], w.tail[m]
		for i := range to {
			to[i] += from[i]
		}
	}
}

// response returns the bins of response k.
func (w *walker) response(k int) *walkResponse {
	if w.ready[k] == nil {
		bank := w.room.Responses(w.track.Point(w.times[k]), w.mics, w.track.Origin)
		r := &walkResponse{}
		for m := range w.mics {
			re, im := make([]float64, len(w.inRe)), make([]float64, len(w.inRe))
			clear(w.time)
			copy(w.time, bank.Taps[m][0])
			w.fft.Forward(re, im, w.time)
			r.re, r.im = append(r.re, re), append(r.im, im)
		}
		w.ready[k] = r
	}
	return w.ready[k]
}

// run takes in the next hop of the source and leaves the finished hop of each
// microphone at the head of its tail.
func (w *walker) run() {
	for m := range w.tail {
		t := w.tail[m]
		clear(t[copy(t, t[HopFrames:]):])
		clear(w.re[m])
		clear(w.im[m])
	}
	w.in.Next(w.chunk)
	begin := float64(w.frame) / float64(w.room.Rate)
	end := float64(w.frame+HopFrames) / float64(w.room.Rate)
	last := len(w.times) - 1
	for k := range w.times {
		low, high := math.Inf(-1), math.Inf(1)
		if k > 0 {
			low = w.times[k-1]
		}
		if k < last {
			high = w.times[k+1]
		}
		if high <= begin {
			w.ready[k] = nil // passed
			continue
		}
		if low >= end {
			break
		}
		clear(w.part)
		heard := false
		for i, v := range w.chunk {
			g := w.weight(k, begin+float64(i)/float64(w.room.Rate))
			w.part[i] = g * v
			heard = heard || w.part[i] != 0
		}
		if !heard {
			continue
		}
		r := w.response(k)
		w.fft.Forward(w.inRe, w.inIm, w.part)
		for m := range w.mics {
			multiplyAdd(w.re[m], w.im[m], r.re[m], r.im[m], w.inRe, w.inIm)
		}
	}
	for m := range w.mics {
		w.fft.Inverse(w.time, w.re[m], w.im[m])
		for i, v := range w.time {
			w.tail[m][i] += v
		}
	}
	w.frame += HopFrames
}

// weight returns the share of response k at time t of the source.
func (w *walker) weight(k int, t float64) float64 {
	at, last := w.times[k], len(w.times)-1
	switch {
	case t < at:
		if k == 0 {
			return 1
		}
		return math.Max(0, (t-w.times[k-1])/(at-w.times[k-1]))
	case k == last:
		return 1
	}
	return math.Max(0, (w.times[k+1]-t)/(w.times[k+1]-at))
}
