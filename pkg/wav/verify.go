package wav

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"math"

	witness "github.com/go-audio/audio"
	witnesswav "github.com/go-audio/wav"

	"alidade/pkg/audio"
)

// verifyFrames is the number of frames compared at a time.
const verifyFrames = 8192

// ReadFile is a finished file, open for reading. *os.File is one.
type ReadFile interface {
	io.ReaderAt
	io.ReadSeeker
}

// Verify reads a finished file of size bytes back and compares it with what
// was meant: its size, rate, bits, channels and frames, and every sample. The
// samples are compared through Reader and, for PCM in a plain RIFF, through an
// independent reader too, so that a faulty disk and a faulty writer are both
// found before a track is called done. The text says what was compared.
func Verify(f ReadFile, size int64, want Written) (string, error) {
	if size != want.Bytes {
		return "", fmt.Errorf("read back: the file has %d bytes, %d were written", size, want.Bytes)
	}
	if err := verifyOwn(f, size, want); err != nil {
		return "", fmt.Errorf("read back: %w", err)
	}
	const own = "every sample compared by one reader"
	switch {
	case want.Format.Encoding.Float():
		return own + "; the second one knows no float", nil
	case want.Container != RIFF:
		return own + "; the second one knows no " + string(want.Container), nil
	}
	if err := verifyWitness(f, want); err != nil {
		return "", fmt.Errorf("read back by the second reader: %w", err)
	}
	return "every sample compared by two readers", nil
}

// verifyOwn compares through Reader.
func verifyOwn(f io.ReaderAt, size int64, want Written) error {
	r, err := Open(f, size)
	if err != nil {
		return err
	}
	h := r.Header()
	if got := (Format{Rate: h.Rate, Channels: h.Channels, Encoding: h.Encoding}); got != want.Format || h.Frames != want.Frames || h.Container != want.Container {
		return fmt.Errorf("the header says %+v, %s and %d frames, want %+v, %s and %d", got, h.Container, h.Frames, want.Format, want.Container, want.Frames)
	}
	for _, w := range r.Warnings() {
		if w.Code != WarnNoFrames {
			return fmt.Errorf("the file is odd: %s", w)
		}
	}
	head := sizes(want.Container, size, want.Frames*int64(want.Format.FrameBytes()), want.Frames)
	got := make([]byte, len(head))
	if _, err := f.ReadAt(got, 0); err != nil {
		return err
	}
	if !bytes.Equal(got, head) {
		return fmt.Errorf("the file starts with % x, want % x", got, head)
	}
	sums := make([]uint64, h.Channels)
	scale := float64(int64(1) << (h.Bits - 1)) // exact for the 16 and 24 bits that a Writer makes
	block := audio.NewBlock(h.Channels, verifyFrames)
	for {
		n, err := r.Read(block)
		for ch := range sums {
			sum := sums[ch]
			for _, x := range block.Channel(ch)[:n] {
				if h.Encoding.Float() {
					sum = mix(sum, math.Float32bits(x))
				} else {
					sum = mix(sum, uint32(int32(float64(x)*scale)))
				}
			}
			sums[ch] = sum
		}
		if errors.Is(err, io.EOF) {
			return compareSums(sums, want)
		}
		if err != nil {
			return err
		}
	}
}

// verifyWitness compares through github.com/go-audio/wav. Of its ways to read,
// only blocks of whole frames after FwdToPCM are dependable, and only on a
// source that never reads short; its faults show in Err.
func verifyWitness(f io.ReadSeeker, want Written) error {
	if _, err := f.Seek(0, io.SeekStart); err != nil {
		return err
	}
	d := witnesswav.NewDecoder(wholeReads{f})
	if err := errors.Join(d.FwdToPCM(), d.Err()); err != nil {
		return err
	}
	got := Format{Rate: int(d.SampleRate), Channels: int(d.NumChans), Encoding: want.Format.Encoding}
	if got != want.Format || int(d.BitDepth) != want.Format.Encoding.Bits() {
		return fmt.Errorf("it finds %d channels of %d bits at %d Hz, want %d of %d at %d", got.Channels, d.BitDepth, got.Rate,
			want.Format.Channels, want.Format.Encoding.Bits(), want.Format.Rate)
	}
	channels := want.Format.Channels
	buf := &witness.IntBuffer{
		Format: &witness.Format{NumChannels: channels, SampleRate: want.Format.Rate},
		Data:   make([]int, channels*max(1, verifyFrames/channels)),
	}
	sums := make([]uint64, channels)
	total := int64(0)
	for {
		n, err := d.PCMBuffer(buf)
		if err := errors.Join(err, d.Err()); err != nil {
			return err
		}
		if n == 0 {
			break
		}
		for ch := range channels {
			sum := sums[ch]
			for i := ch; i < n; i += channels {
				sum = mix(sum, uint32(int32(buf.Data[i])))
			}
			sums[ch] = sum
		}
		total += int64(n)
	}
	if total != want.Frames*int64(channels) {
		return fmt.Errorf("it finds %d samples, want %d", total, want.Frames*int64(channels))
	}
	return compareSums(sums, want)
}

func compareSums(sums []uint64, want Written) error {
	for ch, sum := range sums {
		if sum != want.sums[ch] {
			return fmt.Errorf("channel %d: the samples are not those that were written", ch+1)
		}
	}
	return nil
}

// wholeReads is a reader whose Read fills p unless the end comes.
type wholeReads struct{ io.ReadSeeker }

func (w wholeReads) Read(p []byte) (int, error) {
	n, err := io.ReadFull(w.ReadSeeker, p)
	if errors.Is(err, io.ErrUnexpectedEOF) {
		err = nil
	}
	return n, err
}
