package bearing

import (
	"fmt"
	"math"
	"strings"

	"alidade/pkg/rig"
)

// Fix is one source as seen from the reference point. Angles are radians.
type Fix struct {
	Direction rig.Direction

	// StandardError is the standard error of the azimuth (of the cone angle for
	// a line rig, which is the same number where the line lies along x).
	StandardError float64
	// ElevationError is the standard error of the elevation; 0 for a line rig,
	// which does not measure it.
	ElevationError float64
	// Freedom is the number of degrees of freedom behind StandardError.
	Freedom float64

	// Distance from the reference point, metres, and its standard error. Both
	// are nil where the wavefront is not measurably curved.
	Distance      *float64
	DistanceError *float64
	// Point is the place of the source in rig coordinates, metres, where
	// Distance is known.
	Point *rig.Point

	// Confidence is 0..1: how far the peak of the steered response stands out
	// against the best separate peak, times how well the microphones agree.
	Confidence float64
}

// Interval95 returns half the width of the 95 % interval of the azimuth (cone
// angle for a line rig), radians: StandardError times Student's quantile.
func (f Fix) Interval95() float64 { return f.StandardError * studentQuantile975(f.Freedom) }

// Source is a fix over the whole take.
type Source struct {
	Fix
	// Windows is the number of windows that heard the source.
	Windows int
	// Share is the part of all peak heights above the best separate peak, summed
	// over the windows, that the source holds, 0..1.
	Share float64
	// Moves says that the direction drifts by more than its window errors
	// explain: then the track is the better answer.
	Moves bool
	// Reflection says that the sound is a late copy of another source's.
	Reflection bool
	// Stationary says that the source never rose above its own noise floor: a
	// steady sound, like a fan or a noise generator.
	Stationary bool
	// Track is the index into Result.Tracks of the track that shares most
	// windows with the source, -1 if none does.
	Track int
}

// Window is what was found in one stretch of time.
type Window struct {
	Start, End float64 // seconds from the first frame
	Sources    []Fix   // strongest first; empty if none was found
	Reason     string  // why none was found; empty otherwise
	Active     bool    // the sound rose above its stationary floor
}

// Finding is something to know about the take, for a person to read.
type Finding struct {
	Code    string // stable, lower case with dashes
	Message string // what, with numbers
	Mics    []int  // microphones concerned, 0-based in the order given to NewFinder
}

// Codes of findings.
const (
	CodeNoDirection = "no-direction"   // no source was found; the message says why
	CodeDeadMic     = "dead-channel"   // left out of the search
	CodeMisfit      = "channel-misfit" // agrees with no direction: swapped, late or turned round
	CodeMoves       = "source-moves"   // see Tracks
	CodeNearField   = "near-field"     // the wavefront is curved: focus on the point instead
)

// Picture is the mean steered response over angle, for a person to look at.
type Picture struct {
	Angles  []float64 // radians: cone angle 0..pi for a line rig, else azimuth, -pi < az <= pi
	LevelDB []float64 // 10·log10 of the response re its maximum, not below -30; nil if nothing was heard
}

// Text draws the picture with height rows of characters and one column an
// angle step of width columns, loudest at the top, without a scale. It is empty
// if nothing was heard or the size is not positive.
func (p Picture) Text(width, height int) string {
	if len(p.LevelDB) == 0 || width <= 0 || height <= 0 {
		return ""
	}
	width = min(width, 400)
	height = min(height, 100)
	const rangeDB = 20.0
	var out strings.Builder
	for row := range height {
		for col := range width {
			from, to := col*len(p.LevelDB)/width, (col+1)*len(p.LevelDB)/width
			top := math.Inf(-1)
			for i := from; i < max(to, from+1); i++ {
				top = math.Max(top, p.LevelDB[i])
			}
			if top >= -rangeDB*(float64(row)+0.5)/float64(height) {
				out.WriteByte('#')
			} else {
				out.WriteByte(' ')
			}
		}
		out.WriteByte('\n')
	}
	return out.String()
}

// Result is everything that was found in a take, as plain data.
type Result struct {
	Sources   []Source // dominant first
	Windows   []Window // in order of time
	Tracks    []Track  // longest-heard first
	Ambiguity string   // what the rig cannot tell apart, in words; empty for a solid rig
	Findings  []Finding
	Picture   Picture

	// The settings in force, as chosen from the rig or given.
	FromHz, ToHz        float64
	WindowSec, HopSec   float64
	GridPoints          int
	Shape               rig.Shape
	NearField           bool // curved wavefronts were searched too
	FrameSize, FrameHop int
}

// Best returns source number pick, counted from 1 with the dominant one first.
// If there is none, the error says why.
func (r *Result) Best(pick int) (Source, error) {
	if pick < 1 {
		return Source{}, fmt.Errorf("bearing: source %d: sources are counted from 1", pick)
	}
	if len(r.Sources) == 0 {
		for _, f := range r.Findings {
			if f.Code == CodeNoDirection {
				return Source{}, fmt.Errorf("bearing: no direction found: %s", f.Message)
			}
		}
		return Source{}, fmt.Errorf("bearing: no direction found")
	}
	if pick > len(r.Sources) {
		return Source{}, fmt.Errorf("bearing: source %d was asked for, %d found", pick, len(r.Sources))
	}
	return r.Sources[pick-1], nil
}
