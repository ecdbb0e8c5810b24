package scenario

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"

	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
	"alidade/pkg/sheet"
)

// SchemaID is the $id of the JSON Schema of a scenario file.
const SchemaID = "urn:alidade:schema:scenario:1"

// Schema returns the JSON Schema of a scenario file.
func Schema() ([]byte, error) {
	return sheet.SchemaOf(Scenario{}, SchemaID, "Alidade scenario file")
}

// Load reads a scenario file in YAML or JSON, strictly. The rig of rig_file,
// and a CSV file of positions, are read through open, which is given the path
// as the file has it and may be nil if no file can be opened. The error holds
// every fault at once as *sheet.FaultsError values, each with its place.
func Load(name string, data []byte, open func(path string) (io.ReadCloser, error)) (*Scenario, error) {
	text, err := Schema()
	if err != nil {
		return nil, err
	}
	schema, err := sheet.NewSchema(text)
	if err != nil {
		return nil, err
	}
	doc := sheet.Parse(name, data, schema)
	sc := &Scenario{}
	doc.Fill(sc)
	var beside []error
	switch {
	case doc.Has("rig") && doc.Has("rig_file"):
		doc.KeyFault("rig_file", "rig is given as well, want one of the two")
	case doc.Has("rig"):
		beside = append(beside, sc.inlineRig(doc, open)...)
	case doc.Has("rig_file"):
		beside = append(beside, sc.openRig(doc, open)...)
	case doc.Has("scenario"):
		doc.Fault("", "neither rig nor rig_file is given, want one of the two")
	}
	if doc.Err() == nil && len(beside) == 0 {
		sc.check(func(path, format string, args ...any) { doc.Fault(path, format, args...) })
	}
	if err := errors.Join(append([]error{doc.Err()}, beside...)...); err != nil {
		return nil, err
	}
	return sc, nil
}

// inlineRig reads the rig that stands in the scenario file; its faults get
// their places there.
func (s *Scenario) inlineRig(doc *sheet.Document, open func(string) (io.ReadCloser, error)) []error {
	text, err := json.Marshal(s.RigSheet)
	if err != nil {
		return []error{err}
	}
	r, err := rig.Load("rig", text, open)
	s.Rig = r
	var list []error
	for _, one := range unjoined(err) {
		var faults *sheet.FaultsError
		if !errors.As(one, &faults) || faults.Name != "rig" {
			list = append(list, one)
			continue
		}
		for _, f := range faults.Faults {
			path := "rig"
			if f.Path != "" {
				path += "." + f.Path
			}
			doc.Fault(path, "%s", f.Message)
		}
	}
	return list
}

func (s *Scenario) openRig(doc *sheet.Document, open func(string) (io.ReadCloser, error)) []error {
	if open == nil {
		doc.Fault("rig_file", "%q: no file can be opened here", s.RigFile)
		return nil
	}
	f, err := open(s.RigFile)
	if err != nil {
		doc.Fault("rig_file", "%v", err)
		return nil
	}
	data, err := io.ReadAll(io.LimitReader(f, sheet.MaxBytes+1))
	if err := errors.Join(err, f.Close()); err != nil {
		doc.Fault("rig_file", "%v", err)
		return nil
	}
	r, err := rig.Load(s.RigFile, data, open)
	s.Rig = r
	return unjoined(err)
}

// unjoined returns the parts of an error made by errors.Join.
func unjoined(err error) []error {
	if err == nil {
		return nil
	}
	if many, ok := err.(interface{ Unwrap() []error }); ok {
		return many.Unwrap()
	}
	return []error{err}
}

// Validate reports everything that is wrong with a scenario, its files aside.
func (s *Scenario) Validate() error {
	var list []error
	s.check(func(path, format string, args ...any) {
		list = append(list, fmt.Errorf("scenario: %s: %s", path, fmt.Sprintf(format, args...)))
	})
	return errors.Join(list...)
}

// check calls fault for everything that is wrong, in file order.
func (s *Scenario) check(fault func(path, format string, args ...any)) {
	limit := func(path string, v, low, high float64) {
		if !(v >= low && v <= high) {
			fault(path, "%g: want %g to %g", v, low, high)
		}
	}
	limit("rate_hz", float64(s.RateHz), MinRateHz, MaxRateHz)
	if !(s.DurationS > 0 && s.DurationS <= MaxDurationS) {
		fault("duration_s", "%g: want more than 0 and at most %d", s.DurationS, MaxDurationS)
	} else if s.RateHz > 0 && s.frames() == 0 {
		fault("duration_s", "%g: less than one frame", s.DurationS)
	}
	if s.Rig == nil || len(s.Rig.Mics) == 0 {
		fault("rig", "a rig without microphones")
		return
	}
	taken := map[int]bool{}
	for m, mic := range s.Rig.Mics {
		if mic.Channel < 1 || mic.Channel > MaxChannels || taken[mic.Channel] {
			fault("rig", "microphone %d: channel %d is taken, or not 1 to %d", m+1, mic.Channel, MaxChannels)
			return
		}
		taken[mic.Channel] = true
	}
	if err := s.air().Validate(); err != nil {
		fault("air", "%v", err)
	}
	if s.Room != nil {
		s.Room.check(fault)
	}
	if len(s.Sources) > MaxSources {
		fault("sources", "%d sources, more than %d", len(s.Sources), MaxSources)
		return
	}
	names := map[string]bool{}
	for i := range s.Sources {
		path := fmt.Sprintf("sources[%d]", i)
		s.Sources[i].check(path, s, fault)
		if names[s.Sources[i].Name] {
			fault(path+".name", "%q is the name of two sources", s.Sources[i].Name)
		}
		names[s.Sources[i].Name] = true
	}
	for i, d := range s.Diffuse {
		path := fmt.Sprintf("diffuse[%d]", i)
		limit(path+".level_dbfs", d.LevelDBFS, -200, 20)
		oneOf(fault, path+".spectrum", d.Spectrum, "", SpectrumWhite, SpectrumPink, SpectrumOutdoors, SpectrumSpeech)
		oneOf(fault, path+".field", d.Field, "", FieldSpherical, FieldCylindrical)
		oneOf(fault, path+".method", d.Method, "", MethodMixing, MethodWaves)
		switch {
		case d.Waves != 0 && d.Method != MethodWaves:
			fault(path+".waves", "%d: only method waves has waves", d.Waves)
		case d.Waves != 0:
			limit(path+".waves", float64(d.Waves), 16, MaxWaves)
		}
	}
	if s.SensorDBFS != nil {
		limit("sensor_dbfs", *s.SensorDBFS, -200, 0)
	}
	limit("misplaced_mm", s.MisplacedMM, 0, 1000)
	if s.PositionScale != 0 {
		limit("position_scale", s.PositionScale, 0.5, 2)
	}
	for i := range s.Faults {
		s.Faults[i].check(fmt.Sprintf("faults[%d]", i), s.channels(), s.RateHz, fault)
	}
}

func oneOf(fault func(string, string, ...any), path, v string, allowed ...string) {
	for _, a := range allowed {
		if v == a {
			return
		}
	}
	fault(path, "%q is not known", v)
}

// check checks one source.
func (s *Source) check(path string, sc *Scenario, fault func(string, string, ...any)) {
	oneOf(fault, path+".role", s.Role, "", RoleTarget, RoleInterferer)
	oneOf(fault, path+".kind", s.Kind, KindTalker, KindNoise, KindTone, KindChirp, KindClaps, KindFile)
	oneOf(fault, path+".spectrum", s.Spectrum, "", SpectrumWhite, SpectrumPink, SpectrumOutdoors, SpectrumSpeech)
	nyquist := float64(sc.RateHz) / 2
	if s.Spectrum != "" && s.Kind != KindNoise {
		fault(path+".spectrum", "only noise has a spectrum, this is a %s", s.Kind)
	}
	for _, v := range []struct {
		key   string
		value float64
	}{{"hz", s.Hz}, {"from_hz", s.FromHz}, {"to_hz", s.ToHz}} {
		if !(v.value >= 0 && v.value < nyquist) {
			fault(path+"."+v.key, "%g Hz: want 0 to less than half of the rate, %g Hz", v.value, nyquist)
		}
	}
	if s.Kind == KindTalker && s.Hz != 0 && !(s.Hz >= 50 && s.Hz <= 500) {
		fault(path+".hz", "%g Hz: the pitch of a talker lies between 50 and 500 Hz", s.Hz)
	}
	if !(s.EveryS >= 0 && s.EveryS <= MaxDurationS) || s.EveryS > 0 && s.EveryS < 0.02 {
		fault(path+".every_s", "%g s: want 0.02 s or more", s.EveryS)
	}
	if (s.File != "") != (s.Kind == KindFile) {
		fault(path+".file", "kind file has a file, other kinds have none")
	}
	switch {
	case s.LevelDBFS != nil && s.SNRDB != nil:
		fault(path+".snr_db", "level_dbfs is given as well, want one of the two")
	case s.LevelDBFS != nil:
		if !(*s.LevelDBFS >= -200 && *s.LevelDBFS <= 20) {
			fault(path+".level_dbfs", "%g dBFS: want -200 to 20", *s.LevelDBFS)
		}
	case s.SNRDB == nil:
		fault(path, "neither level_dbfs nor snr_db is given")
	case s.role() == RoleInterferer:
		fault(path+".snr_db", "an interferer is noise itself: state its level_dbfs")
	case !(*s.SNRDB >= -100 && *s.SNRDB <= 200):
		fault(path+".snr_db", "%g dB: want -100 to 200", *s.SNRDB)
	}
	last := math.Inf(-1)
	for i, on := range s.OnS {
		at := fmt.Sprintf("%s.on_s[%d]", path, i)
		if len(on) != 2 || !(on[0] < on[1]) || !(on[0] >= last) || !(math.Abs(on[0]) <= MaxDurationS && on[1] <= 2*MaxDurationS) {
			fault(at, "want [from, to] in seconds, from before to, one after the other")
			break
		}
		last = on[1]
	}
	s.checkPlaces(path, fault)
}

func (s *Source) checkPlaces(path string, fault func(string, string, ...any)) {
	switch {
	case s.At != nil && s.Path != nil:
		fault(path+".path", "at is given as well, want one of the two")
		return
	case s.At != nil:
		s.At.check(path+".at", fault)
		return
	case len(s.Path) == 0:
		fault(path, "neither at nor path is given")
		return
	case len(s.Path) > MaxWaypoints:
		fault(path+".path", "%d places, more than %d", len(s.Path), MaxWaypoints)
		return
	}
	for i := range s.Path {
		at := fmt.Sprintf("%s.path[%d]", path, i)
		w := &s.Path[i]
		w.Place.check(at, fault)
		if math.IsNaN(w.AtS) || math.IsInf(w.AtS, 0) || i > 0 && !(w.AtS > s.Path[i-1].AtS) {
			fault(at+".at_s", "%g s: want later than the place before", w.AtS)
		}
		if w.form() != s.Path[0].form() {
			fault(at, "it is %s, the first place is %s: want one form", w.form(), s.Path[0].form())
		}
	}
}

// form names what kind of place it is.
func (p *Place) form() string {
	switch {
	case p.PointM != nil:
		return "a point"
	case p.DistanceM > 0:
		return "a direction with a distance"
	}
	return "a direction"
}

func (p *Place) check(path string, fault func(string, string, ...any)) {
	if p.PointM != nil {
		if len(p.PointM) != 3 {
			fault(path+".point_m", "%d coordinates, want 3", len(p.PointM))
		}
		for i, v := range p.PointM {
			if !(math.Abs(v) <= 1e4) {
				fault(fmt.Sprintf("%s.point_m[%d]", path, i), "%g m: more than 10 km away", v)
			}
		}
		if p.AzimuthDeg != nil || p.ElevationDeg != 0 || p.DistanceM != 0 {
			fault(path, "a point and a direction, want one of the two")
		}
		return
	}
	if p.AzimuthDeg == nil {
		fault(path, "neither azimuth_deg nor point_m is given")
	} else if !(math.Abs(*p.AzimuthDeg) <= 360) {
		fault(path+".azimuth_deg", "%g°: want -360 to 360", *p.AzimuthDeg)
	}
	if !(math.Abs(p.ElevationDeg) <= 90) {
		fault(path+".elevation_deg", "%g°: want -90 to 90", p.ElevationDeg)
	}
	if !(p.DistanceM >= 0 && p.DistanceM <= 1e4) {
		fault(path+".distance_m", "%g m: want 0 to 10000", p.DistanceM)
	}
}

func (f *Fault) check(path string, channels, rate int, fault func(string, string, ...any)) {
	for i, ch := range f.Channels {
		if ch < 1 || ch > channels {
			fault(fmt.Sprintf("%s.channels[%d]", path, i), "channel %d: the take has %d", ch, channels)
		}
	}
	if f.SwapWith != 0 {
		if f.SwapWith < 1 || f.SwapWith > channels {
			fault(path+".swap_with", "channel %d: the take has %d", f.SwapWith, channels)
		}
		if len(f.Channels) != 1 {
			fault(path+".swap_with", "a swap needs channels to name exactly one")
		}
	}
	oneOf(fault, path+".polarity", f.Polarity, "", "normal", "inverted")
	if f.MovedMM != nil && len(f.MovedMM) != 3 {
		fault(path+".moved_mm", "%d coordinates, want 3", len(f.MovedMM))
	}
	for _, v := range f.MovedMM {
		if !(math.Abs(v) <= 1e5) {
			fault(path+".moved_mm", "%g mm: more than 100 m", v)
		}
	}
	opt := func(p *float64) float64 {
		if p == nil {
			return 0
		}
		return *p
	}
	for _, v := range []struct {
		key              string
		value, low, high float64
	}{
		{"gain_db", f.GainDB, -200, 60}, {"delay_us", f.DelayUS, -20000, 20000}, {"clock_ppm", f.ClockPPM, -1000, 1000},
		{"dc", f.DC, -1, 1}, {"clip_dbfs", opt(f.ClipDBFS), -200, 20}, {"clipped_fraction", f.ClippedFraction, 0, 0.5},
		{"hum_dbfs", opt(f.HumDBFS), -200, 0}, {"hum_hz", f.HumHz, 0, math.Min(1000, float64(rate)/2)},
		{"hum_harmonics", float64(f.HumHarmonics), 0, 40}, {"wind_dbfs", opt(f.WindDBFS), -200, 20},
		{"handling_dbfs", opt(f.HandlingDBFS), -200, 20}, {"handling_count", float64(f.HandlingCount), 0, 10000},
		{"drop_outs", float64(f.DropOuts), 0, 10000}, {"drop_out_ms", f.DropOutMS, 0, 10000},
		{"repeated_blocks", float64(f.RepeatedBlocks), 0, 10000}, {"repeat_block_frames", float64(f.RepeatBlockFrames), 0, 1 << 20},
	} {
		if !(v.value >= v.low && v.value <= v.high) {
			fault(path+"."+v.key, "%g: want %g to %g", v.value, v.low, v.high)
		}
	}
}

// check checks a room; whether everything stands inside it is seen later.
func (r *Room) check(fault func(string, string, ...any)) {
	list := func(path string, v []float64, low, high float64) {
		if len(v) != 1 && len(v) != len(render.OctavesHz) {
			fault(path, "%d values, want 1 or %d", len(v), len(render.OctavesHz))
			return
		}
		for i, x := range v {
			if !(x >= low && x <= high) {
				fault(fmt.Sprintf("%s[%d]", path, i), "%g: want %g to %g", x, low, high)
			}
		}
	}
	triple := func(path string, v []float64, low, high float64) bool {
		if len(v) != 3 {
			fault(path, "%d values, want 3", len(v))
			return false
		}
		for i, x := range v {
			if !(x >= low && x <= high) {
				fault(fmt.Sprintf("%s[%d]", path, i), "%g m: want %g to %g m", x, low, high)
			}
		}
		return true
	}
	triple("room.size_m", r.SizeM, 0.5, 200)
	triple("room.rig_at_m", r.RigAtM, 0, 200)
	if !(math.Abs(r.TurnDeg) <= 360) {
		fault("room.turn_deg", "%g°: want -360 to 360", r.TurnDeg)
	}
	w := or(r.Walls, &Walls{})
	whole := true
	for _, wall := range []struct {
		key  string
		list []float64
	}{{"x0", w.X0}, {"x1", w.X1}, {"y0", w.Y0}, {"y1", w.Y1}, {"floor", w.Floor}, {"ceiling", w.Ceiling}} {
		if wall.list != nil {
			list("room.walls."+wall.key, wall.list, 0, 1)
		} else {
			whole = false
		}
	}
	switch {
	case r.RT60S != nil && r.Absorption != nil:
		fault("room.absorption", "rt60_s is given as well, want one of the two")
	case r.RT60S != nil && r.Walls != nil:
		fault("room.walls", "rt60_s makes all walls alike, want absorption instead")
	case r.RT60S != nil:
		list("room.rt60_s", r.RT60S, 0.01, 20)
	case r.Absorption != nil:
		list("room.absorption", r.Absorption, 0, 1)
	case !whole:
		fault("room", "neither rt60_s nor absorption is given, nor all six walls")
	}
	if r.MaxOrder != nil && (*r.MaxOrder < 0 || *r.MaxOrder > 1000) {
		fault("room.max_order", "%d: want 0 to 1000", *r.MaxOrder)
	}
	if !(r.LengthS >= 0 && r.LengthS <= 20) {
		fault("room.length_s", "%g s: want 0 to 20", r.LengthS)
	}
}
