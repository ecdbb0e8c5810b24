package wav

import (
	"cmp"
	"slices"
	"strconv"
	"strings"
)

// Caps on metadata; what is beyond them is left out with a warning.
const (
	maxBext     = 1 << 20
	maxList     = 4 << 20
	maxOther    = 1 << 20
	maxMetadata = 8 << 20 // in all
)

// Metadata is what a file carries besides samples. A nil *Metadata carries
// nothing.
type Metadata struct {
	Bext *Bext       `json:"bext,omitempty"`
	IXML *IXML       `json:"ixml,omitempty"`
	Info []InfoEntry `json:"info,omitempty"`
	Cues []Cue       `json:"cues"` // in the order of their frames

	other []rawChunk // chunks of unknown meaning that may be carried
}

// bound lists the chunks that hold for the samples they came with and no
// others, or fill room, and so are never carried as they are.
var bound = []string{"fmt ", "data", "fact", "ds64", "JUNK", "junk", "FLLR", "PAD ", "pad ", "Fake", "PEAK", "levl", "smpl",
	"inst", "plst", "chna", "axml", "bxml", "minf", "elm1", "regn", "umid", "wavl", "slnt", "r64m", "acid", "strc", "DGDA",
	"afsp", "clm ", "bext", "iXML", "cue ", "LIST"}

// metadata reads the chunks that are understood, and keeps others.
func (s *scan) metadata() (*Metadata, error) {
	m := &Metadata{Cues: []Cue{}}
	total := int64(0)
	read := func(c Chunk, limit int64) ([]byte, error) {
		if c.Size > limit || total+c.Size > maxMetadata {
			s.warn(WarnMetadata, c.Offset, "%s chunk of %d bytes is left unread: %d are the most", idText(c.ID), c.Size, min(limit, maxMetadata-total))
			return nil, nil
		}
		total += c.Size
		return s.bytesAt(c.body, int(c.Size))
	}
	var labels [][]byte
	sawIXML := false
	for _, c := range s.chunks {
		var b []byte
		var err error
		switch c.ID {
		case "bext":
			if b, err = read(c, maxBext); b != nil && m.Bext == nil {
				if m.Bext = parseBext(b); m.Bext == nil {
					s.warn(WarnMetadata, c.Offset, "bext chunk has %d bytes: too few for its time reference", len(b))
				}
			}
		case "iXML":
			if b, err = read(c, maxIXML); b != nil && !sawIXML {
				sawIXML = true
				whole := false
				if m.IXML, whole = parseIXML(b); m.IXML == nil {
					s.warn(WarnMetadata, c.Offset, "iXML chunk holds no BWFXML element")
				} else if !whole {
					s.warn(WarnMetadata, c.Offset, "iXML chunk is not well formed or too large: it was read in part")
				}
			}
		case "cue ":
			if b, err = read(c, maxList); b != nil && len(m.Cues) == 0 {
				if cues := parseCues(b); len(cues) > 0 {
					m.Cues = cues
				}
			}
		case "LIST":
			if b, err = read(c, maxList); len(b) >= 4 {
				switch string(b[:4]) {
				case "INFO":
					m.Info = parseInfo(m.Info, b[4:])
				case "adtl":
					labels = append(labels, b[4:])
				}
			}
		default:
			if slices.Contains(bound, c.ID) || len(c.ID) != 4 || c.Size == 0 {
				continue
			}
			if b, err = read(c, maxOther); b != nil {
				m.other = append(m.other, rawChunk{c.ID, b})
			}
		}
		if err != nil {
			return nil, err
		}
	}
	if byID := cuesByID(m.Cues); len(byID) > 0 {
		for _, b := range labels {
			labelCues(byID, b)
		}
	}
	m.Cues = slices.DeleteFunc(m.Cues, func(c Cue) bool { return c.Frame > s.head.Frames })
	slices.SortStableFunc(m.Cues, func(a, b Cue) int { return cmp.Compare(a.Frame, b.Frame) })
	if m.Bext != nil && m.IXML != nil && m.IXML.Speed.Timestamp != nil && m.Bext.TimeReference != 0 && *m.IXML.Speed.Timestamp != m.Bext.TimeReference {
		s.warn(WarnTime, 0, "bext gives the time reference %d, iXML %d: that of bext is taken", m.Bext.TimeReference, *m.IXML.Speed.Timestamp)
	}
	return m, nil
}

// TrackNames returns the names of the channels, by their position in the file,
// from the tracks of iXML, else from lines sTRKn=name of the bext description;
// "" where a channel has none.
func (m *Metadata) TrackNames(channels int) []string {
	names := make([]string, channels)
	if m.IXML != nil {
		for _, t := range m.IXML.Tracks {
			if t.Interleave >= 1 && t.Interleave <= channels && names[t.Interleave-1] == "" {
				names[t.Interleave-1] = t.Name
			}
		}
	}
	if m.Bext == nil || slices.ContainsFunc(names, func(n string) bool { return n != "" }) {
		return names
	}
	for _, line := range strings.FieldsFunc(m.Bext.Description, func(r rune) bool { return r == '\r' || r == '\n' }) {
		key, name, ok := strings.Cut(line, "=")
		digits, is := strings.CutPrefix(strings.TrimLeft(key, "sdzSDZ"), "TRK")
		if k, err := strconv.Atoi(digits); ok && is && err == nil && k >= 1 && k <= channels {
			names[k-1] = strings.TrimSpace(name)
		}
	}
	return names
}

// before are the chunks that stand before the samples, so that they are found
// without walking over them.
func (m *Metadata) before() (list []rawChunk) {
	if m == nil {
		return nil
	}
	if m.Bext != nil {
		list = append(list, rawChunk{"bext", m.Bext.body()})
	}
	if m.IXML != nil {
		list = append(list, rawChunk{"iXML", m.IXML.body()})
	}
	return list
}

// behind are the chunks that stand behind the samples.
func (m *Metadata) behind() []rawChunk {
	if m == nil {
		return nil
	}
	list := append(cueChunks(m.Cues), infoChunk(m.Info)...)
	return append(list, m.other...)
}

// Description is a file as `inspect` shows it; its JSON keys are stable.
type Description struct {
	Path      string    `json:"path"`
	Container Container `json:"container"`
	Encoding  Encoding  `json:"encoding"`
	Bits      int       `json:"bits"`
	ValidBits int       `json:"valid_bits"`
	Channels  int       `json:"channels"`
	Rate      int       `json:"sample_rate_hz"`
	Frames    int64     `json:"frames"`
	StartTime string    `json:"start_time,omitempty"` // HH:MM:SS.sss of frame 0
	Timecode  string    `json:"timecode,omitempty"`   // HH:MM:SS:FF of frame 0

	Extensible  bool     `json:"extensible"`
	ChannelMask uint32   `json:"channel_mask"`
	SubFormat   string   `json:"sub_format,omitempty"`
	TrackNames  []string `json:"track_names,omitempty"` // by channel, "" without one

	Metadata
	Chunks   []Chunk   `json:"chunks"`
	Warnings []Warning `json:"warnings"`
}

// Describe returns everything but the samples. The path is the caller's.
func (r *Reader) Describe(path string) Description {
	h := r.head
	d := Description{
		Path: path, Container: h.Container, Encoding: h.Encoding, Bits: h.Bits, ValidBits: h.ValidBits, Channels: h.Channels,
		Rate: h.Rate, Frames: h.Frames, Extensible: h.Extensible, ChannelMask: h.ChannelMask, SubFormat: h.SubFormat,
		Metadata: *r.meta, Chunks: r.Chunks(), Warnings: append([]Warning{}, r.Warnings()...),
	}
	if names := r.meta.TrackNames(h.Channels); slices.ContainsFunc(names, func(n string) bool { return n != "" }) {
		d.TrackNames = names
	}
	if t, ok := r.meta.TimeBase(h.Rate); ok {
		d.StartTime = t.Time(0)
		if label, err := t.Timecode(0); err == nil {
			d.Timecode = label
		}
	}
	return d
}
