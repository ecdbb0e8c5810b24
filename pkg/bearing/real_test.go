package bearing

import (
	"errors"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"sort"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/wav"

	"gonum.org/v1/gonum/dsp/fourier"
)

// recording reads a file of the real recordings, which are not part of the
// project.
func recording(t *testing.T, name string) (audio.Block, int) {
	t.Helper()
	root := os.Getenv("ALIDADE_DATA")
	if root == "" {
		root = filepath.Join("..", "..", "..", "shared", "data")
	}
	file, err := os.Open(filepath.Join(root, filepath.FromSlash(name)))
	if errors.Is(err, fs.ErrNotExist) {
		t.Skipf("recording %s is not here: set ALIDADE_DATA to the folder of the real recordings", name)
	}
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		t.Fatal(err)
	}
	r, err := wav.Open(file, info.Size())
	if err != nil {
		t.Fatal(err)
	}
	b, err := audio.ReadAll(r)
	if err != nil {
		t.Fatal(err)
	}
	return b, r.Format().Rate
}

// upsample returns x at factor times its rate, by zeros in the spectrum.
func upsample(x []float64, factor int) []float64 {
	n := len(x)
	spec := fourier.NewFFT(n).Coefficients(nil, x)
	long := make([]complex128, n*factor/2+1)
	copy(long, spec)
	y := fourier.NewFFT(n*factor).Sequence(nil, long)
	for i := range y {
		y[i] /= float64(n)
	}
	return y
}

// The two takes of a loudspeaker in a room, truth from the delays between
// neighbours fitted with a spherical wave (README of the recordings).
func TestRealLineOfEightFindsDirectionAndDistance(t *testing.T) {
	mics := lineMics(8, 0.12)
	for _, c := range []struct {
		name               string
		angleDeg, distance float64
		dead               int
	}{
		{"line8-room/noise_rec_one.wav", 88.2, 1.15, -1},
		{"line8-room/noise_rec_two.wav", 35.2, 1.55, 0},
	} {
		b, rate := recording(t, c.name)
		r := find(t, mics, rate, b, Options{})
		if len(r.Sources) == 0 {
			t.Errorf("%s: nothing found: %+v", c.name, r.Findings)
			continue
		}
		s := r.Sources[0]
		t.Logf("%s: %.2f° ± %.2f°, confidence %.2f, distance %v", c.name, s.Direction.AzimuthDeg(), s.StandardError/deg, s.Confidence, s.Distance)
		for _, f := range r.Findings {
			t.Logf("  %s: %s", f.Code, f.Message)
		}
		if e := math.Abs(s.Direction.AzimuthDeg() - c.angleDeg); e > 1.5 {
			t.Errorf("%s: %.2f°, want %.1f° within 1.5°", c.name, s.Direction.AzimuthDeg(), c.angleDeg)
		}
		if s.Distance == nil {
			t.Errorf("%s: no distance, want %.2f m", c.name, c.distance)
		} else if math.Abs(*s.Distance/c.distance-1) > 0.15 {
			t.Errorf("%s: %.2f m, want %.2f m within 15 %%", c.name, *s.Distance, c.distance)
		}
		dead := -1
		for _, f := range r.Findings {
			if f.Code == CodeDeadMic && len(f.Mics) == 1 {
				dead = f.Mics[0]
			}
		}
		if dead != c.dead {
			t.Errorf("%s: dead microphone %d, want %d (0-based, -1 for none)", c.name, dead, c.dead)
		}
	}
}

// ring7 is the open array of the measured responses, in our axes: x front,
// y left, so that azimuths are minus those in the file names (README of the
// recordings; the fitted places in the plane).
func ring7() []rig.Point {
	const h = 0.03536
	return []rig.Point{
		{X: 0.0465, Y: -0.0020}, {X: -0.0474, Y: 0.0019},
		{X: 0.0011, Y: -0.0347, Z: h}, {X: -0.0011, Y: 0.0326, Z: h},
		{X: -0.0020, Y: -0.0314, Z: -h}, {X: -0.0018, Y: 0.0317, Z: -h},
		{},
	}
}

func TestRealRoomResponsesWithSpeech(t *testing.T) {
	if testing.Short() {
		t.Skip("convolves speech with measured rooms")
	}
	takes := []string{"0890"}
	if long() {
		takes = []string{"0870", "0890", "0930"}
	}
	var errs []float64
	for _, c := range []struct {
		name string
		az   float64
	}{
		{"RLRVarAcLab_Absorptive_000_S060-200_R1_FRL10cm.wav", -60},
		{"RLRVarAcLab_Absorptive_100_S000-200_R1_FRL10cm.wav", 0},
		{"RLRVarAcLab_Absorptive_100_S090-200_R1_FRL10cm.wav", -90},
		{"RLRVarAcLab_Absorptive_100_S210-200_R1_FRL10cm.wav", 150},
	} {
		h, rate := recording(t, "ring7-room-responses/"+c.name)
		var own []float64 // errors of this azimuth
		for _, dry := range takes {
			x, low := recording(t, "speech/sense_and_sensibility_01_austen_64kb-"+dry+".wav")
			n := min(x.Frames(), 5*low)
			speech := make([]float64, n)
			for i, v := range x.Channel(0)[:n] {
				speech[i] = float64(v)
			}
			up := upsample(speech, rate/low)
			b := audio.NewBlock(7, len(up))
			for m := range 7 {
				response := make([]float64, h.Frames())
				for i, v := range h.Channel(m) {
					response[i] = float64(v)
				}
				to := b.Channel(m)
				for i, v := range convolve(up, response) {
					to[i] = float32(v)
				}
			}
			r := find(t, ring7(), rate, b, Options{})
			if len(r.Sources) == 0 {
				t.Errorf("%s with %s: nothing found: %+v", c.name, dry, r.Findings)
				errs, own = append(errs, 180), append(own, 180)
				continue
			}
			s := r.Sources[0]
			e := math.Abs(rig.WrapDeg(s.Direction.AzimuthDeg() - c.az))
			errs, own = append(errs, e), append(own, e)
			t.Logf("%s with %s: azimuth %.2f° (want %.0f°) ± %.2f°, elevation %.1f°, confidence %.2f", c.name[23:35], dry, s.Direction.AzimuthDeg(), c.az, s.StandardError/deg, s.Direction.ElevationDeg(), s.Confidence)
		}
		sort.Float64s(own)
		if median := own[len(own)/2]; median > 3 {
			t.Errorf("azimuth %.0f°: median error %.2f°, want at most 3°", c.az, median)
		}
	}
	sort.Float64s(errs)
	if median := errs[len(errs)/2]; median > 3 {
		t.Errorf("median error %.2f°, want at most 3°", median)
	} else {
		t.Logf("median error %.2f°, worst %.2f°", median, errs[len(errs)-1])
	}
}
