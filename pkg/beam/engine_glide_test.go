package beam

import (
	"math"
	"math/rand/v2"
	"runtime"
	"slices"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
	"alidade/pkg/delay"
)

// glideOf is a glide over mics microphones whose delays follow taus(t), t in
// seconds.
func glideOf(t *testing.T, rate, mics int, taus func(m int, t float64) float64) Glide {
	t.Helper()
	kernel, err := delay.NewFarrow(32, 6)
	if err != nil {
		t.Fatal(err)
	}
	a := make([]float64, mics)
	for m := range a {
		a[m] = 1 / float64(mics)
	}
	return Glide{Kernel: kernel, Amplitudes: a, Every: 64, LargestDelay: 0.01,
		Delays: func(frame int64, delays []float64) {
			for m := range delays {
				delays[m] = taus(m, float64(frame)/float64(rate))
			}
		}}
}

// Delays that stand still are the Farrow beam of filters.
func TestStandingGlideIsTheFarrowBeam(t *testing.T) {
	const rate = 48000
	rng := rand.New(rand.NewPCG(8, 2))
	taus := make([]float64, 5)
	amplitudes := make([]float64, 5)
	for m := range taus {
		taus[m], amplitudes[m] = 2e-3*(rng.Float64()-0.5), 0.2
	}
	g := glideOf(t, rate, 5, func(m int, _ float64) float64 { return taus[m] })
	f, err := DelayAndSum(g.Kernel, rate, taus, amplitudes)
	if err != nil {
		t.Fatal(err)
	}
	for _, frames := range []int{1, 40, 5000} {
		x := random(5, frames, 12)
		stage := func(up audio.Source) audio.Source {
			s, err := NewGlide(up, g)
			if err != nil {
				t.Fatal(err)
			}
			return s
		}
		audiotest.TestStage(t, rate, x, stage, plain(f, x), audiotest.Options{Tolerance: 2e-6, Rate: rate, Sizes: []int{64, 1024}, Lookahead: 4096})
	}
}

// A steady tone from a source that moves: microphone m hears at t + τ_m(t) what
// the reference point would hear at t. Along the true path the glide gives the
// steady tone back, to -80 dB in every 10 ms, from fast and slow swings, and
// without a click at any knot.
func TestGlideFollowsAMovingTone(t *testing.T) {
	const rate, n, mics = 48000, 2 * 48000, 6
	for _, hz := range []float64{440, 3000, 12000} {
		// Swings as of a source that walks through 90 degrees in some seconds.
		taus := func(m int, s float64) float64 {
			return 4e-4 * (float64(m) - 2.5) / 2.5 * math.Cos(2*math.Pi*0.25*s+0.3)
		}
		tone := func(s float64) float64 { return 0.5 * math.Sin(2*math.Pi*hz*s+0.7) }
		x := audio.NewBlock(mics, n)
		for m := range mics {
			for i := range n {
				heard := float64(i) / rate
				s := heard // s + τ(s) = heard: each round leaves |dτ/ds| < 1e-3 of the error
				for range 7 {
					s = heard - taus(m, s)
				}
				x.Channel(m)[i] = float32(tone(s))
			}
		}
		src, err := NewGlide(audio.FromBlock(rate, x), glideOf(t, rate, mics, taus))
		if err != nil {
			t.Fatal(err)
		}
		y, err := audio.ReadAll(src)
		if err != nil {
			t.Fatal(err)
		}
		worst, peak := math.Inf(-1), 0.0
		for from := 960; from+480 < n-960; from += 480 {
			e2 := 0.0
			for i := from; i < from+480; i++ {
				d := float64(y.Channel(0)[i]) - tone(float64(i)/rate)
				e2 += d * d
				peak = math.Max(peak, math.Abs(d))
			}
			worst = math.Max(worst, 10*math.Log10(e2/480/(0.5*0.5/2)))
		}
		t.Logf("%g Hz: worst 10 ms %.1f dB, worst frame %.1f dB of the peak", hz, worst, 20*math.Log10(peak/0.5))
		if peak > 0.5e-4 { // a click is one frame, and hides in the power of 480
			t.Errorf("%g Hz: a frame is off by %.1f dB of the peak, want at most -80", hz, 20*math.Log10(peak/0.5))
		}
		if worst > -80 {
			t.Errorf("%g Hz: residual %.1f dB in the worst 10 ms, want at most -80", hz, worst)
		}
	}
}

// swinging are delays that swing over some frames within a second, each
// microphone's at its own pace, so that they cross whole frames at times of
// their own.
func swinging(m int, s float64) float64 {
	return (4 + 3*float64(m)) / 48000 * math.Sin(2*math.Pi*(1+0.6*float64(m))*s+float64(m))
}

// The definition, in double precision, frame for frame: delays on straight
// lines between knots, the taps of the kernel for each. Edges, whole frames
// crossed, and takes that end between knots; the same bits in blocks of any
// size.
func TestMovingGlideIsTheDefinition(t *testing.T) {
	const rate, mics = 48000, 3
	for _, every := range []int{1, 16, 1024} {
		for _, frames := range []int{1, 700, 4000} {
			g := glideOf(t, rate, mics, swinging)
			g.Every = every
			g.Amplitudes = []float64{0.5, -0.3, 0}
			x, want := random(mics, frames, 14), audio.NewBlock(1, frames)
			var taps []float64
			for i := range frames {
				knot := i / every * every
				sum := 0.0
				for m, a := range g.Amplitudes {
					d0, d1 := swinging(m, float64(knot)/rate), swinging(m, float64(knot+every)/rate)
					d := rate * (d0 + (d1-d0)*float64(i-knot)/float64(every))
					var start int
					start, taps = g.Kernel.Taps(taps, -d)
					for n, v := range taps {
						if j := i - start - n; j >= 0 && j < frames {
							sum += a * v * float64(x.Channel(m)[j])
						}
					}
				}
				want.Channel(0)[i] = float32(sum)
			}
			stage := func(up audio.Source) audio.Source {
				s, err := NewGlide(up, g)
				if err != nil {
					t.Fatal(err)
				}
				return s
			}
			audiotest.TestStage(t, rate, x, stage, want, audiotest.Options{Tolerance: 2e-6, Rate: rate, Sizes: []int{every, 1024}, Lookahead: 4096})
		}
	}
}

// Delays is asked for each knot once, in turn, up to the next multiple of 1024
// from the last frame on; the bits do not depend on the number of cores.
func TestGlideAsksForEachKnotOnce(t *testing.T) {
	x := random(2, 2500, 3)
	var want []float32
	for _, procs := range []int{1, 2} {
		old := runtime.GOMAXPROCS(procs)
		g := glideOf(t, 48000, 2, swinging)
		inner, next := g.Delays, int64(0)
		g.Delays = func(frame int64, delays []float64) {
			if frame != next {
				t.Errorf("asked for frame %d, want %d", frame, next)
			}
			next += int64(g.Every)
			inner(frame, delays)
		}
		src, err := NewGlide(audio.FromBlock(48000, x), g)
		if err != nil {
			t.Fatal(err)
		}
		y, err := audio.ReadAll(src)
		runtime.GOMAXPROCS(old)
		if err != nil {
			t.Fatal(err)
		}
		if last := next - int64(g.Every); last != 3*1024 {
			t.Errorf("asked up to frame %d for 2500 frames, want 3072", last)
		}
		if want == nil {
			want = y.Channel(0)
		}
		if !slices.Equal(want, y.Channel(0)) {
			t.Errorf("%d cores: other bits", procs)
		}
	}
}

func TestGlideRefuses(t *testing.T) {
	src := func() audio.Source { return audio.FromBlock(48000, random(2, 3000, 1)) }
	good := glideOf(t, 48000, 2, func(int, float64) float64 { return 0 })
	for what, spoil := range map[string]func(*Glide){
		"no kernel":         func(g *Glide) { g.Kernel = nil },
		"other microphones": func(g *Glide) { g.Amplitudes = g.Amplitudes[:1] },
		"no knots":          func(g *Glide) { g.Every = 0 },
		"odd knots":         func(g *Glide) { g.Every = 100 },
		"no delays":         func(g *Glide) { g.Delays = nil },
		"largest delay":     func(g *Glide) { g.LargestDelay = math.Inf(1) },
		"amplitude":         func(g *Glide) { g.Amplitudes = []float64{1, math.NaN()} },
	} {
		g := good
		spoil(&g)
		if _, err := NewGlide(src(), g); err == nil {
			t.Errorf("%s: accepted", what)
		}
	}
	for what, tau := range map[string]float64{"not a number": math.NaN(), "too far": 0.02} {
		g := good
		g.Delays = func(frame int64, delays []float64) {
			clear(delays)
			if frame >= 1024 {
				delays[1] = tau
			}
		}
		s, err := NewGlide(src(), g)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := audio.ReadAll(s); err == nil {
			t.Errorf("%s on the way: no error", what)
		}
	}
}
