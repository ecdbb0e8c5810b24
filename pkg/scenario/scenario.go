package scenario

import (
	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
)

// Limits of a scenario. They keep a mistyped file from filling the machine.
const (
	MinRateHz    = 8000
	MaxRateHz    = 384000
	MaxDurationS = 4 * 3600
	MaxChannels  = 256
	MaxSources   = 64
	MaxWaves     = 8192
	MaxWaypoints = 10000
)

// Scenario is an imagined take: a rig, what sounds around it, and what is
// wrong with it. Its json tags are the keys of the scenario file. Places are
// in rig coordinates; see rig for the axes.
type Scenario struct {
	Name      string         `json:"scenario" jsonschema:"minLength=1" jsonschema_description:"what the scenario is called"`
	RateHz    int            `json:"rate_hz" jsonschema:"minimum=8000,maximum=384000" jsonschema_description:"frames per second"`
	DurationS float64        `json:"duration_s" jsonschema:"exclusiveMinimum=0,maximum=14400" jsonschema_description:"length of the take, seconds"`
	Seed      uint64         `json:"seed,omitempty" jsonschema_description:"seed of everything random"`
	RigFile   string         `json:"rig_file,omitempty" jsonschema_description:"path of a rig file; instead of rig"`
	RigSheet  map[string]any `json:"rig,omitempty" jsonschema_description:"a rig as in a rig file; instead of rig_file"`
	Air       *Air           `json:"air,omitempty" jsonschema_description:"the real air; as the rig says if absent"`
	Room      *Room          `json:"room,omitempty" jsonschema_description:"a box-shaped room around the rig; open field if absent"`
	Sources   []Source       `json:"sources,omitempty" jsonschema:"maxItems=64" jsonschema_description:"what sounds"`
	Diffuse   []Diffuse      `json:"diffuse,omitempty" jsonschema:"maxItems=8" jsonschema_description:"noise from all sides"`

	SensorDBFS    *float64 `json:"sensor_dbfs,omitempty" jsonschema:"minimum=-200,maximum=0" jsonschema_description:"level of each channel's own white noise, dBFS; none if absent"`
	MisplacedMM   float64  `json:"misplaced_mm,omitempty" jsonschema:"minimum=0,maximum=1000" jsonschema_description:"standard deviation, each axis, of where the microphones really are against the rig file, millimetres"`
	PositionScale float64  `json:"position_scale,omitempty" jsonschema:"minimum=0.5,maximum=2" jsonschema_description:"real distances of the microphones over those of the rig file; 1 if absent"`
	Faults        []Fault  `json:"faults,omitempty" jsonschema:"maxItems=1024" jsonschema_description:"what is wrong with channels that the rig file does not know of"`

	// Rig is the rig as its file states it. Load fills it in from rig or
	// rig_file; a scenario built in code sets it.
	Rig *rig.Rig `json:"-"`
}

// Air is the air of a scenario. A nil field is as the rig says, else 20 °C, dry,
// 101.325 kPa.
type Air struct {
	TemperatureC *float64 `json:"temperature_c,omitempty" jsonschema:"minimum=-50,maximum=60" jsonschema_description:"degrees Celsius"`
	HumidityPct  *float64 `json:"humidity_pct,omitempty" jsonschema:"minimum=0,maximum=100" jsonschema_description:"relative humidity, per cent"`
	PressureKPa  *float64 `json:"pressure_kpa,omitempty" jsonschema:"minimum=50,maximum=110" jsonschema_description:"pressure, kilopascals"`
}

// Roles of a source.
const (
	RoleTarget     = "target"
	RoleInterferer = "interferer"
)

// Kinds of a source.
const (
	KindTalker = "talker" // voice of our own making: syllables, phrases, pauses
	KindNoise  = "noise"  // stationary Gaussian noise of a given spectrum
	KindTone   = "tone"   // sine
	KindChirp  = "chirp"  // exponential sweeps, one after the other
	KindClaps  = "claps"  // short bursts
	KindFile   = "file"   // samples that the caller provides
)

// Source is one thing that sounds. It is far (a direction alone) or at a point
// (point_m, or a direction with distance_m); it stands still (at) or moves
// (path).
type Source struct {
	Name      string      `json:"name" jsonschema:"minLength=1" jsonschema_description:"what the source is called"`
	Role      string      `json:"role,omitempty" jsonschema:"enum=target,enum=interferer" jsonschema_description:"target (if absent) or interferer"`
	Kind      string      `json:"kind" jsonschema:"enum=talker,enum=noise,enum=tone,enum=chirp,enum=claps,enum=file" jsonschema_description:"what it sounds like"`
	At        *Place      `json:"at,omitempty" jsonschema_description:"where it stands"`
	Path      []Waypoint  `json:"path,omitempty" jsonschema:"maxItems=10000" jsonschema_description:"where it moves; all places of one form"`
	LevelDBFS *float64    `json:"level_dbfs,omitempty" jsonschema:"minimum=-200,maximum=20" jsonschema_description:"level of its direct sound at the reference point while it is on (at its first place if it moves), dBFS"`
	SNRDB     *float64    `json:"snr_db,omitempty" jsonschema:"minimum=-100,maximum=200" jsonschema_description:"instead of level_dbfs, targets only: that level over the whole noise of one microphone, dB"`
	OnS       [][]float64 `json:"on_s,omitempty" jsonschema:"maxItems=1000" jsonschema_description:"when it sounds: [from, to] in seconds; always if absent"`

	Spectrum string  `json:"spectrum,omitempty" jsonschema:"enum=white,enum=pink,enum=outdoors,enum=speech" jsonschema_description:"of noise: white (if absent), pink, outdoors or speech"`
	Hz       float64 `json:"hz,omitempty" jsonschema:"minimum=0" jsonschema_description:"frequency of a tone (1000 if absent), pitch of a talker (115 if absent), hertz"`
	FromHz   float64 `json:"from_hz,omitempty" jsonschema:"minimum=0" jsonschema_description:"of a chirp: where it starts, hertz; 100 if absent"`
	ToHz     float64 `json:"to_hz,omitempty" jsonschema:"minimum=0" jsonschema_description:"of a chirp: where it ends, hertz; 0.4 of the rate if absent"`
	EveryS   float64 `json:"every_s,omitempty" jsonschema:"minimum=0" jsonschema_description:"from one chirp or clap to the next, seconds; 1 if absent"`
	File     string  `json:"file,omitempty" jsonschema_description:"of kind file: the one-channel recording"`
}

// Place is where a source is: a direction (far), a direction with a distance,
// or a point.
type Place struct {
	AzimuthDeg   *float64  `json:"azimuth_deg,omitempty" jsonschema:"minimum=-360,maximum=360" jsonschema_description:"azimuth seen from the reference point, degrees"`
	ElevationDeg float64   `json:"elevation_deg,omitempty" jsonschema:"minimum=-90,maximum=90" jsonschema_description:"elevation, degrees"`
	DistanceM    float64   `json:"distance_m,omitempty" jsonschema:"minimum=0,maximum=10000" jsonschema_description:"distance from the reference point, metres; far if absent"`
	PointM       []float64 `json:"point_m,omitempty" jsonschema:"minItems=3,maxItems=3" jsonschema_description:"instead: x, y, z from the rig's origin, metres"`
}

// Waypoint is a place on a path. Between waypoints azimuth (the short way
// round), elevation and distance, or the three coordinates, change linearly;
// before the first and after the last the source stands still.
type Waypoint struct {
	AtS float64 `json:"at_s" jsonschema_description:"when, in seconds of the source's time: sound given off at 0 passes the reference point at frame 0"`
	Place
}

// Spectra of noise.
const (
	SpectrumWhite    = render.SpectrumWhite
	SpectrumPink     = render.SpectrumPink     // power density falls by 3 dB an octave above 20 Hz
	SpectrumOutdoors = render.SpectrumOutdoors // wind and distant traffic: 5 dB an octave above 40 Hz, over a faint white floor
	SpectrumSpeech   = render.SpectrumSpeech   // long-term spectrum of speech
)

// Fields of diffuse noise.
const (
	FieldSpherical   = render.FieldSpherical   // from all sides alike: coherence sin(kd)/(kd)
	FieldCylindrical = render.FieldCylindrical // from all sides of the horizontal plane: coherence J0(kd)
)

// Methods of rendering diffuse noise.
const (
	MethodMixing = "mixing" // independent noises mixed to the wanted coherence
	MethodWaves  = "waves"  // a sum of many plane waves
)

// Diffuse is stationary Gaussian noise from all sides.
type Diffuse struct {
	LevelDBFS float64 `json:"level_dbfs" jsonschema:"minimum=-200,maximum=20" jsonschema_description:"level at each microphone, dBFS"`
	Spectrum  string  `json:"spectrum,omitempty" jsonschema:"enum=white,enum=pink,enum=outdoors,enum=speech" jsonschema_description:"white (if absent), pink, outdoors or speech"`
	Field     string  `json:"field,omitempty" jsonschema:"enum=spherical,enum=cylindrical" jsonschema_description:"spherical (if absent) or cylindrical"`
	Method    string  `json:"method,omitempty" jsonschema:"enum=mixing,enum=waves" jsonschema_description:"mixing (if absent) or waves"`
	Waves     int     `json:"waves,omitempty" jsonschema:"minimum=16,maximum=8192" jsonschema_description:"number of plane waves; 512 if absent"`
}

// Fault is what is wrong with some channels, beyond what the rig file states:
// the hardware has the opposite of the rig's corrections, so that a rig file
// without further faults is right.
type Fault struct {
	Channels []int     `json:"channels,omitempty" jsonschema:"maxItems=256" jsonschema_description:"channels counted from 1; all if absent"`
	GainDB   float64   `json:"gain_db,omitempty" jsonschema:"minimum=-200,maximum=60" jsonschema_description:"level error, dB"`
	DelayUS  float64   `json:"delay_us,omitempty" jsonschema:"minimum=-20000,maximum=20000" jsonschema_description:"lateness, microseconds"`
	Polarity string    `json:"polarity,omitempty" jsonschema:"enum=normal,enum=inverted" jsonschema_description:"inverted: the signal is turned over"`
	ClockPPM float64   `json:"clock_ppm,omitempty" jsonschema:"minimum=-1000,maximum=1000" jsonschema_description:"how much too fast the channel's clock runs, parts per million"`
	SwapWith int       `json:"swap_with,omitempty" jsonschema:"minimum=0,maximum=256" jsonschema_description:"the channel it is swapped with"`
	Dead     bool      `json:"dead,omitempty" jsonschema_description:"no microphone: only a step of one 16-bit unit up and down"`
	MovedMM  []float64 `json:"moved_mm,omitempty" jsonschema:"minItems=3,maxItems=3" jsonschema_description:"where the microphone really is against the rig file, x, y, z in millimetres"`
	DC       float64   `json:"dc,omitempty" jsonschema:"minimum=-1,maximum=1" jsonschema_description:"constant offset, full scale 1"`
	ClipDBFS *float64  `json:"clip_dbfs,omitempty" jsonschema:"minimum=-200,maximum=20" jsonschema_description:"the waveform is cut at the peak of a sine of this level"`

	ClippedFraction   float64  `json:"clipped_fraction,omitempty" jsonschema:"minimum=0,maximum=0.5" jsonschema_description:"the waveform of the mix is cut so that this share of its frames is touched"`
	HumDBFS           *float64 `json:"hum_dbfs,omitempty" jsonschema:"minimum=-200,maximum=0" jsonschema_description:"level of the mains hum's fundamental, dBFS"`
	HumHz             float64  `json:"hum_hz,omitempty" jsonschema:"minimum=0,maximum=1000" jsonschema_description:"its frequency; 50 if absent"`
	HumHarmonics      int      `json:"hum_harmonics,omitempty" jsonschema:"minimum=0,maximum=40" jsonschema_description:"number of partials, the fundamental included, each 1/n of the fundamental; 5 if absent"`
	WindDBFS          *float64 `json:"wind_dbfs,omitempty" jsonschema:"minimum=-200,maximum=20" jsonschema_description:"level of wind noise in gusts, independent on each channel, dBFS"`
	HandlingDBFS      *float64 `json:"handling_dbfs,omitempty" jsonschema:"minimum=-200,maximum=20" jsonschema_description:"peak of handling thumps, dBFS of a sine of that peak"`
	HandlingCount     int      `json:"handling_count,omitempty" jsonschema:"minimum=0,maximum=10000" jsonschema_description:"how many thumps; one every 3 s if absent"`
	DropOuts          int      `json:"drop_outs,omitempty" jsonschema:"minimum=0,maximum=10000" jsonschema_description:"how many stretches of digital silence"`
	DropOutMS         float64  `json:"drop_out_ms,omitempty" jsonschema:"minimum=0,maximum=10000" jsonschema_description:"their length, milliseconds; 20 if absent"`
	RepeatedBlocks    int      `json:"repeated_blocks,omitempty" jsonschema:"minimum=0,maximum=10000" jsonschema_description:"how many blocks are a copy of the one before"`
	RepeatBlockFrames int      `json:"repeat_block_frames,omitempty" jsonschema:"minimum=0,maximum=1048576" jsonschema_description:"their length, frames; 512 if absent"`
}

// air returns the air that the sound really travels through.
func (s *Scenario) air() acoustics.Air {
	a := acoustics.DryAir(20)
	for _, from := range []*Air{rigAir(s.Rig), s.Air} {
		if from == nil {
			continue
		}
		if from.TemperatureC != nil {
			a.TemperatureC = *from.TemperatureC
		}
		if from.HumidityPct != nil {
			a.HumidityPct = *from.HumidityPct
		}
		if from.PressureKPa != nil {
			a.PressureKPa = *from.PressureKPa
		}
	}
	return a
}

func rigAir(r *rig.Rig) *Air {
	if r == nil {
		return nil
	}
	return &Air{TemperatureC: r.Air.TemperatureC, HumidityPct: r.Air.HumidityPct, PressureKPa: r.Air.PressureKPa}
}

// channels is the number of channels of the take: the highest channel of the
// rig, whether its microphone is used or not.
func (s *Scenario) channels() int {
	n := 0
	for _, m := range s.Rig.Mics {
		n = max(n, m.Channel)
	}
	return n
}

// frames is the length of the take, frames.
func (s *Scenario) frames() int64 { return int64(s.DurationS*float64(s.RateHz) + 0.5) }

// role returns the role of the source, its default spelled out.
func (s *Source) role() string {
	if s.Role == "" {
		return RoleTarget
	}
	return s.Role
}

// or returns v, or def where v is the zero value.
func or[T comparable](v, def T) T {
	var zero T
	if v == zero {
		return def
	}
	return v
}
