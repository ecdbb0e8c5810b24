package pipeline

import (
	"fmt"
	"path/filepath"
	"slices"
	"strings"

	"alidade/pkg/wav"
)

// carried returns the metadata that a track takes over from the take, and what
// of it does not hold for the track.
func (r *run) carried(encoding wav.Encoding, name string) (*wav.Metadata, []string) {
	h := r.take.header
	return r.take.meta.Derive(wav.Change{
		Output:   wav.Format{Rate: h.Rate, Channels: 1, Encoding: encoding},
		TakeRate: h.Rate, TakeFrames: h.Frames, FirstFrame: r.from, Frames: r.to - r.from,
		TrackName: name, Software: strings.TrimSpace("alidade " + r.spec.Version), Settings: r.line.settings(name),
		Private: r.set.Private,
	})
}

// beamName is what the steered track is called in its metadata.
func (r *run) beamName() string { return strings.TrimPrefix(r.set.towardName(), "_") }

// referenceName is what the reference track is called.
func (r *run) referenceName() string { return r.rig.Mics[r.line.referenceMic()].Name }

// settings says in one line how a track was made.
func (b *beamline) settings(name string) string {
	s := b.summary()
	text := fmt.Sprintf("%s of %d microphones; %s; %s; taper %s; c %.1f m/s", name, len(b.used), s.Method, s.Weights, s.Taper, b.rig.speed)
	if b.set.ReestimateEvery > 0 {
		text += fmt.Sprintf(" again every %g s", b.set.ReestimateEvery)
	}
	if b.set.Postfilter != PostfilterNone {
		text += fmt.Sprintf("; postfilter %s, floor %g dB", b.set.Postfilter, b.set.postfilterFloorDB)
	}
	if s.HighpassHz != nil {
		text += fmt.Sprintf("; high-pass %g Hz", *s.HighpassHz)
	}
	if s.GainDB != 0 {
		text += fmt.Sprintf("; gain %+g dB", s.GainDB)
	}
	return text
}

// dropped adds a finding of what the track could not take over.
func (r *run) dropped(list []string) {
	if len(list) == 0 || r.set.Private {
		return
	}
	const most = 12
	rest := ""
	if n := len(list); n > most {
		list, rest = list[:most], fmt.Sprintf(" and %d more", n-most)
	}
	r.report(Finding{Code: "metadata-left-out", Severity: Info, Message: fmt.Sprintf(
		"what the take carries and does not hold for the track was left out of it: %s%s", strings.Join(list, ", "), rest)})
}

// trackNames adds a finding where the take gives names of the rig's
// microphones to other channels than the rig does.
func (r *run) trackNames() {
	var list []int
	var words []string
	for _, m := range r.rig.Mics {
		same := func(name string) bool { return name != "" && sameLabel(name, m.Name) }
		at := slices.IndexFunc(r.take.tracks, same)
		if at < 0 || at == m.Channel-1 || m.Channel <= len(r.take.tracks) && same(r.take.tracks[m.Channel-1]) {
			continue
		}
		list = append(list, m.Channel)
		words = append(words, fmt.Sprintf("%s is channel %d in the rig file and track %d in the take", m.Name, m.Channel, at+1))
	}
	if len(list) > 0 {
		r.report(Finding{Code: "track-names-disagree", Severity: Warning, Channels: list, Message: strings.Join(words, "; ") +
			": the rig file was followed; if the take is right, correct channel in the rig file"})
	}
}

// hide leaves out of the result what names places, people and machines: of
// paths only the last part stays, and the command line goes.
func (r *run) hide(res *Result) {
	if res.Provenance != nil {
		res.Provenance.Command = nil
	}
	var pairs []string
	paths := append(r.inputs(), r.spec.Take...)
	paths = append(paths, r.names.track, r.names.reference, r.names.json, r.names.csv, r.names.html)
	slices.SortFunc(paths, func(a, b string) int { return len(b) - len(a) })
	for _, p := range paths {
		if base := filepath.Base(p); p != "" && base != p {
			pairs = append(pairs, p, base)
		}
	}
	short := strings.NewReplacer(pairs...)
	for k := range res.Take.Files {
		res.Take.Files[k].Path = filepath.Base(res.Take.Files[k].Path)
	}
	res.Output.Path = filepath.Base(res.Output.Path)
	for k := range res.OtherOutputs {
		res.OtherOutputs[k].Path = filepath.Base(res.OtherOutputs[k].Path)
	}
	for k := range res.Findings {
		res.Findings[k].Message = short.Replace(res.Findings[k].Message)
	}
}

// inputs are all files that the run reads, as far as they can be told yet.
func (r *run) inputs() []string {
	list := slices.Concat(r.take.paths(), r.rig.files)
	for _, path := range []string{r.set.IsolatedNoise, r.set.IsolatedTarget} {
		if path == "" {
			continue
		}
		list = append(list, path)
		plan, err := (&gathering{how: r.isolatedJoining(), folders: map[string][]wav.File{}}).plan([]string{path})
		if err != nil {
			continue // said when the take is opened
		}
		for _, row := range plan {
			for _, strand := range row {
				list = append(list, strand...)
			}
		}
	}
	return list
}

// isolatedJoining is how the files of an isolated take belong together.
func (r *run) isolatedJoining() joining { return joining{findChain: r.set.FindChain} }
