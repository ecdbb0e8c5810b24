package bearing

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/rig"
)

// Options say how to search. The zero value takes every setting from the rig.
type Options struct {
	// Speed of sound, m/s; 0 means 343.2 (dry air at 20 °C).
	Speed float64
	// Window is the length of the stretch of time behind one direction, and Hop
	// the step from one to the next, seconds. 0 means 0.4 and half the window.
	// Both are rounded to whole frames of the transform.
	Window, Hop float64
	// FromHz and ToHz bound the frequencies used. 0 means from the rig: from
	// where its largest distance is a fifth of a wavelength to one and a half
	// times its spatial aliasing limit c/(2d), but to 3 kHz at least and 8 kHz
	// at most.
	FromHz, ToHz float64
	// Sources is the largest number of sources looked for; 0 means 3.
	Sources int
	// Corrections are what is added to the time of each microphone so that it
	// agrees with the others, seconds (rig.Mic.Delay); nil means none.
	Corrections []float64
	// FarField leaves curved wavefronts out of the search even where the rig is
	// large enough to measure a distance.
	FarField bool
	// Cores is how many cores look at windows at once, at most; 0 means all that
	// there are. What is found does not depend on it.
	Cores int
}

// Limits of the options.
const (
	minRate    = 1000
	maxRate    = 1 << 20
	maxMics    = 1024
	maxExtent  = 1000.0 // metres
	maxSources = 8
	maxFrame   = 1 << 17
)

// settings are the options with everything filled in.
type settings struct {
	Options
	rate             int
	size, hop        int // frame of the transform and its step, samples
	section          int // frames of the transform in one hop of the windows
	sections         int // sections in a window
	binFrom, binTo   int // half-open
	near             bool
	maxKappa, dKappa float64 // 1/m
}

// settle checks o against the rig and fills in what is 0.
func settle(o Options, mics []rig.Point, geo rig.Geometry, rate int) (settings, error) {
	s := settings{Options: o, rate: rate}
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("bearing: "+format, args...)) }
	if rate < minRate || rate > maxRate {
		fault("%d frames per second: want %d to %d", rate, minRate, maxRate)
	}
	if len(mics) < 2 || len(mics) > maxMics {
		fault("%d microphones: want 2 to %d", len(mics), maxMics)
	}
	for m, p := range mics {
		if !(p.Norm() < maxExtent) {
			fault("microphone %d at (%g, %g, %g) m: want less than %g m from the origin", m+1, p.X, p.Y, p.Z, maxExtent)
		}
	}
	if len(mics) >= 2 && geo.Shape == rig.ShapePoint {
		fault("%d microphones in one place: they tell no direction", len(mics))
	}
	if o.Corrections != nil && len(o.Corrections) != len(mics) {
		fault("%d time corrections for %d microphones", len(o.Corrections), len(mics))
	}
	for m, d := range o.Corrections {
		if !(math.Abs(d) <= 0.1) {
			fault("time correction %g s of microphone %d: want at most 0.1 s", d, m+1)
		}
	}
	for _, q := range []struct {
		name     string
		v        float64
		low, top float64
	}{
		{"speed of sound in m/s", o.Speed, 100, 2000},
		{"window in seconds", o.Window, 0.02, 60},
		{"hop in seconds", o.Hop, 0.01, 60},
		{"lower frequency in Hz", o.FromHz, 1, maxRate},
		{"upper frequency in Hz", o.ToHz, 1, maxRate},
		{"number of sources", float64(o.Sources), 1, maxSources},
	} {
		if q.v != 0 && !(q.v >= q.low && q.v <= q.top) {
			fault("%s is %g: want %g to %g", q.name, q.v, q.low, q.top)
		}
	}
	if len(faults) > 0 {
		return s, errors.Join(faults...)
	}
	if s.Speed == 0 {
		s.Speed = 343.2
	}
	if s.Window == 0 {
		s.Window = 0.4
		if o.Hop != 0 {
			s.Window = math.Max(s.Window, 2*o.Hop)
		}
	}
	if s.Hop == 0 {
		s.Hop = s.Window / 2
	}
	if s.Hop > s.Window {
		return s, fmt.Errorf("bearing: hop of %g s is longer than the window of %g s: stretches would be skipped", s.Hop, s.Window)
	}
	if s.Sources == 0 {
		s.Sources = 3
	}
	nyquist := float64(rate) / 2
	if s.ToHz == 0 {
		alias := s.Speed / (2 * geo.Nearest)
		s.ToHz = math.Min(math.Min(math.Max(1.5*alias, 3000), 8000), 0.9*nyquist)
		if o.FromHz != 0 {
			s.ToHz = math.Min(math.Max(s.ToHz, 2*o.FromHz), 0.9*nyquist)
		}
	}
	if s.FromHz == 0 {
		s.FromHz = math.Max(80, s.Speed/(5*geo.Extent))
		s.FromHz = math.Min(s.FromHz, s.ToHz/4)
	}
	if s.ToHz > nyquist {
		return s, fmt.Errorf("bearing: upper frequency %g Hz is above half the rate, %g Hz", s.ToHz, nyquist)
	}
	if s.FromHz >= s.ToHz {
		return s, fmt.Errorf("bearing: frequencies from %g to %g Hz: the range is empty", s.FromHz, s.ToHz)
	}
	// Frames of about 40 ms, at least eight times the longest travel time.
	want := 0.04 * float64(rate)
	s.size = 1 << int(math.Round(math.Log2(want)))
	for float64(s.size) < 8*geo.Extent/s.Speed*float64(rate) {
		s.size *= 2
	}
	// The window must hold at least eight steps of the transform.
	for s.size > 64 && float64(s.size)*4 > s.Window*float64(rate) {
		s.size /= 2
	}
	if s.size > maxFrame || float64(s.size) < 2*geo.Extent/s.Speed*float64(rate) {
		return s, fmt.Errorf("bearing: rig of %g m at %d frames per second: sound takes %.0f samples across it, too long for windows of %g s",
			geo.Extent, rate, geo.Extent/s.Speed*float64(rate), s.Window)
	}
	s.hop = s.size / 2
	step := float64(s.hop) / float64(rate)
	s.section = max(1, int(math.Round(s.Hop/step)))
	s.sections = max(1, int(math.Round(s.Window/step/float64(s.section))))
	s.Hop = float64(s.section) * step
	s.Window = float64(s.sections*s.section) * step
	df := float64(rate) / float64(s.size)
	s.binFrom = max(1, int(math.Ceil(s.FromHz/df-1e-9)))
	s.binTo = min(s.size/2, int(math.Floor(s.ToHz/df+1e-9))+1)
	if s.binTo-s.binFrom < 4 {
		return s, fmt.Errorf("bearing: frequencies from %g to %g Hz: only %d lines of the transform, %g Hz apart, lie between them",
			s.FromHz, s.ToHz, max(0, s.binTo-s.binFrom), df)
	}
	// Curvature: a step of the search changes the delay at the rig's ends by a
	// quarter of the shortest period; the nearest distance is half the rig.
	s.dKappa = 2 * s.Speed / s.ToHz / (geo.Extent * geo.Extent)
	s.maxKappa = 1 / math.Max(0.6*geo.Extent, 0.1)
	s.near = !o.FarField && s.maxKappa > 2*s.dKappa && geo.Extent > 0.25 && len(mics) >= 4
	if geo.Shape == rig.ShapeSolid && len(mics) == 4 {
		// Three delays and three unknowns: the spheres meet in two points, and
		// a near one explains a far source to the last microsecond [Schmidt 1972].
		s.near = false
	}
	return s, nil
}
