package wav_test

import (
	"bytes"
	"fmt"
	"os"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// A track is written, read back and looked at.
func Example() {
	f, err := os.CreateTemp("", "track-*.wav")
	if err != nil {
		fmt.Println(err)
		return
	}
	defer os.Remove(f.Name())
	defer f.Close()

	meta := &wav.Metadata{Cues: []wav.Cue{{ID: 1, Frame: 100, Label: "noise"}}}
	w, err := wav.NewWriter(f, wav.Format{Rate: 48000, Channels: 1, Encoding: wav.PCM24}, wav.Option{Metadata: meta})
	if err != nil {
		fmt.Println(err)
		return
	}
	sound := audio.NewBlock(1, 480)
	sound.Channel(0)[7] = -0.5
	if err := w.Write(sound); err != nil {
		fmt.Println(err)
		return
	}
	if err := w.Close(); err != nil {
		fmt.Println(err)
		return
	}
	how, err := wav.Verify(f, w.Written().Bytes, w.Written())
	fmt.Println(how, err)

	r, err := wav.Open(f, w.Written().Bytes)
	if err != nil {
		fmt.Println(err)
		return
	}
	h := r.Header()
	fmt.Println(h.Container, h.Encoding, h.Channels, "channel,", h.Frames, "frames, cue", r.Metadata().Cues[0].Label, "at", r.Metadata().Cues[0].Frame)
	// Output:
	// every sample compared by two readers <nil>
	// RIFF pcm24 1 channel, 480 frames, cue noise at 100
}

// What cannot be read says what it is and where.
func ExampleOpen() {
	file := []byte("RIFF\x24\x00\x00\x00WAVEfmt \x10\x00\x00\x00\x55\x00\x02\x00\x80\xbb\x00\x00\x00\x00\x00\x00\x01\x00\x00\x00")
	_, err := wav.Open(bytes.NewReader(file), int64(len(file)))
	fmt.Println(err)
	// Output:
	// fmt chunk at byte 12: MPEG layer 3 in WAV (format tag 0x0055): PCM and float are read
}
