package response

import (
	"math"
	"sort"

	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// NoApertureDB is the predicted gain in diffuse noise below which a band is
// flagged no-aperture: the rig is too small for the wavelength to help.
const NoApertureDB = 1.0

// gratingLevel is the power, re the steered direction, from which on a lobe of
// a rig without equal spacings counts as a grating lobe: half.
const gratingLevel = 0.5

// GratingLimit returns the lowest frequency, Hz, at which a grating lobe lies
// inside the visible region when the rig is steered to direction toward (plane
// waves; the direction of a near source stands for it). Every band that
// reaches up to it or beyond is to be flagged. ok is false if there is none up
// to maxHz.
//
// For a line of equal spacings d it is the closed form c/(d(1+|cos θ|)), θ the
// angle from the axis, at which the peak of the first grating lobe comes in
// over the end of the line [Van Trees 2002, section 2.4]. Other rigs have no
// exact grating lobes: there it is the lowest frequency at which delay-and-sum
// hears some direction outside its main lobe with at least half the power,
// found by a search over the sphere to about 1 %.
func GratingLimit(mics []rig.Point, toward rig.Direction, speed, maxHz float64) (hz float64, ok bool) {
	if axis, spacing, line := beam.UniformLine(mics); line {
		hz = speed / (spacing * (1 + math.Abs(axis.Dot(toward.Unit()))))
		return hz, hz <= maxHz
	}
	if len(mics) < 2 {
		return 0, false
	}
	return searchGrating(mics, toward.Unit(), speed, maxHz)
}

// gratingAngles returns the grating lobes of a line of equal spacings steered
// to the angle at from its axis, ascending: cos θ = cos θ0 - mλ/d for whole
// m ≠ 0 [Van Trees 2002, section 2.4].
func gratingAngles(spacing, at, hz, speed float64) []float64 {
	var angles []float64
	period, c := speed/(hz*spacing), math.Cos(at)
	for m := math.Ceil((c - 1) / period); m <= math.Floor((c+1)/period); m++ {
		if m != 0 {
			angles = append(angles, math.Acos(math.Max(-1, math.Min(1, c-m*period))))
		}
	}
	sort.Float64s(angles)
	return angles
}

// GratingEntry is a grating lobe of a line of equal spacings coming in.
type GratingEntry struct {
	Order int     // m of cos θ = cos θ0 - mλ/d
	Hz    float64 // from which on the lobe's peak is in the visible region
	Angle float64 // from the axis, radians, where it comes in: 0 or π
}

// GratingEntries returns the grating lobes of a line of equal spacings that
// come in up to maxHz, by frequency; ok is false for other rigs, which have no
// exact ones.
func GratingEntries(mics []rig.Point, toward rig.Direction, speed, maxHz float64) (entries []GratingEntry, ok bool) {
	axis, spacing, ok := beam.UniformLine(mics)
	if !ok {
		return nil, false
	}
	c := axis.Dot(toward.Unit())
	for m := 1; ; m++ {
		up, down := float64(m)*speed/(spacing*(1+c)), float64(m)*speed/(spacing*(1-c))
		if !(up <= maxHz) && !(down <= maxHz) {
			break
		}
		if up <= maxHz {
			entries = append(entries, GratingEntry{m, up, math.Pi})
		}
		if down <= maxHz {
			entries = append(entries, GratingEntry{-m, down, 0})
		}
	}
	sort.SliceStable(entries, func(i, j int) bool { return entries[i].Hz < entries[j].Hz })
	return entries, true
}

// searchGrating follows, for every direction u, the response of delay-and-sum
// steered to u0 as the frequency rises: it leaves 1, falls through the main
// lobe, and the first return to gratingLevel is a grating lobe in direction u.
func searchGrating(mics []rig.Point, u0 rig.Point, speed, maxHz float64) (hz float64, ok bool) {
	g := rig.Spread(mics)
	if g.Extent == 0 {
		return 0, false
	}
	kMax := 2 * math.Pi * maxHz / speed
	best := kMax
	s := lobeSearch{phase: make([]float64, len(mics)), z: make([]complex128, len(mics)), step: make([]complex128, len(mics))}
	for _, u := range searchDirections(g, kMax) {
		v := u.Sub(u0)
		s.far = 0
		for m, p := range mics {
			s.phase[m] = p.Sub(g.Centre).Dot(v)
			s.far = math.Max(s.far, math.Abs(s.phase[m]))
		}
		if k := s.first(best); k < best {
			best, ok = k, true
		}
	}
	return best * speed / (2 * math.Pi), ok
}

// searchDirections spreads directions over what the rig can tell apart: the
// cone angles of a line, one side of a flat rig, the whole sphere else. A lobe
// is about λ/extent wide; directions lie a fifth of that apart at the highest
// wave number, at most 8000 of them.
func searchDirections(g rig.Geometry, kMax float64) []rig.Point {
	fine := 5 * kMax * g.Extent / (2 * math.Pi) // directions a radian
	var dirs []rig.Point
	if g.Shape == rig.ShapeLine {
		n := int(math.Min(8000, math.Max(500, math.Pi*fine)))
		for i := range n + 1 {
			s, c := math.Sincos(math.Pi * float64(i) / float64(n))
			dirs = append(dirs, g.Axis.Scale(c).Add(g.Normal.Scale(s)))
		}
		return dirs
	}
	n := int(math.Min(8000, math.Max(1000, 4*math.Pi*fine*fine)))
	for i := range n {
		u := spherePoint(i, n)
		if g.Shape == rig.ShapeFlat && u.Dot(g.Normal) < 0 {
			continue
		}
		dirs = append(dirs, u)
	}
	return dirs
}

// lobeSearch looks for the first grating lobe in one direction.
type lobeSearch struct {
	phase   []float64 // path difference re the steered direction, metres a microphone
	far     float64   // largest of them
	z, step []complex128
}

// first returns the smallest wave number below most, rad/m, at which the
// power of delay-and-sum is back at gratingLevel after the main lobe, or most.
func (s *lobeSearch) first(most float64) float64 {
	// Steps of at most half a radian between any microphone and the centre: a
	// lobe between its half-power points is some five radians wide.
	const turn = 0.5
	if s.far*most < turn {
		return most
	}
	dk := turn / s.far
	for m, x := range s.phase {
		sin, cos := math.Sincos(dk * x)
		s.step[m] = complex(cos, sin)
		s.z[m] = 1
	}
	left, before := false, 1.0
	scale := 1 / float64(len(s.phase)*len(s.phase))
	for i := 1; float64(i-1)*dk < most; i++ {
		var sum complex128
		for m := range s.z {
			s.z[m] *= s.step[m]
			sum += s.z[m]
		}
		p := (real(sum)*real(sum) + imag(sum)*imag(sum)) * scale
		switch {
		case !left:
			left = p < gratingLevel/2
		case p >= gratingLevel:
			k := (float64(i) - (p-gratingLevel)/(p-before)) * dk
			return math.Min(k, most)
		}
		before = p
	}
	return most
}

// spherePoint returns point i of n that lie evenly over the unit sphere, on a
// spiral with the golden angle.
func spherePoint(i, n int) rig.Point {
	z := 1 - (2*float64(i)+1)/float64(n)
	r := math.Sqrt(1 - z*z)
	s, c := math.Sincos(math.Pi * (3 - math.Sqrt(5)) * float64(i))
	return rig.Point{X: r * c, Y: r * s, Z: z}
}
