package wav

import (
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"alidade/pkg/audio"
)

func noise(channels, frames int) audio.Block {
	rng := rand.New(rand.NewPCG(uint64(channels), uint64(frames)))
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		x := b.Channel(ch)
		for i := range x {
			x[i] = float32(rng.Float64()*2 - 1)
		}
	}
	return b
}

func TestFirst(t *testing.T) {
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		for _, ch := range []int{1, 2, 3, 7, 64} {
			name := filepath.Join(t.TempDir(), "x.wav")
			f, _ := os.Create(name)
			w, err := NewWriter(f, Format{48000, ch, e}, Option{Seed: 5, Metadata: &Metadata{Bext: &Bext{Description: "hi"}, Cues: []Cue{{ID: 1, Frame: 5, Label: "x"}}}})
			if err != nil {
				t.Fatal(err)
			}
			b := noise(ch, 10001)
			if err := w.Write(b); err != nil {
				t.Fatal(err)
			}
			if err := w.Close(); err != nil {
				t.Fatal(err)
			}
			st, _ := f.Stat()
			s, err := Verify(f, st.Size(), w.Written())
			t.Log(e, ch, s, err, w.Written().Peak)
		}
	}
}
