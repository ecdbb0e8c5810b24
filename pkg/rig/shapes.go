package rig

import "math"

// Line returns count places along x, spacing metres apart, centred on the
// origin, from -x to +x.
func Line(count int, spacing float64) []Point {
	at := make([]Point, count)
	for i := range at {
		at[i].X = centred(i, count, spacing)
	}
	return at
}

// Ring returns count places evenly spread on a level circle of the radius in
// metres around the origin: the first on +x, then towards +y.
func Ring(count int, radius float64) []Point {
	at := make([]Point, count)
	for i := range at {
		// In quarters of a circle, so that the axes are met exactly.
		at[i] = onCircle(radius, float64(4*i)/float64(count))
	}
	return at
}

// Grid returns columns times rows places on a level grid, spacing metres apart
// in x and y, centred on the origin: row by row from -y, each row from -x.
func Grid(columns, rows int, spacing float64) []Point {
	at := make([]Point, 0, columns*rows)
	for row := range rows {
		for column := range columns {
			at = append(at, Point{X: centred(column, columns, spacing), Y: centred(row, rows, spacing)})
		}
	}
	return at
}

// Spiral returns count places on a level Archimedean spiral around the origin
// of so many turns, evenly spread in radius and in angle:
// r = radius·i/(count-1) at the azimuth 2π·turns·i/(count-1). The first lies at
// the origin, the last at the radius in metres.
func Spiral(count int, radius, turns float64) []Point {
	at := make([]Point, count)
	for i := range at {
		part := 0.0
		if count > 1 {
			part = float64(i) / float64(count-1)
		}
		at[i] = onCircle(radius*part, 4*turns*part)
	}
	return at
}

// centred returns the i-th of count evenly spaced places around 0. The places
// i and count-1-i are exact opposites.
func centred(i, count int, spacing float64) float64 {
	return float64(2*i-(count-1)) / 2 * spacing
}

// onCircle returns the place at a radius and an azimuth in quarters of a circle.
func onCircle(radius, quarters float64) Point {
	whole := math.Floor(quarters)
	s, c := math.Sincos((quarters - whole) * math.Pi / 2)
	switch math.Mod(whole, 4) {
	case 1:
		s, c = c, -s
	case 2:
		s, c = -s, -c
	case 3:
		s, c = -c, s
	}
	return Point{X: radius * c, Y: radius * s}
}
