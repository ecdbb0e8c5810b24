package pipeline

// PredictionSchema is the version of the form of a Prediction.
const PredictionSchema = "alidade-prediction/1"

// Prediction is what a beam on a rig can do, computed from its filters as they
// were built and from the places of the microphones, which are taken as
// omnidirectional in a free field. No take is in it. Its JSON form is what
// predict --json prints.
//
// Angles named _deg lie along the cut: from the axis of a line rig, 0 to 180;
// else azimuths, or elevations where the beam looks steeply up or down. Lists
// of them begin below the steered direction and end above it. Levels are re the
// steered direction.
type Prediction struct {
	Schema             string               `json:"schema"`
	Version            string               `json:"version"`
	Rig                RigSummary           `json:"rig"`
	Steer              Steer                `json:"steer"`
	SpeedOfSoundMS     float64              `json:"speed_of_sound_m_s"`
	SampleRateHz       int                  `json:"sample_rate_hz"`
	Answer             []string             `json:"answer"` // where the rig helps and by how much, in sentences
	GratingFreeBelowHz Number               `json:"grating_free_below_hz"`
	GratingEntries     []GratingEntry       `json:"grating_entries"` // of a line of equal spacings, up to half the rate
	Aperture           Aperture             `json:"aperture"`
	Cut                Cut                  `json:"cut"`
	Frequencies        []PredictedFrequency `json:"frequencies"`
	Bands              []PredictedBand      `json:"bands"` // one-third octaves
	Response           *PredictedResponse   `json:"response,omitempty"`
	Tolerance          *Tolerance           `json:"tolerance,omitempty"`
	Picture            *Response            `json:"picture,omitempty"` // what the page draws, where one is asked for
	Findings           []Finding            `json:"findings"`
}

// GratingEntry is a grating lobe coming into the visible region.
type GratingEntry struct {
	Order    int     `json:"order"` // m of cos θ = cos θ0 - mλ/d
	Hz       float64 `json:"hz"`
	AngleDeg float64 `json:"angle_deg"` // 0 or 180
}

// Aperture is how large the rig is to sound.
type Aperture struct {
	ExtentM          float64 `json:"extent_m"`           // largest distance between two microphones
	EffectiveM       float64 `json:"effective_m"`        // N times the spacing of a line of equal spacings, else the extent
	LowerUsefulHz    Number  `json:"lower_useful_hz"`    // one wavelength over the effective length
	HalfWavelengthHz Number  `json:"half_wavelength_hz"` // up to here no direction has a grating lobe; of a line of equal spacings
}

// Cut is the way through the directions that beamwidth and lobes are taken
// along.
type Cut struct {
	Name    string  `json:"name"`   // what the angle is
	AtDeg   float64 `json:"at_deg"` // of the steered direction
	LowDeg  float64 `json:"low_deg"`
	HighDeg float64 `json:"high_deg"`
	// DistanceM is the distance from the reference point that the sources along
	// the cut are taken at, that of a focus; null for far sources.
	DistanceM Number `json:"distance_m"`
}

// PredictedFrequency is what the beam does at one frequency.
type PredictedFrequency struct {
	Hz                 float64        `json:"hz"`
	BeamwidthDeg       Number         `json:"beamwidth_deg"` // between the half-power points; null where one of them does not exist
	EdgesDeg           [2]Number      `json:"edges_deg"`     // the half-power points
	FirstNullsDeg      []float64      `json:"first_nulls_deg"`
	HighestSideLobeDB  Number         `json:"highest_side_lobe_db"`
	SideLobeCount      int            `json:"side_lobe_count"`
	SideLobes          []PatternPoint `json:"side_lobes"`
	GratingLobesDeg    []float64      `json:"grating_lobes_deg"`
	PeakDeg            Number         `json:"peak_deg"` // of the main lobe: off the steered direction where the beam squints
	DirectivityIndexDB Number         `json:"directivity_index_db"`
	WhiteNoiseGainDB   Number         `json:"white_noise_gain_db"`
	DiffuseGainDB      Number         `json:"diffuse_gain_db"` // noise reduction in diffuse noise, target change apart
	NearFieldReachM    Number         `json:"near_field_reach_m"`
}

// PatternPoint is a level at an angle of the cut.
type PatternPoint struct {
	AngleDeg float64 `json:"angle_deg"`
	LevelDB  Number  `json:"level_db"`
}

// PredictedBand is the gain in signal-to-noise ratio in one band for noise of
// flat spectrum in it.
type PredictedBand struct {
	NominalHz          float64  `json:"nominal_hz"`
	CentreHz           float64  `json:"centre_hz"`
	LowHz              float64  `json:"low_hz"`
	HighHz             float64  `json:"high_hz"`
	PredictedWhiteDB   Number   `json:"predicted_white_db"`
	PredictedDiffuseDB Number   `json:"predicted_diffuse_db"`
	Flags              []string `json:"flags"` // grating, no-aperture
}

// PredictedResponse is the complex response along the cut, re the steered
// direction. A level is null where nothing is heard, and then the phase is too.
type PredictedResponse struct {
	AnglesDeg []float64  `json:"angles_deg"`
	Hz        []float64  `json:"hz"`
	LevelDB   [][]Number `json:"level_db"`  // [hz][angle]
	PhaseDeg  [][]Number `json:"phase_deg"` // [hz][angle]
}

// Tolerance is what errors of the rig do to the beam: rigs that differ from the
// rig file by normally distributed errors, independent from microphone to
// microphone but for the air. Levels are re the steered direction without
// errors unless they say otherwise.
type Tolerance struct {
	PlacementMM       float64       `json:"placement_mm"` // standard deviations
	GainErrorDB       float64       `json:"gain_error_db"`
	PhaseErrorDeg     float64       `json:"phase_error_deg"`
	TemperatureErrorC float64       `json:"temperature_error_c"`
	Trials            int           `json:"trials"`
	Seed              uint64        `json:"seed"`
	Frequencies       []ToleranceAt `json:"frequencies"`
}

// ToleranceAt is what the errors do at one frequency.
type ToleranceAt struct {
	Hz              float64         `json:"hz"`
	Steered         TolerantLevel   `json:"steered"`
	HighestSideLobe *TolerantLevel  `json:"highest_side_lobe"`
	FirstNulls      []TolerantLevel `json:"first_nulls"`
	// ErrorFloorDB is the mean level that the errors alone leave in every
	// direction, re the mean level in the steered one.
	ErrorFloorDB Number `json:"error_floor_db"`
}

// TolerantLevel is a level of the response with errors. Expected is the mean
// power in closed form, without the error of the temperature; the percentiles
// are of the trials, with it.
type TolerantLevel struct {
	AngleDeg   float64 `json:"angle_deg"`
	LevelDB    Number  `json:"level_db"` // without errors
	ExpectedDB Number  `json:"expected_db"`
	P5DB       Number  `json:"p5_db"`
	P50DB      Number  `json:"p50_db"`
	P95DB      Number  `json:"p95_db"`
}
