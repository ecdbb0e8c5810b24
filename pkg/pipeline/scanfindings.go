package pipeline

import (
	"fmt"
	"maps"
	"math"
	"reflect"
	"slices"
	"strings"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
)

// gap is why figures are null.
type gap struct {
	why   measure.Reason
	noise bool // the noise reduction is null too
}

// gapCount is where they are.
type gapCount struct {
	bands       []float64 // in any direction, nominal Hz
	directions  []int     // indices
	least, most int       // bands a direction
}

// gapsOf takes in the figures of direction i that are null.
func (s *scanner) gapsOf(i int, g *measure.Gains) {
	here := map[gap][]float64{}
	for _, b := range g.Bands {
		if b.TargetReason != "" {
			why := gap{b.TargetReason, b.NoiseReason != ""}
			here[why] = append(here[why], b.Band.NominalHz)
		}
	}
	for why, bands := range here {
		c := s.gaps[why]
		if c == nil {
			c = &gapCount{least: len(bands)}
			s.gaps[why] = c
		}
		c.least, c.most = min(c.least, len(bands)), max(c.most, len(bands))
		c.directions = append(c.directions, i)
		c.bands = append(c.bands, bands...)
		slices.Sort(c.bands)
		c.bands = slices.Compact(c.bands)
	}
}

// missing says why gains are null, once for all directions.
func (s *scanner) missing() {
	if s.result.Segments.Source == SegmentsGiven && len(s.noise) == 0 {
		s.report(Finding{Code: "gain-unmeasured-" + string(measure.NoNoise), Severity: Info, Message: "no gains in " + s.inDirections(nil) + ": " + reasonWords[measure.NoNoise]})
	}
	for _, why := range []measure.Reason{measure.NoNoise, measure.NoTarget, measure.TooShort, measure.Silent, measure.NotAboveNoise} {
		for _, noise := range []bool{true, false} {
			c := s.gaps[gap{why, noise}]
			if c == nil {
				continue
			}
			what := "no SNR gain"
			if noise {
				what = "no noise reduction and no SNR gain"
			}
			count := fmt.Sprint(c.most)
			if c.least < c.most {
				count = fmt.Sprintf("%d to %d", c.least, c.most)
			}
			s.report(Finding{Code: "gain-unmeasured-" + string(why), Severity: Info, Bands: c.bands, Message: fmt.Sprintf(
				"%s in %s of %d bands in %s: %s", what, count, len(s.result.Reference.Bands), s.inDirections(c.directions), reasonWords[why])})
		}
	}
}

// inDirections puts directions into words, nil all of them.
func (s *scanner) inDirections(list []int) string {
	all := len(s.directions)
	switch n := len(list); {
	case all == 1:
		return "the direction " + angles(s.directions[0])
	case list == nil || n == all:
		return fmt.Sprintf("all %d directions", all)
	case n <= 3:
		var names []string
		for _, i := range list {
			names = append(names, angles(s.directions[i]))
		}
		return fmt.Sprintf("%d of %d directions (%s)", n, all, strings.Join(names, "; "))
	default:
		return fmt.Sprintf("%d of %d directions (the first %s, the last %s)", n, all, angles(s.directions[list[0]]), angles(s.directions[list[n-1]]))
	}
}

// nulls says where the nulls are not exact, once for all directions.
func (s *scanner) nulls() {
	var lost, some []int
	low, high := math.Inf(1), 0.0
	for i, d := range s.directions {
		switch from := s.nullsFrom[d]; {
		case math.IsInf(from, 1):
			lost = append(lost, i)
		case from > 0:
			some = append(some, i)
			low, high = min(low, from), max(high, from)
		}
	}
	if len(lost) > 0 {
		s.report(Finding{Code: "nulls-not-held", Severity: Warning, Message: fmt.Sprintf(
			"the nulls are exact at no frequency in %s: they would cost more white noise gain than the floor of %g dB allows; lower --white-noise-gain-floor-db or keep the directions away from them", s.inDirections(lost), s.set.floorDB)})
	}
	if len(some) > 0 {
		from := fmt.Sprintf("%.0f Hz", low)
		if top := fmt.Sprintf("%.0f Hz", high); top != from {
			from = fmt.Sprintf("%.0f to %s", low, top)
		}
		s.report(Finding{Code: "nulls-held-from", Severity: Info, Message: fmt.Sprintf(
			"the nulls are exact from %s up in %s: below, they would cost more white noise gain than the floor of %g dB allows", from, s.inDirections(some), s.set.floorDB)})
	}
}

// once leaves out findings that are the same as one before.
func once(list []Finding) []Finding {
	var out []Finding
	for _, f := range list {
		if !slices.ContainsFunc(out, func(g Finding) bool { return reflect.DeepEqual(f, g) }) {
			out = append(out, f)
		}
	}
	return out
}

// standOut finds the loudest direction and that of the largest gain.
func (s *scanner) standOut() {
	place := func(a *ScanAngle) *ScanPlace {
		return &ScanPlace{a.AzimuthDeg, a.ElevationDeg, a.LevelDBFS, a.SNRGainDB}
	}
	var loud *ScanAngle
	for i := range s.result.Angles {
		a := &s.result.Angles[i]
		if a.LevelDBFS != nil && (loud == nil || *a.LevelDBFS > *loud.LevelDBFS) {
			loud = a
		}
	}
	if loud != nil {
		s.result.Loudest = place(loud)
	}
	if best := s.bestGain(); best != nil {
		s.result.BestGain = place(best)
	}
}

// bestGain is the direction of the largest gain over the same bands everywhere:
// those whose gain is known in some direction, which depends on what the
// microphones hear and not on the direction. Where a beam loses the target in one
// of them, its estimate stands in, which is no figure of its own.
func (s *scanner) bestGain() (best *ScanAngle) {
	known := map[int]bool{}
	least, most := math.MaxInt, 0
	for i := range s.result.Angles {
		a := &s.result.Angles[i]
		if a.SNRGainDB == nil {
			continue
		}
		n := 0
		for b := range a.Bands {
			if a.Bands[b].SNRGainDB != nil {
				known[b] = true
				n++
			}
		}
		least, most = min(least, n), max(most, n)
	}
	bands := slices.Sorted(maps.Keys(known))
	largest := math.Inf(-1)
	for i := range s.result.Angles {
		a := &s.result.Angles[i]
		if a.SNRGainDB == nil {
			continue
		}
		if gain := gainOver(s.powers[i], bands); best == nil || gain > largest {
			best, largest = a, gain
		}
	}
	if best != nil && least < len(bands) {
		var list []float64
		for _, b := range bands {
			list = append(list, best.Bands[b].NominalHz)
		}
		count := fmt.Sprintf("%d to %d", least, most)
		if least == most {
			count = fmt.Sprint(least)
		}
		s.report(Finding{Code: "gains-over-different-bands", Severity: Info, Bands: list, Message: fmt.Sprintf(
			"the overall gain of a direction is that of the bands in which it is known there, %s of %d: compare directions band by band; the best one was chosen over the same %s in all of them", count, len(bands), bandCount(len(bands)))})
	}
	return best
}

// gainOver is the SNR gain over some bands, dB; -Inf where no target is left.
func gainOver(powers []measure.Powers, bands []int) float64 {
	var sum measure.Powers
	for _, b := range bands {
		p := powers[b]
		sum.NoiseIn, sum.NoiseOut = sum.NoiseIn+p.NoiseIn, sum.NoiseOut+p.NoiseOut
		sum.TargetIn, sum.TargetOut = sum.TargetIn+p.TargetIn, sum.TargetOut+p.TargetOut
	}
	if gain := audio.PowerDB(sum.TargetOut / sum.NoiseOut * sum.NoiseIn / sum.TargetIn); gain == gain {
		return gain
	}
	return math.Inf(-1)
}
