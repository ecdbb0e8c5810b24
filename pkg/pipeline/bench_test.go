package pipeline

import (
	"math/rand/v2"
	"path/filepath"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// The whole run on 10 s of 16 channels at 48 kHz, 24 bit; bytes are those of
// the take.
func BenchmarkRun(b *testing.B) {
	dir := b.TempDir()
	const n = 10 * 48000
	rng := rand.New(rand.NewPCG(1, 2))
	mix := audio.NewBlock(16, n)
	for ch := range 16 {
		for i := range n {
			mix.Channel(ch)[i] = float32(0.05 * rng.NormFloat64())
		}
	}
	take := filepath.Join(dir, "take.wav")
	writeWAV(b, take, 48000, wav.PCM24, mix)
	rigPath := writeText(b, filepath.Join(dir, "rig.yaml"), "line: {count: 16, spacing_mm: 40}\n")
	for _, c := range []struct {
		name string
		o    Options
	}{
		{"spectral", Options{NoMeasure: true, NoVerify: true}},
		{"sinc", Options{Method: MethodSinc, NoMeasure: true, NoVerify: true}},
		{"farrow", Options{Method: MethodFarrow, NoMeasure: true, NoVerify: true}},
		{"spectral measured", Options{Noise: "0..5"}},
	} {
		c.o.Toward, c.o.Out, c.o.Overwrite = "60", filepath.Join(dir, "y.wav"), true
		b.Run(c.name, func(b *testing.B) {
			b.SetBytes(16 * 3 * n)
			for b.Loop() {
				steer(b, take, rigPath, c.o)
			}
		})
	}
}
