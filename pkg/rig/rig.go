package rig

import (
	"fmt"
	"math"
)

// Point is a place in rig coordinates, metres.
type Point struct{ X, Y, Z float64 }

// Sub returns p - q.
func (p Point) Sub(q Point) Point { return Point{p.X - q.X, p.Y - q.Y, p.Z - q.Z} }

// Add returns p + q.
func (p Point) Add(q Point) Point { return Point{p.X + q.X, p.Y + q.Y, p.Z + q.Z} }

// Scale returns s·p.
func (p Point) Scale(s float64) Point { return Point{s * p.X, s * p.Y, s * p.Z} }

// Dot returns the scalar product of p and q.
func (p Point) Dot(q Point) float64 { return p.X*q.X + p.Y*q.Y + p.Z*q.Z }

// Cross returns the vector product of p and q.
func (p Point) Cross(q Point) Point {
	return Point{p.Y*q.Z - p.Z*q.Y, p.Z*q.X - p.X*q.Z, p.X*q.Y - p.Y*q.X}
}

// Norm returns the length of p, metres.
func (p Point) Norm() float64 { return math.Sqrt(p.Dot(p)) }

// Distance returns the distance of p and q, metres.
func (p Point) Distance(q Point) float64 { return p.Sub(q).Norm() }

// Direction is where something lies as seen from a reference point, radians.
type Direction struct{ Azimuth, Elevation float64 }

// Degrees returns the direction of the given azimuth and elevation in degrees,
// the azimuth brought into -180 < az <= 180.
func Degrees(azimuthDeg, elevationDeg float64) Direction {
	return Direction{Azimuth: WrapDeg(azimuthDeg) * math.Pi / 180, Elevation: elevationDeg * math.Pi / 180}
}

// Unit returns the unit vector towards d.
func (d Direction) Unit() Point {
	ce := math.Cos(d.Elevation)
	return Point{ce * math.Cos(d.Azimuth), ce * math.Sin(d.Azimuth), math.Sin(d.Elevation)}
}

// AzimuthDeg returns the azimuth in degrees, -180 < az <= 180.
func (d Direction) AzimuthDeg() float64 { return WrapDeg(d.Azimuth * 180 / math.Pi) }

// ElevationDeg returns the elevation in degrees.
func (d Direction) ElevationDeg() float64 { return d.Elevation * 180 / math.Pi }

// Toward returns the direction of p as seen from the origin, the zero
// direction for p = 0. The direction of a place s seen from a reference point
// r is Toward(s.Sub(r)).
func Toward(p Point) Direction {
	return Direction{Azimuth: math.Atan2(p.Y, p.X), Elevation: math.Atan2(p.Z, math.Hypot(p.X, p.Y))}
}

// WrapDeg brings an angle in degrees into -180 < a <= 180.
func WrapDeg(a float64) float64 {
	a = math.Mod(a, 360)
	switch {
	case a <= -180:
		return a + 360
	case a > 180:
		return a - 360
	}
	return a
}

// AngleBetween returns the angle between two directions, radians, 0..pi.
func AngleBetween(a, b Direction) float64 {
	u, v := a.Unit(), b.Unit()
	return math.Atan2(u.Cross(v).Norm(), u.Dot(v))
}

// Mic is one microphone of a rig.
type Mic struct {
	Name     string
	Channel  int     // channel of the take, counted from 1
	At       Point   // metres
	GainDB   float64 // correction: what is added to the channel, dB
	Delay    float64 // correction: what is added to the channel's time, seconds
	Inverted bool    // polarity: inverted; undone by a factor -1
	Use      bool    // false: left out, and not part of the reference point

	SensitivityMVPa float64 // mV/Pa, 0 if not known
	// SensitivityDBFS is what the channel reads at a sound pressure level of 94
	// dB before its gain correction, dBFS (AES17: a full-scale sine reads 0); nil
	// if not known.
	SensitivityDBFS *float64
	Response        *Response // nil: the channel needs no filter
	ClockPPM        float64   // positive: the channel's clock runs fast, parts per million
}

// Response is a filter that makes a channel agree with the others over
// frequency, beside its gain and delay.
type Response struct {
	RateHz int       // frames per second of the takes that it is made for
	Taps   []float64 // an odd number, the middle one at no delay
}

// Factor returns the factor that the channel is multiplied by: the gain
// correction with the sign of the polarity.
func (m Mic) Factor() float64 {
	g := math.Pow(10, m.GainDB/20)
	if m.Inverted {
		return -g
	}
	return g
}

// Air is the air of a rig file. A nil field was not given.
type Air struct {
	TemperatureC *float64
	HumidityPct  *float64
	PressureKPa  *float64
}

// CentreReference is the Reference of a rig whose reference point is the mean
// of its used microphones.
const CentreReference = "centre"

// Rig is the microphones of one array.
type Rig struct {
	Name       string
	Air        Air
	Reference  string   // CentreReference or the name of a microphone
	HeadingDeg *float64 // compass heading of +y, degrees clockwise from true north; nil if not given
	Mics       []Mic    // in file order
	Limits     Limits   // of the inspection of takes
}

// Limits say from where on something about a take of this rig is a finding. A
// zero field takes the default of package quality; a negative one turns the
// check off.
type Limits struct {
	DeadDB        float64 `json:"dead_db,omitempty" jsonschema:"minimum=-200,maximum=200" jsonschema_description:"a channel this far below the middle one is dead, dB; 35 if absent"`
	SilentDBFS    float64 `json:"silent_dbfs,omitempty" jsonschema:"minimum=-200,maximum=200" jsonschema_description:"and one below this level whatever the others do, dBFS; -110 if absent"`
	LevelDB       float64 `json:"level_db,omitempty" jsonschema:"minimum=-200,maximum=200" jsonschema_description:"level against the middle channel, dB; 1 if absent"`
	ClippedShare  float64 `json:"clipped_share,omitempty" jsonschema:"minimum=-200,maximum=1" jsonschema_description:"share of frames on a flat top; 0.0005 if absent"`
	DC            float64 `json:"dc,omitempty" jsonschema:"minimum=-200,maximum=1" jsonschema_description:"constant offset, full scale 1; 0.002 if absent"`
	HumDB         float64 `json:"hum_db,omitempty" jsonschema:"minimum=-200,maximum=200" jsonschema_description:"mains lines above the spectrum around them, dB; 9 if absent"`
	WindShare     float64 `json:"wind_share,omitempty" jsonschema:"minimum=-200,maximum=1" jsonschema_description:"incoherent part of the power from 20 to 120 Hz; 0.25 if absent"`
	HandlingDB    float64 `json:"handling_db,omitempty" jsonschema:"minimum=-200,maximum=200" jsonschema_description:"thumps above the middle level below 80 Hz, dB; 20 if absent"`
	NoiseFloorDB  float64 `json:"noise_floor_db,omitempty" jsonschema:"minimum=-200,maximum=200" jsonschema_description:"quietest moments above those of the middle channel, dB; 6 if absent"`
	DelayUS       float64 `json:"delay_us,omitempty" jsonschema:"minimum=-200,maximum=100000" jsonschema_description:"a late or early channel, microseconds; 6 if absent"`
	DriftPPM      float64 `json:"drift_ppm,omitempty" jsonschema:"minimum=-200,maximum=10000" jsonschema_description:"one clock against the others, parts per million; 0.5 if absent"`
	ScalePct      float64 `json:"scale_pct,omitempty" jsonschema:"minimum=-200,maximum=100" jsonschema_description:"delays against the geometry, per cent; 2 if absent"`
	CoherenceLoss float64 `json:"coherence_loss,omitempty" jsonschema:"minimum=-200,maximum=1" jsonschema_description:"coherence as a part of the middle channel's; 0.25 if absent"`
}

// Used returns the indices into Mics of the microphones with Use set.
func (r *Rig) Used() []int {
	var used []int
	for m := range r.Mics {
		if r.Mics[m].Use {
			used = append(used, m)
		}
	}
	return used
}

// Positions returns the places of the used microphones, metres, in the order
// of Used.
func (r *Rig) Positions() []Point {
	var at []Point
	for _, m := range r.Used() {
		at = append(at, r.Mics[m].At)
	}
	return at
}

// ReferencePoint returns the point whose sound the output reproduces: the mean
// of all microphones with Use set in the file, or the place of the named one.
func (r *Rig) ReferencePoint() Point {
	if r.Reference != "" && r.Reference != CentreReference {
		if m, ok := r.Find(r.Reference); ok {
			return r.Mics[m].At
		}
	}
	at := r.Positions()
	var sum Point
	for _, p := range at {
		sum = sum.Add(p)
	}
	if len(at) == 0 {
		return Point{}
	}
	return sum.Scale(1 / float64(len(at)))
}

// Find returns the index into Mics of the microphone of that name.
func (r *Rig) Find(name string) (m int, ok bool) {
	for m := range r.Mics {
		if r.Mics[m].Name == name {
			return m, true
		}
	}
	return 0, false
}

// Compass returns the compass heading of an azimuth, 0 <= heading < 360
// degrees clockwise from true north, and whether the rig states one.
func (r *Rig) Compass(d Direction) (headingDeg float64, ok bool) {
	if r.HeadingDeg == nil {
		return 0, false
	}
	h := math.Mod(*r.HeadingDeg+90-d.AzimuthDeg(), 360)
	if h < 0 {
		h += 360
	}
	return h, true
}

// Shape says what a rig can tell apart.
type Shape int

// The shapes of a set of microphones.
const (
	ShapePoint Shape = iota // one place: no direction at all
	ShapeLine               // all on one straight line: the cone angle around it
	ShapeFlat               // all in one plane: not the one side from the other
	ShapeSolid              // every direction
)

// String returns "point", "line", "flat" or "solid".
func (s Shape) String() string {
	switch s {
	case ShapePoint:
		return "point"
	case ShapeLine:
		return "line"
	case ShapeFlat:
		return "flat"
	case ShapeSolid:
		return "solid"
	}
	return fmt.Sprintf("Shape(%d)", int(s))
}

// flatness is the spread across an axis, relative to the largest spread, below
// which a rig counts as not extending along that axis.
const flatness = 0.02

// Geometry is how a set of microphones is spread.
type Geometry struct {
	Shape  Shape
	Centre Point
	Axis   Point   // unit vector along the largest spread; the line of a line rig
	Normal Point   // unit vector along the smallest spread; the normal of a flat rig
	Extent float64 // largest distance between two microphones, metres
	// Nearest is the smallest distance between two microphones, metres, 0 if
	// there are fewer than two.
	Nearest float64
}

// Spread returns the geometry of the places at. Axis and Normal point to the
// side of +x, else +y, else +z.
func Spread(at []Point) Geometry {
	g := Geometry{Axis: Point{X: 1}, Normal: Point{Z: 1}}
	if len(at) == 0 {
		return g
	}
	for _, p := range at {
		g.Centre = g.Centre.Add(p.Scale(1 / float64(len(at))))
	}
	var scatter [3][3]float64
	g.Nearest = math.Inf(1)
	for i, p := range at {
		d := p.Sub(g.Centre)
		v := [3]float64{d.X, d.Y, d.Z}
		for a := range 3 {
			for b := range 3 {
				scatter[a][b] += v[a] * v[b]
			}
		}
		for _, q := range at[:i] {
			g.Extent = math.Max(g.Extent, p.Distance(q))
			g.Nearest = math.Min(g.Nearest, p.Distance(q))
		}
	}
	if math.IsInf(g.Nearest, 1) {
		g.Nearest = 0
	}
	values, vectors := eigenSymmetric3(scatter)
	if g.Extent == 0 {
		return g
	}
	g.Axis, g.Normal = front(vectors[0]), front(vectors[2])
	switch {
	case values[1] <= flatness*flatness*values[0]:
		g.Shape = ShapeLine
	case values[2] <= flatness*flatness*values[0]:
		g.Shape = ShapeFlat
	default:
		g.Shape = ShapeSolid
	}
	return g
}

// front returns v or -v, whichever points to +x, else +y, else +z.
func front(v Point) Point {
	const tiny = 1e-9
	for _, c := range []float64{v.X, v.Y, v.Z} {
		if math.Abs(c) > tiny {
			if c < 0 {
				return v.Scale(-1)
			}
			return v
		}
	}
	return v
}

// eigenSymmetric3 returns the eigenvalues of a symmetric 3 by 3 matrix, largest
// first, with unit eigenvectors, by cyclic Jacobi rotations.
func eigenSymmetric3(a [3][3]float64) (values [3]float64, vectors [3]Point) {
	v := [3][3]float64{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}
	for range 64 {
		off := math.Abs(a[0][1]) + math.Abs(a[0][2]) + math.Abs(a[1][2])
		if off <= 1e-18*(math.Abs(a[0][0])+math.Abs(a[1][1])+math.Abs(a[2][2])) {
			break
		}
		for p := 0; p < 2; p++ {
			for q := p + 1; q < 3; q++ {
				if a[p][q] == 0 {
					continue
				}
				theta := (a[q][q] - a[p][p]) / (2 * a[p][q])
				t := 1 / (math.Abs(theta) + math.Sqrt(theta*theta+1))
				if theta < 0 {
					t = -t
				}
				c := 1 / math.Sqrt(t*t+1)
				s := t * c
				for k := range 3 {
					a[k][p], a[k][q] = c*a[k][p]-s*a[k][q], s*a[k][p]+c*a[k][q]
				}
				for k := range 3 {
					a[p][k], a[q][k] = c*a[p][k]-s*a[q][k], s*a[p][k]+c*a[q][k]
				}
				for k := range 3 {
					v[k][p], v[k][q] = c*v[k][p]-s*v[k][q], s*v[k][p]+c*v[k][q]
				}
			}
		}
	}
	order := [3]int{0, 1, 2}
	for i := range 2 {
		for j := i + 1; j < 3; j++ {
			if a[order[j]][order[j]] > a[order[i]][order[i]] {
				order[i], order[j] = order[j], order[i]
			}
		}
	}
	for i, k := range order {
		values[i] = a[k][k]
		vectors[i] = Point{v[0][k], v[1][k], v[2][k]}
	}
	return values, vectors
}

// Ambiguity says in words what the shape cannot tell apart, and is empty for a
// solid rig.
func (g Geometry) Ambiguity() string {
	switch g.Shape {
	case ShapePoint:
		return "microphones in one place tell no direction"
	case ShapeLine:
		return "a line of microphones hears every direction of a cone around its axis alike: front and back, above and below cannot be told apart"
	case ShapeFlat:
		return "a flat rig cannot tell the two sides of its plane apart: above and below are the same to it if it lies level"
	}
	return ""
}
