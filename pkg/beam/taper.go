package beam

import (
	"errors"
	"fmt"
	"math"
	"sort"
	"strconv"
	"strings"

	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// Taper is a set of amplitude weights over the microphones. The zero value is
// uniform. ParseTaper makes one from its name.
//
// On a line of equal spacings the amplitudes are the standard ones of the
// window of that name with as many points as there are microphones. On a line
// of unequal spacings the continuous form of the window is sampled at the
// places of the microphones along the line, about the middle of the line. On a
// flat or solid rig it is sampled by the distance from the centre (the mean of
// the microphones), so that a single ring is weighted uniformly; the side-lobe
// level of a Taylor taper is then a parameter, not a promise. Dolph-Chebyshev
// has no continuous form and is refused there.
type Taper struct {
	kind taperKind
	// parameter is beta of kaiser (no unit) and the side-lobe level of
	// dolph-chebyshev and taylor (dB below the main lobe, positive).
	parameter float64
	nbar      int // taylor
}

type taperKind int

const (
	taperUniform taperKind = iota
	taperHann
	taperHamming
	taperKaiser
	taperDolphChebyshev
	taperTaylor
)

// taperForms lists the names in the order in which they are shown.
var taperForms = [...]struct {
	kind         taperKind
	name, form   string
	defaultValue float64
	defaultNBar  int
	low, high    float64
	meaning      string
}{
	{taperUniform, "uniform", "uniform", 0, 0, 0, 0, ""},
	{taperHann, "hann", "hann", 0, 0, 0, 0, ""},
	{taperHamming, "hamming", "hamming", 0, 0, 0, 0, ""},
	{taperKaiser, "kaiser", "kaiser:BETA", 4, 0, 0, 20, "beta"},
	{taperDolphChebyshev, "dolph-chebyshev", "dolph-chebyshev:DB", 30, 0, 15, 100, "side-lobe level in dB"},
	{taperTaylor, "taylor", "taylor:DB:NBAR", 30, 4, 15, 80, "side-lobe level in dB"},
}

// maxNBar bounds nbar of a Taylor taper.
const maxNBar = 32

// TaperForms returns how each taper is written, with its parameters:
// "kaiser:BETA" and so on. Parameters may be left out; the defaults are
// kaiser:4, dolph-chebyshev:30 and taylor:30:4.
func TaperForms() []string {
	var forms []string
	for _, f := range taperForms {
		forms = append(forms, f.form)
	}
	return forms
}

// ParseTaper reads a taper written as one of TaperForms. The error of an
// unknown name lists those that exist; the error of a parameter out of range
// gives the range.
func ParseTaper(s string) (Taper, error) {
	name, rest, has := strings.Cut(s, ":")
	for _, f := range taperForms {
		if f.name != name {
			continue
		}
		t := Taper{kind: f.kind, parameter: f.defaultValue, nbar: f.defaultNBar}
		if !has {
			return t, nil
		}
		fields := strings.Split(rest, ":")
		most := 0
		if f.meaning != "" {
			most = 1
		}
		if f.kind == taperTaylor {
			most = 2
		}
		if len(fields) > most {
			return Taper{}, fmt.Errorf("taper %q: too many parameters: it is written %s", s, f.form)
		}
		v, err := strconv.ParseFloat(fields[0], 64)
		if err != nil || !(v >= f.low && v <= f.high) {
			return Taper{}, fmt.Errorf("taper %q: %s %q: want a number from %g to %g", s, f.meaning, fields[0], f.low, f.high)
		}
		t.parameter = v
		if len(fields) == 2 {
			n, err := strconv.Atoi(fields[1])
			if err != nil || n < 2 || n > maxNBar {
				return Taper{}, fmt.Errorf("taper %q: nbar %q: want a whole number from 2 to %d", s, fields[1], maxNBar)
			}
			t.nbar = n
		}
		return t, nil
	}
	return Taper{}, fmt.Errorf("taper %q is not known: there are %s", s, strings.Join(TaperForms(), ", "))
}

// String returns the taper as ParseTaper reads it, with all its parameters.
func (t Taper) String() string {
	name := taperForms[t.kind].name
	switch t.kind {
	case taperKaiser, taperDolphChebyshev:
		return fmt.Sprintf("%s:%g", name, t.parameter)
	case taperTaylor:
		return fmt.Sprintf("%s:%g:%d", name, t.parameter, t.nbar)
	}
	return name
}

// Uniform reports whether the taper weights all microphones alike.
func (t Taper) Uniform() bool { return t.kind == taperUniform }

// Amplitudes returns the amplitude weight of every microphone, in the order of
// mics, real and with the sum 1 (no distortion in the steered direction). It
// returns an error for no microphones, for a rig that the taper is not defined
// on, and for amplitudes that add up to nothing.
func (t Taper) Amplitudes(mics []rig.Point) ([]float64, error) {
	n := len(mics)
	if n == 0 {
		return nil, errors.New("taper: no microphones")
	}
	a := make([]float64, n)
	_, spacing, order, line := lineGrid(mics)
	switch {
	case t.kind == taperUniform || n == 1:
		for m := range a {
			a[m] = 1
		}
	case t.kind == taperDolphChebyshev:
		if !line {
			return nil, fmt.Errorf("taper %s: the microphones do not stand on a line with equal spacings, the only rig it is defined on: take kaiser or taylor", t)
		}
		for i, v := range dolphChebyshev(n, t.parameter) {
			a[order[i]] = v
		}
	case line:
		for i, m := range order {
			a[m] = t.continuous((float64(i)-float64(n-1)/2)*spacing, float64(n-1)*spacing, spacing)
		}
	default:
		t.sample(a, mics)
	}
	var sum, sumAbs float64
	for _, v := range a {
		sum += v
		sumAbs += math.Abs(v)
	}
	if !(sum > 0.01*sumAbs) {
		return nil, fmt.Errorf("taper %s: the amplitudes of %d microphones add up to %.3g of their size: too few microphones for these parameters", t, n, sum/sumAbs)
	}
	for m := range a {
		a[m] /= sum
	}
	return a, nil
}

// sample fills a from the continuous form on a rig that is not a line of equal
// spacings.
func (t Taper) sample(a []float64, mics []rig.Point) {
	g := rig.Spread(mics)
	if g.Shape == rig.ShapeLine {
		low, high := math.Inf(1), math.Inf(-1)
		for m, p := range mics {
			a[m] = p.Sub(g.Centre).Dot(g.Axis)
			low, high = math.Min(low, a[m]), math.Max(high, a[m])
		}
		for m, x := range a {
			a[m] = t.continuous(x-(low+high)/2, high-low, (high-low)/float64(len(mics)-1))
		}
		return
	}
	var radius, spacing float64
	for m, p := range mics {
		a[m] = p.Distance(g.Centre)
		radius = math.Max(radius, a[m])
		nearest := math.Inf(1)
		for k, q := range mics {
			if k != m {
				nearest = math.Min(nearest, p.Distance(q))
			}
		}
		spacing += nearest / float64(len(mics))
	}
	for m, r := range a {
		a[m] = t.continuous(r, 2*radius, spacing)
	}
}

// continuous returns the taper at x metres from the middle of an aperture of
// the given length between its outermost microphones, whose mean spacing is
// spacing. The windows reach beyond the outermost microphones as far as makes
// them the standard ones on a uniform line: Hann (without zero ends) by one
// spacing on each side, Taylor by half a spacing, Hamming and Kaiser not.
func (t Taper) continuous(x, length, spacing float64) float64 {
	switch t.kind {
	case taperHann:
		c := math.Cos(math.Pi * x / (length + 2*spacing))
		return c * c
	case taperHamming:
		if length == 0 {
			return 1
		}
		return 0.54 + 0.46*math.Cos(2*math.Pi*x/length)
	case taperKaiser:
		if length == 0 {
			return 1
		}
		return spectral.Kaiser(t.parameter)(2 * x / length)
	case taperTaylor:
		return taylorShape(x/(length+spacing), t.parameter, t.nbar)
	}
	return 1
}

// uniformTolerance is how far a microphone may stand from its place on a line
// of equal spacings, as a part of the spacing.
const uniformTolerance = 0.02

// UniformLine reports whether the microphones stand on a line with equal
// spacings (each within 2 % of a spacing of its place), in any order, and
// returns the unit vector along the line and the spacing in metres. One
// microphone is no line.
func UniformLine(mics []rig.Point) (axis rig.Point, spacing float64, ok bool) {
	axis, spacing, _, ok = lineGrid(mics)
	return axis, spacing, ok
}

// lineGrid is UniformLine with the order of the microphones along the axis.
func lineGrid(mics []rig.Point) (axis rig.Point, spacing float64, order []int, ok bool) {
	n := len(mics)
	if n < 2 {
		return rig.Point{}, 0, nil, false
	}
	g := rig.Spread(mics)
	if g.Shape != rig.ShapeLine {
		return rig.Point{}, 0, nil, false
	}
	along := make([]float64, n)
	order = make([]int, n)
	for m, p := range mics {
		along[m] = p.Sub(g.Centre).Dot(g.Axis)
		order[m] = m
	}
	sort.SliceStable(order, func(i, j int) bool { return along[order[i]] < along[order[j]] })
	// Least-squares spacing about the centre, where the sum of along is zero.
	var num, den float64
	for i, m := range order {
		x := float64(i) - float64(n-1)/2
		num += x * along[m]
		den += x * x
	}
	spacing = num / den
	for i, m := range order {
		place := g.Centre.Add(g.Axis.Scale((float64(i) - float64(n-1)/2) * spacing))
		if mics[m].Distance(place) > uniformTolerance*spacing {
			return rig.Point{}, 0, nil, false
		}
	}
	return g.Axis, spacing, order, true
}
