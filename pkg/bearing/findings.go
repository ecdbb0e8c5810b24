package bearing

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"alidade/pkg/rig"
)

// drawPicture turns the summed responses of the grid into a picture.
func (f *Finder) drawPicture() Picture {
	n := 181
	angle := func(i int) float64 { return math.Pi * float64(i) / 180 }
	if f.space.dim > 1 {
		n = 120
		angle = func(i int) float64 { return math.Pi * (float64(i+1)/60 - 1) }
	}
	p := Picture{}
	for i := range n {
		p.Angles = append(p.Angles, angle(i))
	}
	if f.pictureWindows == 0 {
		return p
	}
	top := make([]float64, n)
	for d, v := range f.picture {
		// The response at the angle of the point; the nearest is kept where
		// several fall on one, the larger where none is better.
		var i int
		if f.space.dim == 1 {
			i = int(math.Round(math.Acos(math.Min(1, math.Max(-1, f.look.grid.points[d].y[0]))) * 180 / math.Pi))
		} else {
			az := rig.Toward(f.look.grid.units[d]).Azimuth
			i = int(math.Round((az/math.Pi+1)*60)) - 1
			i = (i + n) % n
		}
		top[i] = math.Max(top[i], v)
	}
	// Angles between the points of a coarse grid take the larger neighbour.
	filled := slices.Clone(top)
	for i := range top {
		for d := 1; top[i] == 0 && filled[i] == 0 && d < n/8; d++ {
			left, right := i-d, i+d
			if f.space.dim > 1 {
				left, right = (left+n)%n, right%n
			}
			if left >= 0 {
				filled[i] = top[left]
			}
			if right < n {
				filled[i] = math.Max(filled[i], top[right])
			}
		}
	}
	most := slices.Max(filled)
	if !(most > 0) {
		return p
	}
	for _, v := range filled {
		p.LevelDB = append(p.LevelDB, math.Max(-30, 10*math.Log10(math.Max(v/most, 1e-9))))
	}
	return p
}

// findings says what a person should know.
func (f *Finder) findings(r *Result, bad []int) []Finding {
	var out []Finding
	if len(r.Sources) == 0 {
		out = append(out, Finding{Code: CodeNoDirection, Message: f.whyNone()})
	}
	if dead := f.deadMics(); len(dead) > 0 {
		out = append(out, Finding{Code: CodeDeadMic, Mics: dead,
			Message: fmt.Sprintf("%s more than 30 dB below the middle one: left out of the search", names(dead))})
	}
	if len(bad) > 0 {
		out = append(out, Finding{Code: CodeMisfit, Mics: bad,
			Message: fmt.Sprintf("%s out of the direction that the others share: swapped, late, turned round or misplaced", names(bad))})
	}
	for i, s := range r.Sources {
		if s.Moves {
			out = append(out, Finding{Code: CodeMoves, Message: fmt.Sprintf("source %d moves: its direction is a mean, the track says where it was when", i+1)})
		}
		if s.Distance != nil {
			out = append(out, Finding{Code: CodeNearField, Message: fmt.Sprintf("source %d is %.2f m away (standard error %.2f m): its wavefront is curved at the rig, focus on the point instead of steering to the direction", i+1, *s.Distance, *s.DistanceError)})
		}
	}
	return out
}

// names lists microphones, counted from 1, with their verb.
func names(mics []int) string {
	var s []string
	for _, m := range mics {
		s = append(s, fmt.Sprint(m+1))
	}
	if len(s) == 1 {
		return "microphone " + s[0] + " lies"
	}
	return "microphones " + strings.Join(s, ", ") + " lie"
}

// whyNone says why no source was found.
func (f *Finder) whyNone() string {
	if len(f.windows) == 0 {
		return fmt.Sprintf("the take is too short: %d samples", f.samples)
	}
	if len(f.sightings) > 0 {
		return fmt.Sprintf("%d of %d windows show a peak, but not in the same place", windowsOf(f.sightings, indices(len(f.sightings))), len(f.windows))
	}
	best, at := 0, ""
	var all []string
	for reason := range f.reasons {
		all = append(all, reason)
	}
	slices.Sort(all)
	for _, reason := range all {
		if f.reasons[reason] > best {
			best, at = f.reasons[reason], reason
		}
	}
	return fmt.Sprintf("%s (%d of %d windows)", at, best, len(f.windows))
}

func indices(n int) []int {
	out := make([]int, n)
	for i := range out {
		out[i] = i
	}
	return out
}

// deadMics returns the microphones whose power lies below deadRatio times that
// of the middle one, over the whole take.
func (f *Finder) deadMics() []int {
	sorted := slices.Clone(f.micLevel)
	slices.Sort(sorted)
	middle := sorted[len(sorted)/2]
	var dead []int
	for m, e := range f.micLevel {
		if middle > 0 && e <= deadRatio*middle {
			dead = append(dead, m)
		}
	}
	return dead
}

// misfits returns the microphones that agree far less with the directions
// found than the middle one does.
func (f *Finder) misfits() []int {
	M := len(f.mics)
	if M < 4 || len(f.sightings) == 0 {
		return nil
	}
	sum, weight := make([]float64, M), make([]float64, M)
	last := -1
	for i := range f.sightings {
		s := &f.sightings[i]
		// Only the strongest of a window: what a misplaced microphone adds looks
		// like further sources, and those fit it.
		if s.window == last {
			continue
		}
		last = s.window
		for m, v := range s.fit {
			if v >= -0.99 {
				sum[m] += float64(v) * s.value
				weight[m] += s.value
			}
		}
	}
	var mean []float64
	for m := range sum {
		if weight[m] > 0 {
			sum[m] /= weight[m]
			mean = append(mean, sum[m])
		}
	}
	if len(mean) == 0 {
		return nil
	}
	slices.Sort(mean)
	middle := mean[len(mean)/2]
	var bad []int
	for m := range sum {
		if weight[m] > 0 && sum[m] < misfitRatio*middle {
			bad = append(bad, m)
		}
	}
	return bad
}
