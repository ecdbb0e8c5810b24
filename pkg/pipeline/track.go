package pipeline

import (
	"fmt"
	"math"
	"path/filepath"
	"syscall"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// ditherSeed is the seed of the dither of pcm16 tracks; the report records it.
const ditherSeed uint64 = 1

// track is an output track on its way to its file.
type track struct {
	file   *staged
	writer *wav.Writer
	format wav.Format
	first  int64 // frame of the take that is the track's first
}

// newTrack starts a mono track with metadata under its temporary name.
func newTrack(final string, overwrite bool, rate int, encoding wav.Encoding, first int64, meta *wav.Metadata) (*track, error) {
	file, err := stage(final, overwrite)
	if err != nil {
		return nil, err
	}
	t := &track{file: file, format: wav.Format{Rate: rate, Channels: 1, Encoding: encoding}, first: first}
	if t.writer, err = wav.NewWriter(file, t.format, wav.Option{Metadata: meta, Seed: ditherSeed}); err != nil {
		file.abandon()
		return nil, fmt.Errorf("%s: %w", final, err)
	}
	return t, nil
}

// Write implements audio.Sink.
func (t *track) Write(src audio.Block) error {
	if err := t.writer.Write(src); err != nil {
		return fmt.Errorf("%s: %w", t.file.final, err)
	}
	return nil
}

// abandon removes an unfinished track.
func (t *track) abandon() {
	if t != nil {
		t.file.abandon()
	}
}

// close finishes the WAV in the temporary file.
func (t *track) close() error {
	if err := t.writer.Close(); err != nil {
		return fmt.Errorf("%s: %w", t.file.final, err)
	}
	return nil
}

// over reports a track that left the range of its format.
func (t *track) over() bool { return !t.format.Encoding.Float() && t.writer.Written().Over > 0 }

// overError says by how much a track is too loud, and what helps.
func (t *track) overError(gainDB float64) error {
	w := t.writer.Written()
	peak := audio.AmplitudeDB(w.Peak)
	many := fmt.Sprintf("%d frames", w.Over)
	if w.Over == 1 {
		many = "1 frame"
	}
	return &HintedError{
		Err: fmt.Errorf("%s: %s beyond full scale, the largest %+.2f dBFS at frame %d: %s would clip",
			t.file.final, many, peak, t.first+w.PeakFrame, t.format.Encoding),
		Hint: fmt.Sprintf("--gain-db %.1f brings the peak below full scale, --over-range float32 or --format float32 keeps it", math.Floor(10*(gainDB-peak-0.05))/10),
	}
}

// output reads the finished file back where asked, and returns what the report
// says of it.
func (t *track) output(verify bool) (Output, error) {
	w := t.writer.Written()
	o := Output{
		Path: t.file.final, Format: string(t.format.Encoding), Frames: w.Frames, FirstFrame: t.first,
		ReadBack: "not read back",
	}
	if w.Peak > 0 {
		o.PeakDBFS = number(audio.AmplitudeDB(w.Peak))
	}
	if t.format.Encoding == wav.PCM16 {
		seed := w.Seed
		o.DitherSeed = &seed
	}
	if verify {
		text, err := wav.Verify(t.file, w.Bytes, w)
		if err != nil {
			return o, &HintedError{
				Err:  fmt.Errorf("%s: %w", t.file.final, err),
				Hint: "the disk or its driver gives back other bytes than were written: write to another disk",
			}
		}
		o.ReadBack = text
	}
	return o, nil
}

// number returns a measured quantity, nil for what is not a finite number.
func number(v float64) Number {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return &v
}

// trackEncoding is the encoding of the track of a take: the one asked for, or
// float32 for a take in floating point and pcm24 for any other.
func (s *settings) trackEncoding(h wav.Header) wav.Encoding {
	switch s.Format {
	case FormatPCM16:
		return wav.PCM16
	case FormatPCM24:
		return wav.PCM24
	case FormatFloat32:
		return wav.Float32
	}
	if h.Encoding.Float() {
		return wav.Float32
	}
	return wav.PCM24
}

// untouchedEncoding holds the samples of a take as they are: up to 24 bits in
// pcm24, the others in float32.
func untouchedEncoding(h wav.Header) wav.Encoding {
	if h.Encoding.Float() || h.Bits > 24 {
		return wav.Float32
	}
	return wav.PCM24
}

// checkRoom reports an output folder with too little room for bytes.
func checkRoom(path string, bytes int64) error {
	dir := filepath.Dir(path)
	free, known := freeBytes(dir)
	if known && free < bytes {
		return &HintedError{
			Err:  fmt.Errorf("%s: %.1f MB free, the outputs need %.1f MB: %w", dir, float64(free)/1e6, float64(bytes)/1e6, syscall.ENOSPC),
			Hint: "free some room or give --out on another disk",
		}
	}
	return nil
}
