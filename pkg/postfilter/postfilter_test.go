package postfilter

import (
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
	"alidade/pkg/rig"
)

// line returns mics microphones along x.
func line(mics int, spacing float64) []rig.Point {
	var list []rig.Point
	for m := range mics {
		list = append(list, rig.Point{X: spacing * (float64(m) - float64(mics-1)/2)})
	}
	return list
}

// estimate returns φ_s of the form for a covariance R[m*M+n].
func (f form) estimate(r []complex128) float64 {
	mics, sum := len(f.own), 0.0
	for n := range mics {
		sum -= f.own[n] * real(r[n*mics+n])
		for m := range n {
			sum += f.cross[n*(n-1)/2+m] * real(r[m*mics+n])
		}
	}
	return sum
}

// field returns the aligned covariance of a target of power 1 in noise of power
// 1/snr, diffuse or white.
func field(o Options, arrivals []float64, hz, snr float64, diffuse bool) []complex128 {
	mics := len(o.Mics)
	r := make([]complex128, mics*mics)
	for m := range mics {
		for n := range mics {
			noise := 0.0
			if m == n {
				noise = 1
			}
			turn := 0.0
			if diffuse {
				noise = acoustics.DiffuseCoherence(o.Mics[m].Distance(o.Mics[n]), hz, o.Speed)
				turn = 2 * math.Pi * hz * (arrivals[m] - arrivals[n])
			}
			r[m*mics+n] = 1 + complex(noise*math.Cos(turn)/snr, noise*math.Sin(turn)/snr)
		}
	}
	return r
}

// Check J9: in white noise the gain of Zelinski's filter is SNR/(1+SNR) at a
// microphone, 0.0909091, 0.5 and 0.9090909 for -10, 0 and 10 dB (Zelinski 1988;
// Simmer, Bitzer and Marro 2001), whatever the number of microphones. A Wiener
// filter behind the beam would have M·SNR/(1+M·SNR): the noise is taken for M
// times what the beam leaves.
func TestZelinskiInWhiteNoise(t *testing.T) {
	for snrDB, want := range map[float64]float64{-10: 0.0909091, 0: 0.5, 10: 0.9090909} {
		for _, mics := range []int{2, 4, 7} {
			o := Options{Kind: White, Mics: line(mics, 0.05), Look: acoustics.Plane{From: rig.Degrees(40, 0)}, Speed: 343}
			arrivals := acoustics.Delays(nil, o.Look, o.Mics, o.Reference, o.Speed)
			snr := math.Pow(10, snrDB/10)
			got := newForm(o, arrivals, 1000).estimate(field(o, arrivals, 1000, snr, false)) / (1 + 1/snr)
			if math.Abs(got-want) > 1e-6 {
				t.Errorf("%d microphones, %g dB: gain %.7f, want %.7f", mics, snrDB, got, want)
			}
		}
	}
}

// Check J10: in diffuse noise Zelinski's estimate is too large by 1 +
// mean sinc(kd)/SNR, 1.890316 for four microphones 50 mm apart at 500 Hz and
// 0 dB, 1 at c/(2d) (the motivation of McCowan and Bourlard 2003); theirs is
// right at both, and at other steered directions as well.
func TestEstimatesInDiffuseNoise(t *testing.T) {
	for _, c := range []struct{ hz, want float64 }{{500, 1.890316}, {3430, 1}} {
		o := Options{Kind: White, Mics: line(4, 0.05), Look: acoustics.Plane{From: rig.Degrees(90, 0)}, Speed: 343}
		arrivals := acoustics.Delays(nil, o.Look, o.Mics, o.Reference, o.Speed)
		r := field(o, arrivals, c.hz, 1, true)
		if got := newForm(o, arrivals, c.hz).estimate(r); math.Abs(got-c.want) > 1e-5 {
			t.Errorf("%g Hz: Zelinski's estimate is %.6f of the target, want %.6f", c.hz, got, c.want)
		}
	}
	for _, azimuth := range []float64{90, 60, 0} {
		for _, hz := range []float64{500, 1000, 3430, 6000} {
			for _, snr := range []float64{0.1, 1, 10} {
				o := Options{Kind: Diffuse, Mics: line(4, 0.05), Look: acoustics.Plane{From: rig.Degrees(azimuth, 0)}, Speed: 343}
				arrivals := acoustics.Delays(nil, o.Look, o.Mics, o.Reference, o.Speed)
				if got := newForm(o, arrivals, hz).estimate(field(o, arrivals, hz, snr, true)); math.Abs(got-1) > 1e-9 {
					t.Errorf("toward %g°, %g Hz, SNR %g: estimate is %.9f of the target, want 1", azimuth, hz, snr, got)
				}
			}
		}
	}
}

// mix returns channels of a common signal with pauses and noise of their own,
// partly common, and as last channel their mean: the beam of a broadside
// target.
func mix(rate, mics, frames int, seed uint64) audio.Block {
	r := rand.New(rand.NewPCG(seed, 4))
	b := audio.NewBlock(mics+1, frames)
	for i := range frames {
		common := 0.1 * r.NormFloat64()
		if i/(rate/4)%2 == 1 {
			common += math.Sin(0.3*float64(i)) + 0.5*r.NormFloat64()
		}
		sum := 0.0
		for m := range mics {
			x := common + 0.3*r.NormFloat64()
			b.Channel(m)[i] = float32(x)
			sum += x / float64(mics)
		}
		b.Channel(mics)[i] = float32(sum)
	}
	return b
}

// The stage against the published formulas pair by pair, in double precision
// and in another language.
func TestPostfilterAgainstNumpy(t *testing.T) {
	py := ""
	for _, name := range []string{"/usr/bin/python3", "python3"} {
		if exec.Command(name, "-c", "import numpy").Run() == nil {
			py = name
			break
		}
	}
	if py == "" {
		t.Skip("no python3 with numpy here")
	}
	dir := t.TempDir()
	const rate = 16000
	for _, kind := range []Kind{White, Diffuse} {
		o := Options{
			Kind: kind, FloorDB: -18, Speed: 340, Reference: rig.Point{},
			Mics: []rig.Point{{X: -0.1, Y: 0.02}, {X: 0.03, Y: -0.04, Z: 0.02}, {X: 0.12, Y: 0.01}, {X: 0.4, Y: 0.3, Z: 0.1}},
			Look: acoustics.Plane{From: rig.Degrees(35, 10)},
		}
		in := mix(rate, 4, 20000, 5)
		src, err := New(audio.FromBlock(rate, in), o)
		if err != nil {
			t.Fatal(err)
		}
		got, err := audio.ReadAll(src)
		if err != nil {
			t.Fatal(err)
		}
		signals, out := filepath.Join(dir, "in"), filepath.Join(dir, "out")
		f, err := os.Create(signals)
		if err != nil {
			t.Fatal(err)
		}
		for ch := range in.Channels() {
			if err := binary.Write(f, binary.LittleEndian, in.Channel(ch)); err != nil {
				t.Fatal(err)
			}
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
		var places, delays []string
		for _, p := range o.Mics {
			places = append(places, fmt.Sprintf("%g,%g,%g", p.X, p.Y, p.Z))
		}
		for _, d := range acoustics.Delays(nil, o.Look, o.Mics, o.Reference, o.Speed) {
			delays = append(delays, fmt.Sprint(d))
		}
		cmd := exec.Command(py, "../../scripts/reference/postfilter.py", signals, out, fmt.Sprint(rate), string(kind), "-18", fmt.Sprint(AverageS), strings.Join(places, ";"), strings.Join(delays, ","), "340")
		if text, err := cmd.CombinedOutput(); err != nil {
			t.Fatalf("%v: %s", err, text)
		}
		data, err := os.ReadFile(out)
		if err != nil {
			t.Fatal(err)
		}
		want := make([]float64, len(data)/8)
		if _, err := binary.Decode(data, binary.LittleEndian, want); err != nil {
			t.Fatal(err)
		}
		if len(want) != got.Frames() {
			t.Fatalf("%s: %d frames, numpy has %d", kind, got.Frames(), len(want))
		}
		var off, all, changed float64
		for i, x := range got.Channel(0) {
			off += math.Pow(float64(x)-want[i], 2)
			all += want[i] * want[i]
			changed += math.Pow(float64(in.Channel(4)[i])-want[i], 2)
		}
		t.Logf("%s: %.1f dB from numpy, %.1f dB from the beam", kind, 10*math.Log10(off/all), 10*math.Log10(changed/all))
		// Gains from sums that cancel, of float32 spectra.
		if db := 10 * math.Log10(off/all); !(db < -90) {
			t.Errorf("%s: %.1f dB from numpy, want below -90", kind, db)
		}
		if changed < 1e-3*all {
			t.Errorf("%s: the filter did nothing", kind)
		}
	}
}

// A floor of 0 dB is no filter: what goes in comes out, frame for frame, and
// channel for channel. The contract of a stage holds.
func TestPostfilterOfGainOne(t *testing.T) {
	const rate, mics = 8000, 3
	in := mix(rate, mics, 3001, 6)
	o := Options{Kind: White, FloorDB: 0, Mics: line(mics, 0.05), Look: acoustics.Plane{From: rig.Degrees(20, 0)}, Speed: 343}
	want := audio.NewBlock(1, in.Frames())
	want.CopyFrom(in.Part(mics, mics+1))
	stage := func(up audio.Source) audio.Source {
		s, err := New(up, o)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	audiotest.TestStage(t, rate, in, stage, want, audiotest.Options{Tolerance: 2e-6, Sizes: []int{64, 256}, Lookahead: 64 + 256})
	// Gains from the microphones, applied to two beams at once and to each
	// alone, are the same.
	o.FloorDB, o.Kind = -20, Diffuse
	var two audio.Block
	for i, list := range [][]int{{0, 1, 2, 3, 1}, {0, 1, 2, 3}, {0, 1, 2, 1}} {
		src, err := audio.Map(audio.FromBlock(rate, in), list, nil)
		if err != nil {
			t.Fatal(err)
		}
		y, err := audio.ReadAll(stage(src))
		if err != nil {
			t.Fatal(err)
		}
		if i == 0 {
			two = y
			continue
		}
		for j, x := range y.Channel(0) {
			if x != two.Channel(i - 1)[j] {
				t.Fatalf("beam %d alone: frame %d is %g, beside the other %g", i, j, x, two.Channel(i - 1)[j])
			}
		}
	}
}

func TestPostfilterThatCannotBe(t *testing.T) {
	good := Options{Kind: White, FloorDB: -10, Mics: line(3, 0.05), Look: acoustics.Plane{}, Speed: 343}
	src := audio.FromBlock(8000, audio.NewBlock(4, 100))
	for name, change := range map[string]func(o *Options){
		"kind":           func(o *Options) { o.Kind = "best" },
		"floor above 0":  func(o *Options) { o.FloorDB = 1 },
		"floor of NaN":   func(o *Options) { o.FloorDB = math.NaN() },
		"one microphone": func(o *Options) { o.Mics = o.Mics[:1] },
		"no beam":        func(o *Options) { o.Mics = line(4, 0.05) },
		"no direction":   func(o *Options) { o.Look = nil },
		"speed":          func(o *Options) { o.Speed = 0 },
		"lateness":       func(o *Options) { o.Late = []float64{0} },
		"far too late":   func(o *Options) { o.Late = []float64{0, 2, 0} },
	} {
		o := good
		change(&o)
		if _, err := New(src, o); err == nil || !strings.HasPrefix(err.Error(), "postfilter: ") {
			t.Errorf("%s: %v", name, err)
		}
	}
	if _, err := New(src, good); err != nil {
		t.Error(err)
	}
}
