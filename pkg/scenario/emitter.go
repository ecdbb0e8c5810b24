package scenario

import (
	"math"

	"alidade/pkg/rig"
)

// directBank returns the free-field responses from the reference point to the
// microphones of a source that stands still.
func directBank(tr *track, mics []rig.Point, rate int) *filterBank {
	bank := &filterBank{}
	starts := make([]int, len(mics))
	taps := make([][]float64, len(mics))
	end := 0
	for m, p := range mics {
		delay, amplitude := tr.reach(0, p)
		starts[m], taps[m] = delayTaps(delay * float64(rate))
		for t := range taps[m] {
			taps[m][t] *= amplitude
		}
		if m == 0 || starts[m] < bank.start {
			bank.start = starts[m]
		}
		end = max(end, starts[m])
	}
	for m := range mics {
		h := make([]float64, end-bank.start+kernelTaps)
		copy(h[starts[m]-bank.start:], taps[m])
		bank.taps = append(bank.taps, [][]float64{h})
	}
	return bank
}

// sum returns the responses of both banks together. Each has one input.
func sum(a, b *filterBank) *filterBank {
	start := min(a.start, b.start)
	end := max(a.start+a.length(), b.start+b.length())
	both := &filterBank{start: start}
	for m := range a.taps {
		h := make([]float64, end-start)
		for _, part := range []*filterBank{a, b} {
			for t, v := range part.taps[m][0] {
				h[part.start-start+t] += v
			}
		}
		both.taps = append(both.taps, [][]float64{h})
	}
	return both
}

// tape keeps a stretch of a mono signal, which it draws on as needed.
type tape struct {
	in   mono
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
		t.in.next(t.x[have:])
	}
	if drop := from - t.base; drop > 0 {
		t.x = t.x[:copy(t.x, t.x[drop:])]
		t.base += drop
	}
}

// mover is the direct sound of a source that moves: at every frame of every
// microphone the signal as it was given off, at its exact time.
type mover struct {
	track  *track
	mics   []rig.Point
	rate   float64
	frame  int64
	kernel *table
	tape   tape
	guess  []float64 // time of emission of each microphone's last frame
	at     [][]float64
	level  [][]float64
}

// moverLead is how many frames before its first one a mover needs its input
// from: half a kernel, and what the longest detour over the reference point
// takes.
func moverLead(tr *track, mics []rig.Point, first int64, rate int) int64 {
	earliest := math.Inf(1)
	for _, p := range mics {
		t := float64(first) / float64(rate)
		t0, _ := tr.emission(t, t, p)
		earliest = math.Min(earliest, t0)
	}
	return first - int64(math.Floor(earliest*float64(rate))) + kernelTaps
}

func newMover(tr *track, mics []rig.Point, rate int, first int64, in mono, kernel *table) *mover {
	v := &mover{track: tr, mics: mics, rate: float64(rate), frame: first, kernel: kernel,
		tape: tape{in: in, base: first - moverLead(tr, mics, first, rate)}}
	for range mics {
		v.guess = append(v.guess, float64(first)/v.rate)
		v.at = append(v.at, make([]float64, hopFrames))
		v.level = append(v.level, make([]float64, hopFrames))
	}
	return v
}

// add implements emitter.
func (v *mover) add(dst [][]float64) {
	earliest, latest := math.Inf(1), math.Inf(-1)
	for m, p := range v.mics {
		rate := 1 / v.rate
		guess := v.guess[m]
		for i := range dst[m] {
			t0, a := v.track.emission(float64(v.frame+int64(i))/v.rate, guess+rate, p)
			rate = t0 - guess
			guess = t0
			v.at[m][i], v.level[m][i] = t0*v.rate, a
			earliest, latest = math.Min(earliest, v.at[m][i]), math.Max(latest, v.at[m][i])
		}
		v.guess[m] = guess
	}
	half := int64(kernelTaps / 2)
	from := int64(math.Floor(earliest)) - half + 1
	v.tape.hold(from, int64(math.Floor(latest))+half+1)
	for m := range v.mics {
		for i := range dst[m] {
			whole := math.Floor(v.at[m][i])
			x := v.tape.x[int64(whole)-half+1-v.tape.base:]
			dst[m][i] += v.level[m][i] * v.kernel.at(x, v.at[m][i]-whole)
		}
	}
	v.frame += int64(len(dst[0]))
}
