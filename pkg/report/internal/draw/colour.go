package draw

import (
	"bytes"
	"encoding/base64"
	"image"
	"image/color"
	"image/png"
	"math"
)

// anchors are colours of the map of levels, from the lowest to the highest:
// ink, teal, sage, apricot, cream. Between them a* and b* run straight against
// L*, and L* rises evenly over the map, so that equal steps in level are equal
// steps in lightness for every kind of sight.
var anchors = [...]struct{ l, a, b float64 }{
	{9, -2, -9}, {34, -14, -16}, {58, -15, 12}, {78, 12, 34}, {97, -1, 13},
}

// Palette returns the map of levels: 256 colours, lightest last, no two alike.
func Palette() color.Palette {
	p := make(color.Palette, 256)
	for i := range p {
		l := anchors[0].l + (anchors[len(anchors)-1].l-anchors[0].l)*float64(i)/255
		k := 0
		for k < len(anchors)-2 && l > anchors[k+1].l {
			k++
		}
		from, to := anchors[k], anchors[k+1]
		t := (l - from.l) / (to.l - from.l)
		p[i] = fromLab(l, from.a+t*(to.a-from.a), from.b+t*(to.b-from.b))
	}
	return p
}

// fromLab returns the sRGB colour of L*a*b* under D65 [CIE 15, IEC 61966-2-1].
func fromLab(l, a, b float64) color.RGBA {
	inverse := func(t float64) float64 {
		if t > 6.0/29 {
			return t * t * t
		}
		return 3 * (6.0 / 29) * (6.0 / 29) * (t - 4.0/29)
	}
	fy := (l + 16) / 116
	x := 0.95047 * inverse(fy+a/500)
	y := inverse(fy)
	z := 1.08883 * inverse(fy-b/200)
	channel := func(v float64) uint8 {
		if v <= 0.0031308 {
			v *= 12.92
		} else {
			v = 1.055*math.Pow(v, 1/2.4) - 0.055
		}
		return uint8(math.Round(255 * math.Min(1, math.Max(0, v))))
	}
	return color.RGBA{
		R: channel(3.2406255*x - 1.5372080*y - 0.4986286*z),
		G: channel(-0.9689307*x + 1.8757561*y + 0.0415175*z),
		B: channel(0.0557101*x - 0.2040211*y + 1.0569959*z),
		A: 255,
	}
}

// HeatMap returns a picture of rows times columns levels as a data URL, the
// first row at the bottom: each byte is an index into Palette. Bytes that are
// missing are the lowest level.
func HeatMap(rows, columns int, levels []byte) (url string, err error) {
	img := image.NewPaletted(image.Rect(0, 0, columns, rows), Palette())
	for y := range rows {
		from := (rows - 1 - y) * columns
		if from < len(levels) {
			copy(img.Pix[y*img.Stride:y*img.Stride+columns], levels[from:])
		}
	}
	return dataURL(img)
}

// Legend returns the map of levels as a strip of 256 by 1, lowest level first.
func Legend() (url string, err error) {
	img := image.NewPaletted(image.Rect(0, 0, 256, 1), Palette())
	for i := range 256 {
		img.Pix[i] = uint8(i)
	}
	return dataURL(img)
}

func dataURL(img image.Image) (string, error) {
	var b bytes.Buffer
	e := png.Encoder{CompressionLevel: png.BestCompression}
	if err := e.Encode(&b, img); err != nil {
		return "", err
	}
	return "data:image/png;base64," + base64.StdEncoding.EncodeToString(b.Bytes()), nil
}
