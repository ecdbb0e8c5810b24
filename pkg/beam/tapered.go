package beam

import (
	"math"

	"alidade/pkg/acoustics"
)

// Tapered is delay-and-sum with a taper over the microphones; with the zero
// taper, plain delay-and-sum: w_m = a_m e^{-jωτ_m}, Σ a_m = 1. With
// Task.UndoSpreading every microphone is divided by the level of the source
// there.
type Tapered struct{ Taper Taper }

var _ Design = Tapered{}

// Weights implements Design. It returns an error for a task with faults and
// for a taper that is not defined on the rig.
func (d Tapered) Weights(t Task) (*Weights, error) {
	if err := t.Validate(); err != nil {
		return nil, err
	}
	a, err := d.Taper.Amplitudes(t.Mics)
	if err != nil {
		return nil, err
	}
	w := newWeights(t)
	delays := acoustics.Delays(nil, t.Look, t.Mics, t.Reference, t.Speed)
	for m, p := range t.Mics {
		w.level[m] = 1
		if t.UndoSpreading {
			w.level[m] = t.Look.Spreading(p, t.Reference)
		}
		w.rest[m] = a[m] / w.level[m]
	}
	for k := range w.Bins() {
		omega := 2 * math.Pi * t.Hz(k)
		bin := w.Bin(k)
		for m := range bin {
			s, c := math.Sincos(-omega * delays[m])
			bin[m] = complex(w.rest[m]*c, w.rest[m]*s)
		}
	}
	return w, nil
}
