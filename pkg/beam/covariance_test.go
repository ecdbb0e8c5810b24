package beam

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/spectral"
)

// coupledNoise is seeded noise of n frames; channel ch holds its own noise plus
// what the one before had three frames earlier.
func coupledNoise(seed uint64, channels, n int) audio.Block {
	r := rand.New(rand.NewPCG(seed, 99))
	b := audio.NewBlock(channels, n)
	for ch := range channels {
		x := b.Channel(ch)
		for i := range x {
			x[i] = float32(0.1 * float64(ch+1) * r.NormFloat64())
			if ch > 0 && i >= 3 {
				x[i] += b.Channel(ch - 1)[i-3]
			}
		}
	}
	return b
}

// covariance takes the block in pieces of the given size.
func covariance(t *testing.T, rate int, b audio.Block, size, piece int, o CovarianceOptions) *Covariance {
	t.Helper()
	c, err := NewCovariance(rate, b.Channels(), size, o)
	if err != nil {
		t.Fatal(err)
	}
	for i := 0; i < b.Frames(); i += piece {
		if err := c.Write(b.Slice(i, min(i+piece, b.Frames()))); err != nil {
			t.Fatal(err)
		}
	}
	return c
}

// plainCovariance is the definition: direct transforms of Hann-weighted pieces.
func plainCovariance(b audio.Block, size int, starts []int, k int) []complex128 {
	n := b.Channels()
	r := make([]complex128, n*n)
	var energy float64
	for i := range size {
		w := 0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/float64(size))
		energy += w * w
	}
	x := make([]complex128, n)
	for _, start := range starts {
		for ch := range n {
			x[ch] = 0
			for i := range size {
				w := 0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/float64(size))
				x[ch] += complex(w*float64(b.Channel(ch)[start+i]), 0) * cmplx.Rect(1, -2*math.Pi*float64(k*i)/float64(size))
			}
		}
		for m := range n {
			for j := range n {
				r[m*n+j] += x[m] * cmplx.Conj(x[j]) / complex(energy*float64(len(starts)), 0)
			}
		}
	}
	return r
}

func TestCovarianceIsItsDefinition(t *testing.T) {
	b := coupledNoise(1, 3, 1000)
	c := covariance(t, 48000, b, 64, 1000, CovarianceOptions{Stretches: [][2]int64{{5, 250}, {300, 340}, {411, 700}}})
	var starts []int
	for _, s := range [][2]int{{5, 250}, {411, 700}} { // the middle one is too short
		for i := s[0]; i+64 <= s[1]; i += 32 {
			starts = append(starts, i)
		}
	}
	if c.Frames() != len(starts) {
		t.Fatalf("%d transforms, want %d", c.Frames(), len(starts))
	}
	got := make([]complex128, 9)
	for k := range 33 {
		c.Matrix(got, k)
		for i, want := range plainCovariance(b, 64, starts, k) {
			if cmplx.Abs(got[i]-want) > 1e-12 {
				t.Fatalf("bin %d, element %d: %v, want %v", k, i, got[i], want)
			}
		}
	}
}

func TestCovarianceOfAnyBlockSize(t *testing.T) {
	b := coupledNoise(2, 2, 777)
	o := CovarianceOptions{Stretches: [][2]int64{{0, 200}, {201, 600}, {600, 777}}, Forget: 0.01}
	want, got := make([]complex128, 4), make([]complex128, 4)
	whole := covariance(t, 48000, b, 32, 777, o)
	for _, piece := range []int{1, 2, 7, 16, 31, 32, 33, 200, 776} {
		c := covariance(t, 48000, b, 32, piece, o)
		if c.Frames() != whole.Frames() || c.Effective() != whole.Effective() {
			t.Errorf("pieces of %d: %d transforms, want %d", piece, c.Frames(), whole.Frames())
		}
		for k := range 17 {
			whole.Matrix(want, k)
			c.Matrix(got, k)
			for i := range got {
				if got[i] != want[i] {
					t.Fatalf("pieces of %d, bin %d: %v, want %v", piece, k, got[i], want[i])
				}
			}
		}
	}
}

func TestCovarianceAroundOneTransform(t *testing.T) {
	for frames, want := range map[int]int{0: 0, 1: 0, 63: 0, 64: 1, 95: 1, 96: 2, 97: 2} {
		if c := covariance(t, 48000, coupledNoise(3, 1, frames), 64, 50, CovarianceOptions{}); c.Frames() != want {
			t.Errorf("%d frames: %d transforms, want %d", frames, c.Frames(), want)
		}
	}
	c := covariance(t, 48000, coupledNoise(3, 2, 10), 64, 10, CovarianceOptions{})
	r := []complex128{1, 1, 1, 1}
	c.Matrix(r, 5)
	if r[0] != 0 || r[3] != 0 {
		t.Errorf("no transform yet, matrix %v, want zero", r)
	}
}

// Forgetting: after a change of level the old one has left e^{-t/T} of its
// weight.
func TestCovarianceForgets(t *testing.T) {
	const tau = 0.02
	n := 4800
	b := audio.NewBlock(1, 2*n)
	r := rand.New(rand.NewPCG(4, 4))
	for i := range b.Channel(0) {
		b.Channel(0)[i] = float32(r.NormFloat64())
		if i >= n {
			b.Channel(0)[i] *= 0.01
		}
	}
	after := n + 960 // one time constant later
	c := covariance(t, 48000, b.Slice(0, after), 64, 64, CovarianceOptions{Forget: tau})
	var sum float64
	m := make([]complex128, 1)
	for k := 1; k < 32; k++ {
		c.Matrix(m, k)
		sum += real(m[0]) / 31
	}
	if want := math.Exp(-1.0); math.Abs(sum/want-1) > 0.12 {
		t.Errorf("power %.3f one time constant after the change, want %.3f", sum, want)
	}
	// Sum of the geometric series of weights.
	if want := 1 / (1 - math.Exp(-32/(tau*48000))); math.Abs(c.Effective()-want) > 0.01*want {
		t.Errorf("effective transforms %.2f, want %.2f", c.Effective(), want)
	}
}

func TestCovarianceWriteAllocatesNothing(t *testing.T) {
	b := coupledNoise(5, 4, 512)
	c, err := NewCovariance(48000, 4, 256, CovarianceOptions{})
	if err != nil {
		t.Fatal(err)
	}
	if n := testing.AllocsPerRun(20, func() { _ = c.Write(b) }); n != 0 {
		t.Errorf("%g allocations a block, want 0", n)
	}
}

func TestCovarianceRefusals(t *testing.T) {
	for _, v := range []struct {
		rate, mics, size int
		o                CovarianceOptions
		want             string
	}{
		{0, 2, 64, CovarianceOptions{}, "0 frames per second"},
		{48000, 0, 64, CovarianceOptions{}, "0 microphones"},
		{48000, 2, 100, CovarianceOptions{}, "power of two"},
		{48000, 2, 1 << 20, CovarianceOptions{}, "power of two"},
		{48000, 256, 4096, CovarianceOptions{}, "take fewer points"},
		{48000, 2, 64, CovarianceOptions{Forget: -1}, "time constant"},
		{48000, 2, 64, CovarianceOptions{Forget: math.NaN()}, "time constant"},
		{48000, 2, 64, CovarianceOptions{Stretches: [][2]int64{{5, 5}}}, "stretch 1"},
		{48000, 2, 64, CovarianceOptions{Stretches: [][2]int64{{0, 9}, {8, 20}}}, "stretch 2"},
		{48000, 2, 64, CovarianceOptions{Stretches: [][2]int64{{-1, 9}}}, "stretch 1"},
	} {
		if _, err := NewCovariance(v.rate, v.mics, v.size, v.o); err == nil || !strings.Contains(err.Error(), v.want) {
			t.Errorf("%+v: error %v, want one with %q", v, err, v.want)
		}
	}
	c, err := NewCovariance(48000, 2, 64, CovarianceOptions{})
	if err != nil {
		t.Fatal(err)
	}
	if err := c.Write(audio.NewBlock(3, 10)); err == nil || !strings.Contains(err.Error(), "3 channels") {
		t.Errorf("block of three channels: %v", err)
	}
	defer func() {
		if recover() == nil {
			t.Error("Matrix into the wrong length: no panic")
		}
	}()
	c.Matrix(make([]complex128, 3), 0)
}

// C18, C19: Reed, Mallett & Brennan 1974: weights from K independent frames of
// noise lose (K+2-N)/(K+1) of the best SINR on average; by Monte Carlo with
// N = 10. Every inner bin of a small transform is one trial. The tolerance is
// three standard errors of the number of trials at hand.
func TestSampleCovarianceLoss(t *testing.T) {
	const n = 10
	task := Task{Mics: line(n, 0.001), Look: wave(70), Speed: 343, Rate: 8000, FFTSize: 64}
	r := rand.New(rand.NewPCG(6, 7))
	for _, v := range []struct {
		frames int
		want   float64
	}{{17, -3.0103}, {30, -1.48939}, {100, -0.4053355}} {
		var sum, square float64
		trials := 0
		for range 40 {
			sample := known(t, task, func(float64) []complex128 {
				a := make([]complex128, n*n)
				x := make([]complex128, n)
				for range v.frames {
					for m := range x {
						x[m] = complex(r.NormFloat64(), r.NormFloat64())
					}
					for m := range n {
						for j := range m + 1 {
							a[m*n+j] += x[m] * cmplx.Conj(x[j])
						}
					}
				}
				return a
			})
			w, err := MVDR{Noise: sample, FloorDB: math.Inf(-1)}.Weights(task)
			if err != nil {
				t.Fatal(err)
			}
			for k := 1; k < w.Bins()-1; k++ {
				loss := w.WhiteNoiseGain(k) / n // true noise is white
				sum += loss
				square += loss * loss
				trials++
			}
		}
		mean := sum / float64(trials)
		spread := math.Sqrt((square/float64(trials) - mean*mean) / float64(trials))
		want := math.Pow(10, v.want/10)
		t.Logf("K = %d: %.4f dB, want %.4f, %d trials", v.frames, db(mean), v.want, trials)
		if math.Abs(mean-want) > 3*spread || math.Abs(db(mean)-v.want) > 0.08 {
			t.Errorf("K = %d: mean loss %.4f dB, want %.4f within %.4f", v.frames, db(mean), v.want, 3*spread/want*4.34)
		}
	}
}

// Through the whole path: MVDR from the noise of one interferer and sensors,
// its filters against fresh noise of the same field, here in the closed form
// of the covariances.
func TestMinimumVarianceFromNoise(t *testing.T) {
	const rate, c = 16000, 343.0
	task := Task{Mics: ring(6, 0.06), Look: wave(0), Speed: c, Rate: rate, FFTSize: 512}
	source := wave(110)
	// White noise from the interferer by exact fractional delays in frequency,
	// circular over the whole stretch, and sensor noise 40 dB below.
	const n = 1 << 15
	r := rand.New(rand.NewPCG(8, 9))
	b := audio.NewBlock(6, n)
	plan := newPlan(t, n)
	re, im := plan.random(r)
	x, yr, yi := make([]float64, n), make([]float64, n/2+1), make([]float64, n/2+1)
	for m, p := range task.Mics {
		tau := source.Delay(p, task.Reference, c)
		for k := range re {
			s, cs := math.Sincos(-2 * math.Pi * float64(k) * rate / n * tau)
			yr[k], yi[k] = re[k]*cs-im[k]*s, re[k]*s+im[k]*cs
		}
		plan.fft.Inverse(x, yr, yi)
		for i, v := range x {
			b.Channel(m)[i] = float32(v + 0.01*r.NormFloat64())
		}
	}
	noise := covariance(t, rate, b, 512, 4096, CovarianceOptions{})
	for _, floor := range []float64{-10, 0} {
		_, f, fit := built(t, MVDR{Noise: noise, FloorDB: floor}, task, 0)
		if fit.ConstraintDB > -100 {
			t.Errorf("floor %g dB: constraint off by %.1f dB", floor, fit.ConstraintDB)
		}
		_, plain, _ := built(t, Tapered{}, task, 0)
		for _, hz := range []float64{700, 1000, 2000, 4000, 6000} {
			out := func(f *Filters) float64 {
				y := cmplx.Abs(look(f, task, source, hz))
				power := y * y
				for _, g := range f.Response(nil, hz) {
					power += 1e-4 * real(g*cmplx.Conj(g))
				}
				return db(power)
			}
			t.Logf("floor %g dB, %g Hz: noise %.1f dB, delay-and-sum %.1f dB", floor, hz, out(f), out(plain))
			if out(f) > math.Min(out(plain)-6, -15) {
				t.Errorf("floor %g dB, %g Hz: noise %.1f dB, delay-and-sum %.1f dB", floor, hz, out(f), out(plain))
			}
		}
	}
}

// plan is a transform over a whole test signal.
type plan struct {
	n   int
	fft *spectral.FFT[float64]
}

func newPlan(t *testing.T, n int) plan {
	t.Helper()
	fft, err := spectral.NewFFT[float64](n)
	if err != nil {
		t.Fatal(err)
	}
	return plan{n, fft}
}

// random returns the spectrum of white noise of unit power.
func (p plan) random(r *rand.Rand) (re, im []float64) {
	re, im = make([]float64, p.n/2+1), make([]float64, p.n/2+1)
	x := make([]float64, p.n)
	for i := range x {
		x[i] = r.NormFloat64()
	}
	p.fft.Forward(re, im, x)
	return re, im
}
