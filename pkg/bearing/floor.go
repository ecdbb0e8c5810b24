package bearing

import "math"

// floorTracker follows the stationary noise power of every bin by minimum
// statistics [Martin 2001] with a fixed smoothing constant: the smallest
// smoothed power of the last span seconds, times the factor by which such a
// minimum lies below the mean.
type floorTracker struct {
	alpha   float64
	bias    float64
	perPart int // frames in a part of the span
	parts   [][]float64
	part    int
	inPart  int
	frames  int64
	smooth  []float64
	floor   []float64 // current estimate, bias included
}

const (
	floorSpan  = 1.6 // seconds
	floorParts = 8
	floorAlpha = 0.8 // smoothing constant of the power, per frame at half overlap
)

// newFloorTracker returns a tracker for bins bins and frames that step seconds
// apart.
func newFloorTracker(bins int, step float64) *floorTracker {
	f := &floorTracker{
		alpha:   floorAlpha,
		perPart: max(2, int(math.Round(floorSpan/step/floorParts))),
		smooth:  make([]float64, bins),
		floor:   make([]float64, bins),
	}
	for range floorParts {
		row := make([]float64, bins)
		for k := range row {
			row[k] = math.Inf(1)
		}
		f.parts = append(f.parts, row)
	}
	// Equivalent degrees of freedom of the smoothed power: an average over
	// (1+alpha)/(1-alpha) independent frames, fewer by the half overlap of Hann
	// windows (correlation 1/6 of the amplitudes, 1/36 of the powers), two
	// degrees a frame. The factor is [Martin 2001, eq. 17] (from memory).
	const overlap = 1 + 2*floorAlpha/36.0
	freedom := 2 * (1 + floorAlpha) / (1 - floorAlpha) / overlap
	m := martinM(float64(f.perPart * floorParts))
	q := (freedom - 2*m) / (1 - m)
	f.bias = 1 + (float64(f.perPart*floorParts)-1)*2/q
	return f
}

// martinM interpolates the table of M(D) in [Martin 2001, table III] (from
// memory).
func martinM(d float64) float64 {
	table := [][2]float64{{1, 0}, {2, 0.26}, {5, 0.48}, {8, 0.58}, {10, 0.61}, {15, 0.668}, {20, 0.705}, {30, 0.762}, {40, 0.8}, {60, 0.841}, {80, 0.865}, {120, 0.89}, {140, 0.9}, {160, 0.91}}
	for i := 1; i < len(table); i++ {
		if d <= table[i][0] {
			a, b := table[i-1], table[i]
			return a[1] + (b[1]-a[1])*(d-a[0])/(b[0]-a[0])
		}
	}
	return table[len(table)-1][1]
}

// update takes the power of one frame.
func (f *floorTracker) update(power []float64) {
	alpha := f.alpha
	// The first frames are averaged evenly, so that the start is no minimum.
	if a := 1 - 1/float64(f.frames+1); a < alpha {
		alpha = a
	}
	f.frames++
	row := f.parts[f.part]
	for k, p := range power {
		s := alpha*f.smooth[k] + (1-alpha)*p
		f.smooth[k] = s
		row[k] = math.Min(row[k], s)
	}
	f.inPart++
	for k := range f.floor {
		low := math.Inf(1)
		for _, r := range f.parts {
			low = math.Min(low, r[k])
		}
		f.floor[k] = low * f.bias
	}
	// Before the span is full the minimum of fewer frames lies less deep.
	if span := int64(f.perPart * floorParts); f.frames < span {
		part := math.Log(float64(f.frames)) / math.Log(float64(span))
		factor := (1 + (f.bias-1)*part) / f.bias
		for k := range f.floor {
			f.floor[k] *= factor
		}
	}
	if f.inPart == f.perPart {
		f.inPart = 0
		f.part = (f.part + 1) % floorParts
		next := f.parts[f.part]
		for k := range next {
			next[k] = math.Inf(1)
		}
	}
}
