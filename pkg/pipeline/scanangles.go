package pipeline

import (
	"errors"
	"fmt"
	"math"
	"strings"

	"alidade/pkg/rig"
)

// ScanOptions are the options of scan: those of a steer run that shape the beam
// and say what is measured, and its own.
type ScanOptions struct {
	Options

	From          *float64 `json:"from,omitempty"` // azimuths, degrees
	To            *float64 `json:"to,omitempty"`
	Step          *float64 `json:"step,omitempty"`
	Elevation     *float64 `json:"elevation,omitempty"` // of all of them; default 0
	ElevationFrom *float64 `json:"elevation_from,omitempty"`
	ElevationTo   *float64 `json:"elevation_to,omitempty"`
	ElevationStep *float64 `json:"elevation_step,omitempty"`
	// Directions are AZ[,EL] each, in place of the above.
	Directions []string `json:"toward_list,omitempty"`
	Intervals  bool     `json:"intervals,omitempty"`
	Tracks     string   `json:"tracks,omitempty"` // folder of a track for each direction
}

// mostDirections bounds a scan.
const mostDirections = 20000

// directions returns the directions of the scan, elevation by elevation, and
// everything that is wrong with them.
func (o ScanOptions) directions() (list []rig.Direction, err error) {
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf(format, args...)) }
	ranged := o.From != nil || o.To != nil || o.Step != nil
	tilted := o.ElevationFrom != nil || o.ElevationTo != nil || o.ElevationStep != nil
	switch {
	case len(o.Directions) > 0 && (ranged || tilted || o.Elevation != nil):
		fault("--toward with --from, --to, --step or an elevation: directions are listed or counted, not both")
	case len(o.Directions) > 0:
		for _, text := range o.Directions {
			d, err := ParseDirection(text)
			if err != nil {
				fault("--toward %q: %w", text, err)
			}
			list = append(list, d)
		}
		if len(list) > mostDirections {
			fault("--toward: %d directions: want at most %d", len(list), mostDirections)
		}
	case o.From == nil || o.To == nil || o.Step == nil:
		fault("no directions: give --from A --to B --step S, or --toward AZ[,EL] several times")
	default:
		azimuths := count(fault, "", *o.From, *o.To, *o.Step, 360)
		elevations := 1
		low, step := 0.0, 0.0
		switch {
		case tilted && o.Elevation != nil:
			fault("--elevation with --elevation-from, --elevation-to or --elevation-step: one elevation or several")
		case tilted && (o.ElevationFrom == nil || o.ElevationTo == nil || o.ElevationStep == nil):
			fault("--elevation-from, --elevation-to and --elevation-step go together")
		case tilted:
			low, step = *o.ElevationFrom, *o.ElevationStep
			elevations = count(fault, "elevation-", low, *o.ElevationTo, step, 90)
		case o.Elevation != nil:
			if low = *o.Elevation; math.Abs(low) > 90 {
				fault("--elevation %g: want -90 to 90°", low)
			}
		}
		if len(faults) > 0 {
			break
		}
		if n := azimuths * elevations; n > mostDirections {
			fault("%d directions: want at most %d; take a larger --step", n, mostDirections)
			break
		}
		if azimuths > 1 && math.Abs(float64(azimuths-1)**o.Step-360) < 1e-9 {
			azimuths-- // a whole turn ends where it began
		}
		for e := range elevations {
			for a := range azimuths {
				list = append(list, rig.Degrees(*o.From+float64(a)**o.Step, low+float64(e)*step))
			}
		}
	}
	return list, errors.Join(faults...)
}

// count is the number of angles from..to of an option's family in steps, both
// ends in reach inside.
func count(fault func(string, ...any), family string, from, to, step, most float64) int {
	before := ""
	if family == "" {
		before = "azimuth "
	}
	switch {
	case !(math.Abs(from) <= most && math.Abs(to) <= most):
		fault("--%sfrom %g --%sto %g: want %s-%g to %g°", family, from, family, to, before, most, most)
	case from > to:
		fault("--%sfrom %g --%sto %g: the first lies above the last", family, from, family, to)
	case to-from > 360:
		fault("--%sfrom %g --%sto %g: more than a whole turn", family, from, family, to)
	case !(step > 0):
		fault("--%sstep %g: want more than 0°", family, step)
	case (to-from)/step >= 1e9:
		return 1e9
	default:
		return int(math.Floor((to-from)/step+1e-9)) + 1
	}
	return 1
}

// resolve reads the texts of the options and reports everything that is wrong
// with them at once.
func (o ScanOptions) resolve() (*settings, []rig.Direction, error) {
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf(format, args...)) }
	list, err := o.directions()
	if err != nil {
		faults = append(faults, err)
	}
	if o.ReestimateEvery != 0 || o.Postfilter != "" && o.Postfilter != PostfilterNone {
		fault("--reestimate-every and --postfilter: a scan takes beams that stand still; steer has them")
	}
	if o.Weights == WeightsMinimumVariance && o.Noise == "" && o.NoiseCue == "" && o.IsolatedNoise == "" {
		fault("--weights %s: the noise must be known before any direction is; give --noise A..B", WeightsMinimumVariance)
	}
	if o.OverRange == OverRangeFloat32 {
		fault("--over-range %s: the tracks of a scan are of one format; give --format float32", OverRangeFloat32)
	}
	// One direction stands for all: what is wrong with it is said elsewhere.
	o.Options.Toward, o.Options.Focus = "0", ""
	if len(list) > 0 {
		o.Options.Toward = directionText(list[0])
	}
	set, err := o.Options.resolve()
	if err != nil {
		faults = append(faults, err)
	}
	if o.Tracks != "" {
		seen := map[string]rig.Direction{}
		for _, d := range list {
			name := directionName(d)
			if before, ok := seen[name]; ok {
				fault("--tracks: %s and %s would both be named %s: names carry a tenth of a degree", directionText(before), directionText(d), strings.TrimPrefix(name, "_"))
				break
			}
			seen[name] = d
		}
	} else if o.Out != "" {
		fault("--out belongs to steer; --tracks FOLDER writes the tracks of a scan")
	}
	if len(faults) > 0 {
		return nil, nil, &UsageError{Err: errors.Join(faults...)}
	}
	return set, list, nil
}

// directionText writes a direction as ParseDirection reads it.
func directionText(d rig.Direction) string {
	return fmt.Sprintf("%.10g,%.10g", d.AzimuthDeg()+0, d.ElevationDeg()+0)
}

// Validate reports everything that is wrong with the options that can be seen
// without a take and a rig, as one *UsageError.
func (o ScanOptions) Validate() error {
	_, _, err := o.resolve()
	return err
}
