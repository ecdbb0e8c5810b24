package wav

import (
	"encoding/binary"
	"slices"
	"strings"
)

// Cue is a marked place in a file, with what the adtl list says about it.
type Cue struct {
	ID     uint32 `json:"id"`
	Frame  int64  `json:"frame"`            // 0-based
	Frames int64  `json:"frames,omitempty"` // length of the marked region, 0 is a point
	Label  string `json:"label,omitempty"`
	Note   string `json:"note,omitempty"`
}

// InfoEntry is one text of a LIST INFO chunk.
type InfoEntry struct {
	ID   string `json:"id"` // "INAM", "IART", ...
	Text string `json:"text"`
}

const (
	cueBytes    = 24
	maxCues     = 1 << 16
	maxInfo     = 256
	maxListText = 1 << 16 // of one entry of INFO or adtl
)

// parseCues reads a cue body [IBM/Microsoft 1991]: u32 count, then 24 bytes
// each: id, position, chunk, chunk start, block start, sample offset. For
// samples in a data chunk the offset is the frame; where it is 0 and the
// position is not, the position is taken.
func parseCues(b []byte) (list []Cue) {
	if len(b) < 4 {
		return nil
	}
	le := binary.LittleEndian
	n := min(int64(le.Uint32(b)), int64(len(b)-4)/cueBytes, maxCues)
	list = make([]Cue, 0, n)
	for k := range n {
		c := b[4+k*cueBytes:]
		frame := int64(le.Uint32(c[20:]))
		if frame == 0 {
			frame = int64(le.Uint32(c[4:]))
		}
		list = append(list, Cue{ID: le.Uint32(c), Frame: frame})
	}
	return list
}

// subChunks calls visit for every chunk within a list. Pads that are missing,
// as some writers leave them out, are made up for.
func subChunks(b []byte, visit func(id string, body []byte)) {
	for len(b) >= 8 {
		n := int64(binary.LittleEndian.Uint32(b[4:]))
		id := string(b[:4])
		if n > int64(len(b)-8) {
			n = int64(len(b) - 8)
		}
		visit(id, b[8:8+n])
		end := 8 + n
		if n%2 == 1 && end < int64(len(b)) && (b[end] == 0 || end+1 == int64(len(b))) {
			end++
		}
		b = b[end:]
	}
}

// cuesByID finds cues by their ids; of several with one id, the first.
func cuesByID(cues []Cue) map[uint32]*Cue {
	byID := make(map[uint32]*Cue, len(cues))
	for k := range cues {
		if byID[cues[k].ID] == nil {
			byID[cues[k].ID] = &cues[k]
		}
	}
	return byID
}

// labelCues adds what an adtl list says to the cues it is about.
func labelCues(byID map[uint32]*Cue, b []byte) {
	subChunks(b, func(id string, body []byte) {
		if len(body) < 4 {
			return
		}
		cue := byID[binary.LittleEndian.Uint32(body)]
		if cue == nil {
			return
		}
		text := body[4:min(len(body), 4+maxListText)]
		switch id {
		case "labl":
			cue.Label = textOf(text)
		case "note":
			cue.Note = textOf(text)
		case "ltxt":
			if len(body) >= 8 {
				cue.Frames = int64(binary.LittleEndian.Uint32(body[4:]))
			}
		}
	})
}

// parseInfo adds the entries of a LIST INFO body, behind its type, to list.
func parseInfo(list []InfoEntry, b []byte) []InfoEntry {
	subChunks(b, func(id string, body []byte) {
		if len(list) == maxInfo || !printable(id) {
			return
		}
		if text := textOf(body[:min(len(body), maxListText)]); text != "" {
			list = append(list, InfoEntry{ID: id, Text: text})
		}
	})
	return list
}

func printable(id string) bool {
	return strings.IndexFunc(id, func(r rune) bool { return r < 0x20 || r > 0x7e }) < 0
}

// cueChunks makes the cue chunk and the adtl list again. Cues beyond 32 bits
// have no place in them and are left out.
func cueChunks(cues []Cue) (list []rawChunk) {
	le := binary.LittleEndian
	cues = slices.DeleteFunc(slices.Clone(cues), func(c Cue) bool { return c.Frame < 0 || c.Frame > unset32 })
	if len(cues) == 0 {
		return nil
	}
	body := le.AppendUint32(nil, uint32(len(cues)))
	adtl := []byte("adtl")
	for _, c := range cues {
		body = le.AppendUint32(body, c.ID)
		body = le.AppendUint32(body, uint32(c.Frame))
		body = append(body, "data\x00\x00\x00\x00\x00\x00\x00\x00"...)
		body = le.AppendUint32(body, uint32(c.Frame))
		for _, x := range []struct{ id, text string }{{"labl", c.Label}, {"note", c.Note}} {
			if x.text != "" {
				adtl = appendChunk(adtl, rawChunk{x.id, append(le.AppendUint32(nil, c.ID), x.text+"\x00"...)})
			}
		}
		if c.Frames > 0 && c.Frames <= unset32 {
			region := le.AppendUint32(le.AppendUint32(nil, c.ID), uint32(c.Frames))
			adtl = appendChunk(adtl, rawChunk{"ltxt", append(region, "rgn \x00\x00\x00\x00\x00\x00\x00\x00"...)})
		}
	}
	list = append(list, rawChunk{"cue ", body})
	if len(adtl) > 4 {
		list = append(list, rawChunk{"LIST", adtl})
	}
	return list
}

// infoChunk makes a LIST INFO again, or nothing.
func infoChunk(info []InfoEntry) []rawChunk {
	body := []byte("INFO")
	for _, e := range info {
		if len(e.ID) == 4 && e.Text != "" {
			body = appendChunk(body, rawChunk{e.ID, []byte(e.Text + "\x00")})
		}
	}
	if len(body) == 4 {
		return nil
	}
	return []rawChunk{{"LIST", body}}
}
