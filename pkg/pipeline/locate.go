package pipeline

import (
	"context"
	"errors"
	"fmt"
	"math"

	"alidade/pkg/bearing"
	"alidade/pkg/rig"
)

// LocateSchema is the version of the form of Located. A change that removes or
// redefines a key raises it.
const LocateSchema = "alidade-locate/1"

// Search is how directions are searched for: each field is the long option of
// that name with _ for -. The zero value takes everything from the rig.
type Search struct {
	Window  float64 `json:"window,omitempty"`  // s, stretch of time behind one direction; 0 is 0.4
	Hop     float64 `json:"hop,omitempty"`     // s, from one window to the next; 0 is half the window
	FromHz  float64 `json:"from_hz,omitempty"` // lowest frequency heeded; 0 is from the rig
	ToHz    float64 `json:"to_hz,omitempty"`   // highest frequency heeded; 0 is from the rig
	Sources int     `json:"sources,omitempty"` // most sources looked for; 0 is 3
}

// Validate reports everything that is wrong with the search that can be seen
// without a take and a rig, as one *UsageError.
func (s Search) Validate() error {
	var faults []error
	for _, q := range []struct {
		option   string
		v        float64
		low, top float64
		unit     string
	}{
		{"window", s.Window, 0.02, 60, "s"},
		{"hop", s.Hop, 0.01, 60, "s"},
		{"from-hz", s.FromHz, 1, 192000, "Hz"},
		{"to-hz", s.ToHz, 1, 192000, "Hz"},
		{"sources", float64(s.Sources), 1, largestPick, "sources"},
	} {
		if q.v != 0 && !(q.v >= q.low && q.v <= q.top) {
			faults = append(faults, fmt.Errorf("--%s %g: want %g to %g %s", q.option, q.v, q.low, q.top, q.unit))
		}
	}
	if s.Window != 0 && s.Hop > s.Window {
		faults = append(faults, fmt.Errorf("--hop %g with --window %g: the stretches between the windows would be skipped; want at most the window", s.Hop, s.Window))
	}
	if s.FromHz != 0 && s.ToHz != 0 && s.FromHz >= s.ToHz {
		faults = append(faults, fmt.Errorf("--from-hz %g with --to-hz %g: no frequency lies between them", s.FromHz, s.ToHz))
	}
	if len(faults) > 0 {
		return &UsageError{Err: errors.Join(faults...)}
	}
	return nil
}

// Located is what was heard from where, as plain data. Times are seconds from
// the take's first frame, angles degrees.
type Located struct {
	Schema    string          `json:"schema"`
	Version   string          `json:"version"` // program version
	Take      Take            `json:"take"`
	Rig       RigSummary      `json:"rig"`
	Search    SearchUsed      `json:"search"`
	Ambiguity string          `json:"ambiguity"` // what the rig cannot tell apart, in words
	Sources   []LocatedSource `json:"sources"`   // dominant first, as --pick counts them
	Windows   []LocatedWindow `json:"windows"`
	Tracks    []LocatedTrack  `json:"tracks"` // longest-heard first
	Picture   LocatedPicture  `json:"picture"`
	Findings  []Finding       `json:"findings"`
}

// SearchUsed is the search in force.
type SearchUsed struct {
	WindowS    float64 `json:"window_s"`
	HopS       float64 `json:"hop_s"`
	FromHz     float64 `json:"from_hz"`
	ToHz       float64 `json:"to_hz"`
	Sources    int     `json:"sources"`     // most looked for
	GridPoints int     `json:"grid_points"` // directions tried before refinement
	NearField  bool    `json:"near_field"`  // curved wavefronts were looked for too
}

// Bearing is where a source was heard.
type Bearing struct {
	AzimuthDeg        float64     `json:"azimuth_deg"`
	ElevationDeg      float64     `json:"elevation_deg"`
	CompassDeg        Number      `json:"compass_deg,omitempty"`
	DistanceM         Number      `json:"distance_m,omitempty"` // where the wave is measurably curved
	DistanceErrorM    Number      `json:"distance_error_m,omitempty"`
	PointM            *[3]float64 `json:"point_m,omitempty"`        // from the rig's origin, for --focus
	StandardErrorDeg  Number      `json:"standard_error_deg"`       // of the azimuth; for a line of its cone angle
	ElevationErrorDeg Number      `json:"elevation_error_deg"`      // null for a line, which does not measure it
	Interval95Deg     Number      `json:"interval95_deg,omitempty"` // half the width of the 95 % interval of the azimuth
	Confidence        Number      `json:"confidence"`               // 0 to 1
}

// LocatedSource is a source over the whole take.
type LocatedSource struct {
	Bearing
	Windows    int     `json:"windows_heard"`
	Share      float64 `json:"share"`      // of all that was heard, 0 to 1
	Moves      bool    `json:"moves"`      // then the direction is a mean; see the track
	Reflection bool    `json:"reflection"` // a late copy of another source
	Steady     bool    `json:"steady"`     // never rose above its own floor, like a fan
	Track      int     `json:"track"`      // its number in tracks, counted from 1; 0 if none
}

// LocatedWindow is what was heard in one window.
type LocatedWindow struct {
	StartS  float64   `json:"start_s"`
	EndS    float64   `json:"end_s"`
	Sources []Bearing `json:"sources"`          // strongest first
	Reason  string    `json:"reason,omitempty"` // why there is none
}

// LocatedTrack is the path of one source.
type LocatedTrack struct {
	Windows    int           `json:"windows_heard"`
	SpanDeg    float64       `json:"span_deg"` // largest angle between two of its directions
	Confidence Number        `json:"confidence"`
	Knots      []LocatedKnot `json:"knots"`
}

// LocatedKnot is the smoothed direction of a source in the middle of a window.
type LocatedKnot struct {
	TimeS            float64 `json:"time_s"`
	AzimuthDeg       float64 `json:"azimuth_deg"`
	ElevationDeg     float64 `json:"elevation_deg"`
	StandardErrorDeg Number  `json:"standard_error_deg"`
	Heard            bool    `json:"heard"` // false where the path is carried over a silence
}

// LocatedPicture is the mean power that the rig, steered to each angle, hears.
type LocatedPicture struct {
	AnglesDeg []float64 `json:"angles_deg"` // azimuth; for a line the angle from its axis
	LevelDB   []float64 `json:"level_db"`   // re the loudest, not below -30; empty if nothing was heard

	drawing bearing.Picture
}

// Text draws the picture in characters: height rows of width columns, the
// loudest at the top, 20 dB high; empty if nothing was heard.
func (p LocatedPicture) Text(width, height int) string { return p.drawing.Text(width, height) }

// Locate listens to one take and says where its sounds come from. Of the
// options of the spec it heeds those on files, reference point and air. A take
// in which nothing is found is no error: it has no sources, and a finding says
// why. The errors are those of Run.
func Locate(ctx context.Context, spec Spec, search Search, watch Watch) (res *Located, err error) {
	if err := search.Validate(); err != nil {
		return nil, err
	}
	l, err := loadRig(spec.RigPath, spec.Options)
	if err != nil {
		return nil, err
	}
	t, err := openTake(spec.Take, spec.Options.joining(), !spec.NoHashes)
	if err != nil {
		return nil, err
	}
	defer func() { err = joinErrors(err, t.close()) }()
	r := &run{ctx: ctx, spec: spec, rig: l, watch: watch, take: t}
	if err := r.fits(); err != nil {
		return nil, err
	}
	if err := t.sounds(); err != nil {
		return nil, err
	}
	o := bearing.Options{Window: search.Window, Hop: search.Hop, FromHz: search.FromHz, ToHz: search.ToHz, Sources: search.Sources}
	heard, err := r.searched(r.toBeHeard("listening"), o)
	if err != nil {
		return nil, err
	}
	res = l.located(heard)
	res.Schema, res.Version, res.Rig = LocateSchema, spec.Version, l.summary()
	if res.Search.Sources = search.Sources; search.Sources == 0 {
		res.Search.Sources = 3
	}
	if res.Take, err = t.finish(); err != nil {
		return nil, err
	}
	res.Findings = append(l.searchFindings(heard), t.findings()...)
	sortFindings(res.Findings)
	return res, nil
}

// located is what a search found as plain data.
func (l *loadedRig) located(heard *bearing.Result) *Located {
	res := &Located{
		Search: SearchUsed{
			WindowS: heard.WindowSec, HopS: heard.HopSec, FromHz: heard.FromHz, ToHz: heard.ToHz,
			GridPoints: heard.GridPoints, NearField: heard.NearField,
		},
		Ambiguity: heard.Ambiguity,
		Sources:   []LocatedSource{}, Windows: []LocatedWindow{}, Tracks: []LocatedTrack{},
		Picture: LocatedPicture{AnglesDeg: []float64{}, LevelDB: []float64{}, drawing: heard.Picture},
	}
	line := heard.Shape == rig.ShapeLine
	for _, s := range heard.Sources {
		b := l.bearing(s.Fix, line)
		b.Interval95Deg = degrees(s.Interval95())
		res.Sources = append(res.Sources, LocatedSource{
			Bearing: b, Windows: s.Windows, Share: s.Share,
			Moves: s.Moves, Reflection: s.Reflection, Steady: s.Stationary, Track: s.Track + 1,
		})
	}
	for _, w := range heard.Windows {
		out := LocatedWindow{StartS: w.Start, EndS: w.End, Sources: []Bearing{}, Reason: w.Reason}
		for _, f := range w.Sources {
			out.Sources = append(out.Sources, l.bearing(f, line))
		}
		res.Windows = append(res.Windows, out)
	}
	for _, t := range heard.Tracks {
		out := LocatedTrack{Windows: t.Heard, SpanDeg: t.Span * 180 / math.Pi, Confidence: number(t.Confidence)}
		for _, k := range t.Knots {
			out.Knots = append(out.Knots, LocatedKnot{
				TimeS: k.Time, AzimuthDeg: k.Direction.AzimuthDeg(), ElevationDeg: k.Direction.ElevationDeg(),
				StandardErrorDeg: degrees(k.StandardError), Heard: k.Heard,
			})
		}
		res.Tracks = append(res.Tracks, out)
	}
	for _, a := range heard.Picture.Angles {
		res.Picture.AnglesDeg = append(res.Picture.AnglesDeg, a*180/math.Pi)
	}
	res.Picture.LevelDB = append(res.Picture.LevelDB, heard.Picture.LevelDB...)
	return res
}

// bearing is a fix as plain data, of a line rig or another.
func (l *loadedRig) bearing(f bearing.Fix, line bool) Bearing {
	b := Bearing{
		AzimuthDeg: f.Direction.AzimuthDeg(), ElevationDeg: f.Direction.ElevationDeg(),
		DistanceM: f.Distance, DistanceErrorM: f.DistanceError,
		StandardErrorDeg: degrees(f.StandardError), Confidence: number(f.Confidence),
	}
	if heading, ok := l.Compass(f.Direction); ok {
		b.CompassDeg = &heading
	}
	if p := f.Point; p != nil {
		b.PointM = &[3]float64{p.X, p.Y, p.Z}
	}
	if !line {
		b.ElevationErrorDeg = degrees(f.ElevationError)
	}
	return b
}
