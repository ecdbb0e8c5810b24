package pipeline

import (
	"fmt"
	"math"
	"strings"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/bearing"
	"alidade/pkg/rig"
)

// aim is how the place that the beam points to comes about.
type aim int

const (
	aimGiven      aim = iota // --toward AZ[,EL] or --focus X,Y,Z
	aimFound                 // --toward auto
	aimFoundPoint            // --focus auto
	aimFollow                // --toward follow
)

// kind is what the report calls it; aimGiven has two kinds.
func (a aim) kind() string {
	return [...]string{"given", "estimated", "focus-estimated", "followed"}[a]
}

// largestPick is the most sources that a search has.
const largestPick = 8

// resolvePick reads --pick.
func (s *settings) resolvePick(fault func(format string, args ...any)) {
	switch {
	case s.Pick == 0:
	case s.Pick < 1 || s.Pick > largestPick:
		fault("--pick %d: want 1 to %d: sources are counted from the dominant one", s.Pick, largestPick)
	case s.aim == aimGiven:
		fault("--pick %d with a direction or point that is given: it belongs to --toward %s, --toward %s and --focus %s", s.Pick, TowardAuto, TowardFollow, TowardAuto)
	}
}

// pick is the source asked for, counted from 1.
func (s *settings) pick() int { return max(s.Pick, 1) }

// resolveFollow refuses what cannot be where the delays glide.
func (s *settings) resolveFollow(designed bool, fault func(format string, args ...any)) {
	if designed {
		fault("--toward %s with weights other than %s or with nulls: they are found for one direction, and this one moves", TowardFollow, WeightsDelayAndSum)
	}
	if s.Method == MethodSinc || s.Method == MethodSpectral {
		fault("--toward %s with --method %s: delays that glide need the method %s", TowardFollow, s.Method, MethodFarrow)
	}
	if s.Postfilter != "" && s.Postfilter != PostfilterNone {
		fault("--toward %s with --postfilter %s: its gains are found on microphones that are aligned to one direction, and this one moves", TowardFollow, s.Postfilter)
	}
}

// aimed says whether the place that the beam points to is known.
func (s *settings) aimed() bool { return s.direction != nil || s.point != nil }

// aimName is the part of an output's name for a place that was found.
func (s *settings) aimName() string {
	name := "_auto"
	if s.aim == aimFollow {
		name = "_follow"
	}
	if s.pick() > 1 {
		name += fmt.Sprint(s.pick())
	}
	return name
}

// searched runs a finder over the used microphones of src, as corrected by the
// rig. Faults of the options or the rig are a *UsageError.
func (r *run) searched(src audio.Source, o bearing.Options) (*bearing.Result, error) {
	l := r.rig
	o.Speed = l.speed
	if r.spec.OneCore {
		o.Cores = 1
	}
	for _, m := range l.Used() {
		o.Corrections = append(o.Corrections, l.Mics[m].Delay)
	}
	f, err := bearing.NewFinder(l.Positions(), l.ReferencePoint(), src.Format().Rate, o)
	if err != nil {
		text := strings.ReplaceAll(err.Error(), "bearing: ", "")
		return nil, &UsageError{Err: fmt.Errorf("rig %s: no direction can be searched for: %s", l.Name, strings.ReplaceAll(text, "\n", "; "))}
	}
	channels := src.Format().Channels
	if src, err = l.corrected(src); err != nil {
		return nil, err
	}
	src, stop := r.ahead(src)
	defer stop()
	if _, err := audio.Copy(src, blockFrames(r.spec.Options.BlockFrames, channels), f); err != nil {
		return nil, err
	}
	if err := f.Close(); err != nil {
		return nil, err
	}
	return f.Result(), nil
}

// toBeHeard is the take to be heard to its end, with progress under a name.
func (r *run) toBeHeard(stage string) audio.Source {
	return &watched{Source: r.take.source(), ctx: r.ctx, tell: r.tell(stage, r.take.header.Frames)}
}

// noDirection begins the finding of a search that found nothing.
const noDirection = "no direction found: "

// searchFindings are the findings of a search with the channels of the take in
// place of the microphones' numbers.
func (l *loadedRig) searchFindings(r *bearing.Result) []Finding {
	used := l.Used()
	list := []Finding{}
	for _, f := range r.Findings {
		out := Finding{Code: f.Code, Severity: Info, Message: f.Message}
		for _, m := range f.Mics {
			out.Channels = append(out.Channels, l.Mics[used[m]].Channel)
		}
		switch f.Code {
		case bearing.CodeNoDirection:
			out.Severity = Warning
			out.Message = noDirection + f.Message
		case bearing.CodeDeadMic:
			out.Severity = Warning
			out.Message = plural(out.Channels, "channel %s is", "channels %s are") + " more than 30 dB below the middle one: left out of the search for the direction; look at cable and gain, or leave it out with use: false in the rig file"
		case bearing.CodeMisfit:
			out.Severity = Warning
			out.Message = plural(out.Channels, "channel %s does", "channels %s do") + " not fit the direction that the others share: swapped, late, turned round or misplaced; correct the rig file"
		}
		list = append(list, out)
	}
	return list
}

// noneFound is the error of a take in which nothing was found to point to.
func (r *run) noneFound(why string) error {
	return &HintedError{
		Err:  fmt.Errorf("%s: no direction to steer to: %s", r.take.path(), why),
		Hint: "alidade locate shows what was heard; give --toward AZ[,EL] or --focus X,Y,Z",
	}
}

// findAim listens to the take and points the beam to what was found in it.
func (r *run) findAim() error {
	pick := r.set.pick()
	heard, err := r.searched(r.toBeHeard("finding the direction"), bearing.Options{Sources: max(3, pick)})
	if err != nil {
		return err
	}
	if err := r.take.rewind(); err != nil {
		return err
	}
	found := r.rig.searchFindings(heard)
	switch n := len(heard.Sources); {
	case n == 0:
		return r.noneFound(whyNone(found))
	case pick > n:
		return &HintedError{
			Err:  fmt.Errorf("%s: --pick %d: %s found", r.take.path(), pick, counted(n, "source was", "sources were")),
			Hint: "alidade locate lists them; give --toward AZ[,EL] for a direction that is known",
		}
	}
	for _, f := range found {
		// Those of single sources are put in the words of this run below.
		if f.Code != bearing.CodeMoves && f.Code != bearing.CodeNearField {
			r.report(f)
		}
	}
	source := heard.Sources[pick-1]
	if r.set.aim == aimFollow {
		err = r.followPath(heard, source)
	} else {
		err = r.pointTo(heard, source)
	}
	if err != nil {
		return err
	}
	for _, null := range r.set.nulls {
		if at := source.Direction; rig.AngleBetween(at, null) < nullApart {
			return &UsageError{
				Err:  fmt.Errorf("%s: --null %s: the source that was found is at %s, and a beam cannot be deaf to what it is to hear", r.take.path(), angles(null), angles(at)),
				Hint: "leave the null out, or take another source with --pick",
			}
		}
	}
	r.aimFindings(heard, source)
	return nil
}

// nullApart is how far a null lies from a direction that is steered to, at
// least, radians.
const nullApart = 1e-3

// whyNone is the reason among the findings of a search that found nothing.
func whyNone(findings []Finding) string {
	for _, f := range findings {
		if f.Code == bearing.CodeNoDirection {
			return strings.TrimPrefix(f.Message, noDirection)
		}
	}
	return "nothing was heard"
}

// pointTo points the beam to a source that keeps its place.
func (r *run) pointTo(heard *bearing.Result, s bearing.Source) error {
	if r.set.aim == aimFoundPoint {
		if s.Point == nil {
			return &HintedError{
				Err: fmt.Errorf("%s: no point to focus on: the wave of the source at %s is not measurably curved at a rig %.2f m long, so its distance is unknown",
					r.take.path(), angles(s.Direction), rig.Spread(r.rig.Positions()).Extent),
				Hint: "a source that far needs no focus: give --toward " + TowardAuto,
			}
		}
		p := *s.Point
		r.set.point = &p
	} else {
		d := s.Direction
		r.set.direction = &d
	}
	r.found = &Direction{
		AzimuthDeg: s.Direction.AzimuthDeg(), ElevationDeg: s.Direction.ElevationDeg(), DistanceM: s.Distance,
		StandardErrorDeg: degrees(s.StandardError), Confidence: number(s.Confidence), Windows: []DirectionWindow{},
	}
	for _, w := range heard.Windows {
		out := DirectionWindow{StartS: w.Start, EndS: w.End}
		if f, ok := fixOf(w, heard.Sources, s); ok {
			out.fill(f.Direction, f.StandardError, number(f.Confidence))
		}
		r.found.Windows = append(r.found.Windows, out)
	}
	return nil
}

// ownFix is how far the fix of one window may lie from its source, radians.
const ownFix = 20 * math.Pi / 180

// fixOf returns the fix of a window that belongs to a source: the nearest to
// it, if it lies nearer to it than to any other source and within ownFix.
func fixOf(w bearing.Window, all []bearing.Source, s bearing.Source) (best bearing.Fix, ok bool) {
	nearest := ownFix
	for _, f := range w.Sources {
		d := rig.AngleBetween(f.Direction, s.Direction)
		own := d < nearest
		for _, other := range all {
			own = own && d <= rig.AngleBetween(f.Direction, other.Direction)
		}
		if own {
			best, ok, nearest = f, true, d
		}
	}
	return best, ok
}

// fill puts a direction into a window of the report.
func (w *DirectionWindow) fill(d rig.Direction, standardError float64, confidence Number) {
	w.AzimuthDeg, w.ElevationDeg = number(d.AzimuthDeg()), number(d.ElevationDeg())
	w.StandardErrorDeg, w.Confidence = degrees(standardError), confidence
}

// followPath lets the beam go with the track of a source.
func (r *run) followPath(heard *bearing.Result, s bearing.Source) error {
	if s.Track < 0 || s.Track >= len(heard.Tracks) {
		return &HintedError{
			Err:  fmt.Errorf("%s: no path to follow: the source at %s was not heard in enough windows one after the other", r.take.path(), angles(s.Direction)),
			Hint: "give --toward " + TowardAuto,
		}
	}
	path := heard.Tracks[s.Track]
	mean := meanDirection(path)
	r.set.path, r.set.direction = &path, &mean
	r.found = &Direction{
		AzimuthDeg: mean.AzimuthDeg(), ElevationDeg: mean.ElevationDeg(),
		StandardErrorDeg: degrees(pathError(path)), Confidence: number(path.Confidence), Windows: []DirectionWindow{},
	}
	knots := map[float64]bearing.Knot{}
	for _, k := range path.Knots {
		knots[k.Time] = k
	}
	for _, w := range heard.Windows {
		out := DirectionWindow{StartS: w.Start, EndS: w.End}
		if k, ok := knots[(w.Start+w.End)/2]; ok {
			var confidence Number // none where the path is carried over a silence
			nearest := math.Inf(1)
			for _, f := range w.Sources {
				if d := rig.AngleBetween(f.Direction, k.Direction); k.Heard && d < nearest {
					nearest, confidence = d, number(f.Confidence)
				}
			}
			out.fill(k.Direction, k.StandardError, confidence)
		}
		r.found.Windows = append(r.found.Windows, out)
	}
	return nil
}

// meanDirection is the direction of the mean of a path's unit vectors where it
// was heard.
func meanDirection(path bearing.Track) rig.Direction {
	var sum rig.Point
	for _, k := range path.Knots {
		if k.Heard {
			sum = sum.Add(k.Direction.Unit())
		}
	}
	return rig.Toward(sum)
}

// pathError is the root of the mean squared standard error of a path where it
// was heard, radians.
func pathError(path bearing.Track) float64 {
	sum, n := 0.0, 0
	for _, k := range path.Knots {
		if k.Heard {
			sum += k.StandardError * k.StandardError
			n++
		}
	}
	return math.Sqrt(sum / float64(n))
}

// Bounds of what is worth a finding.
const (
	unsureBelow = 0.3 // confidence
	heldForS    = 1.0 // seconds before the first or after the last knot of a path
)

// aimFindings says what was found, and what else could have been meant.
func (r *run) aimFindings(heard *bearing.Result, s bearing.Source) {
	text := fmt.Sprintf("found at %s, standard error %s, confidence %.2f", angles(s.Direction), degreesText(r.found.StandardErrorDeg), *r.found.Confidence)
	if r.set.aim == aimFollow {
		path := r.set.path
		text = fmt.Sprintf("followed from %s to %s, standard error %s, confidence %.2f", angles(path.Knots[0].Direction), angles(path.Knots[len(path.Knots)-1].Direction), degreesText(r.found.StandardErrorDeg), *r.found.Confidence)
	}
	if r.set.aim == aimFoundPoint {
		text += fmt.Sprintf(", %.2f m away (standard error %.2f m)", *s.Distance, *s.DistanceError)
	}
	if n := len(heard.Sources); n > 1 {
		var list []string
		for i, o := range heard.Sources {
			list = append(list, fmt.Sprintf("%d at %s", i+1, angles(o.Direction)))
		}
		text += fmt.Sprintf("; source %d of %d: %s: --pick chooses", r.set.pick(), n, strings.Join(list, ", "))
	}
	r.report(Finding{Code: "direction-found", Severity: Info, Message: text})
	if *r.found.Confidence < unsureBelow {
		r.report(Finding{Code: "direction-unsure", Severity: Warning, Message: fmt.Sprintf(
			"the confidence of the direction is %.2f, below %g: other directions are heard nearly as well; look at what alidade locate shows, or give --toward AZ[,EL]", *r.found.Confidence, unsureBelow)})
	}
	if s.Reflection {
		r.report(Finding{Code: "direction-reflected", Severity: Warning, Message: "what was found is a late copy of another source, most likely its reflection from a wall: take another --pick"})
	}
	for i, o := range heard.Sources {
		if s.Stationary && !o.Stationary && !o.Reflection {
			r.report(Finding{Code: "direction-steady", Severity: Warning, Message: fmt.Sprintf(
				"what was found is a steady sound, like a fan or an engine, and source %d at %s is not: --pick %d steers there", i+1, angles(o.Direction), i+1)})
			break
		}
	}
	switch r.set.aim {
	case aimFollow:
		r.pathFindings(s)
	case aimFound:
		if s.Distance != nil {
			r.report(Finding{Code: bearing.CodeNearField, Severity: Info, Message: fmt.Sprintf(
				"the source is %.2f m away (standard error %.2f m) and its wave is curved at the rig: --focus %s aims better", *s.Distance, *s.DistanceError, TowardAuto)})
		}
		fallthrough
	default:
		if s.Moves {
			r.report(Finding{Code: bearing.CodeMoves, Severity: Warning, Message: "the source moves, and the beam points to its mean direction: --toward " + TowardFollow + " goes with it"})
		}
	}
}

// pathFindings says what following a path means for the figures.
func (r *run) pathFindings(s bearing.Source) {
	r.report(Finding{Code: "prediction-of-mean-direction", Severity: Info, Message: fmt.Sprintf(
		"the predicted gains and the grating flags are those of the mean direction, %s: the beam moves", angles(*r.set.direction))})
	if !s.Moves {
		r.report(Finding{Code: "source-stands", Severity: Info, Message: "the source does not move by more than its errors explain: --toward " + TowardAuto + " steers steadier"})
	}
	knots := r.set.path.Knots
	first, last := knots[0], knots[len(knots)-1]
	if end := r.take.duration(); first.Time > heldForS || end-last.Time > heldForS {
		r.report(Finding{Code: "path-held", Severity: Info, Message: fmt.Sprintf(
			"the path is known from %.1f to %.1f s of %.1f s: before and after, the beam holds its first and last direction", first.Time, last.Time, end)})
	}
}

// degrees turns a measured angle into degrees, nil for what is no number.
func degrees(radians float64) Number { return number(radians * 180 / math.Pi) }

// degreesText is a measured angle for a message.
func degreesText(v Number) string {
	if v == nil {
		return "unknown"
	}
	if *v < 0.1 {
		return fmt.Sprintf("%.2f°", *v)
	}
	return fmt.Sprintf("%.1f°", *v)
}

// angles is a direction for a message.
func angles(d rig.Direction) string {
	text := fmt.Sprintf("%.1f°", rounded(d.AzimuthDeg(), 1))
	if el := rounded(d.ElevationDeg(), 1); el != 0 {
		text += fmt.Sprintf(" (elevation %.1f°)", el)
	}
	return text
}

// counted is a number and what it counts.
func counted(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// followKnot is how many frames lie between two delays of a moving beam.
const followKnot = 256

// followed returns the beam that goes with the path over the corrected
// microphones: a plane wave from the path's direction at each time.
func (b *beamline) followed(src audio.Source) (audio.Source, error) {
	kernel, err := farrowKernel()
	if err != nil {
		return nil, err
	}
	rate := float64(src.Format().Rate)
	most := 0.0
	for i, p := range b.at {
		most = math.Max(most, p.Distance(b.ref)/b.rig.speed+math.Abs(b.rig.Mics[b.used[i]].Delay))
	}
	y, err := beam.NewGlide(src, beam.Glide{
		Kernel: kernel, Amplitudes: b.amplitudes, Every: followKnot, LargestDelay: most + 1e-9,
		Delays: func(frame int64, delays []float64) {
			u := b.set.path.At(float64(frame) / rate).Unit()
			for i, m := range b.used {
				delays[i] = b.ref.Sub(b.at[i]).Dot(u)/b.rig.speed - b.rig.Mics[m].Delay
			}
		},
	})
	if err != nil {
		return nil, &UsageError{Err: err}
	}
	return y, nil
}
