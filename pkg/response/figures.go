package response

import (
	"math"
	"sort"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// Lobe is a local maximum of the response along a cut.
type Lobe struct {
	Angle   float64 // radians along the cut
	LevelDB float64 // re the steered direction
}

// Figures are what a beam does at one frequency, along one cut. Angles are
// radians along the cut; levels are re the steered direction. A nil figure is
// not defined.
type Figures struct {
	Hz float64
	// Beamwidth is the angle between the half-power points on both sides of
	// the steered direction, nil if one of them does not exist.
	Beamwidth *float64
	Edges     [2]*float64 // the half-power points below and above
	// FirstNulls are the first minima beyond the half-power points, in
	// ascending order, where they lie at least 20 dB below the steered
	// direction.
	FirstNulls []float64
	// SideLobes are all other maxima within the cut but grating lobes, in
	// ascending order of angle. A maximum at the end of a line counts.
	SideLobes []Lobe
	// HighestSideLobeDB is nil if there are no side lobes.
	HighestSideLobeDB *float64
	// GratingLobes are the angles of the grating lobes, ascending. For a line
	// of equal spacings steered to a far source, in closed form; else the
	// maxima of at least half the power of the steered direction that lie
	// beyond the main lobe and above the frequency of GratingLimit.
	GratingLobes []float64
	// Peak is the angle of the largest response within half a decibel of which
	// no other maximum lies closer to the steered direction: it is off the
	// steered direction where the beam squints.
	Peak float64

	DirectivityIndexDB float64
	WhiteNoiseGainDB   float64
	DiffuseGainDB      float64 // noise reduction in diffuse noise: wᴴΓw alone
}

// nullDepth is the power re the steered direction that a minimum must fall
// below to be called a null.
const nullDepth = 0.01

// Predict returns the figures of the beam along the cut at each of the
// frequencies, Hz above 0, for sources at CutDistance. The beam must be one that
// Validate passes. Frequencies at which the beam does not respond to its steered
// direction at all have nothing but gains.
func (b Beam) Predict(cut Cut, hz []float64) []Figures {
	out := make([]Figures, 0, len(hz))
	limit, aliases := 0.0, false
	if _, plane := b.Look.(acoustics.Plane); cut.uniform == 0 || !plane {
		highest := 0.0
		for _, f := range hz {
			highest = math.Max(highest, f)
		}
		limit, aliases = GratingLimit(b.Mics, b.Look.Direction(b.Reference), b.Speed, highest)
		cut.uniform = 0
	}
	for _, f := range hz {
		v := b.along(cut, f)
		figures := v.figures(cut, aliases && f >= limit)
		figures.Hz = f
		figures.WhiteNoiseGainDB = decibels(b.WhiteNoiseGain(f))
		figures.DirectivityIndexDB = decibels(b.Directivity(f))
		figures.DiffuseGainDB = -decibels(diffusePower(v.g, distances(b.Mics), f, b.Speed))
		out = append(out, figures)
	}
	return out
}

// view is the power of a beam along a cut at one frequency.
type view struct {
	beam      Beam
	cut       Cut
	wave      func(angle float64) acoustics.Wave // of a source at an angle of the cut
	hz        float64
	g         []complex128
	reference float64 // power in the steered direction
	angles    []float64
	powers    []float64
	look      int // index of the steered direction
}

// along samples the beam along the cut, at least 24 times a lobe.
func (b Beam) along(cut Cut, hz float64) *view {
	v := &view{beam: b, cut: cut, wave: b.cutWaves(cut), hz: hz, g: b.Transfer.Response(nil, hz)}
	v.reference = power(b.to(v.g, b.Look, hz))
	lobe := b.Speed / math.Max(hz, 1) / math.Max(rig.Spread(b.Mics).Extent, 1e-6)
	n := int(math.Min(40000, math.Max(720, 24*(cut.High-cut.Low)/lobe)))
	// The steered direction is one of the samples, exactly.
	below := 0
	if cut.High > cut.Low {
		below = int(math.Round(float64(n) * (cut.At - cut.Low) / (cut.High - cut.Low)))
	}
	for i := range below {
		v.angles = append(v.angles, cut.Low+(cut.At-cut.Low)*float64(i)/float64(below))
	}
	v.look = len(v.angles)
	v.angles = append(v.angles, cut.At)
	for i := below + 1; i <= n; i++ {
		v.angles = append(v.angles, cut.At+(cut.High-cut.At)*float64(i-below)/float64(n-below))
	}
	if cut.Closed {
		v.angles = v.angles[:len(v.angles)-1] // the last is the first again
	}
	for _, a := range v.angles {
		v.powers = append(v.powers, v.power(a))
	}
	return v
}

// power is the power at an angle of the cut re the steered direction.
func (v *view) power(angle float64) float64 {
	return power(v.beam.to(v.g, v.wave(angle), v.hz)) / v.reference
}

// at returns the power of sample k, counted on beyond the ends of a closed cut,
// and whether there is one.
func (v *view) at(k int) (p float64, ok bool) {
	n := len(v.angles)
	if v.cut.Closed {
		return v.powers[((k%n)+n)%n], true
	}
	if k < 0 || k >= n {
		return 0, false
	}
	return v.powers[k], true
}

// angle returns the angle of sample k, counted on beyond the ends of a closed
// cut.
func (v *view) angle(k int) float64 {
	n, turns := len(v.angles), 0
	if v.cut.Closed {
		turns = int(math.Floor(float64(k) / float64(n)))
	}
	return v.angles[k-turns*n] + float64(turns)*(v.cut.High-v.cut.Low)
}

func (v *view) figures(cut Cut, aliased bool) Figures {
	f := Figures{Peak: cut.At}
	if !(v.reference > 0) {
		return f
	}
	var ends [2]int // last samples of the main lobe, below and above
	for side, sign := range [2]int{-1, 1} {
		edge, null, end := v.side(sign)
		f.Edges[side], ends[side] = edge, end
		if null != nil {
			f.FirstNulls = append(f.FirstNulls, *null)
		}
	}
	sort.Float64s(f.FirstNulls)
	if f.Edges[0] != nil && f.Edges[1] != nil {
		width := *f.Edges[1] - *f.Edges[0]
		f.Beamwidth = &width
	}
	var grating []float64
	if cut.uniform > 0 {
		grating = gratingAngles(cut.uniform, cut.At, v.hz, v.beam.Speed)
	}
	f.GratingLobes = grating
	for _, lobe := range v.outside(f.Edges, ends) {
		switch {
		case cut.uniform > 0 && v.near(lobe.Angle, grating):
		case cut.uniform == 0 && aliased && lobe.LevelDB >= decibels(gratingLevel):
			f.GratingLobes = append(f.GratingLobes, lobe.Angle)
		default:
			f.SideLobes = append(f.SideLobes, lobe)
			if f.HighestSideLobeDB == nil || lobe.LevelDB > *f.HighestSideLobeDB {
				level := lobe.LevelDB
				f.HighestSideLobeDB = &level
			}
		}
	}
	f.Peak = v.peak()
	return f
}

// side follows one side of the main lobe, down or up: the half-power point, the
// first null, and the last sample that belongs to the lobe.
func (v *view) side(sign int) (edge, null *float64, end int) {
	n, k := len(v.angles), v.look
	for {
		p, ok := v.at(k + sign)
		if !ok || sign*(k-v.look) >= n-1 {
			return nil, nil, k
		}
		k += sign
		if p < 0.5 {
			break
		}
	}
	x := bisect(v.angle(k-sign), v.angle(k), func(a float64) bool { return v.power(a) < 0.5 })
	for {
		here, _ := v.at(k)
		next, ok := v.at(k + sign)
		if !ok || sign*(k-v.look) >= n-1 {
			return &x, nil, k
		}
		if next > here {
			break
		}
		k += sign
	}
	if a := smallest(v.angle(k-1), v.angle(k+1), v.power); v.power(a) < nullDepth {
		null = &a
	}
	return &x, null, k
}

// outside returns the maxima outside the main lobe, ascending. A side without a
// half-power point is all main lobe.
func (v *view) outside(edges [2]*float64, ends [2]int) []Lobe {
	if v.cut.Closed {
		if edges[0] == nil || edges[1] == nil {
			return nil
		}
		return v.maxima(ends[1], ends[0]+len(v.angles))
	}
	var lobes []Lobe
	if edges[0] != nil {
		lobes = v.maxima(0, ends[0])
	}
	if edges[1] != nil {
		lobes = append(lobes, v.maxima(ends[1], len(v.angles)-1)...)
	}
	return lobes
}

// maxima returns the maxima among the samples from..to, ascending. The end of
// an open cut is one where the response rises towards it.
func (v *view) maxima(from, to int) []Lobe {
	var lobes []Lobe
	for k := from; k <= to; k++ {
		here, _ := v.at(k)
		left, okL := v.at(k - 1)
		right, okR := v.at(k + 1)
		if okL && left > here || okR && right >= here {
			continue
		}
		a := v.angle(k)
		if okL && okR {
			a = smallest(v.angle(k-1), v.angle(k+1), func(a float64) float64 { return -v.power(a) })
		}
		if v.cut.Closed {
			period := v.cut.High - v.cut.Low
			a -= period * math.Floor((a-v.cut.Low)/period)
		}
		lobes = append(lobes, Lobe{Angle: a, LevelDB: decibels(v.power(a))})
	}
	sort.Slice(lobes, func(i, j int) bool { return lobes[i].Angle < lobes[j].Angle })
	return lobes
}

// peak returns the angle of the largest response; of those within half a
// decibel, the one next to the steered direction.
func (v *view) peak() float64 {
	last := len(v.angles) - 1
	lobes := v.maxima(0, last)
	most := math.Inf(-1)
	for _, l := range lobes {
		most = math.Max(most, l.LevelDB)
	}
	peak, away := v.cut.At, math.Inf(1)
	for _, l := range lobes {
		if d := math.Abs(l.Angle - v.cut.At); l.LevelDB >= most-0.5 && d < away {
			peak, away = l.Angle, d
		}
	}
	return peak
}

// near reports whether an angle is within half a lobe, in the cosine, of one of
// the angles.
func (v *view) near(angle float64, of []float64) bool {
	half := 0.5 * v.beam.Speed / v.hz / (rig.Spread(v.beam.Mics).Extent + v.cut.uniform)
	for _, a := range of {
		if math.Abs(math.Cos(a)-math.Cos(angle)) < half {
			return true
		}
	}
	return false
}

// bisect returns where is turns from false to true between from, where it is
// false, and to.
func bisect(from, to float64, is func(float64) bool) float64 {
	for range 60 {
		mid := (from + to) / 2
		if is(mid) {
			to = mid
		} else {
			from = mid
		}
	}
	return (from + to) / 2
}

// smallest returns where f is smallest between a and b by golden section.
func smallest(a, b float64, f func(float64) float64) float64 {
	if a > b {
		a, b = b, a
	}
	const golden = 0.6180339887498949
	x, y := b-golden*(b-a), a+golden*(b-a)
	fx, fy := f(x), f(y)
	for range 60 {
		if fx < fy {
			b, y, fy = y, x, fx
			x = b - golden*(b-a)
			fx = f(x)
		} else {
			a, x, fx = x, y, fy
			y = a + golden*(b-a)
			fy = f(y)
		}
	}
	return (a + b) / 2
}
