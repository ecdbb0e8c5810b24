package measure

import (
	"fmt"
	"math"
)

// Stretch is a stretch of time, seconds from the first frame, half-open.
type Stretch struct{ From, To float64 }

// Track is the power of one band of one signal over time. Entry j of Power is
// the mean power over StartS + j·HopS .. StartS + j·HopS + LengthS (under the
// window of the analysis), re a full-scale sine: 10·log10 of it is dBFS of
// AES17. Tracks need not come from a Meter: whoever fills one sets all fields.
type Track struct {
	Band    Band
	StartS  float64 // start of entry 0, seconds from the first frame, not negative
	HopS    float64 // from entry to entry, above 0
	LengthS float64 // time that one entry covers, at least HopS/2
	Power   []float32
}

// Series is one signal in bands over time: one track a band, lowest first.
type Series struct{ Tracks []Track }

// Bands returns the bands of the tracks.
func (s *Series) Bands() []Band {
	list := make([]Band, len(s.Tracks))
	for i := range s.Tracks {
		list[i] = s.Tracks[i].Band
	}
	return list
}

// Level returns the mean power of every band over the stretches, re a
// full-scale sine, NaN for a band that has no entry wholly inside one. Nil
// stretches are all of the signal.
func (s *Series) Level(stretches []Stretch) []float64 {
	list := make([]float64, len(s.Tracks))
	for b := range s.Tracks {
		list[b] = mean(s.Tracks[b].Power, s.Tracks[b].inside(stretches))
	}
	return list
}

func mean(power []float32, at []int) float64 {
	if len(at) == 0 {
		return math.NaN()
	}
	sum := 0.0
	for _, j := range at {
		sum += float64(power[j])
	}
	return sum / float64(len(at))
}

// edgeS is how far an entry may reach over the edge of a stretch, seconds: so
// much that rounding of times does not cost an entry.
const edgeS = 1e-7

// inside returns the entries that lie wholly inside one of the stretches, in
// order, each once.
func (t *Track) inside(stretches []Stretch) []int {
	if stretches == nil {
		at := make([]int, len(t.Power))
		for j := range at {
			at[j] = j
		}
		return at
	}
	in := make([]bool, len(t.Power))
	for _, s := range stretches {
		first := math.Max(math.Ceil((s.From-edgeS-t.StartS)/t.HopS), 0)
		last := math.Min(math.Floor((s.To+edgeS-t.LengthS-t.StartS)/t.HopS), float64(len(in)-1))
		if !(first <= last) {
			continue // nothing inside, or not a stretch
		}
		for j := int(first); j <= int(last); j++ {
			in[j] = true
		}
	}
	var at []int
	for j, ok := range in {
		if ok {
			at = append(at, j)
		}
	}
	return at
}

// mostHops bounds how many hops after the first frame a track may start.
const mostHops = 1e7

// validate reports a track that cannot be worked with.
func (t *Track) validate() error {
	if !(t.HopS > 0) || !(t.LengthS >= t.HopS/2) || !(t.StartS >= 0) || math.IsInf(t.HopS+t.LengthS, 0) || !(t.StartS <= mostHops*t.HopS) {
		return fmt.Errorf("band %g Hz: entries start at %g s, every %g s, %g s long", t.Band.NominalHz, t.StartS, t.HopS, t.LengthS)
	}
	for j, p := range t.Power {
		if !(p >= 0) || math.IsInf(float64(p), 0) {
			return fmt.Errorf("band %g Hz: power %g in entry %d", t.Band.NominalHz, p, j)
		}
	}
	return nil
}

// merged returns t with runs of m entries replaced by their mean, t itself for
// m = 1. A rest of less than m entries is left out.
func (t Track) merged(m int) Track {
	if m <= 1 {
		return t
	}
	power := make([]float32, len(t.Power)/m)
	for j := range power {
		sum := 0.0
		for _, p := range t.Power[j*m : (j+1)*m] {
			sum += float64(p)
		}
		power[j] = float32(sum / float64(m))
	}
	t.LengthS += float64(m-1) * t.HopS
	t.HopS *= float64(m)
	t.Power = power
	return t
}

// align brings two tracks of the same band to the same entries by merging the
// finer one, and cuts the longer one. Their hops must be whole multiples of
// each other and they must start together.
func align(a, b Track) (Track, Track, error) {
	if a.Band != b.Band {
		return a, b, fmt.Errorf("a track of %g Hz beside one of %g Hz", a.Band.NominalHz, b.Band.NominalHz)
	}
	if math.Abs(a.StartS-b.StartS) > edgeS {
		return a, b, fmt.Errorf("band %g Hz: tracks start at %g and %g s", a.Band.NominalHz, a.StartS, b.StartS)
	}
	ratio := a.HopS / b.HopS
	up := ratio >= 1
	if !up {
		ratio = 1 / ratio
	}
	m := math.Round(ratio)
	if math.Abs(ratio-m) > 1e-6*m || m > 1<<30 {
		return a, b, fmt.Errorf("band %g Hz: entries every %g and every %g s do not fit together", a.Band.NominalHz, a.HopS, b.HopS)
	}
	if up {
		b = b.merged(int(m))
	} else {
		a = a.merged(int(m))
	}
	if math.Abs(a.LengthS-b.LengthS) > edgeS {
		return a, b, fmt.Errorf("band %g Hz: entries of %g and %g s do not fit together", a.Band.NominalHz, a.LengthS, b.LengthS)
	}
	n := min(len(a.Power), len(b.Power))
	a.Power, b.Power = a.Power[:n], b.Power[:n]
	return a, b, nil
}
