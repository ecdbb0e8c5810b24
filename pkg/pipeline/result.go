package pipeline

// Version of the report format. A change that removes or redefines a key
// raises it.
const ReportSchema = "alidade-report/1"

// Number is a measured quantity in the unit of its key, or nil where it could
// not be measured; then a finding says why.
type Number = *float64

// Interval is a 95 % confidence interval, lower and upper end in the unit of
// its key, or nil.
type Interval = *[2]float64

// Severity of a finding.
type Severity string

// The severities, from a remark to a fault.
const (
	Info    Severity = "info"
	Warning Severity = "warning"
	Error   Severity = "error"
)

// Finding is something a person should know about a take or its result.
type Finding struct {
	Code     string    `json:"code"`               // stable, lower case with dashes
	Severity Severity  `json:"severity"`           //
	Message  string    `json:"message"`            // what, with numbers, and what to do
	Channels []int     `json:"channels,omitempty"` // channels concerned, counted from 1
	Bands    []float64 `json:"bands,omitempty"`    // nominal mid-band frequencies concerned, Hz
}

// Result is everything that is known about one steered take, as plain data.
// Its JSON form is the report.
type Result struct {
	Schema       string      `json:"schema"`
	Version      string      `json:"version"`               // program version
	CreatedUTC   string      `json:"created_utc,omitempty"` // RFC 3339, absent when reproducible
	Take         Take        `json:"take"`
	Rig          RigSummary  `json:"rig"`
	Steer        Steer       `json:"steer"`
	Direction    *Direction  `json:"direction,omitempty"` // when estimated
	Segments     Segments    `json:"segments"`
	Bands        []Band      `json:"bands"`        // one-third octaves
	OctaveBands  []Band      `json:"octave_bands"` // octaves
	Overall      Overall     `json:"overall"`
	Channels     []Channel   `json:"channels"`
	Clocks       *Clocks     `json:"clocks,omitempty"` // of --align-clocks
	Findings     []Finding   `json:"findings"`
	Output       Output      `json:"output"`
	OtherOutputs []Output    `json:"other_outputs,omitempty"` // the reference track
	Provenance   *Provenance `json:"provenance,omitempty"`
	Pictures     *Pictures   `json:"pictures,omitempty"`
	Preview      *Preview    `json:"preview,omitempty"` // only when asked for
}

// Provenance is what is needed to make the result again.
type Provenance struct {
	Command []string `json:"command,omitempty"` // the command line, absent under --private
	Kernel  string   `json:"kernel"`            // set of compute kernels
}

// File is one input file.
type File struct {
	Path   string `json:"path"`
	SHA256 string `json:"sha256"`
}

// Take is what was recorded.
type Take struct {
	Files        []File  `json:"files"`
	Channels     int     `json:"channels"`
	SampleRateHz int     `json:"sample_rate_hz"`
	Frames       int64   `json:"frames"`
	DurationS    float64 `json:"duration_s"`
	StartTime    string  `json:"start_time,omitempty"` // time of day of frame 0, where the take has a time reference
	Encoding     string  `json:"encoding"`
}

// RigSummary is the rig in force.
type RigSummary struct {
	Name            string     `json:"name"`
	SHA256          string     `json:"sha256"`
	PositionsSHA256 string     `json:"positions_sha256,omitempty"` // of the CSV file that the rig file names
	MicrophonesUsed int        `json:"microphones_used"`
	Reference       string     `json:"reference"`
	ReferencePointM [3]float64 `json:"reference_point_m"`
	SpeedOfSoundMS  float64    `json:"speed_of_sound_m_s"`
	SpeedRule       string     `json:"speed_of_sound_rule"`
	Air             string     `json:"air"`
	Shape           string     `json:"shape"` // line, flat or solid
	// FullScaleDBSPL is the sound pressure level of a full-scale sine, dB re 20
	// µPa; absent where no sensitivity is known.
	FullScaleDBSPL Number   `json:"full_scale_db_spl,omitempty"`
	Mics           []RigMic `json:"microphones"`
}

// RigMic is one microphone of the rig in force.
type RigMic struct {
	Name     string     `json:"name"`
	Channel  int        `json:"channel"`
	AtM      [3]float64 `json:"at_m"`
	GainDB   float64    `json:"gain_db"`
	DelayUS  float64    `json:"delay_us"`
	ClockPPM float64    `json:"clock_ppm,omitempty"` // as stated or measured
	Polarity string     `json:"polarity"`            // normal or inverted
	Used     bool       `json:"used"`
	// SensitivityDBFS is what the raw channel reads at 94 dB SPL.
	SensitivityDBFS Number `json:"sensitivity_dbfs,omitempty"`
}

// Clocks are the clocks of the channels as --align-clocks measured them: one
// for each group of channels. Without groups they could not be measured, and a
// finding says why.
type Clocks struct {
	Groups           []ClockGroup `json:"groups"`
	StandardErrorPPM Number       `json:"standard_error_ppm"`
	SpanS            Number       `json:"span_s"`       // from the first to the last second behind the figure
	SourceMoved      bool         `json:"source_moved"` // and was told from the clocks by the geometry
}

// ClockGroup is channels that share a clock.
type ClockGroup struct {
	Channels []int   `json:"channels"`
	PPM      float64 `json:"ppm"` // positive: fast; against the clock that clock_ppm 0 stands for
}

// Steer is where and how the beam was pointed.
type Steer struct {
	Kind          string       `json:"kind"` // given, focus, estimated, focus-estimated or followed
	AzimuthDeg    float64      `json:"azimuth_deg"`
	ElevationDeg  float64      `json:"elevation_deg"`
	CompassDeg    Number       `json:"compass_deg,omitempty"`
	PointM        *[3]float64  `json:"point_m,omitempty"`
	DistanceM     Number       `json:"distance_m,omitempty"` // of the point from the reference point
	Ambiguity     string       `json:"ambiguity"`            // what the rig cannot tell apart, in words
	Method        string       `json:"method"`               // sinc, farrow or spectral
	MethodErrorDB float64      `json:"method_error_db"`      // stated largest error of the method, dB re the signal
	Weights       string       `json:"weights"`
	Taper         string       `json:"taper"`
	NullsDeg      [][2]float64 `json:"nulls_deg,omitempty"` // azimuth and elevation
	FloorDB       Number       `json:"white_noise_gain_floor_db,omitempty"`
	UndoSpreading bool         `json:"undo_spreading"`
	Changes       *Changes     `json:"weights_over_time,omitempty"` // under --reestimate-every
	Postfilter    *Postfilter  `json:"postfilter,omitempty"`
	Predicted     *Predicted   `json:"predicted,omitempty"` // gains overall, where the noise was measured
	HighpassHz    Number       `json:"highpass_hz,omitempty"`
	GainDB        float64      `json:"gain_db"` // applied to the track, taken out of every level here
	FilterTaps    int          `json:"filter_taps"`
}

// Direction is an estimated direction.
type Direction struct {
	AzimuthDeg       float64           `json:"azimuth_deg"`
	ElevationDeg     float64           `json:"elevation_deg"`
	DistanceM        Number            `json:"distance_m,omitempty"`
	StandardErrorDeg Number            `json:"standard_error_deg"`
	Confidence       Number            `json:"confidence"`
	Windows          []DirectionWindow `json:"windows"`
}

// DirectionWindow is the direction in one window of time.
type DirectionWindow struct {
	StartS           float64 `json:"start_s"`
	EndS             float64 `json:"end_s"`
	AzimuthDeg       Number  `json:"azimuth_deg"`
	ElevationDeg     Number  `json:"elevation_deg"`
	StandardErrorDeg Number  `json:"standard_error_deg"`
	Confidence       Number  `json:"confidence"`
}

// Segments are the stretches of time behind the gain figures, seconds from the
// take's first frame, half-open.
type Segments struct {
	Source string       `json:"source"` // isolated, given, cues, automatic or none
	Noise  [][2]float64 `json:"noise"`
	Target [][2]float64 `json:"target"`

	// The same as times of day HH:MM:SS.sss, where the take has a time reference.
	NoiseTime  [][2]string `json:"noise_time,omitempty"`
	TargetTime [][2]string `json:"target_time,omitempty"`
}

// Band is what happened in one band.
type Band struct {
	NominalHz float64 `json:"nominal_hz"`
	CentreHz  float64 `json:"centre_hz"`
	LowHz     float64 `json:"low_hz"`
	HighHz    float64 `json:"high_hz"`

	NoiseInDBFS        Number   `json:"noise_in_dbfs"`
	NoiseOutDBFS       Number   `json:"noise_out_dbfs"`
	NoiseReductionDB   Number   `json:"noise_reduction_db"`
	NoiseReductionCI95 Interval `json:"noise_reduction_ci95_db"`
	TargetInDBFS       Number   `json:"target_in_dbfs"`
	TargetOutDBFS      Number   `json:"target_out_dbfs"`
	// The same levels re 20 µPa, where the rig's sensitivity is known.
	NoiseInDBSPL         Number   `json:"noise_in_db_spl,omitempty"`
	NoiseOutDBSPL        Number   `json:"noise_out_db_spl,omitempty"`
	TargetInDBSPL        Number   `json:"target_in_db_spl,omitempty"`
	TargetOutDBSPL       Number   `json:"target_out_db_spl,omitempty"`
	TargetChangeDB       Number   `json:"target_change_db"`
	TargetChangeCI95     Interval `json:"target_change_ci95_db"`
	SNRInDB              Number   `json:"snr_in_db"`
	SNROutDB             Number   `json:"snr_out_db"`
	SNRGainDB            Number   `json:"snr_gain_db"`
	SNRGainCI95          Interval `json:"snr_gain_ci95_db"`
	OverBestMicrophoneDB Number   `json:"snr_gain_over_best_microphone_db"`
	OverNamedMicrophone  Number   `json:"snr_gain_over_named_microphone_db,omitempty"`

	PredictedWhiteDB   Number   `json:"predicted_white_db"`
	PredictedDiffuseDB Number   `json:"predicted_diffuse_db"`
	PredictedInNoiseDB Number   `json:"predicted_measured_noise_db"` // in the noise as it was measured; one-third octaves only
	Flags              []string `json:"flags"`                       // grating, no-aperture, sparse, target-unmeasurable
}

// Overall sums the bands up.
type Overall struct {
	SNRGainDB               Number   `json:"snr_gain_db"`
	SNRGainCI95             Interval `json:"snr_gain_ci95_db"`
	SpeechWeightedSNRGainDB Number   `json:"speech_weighted_snr_gain_db"`
	NoiseReductionDB        Number   `json:"noise_reduction_db"`
	NoiseReductionCI95      Interval `json:"noise_reduction_ci95_db"`
	NoiseReductionADB       Number   `json:"noise_reduction_a_weighted_db"`
	TargetChangeDB          Number   `json:"target_change_db"`
	TargetChangeCI95        Interval `json:"target_change_ci95_db"`
	BestMicrophone          string   `json:"best_microphone,omitempty"`
	OverBestMicrophoneDB    Number   `json:"snr_gain_over_best_microphone_db"`
}

// Channel is one channel of the take.
type Channel struct {
	Channel       int      `json:"channel"`
	Name          string   `json:"name"`
	Used          bool     `json:"used"`
	RMSDBFS       Number   `json:"rms_dbfs"`             // AES17: a full-scale sine reads 0
	RMSDBSPL      Number   `json:"rms_db_spl,omitempty"` // re 20 µPa, where the channel's sensitivity is known
	PeakDBFS      Number   `json:"peak_dbfs"`            // re 1.0; null for digital silence
	ClippedFrames int64    `json:"clipped_frames"`
	DC            float64  `json:"dc"` // mean, re 1.0
	Flags         []string `json:"flags"`
}

// Output is one written track.
type Output struct {
	Path        string  `json:"path"`
	SHA256      string  `json:"sha256"`
	Format      string  `json:"format"`
	Frames      int64   `json:"frames"`
	PeakDBFS    Number  `json:"peak_dbfs"`
	DitherSeed  *uint64 `json:"dither_seed,omitempty"`
	FirstFrame  int64   `json:"first_frame"` // of the take; above 0 for an excerpt
	ReadBack    string  `json:"read_back"`   // compared, or why not
	Description string  `json:"description,omitempty"`
}
