package pipeline

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/bearing"
	"alidade/pkg/rig"
	"alidade/pkg/wav"
)

// along runs a take as Run does, along a path that is given in place of one
// that is found, and along the one found where it is nil. It returns the path
// too.
func (s scene) along(t *testing.T, o Options, path *bearing.Track) (*Result, *bearing.Track) {
	t.Helper()
	o.Toward = TowardFollow
	spec := Spec{Take: []string{s.take}, RigPath: s.rig, Options: o, Version: "test"}
	set, err := o.resolve()
	if err != nil {
		t.Fatal(err)
	}
	l, err := loadRig(s.rig, o)
	if err != nil {
		t.Fatal(err)
	}
	if path != nil {
		mean := meanDirection(*path)
		set.path, set.direction = path, &mean
	}
	r := &run{ctx: context.Background(), spec: spec, set: set, rig: l, render: jsonRenderers}
	result, err := r.steer()
	r.abandon()
	if err != nil {
		t.Fatal(err)
	}
	return result, r.set.path
}

// pathOf is a path with a knot every tenth of a second.
func pathOf(seconds float64, at func(t float64) rig.Direction) *bearing.Track {
	path := &bearing.Track{}
	for k := range int(10*seconds) + 1 {
		x := float64(k) / 10
		path.Knots = append(path.Knots, bearing.Knot{Time: x, Direction: at(x), Heard: true})
	}
	path.Heard = len(path.Knots)
	return path
}

// A source that walks through 90° in 10 s, in noise from all sides: the gain
// along the path that was found is within 1 dB of that along the true one, and
// well above that of a beam that stands. Gains from the noise and the target
// alone, through the same gliding beam.
func TestGainAlongTheFoundPathIsThatAlongTheTrueOne(t *testing.T) {
	most := 1
	if os.Getenv("ALIDADE_LONG") == "1" {
		most = 2
	}
	for _, c := range []struct{ name, rig, sound, noise string }{
		{"ring, noise", ringOfEight, "kind: noise", "{level_dbfs: -30}"},
		{"line, talker", lineOfEight, "kind: talker", "{level_dbfs: -36, spectrum: pink}"},
	}[:most] {
		text := strings.Replace(walker, "kind: noise\n    spectrum: speech", c.sound, 1)
		s := sceneFrom(t, c.rig, strings.Replace(text, "{level_dbfs: -32, spectrum: speech}", c.noise, 1))
		o := Options{IsolatedNoise: s.noise, IsolatedTarget: s.target, Overwrite: true, Reports: "none"}
		found, path := s.along(t, o, nil)
		truth := pathOf(10, func(x float64) rig.Direction {
			d, err := s.render.Heard("walker", x)
			if err != nil {
				t.Fatal(err)
			}
			return d
		})
		exact, _ := s.along(t, o, truth)
		o.Toward = "90"
		stands := s.must(t, o)
		sum, n := 0.0, 0
		for _, k := range truth.Knots {
			e := rig.AngleBetween(path.At(k.Time), k.Direction) * 180 / math.Pi
			sum, n = sum+e*e, n+1
		}
		rms := math.Sqrt(sum / float64(n))
		a, b, fixed := *found.Overall.SNRGainDB, *exact.Overall.SNRGainDB, *stands.Overall.SNRGainDB
		t.Logf("%s: path %.2f° RMS off; SNR gain %.2f dB along it, %.2f dB along the true one, %.2f dB standing at 90°", c.name, rms, a, b, fixed)
		if rms > 3 {
			t.Errorf("%s: the path is %.2f° RMS off, want at most 3°", c.name, rms)
		}
		if math.Abs(a-b) > 1 {
			t.Errorf("%s: %.2f dB along the path found, %.2f dB along the true one: want within 1 dB", c.name, a, b)
		}
		if b < fixed+0.5 {
			t.Errorf("%s: %.2f dB along the true path, %.2f dB standing: nothing was to be gained", c.name, b, fixed)
		}
		if tc := *exact.Overall.TargetChangeDB; math.Abs(tc) > 0.1 {
			t.Errorf("%s: the target changes by %.2f dB along its true path, want 0", c.name, tc)
		}
		if found.Steer.Kind != "followed" || found.Steer.Method != MethodFarrow || len(found.Direction.Windows) < 40 || filepath.Base(found.Output.Path) != "take_follow.wav" {
			t.Errorf("%s: kind %s, method %s, %d windows, %s", c.name, found.Steer.Kind, found.Steer.Method, len(found.Direction.Windows), found.Output.Path)
		}
		for _, w := range found.Direction.Windows {
			if w.AzimuthDeg == nil {
				continue
			}
			want, err := s.render.Heard("walker", (w.StartS+w.EndS)/2)
			if err != nil {
				t.Fatal(err)
			}
			if e := math.Abs(rig.WrapDeg(*w.AzimuthDeg - want.AzimuthDeg())); e > 9 {
				t.Errorf("%s: window at %.1f s: %.1f°, the walker is at %.1f°", c.name, w.StartS, *w.AzimuthDeg, want.AzimuthDeg())
			}
		}
		if c.rig == ringOfEight {
			o.Toward = TowardFollow
			if f := foundIn(found.Findings, "prediction-of-mean-direction"); f == nil {
				t.Error("nothing says what was predicted")
			}
			short := filepath.Join(s.dir, "short.wav")
			b, _ := readWAV(t, s.noise)
			writeWAV(t, short, 16000, wav.Float32, b.Slice(0, 16000))
			o.IsolatedNoise = short
			if _, err := s.run(o); err == nil || !strings.Contains(err.Error(), "frame by frame") {
				t.Errorf("noise that does not lie on the take: %v", err)
			}
		}
	}
}

// movingTones is the scene of scripts/reference/follow.py.
type movingTones struct {
	Rate        int          `json:"rate"`
	Frames      int          `json:"frames"`
	Speed       float64      `json:"speed"`
	Microphones [][3]float64 `json:"microphones"`
	Reference   [3]float64   `json:"reference"`
	Turn        [2]float64   `json:"turn"`
	Tones       [][3]float64 `json:"tones"`
	Knots       [][4]float64 `json:"knots"`
}

// Following a steady tone from a source that goes round the rig: what the
// command writes against the ideal time-warped tone, computed in numpy from the
// definition: at most -80 dB of it are left in every window of 10 ms. Once a
// single tone along its true path, whose ideal is the steady tone itself; once
// a hundred and twenty tones together along the path that the search found, whose ideal is the
// tones as that path lets them through. The first and last window, where the
// take begins and ends within the filters, do not count.
func TestFollowedTonesAreTheIdealTimeWarpInNumpy(t *testing.T) {
	py := python(t)
	const seconds = 3
	l, err := loadRig(writeText(t, filepath.Join(t.TempDir(), "ring.yaml"), ringOfEight), Options{})
	if err != nil {
		t.Fatal(err)
	}
	base := movingTones{Rate: 16000, Frames: seconds * 16000, Speed: l.speed, Turn: [2]float64{-0.3, 0.16}} // 9° a second
	ref := l.ReferencePoint()
	base.Reference = [3]float64{ref.X, ref.Y, ref.Z}
	for _, p := range l.Positions() {
		base.Microphones = append(base.Microphones, [3]float64{p.X, p.Y, p.Z})
	}
	rng := rand.New(rand.NewPCG(60, 10))
	var many [][3]float64
	for k := range 120 {
		many = append(many, [3]float64{300 + 40*(float64(k)+rng.Float64()), 0.01, 2 * math.Pi * rng.Float64()})
	}
	for _, c := range []struct {
		name  string
		tones [][3]float64
		path  *bearing.Track
	}{
		{"one tone, the true path", [][3]float64{{3000, 0.2, 0.4}}, pathOf(seconds, func(x float64) rig.Direction {
			return rig.Direction{Azimuth: base.Turn[0] + base.Turn[1]*x}
		})},
		{"a hundred and twenty tones, the path found", many, nil},
	} {
		if c.path == nil && os.Getenv("ALIDADE_LONG") != "1" {
			t.Logf("%s: set ALIDADE_LONG=1", c.name)
			continue
		}
		m := base
		m.Tones = c.tones
		s := scene{dir: t.TempDir()}
		s.take, s.rig = filepath.Join(s.dir, "take.wav"), writeText(t, filepath.Join(s.dir, "ring.yaml"), ringOfEight)
		file := func(name string) string { return filepath.Join(s.dir, name) }
		script := func(args ...string) string {
			data, err := json.Marshal(m)
			if err == nil {
				err = os.WriteFile(file("scene.json"), data, 0o666)
			}
			if err != nil {
				t.Fatal(err)
			}
			out, err := exec.Command(py, append([]string{"../../scripts/reference/follow.py", args[0], file("scene.json")}, args[1:]...)...).CombinedOutput()
			if err != nil {
				t.Fatalf("%v\n%s", err, out)
			}
			return string(out)
		}
		script("make", file("take.f64"))
		x := readDoubles(t, file("take.f64"))
		take := audio.NewBlock(len(m.Microphones), m.Frames)
		for ch := range take.Channels() {
			for i := range m.Frames {
				take.Channel(ch)[i] = float32(x[ch*m.Frames+i])
			}
		}
		writeWAV(t, s.take, m.Rate, wav.Float32, take)
		r, path := s.along(t, Options{NoMeasure: true, Reports: "none"}, c.path)
		for _, k := range path.Knots {
			u := k.Direction.Unit()
			m.Knots = append(m.Knots, [4]float64{k.Time, u.X, u.Y, u.Z})
		}
		y, _ := readWAV(t, r.Output.Path)
		writeDoubles(t, file("track.f64"), y.Channel(0))
		var worst, lost float64
		var windows int
		if _, err := fmt.Sscan(script("check", file("track.f64"), "1"), &worst, &windows, &lost); err != nil {
			t.Fatal(err)
		}
		off := 0.0
		for _, k := range path.Knots {
			off = math.Max(off, rig.AngleBetween(k.Direction, rig.Direction{Azimuth: base.Turn[0] + base.Turn[1]*k.Time})*180/math.Pi)
		}
		t.Logf("%s: residual at most %.1f dB in %d windows; path at most %.2f° off the truth, ideal %.3f dB re the tones", c.name, worst, windows, off, lost)
		if !(worst <= -80) || windows != 100*seconds-2 {
			t.Errorf("%s: residual %.1f dB in %d windows, want at most -80", c.name, worst, windows)
		}
		if off > 3 {
			t.Errorf("%s: the path is up to %.1f° off the truth", c.name, off)
		}
	}
}

func readDoubles(t *testing.T, path string) []float64 {
	t.Helper()
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	x := make([]float64, len(data)/8)
	for i := range x {
		x[i] = math.Float64frombits(le.Uint64(data[8*i:]))
	}
	return x
}

func writeDoubles(t *testing.T, path string, x []float32) {
	t.Helper()
	var data []byte
	for _, v := range x {
		data = le.AppendUint64(data, math.Float64bits(float64(v)))
	}
	if err := os.WriteFile(path, data, 0o666); err != nil {
		t.Fatal(err)
	}
}
