package pipeline

import (
	"context"
	"fmt"
	"math"
	"path/filepath"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/measure"
	"alidade/pkg/rig"
	"alidade/pkg/scan"
)

// ScanSpec is one take to be scanned.
type ScanSpec struct {
	Take    []string // files of the take, as in Spec
	RigPath string
	Options ScanOptions
	Version string // program version, for the document
	// NoHashes leaves the hash of the take out where no track needs it.
	NoHashes bool
	Created  string // RFC 3339 time for the document; empty when reproducible
}

// scanBytes bounds the memory that the beams of one pass over a take may have
// together, bytes. A variable so that a test can make several passes.
var scanBytes int64 = 256 << 20

// RunScan measures what a beam hears of a take in many directions: all channels are
// analysed once a pass, and a pass takes as many directions as memory holds. With
// Options.Tracks it writes a track of each direction too, and keeps those that an
// earlier scan of the same take with the same options left there. The sheets are
// staged before the work and appear with the result. The errors are those of
// Run.
func RunScan(ctx context.Context, spec ScanSpec, watch Watch, show ...Sheet[*ScanResult]) (result *ScanResult, err error) {
	set, directions, err := spec.Options.resolve()
	if err != nil {
		return nil, err
	}
	l, err := loadRig(spec.RigPath, spec.Options.Options)
	if err != nil {
		return nil, err
	}
	r := &run{ctx: ctx, set: set, rig: l, watch: watch, spec: Spec{
		Take: spec.Take, RigPath: spec.RigPath, Options: spec.Options.Options, Version: spec.Version,
	}}
	s := &scanner{run: r, spec: spec, directions: directions, nullsFrom: map[rig.Direction]float64{}, gaps: map[gap]*gapCount{}, powers: make([][]measure.Powers, len(directions))}
	if r.take, err = openTake(spec.Take, set.joining(), !spec.NoHashes || spec.Options.Tracks != ""); err != nil {
		return nil, err
	}
	defer func() { err = joinErrors(err, r.take.close()) }()
	if err := r.ready(); err != nil {
		return nil, err
	}
	inputs, tracks := s.inputs(), s.trackFiles()
	var names []string
	for _, t := range tracks {
		names = append(names, t.path)
	}
	if err := refuseInputs(names, inputs); err != nil {
		return nil, ofOption(err, "tracks")
	}
	if err := s.trackFolder(); err != nil {
		return nil, err
	}
	shown, err := stageSheets(show, set.Overwrite, inputs, tracks)
	if err != nil {
		return nil, err
	}
	defer shown.abandon()
	if err := r.foretold(); err != nil {
		return nil, err
	}
	r.from, r.to = 0, r.take.header.Frames
	if err := r.sound(); err != nil {
		return nil, err
	}
	if result, err = s.scan(); err != nil {
		return nil, err
	}
	if err := shown.finish(result); err != nil {
		return nil, err
	}
	return result, nil
}

// scanner is one take on its way through a scan.
type scanner struct {
	*run
	spec       ScanSpec
	directions []rig.Direction
	result     *ScanResult
	group      int // directions a pass

	noise, target []measure.Stretch // of the take; nil until known
	known         bool
	learnt        learnedFrom // for the records of the tracks

	// What the directions have to say together.
	nullsFrom map[rig.Direction]float64 // as of a beamline, of those where nulls are not exact everywhere
	gaps      map[gap]*gapCount
	powers    [][]measure.Powers // [direction][band]; nil where nothing was measured
}

func (s *scanner) scan() (*ScanResult, error) {
	lines, err := s.lines(s.directions[:1])
	if err != nil {
		return nil, err
	}
	s.line = lines[0]
	b := s.line.summary()
	s.result = &ScanResult{
		Schema: ScanSchema, Version: s.spec.Version, CreatedUTC: s.spec.Created, Rig: s.rig.summary(),
		Beam:     ScanBeam{Ambiguity: b.Ambiguity, Method: b.Method, Weights: b.Weights, Taper: b.Taper, NullsDeg: b.NullsDeg, FloorDB: b.FloorDB, HighpassHz: b.HighpassHz},
		Segments: Segments{Source: SegmentsNone, Noise: [][2]float64{}, Target: [][2]float64{}},
		Angles:   make([]ScanAngle, len(s.directions)), Findings: []Finding{},
	}
	for i, d := range s.directions {
		a := &s.result.Angles[i]
		a.AzimuthDeg, a.ElevationDeg = d.AzimuthDeg(), d.ElevationDeg()
		if heading, ok := s.rig.Compass(d); ok {
			a.CompassDeg = &heading
		}
	}
	format := audio.Format{Rate: s.take.header.Rate, Channels: len(s.line.used)}
	each := scan.BeamBytes(format, s.line.filters, scan.Options{}, s.take.header.Frames)
	if s.set.IsolatedNoise != "" && s.set.IsolatedTarget != "" && !s.set.NoMeasure {
		each *= 3 // the noise and the target alone beside the take
	}
	each += s.line.bytes()
	s.group = int(min(int64(len(s.directions)), max(1, scanBytes/each)))
	s.taperTells()
	if err := s.segmentsGiven(); err != nil {
		return nil, err
	}
	if err := s.passes(lines); err != nil {
		return nil, err
	}
	s.missing()
	s.standOut()
	if s.result.Take, err = s.take.finish(); err != nil {
		return nil, err
	}
	if s.spec.Options.Tracks != "" {
		if err := s.tracks(); err != nil {
			return nil, err
		}
	}
	if err := s.take.unchanged(); err != nil {
		return nil, err
	}
	s.nulls()
	s.result.Findings = append(s.take.findings(), once(s.findings)...)
	sortFindings(s.result.Findings)
	if s.set.Private {
		s.hideScan()
	}
	return s.result, nil
}

// hideScan leaves folders out of the result.
func (s *scanner) hideScan() {
	plain := Result{Take: s.result.Take, Findings: s.result.Findings}
	s.hide(&plain)
	for i := range s.result.Angles {
		if t := s.result.Angles[i].Track; t != nil {
			t.Path = filepath.Base(t.Path)
		}
	}
}

// lines designs the beams of directions.
func (s *scanner) lines(directions []rig.Direction) ([]*beamline, error) {
	list := make([]*beamline, 0, len(directions))
	for _, d := range directions {
		set := *s.set
		set.Toward, set.direction = directionText(d), &d
		for _, null := range set.nulls {
			if rig.AngleBetween(null, d) < 1e-3 {
				return nil, &UsageError{Err: fmt.Errorf("--null %s: one of the directions that are scanned: a beam cannot be deaf to what it is to hear", angles(null)), Hint: "leave that direction out of the scan, or the null"}
			}
		}
		line, err := newBeamline(s.rig, &set, s.take.header.Rate)
		if err != nil {
			return nil, s.ofThoseLeft(err)
		}
		s.line = line
		if set.designed() {
			if err := context.Cause(s.ctx); err != nil {
				return nil, err
			}
			if err := s.design(); err != nil {
				return nil, fmt.Errorf("toward %s: %w", angles(d), err)
			}
			if line.nullsFrom > 0 {
				s.nullsFrom[d] = line.nullsFrom
			}
		}
		list = append(list, line)
	}
	return list, nil
}

// bytes is about how much memory a beam takes beside the analysis of a scan.
func (b *beamline) bytes() (n int64) {
	for _, f := range slices.Compact([]*beam.Filters{b.filters, b.model}) {
		for _, taps := range f.H {
			n += 8 * int64(cap(taps))
		}
	}
	return n
}

// segmentsGiven settles the stretches that the options name.
func (s *scanner) segmentsGiven() (err error) {
	if s.set.NoMeasure {
		s.known = true
		return nil
	}
	if s.set.IsolatedNoise != "" || s.set.IsolatedTarget != "" {
		s.result.Segments.Source, s.known = SegmentsIsolated, true
		s.passedOver()
		if s.set.IsolatedNoise == "" || s.set.IsolatedTarget == "" {
			s.report(Finding{Code: "isolated-half", Severity: Info, Message: "no gains: a scan measures them with both --isolated-noise and --isolated-target"})
		}
		return nil
	}
	var source string
	if s.noise, s.target, source, err = s.run.known(); err != nil {
		return err
	}
	if source != SegmentsNone {
		s.known = true
		s.segments(source)
	}
	return nil
}

// segments writes the stretches into the result.
func (s *scanner) segments(source string) {
	g := &s.result.Segments
	g.Source, g.Noise, g.Target = source, spans(s.noise), spans(s.target)
	g.NoiseTime, g.TargetTime = s.times(g.Noise), s.times(g.Target)
}

// passes takes the take through all directions, and again where the stretches
// had to be found first and one pass could not hold all directions.
func (s *scanner) passes(first []*beamline) error {
	one := s.group >= len(s.directions)
	for from := 0; from < len(s.directions); from += s.group {
		to := min(from+s.group, len(s.directions))
		a, lines, err := s.pass(from, to, first)
		if err != nil {
			return err
		}
		first = nil
		s.levels(a, from, to)
		if !s.known && one {
			k := s.loudest()
			if err := s.find(a.Reference(), a.Beam(k), lines[k]); err != nil {
				return err
			}
		}
		if s.known {
			if err := s.gains(a, lines, from); err != nil {
				return err
			}
		}
	}
	if s.known {
		return nil
	}
	k := s.loudest()
	a, lines, err := s.pass(k, k+1, nil)
	if err != nil {
		return err
	}
	if err := s.find(a.Reference(), a.Beam(0), lines[0]); err != nil || len(s.noise) == 0 {
		return err
	}
	for from := 0; from < len(s.directions); from += s.group {
		to := min(from+s.group, len(s.directions))
		a, lines, err := s.pass(from, to, nil)
		if err != nil {
			return err
		}
		if err := s.gains(a, lines, from); err != nil {
			return err
		}
	}
	return nil
}

// pass analyses the take for the directions from..to, and returns their beams
// too; first are those that there are already.
func (s *scanner) pass(from, to int, first []*beamline) (*scan.Analysis, []*beamline, error) {
	rest, err := s.lines(s.directions[from+len(first) : to])
	if err != nil {
		return nil, nil, err
	}
	lines := append(first, rest...)
	if err := s.take.rewind(); err != nil {
		return nil, nil, err
	}
	stage := "scanning"
	if len(s.directions) > s.group {
		stage = fmt.Sprintf("scanning directions %d to %d of %d", from+1, to, len(s.directions))
	}
	a, err := s.analyse(lines, s.take, stage)
	return a, lines, err
}

// analyse runs the analysis over a take.
func (s *scanner) analyse(lines []*beamline, t *take, stage string) (*scan.Analysis, error) {
	sets := make([]*beam.Filters, len(lines))
	for i, line := range lines {
		sets[i] = line.filters
	}
	src, err := s.line.corrected(&watched{Source: t.source(), ctx: s.ctx, tell: s.tell(stage, t.header.Frames)})
	if err != nil {
		return nil, err
	}
	a, err := scan.New(src.Format(), sets, scan.Options{})
	if err != nil {
		return nil, &UsageError{Err: err}
	}
	if _, err := audio.Copy(src, blockFrames(s.spec.Options.BlockFrames, t.header.Channels), a); err != nil {
		return nil, err
	}
	return a, a.Close()
}

// levels fills in what the analysis of the directions from..to found.
func (s *scanner) levels(a *scan.Analysis, from, to int) {
	if from == 0 {
		s.result.Reference.LevelDBFS, s.result.Reference.Bands = scanLevels(a.Bands(), a.ReferenceLevel())
		var short []float64
		for _, b := range s.result.Reference.Bands {
			if b.LevelDBFS == nil {
				short = append(short, b.NominalHz)
			}
		}
		if len(short) > 0 {
			s.report(Finding{Code: "level-unmeasured", Severity: Info, Bands: short, Message: fmt.Sprintf(
				"no level in %s: the take is silent there or shorter than the windows of the band", bandCount(len(short)))})
		}
	}
	for i := from; i < to; i++ {
		s.result.Angles[i].LevelDBFS, s.result.Angles[i].Bands = scanLevels(a.Bands(), a.Level(i-from))
	}
}

// scanLevels are powers as levels, of all bands together and of each.
func scanLevels(bands []measure.Band, powers []float64) (Number, []ScanBand) {
	sum, list := 0.0, make([]ScanBand, len(bands))
	for b, band := range bands {
		list[b] = ScanBand{NominalHz: band.NominalHz, CentreHz: band.CentreHz, LevelDBFS: number(audio.PowerDB(powers[b])), Flags: []string{}}
		if powers[b] > 0 {
			sum += powers[b]
		}
	}
	return number(audio.PowerDB(sum)), list
}

// loudest is the direction with the highest level from 250 Hz to 5 kHz, in
// which speech and most wanted sounds lie.
func (s *scanner) loudest() int {
	best, at := math.Inf(-1), 0
	for i, a := range s.result.Angles {
		sum := 0.0
		for _, b := range a.Bands {
			if b.LevelDBFS != nil && b.CentreHz > 245 && b.CentreHz < 5100 {
				sum += audio.FromPowerDB(*b.LevelDBFS)
			}
		}
		if sum > best {
			best, at = sum, i
		}
	}
	return at
}

// find finds the stretches by the beam to the loudest direction.
func (s *scanner) find(reference, output *measure.Series, loudest *beamline) error {
	s.known = true
	expected := 0.0
	if bands := loudest.expected(); len(bands) > 0 {
		for _, v := range bands {
			expected += v / float64(len(bands))
		}
	}
	found, err := measure.FindSegments(reference, output, measure.SegmentOptions{ExpectedReductionDB: expected})
	if err != nil {
		return err
	}
	s.noise, s.target = found.Noise, found.Target
	source := SegmentsNone
	if len(s.noise) > 0 || len(s.target) > 0 {
		source = SegmentsAutomatic
	}
	if len(s.noise) == 0 || len(s.target) == 0 {
		s.report(Finding{Code: "no-segments", Severity: Warning, Message: fmt.Sprintf(
			"no gain could be measured: %s; give --noise A..B and --target A..B, or takes of the noise and the target alone", found.Explanation)})
	} else {
		s.report(Finding{Code: "segments-from-loudest", Severity: Info, Message: fmt.Sprintf(
			"the stretches of noise and target were found in the loudest direction, %s; where that is not the wanted sound, give --noise A..B and --target A..B", angles(s.directions[s.loudest()]))})
	}
	s.segments(source)
	return nil
}
