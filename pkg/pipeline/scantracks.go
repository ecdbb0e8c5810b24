package pipeline

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/kernel"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

// trackSchema is the version of the form of the file beside a track of a scan.
const trackSchema = "alidade-scan-track/1"

// trackRecord says what a track of a scan was made from. It stands beside the
// track, and a track is kept if its record says that it would be made again.
type trackRecord struct {
	Schema  string `json:"schema"`
	Version string `json:"version"`
	Kernel  string `json:"kernel"`
	Take    []File `json:"take"` // paths without folders
	Rig     string `json:"rig_sha256"`
	// Positions is of the CSV file that the rig file names.
	Positions string  `json:"positions_sha256,omitempty"`
	Options   Options `json:"options"`
	learnedFrom
	// Toward is the direction, and Beside those that were steered to in the
	// same pass, whose filters decide on the size of its transforms.
	Toward string   `json:"toward"`
	Beside []string `json:"beside"`
	Track  *Output  `json:"track"`
}

// learnedFrom is the noise that weights of minimum variance were found on: no
// path and no label, which would say more than that.
type learnedFrom struct {
	NoiseS   [][2]float64 `json:"noise_s,omitempty"`        // stretches of the take
	Isolated []File       `json:"isolated_noise,omitempty"` // paths without folders
}

// tracksTogether is how many tracks are made in one pass.
const tracksTogether = 16

// trackFolder makes the folder of the tracks.
func (s *scanner) trackFolder() error {
	dir := s.spec.Options.Tracks
	if dir == "" {
		return nil
	}
	if info, err := os.Stat(dir); err == nil && !info.IsDir() {
		return &HintedError{Err: fmt.Errorf("%s: is %s, not a folder", dir, kindOf(info.Mode())), Hint: "give --tracks a folder"}
	}
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return ofOption(unwritable(dir, err), "tracks")
	}
	return nil
}

// trackFiles are the files of all tracks, none without --tracks.
func (s *scanner) trackFiles() (list []output) {
	if s.spec.Options.Tracks == "" {
		return nil
	}
	for _, d := range s.directions {
		track, record := s.files(d)
		list = append(list, output{"the track of " + angles(d), track}, output{"the record of the track of " + angles(d), record})
	}
	return list
}

// tracks writes the track of each direction into the folder, and keeps those
// that an earlier scan left there.
func (s *scanner) tracks() error {
	if err := s.heardBefore(); err != nil {
		return err
	}
	together := tracksTogether
	if s.set.Method != MethodSpectral {
		together = 1
	}
	for from := 0; from < len(s.directions); from += together {
		if err := s.someTracks(from, min(from+together, len(s.directions))); err != nil {
			return err
		}
	}
	return nil
}

// scanned is a track of a scan on its way.
type scanned struct {
	track  *track
	record *staged
	about  trackRecord
	index  int // of the direction
}

// names are the files of a direction.
func (s *scanner) files(d rig.Direction) (track, record string) {
	base := filepath.Base(s.take.outputBase())
	stem := filepath.Join(s.spec.Options.Tracks, strings.TrimSuffix(base, filepath.Ext(base))+directionName(d))
	return stem + ".wav", stem + ".track.json"
}

// someTracks makes those of the tracks from..to that are not there. All of them
// are designed, whichever are there: the size of the transforms, and with it the
// last bit, must not depend on what an earlier scan left.
func (s *scanner) someTracks(from, to int) (err error) {
	var due []*scanned
	defer func() {
		for _, d := range due {
			d.track.abandon()
			d.record.abandon()
		}
	}()
	for i := from; i < to; i++ {
		about := s.record(i, from, to)
		track, record := s.files(s.directions[i])
		if kept, err := keptTrack(track, record, about); err != nil {
			return err
		} else if kept != nil {
			s.result.Angles[i].Track = &ScanTrack{Output: *kept, Kept: true}
			continue
		}
		due = append(due, &scanned{about: about, index: i})
	}
	if len(due) == 0 {
		return nil
	}
	lines, err := s.lines(s.directions[from:to])
	if err != nil {
		return err
	}
	h := s.take.header
	encoding := s.set.trackEncoding(h)
	total := int64(0)
	for _, d := range due {
		s.run.line, s.run.set = lines[d.index-from], lines[d.index-from].set
		track, record := s.files(s.directions[d.index])
		meta, dropped := s.carried(encoding, s.beamName())
		if d.index == 0 {
			s.dropped(dropped)
		}
		total += wav.SizeBound(wav.Format{Rate: h.Rate, Channels: 1, Encoding: encoding}, meta, h.Frames) + 1<<14
		if _, err := os.Stat(track); err == nil && !s.set.Overwrite {
			return &HintedError{Err: fmt.Errorf("%s: exists already, and was not made from this take with these options", track), Hint: "give --tracks another folder, or --overwrite to replace it"}
		}
		if d.track, err = newTrack(track, s.set.Overwrite, h.Rate, encoding, 0, meta); err != nil {
			return ofOption(err, "tracks")
		}
		// A record without its track is what an interrupted scan left.
		if d.record, err = stage(record, s.set.Overwrite || isRecord(record)); err != nil {
			return ofOption(err, "tracks")
		}
	}
	if err := checkRoom(due[0].track.file.final, total); err != nil {
		return err
	}
	if err := s.run.take.rewind(); err != nil {
		return err
	}
	if err := s.steerTracks(lines, due, from); err != nil {
		return err
	}
	for _, d := range due {
		if err := s.finishTrack(d); err != nil {
			return err
		}
	}
	return nil
}

// steerTracks runs the beams over the take into the tracks.
func (s *scanner) steerTracks(lines []*beamline, due []*scanned, from int) error {
	h := s.take.header
	stage := fmt.Sprintf("steering tracks %d to %d of %d", from+1, from+len(lines), len(s.directions))
	src, err := s.line.corrected(&watched{Source: s.take.source(), ctx: s.ctx, tell: s.tell(stage, h.Frames)})
	if err != nil {
		return err
	}
	var y audio.Source
	if s.set.Method == MethodSpectral {
		var sets []*beam.Filters
		for _, line := range lines {
			sets = append(sets, line.filters)
		}
		y, err = beam.NewOverlapSaveMany(src, sets)
	} else {
		y, err = beam.New(src, lines[0].filters)
	}
	if err != nil {
		return err
	}
	var sinks []audio.Sink
	for _, d := range due {
		sinks = append(sinks, &pick{channel: d.index - from, sink: &louder{sink: d.track, factor: float32(audio.FromAmplitudeDB(s.set.GainDB))}})
	}
	_, err = audio.Copy(y, blockFrames(s.spec.Options.BlockFrames, h.Channels), sinks...)
	return err
}

// finishTrack commits a track and its record.
func (s *scanner) finishTrack(d *scanned) error {
	if err := context.Cause(s.ctx); err != nil {
		return err
	}
	if err := d.track.close(); err != nil {
		return err
	}
	if d.track.over() {
		return d.track.overError(s.set.GainDB)
	}
	o, err := d.track.output(!s.set.NoVerify)
	if err != nil {
		return err
	}
	if o.SHA256, err = s.digest(d.track); err != nil {
		return err
	}
	named := o
	named.Path = filepath.Base(o.Path)
	if o.PeakDBFS != nil {
		rounded := math.Round(*o.PeakDBFS*1000) / 1000
		named.PeakDBFS = &rounded
	}
	d.about.Track = &named
	data, err := json.MarshalIndent(d.about, "", "  ")
	if err != nil {
		return err
	}
	if _, err := d.record.Write(append(data, '\n')); err != nil {
		return fmt.Errorf("%s: %w", d.record.final, err)
	}
	if err := commitAll([]*staged{d.record, d.track.file}); err != nil {
		return err
	}
	s.result.Angles[d.index].Track = &ScanTrack{Output: o}
	return nil
}

// heardBefore settles what the weights were found on, for the records.
func (s *scanner) heardBefore() error {
	if s.set.Weights != WeightsMinimumVariance {
		return nil
	}
	stretches, source, err := s.knownNoise()
	if err != nil {
		return err
	}
	if source != SegmentsNone {
		s.learnt.NoiseS = spans(stretches)
		return nil
	}
	t, err := openTake([]string{s.set.IsolatedNoise}, s.isolatedJoining(), true)
	if err != nil {
		return err
	}
	about, err := t.finish()
	for _, f := range about.Files {
		s.learnt.Isolated = append(s.learnt.Isolated, File{Path: filepath.Base(f.Path), SHA256: f.SHA256})
	}
	return joinErrors(err, t.close())
}

// record is what the track of direction i is made from.
func (s *scanner) record(i, from, to int) trackRecord {
	o := s.spec.Options.Options
	// What leaves no mark in a track.
	o.Overwrite, o.NoVerify, o.NoMeasure, o.Out, o.Reports, o.Toward, o.BlockFrames = false, false, false, "", "", "", 0
	o.CompareTo, o.Target, o.TargetCue, o.IsolatedTarget = "", "", "", ""
	// What the noise has done stands in learnedFrom.
	o.Noise, o.NoiseCue, o.IsolatedNoise = "", "", ""
	r := trackRecord{
		Schema: trackSchema, Version: s.spec.Version, Kernel: kernel.Name(), Rig: s.rig.digest, Positions: s.rig.positions,
		Options: o, learnedFrom: s.learnt, Toward: directionText(s.directions[i]),
	}
	for _, f := range s.result.Take.Files {
		r.Take = append(r.Take, File{Path: filepath.Base(f.Path), SHA256: f.SHA256})
	}
	for _, d := range s.directions[from:to] {
		r.Beside = append(r.Beside, directionText(d))
	}
	return r
}

// maxRecord bounds the file beside a track, bytes.
const maxRecord = 1 << 20

// keptTrack returns the track at path if it is whole and its record says that
// it would be made again, else nil.
func keptTrack(path, record string, want trackRecord) (*Output, error) {
	data, err := readSmall(record, maxRecord)
	if err != nil {
		return nil, nil // whatever is there stands in the way when it is written
	}
	var have trackRecord
	if json.Unmarshal(data, &have) != nil || have.Track == nil {
		return nil, nil
	}
	track := have.Track
	have.Track = nil
	a, errA := json.Marshal(have)
	b, errB := json.Marshal(want)
	if errA != nil || errB != nil || string(a) != string(b) {
		return nil, nil
	}
	in, err := openInput(path, false)
	if err != nil {
		return nil, nil
	}
	defer in.Close()
	sum, err := digestFile(in.File)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	if sum != track.SHA256 {
		return nil, nil
	}
	track.Path = path
	return track, nil
}

// isRecord says whether a file is the record of a track.
func isRecord(path string) bool {
	data, err := readSmall(path, maxRecord)
	if err != nil {
		return false
	}
	var r trackRecord
	return json.Unmarshal(data, &r) == nil && r.Schema == trackSchema
}
