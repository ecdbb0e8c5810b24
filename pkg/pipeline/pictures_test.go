package pipeline

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"github.com/mewkiz/flac"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
)

// drawn returns the levels of the middle columns of each row of a sound.
func drawn(t *testing.T, rate int, x []float32, private bool) (*sonagram, []float64) {
	t.Helper()
	s, err := newSonagram(1, rate, int64(len(x)), private)
	if err != nil || s == nil {
		t.Fatalf("%v, %v", s, err)
	}
	b := audio.NewBlock(1, len(x))
	copy(b.Channel(0), x)
	if _, err := audio.Copy(audio.FromBlock(rate, b), 1000, s); err != nil {
		t.Fatal(err)
	}
	if err := s.finish(); err != nil {
		t.Fatal(err)
	}
	levels := s.levels(0)
	for c, n := range s.count {
		if n == 0 {
			t.Errorf("column %d of %d is empty", c, s.columns)
		}
	}
	rows := make([]float64, len(s.hz))
	for row := range rows {
		sum, n := 0.0, 0
		for c := s.columns / 4; c < 3*s.columns/4; c++ {
			sum += audio.FromPowerDB(levels[row*s.columns+c])
			n++
		}
		rows[row] = audio.PowerDB(sum / float64(n))
	}
	return s, rows
}

// A full-scale sine reads 0 dBFS (AES17-2015, 3.12.3, number from memory), at
// its place in frequency and time, whatever the rate and the length.
func TestSpectrogramShowsASineAtItsPlaceAndLevel(t *testing.T) {
	for _, c := range []struct {
		rate    int
		seconds float64
		hz      float64
		private bool
	}{{8000, 3, 1000, false}, {48000, 2, 1000, false}, {48000, 60, 4000, false}, {96000, 3, 8000, false}, {48000, 20, 1000, true}} {
		x := make([]float32, int(c.seconds*float64(c.rate)))
		for i := range x {
			x[i] = float32(math.Sin(2 * math.Pi * c.hz * float64(i) / float64(c.rate)))
		}
		s, rows := drawn(t, c.rate, x, c.private)
		best, total := 0, 0.0
		for row, v := range rows {
			if v > rows[best] {
				best = row
			}
			total += audio.FromPowerDB(v)
		}
		if math.Abs(math.Log2(s.hz[best]/c.hz)) > 0.02 || rows[best] < -0.5 || rows[best] > 0.05 {
			t.Errorf("%d Hz, %g s: highest at %.1f Hz, %.2f dBFS", c.rate, c.seconds, s.hz[best], rows[best])
		}
		if db := audio.PowerDB(total); math.Abs(db) > 0.05 {
			t.Errorf("%d Hz, %g s: all rows together read %.3f dBFS", c.rate, c.seconds, db)
		}
		// The columns cover the take, and are not more than are worth drawing.
		if s.columns > mostColumns+1 || math.Abs(float64(s.columns)*s.stepS()-c.seconds) > s.stepS() {
			t.Errorf("%d Hz, %g s: %d columns of %g s", c.rate, c.seconds, s.columns, s.stepS())
		}
		if c.private && (s.stepS() < privateColumnS || s.hz[1]/s.hz[0] < 1.25) {
			t.Errorf("private: columns of %g s, rows by %g", s.stepS(), s.hz[1]/s.hz[0])
		}
	}
}

// Noise of 0 dBFS a hertz has the power of its bandwidth in each row: 10·log10
// of it, whatever the row's place between bins.
func TestSpectrogramShowsNoiseByItsBandwidth(t *testing.T) {
	const rate = 48000
	rng := rand.New(rand.NewPCG(3, 4))
	x := make([]float32, 40*rate)
	for i := range x {
		x[i] = float32(0.1 * rng.NormFloat64())
	}
	s, rows := drawn(t, rate, x, false)
	for row, hz := range s.hz {
		width := hz * (math.Exp2(0.5/rowsPerOctave) - math.Exp2(-0.5/rowsPerOctave))
		want := audio.PowerDB(2 * 0.01 * width / (rate / 2))
		// Standard deviation of the level over the middle 20 s, from the independent samples.
		tolerance := 4*4.34/math.Sqrt(20*math.Max(width, float64(rate)/float64(2048)))*1.5 + 0.05
		if math.Abs(rows[row]-want) > tolerance {
			t.Errorf("%.0f Hz: %.2f dBFS, want %.2f ± %.2f", hz, rows[row], want, tolerance)
		}
	}
}

// A click stands in the column of its time, before and after alike.
func TestSpectrogramShowsAClickAtItsTime(t *testing.T) {
	const rate = 48000
	for _, at := range []int{24000, 100000, 191999} {
		x := make([]float32, 4*rate)
		x[at] = 1
		s, _ := drawn(t, rate, x, false)
		power := s.power()
		best := 0
		for c, p := range power {
			if p > power[best] {
				best = c
			}
		}
		if got := float64(best) * s.stepS(); math.Abs(got-float64(at)/rate) > s.stepS()+1e-9 {
			t.Errorf("a click at %.3f s stands at %.3f s", float64(at)/rate, got)
		}
	}
}

// The lobes of the picture lie where the array factor of eight microphones
// 40 mm apart has them: grating lobes at cos az = cos az0 - λ/d (Van Trees 2002,
// section 2.4), the main lobe at the steered direction and its mirror.
func TestLobesOfThePictureAreThoseOfTheLine(t *testing.T) {
	r := noiseScene(t, 48000, 24000).must(t, Options{Toward: "60", NoMeasure: true})
	p := r.Pictures.Response
	want := r.Rig.SpeedOfSoundMS / 0.04 / 1.5
	if g := p.GratingFreeBelowHz; g == nil || math.Abs(*g-want) > 0.01 {
		t.Errorf("grating lobes from %v Hz, want %.2f", g, want)
	}
	mains, gratings := 0, 0
	for _, l := range p.Lobes {
		switch l.Kind {
		case "main":
			mains++
			if math.Abs(math.Abs(l.AzimuthDeg)-60) > 0.2 || math.Abs(l.LevelDB) > 0.01 {
				t.Errorf("main lobe at %.2f°, %.2f dB", l.AzimuthDeg, l.LevelDB)
			}
		case "grating":
			gratings++
			near := math.Inf(1)
			for m := -3.0; m <= 3; m++ {
				if c := 0.5 - m*r.Rig.SpeedOfSoundMS/(l.Hz*0.04); m != 0 && math.Abs(c) <= 1 {
					near = math.Min(near, math.Abs(math.Acos(c)*180/math.Pi-math.Abs(l.AzimuthDeg)))
				}
			}
			if near > 0.05 {
				t.Errorf("a grating lobe at %g Hz, %.2f°: %.2f° off", l.Hz, l.AzimuthDeg, near)
			}
		}
	}
	if mains < 6 || gratings < 4 {
		t.Errorf("%d main and %d grating lobes", mains, gratings)
	}
	// The level in each cell, against the closed form of the uniform line.
	for row, hz := range p.Hz {
		for column, az := range p.AnglesDeg {
			psi := 2 * math.Pi * hz / r.Rig.SpeedOfSoundMS * 0.04 * (math.Cos(az*math.Pi/180) - 0.5)
			level := 20 * math.Log10(math.Abs(math.Sin(4*psi)/(8*math.Sin(psi/2))))
			if math.Abs(math.Sin(psi/2)) < 1e-9 {
				level = 0
			}
			l := p.Levels
			got := l.LowDB + (l.HighDB-l.LowDB)*float64(l.Bytes[row*l.Columns+column])/255
			if level > l.LowDB && math.Abs(got-level) > 0.1 {
				t.Fatalf("%g Hz, %g°: %.2f dB, want %.2f", hz, az, got, level)
			}
		}
	}
}

// The excerpt is the track and the corrected reference of the same frames, no
// louder than -6 dBFS, with a fade of 50 ms.
func TestPreviewIsWhatTheTrackHolds(t *testing.T) {
	s := noiseScene(t, 8000, 30*8000)
	for name, o := range map[string]Options{
		"automatic": {Noise: "10..14"}, "excerpt": {Excerpt: "3..7", Handles: 0.5, NoMeasure: true}, "gain": {Excerpt: "1..9", GainDB: -12, NoMeasure: true}, "long excerpt": {Excerpt: "1..29.5", NoMeasure: true},
		"given": {Noise: "10..14", PreviewAt: "20.5..24"}, "given in an excerpt": {Excerpt: "2..20", PreviewAt: "18..27", NoMeasure: true},
	} {
		o.Toward, o.Preview, o.Out = "60", true, filepath.Join(s.dir, name+"/")+"/"
		r := s.must(t, o)
		p := r.Preview
		if p == nil {
			t.Fatalf("%s: no preview", name)
		}
		length := p.EndS - p.StartS
		if length > previewMostS || p.StartS < float64(r.Output.FirstFrame)/8000 || p.EndS > float64(r.Output.FirstFrame+r.Output.Frames)/8000 {
			t.Errorf("%s: %g to %g s", name, p.StartS, p.EndS)
		}
		if name == "automatic" && (p.StartS > 11 || p.EndS < 14+6 || length != previewS) {
			t.Errorf("chosen: %g to %g s with noise from 10 to 14 s", p.StartS, p.EndS)
		}
		if want := map[string][2]float64{"given": {20.5, 24}, "given in an excerpt": {18, 20}}[name]; want[1] > 0 && (p.StartS != want[0] || p.EndS != want[1]) {
			t.Errorf("%s: %g to %g s, want %v", name, p.StartS, p.EndS, want)
		}
		after, before := decodeClip(t, p.Output.Audio), decodeClip(t, p.Reference.Audio)
		if len(after) != len(before) || float64(len(after)) != math.Round(length*float64(p.SampleRateHz)) {
			t.Fatalf("%s: %d and %d samples for %g s", name, len(before), len(after), length)
		}
		peak := 0.0
		for i := range after {
			peak = math.Max(peak, math.Max(math.Abs(after[i]), math.Abs(before[i])))
		}
		if peak > math.Pow(10, -6.0/20) || peak < 0.45 {
			t.Errorf("%s: peak %.3f", name, peak)
		}
		b, _ := readWAV(t, r.Output.Path)
		mix, _ := readWAV(t, s.take)
		track, mic := b.Channel(0), -1
		gain, scale := math.Pow(10, (p.GainDB-o.GainDB)/20), math.Pow(10, p.GainDB/20)
		for i, m := range r.Rig.Mics {
			if m.Name == r.Pictures.Reference.Of {
				mic = i
			}
		}
		first := int(math.Round(p.StartS*8000)) - int(r.Output.FirstFrame)
		at := int(math.Round(p.StartS * 8000))
		worst := 0.0
		for i := 400; i < len(after)-400; i++ { // beyond the fades
			worst = math.Max(worst, math.Abs(after[i]-gain*float64(track[first+i])))
			worst = math.Max(worst, math.Abs(before[i]-scale*float64(mix.Channel(mic)[at+i])))
		}
		if worst > 1.0/(1<<15) {
			t.Errorf("%s: the excerpts differ from track and take by %.2g", name, worst)
		}
		for i := range 40 { // 5 ms of 50: at most 3 % of the peak
			if math.Abs(after[i]) > 0.03*0.5 {
				t.Errorf("%s: sample %d is %.3f: no fade", name, i, after[i])
				break
			}
		}
	}
}

func TestPreviewThatCannotBeIsRefusedAhead(t *testing.T) {
	s := noiseScene(t, 8000, 40*8000)
	for at, want := range map[string]string{
		"0..30.5": "30.5 s, want at most 30 s", "41..42": "the track holds 0.000 to 40.000 s", "1..2,3..4": "one stretch A..B, not 2", "4..3": "--preview-at", "10:00:00..10:00:05": "no time reference",
	} {
		out := filepath.Join(s.dir, "refused") + "/"
		_, err := s.run(Options{Toward: "60", Preview: true, PreviewAt: at, NoMeasure: true, Out: out})
		var usage *UsageError
		if !errors.As(err, &usage) || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: %v, want %q", at, err, want)
		}
		if list, _ := os.ReadDir(out); len(list) > 0 {
			t.Errorf("%s: left %v", at, list)
		}
	}
	if err := (Options{Toward: "60", PreviewAt: "1..2"}).Validate(); err == nil || !strings.Contains(err.Error(), "give that too") {
		t.Errorf("without --preview: %v", err)
	}
}

// A rate above 48 kHz is decimated; what lies above half the new rate is gone
// and not folded down, what lies below keeps its level.
func TestPreviewOfAHighRateIsDecimated(t *testing.T) {
	for rate, want := range map[int]int{8000: 1, 44100: 1, 48000: 1, 88200: 2, 96000: 2, 176400: 4, 192000: 4, 352800: 8, 384000: 8, 64000: 2, 50000: 2} {
		if got := decimation(rate); got != want {
			t.Errorf("%d Hz: divided by %d, want %d", rate, got, want)
		}
	}
	const rate, k = 192000, 4
	for _, c := range []struct{ hz, low, high float64 }{{1000, -0.01, 0.01}, {20000, -0.1, 0.1}, {28000, -200, -75}, {47000, -200, -75}, {95000, -200, -75}} {
		x := make([]float32, rate/2)
		for i := range x {
			x[i] = float32(math.Sin(2 * math.Pi * c.hz * float64(i) / rate))
		}
		y := decimate(x, k)
		sum, n := 0.0, 0
		for i := len(y) / 4; i < 3*len(y)/4; i++ {
			sum += y[i] * y[i]
			n++
		}
		if db := audio.PowerDB(2*sum/float64(n) + 1e-30); db < c.low || db > c.high {
			t.Errorf("%g Hz comes out at %.2f dB", c.hz, db)
		}
	}
}

// Silence has no excerpt and says so; a take too short for a picture has none.
func TestWhatCannotBeShownIsLeftOut(t *testing.T) {
	s := noiseScene(t, 8000, 8000)
	s.mix.Clear()
	writeWAV(t, s.take, 8000, wav.PCM24, s.mix)
	r := s.must(t, Options{Toward: "60", Preview: true})
	if r.Preview != nil || !hasFinding(r, "no-preview") || r.Pictures == nil || r.Pictures.Output != nil || r.Pictures.Response == nil {
		t.Errorf("silence: preview %v, pictures %+v, findings %v", r.Preview, r.Pictures, r.Findings)
	}
	s = noiseScene(t, 8000, 30)
	r = s.must(t, Options{Toward: "60", Preview: true, NoMeasure: true})
	if r.Preview != nil || !hasFinding(r, "no-preview") || r.Pictures == nil || r.Pictures.Output != nil {
		t.Errorf("30 frames: preview %v, pictures %+v", r.Preview, r.Pictures)
	}
	r = s.must(t, Options{Toward: "60", NoMeasure: true, Reports: "json", Overwrite: true})
	if r.Pictures != nil {
		t.Error("pictures without a page")
	}
}

// noiseScene is a take of a line of eight, 40 mm apart, in noise that differs
// from channel to channel.
func noiseScene(t *testing.T, rate, frames int) scene {
	t.Helper()
	s := scene{dir: t.TempDir(), mix: audio.NewBlock(8, frames)}
	s.rig = writeText(t, filepath.Join(s.dir, "eight.yaml"), "rig: eight\nline: {count: 8, spacing_mm: 40}\n")
	rng := rand.New(rand.NewPCG(11, 12))
	for ch := range 8 {
		x := s.mix.Channel(ch)
		for i := range x {
			x[i] = float32(0.02 * rng.NormFloat64())
		}
	}
	s.take = filepath.Join(s.dir, "take.wav")
	writeWAV(t, s.take, rate, wav.PCM24, s.mix)
	return s
}

func decodeClip(t *testing.T, data []byte) []float64 {
	t.Helper()
	s, err := flac.New(bytes.NewReader(data))
	if err != nil {
		t.Fatal(err)
	}
	var out []float64
	for {
		f, err := s.ParseNext()
		if isEnd(err) {
			return out
		}
		if err != nil {
			t.Fatal(err)
		}
		for _, v := range f.Subframes[0].Samples {
			out = append(out, float64(v)/(1<<15))
		}
	}
}

// An independent decoder (libFLAC within sox, or ffmpeg) reads the excerpts as
// they were meant.
func TestForeignDecoderReadsTheExcerpts(t *testing.T) {
	var tool string
	var args []string
	if _, err := exec.LookPath("ffmpeg"); err == nil {
		tool, args = "ffmpeg", []string{"-v", "error", "-i", "in.flac", "-f", "s16le", "out.raw"}
	} else if _, err := exec.LookPath("sox"); err == nil {
		tool, args = "sox", []string{"in.flac", "-t", "raw", "-e", "signed", "-b", "16", "-L", "out.raw"}
	} else {
		t.Skip("neither ffmpeg nor sox here")
	}
	rng := rand.New(rand.NewPCG(5, 6))
	for _, n := range []int{15, 4097, 20000} {
		samples := make([]int32, n)
		for i := range samples {
			switch { // noise with gaps, silence, full scale, a tone
			case i < 6000:
				samples[i] = int32(rng.NormFloat64() * 3000)
				if i%10 > 6 {
					samples[i] = 0
				}
			case i < 12000:
			case i < 16000:
				samples[i] = int32(rng.IntN(1<<16) - 1<<15)
			default:
				samples[i] = int32(16000 * math.Sin(float64(i)/20))
			}
		}
		data, err := flacFile(samples, 44100)
		if err != nil {
			t.Fatal(err)
		}
		dir := t.TempDir()
		if err := os.WriteFile(filepath.Join(dir, "in.flac"), data, 0o600); err != nil {
			t.Fatal(err)
		}
		cmd := exec.Command(tool, args...)
		cmd.Dir = dir
		if text, err := cmd.CombinedOutput(); err != nil || len(text) > 0 {
			t.Errorf("%d samples: %s: %v: %s", n, tool, err, text)
			continue
		}
		raw, err := os.ReadFile(filepath.Join(dir, "out.raw"))
		if err != nil || len(raw) != 2*n {
			t.Errorf("%d samples: %d bytes, %v", n, len(raw), err)
			continue
		}
		for i, want := range samples {
			if got := int32(int16(uint16(raw[2*i]) | uint16(raw[2*i+1])<<8)); got != want {
				t.Errorf("%d samples: sample %d is %d, want %d", n, i, got, want)
				break
			}
		}
	}
}

// The pictures of a long take weigh no more than those of a short one.
func TestPicturesStaySmall(t *testing.T) {
	for _, seconds := range []int{5, 60, 3600} {
		s, err := newSonagram(1, 48000, int64(seconds)*48000, false)
		if err != nil {
			t.Fatal(err)
		}
		text, err := json.Marshal(s.picture(s.levels(0), "", 0))
		if err != nil || len(text) > 200000 {
			t.Errorf("%d s: %d bytes, %v", seconds, len(text), err)
		}
	}
}
