package spectral

import (
	"errors"
	"math"
	"math/cmplx"
	"testing"

	gwin "github.com/mjibson/go-dsp/window"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

// noiseBlock is seeded white noise, different on every channel.
func noiseBlock(channels, frames int, seed uint64) audio.Block {
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		for i, v := range noise64(frames, seed+uint64(ch)) {
			b.Channel(ch)[i] = float32(v)
		}
	}
	return b
}

func TestWindowsAgreeWithAnotherLibrary(t *testing.T) {
	for _, n := range []int{2, 7, 64, 255} {
		for _, c := range []struct {
			name string
			ours Shape
			want []float64
		}{
			{"Hann", Hann, gwin.Hann(n)},
			{"Hamming", Hamming, gwin.Hamming(n)},
			{"Blackman", Blackman, gwin.Blackman(n)},
			{"Rectangle", Rectangle, gwin.Rectangular(n)},
		} {
			for i, v := range Symmetric(n, c.ours) {
				if math.Abs(v-c.want[i]) > 1e-14 {
					t.Errorf("%s of %d: sample %d is %v, want %v", c.name, n, i, v, c.want[i])
				}
			}
			// A periodic window is a symmetric one of one more sample, without
			// its last.
			long := Symmetric(n+1, c.ours)
			for i, v := range Periodic(n, c.ours) {
				if math.Abs(v-long[i]) > 1e-14 {
					t.Errorf("%s of %d: periodic sample %d is %v, want %v", c.name, n, i, v, long[i])
				}
			}
		}
	}
}

func TestHannAddsUpToOneAtHalfItsSize(t *testing.T) {
	const n = 48
	w, r := Periodic(n, Hann), Periodic(n, SqrtHann)
	for i := range n / 2 {
		if s := w[i] + w[i+n/2]; math.Abs(s-1) > 1e-15 {
			t.Errorf("Hann adds up to %v at sample %d, want 1", s, i)
		}
		if s := r[i]*r[i] + r[i+n/2]*r[i+n/2]; math.Abs(s-1) > 1e-15 {
			t.Errorf("squared root of Hann adds up to %v at sample %d, want 1", s, i)
		}
	}
}

// Abramowitz & Stegun 1964, table 9.8, from memory.
func TestBesselI0IsThatOfTheHandbook(t *testing.T) {
	for x, want := range map[float64]float64{0: 1, 1: 1.2660658777520084, 2: 2.2795853023360673, 10: 2815.716628466254} {
		if got := BesselI0(x); math.Abs(got/want-1) > 1e-14 {
			t.Errorf("BesselI0(%g) = %.16g, want %.16g", x, got, want)
		}
	}
}

// Harris 1978, table 1: highest side lobe, dB: Hann -32 (-31.5), Hamming -43,
// Blackman -58, minimum 4-term Blackman-Harris -92. Kaiser, beta = 2.5π: -57.
func TestSideLobesAreThoseOfTheLiterature(t *testing.T) {
	const n, padded = 256, 1 << 15
	for _, c := range []struct {
		name      string
		shape     Shape
		null      float64 // half width of the main lobe, bins
		want, tol float64
	}{
		{"Hann", Hann, 2, -31.5, 0.3},
		{"Hamming", Hamming, 2, -43, 0.7},
		{"Blackman", Blackman, 3, -58, 0.5},
		{"BlackmanHarris", BlackmanHarris, 4, -92, 0.5},
		{"Kaiser(2.5π)", Kaiser(2.5 * math.Pi), math.Hypot(1, 2.5), -57, 0.7},
	} {
		f, err := NewFFT[float64](padded)
		if err != nil {
			t.Fatal(err)
		}
		x := make([]float64, padded)
		copy(x, Periodic(n, c.shape))
		re, im := make([]float64, f.Bins()), make([]float64, f.Bins())
		f.Forward(re, im, x)
		worst := 0.0
		for k := int(math.Ceil(c.null * padded / n)); k < f.Bins(); k++ {
			worst = max(worst, math.Hypot(re[k], im[k])/re[0])
		}
		if got := 20 * math.Log10(worst); math.Abs(got-c.want) > c.tol {
			t.Errorf("%s: highest side lobe %.2f dB, want %.1f", c.name, got, c.want)
		}
	}
}

func TestSTFTIsTheTransformOfEachWindowedFrame(t *testing.T) {
	for _, c := range []struct{ size, hop, frames int }{
		{64, 16, 500}, {64, 48, 500}, {32, 32, 320}, {16, 40, 300}, {64, 64, 10}, {64, 1, 130},
	} {
		in := noiseBlock(3, c.frames, 7)
		window := Periodic(c.size, Hann)
		var count int64
		s, err := NewSTFT(3, c.size, c.hop, window, func(frame int64, spec *Spectra) error {
			if frame != count {
				t.Fatalf("frame %d came after %d others", frame, count)
			}
			count++
			if spec.Channels() != 3 || spec.Bins() != c.size/2+1 {
				t.Fatalf("%d channels of %d bins", spec.Channels(), spec.Bins())
			}
			for ch := range 3 {
				x := make([]float64, c.size)
				for i := range x {
					if at := int(frame)*c.hop + i; at < c.frames {
						x[i] = float64(in.Channel(ch)[at]) * window[i]
					}
				}
				want := directDFT(x, make([]float64, c.size))
				for k := range spec.Bins() {
					got := complex(float64(spec.Re[ch][k]), float64(spec.Im[ch][k]))
					// Rounding of c.size values of up to 1.
					if cmplx.Abs(got-want[k]) > 2e-6*math.Sqrt(float64(c.size)) {
						t.Fatalf("size %d, hop %d: frame %d, channel %d, bin %d is %v, want %v", c.size, c.hop, frame, ch+1, k, got, want[k])
					}
				}
			}
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
		if _, err := audio.Copy(audio.FromBlock(8000, in), 37, s); err != nil {
			t.Fatal(err)
		}
		whole := int64(0)
		if c.frames >= c.size {
			whole = int64((c.frames-c.size)/c.hop + 1)
		}
		if count != whole || s.Frames() != whole {
			t.Errorf("size %d, hop %d: %d frames before Flush, want %d", c.size, c.hop, count, whole)
		}
		if err := s.Flush(); err != nil {
			t.Fatal(err)
		}
		// Every sample that any frame can reach is in one now.
		last := int64(0)
		for j := int64(0); j*int64(c.hop) < int64(c.frames); j++ {
			covered := whole > 0 && (whole-1)*int64(c.hop)+int64(c.size) >= int64(c.frames)
			if j < whole || !covered {
				last = j + 1
			}
			if j >= whole && j*int64(c.hop)+int64(c.size) >= int64(c.frames) {
				break
			}
		}
		if count != last {
			t.Errorf("size %d, hop %d, %d samples: %d frames after Flush, want %d", c.size, c.hop, c.frames, count, last)
		}
	}
}

func TestSTFTKeepsTheContractOfASink(t *testing.T) {
	open := func() (audio.Sink, func() []float64) {
		sums := make([]float64, 2*33)
		s, err := NewSTFT(2, 64, 24, Periodic(64, Hann), func(frame int64, spec *Spectra) error {
			for ch := range 2 {
				for k, v := range spec.Re[ch] {
					sums[33*ch+k] += float64(v)*float64(v) + float64(spec.Im[ch][k])*float64(frame)
				}
			}
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
		return s, func() []float64 {
			if err := s.Flush(); err != nil {
				t.Fatal(err)
			}
			return sums
		}
	}
	audiotest.TestSink(t, open, noiseBlock(2, 1500, 3), false, audiotest.Options{Sizes: []int{24, 64}})
}

func TestSTFTStopsAtTheFirstErrorOfItsFunction(t *testing.T) {
	stop := errors.New("enough")
	calls := 0
	s, err := NewSTFT(1, 16, 16, nil, func(frame int64, _ *Spectra) error {
		calls++
		if frame == 2 {
			return stop
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	b := noiseBlock(1, 200, 1)
	if err := s.Write(b); !errors.Is(err, stop) {
		t.Errorf("Write = %v, want the error of the function", err)
	}
	if err := s.Write(b); !errors.Is(err, stop) || calls != 3 {
		t.Errorf("Write after it = %v with %d calls, want the same error and 3 calls", err, calls)
	}
	if err := s.Flush(); !errors.Is(err, stop) || calls != 3 {
		t.Errorf("Flush after it = %v with %d calls, want the same error and 3 calls", err, calls)
	}
}

func TestSTFTRefusesWhatCannotBe(t *testing.T) {
	none := func(int64, *Spectra) error { return nil }
	for _, c := range []struct {
		channels, size, hop int
		window              []float64
	}{{0, 64, 32, nil}, {1, 60, 32, nil}, {1, 64, 0, nil}, {1, 64, 32, make([]float64, 63)}} {
		if _, err := NewSTFT(c.channels, c.size, c.hop, c.window, none); err == nil {
			t.Errorf("%+v was taken", c)
		}
	}
}

// direct is y[i] = Σ_t taps[t]·x[i+centre-t], in float64.
func direct(in audio.Block, taps []float64, centre int) audio.Block {
	out := audio.NewBlock(in.Channels(), in.Frames())
	for ch := range in.Channels() {
		x, y := in.Channel(ch), out.Channel(ch)
		for i := range y {
			sum := 0.0
			for t, h := range taps {
				if j := i + centre - t; j >= 0 && j < len(x) {
					sum += h * float64(x[j])
				}
			}
			y[i] = float32(sum)
		}
	}
	return out
}

func TestFilterIsTheConvolutionAndKeepsTheContract(t *testing.T) {
	for _, c := range []struct{ channels, frames, taps, centre int }{
		{3, 3000, 101, 50}, {2, 2000, 64, 0}, {1, 1000, 33, 32}, {1, 40, 201, 100}, {2, 900, 1, 0},
	} {
		in := noiseBlock(c.channels, c.frames, 21)
		taps := noise64(c.taps, 5)
		energy := 0.0
		for _, h := range taps {
			energy += h * h
		}
		shape, err := NewOverlap(c.taps)
		if err != nil {
			t.Fatal(err)
		}
		stage := func(up audio.Source) audio.Source {
			f, err := NewFilter(up, taps, c.centre)
			if err != nil {
				t.Fatal(err)
			}
			return f
		}
		// -125 dB of the output's RMS, times its crest factor.
		tolerance := 6e-7 * 5 * math.Sqrt(energy) * 0.3
		audiotest.TestStage(t, 48000, in, stage, direct(in, taps, c.centre), audiotest.Options{
			Tolerance: tolerance, Sizes: []int{shape.Hop}, Lookahead: c.centre, Rate: 48000,
		})
	}
}

func TestFilterRefusesWhatCannotBe(t *testing.T) {
	src := audio.FromBlock(48000, noiseBlock(1, 100, 1))
	for _, c := range []struct {
		taps   []float64
		centre int
	}{{nil, 0}, {[]float64{1, 2}, 2}, {[]float64{1}, -1}, {[]float64{1, math.NaN()}, 0}, {[]float64{math.Inf(1)}, 0}, {make([]float64, largestSpan+1), 0}} {
		if _, err := NewFilter(src, c.taps, c.centre); err == nil {
			t.Errorf("%d taps with centre %d were taken", len(c.taps), c.centre)
		}
	}
	if _, err := NewFilter(audio.FromBlock(48000, audio.NewBlock(0, 10)), []float64{1}, 0); err == nil {
		t.Error("a source without channels was taken")
	}
}

func TestOverlapLeavesRoomForTheTaps(t *testing.T) {
	for _, span := range []int{1, 2, 16, 17, 64, 176, 240, 1000, 4096, 70000, largestSpan} {
		o, err := NewOverlap(span)
		if err != nil {
			t.Fatal(err)
		}
		if o.Hop < 16 || o.Hop%16 != 0 || o.Size-o.Hop < span-1 || o.Size&(o.Size-1) != 0 || o.Size > MaxSize {
			t.Errorf("NewOverlap(%d) = %+v", span, o)
		}
	}
	for _, span := range []int{-1, 0, largestSpan + 1} {
		if _, err := NewOverlap(span); err == nil {
			t.Errorf("NewOverlap(%d) gave a shape", span)
		}
	}
}

// butterworth is the closed form of the high-pass response at f: with the
// bilinear transform, |H|² = 1/(1 + (tan(πc/r)/tan(πf/r))^8).
func butterworth(f, cutoff, rate float64) float64 {
	q := math.Tan(math.Pi*cutoff/rate) / math.Tan(math.Pi*f/rate)
	return 1 / math.Sqrt(1+math.Pow(q, 8))
}

func TestHighPassIsButterworth(t *testing.T) {
	const n = 1 << 16
	for _, c := range []struct {
		rate   int
		cutoff float64
	}{{48000, 80}, {8000, 100}, {384000, 500}, {48000, 20000}} {
		x := audio.NewBlock(1, n)
		x.Channel(0)[0] = 1
		src, err := HighPass(audio.FromBlock(c.rate, x), c.cutoff)
		if err != nil {
			t.Fatal(err)
		}
		y, err := audio.ReadAll(src)
		if err != nil {
			t.Fatal(err)
		}
		f, _ := NewFFT[float64](n)
		h := make([]float64, n)
		for i, v := range y.Channel(0) {
			h[i] = float64(v)
		}
		re, im := make([]float64, f.Bins()), make([]float64, f.Bins())
		f.Forward(re, im, h)
		for k := 1; k < n/2; k += 7 {
			hz := float64(k) * float64(c.rate) / n
			got, want := math.Hypot(re[k], im[k]), butterworth(hz, c.cutoff, float64(c.rate))
			if math.Abs(got-want) > 2e-6 {
				t.Fatalf("rate %d, cutoff %g Hz: |H(%g Hz)| = %.8f, want %.8f", c.rate, c.cutoff, hz, got, want)
			}
		}
		// The phase lead stated: 2.6131·cutoff/f radians, far above the cutoff
		// and far below half the rate.
		if k := 20 * n * int(c.cutoff) / c.rate; k < n/8 {
			hz := float64(k) * float64(c.rate) / n
			got, want := math.Atan2(im[k], re[k]), 2.6131*c.cutoff/hz
			if math.Abs(got/want-1) > 0.02 {
				t.Errorf("rate %d, cutoff %g Hz: phase lead at %g Hz is %.4f rad, want %.4f", c.rate, c.cutoff, hz, got, want)
			}
		}
	}
}

func TestHighPassKeepsTheContract(t *testing.T) {
	in := noiseBlock(3, 2000, 9)
	stage := func(up audio.Source) audio.Source {
		s, err := HighPass(up, 120)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	// What it yields: the two biquads as difference equations, without the
	// zeroing of small states.
	want := audio.NewBlock(3, 2000)
	h := stage(audio.FromBlock(48000, in)).(*highPass)
	for ch := range 3 {
		x := make([]float64, 2000)
		for i, v := range in.Channel(ch) {
			x[i] = float64(v)
		}
		for k := range 2 {
			y := make([]float64, 2000)
			at := func(s []float64, i int) float64 {
				if i < 0 {
					return 0
				}
				return s[i]
			}
			for i := range y {
				y[i] = h.gain[k]*(x[i]-2*at(x, i-1)+at(x, i-2)) - h.a1[k]*at(y, i-1) - h.a2[k]*at(y, i-2)
			}
			x = y
		}
		for i, v := range x {
			want.Channel(ch)[i] = float32(v)
		}
	}
	audiotest.TestStage(t, 48000, in, stage, want, audiotest.Options{Tolerance: 1e-7, Rate: 48000})
}

func TestHighPassComesToRest(t *testing.T) {
	b := audio.NewBlock(1, 48000*4)
	b.Channel(0)[0] = 1
	src, err := HighPass(audio.FromBlock(48000, b), 50)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.ReadAll(src); err != nil {
		t.Fatal(err)
	}
	if s := src.(*highPass).state[0]; s != [4]float64{} {
		t.Errorf("after 4 s of silence the state is %v, want zero", s)
	}
}

func TestHighPassRefusesACutoffOutsideTheBand(t *testing.T) {
	src := audio.FromBlock(48000, noiseBlock(1, 10, 1))
	for _, hz := range []float64{0, -5, 24000, 30000, math.NaN(), math.Inf(1)} {
		if _, err := HighPass(src, hz); err == nil {
			t.Errorf("a cutoff of %g Hz was taken", hz)
		}
	}
}

func BenchmarkSTFT(b *testing.B) {
	in := noiseBlock(16, 48000, 1)
	s, err := NewSTFT(16, 2048, 1024, Periodic(2048, Hann), func(int64, *Spectra) error { return nil })
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		s.Write(in)
	}
	b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "x-realtime")
}

// The shapes that scripts/bench and the reference programs run with, and those
// around the size that no longer fits into the first-level cache.
func TestOverlapIsTheCheapestShape(t *testing.T) {
	for span, want := range map[int]Overlap{1: {256, 256}, 128: {1024, 896}, 170: {1024, 848}, 200: {2048, 1840}, 400: {2048, 1648}, 1500: {16384, 14880}} {
		got, err := NewOverlap(span)
		if err != nil || got != want {
			t.Errorf("taps that span %d samples: %v, %v, want %v", span, got, err, want)
		}
	}
	for _, span := range []int{0, largestSpan + 1} {
		if _, err := NewOverlap(span); err == nil {
			t.Errorf("taps that span %d samples: taken", span)
		}
	}
}
