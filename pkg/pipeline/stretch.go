package pipeline

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// Stretch is a stretch of time, half-open, as a person writes it.
type Stretch struct{ From, To Moment }

// Moment is a point in time: seconds from the take's first frame, or a time of
// day.
type Moment struct {
	Seconds float64 // from the first frame, or since midnight for a time of day
	OfDay   bool
	// Frame is the FF of HH:MM:SS:FF, or -1 where none was given.
	Frame int
	text  string
}

// String returns the moment as it was written.
func (m Moment) String() string { return m.text }

// ParseStretches reads A..B[,A..B...] with A and B in seconds from the take's
// first frame or as times of day HH:MM:SS[.sss] or HH:MM:SS:FF (drop-frame labels with ;FF).
func ParseStretches(text string) ([]Stretch, error) {
	var list []Stretch
	for _, part := range strings.Split(text, ",") {
		part = strings.TrimSpace(part)
		from, to, ok := strings.Cut(part, "..")
		if !ok {
			return nil, fmt.Errorf("%q is not a stretch: want A..B", part)
		}
		a, err := parseMoment(strings.TrimSpace(from))
		if err != nil {
			return nil, err
		}
		b, err := parseMoment(strings.TrimSpace(to))
		if err != nil {
			return nil, err
		}
		if a.OfDay != b.OfDay {
			return nil, fmt.Errorf("%q: one end is a time of day, the other seconds of the take", part)
		}
		if !a.OfDay && a.Seconds >= b.Seconds {
			return nil, fmt.Errorf("%q: ends at %g s, not after it starts at %g s", part, b.Seconds, a.Seconds)
		}
		list = append(list, Stretch{a, b})
	}
	return list, nil
}

func parseMoment(text string) (Moment, error) {
	m := Moment{text: text, Frame: -1}
	fields := strings.FieldsFunc(text, func(r rune) bool { return r == ':' || r == ';' })
	if strings.Count(text, ":")+strings.Count(text, ";") != max(0, len(fields)-1) {
		fields = nil // an empty field
	}
	switch len(fields) {
	case 1:
		s, err := strconv.ParseFloat(text, 64)
		if err != nil || math.IsNaN(s) || math.IsInf(s, 0) {
			return m, fmt.Errorf("%q is neither seconds nor a time of day HH:MM:SS", text)
		}
		if s < 0 {
			return m, fmt.Errorf("%q: before the take's first frame", text)
		}
		m.Seconds = s
		return m, nil
	case 3, 4:
		m.OfDay = true
		hour, herr := strconv.ParseUint(fields[0], 10, 8)
		minute, merr := strconv.ParseUint(fields[1], 10, 8)
		second, serr := strconv.ParseFloat(fields[2], 64)
		if herr != nil || merr != nil || serr != nil || hour > 23 || minute > 59 || !(second >= 0 && second < 60) {
			return m, fmt.Errorf("%q is not a time of day: want HH:MM:SS, HH:MM:SS.sss or HH:MM:SS:FF", text)
		}
		m.Seconds = float64(hour)*3600 + float64(minute)*60 + second
		if len(fields) == 4 {
			ff, err := strconv.ParseUint(fields[3], 10, 8)
			if err != nil || second != math.Trunc(second) {
				return m, fmt.Errorf("%q is not a time of day: want HH:MM:SS:FF with whole numbers", text)
			}
			m.Frame = int(ff)
		}
		return m, nil
	}
	return m, fmt.Errorf("%q is neither seconds nor a time of day HH:MM:SS", text)
}
