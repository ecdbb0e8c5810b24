package wav

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"
)

// Change says how an output came from a take, as far as metadata depend on it.
type Change struct {
	Output     Format // of the output
	TakeRate   int    // frames per second of the take; 0 is the output's
	TakeFrames int64  // length of the take
	FirstFrame int64  // of the take, where the output starts
	Frames     int64  // length of the output
	TrackName  string // name of the output's one track; "" keeps no name
	Software   string // program and version, for LIST INFO and the coding history
	Settings   string // what was done, in one line, for the coding history
	Private    bool   // leave out what names people, places or machines
}

// Private metadata are built from what is known to be harmless, not by leaving
// out what is known to be harmful.
var (
	privateIXML  = []string{"IXML_VERSION", "SCENE", "TAKE", "CIRCLED", "SPEED", "TRACK_LIST"}
	privateSpeed = []string{"FILE_SAMPLE_RATE", "AUDIO_BIT_DEPTH", "WORD_LENGTH", "DIGITIZER_SAMPLE_RATE", "TIMECODE_RATE", "TIMECODE_FLAG",
		"TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI", "TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO", "TIMESTAMP_SAMPLE_RATE"}
	privateInfo = []string{"ICRD"}
)

// Derive returns the metadata of an output made from a take that carries m:
// what still holds is kept, what changed is changed, and the ids of what was
// dropped are listed. m is not changed and may be nil.
//
// bext keeps its texts and dates; its time reference moves by FirstFrame, over
// midnight to the next day's 0; UMID and loudness become unset; the coding
// history gets a line. A take without bext gets none, since a bext must state
// a time. iXML keeps everything but the track list (now one track), bit depth,
// time stamp, file set, unique names, its mirror of bext, and loudness. Cues
// move and are clipped to the output. INFO keeps its texts; ISFT names the
// software. Chunks of unknown meaning are kept, but for excerpts.
//
// With Private, originator, description, earlier coding history, notes, labels
// of cues, unknown chunks, all of INFO but the date, and all of iXML but scene,
// take, circled and speed are left out.
func (m *Metadata) Derive(c Change) (out *Metadata, dropped []string) {
	if m == nil {
		m = &Metadata{}
	}
	if c.TakeRate == 0 {
		c.TakeRate = c.Output.Rate
	}
	out = &Metadata{Cues: []Cue{}}
	// Time references count at a rate of their own where iXML gives one.
	base, _ := m.TimeBase(c.TakeRate)
	rate, advance := int64(max(1, base.ReferenceRate)), int64(max(1, base.AdvanceRate))
	move := c.FirstFrame/advance*rate + c.FirstFrame%advance*rate/advance
	if m.Bext != nil {
		out.Bext = m.Bext.derive(c, move, rate)
	}
	if m.IXML != nil {
		var gone []string
		if out.IXML, gone = m.IXML.derive(c, move, rate); len(gone) > 0 {
			dropped = append(dropped, gone...)
		}
	}
	for _, cue := range m.Cues {
		if cue, ok := cue.moved(c); ok {
			out.Cues = append(out.Cues, cue)
		} else {
			dropped = append(dropped, fmt.Sprintf("cue %d", cue.ID))
		}
	}
	for _, e := range m.Info {
		switch {
		case e.ID == "ISFT" && c.Software != "":
		case c.Private && !slices.Contains(privateInfo, e.ID):
			dropped = append(dropped, "INFO "+e.ID)
		default:
			out.Info = append(out.Info, e)
		}
	}
	if c.Software != "" {
		out.Info = append(out.Info, InfoEntry{ID: "ISFT", Text: c.Software})
	}
	excerpt := c.FirstFrame != 0 || c.Frames != c.TakeFrames
	for _, o := range m.other {
		if c.Private || excerpt {
			dropped = append(dropped, idText(o.id))
			continue
		}
		out.other = append(out.other, o)
	}
	return out, dropped
}

// derive moves the time reference by so many samples of a rate.
func (x *Bext) derive(c Change, move, rate int64) *Bext {
	y := *x
	y.Version, y.UMID = 2, ""
	for _, p := range y.loudness() {
		*p = nil
	}
	day := 24 * 3600 * rate
	moved := x.TimeReference + move
	if x.TimeReference < day && moved >= day {
		if date, ok := ParseDay(x.OriginationDate); ok {
			y.OriginationDate = date.AddDate(0, 0, int(moved/day)).Format(time.DateOnly)
		}
		moved %= day
	}
	y.TimeReference = moved
	if c.Private {
		y.Description, y.Originator, y.OriginatorReference, y.CodingHistory = "", "", "", ""
	}
	if y.CodingHistory != "" && !strings.HasSuffix(y.CodingHistory, "\n") {
		y.CodingHistory += "\r\n"
	}
	y.CodingHistory += codingLine(c)
	return &y
}

// codingLine is a line of a coding history [EBU R 98]: algorithm, sampling
// frequency, word length, mode, and free text without commas.
func codingLine(c Change) string {
	mode := map[int]string{1: "mono", 2: "stereo"}[c.Output.Channels]
	if mode == "" {
		mode = "multitrack"
	}
	text := c.Software + "; " + c.Settings
	if c.Output.Encoding.Float() {
		text += "; float"
	}
	text = strings.Map(func(r rune) rune {
		switch {
		case r == ',':
			return ';'
		case r < 0x20 || r > 0x7e: // the field is ASCII
			return '_'
		}
		return r
	}, strings.Trim(text, "; "))
	return fmt.Sprintf("A=PCM,F=%d,W=%d,M=%s,T=%s\r\n", c.Output.Rate, c.Output.Encoding.Bits(), mode, text)
}

func (x *IXML) derive(c Change, move, rate int64) (*IXML, []string) {
	root := x.root.clone()
	gone := root.drop("FILE_SET", "FILE_UID", "BEXT", "LOUDNESS")
	if c.FirstFrame != 0 || c.Frames != c.TakeFrames {
		gone = append(gone, root.drop("SYNC_POINT_LIST", "PRE_RECORD_SAMPLECOUNT")...)
	}
	if c.Private {
		gone = append(gone, root.keep(privateIXML)...)
		if speed := root.child("SPEED"); speed != nil {
			gone = append(gone, speed.keep(privateSpeed)...)
		}
		root.attrs = nil
	}
	for k := range gone {
		gone[k] = "iXML " + gone[k]
	}
	if speed := root.child("SPEED"); speed != nil {
		bits := strconv.Itoa(c.Output.Encoding.Bits())
		for _, name := range []string{"AUDIO_BIT_DEPTH", "WORD_LENGTH"} {
			if speed.child(name) != nil {
				speed.set(name, bits)
			}
		}
		if x.Speed.Timestamp != nil {
			moved := *x.Speed.Timestamp + move
			if day := 24 * 3600 * rate; *x.Speed.Timestamp < day {
				moved %= day
			}
			speed.set("TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI", strconv.FormatInt(moved>>32, 10))
			speed.set("TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO", strconv.FormatInt(moved&unset32, 10))
		}
	}
	root.drop("TRACK_LIST")
	track := &node{name: "TRACK"}
	track.set("CHANNEL_INDEX", "1")
	track.set("INTERLEAVE_INDEX", "1")
	if c.TrackName != "" {
		track.set("NAME", c.TrackName)
	}
	list := &node{name: "TRACK_LIST"}
	list.set("TRACK_COUNT", "1")
	list.kids = append(list.kids, track)
	root.kids = append(root.kids, list)
	return viewIXML(root), gone
}

// keep drops every child that is not named, and returns the names of those.
func (n *node) keep(names []string) (gone []string) {
	n.kids = slices.DeleteFunc(n.kids, func(k *node) bool {
		if slices.Contains(names, strings.ToUpper(k.name)) {
			return false
		}
		gone = append(gone, k.name)
		return true
	})
	return gone
}

// moved is the cue in the output, and false where it lies outside.
func (q Cue) moved(c Change) (Cue, bool) {
	from, to := q.Frame-c.FirstFrame, q.Frame+q.Frames-c.FirstFrame
	if q.Frames > 0 {
		from, to = max(0, from), min(to, c.Frames)
		if to <= from {
			return q, false
		}
		q.Frames = to - from
	} else if from < 0 || from >= c.Frames {
		return q, false
	}
	q.Frame = from
	if c.Private {
		q.Label, q.Note = "", ""
	}
	return q, true
}
