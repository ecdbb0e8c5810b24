package wav

// Metadata is what a file carries besides samples.
type Metadata struct {
	Bext *Bext       `json:"bext,omitempty"`
	IXML *IXML       `json:"ixml,omitempty"`
	Info []InfoEntry `json:"info,omitempty"`
	Cues []Cue       `json:"cues"`

	other []rawChunk // chunks of unknown meaning that may be carried
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

func (s *scan) metadata() (*Metadata, error) { return &Metadata{Cues: []Cue{}}, nil }
