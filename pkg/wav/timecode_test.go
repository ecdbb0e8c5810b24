package wav

import (
	"fmt"
	"math/rand/v2"
	"os"
	"strings"
	"testing"
)

func rate(t *testing.T, text, flag string) *FrameRate {
	t.Helper()
	f, err := ParseFrameRate(text, flag)
	if err != nil {
		t.Fatal(err)
	}
	return &f
}

func TestFrameRatesAreRead(t *testing.T) {
	for _, c := range []struct {
		text, flag string
		want       FrameRate
	}{
		{"25/1", "NDF", FrameRate{25, 1, false}}, {"24000/1001", "", FrameRate{24000, 1001, false}}, {"30000/1001", "DF", FrameRate{30000, 1001, true}},
		{"29.97", "df", FrameRate{30000, 1001, true}}, {"23.98", "NDF", FrameRate{24000, 1001, false}}, {"25", "", FrameRate{25, 1, false}}, {"30/1", "DF", FrameRate{30, 1, true}},
		{"60000/1001", "DF", FrameRate{60000, 1001, true}}, {" 24 ", "", FrameRate{24, 1, false}},
	} {
		if got, err := ParseFrameRate(c.text, c.flag); err != nil || got != c.want {
			t.Errorf("%q %q = %+v, %v, want %+v", c.text, c.flag, got, err, c.want)
		}
	}
	for _, c := range [][2]string{{"", ""}, {"0/1", ""}, {"25/0", ""}, {"x", ""}, {"25/1", "DF"}, {"24000/1001", "DF"}, {"25/1", "yes"}, {"1000/1", ""}, {"1/25", ""}, {"-25", ""}, {"25/1/1", ""}, {"99999999999/1", ""}} {
		if got, err := ParseFrameRate(c[0], c[1]); err == nil {
			t.Errorf("%q %q = %+v, want an error", c[0], c[1], got)
		}
	}
}

// SMPTE ST 12-1: labels 0 and 1 of each minute but every tenth are left out;
// the numbers of frames are those of the standard's arithmetic (1,798 a minute,
// 17,982 in ten, 107,892 an hour, 2,589,408 a day).
func TestDropFrameLabelsAreThoseOfTheStandard(t *testing.T) {
	f := FrameRate{30000, 1001, true}
	for n, want := range map[int64]string{0: "00:00:00;00", 1799: "00:00:59;29", 1800: "00:01:00;02", 3597: "00:01:59;29", 3598: "00:02:00;02", 17981: "00:09:59;29", 17982: "00:10:00;00",
		17983: "00:10:00;01", 107892: "01:00:00;00", 2589407: "23:59:59;29", 2589408: "00:00:00;00"} {
		if got := f.label(n); got != want {
			t.Errorf("frame %d is %s, want %s", n, got, want)
		}
	}
	if f.day() != 2589408 {
		t.Errorf("a day of %d frames", f.day())
	}
}

// The labels of a whole day by counting them, as the rule says in words.
func TestLabelsCountOn(t *testing.T) {
	for _, f := range []FrameRate{{30000, 1001, true}, {60000, 1001, true}, {30, 1, true}, {25, 1, false}, {24000, 1001, false}, {30000, 1001, false}} {
		h, m, s, ff := int64(0), int64(0), int64(0), int64(0)
		hours := int64(2)
		if os.Getenv("ALIDADE_LONG") == "1" {
			hours = 24
		}
		days := f.day() * hours / 24
		step := int64(0)
		for n := range days {
			if step++; step%7 == 0 || s == 0 || s == 59 { // look at a part of them, all around the minute
				mark := ":"
				if f.Drop {
					mark = ";"
				}
				if (ff < 5 || ff > 20) && n%11 < 3 || s == 0 && ff < 5 {
					want := fmt.Sprintf("%02d:%02d:%02d%s%02d", h, m, s, mark, ff)
					if got := f.label(n); got != want {
						t.Fatalf("%+v: frame %d is %s, want %s", f, n, got, want)
					}
					if back, err := f.number(h, m, s, ff); err != nil || back != n {
						t.Fatalf("%+v: %s is frame %d, %v, want %d", f, want, back, err, n)
					}
				}
			}
			if ff++; ff == f.nominal() {
				ff = 0
				if s++; s == 60 {
					s = 0
					if m++; m == 60 {
						m = 0
						h++
					}
					if f.Drop && m%10 != 0 {
						ff = f.nominal() / 15
					}
				}
			}
		}
		if h != hours || m != 0 || s != 0 || ff != 0 {
			t.Errorf("%+v: a day ends at %02d:%02d:%02d:%02d", f, h, m, s, ff)
		}
	}
}

func TestTimesOfDay(t *testing.T) {
	day := int64(24 * 3600)
	for _, c := range []struct {
		name     string
		base     TimeBase
		frame    int64
		time, tc string
	}{
		{"ten o'clock, 25", TimeBase{10 * 3600 * 48000, 48000, 48000, rate(t, "25/1", "")}, 0, "10:00:00.000", "10:00:00:00"},
		{"one frame before the next picture", TimeBase{10 * 3600 * 48000, 48000, 48000, rate(t, "25/1", "")}, 1919, "10:00:00.039", "10:00:00:00"},
		{"the next picture", TimeBase{10 * 3600 * 48000, 48000, 48000, rate(t, "25/1", "")}, 1920, "10:00:00.040", "10:00:00:01"},
		{"over midnight", TimeBase{day*48000 - 48000, 48000, 48000, rate(t, "25/1", "")}, 48000 * 3, "00:00:02.000", "00:00:02:00"},
		{"ten o'clock at 192 kHz", TimeBase{6912000000, 192000, 192000, nil}, 192000 / 4, "10:00:00.250", ""},
		// 29.97 without dropping: the labels run behind the clock by 0.1 %. 3603.6 s are 108,000 frames = 01:00:00:00.
		{"29.97 NDF", TimeBase{0, 48000, 48000, rate(t, "30000/1001", "NDF")}, 36036 * 4800, "01:00:03.600", "01:00:00:00"},
		// Drop frame keeps up: after 600.6 s of 18,000 frames the label is 00:10:00;18.
		{"29.97 DF", TimeBase{0, 48000, 48000, rate(t, "30000/1001", "DF")}, 6006 * 4800, "00:10:00.600", "00:10:00;18"},
		// Pulled up: 48,048 frames are a second of the clock.
		{"48,048 Hz", TimeBase{48048 * 3600, 48048, 48048, rate(t, "24000/1001", "")}, 48048, "01:00:01.000", "00:59:57:09"},
		{"48,048 in a file marked 48,000", TimeBase{48000 * 3600, 48000, 48048, nil}, 480480, "01:00:10.000", ""},
		{"47,952 Hz", TimeBase{47952 * 60, 47952, 47952, nil}, 47952 / 2, "00:01:00.500", ""},
	} {
		if got := c.base.Time(c.frame); got != c.time {
			t.Errorf("%s: %s, want %s", c.name, got, c.time)
		}
		got, err := c.base.Timecode(c.frame)
		if got != c.tc || (err == nil) != (c.tc != "") {
			t.Errorf("%s: %s, %v, want %q", c.name, got, err, c.tc)
		}
	}
}

func TestTimesOfDayAndFramesAreInverse(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	rates := []*FrameRate{rate(t, "25", ""), rate(t, "29.97", "DF"), rate(t, "29.97", ""), rate(t, "23.976", ""), rate(t, "59.94", "DF"), rate(t, "24", "")}
	n := 1000
	if os.Getenv("ALIDADE_LONG") == "1" {
		n = 5000
	}
	for k := range n {
		hz := []int{44100, 48000, 48048, 47952, 96000, 192000, 44056}[rng.IntN(7)]
		b := TimeBase{Reference: rng.Int64N(int64(hz) * 24 * 3600), ReferenceRate: hz, AdvanceRate: hz, FrameRate: rates[k%len(rates)]}
		if k%5 == 0 {
			b.AdvanceRate = 48048
		}
		frame := rng.Int64N(int64(hz) * 3600 * 20)
		for _, at := range []int64{frame, 0, 1} {
			tc, err := b.Timecode(at)
			if err != nil {
				t.Fatal(err)
			}
			for _, text := range []string{b.Time(at), tc} {
				got, err := b.Frame(text)
				if err != nil {
					t.Fatalf("%+v: %s: %v", b, text, err)
				}
				// The text names the millisecond or picture that the frame lies in, so
				// its first frame is at or before it, or a day later at the very start.
				again := b.Time(got)
				if text == tc {
					again, _ = b.Timecode(got)
				}
				if again != text {
					t.Fatalf("%+v: frame %d is %s, that is frame %d, which is %s", b, at, text, got, again)
				}
				if got > at && at >= int64(b.AdvanceRate) {
					t.Fatalf("%+v: frame %d is %s, found at %d", b, at, text, got)
				}
				if got > 0 && got <= at { // the frame before it lies before the text
					before := b.Time(got - 1)
					if text == tc {
						before, _ = b.Timecode(got - 1)
					}
					if before == text {
						t.Fatalf("%+v: %s starts before frame %d", b, text, got)
					}
				}
			}
		}
	}
}

func TestWordsThatAreNoTimeAreRefused(t *testing.T) {
	plain := TimeBase{48000, 48000, 48000, nil}
	drop := TimeBase{0, 48000, 48000, rate(t, "29.97", "DF")}
	for _, c := range []struct {
		base TimeBase
		text string
		want string
	}{
		{plain, "10:00", "want HH:MM:SS"}, {plain, "", "want HH:MM:SS"}, {plain, "24:00:00", "want HH"}, {plain, "10:60:00", "want HH"}, {plain, "10:00:60", "want HH"}, {plain, "-1:00:00", "want HH"},
		{plain, "10:00:00:00", "no frame rate"}, {plain, "10:00:00.1234567890", "up to nine digits"}, {plain, "10:00:0x", "want HH"}, {plain, "1:2:3:4:5", "want HH"}, {plain, "10::00:00", "want HH"}, {plain, "10:00:00.x", "nine digits"},
		{drop, "10:00:00:30", "frames 0 to 29"}, {drop, "10:01:00;00", "left out"}, {drop, "10:01:00:01", "left out"}, {drop, "10:00:00.5:01", "whole numbers"}, {drop, "10:00:00:x", "whole numbers"},
	} {
		if got, err := c.base.Frame(c.text); err == nil || !strings.Contains(err.Error(), c.want) || !strings.Contains(err.Error(), fmt.Sprintf("%q", c.text)) {
			t.Errorf("%q = %d, %v, want %q", c.text, got, err, c.want)
		}
	}
	// 61 times 17,982 pictures of 1001/30000 s: frame 1,756,798,243.2, the first whole one after it.
	if n, err := drop.Frame("10:10:00;00"); err != nil || n != 1756798244 {
		t.Errorf("10:10:00;00 = %d, %v", n, err)
	}
	if n, err := plain.Frame("00:00:00.5"); err != nil || n != 24*3600*48000-24000 {
		t.Errorf("half a second before the take = %d, %v, want the next day's", n, err)
	}
}

func TestATimeBaseIsNeverGuessed(t *testing.T) {
	ref := int64(0)
	for name, c := range map[string]struct {
		m  *Metadata
		ok bool
	}{
		"nothing": {nil, false}, "bext of 0": {&Metadata{Bext: &Bext{}}, false}, "iXML of 0": {&Metadata{IXML: &IXML{Speed: Speed{Timestamp: &ref}}}, true},
		"iXML without": {&Metadata{IXML: &IXML{}}, false}, "bext": {&Metadata{Bext: &Bext{TimeReference: 1}}, true}, "garbage": {&Metadata{Bext: &Bext{TimeReference: 1 << 62}}, false},
	} {
		if b, ok := c.m.TimeBase(48000); ok != c.ok || b.FrameRate != nil {
			t.Errorf("%s: %+v, %v", name, b, ok)
		}
	}
	if _, ok := (&Metadata{Bext: &Bext{TimeReference: 1}}).TimeBase(0); ok {
		t.Error("a rate of 0 has a time base")
	}
}
