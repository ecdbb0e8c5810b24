package wav

import (
	"fmt"
	"math/big"
	"strconv"
	"strings"
)

// FrameRate is the rate of picture frames of a time code.
type FrameRate struct {
	Num, Den int64 // Num/Den frames per second
	// Drop says that labels are left out so that they keep up with the clock
	// [SMPTE ST 12-1]: frames 0 and 1 (0 to 3 of 60) of every minute but each tenth.
	Drop bool
}

// ParseFrameRate reads a rate as iXML has it, "30000/1001", "25/1", or as
// people write it, "25", "29.97", with the flag DF, NDF or "". A rate that
// means nothing, or a drop-frame flag with a rate that has no such labels, is
// an error.
func ParseFrameRate(rate, flag string) (FrameRate, error) {
	pulled := map[string]int64{"23.976": 24, "23.98": 24, "29.97": 30, "47.95": 48, "47.952": 48, "59.94": 60}
	rate = strings.TrimSpace(rate)
	num, den, ok := strings.Cut(rate, "/")
	if !ok {
		den = "1"
	}
	f := FrameRate{}
	if n := pulled[rate]; n > 0 {
		f.Num, f.Den = n*1000, 1001
	} else {
		n, nerr := strconv.ParseUint(strings.TrimSpace(num), 10, 20)
		d, derr := strconv.ParseUint(strings.TrimSpace(den), 10, 20)
		if nerr != nil || derr != nil || n == 0 || d == 0 || n > 120*d || n < d {
			return f, fmt.Errorf("time code rate %q: want frames per second such as 25/1 or 30000/1001", rate)
		}
		f.Num, f.Den = int64(n), int64(d)
	}
	switch strings.ToUpper(strings.TrimSpace(flag)) {
	case "", "NDF":
	case "DF":
		if n := f.nominal(); n != 30 && n != 60 {
			return f, fmt.Errorf("time code rate %s: only 30 and 60 frames a second have drop-frame labels", rate)
		}
		f.Drop = true
	default:
		return f, fmt.Errorf("time code flag %q: want DF or NDF", flag)
	}
	return f, nil
}

// nominal is the number of labels a second.
func (f FrameRate) nominal() int64 { return (f.Num + f.Den - 1) / f.Den }

// left is the number of labels left out a minute.
func (f FrameRate) left() int64 {
	if f.Drop {
		return f.nominal() / 15
	}
	return 0
}

// day is the number of picture frames with labels of their own.
func (f FrameRate) day() int64 { return 24 * 6 * (f.nominal()*600 - 9*f.left()) }

// label is HH:MM:SS:FF of picture frame n, HH:MM:SS;FF for drop frame.
func (f FrameRate) label(n int64) string {
	nominal, left, mark := f.nominal(), f.left(), ":"
	n %= f.day()
	if f.Drop {
		ten, minute := nominal*600-9*left, nominal*60-left
		n += 9 * left * (n / ten)
		if rest := n % (nominal * 600); rest >= left { // of the labels of ten minutes
			n += left * ((rest - left) / minute)
		}
		mark = ";"
	}
	s := n / nominal
	return fmt.Sprintf("%02d:%02d:%02d%s%02d", s/3600, s/60%60, s%60, mark, n%nominal)
}

// number is the picture frame that has the label.
func (f FrameRate) number(h, m, s, ff int64) (int64, error) {
	if ff >= f.nominal() {
		return 0, fmt.Errorf("frame %d of a second that has frames 0 to %d", ff, f.nominal()-1)
	}
	if f.Drop && s == 0 && m%10 != 0 && ff < f.left() {
		return 0, fmt.Errorf("frame %d of that second is left out in drop-frame time code", ff)
	}
	minutes := h*60 + m
	return (minutes*60+s)*f.nominal() + ff - f.left()*(minutes-minutes/10), nil
}

// TimeBase says what time of day the frames of a take have.
type TimeBase struct {
	Reference     int64 // samples since midnight of frame 0
	ReferenceRate int   // of those samples, a second
	AdvanceRate   int   // frames of the take a second of the clock
	// FrameRate of the time code; nil where none is given, and it is never
	// guessed.
	FrameRate *FrameRate
}

// maxReference bounds a time reference that is believed: 5 days at 384 kHz.
const maxReference = 5 * 24 * 3600 * MaxRate

// TimeBase returns the time base of a take of the given sample rate, and false
// where the metadata give none. The reference is that of bext, or of iXML where
// bext has none; a bext reference of 0 alone is how writers leave the field
// unset, and counts as none. iXML gives the rate of the reference, the true
// sample rate of a pulled recording (48,048 in a file marked 48,000) and the
// frame rate.
func (m *Metadata) TimeBase(rate int) (TimeBase, bool) {
	t := TimeBase{ReferenceRate: rate, AdvanceRate: rate}
	if m == nil || rate <= 0 {
		return t, false
	}
	ok := false
	if m.IXML != nil {
		s := m.IXML.Speed
		if s.Timestamp != nil {
			t.Reference, ok = *s.Timestamp, true
		}
		if s.TimestampRate > 0 {
			t.ReferenceRate = s.TimestampRate
		}
		if s.DigitizerSampleRate > 0 {
			t.AdvanceRate = s.DigitizerSampleRate
		}
		if f, err := ParseFrameRate(s.TimecodeRate, s.TimecodeFlag); err == nil {
			t.FrameRate = &f
		}
	}
	if m.Bext != nil && m.Bext.TimeReference > 0 {
		t.Reference, ok = m.Bext.TimeReference, true
	}
	return t, ok && t.Reference <= maxReference
}

// seconds is the time since midnight of a frame, exact.
func (t TimeBase) seconds(frame int64) *big.Rat {
	s := big.NewRat(t.Reference, int64(t.ReferenceRate))
	return s.Add(s, big.NewRat(frame, int64(t.AdvanceRate)))
}

// floor is the whole number below x times num/den.
func floor(x *big.Rat, num, den int64) int64 {
	y := new(big.Rat).Mul(x, big.NewRat(num, den))
	return new(big.Int).Div(y.Num(), y.Denom()).Int64()
}

// Time is the time of day of a frame, HH:MM:SS.sss, rounded down; after
// midnight it starts again at 0.
func (t TimeBase) Time(frame int64) string {
	ms := floor(t.seconds(frame), 1000, 1)
	const day = 24 * 3600 * 1000
	ms = (ms%day + day) % day
	s := ms / 1000
	return fmt.Sprintf("%02d:%02d:%02d.%03d", s/3600, s/60%60, s%60, ms%1000)
}

// Timecode is the label HH:MM:SS:FF of the picture frame that a frame of sound
// lies in, HH:MM:SS;FF for drop frame. Without a frame rate it is an error.
func (t TimeBase) Timecode(frame int64) (string, error) {
	if t.FrameRate == nil {
		return "", fmt.Errorf("the take gives no frame rate, so there is no HH:MM:SS:FF")
	}
	n, day := floor(t.seconds(frame), t.FrameRate.Num, t.FrameRate.Den), t.FrameRate.day()
	return t.FrameRate.label((n%day + day) % day), nil
}

// Frame is the first frame at or after a time of day HH:MM:SS, HH:MM:SS.sss or
// HH:MM:SS:FF (or ;FF). A time before the first frame's is taken as that of the
// next day, so the result is never negative; it may lie behind the take.
func (t TimeBase) Frame(text string) (int64, error) {
	fail := func(what string) (int64, error) { return 0, fmt.Errorf("%q: %s", text, what) }
	fields := strings.FieldsFunc(text, func(r rune) bool { return r == ':' || r == ';' })
	if len(fields) != 3 && len(fields) != 4 || strings.Count(text, ":")+strings.Count(text, ";") != len(fields)-1 {
		return fail("want HH:MM:SS, HH:MM:SS.sss or HH:MM:SS:FF")
	}
	h, herr := strconv.ParseUint(fields[0], 10, 8)
	m, merr := strconv.ParseUint(fields[1], 10, 8)
	whole, fraction, _ := strings.Cut(fields[2], ".")
	s, serr := strconv.ParseUint(whole, 10, 8)
	if herr != nil || merr != nil || serr != nil || h > 23 || m > 59 || s > 59 {
		return fail("want HH:MM:SS, HH:MM:SS.sss or HH:MM:SS:FF")
	}
	at, day := big.NewRat(int64(h*3600+m*60+s), 1), big.NewRat(24*3600, 1)
	if len(fields) == 4 {
		ff, err := strconv.ParseUint(fields[3], 10, 8)
		if err != nil || strings.Contains(fields[2], ".") {
			return fail("want HH:MM:SS:FF with whole numbers")
		}
		if t.FrameRate == nil {
			return fail("the take gives no frame rate, so FF has no length")
		}
		n, err := t.FrameRate.number(int64(h), int64(m), int64(s), int64(ff))
		if err != nil {
			return fail(err.Error())
		}
		at = big.NewRat(n*t.FrameRate.Den, t.FrameRate.Num)
		day = big.NewRat(t.FrameRate.day()*t.FrameRate.Den, t.FrameRate.Num)
	} else if fraction != "" {
		f, err := strconv.ParseUint(fraction, 10, 60)
		if err != nil || len(fraction) > 9 {
			return fail("want up to nine digits behind the point")
		}
		scale := int64(1)
		for range fraction {
			scale *= 10
		}
		at.Add(at, big.NewRat(int64(f), scale))
	}
	start := t.seconds(0)
	for at.Cmp(start) < 0 {
		at.Add(at, day)
	}
	at.Sub(at, start)
	for at.Cmp(day) >= 0 { // a reference of more than a day
		at.Sub(at, day)
	}
	at.Neg(at)
	return -floor(at, int64(t.AdvanceRate), 1), nil
}
