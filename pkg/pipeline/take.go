package pipeline

import (
	"errors"
	"fmt"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// take is an opened take.
type take struct {
	in     *input
	reader *wav.Reader
	header wav.Header
}

// openTake opens the take of the given files.
func openTake(paths []string, hashed bool) (*take, error) {
	if len(paths) != 1 {
		return nil, &UsageError{Err: fmt.Errorf("a take of %d files: want one multichannel file", len(paths))}
	}
	in, err := openInput(paths[0], hashed)
	if err != nil {
		return nil, err
	}
	reader, err := wav.Open(in, in.info.Size())
	if err != nil {
		in.Close()
		return nil, fmt.Errorf("%s: %w", paths[0], err)
	}
	return &take{in: in, reader: reader, header: reader.Header()}, nil
}

// close releases the take's files.
func (t *take) close() error { return t.in.Close() }

// path names the take in messages.
func (t *take) path() string { return t.in.Name() }

// source returns the take as a stream whose errors carry its path.
func (t *take) source() audio.Source { return named{t.reader, t.path()} }

// finish fills in what is known once the take has been read, and reports a
// take that changed meanwhile.
func (t *take) finish() (Take, error) {
	digest, err := t.in.digest()
	if err != nil {
		return Take{}, err
	}
	h := t.header
	return Take{
		Files:    []File{{Path: t.path(), SHA256: digest}},
		Channels: h.Channels, SampleRateHz: h.Rate, Frames: h.Frames,
		DurationS: float64(h.Frames) / float64(h.Rate),
		Encoding:  string(h.Encoding),
	}, nil
}

// findings are what was odd about the take's files.
func (t *take) findings() []Finding {
	var list []Finding
	for _, w := range t.reader.Warnings() {
		f := Finding{Code: "take-" + w.Code, Severity: Warning, Message: w.String()}
		if w.Code == wav.WarnNonFinite {
			bad := t.reader.NonFinite()
			f.Channels = []int{bad.Channel + 1}
		}
		list = append(list, f)
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
