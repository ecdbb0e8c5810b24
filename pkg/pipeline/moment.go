package pipeline

import (
	"fmt"
	"math"
)

// frameAt returns the first frame at or after a time, with a thousandth of a
// frame forgiven so that 0.1 s of 48 kHz is frame 4800.
func frameAt(seconds, rate float64) int64 { return int64(math.Ceil(seconds*rate - 1e-3)) }

// seconds returns a stretch in seconds from the take's first frame.
func (r *run) seconds(s Stretch) ([2]float64, error) {
	if s.From.OfDay {
		return [2]float64{}, fmt.Errorf("a time of day: the take has no time reference, give seconds from its first frame")
	}
	return [2]float64{s.From.Seconds, s.To.Seconds}, nil
}
