package wav

// IXML is what an iXML chunk says about a take.
type IXML struct {
	Project string  `json:"project,omitempty"`
	Scene   string  `json:"scene,omitempty"`
	Take    string  `json:"take,omitempty"`
	Tape    string  `json:"tape,omitempty"`
	Note    string  `json:"note,omitempty"`
	Circled string  `json:"circled,omitempty"`
	FileUID string  `json:"file_uid,omitempty"`
	Speed   Speed   `json:"speed"`
	Tracks  []Track `json:"tracks,omitempty"`
	FileSet FileSet `json:"file_set"`

	root *node
}

// Speed is the SPEED of an iXML chunk. Numbers are 0 where they are not given.
type Speed struct {
	FileSampleRate      int    `json:"file_sample_rate_hz,omitempty"`
	DigitizerSampleRate int    `json:"digitizer_sample_rate_hz,omitempty"`
	BitDepth            int    `json:"bit_depth,omitempty"`
	TimecodeRate        string `json:"timecode_rate,omitempty"` // "30000/1001"
	TimecodeFlag        string `json:"timecode_flag,omitempty"` // DF or NDF
	Timestamp           *int64 `json:"timestamp_samples,omitempty"`
	TimestampRate       int    `json:"timestamp_rate_hz,omitempty"`
}

// Track is one track of an iXML chunk.
type Track struct {
	Channel    int    `json:"channel"`    // of the recorder, 1-based
	Interleave int    `json:"interleave"` // position in this file, 1-based
	Name       string `json:"name,omitempty"`
	Function   string `json:"function,omitempty"`
}

// FileSet names the files that belong together.
type FileSet struct {
	TotalFiles int    `json:"total_files,omitempty"`
	FamilyUID  string `json:"family_uid,omitempty"`
	FamilyName string `json:"family_name,omitempty"`
	Index      string `json:"index,omitempty"`
}

type node struct{}

func (x *IXML) body() []byte { return nil }
