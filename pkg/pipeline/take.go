package pipeline

import (
	"cmp"
	"errors"
	"fmt"
	"path/filepath"
	"slices"
	"strings"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// take is an opened take: one file, or several read as one.
type take struct {
	name   string      // the path given, the first of several
	files  []*takeFile // in the order of their channels, of each in that of time
	reader wav.Take
	header wav.Header    // of the whole: channels and frames of all files
	meta   *wav.Metadata // of the first file, with the cues of the whole
	tracks []string      // names of the channels, "" without one
	notes  []Finding     // what was odd about how the files make a take
}

// takeFile is one file of a take.
type takeFile struct {
	in      *input
	reader  *wav.Reader
	channel int   // of the take, its first
	frame   int64 // of the take, its first
}

// openTake opens the take that the files make (see gathering).
func openTake(paths []string, how joining, hashed bool) (*take, error) {
	g := &gathering{how: how, folders: map[string][]wav.File{}}
	plan, err := g.plan(paths)
	if err != nil {
		return nil, err
	}
	t := &take{name: paths[0], notes: g.notes}
	if err := t.open(plan, hashed); err != nil {
		return nil, errors.Join(err, t.close())
	}
	return t, nil
}

// open opens all files of a plan and joins them.
func (t *take) open(plan []row, hashed bool) error {
	var rows []wav.Part
	frame := int64(0)
	for _, row := range plan {
		var strands []wav.Part
		channel := 0
		for _, strand := range row {
			var parts []wav.Part
			at := frame
			for _, path := range strand {
				f, err := t.openFile(path, hashed)
				if err != nil {
					return err
				}
				f.channel, f.frame = channel, at
				at += f.reader.Frames()
				parts = append(parts, wav.Part{Name: path, Take: f.reader})
			}
			whole, err := onlyOr(wav.Chain, parts, howChained)
			if err != nil {
				return err
			}
			channel += whole.Take.Format().Channels
			strands = append(strands, whole)
		}
		whole, err := onlyOr(wav.Join, strands, howJoined)
		if err != nil {
			return err
		}
		frame += whole.Take.Frames()
		rows = append(rows, whole)
	}
	whole, err := onlyOr(wav.Chain, rows, howChained)
	if err != nil {
		return err
	}
	t.reader = whole.Take
	t.describe(plan)
	return nil
}

// What helps where files do not go together.
const (
	howChained = "the files of a chain are of one take: same rate, same channels; give the others as takes of their own"
	howJoined  = "the files of a set are of one take: same rate, same length; look for one that was cut or is of another take"
)

// onlyOr joins parts by the given function, and leaves a single one alone.
func onlyOr(join func([]wav.Part) (wav.Take, error), parts []wav.Part, hint string) (wav.Part, error) {
	if len(parts) == 1 {
		return parts[0], nil
	}
	whole, err := join(parts)
	if err != nil {
		return wav.Part{}, &HintedError{Err: err, Hint: hint}
	}
	return wav.Part{Name: parts[0].Name, Take: whole}, nil
}

// openFile opens one file and keeps it, to be closed with the take.
func (t *take) openFile(path string, hashed bool) (*takeFile, error) {
	in, err := openInput(path, hashed)
	if err != nil {
		return nil, err
	}
	for _, other := range t.files {
		if sameInput(in, other.in) {
			in.Close()
			return nil, &UsageError{Err: fmt.Errorf("%s: is the same file as %s, which is part of this take already", path, other.in.Name()), Hint: "name each file once"}
		}
	}
	reader, err := wav.Open(in, in.info.Size())
	if err != nil {
		in.Close()
		return nil, takeError(path, err)
	}
	f := &takeFile{in: in, reader: reader}
	t.files = append(t.files, f)
	return f, nil
}

// takeError says which file cannot be read, and what helps.
func takeError(path string, err error) error {
	var unsupported *wav.UnsupportedError
	var broken *wav.FormatError
	err = fmt.Errorf("%s: %w", path, err)
	switch {
	case errors.As(err, &unsupported):
		return &HintedError{Err: err, Hint: "convert it to PCM or float WAV first"}
	case errors.As(err, &broken):
		return &HintedError{Err: err, Hint: "record or copy it again; alidade inspect shows what a readable file holds"}
	}
	return err
}

// describe settles what is known of the take as a whole.
func (t *take) describe(plan []row) {
	t.header = t.files[0].reader.Header()
	format := t.reader.Format()
	t.header.Channels, t.header.Frames = format.Channels, t.reader.Frames()
	for _, f := range t.files[1:] {
		// What keeps the samples of every file: float before integers, more bits
		// before fewer.
		h := f.reader.Header()
		if wider := h.Bits > t.header.Bits; h.Encoding.Float() && (!t.header.Encoding.Float() || wider) || !t.header.Encoding.Float() && wider {
			t.header.Encoding, t.header.Bits, t.header.ValidBits = h.Encoding, h.Bits, h.ValidBits
		}
	}
	t.tracks = make([]string, format.Channels)
	meta := *t.files[0].reader.Metadata()
	if len(t.files) > 1 {
		meta.Cues = nil
	}
	k := 0
	for _, row := range plan {
		for s, strand := range row {
			files := t.files[k : k+len(strand)]
			k += len(strand)
			t.seams(files)
			for _, f := range files {
				if f.frame == 0 {
					copy(t.tracks[f.channel:], f.reader.Metadata().TrackNames(f.reader.Header().Channels))
				}
				if s == 0 && len(t.files) > 1 { // a recorder marks every file of a set alike
					for _, q := range f.reader.Metadata().Cues {
						q.ID, q.Frame = uint32(len(meta.Cues)+1), q.Frame+f.frame
						meta.Cues = append(meta.Cues, q)
					}
				}
			}
		}
	}
	var firsts []*takeFile
	for k, r := 0, 0; r < len(plan); r++ {
		firsts = append(firsts, t.files[k])
		for _, strand := range plan[r] {
			k += len(strand)
		}
	}
	t.seams(firsts) // of rows, whose files are in step
	t.meta = &meta
}

// seams adds findings for the gaps and overlaps of files one after the other.
func (t *take) seams(files []*takeFile) {
	var list []wav.File
	for _, f := range files {
		list = append(list, wav.FileOf(f.in.Name(), f.reader))
	}
	rate := float64(t.header.Rate)
	for _, s := range wav.Seams(list) {
		code, what := "chain-gap", "the sound of that time is missing, and what follows comes too early in the track"
		if s.Gap < 0 {
			code, what = "chain-overlap", "that sound is in the take twice: look at the order of the files, or leave one out"
		}
		at := files[0].frame + s.Frame
		t.notes = append(t.notes, Finding{Code: code, Severity: Warning, Message: fmt.Sprintf(
			"at %.3f s of the take: %s (%.3f s): %s", float64(at)/rate, s, float64(max(s.Gap, -s.Gap))/rate, what)})
	}
}

// close releases the take's files.
func (t *take) close() error {
	var err error
	for _, f := range t.files {
		err = joinErrors(err, f.in.Close())
	}
	return err
}

// path names the take in messages.
func (t *take) path() string { return t.name }

// paths are the take's files.
func (t *take) paths() []string {
	list := make([]string, len(t.files))
	for k, f := range t.files {
		list[k] = f.in.Name()
	}
	return list
}

// outputBase is the path that the names of outputs are made from: the take's,
// without the place of the channel number in a pattern.
func (t *take) outputBase() string {
	dir, base := filepath.Split(t.name)
	if !strings.Contains(base, channelMark) {
		return t.name
	}
	ext := filepath.Ext(base)
	before, behind, _ := strings.Cut(strings.TrimSuffix(base, ext), channelMark)
	const separators = "_-. "
	before, behind = strings.TrimRight(before, separators), strings.TrimLeft(behind, separators)
	stem := before + behind
	if before != "" && behind != "" {
		stem = before + "_" + behind
	}
	return dir + cmp.Or(stem, "take") + ext
}

// source returns the take as a stream whose errors carry its path.
func (t *take) source() audio.Source {
	if len(t.files) > 1 {
		return t.reader // its errors name the file
	}
	return named{t.reader, t.path()}
}

// sounds refuses a take without a frame.
func (t *take) sounds() error {
	if t.header.Frames > 0 {
		return nil
	}
	return &HintedError{
		Err:  fmt.Errorf("%s: holds no sound: its header promises %d channels at %d Hz, and no frame follows", t.path(), t.header.Channels, t.header.Rate),
		Hint: "the recorder stopped before the first sound or the copy was cut off: copy it again, or leave it out",
	}
}

// unchanged reports a take one of whose files changed since it was opened.
func (t *take) unchanged() error {
	for _, f := range t.files {
		if err := f.in.unchanged(); err != nil {
			return err
		}
	}
	return nil
}

// timeBase is the time of day of the take's frames, and false without one.
func (t *take) timeBase() (wav.TimeBase, bool) { return t.meta.TimeBase(t.header.Rate) }

// finish fills in what is known once the take has been read, and reports a
// take that changed meanwhile.
func (t *take) finish() (Take, error) {
	h := t.header
	out := Take{
		Channels: h.Channels, SampleRateHz: h.Rate, Frames: h.Frames,
		DurationS: float64(h.Frames) / float64(h.Rate),
		Encoding:  string(h.Encoding),
	}
	for _, f := range t.files {
		digest, err := f.in.digest()
		if err != nil {
			return Take{}, err
		}
		out.Files = append(out.Files, File{Path: f.in.Name(), SHA256: digest})
	}
	if base, ok := t.timeBase(); ok {
		out.StartTime = base.Time(0)
	}
	return out, nil
}

// findings are what was odd about the take's files.
func (t *take) findings() []Finding {
	list := slices.Clone(t.notes)
	for _, file := range t.files {
		for _, w := range file.reader.Warnings() {
			f := Finding{Code: "take-" + w.Code, Severity: Warning, Message: w.String()}
			if len(t.files) > 1 {
				f.Message = file.in.Name() + ": " + f.Message
			}
			if w.Code == wav.WarnNonFinite {
				bad := file.reader.NonFinite()
				f.Channels = []int{file.channel + bad.Channel + 1}
			}
			list = append(list, f)
		}
	}
	return list
}

// named adds the path of its file to the errors of a source.
type named struct {
	audio.Source
	path string
}

// Read implements audio.Source.
func (n named) Read(dst audio.Block) (int, error) {
	got, err := n.Source.Read(dst)
	if err != nil && !isEnd(err) {
		err = fmt.Errorf("%s: %w", n.path, err)
	}
	return got, err
}

// joinErrors is errors.Join for a deferred close: it keeps err itself where
// nothing else went wrong.
func joinErrors(err, other error) error {
	if other == nil {
		return err
	}
	return errors.Join(err, other)
}
