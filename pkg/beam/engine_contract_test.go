package beam

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"runtime"
	"slices"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
	"alidade/pkg/delay"
	"alidade/pkg/kernel"
	"alidade/pkg/rig"
)

// engines are the two ways to run filters.
var engines = map[string]func(audio.Source, *Filters) (audio.Source, error){
	"convolver":    NewConvolver,
	"overlap-save": NewOverlapSave,
}

// random returns a block of noise that differs on every channel.
func random(channels, frames int, seed uint64) audio.Block {
	r := rand.New(rand.NewPCG(seed, 7))
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		for i := range frames {
			b.Channel(ch)[i] = float32(0.2 * r.NormFloat64())
		}
	}
	return b
}

// randomFilters returns filters of differing starts and lengths.
func randomFilters(mics, taps, spread int, seed uint64) *Filters {
	r := rand.New(rand.NewPCG(seed, 5))
	f := &Filters{Rate: 48000}
	for range mics {
		h := make([]float64, 1+r.IntN(taps))
		for t := range h {
			h[t] = r.NormFloat64() / float64(taps)
		}
		f.H = append(f.H, h)
		f.Start = append(f.Start, r.IntN(2*spread+1)-spread)
	}
	return f
}

// plain is the definition of Filters, in double precision.
func plain(f *Filters, x audio.Block) audio.Block {
	y := audio.NewBlock(1, x.Frames())
	for i := range x.Frames() {
		sum := 0.0
		for m, h := range f.H {
			for t, v := range h {
				if j := i - f.Start[m] - t; j >= 0 && j < x.Frames() {
					sum += v * float64(x.Channel(m)[j])
				}
			}
		}
		y.Channel(0)[i] = float32(sum)
	}
	return y
}

// Takes shorter than the filter, one microphone and many, filters that look
// back, ahead and both: against the definition, and the contract of a stage.
func TestEnginesAgainstTheDefinition(t *testing.T) {
	for name, engine := range engines {
		for _, c := range []struct{ mics, taps, spread, frames int }{
			{1, 1, 0, 1}, {1, 64, 0, 3}, {2, 8, 3, 50}, {3, 64, 40, 700}, {5, 128, 200, 2500}, {8, 64, 0, 5000}, {17, 33, 300, 1200},
		} {
			t.Run(fmt.Sprintf("%s, %d microphones, %d taps, %d frames", name, c.mics, c.taps, c.frames), func(t *testing.T) {
				f := randomFilters(c.mics, c.taps, c.spread, uint64(c.mics))
				x := random(c.mics, c.frames, 21)
				stage := func(up audio.Source) audio.Source {
					s, err := engine(up, f)
					if err != nil {
						t.Fatal(err)
					}
					return s
				}
				from, _ := f.Span()
				audiotest.TestStage(t, f.Rate, x, stage, plain(f, x), audiotest.Options{
					Tolerance: 2e-6, Rate: f.Rate, Sizes: []int{256, 1024},
					// A stage computes whole hops; a failure spoils what is not computed.
					Lookahead: max(0, -from) + 1<<14,
				})
			})
		}
	}
}

// The first and the last frame of a take count: an impulse there comes out as
// the taps that lie inside the take.
func TestImpulsesAtTheEdges(t *testing.T) {
	const n = 3000
	f := randomFilters(2, 64, 30, 9)
	for name, engine := range engines {
		for _, at := range []int{0, 1, n - 2, n - 1} {
			x := audio.NewBlock(2, n)
			x.Channel(1)[at] = 1
			src, err := engine(audio.FromBlock(f.Rate, x), f)
			if err != nil {
				t.Fatal(err)
			}
			y, err := audio.ReadAll(src)
			if err != nil || y.Frames() != n {
				t.Fatalf("%s: %d frames, %v", name, y.Frames(), err)
			}
			want := plain(f, x)
			for i := range n {
				if d := math.Abs(float64(y.Channel(0)[i] - want.Channel(0)[i])); d > 1e-6 {
					t.Fatalf("%s: impulse at %d: frame %d is %g, want %g", name, at, i, y.Channel(0)[i], want.Channel(0)[i])
				}
			}
		}
	}
}

func TestEnginesFromOneTo256Microphones(t *testing.T) {
	for _, mics := range []int{1, 2, 3, 64, 255, 256} {
		f := randomFilters(mics, 16, 4, 3)
		x := random(mics, 400, 2)
		want := plain(f, x)
		for name, engine := range engines {
			src, err := engine(audio.FromBlock(f.Rate, x), f)
			if err != nil {
				t.Fatal(err)
			}
			y, err := audio.ReadAll(src)
			if err != nil {
				t.Fatal(err)
			}
			for i, v := range y.Channel(0) {
				if math.Abs(float64(v-want.Channel(0)[i])) > 1e-5 {
					t.Fatalf("%s, %d microphones: frame %d is %g, want %g", name, mics, i, v, want.Channel(0)[i])
				}
			}
		}
	}
}

// Several beams from one analysis are the beams one by one.
func TestManyBeamsAreTheBeamsOneByOne(t *testing.T) {
	x := random(4, 4000, 6)
	var sets []*Filters
	for k := range 5 {
		sets = append(sets, randomFilters(4, 64, 20, uint64(100+k)))
	}
	src, err := NewOverlapSaveMany(audio.FromBlock(48000, x), sets)
	if err != nil {
		t.Fatal(err)
	}
	y, err := audio.ReadAll(src)
	if err != nil || y.Channels() != len(sets) {
		t.Fatalf("%d channels, %v", y.Channels(), err)
	}
	for k, f := range sets {
		want := plain(f, x)
		for i, v := range y.Channel(k) {
			if math.Abs(float64(v-want.Channel(0)[i])) > 2e-6 {
				t.Fatalf("beam %d: frame %d is %g, want %g", k, i, v, want.Channel(0)[i])
			}
		}
	}
}

func TestSameBitsForAnyCoreCount(t *testing.T) {
	f, x := randomFilters(6, 100, 60, 4), random(6, 20000, 5)
	for name, engine := range engines {
		var want []float32
		for _, procs := range []int{1, 2, 4} {
			old := runtime.GOMAXPROCS(procs)
			src, err := engine(audio.FromBlock(f.Rate, x), f)
			if err != nil {
				t.Fatal(err)
			}
			y, err := audio.ReadAll(src)
			runtime.GOMAXPROCS(old)
			if err != nil {
				t.Fatal(err)
			}
			if want == nil {
				want = y.Channel(0)
			}
			if !slices.Equal(want, y.Channel(0)) {
				t.Errorf("%s: other bits with %d cores", name, procs)
			}
		}
	}
}

// The bounds of the methods through the whole float32 chain: tones from 100 Hz
// to 0.8 of Nyquist from far sources on a rig 1 m across, at rates from 8 to
// 384 kHz; the error is complex, re the signal: sinc and spectral -100 dB,
// farrow -85 dB.
func TestMethodsThroughTheFloat32Chain(t *testing.T) {
	rng := rand.New(rand.NewPCG(17, 4))
	at := make([]rig.Point, 7)
	for m := range at {
		at[m] = rig.Point{X: rng.Float64() - 0.5, Y: 0.6 * (rng.Float64() - 0.5), Z: 0.3 * (rng.Float64() - 0.5)}
	}
	at[0], at[1] = rig.Point{X: -0.5}, rig.Point{X: 0.5}
	amplitudes := []float64{0.1, 0.2, 0.15, 0.15, 0.2, 0.1, 0.1}
	sinc64, err := delay.NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	sinc128, err := delay.NewSinc(128)
	if err != nil {
		t.Fatal(err)
	}
	farrow, err := delay.NewFarrow(32, 6)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name   string
		kernel delay.Kernel
		engine func(audio.Source, *Filters) (audio.Source, error)
		bound  float64
	}{
		{"sinc", sinc64, NewConvolver, -100}, {"spectral", sinc128, NewOverlapSave, -100}, {"farrow", farrow, NewConvolver, -85},
	} {
		worst := math.Inf(-1)
		for _, rate := range []int{8000, 44100, 48000, 192000, 384000} {
			for trial := range 9 {
				look := acoustics.Plane{From: rig.Degrees(360*rng.Float64()-180, 180*rng.Float64()-90)}
				taus := acoustics.Delays(nil, look, at, rig.Point{}, 343.2)
				f, err := DelayAndSum(c.kernel, rate, taus, amplitudes)
				if err != nil {
					t.Fatal(err)
				}
				hz := 100 * math.Pow(0.4*float64(rate)/100, float64(trial)/8)
				const n = 6000
				x := audio.NewBlock(len(at), n)
				for m := range at {
					for i := range n {
						x.Channel(m)[i] = float32(0.5 * math.Sin(2*math.Pi*hz*(float64(i)/float64(rate)-taus[m])+1))
					}
				}
				src, err := c.engine(audio.FromBlock(rate, x), f)
				if err != nil {
					t.Fatal(err)
				}
				y, err := audio.ReadAll(src)
				if err != nil {
					t.Fatal(err)
				}
				from, to := f.Span()
				var e2, s2 float64
				for i := max(0, to) + 1; i < n+min(0, from)-1; i++ {
					want := 0.5 * math.Sin(2*math.Pi*hz*float64(i)/float64(rate)+1)
					e2 += (float64(y.Channel(0)[i]) - want) * (float64(y.Channel(0)[i]) - want)
					s2 += want * want
				}
				if s2 == 0 {
					t.Fatalf("%d Hz: the edges leave nothing", rate)
				}
				worst = math.Max(worst, 10*math.Log10(e2/s2))
			}
		}
		t.Logf("%s: worst error %.1f dB", c.name, worst)
		if worst > c.bound {
			t.Errorf("%s: error %.1f dB, want at most %g", c.name, worst, c.bound)
		}
	}
}

// A22: weights with the phases of one frequency squint at others (cos θ =
// cos θ0·f0/f; Van Trees; Mailloux); true delays do not: the filters' response
// to a wave from the steered direction is 1 at every frequency, and the peak
// stands there.
func TestNoSquintWithTrueDelays(t *testing.T) {
	const c, f0, theta0 = 343.0, 2000.0, 60.0
	var at []rig.Point
	for m := range 10 {
		at = append(at, rig.Point{X: 0.04 * (float64(m) - 4.5)})
	}
	uniform := make([]float64, len(at))
	for m := range uniform {
		uniform[m] = 0.1
	}
	kernel, err := delay.NewSinc(128)
	if err != nil {
		t.Fatal(err)
	}
	f, err := DelayAndSum(kernel, 48000, acoustics.Delays(nil, acoustics.Plane{From: rig.Degrees(theta0, 0)}, at, rig.Point{}, c), uniform)
	if err != nil {
		t.Fatal(err)
	}
	// peak is where a beam with the given transfer is loudest, degrees: a search
	// over cos θ, refined by a parabola, so that 0 and 180 degrees count in full.
	peak := func(g []complex128, hz float64) float64 {
		level := func(u float64) float64 {
			d := rig.Direction{Azimuth: math.Acos(math.Max(-1, math.Min(1, u)))}
			var sum complex128
			for m, v := range acoustics.Steering(nil, acoustics.Delays(nil, acoustics.Plane{From: d}, at, rig.Point{}, c), nil, 2*math.Pi*hz) {
				sum += g[m] * v
			}
			return cmplx.Abs(sum)
		}
		best := -1.0
		for i := range 4001 {
			if u := -1 + float64(i)/2000; level(u) > level(best) {
				best = u
			}
		}
		lo, hi := math.Max(-1, best-5e-4), math.Min(1, best+5e-4)
		for range 60 {
			a, b := lo+(hi-lo)/3, hi-(hi-lo)/3
			if level(a) < level(b) {
				lo = a
			} else {
				hi = b
			}
		}
		return math.Acos(math.Max(-1, math.Min(1, (lo+hi)/2))) * 180 / math.Pi
	}
	phases := f.Response(nil, f0)
	want := []float64{0, 48.18969, 60, 70.52878, 75.52249}
	for i, hz := range []float64{1000, 1500, 2000, 3000, 4000} {
		if got := peak(phases, hz); math.Abs(got-want[i]) > 0.005 && !(want[i] == 0 && got < 0.02) { // cos is flat at 0°
			t.Errorf("phases of %g Hz at %g Hz: peak at %.4f°, want %.4f", f0, hz, got, want[i])
		}
		if got := peak(f.Response(nil, hz), hz); math.Abs(got-theta0) > 0.005 {
			t.Errorf("delays at %g Hz: peak at %.4f°, want %g", hz, got, theta0)
		}
	}
}

// L1: delay-and-sum of two microphones 0.1 m apart, steered broadside, of a
// tone from direction ph (elementary; Brandstein & Ward 2001, chapter 2),
// measured through both engines.
func TestTwoMicrophoneToneAttenuation(t *testing.T) {
	const rate, c = 48000, 343.0
	at := []rig.Point{{X: -0.05}, {X: 0.05}}
	kernel, err := delay.NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	f, err := DelayAndSum(kernel, rate, []float64{0, 0}, []float64{0.5, 0.5})
	if err != nil {
		t.Fatal(err)
	}
	for _, v := range []struct{ hz, ph, want float64 }{
		{500, 0, -0.9445664}, {1000, 0, -4.306739}, {1000, 45, -1.965349}, {1697.85, 0, -36.07796}, {2000, 30, -36.12834},
	} {
		const n = 12000
		x := audio.NewBlock(2, n)
		taus := acoustics.Delays(nil, acoustics.Plane{From: rig.Degrees(v.ph, 0)}, at, rig.Point{}, c)
		for m := range at {
			for i := range n {
				x.Channel(m)[i] = float32(math.Sin(2 * math.Pi * v.hz * (float64(i)/rate - taus[m])))
			}
		}
		for name, engine := range engines {
			src, err := engine(audio.FromBlock(rate, x), f)
			if err != nil {
				t.Fatal(err)
			}
			y, err := audio.ReadAll(src)
			if err != nil {
				t.Fatal(err)
			}
			re, im := fitTone(2*math.Pi*v.hz/rate, func(k int) float64 { return float64(y.Channel(0)[k]) }, 1000, n-1000)
			got := 20 * math.Log10(math.Hypot(re, im))
			if math.Abs(got-v.want) > 0.001 {
				t.Errorf("%s, %g Hz from %g°: %.4f dB, want %.4f", name, v.hz, v.ph, got, v.want)
			}
		}
	}
}

func TestEnginesRefuseWhatDoesNotFit(t *testing.T) {
	good := randomFilters(2, 8, 0, 1)
	src := func() audio.Source { return audio.FromBlock(48000, random(2, 100, 1)) }
	bad := map[string]*Filters{
		"other microphones": randomFilters(3, 8, 0, 1),
		"other rate":        {Rate: 44100, Start: good.Start, H: good.H},
		"no taps":           {Rate: 48000, Start: []int{0, 0}, H: [][]float64{{1}, {}}},
		"not a number":      {Rate: 48000, Start: []int{0, 0}, H: [][]float64{{1}, {math.NaN()}}},
		"starts missing":    {Rate: 48000, Start: []int{0}, H: good.H},
		"none":              {Rate: 48000},
	}
	for what, f := range bad {
		for name, engine := range engines {
			if _, err := engine(src(), f); err == nil {
				t.Errorf("%s: %s: accepted", name, what)
			}
		}
	}
	if _, err := NewOverlapSaveMany(src(), nil); err == nil {
		t.Error("no sets of filters: accepted")
	}
	kernel, err := delay.NewSinc(16)
	if err != nil {
		t.Fatal(err)
	}
	for _, taus := range [][]float64{{0, math.NaN()}, {0, math.Inf(-1)}, {0, 10}} {
		if _, err := DelayAndSum(kernel, 48000, taus, []float64{1, 1}); err == nil {
			t.Errorf("delays %v: accepted", taus)
		}
	}
	broken := errors.New("broken on purpose")
	for name, engine := range engines {
		s, err := engine(audiotest.Failing(src(), 50, broken), good)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := audio.ReadAll(s); !errors.Is(err, broken) {
			t.Errorf("%s: got %v, want the failure of the source", name, err)
		}
	}
}

// Whatever set of kernels the processor has, the plain one holds everything
// too.
func TestEnginesWithPlainKernels(t *testing.T) {
	if os.Getenv("ALIDADE_LONG") != "1" {
		t.Skip("the contract once more; TestSetsOfKernelsAgree holds the sets together: set ALIDADE_LONG=1")
	}
	if kernel.Name() == kernel.Plain {
		t.Skip("the plain set is the only one here: the tests above ran with it")
	}
	if err := kernel.Use(kernel.Plain); err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := kernel.Use(""); err != nil {
			t.Error(err)
		}
	}()
	t.Run("definition", TestEnginesAgainstTheDefinition)
	t.Run("edges", TestImpulsesAtTheEdges)
	t.Run("microphones", TestEnginesFromOneTo256Microphones)
	t.Run("cores", TestSameBitsForAnyCoreCount)
	t.Run("methods", TestMethodsThroughTheFloat32Chain)
	t.Run("glide", TestStandingGlideIsTheFarrowBeam)
	t.Run("tone", TestGlideFollowsAMovingTone)
}

// The sets differ by rounding only, below -120 dB of the beam.
func TestSetsOfKernelsAgree(t *testing.T) {
	if kernel.Name() == kernel.Plain {
		t.Skip("the plain set is the only one here")
	}
	f, x := randomFilters(8, 64, 30, 4), random(8, 30000, 5)
	for name, engine := range engines {
		var beams [2]audio.Block
		for k, set := range []string{kernel.Plain, ""} {
			if err := kernel.Use(set); err != nil {
				t.Fatal(err)
			}
			src, err := engine(audio.FromBlock(f.Rate, x), f)
			if err != nil {
				t.Fatal(err)
			}
			if beams[k], err = audio.ReadAll(src); err != nil {
				t.Fatal(err)
			}
		}
		var e2, s2 float64
		for i, v := range beams[0].Channel(0) {
			d := float64(v) - float64(beams[1].Channel(0)[i])
			e2, s2 = e2+d*d, s2+float64(v)*float64(v)
		}
		if db := 10 * math.Log10(e2/s2); db > -120 {
			t.Errorf("%s: the sets differ by %.1f dB", name, db)
		}
	}
}
