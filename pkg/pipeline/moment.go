package pipeline

import (
	"fmt"
	"math"
)

// frameAt returns the first frame at or after a time, with a thousandth of a
// frame forgiven so that 0.1 s of 48 kHz is frame 4800.
func frameAt(seconds, rate float64) int64 { return int64(math.Ceil(seconds*rate - 1e-3)) }

// seconds returns a stretch in seconds from the take's first frame. A time of
// day needs the take's time reference, and HH:MM:SS:FF its frame rate too.
func (r *run) seconds(s Stretch) ([2]float64, error) {
	if !s.From.OfDay {
		return [2]float64{s.From.Seconds, s.To.Seconds}, nil
	}
	base, ok := r.take.timeBase()
	if !ok {
		return [2]float64{}, fmt.Errorf("a time of day: %s has no time reference (bext or iXML); give seconds from its first frame", r.take.path())
	}
	var out [2]float64
	for k, m := range []Moment{s.From, s.To} {
		frame, err := base.Frame(m.text)
		if err != nil {
			return out, fmt.Errorf("%w; give HH:MM:SS.sss or seconds from its first frame", err)
		}
		out[k] = float64(frame) / float64(r.take.header.Rate)
	}
	if out[0] >= out[1] || out[0]*float64(r.take.header.Rate) >= float64(r.take.header.Frames) {
		return out, fmt.Errorf("not in the take, which lasts from %s to %s", base.Time(0), base.Time(r.take.header.Frames))
	}
	return out, nil
}

// times are stretches as times of day, nil where the take has none.
func (r *run) times(list [][2]float64) [][2]string {
	base, ok := r.take.timeBase()
	if !ok {
		return nil
	}
	var out [][2]string
	for _, s := range list {
		var day [2]string
		for k, v := range s {
			day[k] = base.Time(int64(math.Round(v * float64(r.take.header.Rate))))
		}
		out = append(out, day)
	}
	return out
}
