package measure

import (
	"fmt"

	"alidade/pkg/audio"
)

// Totals is a sink that measures every channel as a whole, without bands: the
// channels of a take as they were recorded, to the same bits for blocks of any
// size. Create one with NewTotals.
type Totals struct{ each []total }

// NewTotals returns totals of that many channels.
func NewTotals(channels int) *Totals { return &Totals{each: make([]total, channels)} }

// Write implements audio.Sink. It returns an error for a sample that is not a
// finite number, and panics if src has another number of channels.
func (t *Totals) Write(src audio.Block) error {
	if src.Channels() != len(t.each) {
		panic(fmt.Sprintf("measure: block of %d channels for totals of %d", src.Channels(), len(t.each)))
	}
	for ch := range t.each {
		x := src.Channel(ch)
		if i := t.each[ch].add(x); i >= 0 {
			return fmt.Errorf("measure: channel %d: frame %d: sample is %g", ch+1, t.each[ch].frames+int64(i), x[i])
		}
	}
	return nil
}

// Levels returns the totals of every channel so far; AWeightedDBFS is NaN.
func (t *Totals) Levels() []Level {
	list := make([]Level, len(t.each))
	for ch := range list {
		list[ch] = t.each[ch].level()
	}
	return list
}
