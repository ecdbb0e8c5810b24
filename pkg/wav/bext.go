package wav

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"regexp"
	"strings"
	"time"
	"unicode/utf8"
)

// Sizes in a bext body [EBU Tech 3285 v2, 2.3].
const (
	bextBytes     = 602 // the fixed part; the coding history follows
	bextTimeAt    = 338
	bextVersionAt = 346
	bextUMIDAt    = 348
	bextLoudAt    = 412
	bextUnset     = 0x7FFF // a loudness that was not measured
)

// Bext is the broadcast extension chunk, versions 0 to 2.
type Bext struct {
	Description         string `json:"description"`
	Originator          string `json:"originator"`
	OriginatorReference string `json:"originator_reference"`
	OriginationDate     string `json:"origination_date"` // yyyy-mm-dd, or with another separator: see ParseDay
	OriginationTime     string `json:"origination_time"` // hh:mm:ss
	TimeReference       int64  `json:"time_reference"`   // samples since midnight of frame 0
	Version             int    `json:"version"`
	UMID                string `json:"umid,omitempty"` // 64 bytes in hex, empty where all are 0

	// The loudness figures of version 2, nil where they are not given.
	LoudnessValueLUFS      *float64 `json:"loudness_value_lufs,omitempty"`
	LoudnessRangeLU        *float64 `json:"loudness_range_lu,omitempty"`
	MaxTruePeakDBTP        *float64 `json:"max_true_peak_dbtp,omitempty"`
	MaxMomentaryLoudnessLU *float64 `json:"max_momentary_loudness_lufs,omitempty"`
	MaxShortTermLoudnessLU *float64 `json:"max_short_term_loudness_lufs,omitempty"`

	CodingHistory string `json:"coding_history,omitempty"` // lines end in CR LF
}

// bextTexts are the text fields in order, with their sizes.
func (x *Bext) texts() []struct {
	text *string
	size int
} {
	return []struct {
		text *string
		size int
	}{{&x.Description, 256}, {&x.Originator, 32}, {&x.OriginatorReference, 32}, {&x.OriginationDate, 10}, {&x.OriginationTime, 8}}
}

func (x *Bext) loudness() []**float64 {
	return []**float64{&x.LoudnessValueLUFS, &x.LoudnessRangeLU, &x.MaxTruePeakDBTP, &x.MaxMomentaryLoudnessLU, &x.MaxShortTermLoudnessLU}
}

// parseBext reads a bext body. A short one is taken as filled up with zeros;
// nil is returned where not even the time reference is there.
func parseBext(b []byte) *Bext {
	if len(b) < bextVersionAt {
		return nil
	}
	history := ""
	if len(b) > bextBytes {
		history = textOf(b[bextBytes:])
	}
	fixed := make([]byte, bextBytes)
	copy(fixed, b)
	le := binary.LittleEndian
	x := &Bext{Version: int(le.Uint16(fixed[bextVersionAt:])), CodingHistory: history}
	// 2^63 samples are 1.5 million years at 192 kHz: more is garbage.
	if ref := le.Uint64(fixed[bextTimeAt:]); ref < 1<<63 {
		x.TimeReference = int64(ref)
	}
	at := 0
	for _, f := range x.texts() {
		*f.text = textOf(fixed[at : at+f.size])
		at += f.size
	}
	if x.Version >= 1 {
		if u := fixed[bextUMIDAt : bextUMIDAt+64]; strings.Trim(string(u), "\x00") != "" {
			x.UMID = fmt.Sprintf("%X", u)
		}
	}
	if x.Version >= 2 {
		for k, p := range x.loudness() {
			if v := int16(le.Uint16(fixed[bextLoudAt+2*k:])); v != bextUnset {
				value := float64(v) / 100
				*p = &value
			}
		}
	}
	return x
}

// body makes the chunk again, as version 2 with a zero UMID. Texts that are
// too long are cut at a whole character.
func (x *Bext) body() []byte {
	le := binary.LittleEndian
	b := make([]byte, bextBytes, bextBytes+len(x.CodingHistory))
	at := 0
	for _, f := range x.texts() {
		copy(b[at:at+f.size], cutText(*f.text, f.size))
		at += f.size
	}
	le.PutUint64(b[bextTimeAt:], uint64(x.TimeReference))
	le.PutUint16(b[bextVersionAt:], 2)
	for k, p := range x.loudness() {
		v := int16(bextUnset)
		if *p != nil {
			v = hundredths(**p)
		}
		le.PutUint16(b[bextLoudAt+2*k:], uint16(v))
	}
	return even(append(b, x.CodingHistory...), 0)
}

// even fills b up to an even length. A pad byte outside would do by the
// format, but readers of RF64 are about that lose their way at it.
func even(b []byte, fill byte) []byte {
	if len(b)%2 == 1 {
		b = append(b, fill)
	}
	return b
}

// hundredths is round(100·v), ties away from zero [EBU Tech 3285 v2, 2.4]. The
// tie is decided in decimal thousandths: binary floating point has no .005.
func hundredths(v float64) int16 {
	text := fmt.Sprintf("%.3f", v)
	negative := strings.HasPrefix(text, "-")
	text = strings.TrimPrefix(text, "-")
	n := int64(0)
	for _, c := range strings.Replace(text, ".", "", 1) {
		if c < '0' || c > '9' || n > 1<<20 {
			return bextUnset
		}
		n = 10*n + int64(c-'0')
	}
	n = (n + 5) / 10
	if n > 9999 {
		return bextUnset // the field goes to ±99.99
	}
	if negative {
		n = -n
	}
	return int16(n)
}

// textOf is a text field up to its first NUL, without the space around it.
// Bytes that are not UTF-8 are taken as Latin-1.
func textOf(b []byte) string {
	if k := bytes.IndexByte(b, 0); k >= 0 {
		b = b[:k]
	}
	text := string(utf8Of(b))
	return strings.TrimRight(text, " \x00")
}

// utf8Of is b if it is UTF-8, else b taken as Latin-1.
func utf8Of(b []byte) []byte {
	if utf8.Valid(b) {
		return b
	}
	out := make([]byte, 0, 2*len(b))
	for _, c := range b {
		out = utf8.AppendRune(out, rune(c))
	}
	return out
}

// cutText is text in at most n bytes of whole characters.
func cutText(text string, n int) string {
	if len(text) > n {
		text = strings.ToValidUTF8(text[:n], "")
	}
	return text
}

var dayPattern = regexp.MustCompile(`^([0-9]{4})[-_:. ]([0-9]{2})[-_:. ]([0-9]{2})(?:[^0-9]|$)`)

// ParseDay returns the day that a text begins with: year, month and day with a
// hyphen between them, or with one of the other separators that readers of an
// OriginationDate are to know, underscore, colon, space and stop [EBU Tech
// 3285, from memory]. It reports false where there is none, in the year 0 too,
// which stands for a date that is not known.
func ParseDay(text string) (day time.Time, ok bool) {
	m := dayPattern.FindStringSubmatch(text)
	if m == nil || m[1] == "0000" {
		return time.Time{}, false
	}
	day, err := time.Parse(time.DateOnly, m[1]+"-"+m[2]+"-"+m[3])
	return day, err == nil
}
