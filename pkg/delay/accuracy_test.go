package delay

import (
	"errors"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

// The errors that the package comment states, from 0 and from 100 Hz at 48 kHz
// to 0.8 of Nyquist, over 65 fractional delays; and the bounds that the
// methods promise: sinc of 64 taps -110 dB, Farrow of 32 taps and order 6
// -85 dB.
func TestStatedErrorsOfTheKernels(t *testing.T) {
	kernel := func(k Kernel, err error) Kernel {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
		return k
	}
	sinc := func(taps int) Kernel { s, err := NewSinc(taps); return kernel(s, err) }
	farrow, err := NewFarrow(32, 6)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name   string
		k      Kernel
		high   float64 // of the rate
		stated float64 // dB
	}{
		{"sinc, 16 taps", sinc(16), 0.4, -43},
		{"sinc, 32 taps", sinc(32), 0.4, -93},
		{"sinc, 64 taps", sinc(64), 0.4, -123},
		{"sinc, 128 taps", sinc(128), 0.465, -121},
		{"Farrow, 32 taps, order 6", farrow, 0.4, -94},
	} {
		got := 20 * math.Log10(WorstError(c.k, 0, c.high))
		t.Logf("%s: %.1f dB to %g of the rate", c.name, got, c.high)
		if got > c.stated+0.5 || got < c.stated-3 {
			t.Errorf("%s: error %.1f dB to %g of the rate, stated %g", c.name, got, c.high, c.stated)
		}
	}
	for _, c := range []struct {
		k     Kernel
		bound float64
	}{{sinc(64), -110}, {farrow, -85}} {
		worst := 0.0
		for i := range 41 { // plainly, apart from WorstError
			d := 7 + (float64(i)-20)/41
			for j := range 200 {
				f := 100.0/48000 + (0.4-100.0/48000)*float64(j)/199
				start, h := c.k.Taps(nil, d)
				var sum complex128
				for n, v := range h {
					sum += complex(v, 0) * cmplx.Rect(1, -2*math.Pi*f*float64(start+n))
				}
				worst = math.Max(worst, cmplx.Abs(sum-cmplx.Rect(1, -2*math.Pi*f*d)))
			}
		}
		if db := 20 * math.Log10(worst); db > c.bound {
			t.Errorf("%T: error %.1f dB, want at most %g", c.k, db, c.bound)
		}
	}
}

func TestKernelsAreRefusedOutOfRange(t *testing.T) {
	for _, taps := range []int{-2, 0, 1, 63, 4098} {
		if _, err := NewSinc(taps); err == nil {
			t.Errorf("sinc of %d taps: accepted", taps)
		}
	}
	for _, c := range [][2]int{{0, 3}, {31, 6}, {66, 6}, {32, 0}, {32, 13}} {
		if _, err := NewFarrow(c[0], c[1]); err == nil {
			t.Errorf("Farrow of %d taps, order %d: accepted", c[0], c[1])
		}
	}
	for _, order := range []int{0, 2, 33} {
		if _, err := NewLagrange(order); err == nil {
			t.Errorf("Lagrange of order %d: accepted", order)
		}
	}
}

// noise is a block that differs on every channel.
func noise(channels, frames int, seed uint64) audio.Block {
	r := rand.New(rand.NewPCG(seed, 99))
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		for i := range frames {
			b.Channel(ch)[i] = float32(0.2 * r.NormFloat64())
		}
	}
	return b
}

// shifted is what NewShift should give, convolved plainly in double precision.
func shifted(k Kernel, rate int, in audio.Block, delays []float64) audio.Block {
	out := audio.NewBlock(in.Channels(), in.Frames())
	for ch := range in.Channels() {
		start, h := k.Taps(nil, delays[ch]*float64(rate))
		for i := range in.Frames() {
			sum := 0.0
			for n, v := range h {
				if j := i - start - n; j >= 0 && j < in.Frames() {
					sum += v * float64(in.Channel(ch)[j])
				}
			}
			out.Channel(ch)[i] = float32(sum)
		}
	}
	return out
}

func TestShiftKeepsTheContract(t *testing.T) {
	const rate = 48000
	k, err := NewSinc(32)
	if err != nil {
		t.Fatal(err)
	}
	for _, frames := range []int{1, 5, 3001} {
		in := noise(3, frames, 4)
		delays := []float64{-12.3 / rate, 0, 700.6 / rate}
		stage := func(up audio.Source) audio.Source {
			s, err := NewShift(up, k, delays)
			if err != nil {
				t.Fatal(err)
			}
			return s
		}
		audiotest.TestStage(t, rate, in, stage, shifted(k, rate, in, delays), audiotest.Options{
			Tolerance: 1e-6, Sizes: []int{32, 1024}, Lookahead: 2048, Rate: rate,
		})
	}
}

func TestShiftByWholeSamplesIsExact(t *testing.T) {
	const rate = 8000
	k, err := NewSinc(64)
	if err != nil {
		t.Fatal(err)
	}
	in := noise(2, 900, 8)
	src, err := NewShift(audio.FromBlock(rate, in), k, []float64{5.0 / rate, -3.0 / rate})
	if err != nil {
		t.Fatal(err)
	}
	got, err := audio.ReadAll(src)
	if err != nil {
		t.Fatal(err)
	}
	for i := range 900 {
		late, early := float32(0), float32(0)
		if i >= 5 {
			late = in.Channel(0)[i-5]
		}
		if i+3 < 900 {
			early = in.Channel(1)[i+3]
		}
		if math.Abs(float64(got.Channel(0)[i]-late)) > 1e-9 || math.Abs(float64(got.Channel(1)[i]-early)) > 1e-9 {
			t.Fatalf("frame %d: %g and %g, want %g and %g", i, got.Channel(0)[i], got.Channel(1)[i], late, early)
		}
	}
}

func TestShiftRefuses(t *testing.T) {
	k, err := NewSinc(16)
	if err != nil {
		t.Fatal(err)
	}
	src := audio.FromBlock(48000, noise(2, 10, 1))
	for _, delays := range [][]float64{{0}, {0, 0, 0}, {0, math.NaN()}, {0, math.Inf(1)}, {0, 100}} {
		if _, err := NewShift(src, k, delays); err == nil {
			t.Errorf("delays %v: accepted", delays)
		}
	}
	broken := errors.New("broken on purpose")
	s, err := NewShift(audiotest.Failing(audio.FromBlock(48000, noise(2, 5000, 1)), 4000, broken), k, []float64{0, 1e-4})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.ReadAll(s); !errors.Is(err, broken) {
		t.Errorf("got %v, want the failure of the source", err)
	}
}
