package pipeline

// ScanSchema is the version of the form of a ScanResult.
const ScanSchema = "alidade-scan/1"

// ScanResult is what a beam hears of one take when it is steered to many
// directions. Its JSON form is what scan --json prints.
type ScanResult struct {
	Schema     string      `json:"schema"`
	Version    string      `json:"version"`
	CreatedUTC string      `json:"created_utc,omitempty"` // RFC 3339, absent when reproducible
	Take       Take        `json:"take"`
	Rig        RigSummary  `json:"rig"`
	Beam       ScanBeam    `json:"beam"`
	Segments   Segments    `json:"segments"`
	Reference  ScanLevel   `json:"reference"` // mean over the microphones
	Loudest    *ScanPlace  `json:"loudest"`
	BestGain   *ScanPlace  `json:"best_gain"` // direction of the largest SNR gain
	Angles     []ScanAngle `json:"angles"`
	Findings   []Finding   `json:"findings"`
}

// ScanBeam is how the beam was made, whatever the direction.
type ScanBeam struct {
	Ambiguity  string       `json:"ambiguity"` // what the rig cannot tell apart, in words
	Method     string       `json:"method"`    // of the tracks
	Weights    string       `json:"weights"`
	Taper      string       `json:"taper"`
	NullsDeg   [][2]float64 `json:"nulls_deg,omitempty"`
	FloorDB    Number       `json:"white_noise_gain_floor_db,omitempty"`
	HighpassHz Number       `json:"highpass_hz,omitempty"`
}

// ScanPlace is a direction and the figure it stands out by.
type ScanPlace struct {
	AzimuthDeg   float64 `json:"azimuth_deg"`
	ElevationDeg float64 `json:"elevation_deg"`
	LevelDBFS    Number  `json:"level_dbfs"`
	SNRGainDB    Number  `json:"snr_gain_db"`
}

// ScanLevel is the level of the take as it is.
type ScanLevel struct {
	LevelDBFS Number     `json:"level_dbfs"` // of all bands together
	Bands     []ScanBand `json:"bands"`
}

// ScanAngle is what the beam hears in one direction. Overall figures are those
// of the one-third octaves together.
type ScanAngle struct {
	AzimuthDeg       float64    `json:"azimuth_deg"`
	ElevationDeg     float64    `json:"elevation_deg"`
	CompassDeg       Number     `json:"compass_deg,omitempty"`
	LevelDBFS        Number     `json:"level_dbfs"`
	NoiseReductionDB Number     `json:"noise_reduction_db"`
	TargetChangeDB   Number     `json:"target_change_db"`
	SNRGainDB        Number     `json:"snr_gain_db"`
	SNRGainCI95      Interval   `json:"snr_gain_ci95_db"`
	Bands            []ScanBand `json:"bands"`
	Track            *ScanTrack `json:"track,omitempty"`
}

// ScanBand is one one-third octave of a direction.
type ScanBand struct {
	NominalHz        float64  `json:"nominal_hz"`
	CentreHz         float64  `json:"centre_hz"`
	LevelDBFS        Number   `json:"level_dbfs"`
	NoiseReductionDB Number   `json:"noise_reduction_db"`
	TargetChangeDB   Number   `json:"target_change_db"`
	SNRGainDB        Number   `json:"snr_gain_db"`
	SNRGainCI95      Interval `json:"snr_gain_ci95_db"`
	Flags            []string `json:"flags"` // sparse, target-unmeasurable
}

// ScanTrack is the track of one direction.
type ScanTrack struct {
	Output
	Kept bool `json:"kept"` // it was there already, made from the same with the same options
}
