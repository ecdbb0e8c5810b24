package pipeline

// CalibrationSchema is the version of the calibration's JSON form.
const CalibrationSchema = "alidade-calibration/1"

// The kinds of a calibration.
const (
	CalibratedChannels  = "channels"   // gain, delay and polarity from one known source
	CalibratedLevels    = "calibrator" // sensitivity from a sound level calibrator
	CalibratedPositions = "positions"  // places from sounds of unknown direction
)

// Calibration is what a calibration found, and the rig file it wrote, as plain
// data. Uncertainties are expanded ones: twice the combined standard
// uncertainty (k = 2, about 95 %) [JCGM 100:2008, 6.2].
type Calibration struct {
	Schema      string             `json:"schema"`
	Version     string             `json:"version"`
	Kind        string             `json:"kind"` // channels, calibrator or positions
	Takes       []Take             `json:"takes"`
	Rig         RigSummary         `json:"rig"` // as it was
	Source      *CalibrationSource `json:"source,omitempty"`
	Heard       *Listening         `json:"heard,omitempty"`
	Survey      *Survey            `json:"survey,omitempty"` // of positions
	Calibrator  *CalibratorUsed    `json:"calibrator,omitempty"`
	Microphones []CalibratedMic    `json:"microphones"`
	Findings    []Finding          `json:"findings"`
	Output      CalibrationOutput  `json:"output"`
}

// CalibrationSource is the sound as it was said to be, and how well that is
// known (standard uncertainties).
type CalibrationSource struct {
	AzimuthDeg           float64     `json:"azimuth_deg"`
	ElevationDeg         float64     `json:"elevation_deg"`
	DistanceM            Number      `json:"distance_m"` // null: far
	PointM               *[3]float64 `json:"point_m,omitempty"`
	DirectionStdDeg      float64     `json:"direction_uncertainty_deg"`
	DistanceStdM         Number      `json:"distance_uncertainty_m"`
	TemperatureStdC      float64     `json:"temperature_uncertainty_c"`
	PlacementStdMM       float64     `json:"placement_uncertainty_mm"`
	SpeedOfSoundMS       float64     `json:"speed_of_sound_m_s"`
	MisfitUS             Number      `json:"misfit_us"` // of the arrivals with the rig's corrections so far, root mean square
	ChannelsHeard        int         `json:"channels_heard"`
	RelativeTo           string      `json:"relative_to"`
	PolarityByMajority   bool        `json:"polarity_by_majority"` // all channels turned over alike would not show
	DelayFromOneSideOnly bool        `json:"delay_from_one_side"`  // a misplaced microphone looks like a delay
}

// Listening is what of a take a calibration rests on.
type Listening struct {
	Sound      string  `json:"sound"` // steady or claps
	Frames     int     `json:"frames"`
	ShareTaken float64 `json:"share"` // of the take in which the source sounds
	LowHz      float64 `json:"low_hz"`
	HighHz     float64 `json:"high_hz"` // the middle 90 % of the information lies between
}

// CalibratedMic is one microphone before and after. What was not measured is
// null and keeps its old value.
type CalibratedMic struct {
	Channel int    `json:"channel"`
	Name    string `json:"name"`
	Used    bool   `json:"used"`
	Heard   bool   `json:"heard"` // its channel carries the sound

	GainBeforeDB      float64 `json:"gain_before_db"`
	GainDB            float64 `json:"gain_db"`
	GainUncertaintyDB Number  `json:"gain_uncertainty_db"`
	GainNoiseDB       Number  `json:"gain_noise_db,omitempty"` // standard error of the take's own
	GainBandsDB       Number  `json:"gain_bands_db,omitempty"` // standard deviation from octave to octave beyond it

	DelayBeforeUS      float64 `json:"delay_before_us"`
	DelayUS            float64 `json:"delay_us"`
	DelayUncertaintyUS Number  `json:"delay_uncertainty_us"`
	DelayNoiseUS       Number  `json:"delay_noise_us,omitempty"`

	PolarityBefore string `json:"polarity_before"`
	Polarity       string `json:"polarity"`
	SNRDB          Number `json:"snr_db,omitempty"`

	// The channel against the mean of all over frequency, gain and delay taken
	// out, and what its filter leaves; with --responses.
	Response     []CalibratedBand `json:"response,omitempty"`
	ResponseTaps int              `json:"response_taps,omitempty"`

	// Of levels: what 94 dB SPL reads before the gain correction.
	SensitivityBeforeDBFS    Number `json:"sensitivity_before_dbfs,omitempty"`
	SensitivityDBFS          Number `json:"sensitivity_dbfs,omitempty"`
	SensitivityUncertaintyDB Number `json:"sensitivity_uncertainty_db,omitempty"`
	// Tones are the seatings of the calibrator, one a take that has one.
	Tones []CalibratorTone `json:"tones,omitempty"`

	// Of positions: millimetres. The uncertainty is that of the rig's shape,
	// shift and turn of the whole left out.
	AtBeforeMM      *[3]float64 `json:"at_before_mm,omitempty"`
	AtMM            *[3]float64 `json:"at_mm,omitempty"`
	MovedMM         Number      `json:"moved_mm,omitempty"`
	AtUncertaintyMM *[3]float64 `json:"at_uncertainty_mm,omitempty"`
}

// CalibratedBand is one octave of a channel's response.
type CalibratedBand struct {
	CentreHz      float64 `json:"centre_hz"`
	LevelDB       float64 `json:"level_db"`
	PhaseDeg      float64 `json:"phase_deg"`
	UncertaintyDB float64 `json:"uncertainty_db"`
	LeftDB        float64 `json:"left_db"`
}

// CalibratorUsed is the sound level calibrator.
type CalibratorUsed struct {
	LevelDBSPL  float64 `json:"level_db_spl"`
	Hz          float64 `json:"frequency_hz"`
	Class       string  `json:"class"`        // LS, 1 or 2 of IEC 60942
	ToleranceDB float64 `json:"tolerance_db"` // of its level, half width
	GainsSet    bool    `json:"gains_set"`    // gain corrections follow the tone too: it was on every microphone
}

// CalibratorTone is the stretch of a take in which the calibrator sat on a
// microphone.
type CalibratorTone struct {
	Take  string  `json:"take"`
	FromS float64 `json:"from_s"`
	ToS   float64 `json:"to_s"`
	DBFS  float64 `json:"level_dbfs"`
	StdDB float64 `json:"fluctuation_db"`
	Hz    float64 `json:"frequency_hz"`
}

// Survey is what places were found from.
type Survey struct {
	Sounds           []SurveySound `json:"sounds"`
	ResidualUS       float64       `json:"residual_us"`        // root mean square
	ResidualBeforeUS float64       `json:"residual_before_us"` // with the places as they were
	ChiSquared       Number        `json:"chi_squared"`        // of the residuals, a degree of freedom
	Outliers         int           `json:"outliers"`           // arrivals that were given less weight
	Dimensions       int           `json:"dimensions"`         // of the rig, as far as the arrivals show: 1, 2 or 3
	Affine           bool          `json:"affine"`             // found but for a linear map, which the old rig file settles
	Observable       int           `json:"observable"`         // ways to move microphones that the arrivals determine
	Ways             int           `json:"ways"`               // of so many
	Modes            []SurveyMode  `json:"modes"`
	Unobservable     []string      `json:"unobservable"`
	PlacementStdMM   float64       `json:"placement_uncertainty_mm"`
	DelayStdUS       float64       `json:"delay_uncertainty_us"`
}

// SurveySound is one sound of a survey.
type SurveySound struct {
	Take         string  `json:"take"`
	AtS          float64 `json:"at_s"`
	AzimuthDeg   float64 `json:"azimuth_deg"`
	ElevationDeg float64 `json:"elevation_deg"`
}

// SurveyMode is a way in which microphones can move together, and the share of
// it that the arrivals determine.
type SurveyMode struct {
	Name  string  `json:"name"`
	Known float64 `json:"known"`
}

// CalibrationOutput is the rig file that was written.
type CalibrationOutput struct {
	Path   string `json:"path"`
	SHA256 string `json:"sha256"`
}
