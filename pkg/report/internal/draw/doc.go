// Package draw makes the pictures of a page: SVG whose places are per cent of
// its frame, and heat maps as PNG.
//
// # Conventions
//
// A picture has no size of its own. Places and lengths along an axis are per
// cent, so that one markup serves a telephone and a sheet of paper; text and
// strokes keep their size in pixels. Per cent run from the left and from the
// top. Colours come from the page: elements carry class names. Heat maps carry
// colours of their own, the same in light and dark, so that pictures compare.
//
// # Use
//
//	var s draw.SVG
//	x := draw.Log(50, 16000)
//	s.Open("picture", "gain per band")
//	s.Rect(x.At(900), 20, 5, 80, "bar", "data-hz", "1000")
//	s.Text(x.At(1000), 100, "tick", "1 kHz", "dy", "18")
//	html := s.Close()
//
// # Sources
//
// Scalable Vector Graphics (SVG) 2, W3C, 2018. IEC 61966-2-1:1999 for sRGB,
// CIE 15:2018 for L*a*b*.
package draw
