package render

import (
	"math"

	"alidade/pkg/rig"
)

// DirectBank returns the free-field responses from the reference point to the
// microphones of a source that stands still.
func DirectBank(tr *Track, mics []rig.Point, rate int) *Bank {
	bank := &Bank{}
	starts := make([]int, len(mics))
	taps := make([][]float64, len(mics))
	end := 0
	for m, p := range mics {
		delay, amplitude := tr.Reach(0, p)
		starts[m], taps[m] = delayTaps(delay * float64(rate))
		for t := range taps[m] {
			taps[m][t] *= amplitude
		}
		if m == 0 || starts[m] < bank.Start {
			bank.Start = starts[m]
		}
		end = max(end, starts[m])
	}
	for m := range mics {
		h := make([]float64, end-bank.Start+KernelTaps)
		copy(h[starts[m]-bank.Start:], taps[m])
		bank.Taps = append(bank.Taps, [][]float64{h})
	}
	return bank
}

// Sum returns the responses of both banks together. Each has one input.
func Sum(a, b *Bank) *Bank {
	start := min(a.Start, b.Start)
	end := max(a.Start+a.Length(), b.Start+b.Length())
	both := &Bank{Start: start}
	for m := range a.Taps {
		h := make([]float64, end-start)
		for _, part := range []*Bank{a, b} {
			for t, v := range part.Taps[m][0] {
				h[part.Start-start+t] += v
			}
		}
		both.Taps = append(both.Taps, [][]float64{h})
	}
	return both
}

// tape keeps a stretch of a mono signal, which it draws on as needed.
type tape struct {
	in   Mono
	base int64 // frame of x[0]
	x    []float64
}

// hold makes the frames from..to (half-open) available and lets go of those
// before from. From never goes back.
func (t *tape) hold(from, to int64) {
	if more := int(to - t.base - int64(len(t.x))); more > 0 {
		have := len(t.x)
		if have+more > cap(t.x) {
			grown := make([]float64, have, 2*(have+more))
			copy(grown, t.x)
			t.x = grown
		}
		t.x = t.x[:have+more]
		t.in.Next(t.x[have:])
	}
	if drop := from - t.base; drop > 0 {
		t.x = t.x[:copy(t.x, t.x[drop:])]
		t.base += drop
	}
}

// mover is the direct sound of a source that moves: at every frame of every
// microphone the signal as it was given off, at its exact time.
type mover struct {
	track  *Track
	mics   []rig.Point
	rate   float64
	frame  int64
	kernel *Table
	tape   tape
	guess  []float64 // time of emission of each microphone's last frame
	at     [][]float64
	level  [][]float64
}

// MoverLead is how many frames before its first one a mover needs its input
// from: half a kernel, and what the longest detour over the reference point
// takes.
func MoverLead(tr *Track, mics []rig.Point, first int64, rate int) int64 {
	earliest := math.Inf(1)
	for _, p := range mics {
		t := float64(first) / float64(rate)
		t0, _ := tr.Emission(t, t, p)
		earliest = math.Min(earliest, t0)
	}
	return first - int64(math.Floor(earliest*float64(rate))) + KernelTaps
}

// NewMover returns a mover whose input starts MoverLead frames before first.
func NewMover(tr *Track, mics []rig.Point, rate int, first int64, in Mono, kernel *Table) *mover {
	v := &mover{track: tr, mics: mics, rate: float64(rate), frame: first, kernel: kernel,
		tape: tape{in: in, base: first - MoverLead(tr, mics, first, rate)}}
	for range mics {
		v.guess = append(v.guess, float64(first)/v.rate)
		v.at = append(v.at, make([]float64, HopFrames))
		v.level = append(v.level, make([]float64, HopFrames))
	}
	return v
}

// Add implements Emitter.
func (v *mover) Add(dst [][]float64) {
	earliest, latest := math.Inf(1), math.Inf(-1)
	for m, p := range v.mics {
		rate := 1 / v.rate
		guess := v.guess[m]
		for i := range dst[m] {
			t0, a := v.track.Emission(float64(v.frame+int64(i))/v.rate, guess+rate, p)
			rate = t0 - guess
			guess = t0
			v.at[m][i], v.level[m][i] = t0*v.rate, a
			earliest, latest = math.Min(earliest, v.at[m][i]), math.Max(latest, v.at[m][i])
		}
		v.guess[m] = guess
	}
	half := int64(KernelTaps / 2)
	from := int64(math.Floor(earliest)) - half + 1
	v.tape.hold(from, int64(math.Floor(latest))+half+1)
	for m := range v.mics {
		for i := range dst[m] {
			whole := math.Floor(v.at[m][i])
			x := v.tape.x[int64(whole)-half+1-v.tape.base:]
			dst[m][i] += v.level[m][i] * v.kernel.At(x, v.at[m][i]-whole)
		}
	}
	v.frame += int64(len(dst[0]))
}
