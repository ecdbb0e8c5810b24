package draw

import (
	"bytes"
	"encoding/base64"
	"image"
	"image/color"
	"image/png"
	"math"
	"strings"
	"testing"
)

// lightness returns L* of a colour seen through a 3 by 3 matrix on linear
// light, by the formulas of IEC 61966-2-1 and CIE 15.
func lightness(c color.Color, sight [3][3]float64) float64 {
	r, g, b, _ := c.RGBA()
	linear := func(v uint32) float64 {
		x := float64(v) / 65535
		if x <= 0.04045 {
			return x / 12.92
		}
		return math.Pow((x+0.055)/1.055, 2.4)
	}
	in := [3]float64{linear(r), linear(g), linear(b)}
	var out [3]float64
	for i := range 3 {
		for j := range 3 {
			out[i] += sight[i][j] * in[j]
		}
	}
	y := 0.2126*out[0] + 0.7152*out[1] + 0.0722*out[2]
	if y > 216.0/24389 {
		return 116*math.Cbrt(y) - 16
	}
	return y * 24389 / 27
}

// Viénot, Brettel and Mollon, "Digital video colourmaps for checking the
// legibility of displays by dichromats", Color Research and Application 24(4),
// 1999: the matrices for protanopes and deuteranopes, from memory.
var sights = map[string][3][3]float64{
	"normal":       {{1, 0, 0}, {0, 1, 0}, {0, 0, 1}},
	"protanope":    {{0.11238, 0.88762, 0}, {0.11238, 0.88762, 0}, {0.00401, -0.00401, 1}},
	"deuteranope":  {{0.29275, 0.70725, 0}, {0.29275, 0.70725, 0}, {-0.02234, 0.02234, 1}},
	"grey printer": {{0.2126, 0.7152, 0.0722}, {0.2126, 0.7152, 0.0722}, {0.2126, 0.7152, 0.0722}},
}

func TestLevelsGetLighterAllTheWayForEveryKindOfSight(t *testing.T) {
	p := Palette()
	if len(p) != 256 {
		t.Fatalf("%d colours", len(p))
	}
	for name, sight := range sights {
		for i := 8; i < len(p); i++ {
			// Over eight steps, since bytes round.
			step := lightness(p[i], sight) - lightness(p[i-8], sight)
			if step < 1 || step > 5 {
				t.Errorf("%s: from %d to %d lightness steps by %.2f", name, i-8, i, step)
			}
		}
	}
}

func TestNoTwoLevelsShareAColour(t *testing.T) {
	seen := map[color.Color]int{}
	for i, c := range Palette() {
		if first, twice := seen[c]; twice {
			t.Errorf("levels %d and %d are both %v", first, i, c)
		}
		seen[c] = i
	}
}

// L*a*b* of the sRGB primaries under D65: CIE 15:2018 formulas, values as
// commonly tabled (from memory).
func TestLabColoursAreThoseOfTheTables(t *testing.T) {
	for _, c := range []struct {
		l, a, b float64
		want    color.RGBA
	}{
		{100, 0, 0, color.RGBA{255, 255, 255, 255}}, {0, 0, 0, color.RGBA{0, 0, 0, 255}}, {53.585, 0, 0, color.RGBA{128, 128, 128, 255}},
		{53.24, 80.09, 67.20, color.RGBA{255, 0, 0, 255}}, {87.73, -86.18, 83.18, color.RGBA{0, 255, 0, 255}}, {32.30, 79.19, -107.86, color.RGBA{0, 0, 255, 255}},
	} {
		got := fromLab(c.l, c.a, c.b)
		for _, d := range []int{int(got.R) - int(c.want.R), int(got.G) - int(c.want.G), int(got.B) - int(c.want.B)} {
			if d < -1 || d > 1 {
				t.Errorf("Lab %g %g %g = %v, want %v", c.l, c.a, c.b, got, c.want)
			}
		}
	}
}

func decode(t *testing.T, url string) image.Image {
	t.Helper()
	data, err := base64.StdEncoding.DecodeString(strings.TrimPrefix(url, "data:image/png;base64,"))
	if err != nil {
		t.Fatal(err)
	}
	img, err := png.Decode(bytes.NewReader(data))
	if err != nil {
		t.Fatal(err)
	}
	return img
}

func TestHeatMapCanBeReadBackFromItsPixels(t *testing.T) {
	const rows, columns = 7, 13
	levels := make([]byte, rows*columns)
	for i := range levels {
		levels[i] = byte(i * 37)
	}
	url, err := HeatMap(rows, columns, levels)
	if err != nil {
		t.Fatal(err)
	}
	img := decode(t, url).(*image.Paletted)
	for row := range rows {
		for column := range columns {
			if got := img.ColorIndexAt(column, rows-1-row); got != levels[row*columns+column] {
				t.Errorf("row %d, column %d: %d, want %d", row, column, got, levels[row*columns+column])
			}
		}
	}
	short, err := HeatMap(2, 3, []byte{1, 2, 3, 4})
	if err != nil {
		t.Fatal(err)
	}
	if img := decode(t, short).(*image.Paletted); img.ColorIndexAt(0, 0) != 4 || img.ColorIndexAt(2, 0) != 0 || img.ColorIndexAt(2, 1) != 3 {
		t.Error("missing bytes are not the lowest level")
	}
	legend, err := Legend()
	if err != nil {
		t.Fatal(err)
	}
	if img := decode(t, legend); img.Bounds().Dx() != 256 || img.At(200, 0) != Palette()[200] {
		t.Error("the legend is not the map")
	}
}

func TestScalesPlaceValues(t *testing.T) {
	lin, log := Linear(-10, 30), Log(100, 10000)
	for _, c := range []struct {
		s       Scale
		v, want float64
		inside  bool
	}{
		{lin, -10, 0, true}, {lin, 0, 25, true}, {lin, 30, 100, true}, {lin, 50, 100, false}, {lin, -50, 0, false},
		{log, 1000, 50, true}, {log, 100, 0, true}, {log, 1e6, 100, false}, {Linear(30, -10), 20, 25, true}, {Linear(1, 1), 1, 0, true},
	} {
		if got := c.s.At(c.v); math.Abs(got-c.want) > 1e-12 {
			t.Errorf("%v at %g: %g, want %g", c.s, c.v, got, c.want)
		}
		if got := c.s.Inside(c.v); got != c.inside {
			t.Errorf("%v at %g: inside %v", c.s, c.v, got)
		}
	}
}

func TestTicksAreRoundAndFew(t *testing.T) {
	for _, c := range []struct {
		low, high float64
		most      int
		want      []float64
	}{
		{0, 12, 5, []float64{0, 3, 6, 9, 12}}, {-3, 10, 5, []float64{-3, 0, 3, 6, 9}}, {0, 1, 4, []float64{0, 0.5, 1}}, {-180, 180, 5, []float64{-100, 0, 100}},
		{5, 5, 3, nil}, {0, math.Inf(1), 3, nil}, {math.NaN(), 3, 3, nil}, {0, 2.59, 6, []float64{0, 0.5, 1, 1.5, 2, 2.5}},
	} {
		got := Ticks(c.low, c.high, c.most)
		ok := len(got) == len(c.want)
		for i := range got {
			ok = ok && math.Abs(got[i]-c.want[i]) < 1e-9
		}
		if !ok {
			t.Errorf("Ticks(%g, %g, %d) = %v, want %v", c.low, c.high, c.most, got, c.want)
		}
	}
	for span := 1e-6; span < 1e9; span *= 1.7 {
		if n := len(Ticks(-span/3, span, 6)); n < 2 || n > 6 {
			t.Errorf("%d ticks over %g", n, span)
		}
	}
}

func TestDrawingEscapesAndStaysFinite(t *testing.T) {
	var s SVG
	s.Open(`a"b`, `<script>"x"&`)
	s.Text(10, math.NaN(), "t", "<b>&", "data-x", `"><script>`)
	s.Rect(math.Inf(1), 0, -5, 3, "r")
	s.Path([][2]float64{{0, 0}, {math.NaN(), 50.126}}, "p", true)
	s.Diamond(50, 50, 4, "d")
	s.Group("g")
	s.Dot(1, 2, 3, "c")
	s.Line(0, 0, 100, 100, "l")
	s.End()
	text := string(s.Close())
	for _, bad := range []string{"<script", "NaN", "Inf", `"x"`, "<b>", "width=\"-5%\""} {
		if strings.Contains(text, bad) {
			t.Errorf("%q got through in %s", bad, text)
		}
	}
	if !strings.Contains(text, `<path d="M0 0L0 50.13Z"`) || strings.Count(text, "<svg") != strings.Count(text, "</svg>") {
		t.Errorf("got %s", text)
	}
}
