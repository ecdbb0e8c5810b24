package pipeline

// Pictures is what the page draws beyond the figures: all of it may be absent,
// and then the page does without.
type Pictures struct {
	Reference *Spectrogram `json:"reference,omitempty"` // the reference, gain corrections applied
	Output    *Spectrogram `json:"output,omitempty"`    // the beam, without the gain of the track; same axes and scale
	Response  *Response    `json:"response,omitempty"`
	Scan      *Scan        `json:"scan,omitempty"`
}

// Levels is a grid of levels, a byte each.
type Levels struct {
	Rows    int     `json:"rows"`
	Columns int     `json:"columns"`
	LowDB   float64 `json:"low_db"`  // level of the byte 0, and of everything below
	HighDB  float64 `json:"high_db"` // level of the byte 255, and of everything above
	// Bytes holds Rows times Columns bytes, row after row:
	// level = LowDB + (HighDB-LowDB)·byte/255.
	Bytes []byte `json:"bytes"`
}

// Spectrogram is the level of a track over time and frequency.
type Spectrogram struct {
	Of     string    `json:"of,omitempty"` // whose: the microphone that stands for the reference, or empty
	StartS float64   `json:"start_s"`      // of the first column, from the take's first frame
	StepS  float64   `json:"step_s"`       // from column to column; at most about 1200 columns are worth drawing
	Hz     []float64 `json:"hz"`           // middle of each row, ascending, evenly spaced on a logarithmic axis
	Levels Levels    `json:"levels"`       // [frequency][time], dBFS
}

// Response is what the weights in force let through.
type Response struct {
	// AnglesDeg are the azimuths of the columns, ascending and evenly spaced.
	AnglesDeg    []float64 `json:"angles_deg"`
	ElevationDeg float64   `json:"elevation_deg"` // of all of them
	// DistanceM is how far from the reference point the sources are taken to be,
	// that of a focus; null for far sources.
	DistanceM Number    `json:"distance_m"`
	Hz        []float64 `json:"hz"`     // of the rows, ascending, evenly spaced on a logarithmic axis
	Levels    Levels    `json:"levels"` // [frequency][angle], dB re the steered direction
	// GratingFreeBelowHz is the frequency from which on a grating lobe lies in
	// the visible region.
	GratingFreeBelowHz Number `json:"grating_free_below_hz"`
	Lobes              []Lobe `json:"lobes"` // at a few frequencies
}

// Lobe is a lobe of the response at one frequency.
type Lobe struct {
	Hz         float64 `json:"hz"`
	AzimuthDeg float64 `json:"azimuth_deg"`
	LevelDB    float64 `json:"level_db"` // re the steered direction
	Kind       string  `json:"kind"`     // main, side or grating
}

// Scan is the level of the beam steered to many angles.
type Scan struct {
	AnglesDeg []float64 `json:"angles_deg"` // of the columns, ascending and evenly spaced
	LevelDBFS []Number  `json:"level_dbfs"` // overall, by angle
	SNRGainDB []Number  `json:"snr_gain_db"`
	NominalHz []float64 `json:"nominal_hz"` // bands of the rows, ascending
	Levels    Levels    `json:"levels"`     // [band][angle], dBFS
}

// Preview is a pair of listening excerpts: the reference and the steered track
// over the same frames. It carries people's voices wherever the report goes.
type Preview struct {
	StartS       float64 `json:"start_s"` // from the take's first frame
	EndS         float64 `json:"end_s"`
	SampleRateHz int     `json:"sample_rate_hz"`
	// GainDB was applied to both, so that the louder one peaks at -6 dBFS; both
	// begin and end with a fade of 50 ms.
	GainDB    float64 `json:"gain_db"`
	Reference Clip    `json:"reference"`
	Output    Clip    `json:"output"`
}

// Clip is one listening excerpt.
type Clip struct {
	LevelDBFS float64 `json:"level_dbfs"` // of the whole clip as it stands, for matching by level
	PeakDBFS  float64 `json:"peak_dbfs"`
	Audio     []byte  `json:"audio"` // a FLAC file of one channel, 16 bit
}
