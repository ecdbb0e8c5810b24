package calibration

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// Arrival is how one sound of unknown direction reached the microphones.
type Arrival struct {
	At    float64   // seconds from the start of the take
	Late  []float64 // arrival at each microphone, against the mean of them, seconds; NaN where it was not heard
	Std   []float64 // standard error of it, seconds
	Heard int
}

// The stretch around a clap that is looked at, seconds, beside what the sound
// takes across the rig.
const (
	clapLead = 0.030
	clapTail = 0.010
)

// Arrivals returns how the claps of a take, or its one steady sound, reached
// microphones that stand about where at says, metres. known are their
// corrections, nil for none; margin is how far microphones may lie from at,
// metres. Claps that fewer than three microphones agree on are left out, and all
// after the first 200: left is how many those are. The error is a *RefusedError
// where nothing is left. Memory does not grow with how many claps there are.
func Arrivals(open func() (audio.Source, error), at []rig.Point, known []rig.Mic, speed, margin float64, o Options) (list []Arrival, left int, err error) {
	src, err := open()
	if err != nil {
		return nil, 0, err
	}
	rate := src.Format().Rate
	across := rig.Spread(at).Extent/speed + 4*margin/speed
	if o.MaxDelay = across + 100e-6; o.MaxDelay > 0.02 {
		return nil, 0, &RefusedError{Why: fmt.Sprintf("sound takes %.1f ms across the rig: places are looked for in rigs of at most 6 m", 1000*across), Help: "give a rig file with a part of the microphones, and put the parts together by those that they share"}
	}
	o.anywhere = true
	nowhere := &Expected{At: at, Speed: speed, Delay: make([]float64, len(at)), LevelDB: make([]float64, len(at))}
	one := func(open func() (audio.Source, error), start float64) (Arrival, error) {
		r, err := Channels(open, nowhere, known, o)
		if err != nil {
			return Arrival{}, err
		}
		a := Arrival{At: start, Heard: r.Heard}
		for m, c := range r.Channels {
			late, std := math.NaN(), math.NaN()
			if c.Heard {
				late, std = c.Late, c.LateNoise
				if known != nil {
					late += known[m].Delay
				}
			}
			a.Late, a.Std = append(a.Late, late), append(a.Std, std)
		}
		if r.Heard < min(3, len(at)) {
			return a, &RefusedError{Why: "fewer than three microphones hear it alike"}
		}
		return a, nil
	}
	if !o.Claps {
		a, err := one(open, 0)
		if err != nil {
			return nil, 0, err
		}
		return []Arrival{a}, 0, nil
	}
	found, left, err := claps(src)
	if err != nil {
		return nil, 0, err
	}
	lead := int64((clapLead + across) * float64(rate))
	var last error
	cut := &cutter{length: int(lead) + int((across+clapTail)*float64(rate)), emit: func(j int, part audio.Block) error {
		a, err := one(func() (audio.Source, error) { return audio.FromBlock(rate, part), nil }, float64(found[j])/float64(rate))
		if err != nil {
			last = err
			return nil
		}
		list = append(list, a)
		return nil
	}}
	for _, f := range found {
		cut.first = append(cut.first, f-lead)
	}
	if src, err = open(); err != nil {
		return nil, 0, err
	}
	if err := cut.cut(src); err != nil {
		return nil, 0, err
	}
	if len(list) == 0 {
		return nil, left, &RefusedError{Why: fmt.Sprintf("not one of %d claps reaches the microphones alike: %v", len(found), last), Help: "clap louder, in quiet, farther from walls"}
	}
	return list, left, nil
}
