package pipeline

import (
	"fmt"
	"slices"
	"strings"

	"alidade/pkg/measure"
)

// SegmentsCues is the source of segments that cue labels mark.
const SegmentsCues = "cues"

// known returns where the noise and where the target sounds by the options, and
// which of them say so: SegmentsNone if none does. Stretches given come before
// cues, for noise and target each; with noise alone the rest is the target.
func (r *run) known() (noise, target []measure.Stretch, source string, err error) {
	noise, source, err = r.knownNoise()
	if err != nil || source == SegmentsNone {
		return nil, nil, SegmentsNone, err
	}
	noiseOption, targetOption, unused := "noise", "target", ""
	if source == SegmentsCues {
		noiseOption = "noise-cue"
	} else if r.set.NoiseCue != "" {
		unused = "--noise-cue"
	}
	if target, err = r.given("target", r.set.target, r.take.duration()); err != nil {
		return nil, nil, SegmentsNone, err
	}
	if len(r.set.target) == 0 {
		targetOption = "target-cue"
		if target, err = r.cued("target-cue", r.set.TargetCue); err != nil {
			return nil, nil, SegmentsNone, err
		}
	} else if r.set.TargetCue != "" {
		unused = strings.TrimPrefix(unused+" and --target-cue", " and ")
	}
	if unused != "" {
		r.report(Finding{Code: "cues-unused", Severity: Info, Message: "stretches were given, so " + unused + " had nothing to say"})
	}
	if err := apart(noiseOption, targetOption, noise, target); err != nil {
		return nil, nil, SegmentsNone, err
	}
	if len(target) == 0 {
		if target = complement(noise, r.take.duration()); len(target) > 0 {
			r.report(Finding{Code: "target-taken", Severity: Info, Message: "no target stretches given: all of the take outside the noise stretches is taken to hold the target; give --target A..B or --target-cue LABEL where that is not so"})
		}
	}
	return noise, target, source, nil
}

// knownNoise returns where only the noise sounds by the options.
func (r *run) knownNoise() (list []measure.Stretch, source string, err error) {
	switch {
	case len(r.set.noise) > 0:
		list, err = r.given("noise", r.set.noise, r.take.duration())
		return list, SegmentsGiven, err
	case r.set.NoiseCue != "":
		list, err = r.cued("noise-cue", r.set.NoiseCue)
		return list, SegmentsCues, err
	}
	return nil, SegmentsNone, nil
}

// cued returns the stretches that the cues of a label mark, sorted and apart:
// a region as it is, a point up to the next cue or the take's end. An empty
// label marks none.
func (r *run) cued(option, label string) ([]measure.Stretch, error) {
	if label == "" {
		return nil, nil
	}
	cues, h := r.take.meta.Cues, r.take.header
	var list []measure.Stretch
	for _, q := range cues {
		if !sameLabel(q.Label, label) || q.Frame >= h.Frames || q.Frame < 0 {
			continue
		}
		to := h.Frames
		if q.Frames > 0 {
			to = min(to, q.Frame+q.Frames)
		} else {
			for _, next := range cues {
				if next.Frame > q.Frame && next.Frame < to {
					to = next.Frame
				}
			}
		}
		s := measure.Stretch{From: float64(q.Frame) / float64(h.Rate), To: float64(to) / float64(h.Rate)}
		if n := len(list); n > 0 && s.From <= list[n-1].To {
			list[n-1].To = max(list[n-1].To, s.To)
			continue
		}
		list = append(list, s) // cues come in the order of their frames
	}
	if len(list) == 0 {
		return nil, &UsageError{Err: fmt.Errorf("--%s %q: no cue of %s has that label: %s", option, label, r.take.path(), r.labels()), Hint: "give one of its labels, or stretches with --noise A..B"}
	}
	return list, nil
}

// labels lists the labels of the take's cues in words.
func (r *run) labels() string {
	var list []string
	for _, q := range r.take.meta.Cues {
		if text := fmt.Sprintf("%q", q.Label); q.Label != "" && !slices.Contains(list, text) {
			list = append(list, text)
		}
	}
	const most = 8
	switch n := len(list); {
	case len(r.take.meta.Cues) == 0:
		return "it has no cues"
	case n == 0:
		return fmt.Sprintf("its %d cues have no labels", len(r.take.meta.Cues))
	case n > most:
		return fmt.Sprintf("there are %s and %d more", strings.Join(list[:most], ", "), n-most)
	}
	return "there are " + strings.Join(list, ", ")
}

// sameLabel compares labels as people type them.
func sameLabel(a, b string) bool {
	return strings.EqualFold(strings.TrimSpace(a), strings.TrimSpace(b))
}

// apart refuses noise and target stretches that overlap. The options name them.
func apart(noiseOption, targetOption string, noise, target []measure.Stretch) error {
	for _, n := range noise {
		for _, t := range target {
			if n.From < t.To && t.From < n.To {
				return &UsageError{Err: fmt.Errorf("--%s %g..%g and --%s %g..%g overlap: where the target sounds is no noise-only stretch", noiseOption, n.From, n.To, targetOption, t.From, t.To)}
			}
		}
	}
	return nil
}
