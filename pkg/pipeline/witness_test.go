package pipeline

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/delay"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
	"alidade/pkg/wav"
)

// python returns a Python with numpy, or skips.
func python(t *testing.T) string {
	t.Helper()
	for _, name := range []string{"/usr/bin/python3", "python3"} {
		if exec.Command(name, "-c", "import numpy").Run() == nil {
			return name
		}
	}
	t.Skip("no python3 with numpy here: the whole-file witness cannot run")
	return ""
}

// The three methods through the whole command path in float32, against one
// double-precision transform of the whole file in numpy
// (scripts/reference/wholefile.py): a noisy take of 12 channels, 1 m across,
// with content from 0 to 0.8 of Nyquist; and against each other.
func TestMethodsAgainstWholeFileTransformInNumpy(t *testing.T) {
	py := python(t)
	const rate, n, channels = 48000, 5 * 48000, 12
	rng := rand.New(rand.NewPCG(31, 7))
	// Noise of its own on every channel, low-passed at 0.8 of Nyquist, and a
	// part that is common to all.
	kernel := lowPass(t)
	raw := audio.NewBlock(channels, n)
	common := make([]float32, n)
	for i := range common {
		common[i] = float32(0.1 * rng.NormFloat64())
	}
	for ch := range channels {
		for i := range n {
			raw.Channel(ch)[i] = common[i] + float32(0.05*rng.NormFloat64())
		}
	}
	filtered, err := spectral.NewFilter(audio.FromBlock(rate, raw), kernel, len(kernel)/2)
	if err != nil {
		t.Fatal(err)
	}
	mix, err := audio.ReadAll(filtered)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	take := filepath.Join(dir, "take.wav")
	writeWAV(t, take, rate, wav.Float32, mix)

	var rigText, beamText strings.Builder
	rigText.WriteString("rig: twelve over a metre\nmicrophones:\n")
	at := make([]rig.Point, channels)
	for ch := range at {
		at[ch] = rig.Point{
			X: math.Round(1000*(rng.Float64()-0.5)) / 1000,
			Y: math.Round(600*(rng.Float64()-0.5)) / 1000,
			Z: math.Round(200*(rng.Float64()-0.5)) / 1000,
		}
		fmt.Fprintf(&rigText, "  - {name: W%d, channel: %d, at_mm: [%g, %g, %g]}\n", ch+1, ch+1, 1000*at[ch].X, 1000*at[ch].Y, 1000*at[ch].Z)
	}
	l := &rig.Rig{Reference: rig.CentreReference}
	for ch := range at {
		l.Mics = append(l.Mics, rig.Mic{At: at[ch], Use: true})
	}
	look := acoustics.Plane{From: rig.Degrees(37.3, 11)}
	for _, tau := range acoustics.Delays(nil, look, at, l.ReferencePoint(), acoustics.DryAir(20).Speed()) {
		fmt.Fprintf(&beamText, "%.17g %.17g\n", tau, 1.0/channels)
	}
	rigPath := writeText(t, filepath.Join(dir, "rig.yaml"), rigText.String())
	beamPath := writeText(t, filepath.Join(dir, "beam.txt"), beamText.String())

	tracks := map[string]audio.Block{}
	for _, c := range []struct {
		method string
		limit  float64
	}{{MethodSinc, -100}, {MethodSpectral, -100}, {MethodFarrow, -85}} {
		out := filepath.Join(dir, c.method+".wav")
		steer(t, take, rigPath, Options{Toward: "37.3,11", Method: c.method, Out: out, NoMeasure: true})
		tracks[c.method], _ = readWAV(t, out)
		cmd := exec.Command(py, filepath.Join("..", "..", "scripts", "reference", "wholefile.py"), take, beamPath, "--check", out)
		cmd.Env = append(os.Environ(), "PYTHONDONTWRITEBYTECODE=1")
		text, err := cmd.CombinedOutput()
		if err != nil {
			t.Fatalf("%v: %s", err, text)
		}
		db, err := strconv.ParseFloat(strings.TrimSpace(string(text)), 64)
		if err != nil {
			t.Fatalf("%q: %v", text, err)
		}
		t.Logf("%s: %.1f dB against the whole-file transform", c.method, db)
		if !(db <= c.limit) {
			t.Errorf("%s: error %.1f dB, want at most %g", c.method, db, c.limit)
		}
	}
	for _, pair := range [][2]string{{MethodSinc, MethodFarrow}, {MethodSinc, MethodSpectral}, {MethodFarrow, MethodSpectral}} {
		a, b := tracks[pair[0]], tracks[pair[1]]
		var d2, s2 float64
		for i, v := range a.Channel(0) {
			d := float64(v) - float64(b.Channel(0)[i])
			d2 += d * d
			s2 += float64(v) * float64(v)
		}
		if db := 10 * math.Log10(d2/s2); db > -80 {
			t.Errorf("%s and %s differ by %.1f dB, want at most -80", pair[0], pair[1], db)
		}
	}
}

// lowPass is a symmetric filter that passes up to 0.72 of Nyquist and stops,
// by more than 120 dB, from 0.8 on.
func lowPass(t *testing.T) []float64 {
	t.Helper()
	const half, cutoff = 160, 0.76 // of Nyquist
	taps := make([]float64, 2*half+1)
	for i := range taps {
		x := float64(i - half)
		s := cutoff
		if x != 0 {
			s = math.Sin(math.Pi*cutoff*x) / (math.Pi * x)
		}
		taps[i] = s * delay.Kaiser(13)(x/(half+1))
	}
	return taps
}
