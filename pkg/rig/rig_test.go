package rig

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

func near(a, b, tolerance float64) bool { return math.Abs(a-b) <= tolerance }

// ISO 80000-2:2019, item 2-17.3 (spherical coordinates), with elevation from
// the horizontal plane in place of the polar angle: the axes, worked out by
// hand.
func TestAnglesRunFromXTowardsYAndUp(t *testing.T) {
	for _, c := range []struct {
		az, el float64
		u      Point
	}{
		{0, 0, Point{1, 0, 0}}, {90, 0, Point{0, 1, 0}}, {180, 0, Point{-1, 0, 0}}, {-90, 0, Point{0, -1, 0}}, {270, 0, Point{0, -1, 0}},
		{17, 90, Point{0, 0, 1}}, {17, -90, Point{0, 0, -1}}, {45, 0, Point{math.Sqrt2 / 2, math.Sqrt2 / 2, 0}},
		{60, 30, Point{math.Sqrt(3) / 4, 0.75, 0.5}},
	} {
		d := Degrees(c.az, c.el)
		if u := d.Unit(); u.Distance(c.u) > 1e-15 {
			t.Errorf("azimuth %g, elevation %g: unit %v, want %v", c.az, c.el, u, c.u)
		}
		if n := d.Unit().Norm(); !near(n, 1, 1e-15) {
			t.Errorf("azimuth %g, elevation %g: length %g", c.az, c.el, n)
		}
		back := Toward(c.u.Scale(3.7))
		if math.Abs(c.el) < 90 && AngleBetween(back, d) > 1e-15*10 {
			t.Errorf("azimuth %g, elevation %g came back as %g, %g", c.az, c.el, back.AzimuthDeg(), back.ElevationDeg())
		}
		if !near(back.ElevationDeg(), c.el, 1e-13) {
			t.Errorf("elevation %g came back as %g", c.el, back.ElevationDeg())
		}
	}
	if d := Toward(Point{}); d != (Direction{}) {
		t.Errorf("the direction of nowhere is %v", d)
	}
}

func TestAzimuthIsBroughtIntoItsRange(t *testing.T) {
	for _, c := range []struct{ in, want float64 }{
		{0, 0}, {180, 180}, {-180, 180}, {181, -179}, {-181, 179}, {359, -1}, {360, 0}, {-360, 0}, {540, 180}, {720.5, 0.5}, {-90, -90}, {270, -90},
	} {
		if got := WrapDeg(c.in); got != c.want {
			t.Errorf("WrapDeg(%g) = %g, want %g", c.in, got, c.want)
		}
		if got := Degrees(c.in, 0).AzimuthDeg(); !near(got, c.want, 1e-13) {
			t.Errorf("Degrees(%g).AzimuthDeg() = %g, want %g", c.in, got, c.want)
		}
	}
}

func TestAngleBetweenHoldsAtItsEnds(t *testing.T) {
	for _, deg := range []float64{0, 1e-7, 0.001, 1, 45, 90, 135, 179, 179.999, 180} {
		// Along a great circle that lies askew.
		axis, start := Degrees(20, 35).Unit(), Degrees(110, 0).Unit()
		side := axis.Cross(start)
		a := deg * math.Pi / 180
		other := Toward(start.Scale(math.Cos(a)).Add(side.Scale(math.Sin(a))))
		if got := AngleBetween(Toward(start), other) * 180 / math.Pi; !near(got, deg, 1e-13*math.Max(1, deg)+1e-14*180) {
			t.Errorf("angle of %g° read as %g°", deg, got)
		}
	}
}

// Compass headings run clockwise from north: with +y to the north, +x is east.
func TestCompassTurnsTheOtherWay(t *testing.T) {
	heading := func(h float64) *Rig { return &Rig{HeadingDeg: &h} }
	for _, c := range []struct{ heading, azimuth, want float64 }{
		{0, 90, 0}, {0, 0, 90}, {0, 180, 270}, {0, -90, 180}, {12.5, 90, 12.5}, {90, 0, 180}, {350, 60, 20}, {-10, 90, 350}, {360, 90, 0}, {-360, -90, 180}, {42, 60, 72},
	} {
		got, ok := heading(c.heading).Compass(Degrees(c.azimuth, 0))
		if !ok || !near(got, c.want, 1e-12) {
			t.Errorf("heading %g, azimuth %g: compass %g, %v, want %g", c.heading, c.azimuth, got, ok, c.want)
		}
		if got < 0 || got >= 360 {
			t.Errorf("compass %g is out of its range", got)
		}
	}
	if _, ok := (&Rig{}).Compass(Degrees(90, 0)); ok {
		t.Error("a rig without a heading has a compass")
	}
}

// rotated turns places by a random rotation and moves them.
func rotated(rng *rand.Rand, at []Point) (out []Point, turn func(Point) Point) {
	// A uniformly random unit quaternion: Shoemake, "Uniform random rotations",
	// Graphics Gems III, 1992.
	var q [4]float64
	sum := 0.0
	for i := range q {
		q[i] = rng.NormFloat64()
		sum += q[i] * q[i]
	}
	for i := range q {
		q[i] /= math.Sqrt(sum)
	}
	v := Point{q[1], q[2], q[3]}
	turn = func(p Point) Point {
		c := v.Cross(p).Scale(2)
		return p.Add(c.Scale(q[0])).Add(v.Cross(c))
	}
	move := Point{rng.NormFloat64(), rng.NormFloat64(), rng.NormFloat64()}
	for _, p := range at {
		out = append(out, turn(p).Add(move))
	}
	return out, turn
}

func cloud(rng *rand.Rand, n int, x, y, z float64) []Point {
	var at []Point
	for range n {
		at = append(at, Point{x * (2*rng.Float64() - 1), y * (2*rng.Float64() - 1), z * (2*rng.Float64() - 1)})
	}
	return at
}

func TestSpreadSeesTheShapeHoweverTheRigIsTurned(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for range 200 {
		n := 4 + rng.IntN(20)
		for _, c := range []struct {
			name  string
			at    []Point
			shape Shape
		}{
			{"line", Line(n, 0.04), ShapeLine},
			{"uneven line", cloud(rng, n, 1, 0, 0), ShapeLine},
			{"two", Line(2, 0.1), ShapeLine},
			{"bent line", bent(n, 0.04, 0.0005), ShapeLine},
			{"ring", Ring(n, 0.06), ShapeFlat},
			{"three", Ring(3, 0.06), ShapeFlat},
			{"grid", Grid(3, n, 0.03), ShapeFlat},
			{"almost flat ring", lifted(Ring(n, 0.06), 0.0005), ShapeFlat},
			{"solid", append(Ring(n, 0.06), Point{Z: 0.06}), ShapeSolid},
		} {
			at, turn := rotated(rng, c.at)
			g := Spread(at)
			if g.Shape != c.shape {
				t.Errorf("%s of %d: %v, want %v", c.name, n, g.Shape, c.shape)
			}
			if !near(g.Axis.Norm(), 1, 1e-12) || !near(g.Normal.Norm(), 1, 1e-12) || !near(g.Axis.Dot(g.Normal), 0, 1e-9) {
				t.Errorf("%s: axis %v and normal %v are not unit and square", c.name, g.Axis, g.Normal)
			}
			switch c.name {
			case "line", "uneven line", "two":
				if want := turn(Point{X: 1}); !near(math.Abs(g.Axis.Dot(want)), 1, 1e-12) {
					t.Errorf("%s: axis %v, want %v", c.name, g.Axis, want)
				}
			case "ring", "three", "grid":
				if want := turn(Point{Z: 1}); !near(math.Abs(g.Normal.Dot(want)), 1, 1e-12) {
					t.Errorf("%s: normal %v, want %v", c.name, g.Normal, want)
				}
			}
			for _, v := range []Point{g.Axis, g.Normal} {
				if v.X < -1e-9 {
					t.Errorf("%s: %v points to -x", c.name, v)
				}
			}
		}
	}
}

// bent is a line with a sag; lifted is a flat rig with every other place up.
func bent(n int, spacing, sag float64) []Point {
	at := Line(n, spacing)
	for i := range at {
		at[i].Z = sag * float64(i%2)
	}
	return at
}

func lifted(at []Point, up float64) []Point {
	for i := range at {
		at[i].Z = up * float64(i%2)
	}
	return at
}

func TestSpreadMeasuresDistancesAndCentre(t *testing.T) {
	g := Spread([]Point{{0, 0, 0}, {3, 4, 0}, {0, 0, 1}})
	if !near(g.Extent, math.Sqrt(26), 1e-15) || g.Nearest != 1 || g.Centre.Distance(Point{1, 4.0 / 3, 1.0 / 3}) > 1e-15 {
		t.Errorf("got %+v", g)
	}
	for name, at := range map[string][]Point{"none": nil, "one": {{1, 2, 3}}, "two in one place": {{1, 2, 3}, {1, 2, 3}}} {
		g := Spread(at)
		if g.Shape != ShapePoint || g.Extent != 0 || g.Nearest != 0 || g.Ambiguity() == "" {
			t.Errorf("%s: %+v", name, g)
		}
	}
}

func TestAmbiguityIsSaidForAllButSolidRigs(t *testing.T) {
	words := map[Shape]bool{}
	for s := ShapePoint; s <= ShapeSolid; s++ {
		a := Geometry{Shape: s}.Ambiguity()
		if (a == "") != (s == ShapeSolid) {
			t.Errorf("%v: %q", s, a)
		}
		if s.String() == "" || words[s] {
			t.Errorf("shape %d has no word", int(s))
		}
	}
	if got := Shape(9).String(); got != "Shape(9)" {
		t.Errorf("got %q", got)
	}
}

// The eigenvalues against gonum's symmetric solver.
func TestEigenMatchesGonum(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for trial := range 500 {
		var b, a [3][3]float64
		scale := math.Pow(10, 8*rng.Float64()-8)
		for i := range 3 {
			for j := range 3 {
				b[i][j] = rng.NormFloat64() * scale
			}
			if trial%3 == 0 {
				b[i][2] = b[i][0] + 1e-9*b[i][1] // nearly singular
			}
		}
		for i := range 3 {
			for j := range 3 {
				for k := range 3 {
					a[i][j] += b[i][k] * b[j][k]
				}
			}
		}
		values, vectors := eigenSymmetric3(a)
		var want mat.EigenSym
		if !want.Factorize(mat.NewSymDense(3, []float64{a[0][0], a[0][1], a[0][2], a[1][0], a[1][1], a[1][2], a[2][0], a[2][1], a[2][2]}), false) {
			t.Fatal("gonum found no eigenvalues")
		}
		w := want.Values(nil)
		for i := range 3 {
			if !near(values[i], w[2-i], 1e-13*w[2]) {
				t.Errorf("eigenvalue %d: %g, want %g", i, values[i], w[2-i])
			}
			v := vectors[i]
			av := Point{
				a[0][0]*v.X + a[0][1]*v.Y + a[0][2]*v.Z,
				a[1][0]*v.X + a[1][1]*v.Y + a[1][2]*v.Z,
				a[2][0]*v.X + a[2][1]*v.Y + a[2][2]*v.Z,
			}
			if d := av.Distance(v.Scale(values[i])); !(d <= 1e-12*w[2]) {
				t.Errorf("A v - lambda v = %g of %g", d, w[2])
			}
		}
	}
}

func TestReferencePointIsTheMeanOfTheUsedOrTheNamedOne(t *testing.T) {
	r := &Rig{Reference: CentreReference, Mics: []Mic{
		{Name: "a", At: Point{1, 2, 3}, Use: true}, {Name: "b", At: Point{100, 0, 0}}, {Name: "c", At: Point{3, 2, 1}, Use: true},
	}}
	if p := r.ReferencePoint(); p != (Point{2, 2, 2}) {
		t.Errorf("mean %v", p)
	}
	r.Reference = "b" // a place may be the reference without being used
	if p := r.ReferencePoint(); p != (Point{100, 0, 0}) {
		t.Errorf("named %v", p)
	}
	if used := r.Used(); len(used) != 2 || used[1] != 2 || len(r.Positions()) != 2 || r.Positions()[1] != (Point{3, 2, 1}) {
		t.Errorf("used %v at %v", used, r.Positions())
	}
	if p := (&Rig{}).ReferencePoint(); p != (Point{}) {
		t.Errorf("of nothing %v", p)
	}
}

func TestFactorTakesGainAndPolarityBack(t *testing.T) {
	for _, c := range []struct {
		mic  Mic
		want float64
	}{{Mic{}, 1}, {Mic{GainDB: 20}, 10}, {Mic{GainDB: -6.020599913279624}, 0.5}, {Mic{GainDB: 20, Inverted: true}, -10}} {
		if got := c.mic.Factor(); !near(got, c.want, 1e-14*math.Abs(c.want)) {
			t.Errorf("%+v: %g, want %g", c.mic, got, c.want)
		}
	}
}
