package beam

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"sort"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/beam/internal/hermitian"
	"alidade/pkg/rig"
)

// field is a target of power 1 with one interferer of power 1, diffuse noise
// and sensor noise, all of the same spectrum, at microphones with faults.
type field struct {
	task       Task
	target     acoustics.Wave // where it really is
	interferer acoustics.Wave
	diffuse    float64 // power re target
	sensor     float64
	fault      []complex128 // of each microphone
}

// noise returns the covariance of the noise at hz.
func (f field) noise(hz float64) []complex128 {
	n := len(f.task.Mics)
	r := make([]complex128, n*n)
	v := steering(f.task, f.interferer, hz)
	for m, p := range f.task.Mics {
		for j, q := range f.task.Mics {
			x := v[m]*cmplx.Conj(v[j]) + complex(f.diffuse*acoustics.DiffuseCoherence(p.Distance(q), hz, f.task.Speed), 0)
			r[m*n+j] = x * f.fault[m] * cmplx.Conj(f.fault[j])
		}
		r[m*n+m] += complex(f.sensor, 0)
	}
	return r
}

// take draws frames of the noise: a long transform whose bins have exactly the
// covariance.
func (f field) take(t *testing.T, r *rand.Rand, frames int) audio.Block {
	t.Helper()
	n, mics := frames, len(f.task.Mics)
	p := newPlan(t, n)
	re, im := make([][]float64, mics), make([][]float64, mics)
	for m := range mics {
		re[m], im[m] = make([]float64, n/2+1), make([]float64, n/2+1)
	}
	z := make([]complex128, mics)
	l := make([]complex128, mics*mics)
	for k := 1; k < n/2; k++ {
		// The covariance hardly moves from bin to bin of so long a transform.
		if k%8 == 1 {
			factor(t, l, f.noise(float64(k+3)*float64(f.task.Rate)/float64(n)), mics)
		}
		for m := range z {
			z[m] = complex(r.NormFloat64(), r.NormFloat64())
		}
		for m := range mics {
			var x complex128
			for j := range m + 1 {
				x += l[m*mics+j] * z[j]
			}
			re[m][k], im[m][k] = real(x), imag(x)
		}
	}
	b := audio.NewBlock(mics, n)
	x := make([]float64, n)
	for m := range mics {
		p.fft.Inverse(x, re[m], im[m])
		for i, v := range x {
			b.Channel(m)[i] = float32(v)
		}
	}
	return b
}

// factor sets l to the Cholesky factor of a: what Solve undoes, from the
// definition, as the factor itself is not exported.
func factor(t *testing.T, l, a []complex128, n int) {
	t.Helper()
	var c hermitian.Cholesky
	if err := c.Factor(a, n); err != nil {
		t.Fatal(err)
	}
	clear(l)
	for i := range n {
		for j := range i + 1 {
			sum := a[i*n+j]
			for k := range j {
				sum -= l[i*n+k] * cmplx.Conj(l[j*n+k])
			}
			if i == j {
				l[i*n+i] = cmplx.Sqrt(sum)
			} else {
				l[i*n+j] = sum / l[j*n+j]
			}
		}
	}
}

// gain returns noise reduction and target change of filters in the band
// low..high, as power ratios of means over frequencies of equal spacing on a
// logarithmic axis (equal power an octave), from the covariances.
func (f field) gain(filters *Filters, low, high float64, points int) (noise, target float64) {
	var in, out, targetOut float64
	n := len(f.task.Mics)
	var g []complex128
	for i := range points {
		hz := low * math.Pow(high/low, (float64(i)+0.5)/float64(points))
		g = filters.Response(g, hz)
		r := f.noise(hz)
		d := steering(f.task, f.target, hz)
		var y, power complex128
		for m := range g {
			y += g[m] * d[m] * f.fault[m]
			in += real(r[m*n+m]) / float64(n)
			for j := range g {
				power += g[m] * r[m*n+j] * cmplx.Conj(g[j])
			}
		}
		out += real(power)
		targetOut += abs2(y)
	}
	return in / out, targetOut / float64(points)
}

// overall is the SNR gain from 100 Hz to 8 kHz, dB.
func (f field) overall(filters *Filters) float64 {
	noise, target := f.gain(filters, 100, 8000, 160)
	return db(noise * target)
}

// draw makes a field: an eight-microphone ring with the interferer at least 45
// degrees from the target, or a line with it at least 30.
func draw(r *rand.Rand, onLine bool, diffuseDB float64) field {
	f := field{diffuse: math.Pow(10, diffuseDB/10), sensor: 1e-4, fault: []complex128{1, 1, 1, 1, 1, 1, 1, 1}}
	f.task = Task{Mics: ring(8, 0.06), Speed: 343, Rate: 32000, FFTSize: 1024}
	target := 360 * r.Float64()
	other := target + 45 + 270*r.Float64()
	if onLine {
		f.task.Mics = line(8, 0.04)
		target = 20 + 140*r.Float64()
		for other = target; math.Abs(other-target) < 30; {
			other = 180 * r.Float64()
		}
	}
	f.task.Look, f.target, f.interferer = wave(target), wave(target), wave(other)
	return f
}

// seeds is the number of cases: all of them in the long form.
func seeds(t *testing.T) uint64 {
	t.Helper()
	if os.Getenv("ALIDADE_LONG") == "1" {
		return 50
	}
	t.Log("3 of 50 seeds; ALIDADE_LONG=1 runs them all")
	return 3
}

// noiseFrames is what the weights are found from: four seconds.
const noiseFrames = 1 << 17

// Minimum variance against delay-and-sum, one interferer as loud as the target,
// weights from 4 s of noise and gains in the expected noise, floor -6 dB. With
// diffuse noise at -10 dB the ring is at least 6 dB better in every case, the
// line in 48 of 50 (the least is 4.7 dB); with it at -20 dB, 12 dB in 44 and 46
// of 50 (the least is 8.5 dB). The rest have the interferer near the target:
// there the floor, not the noise, limits the lowest octaves, even of weights
// from the exact covariance. The target is kept within 0.5 dB in every band.
func TestMinimumVarianceGainOverDelayAndSum(t *testing.T) {
	n := seeds(t)
	for _, v := range []struct {
		name                   string
		onLine                 bool
		diffuse, least, median float64
		goal                   float64 // counted in the log
	}{
		{"ring, diffuse -10 dB", false, -10, 6, 6, 6}, {"line, diffuse -10 dB", true, -10, 4.5, 6, 6},
		{"ring, diffuse -20 dB", false, -20, 8, 12, 12}, {"line, diffuse -20 dB", true, -20, 8, 12, 12},
	} {
		var better []float64
		worstTarget := 0.0
		for seed := uint64(1); seed <= n; seed++ {
			r := rand.New(rand.NewPCG(seed, 77))
			f := draw(r, v.onLine, v.diffuse)
			noise := covariance(t, 32000, f.take(t, r, noiseFrames), f.task.FFTSize, 1<<14, CovarianceOptions{})
			_, filters, _ := built(t, MVDR{Noise: noise, FloorDB: -6}, f.task, 0)
			_, plain, _ := built(t, Tapered{}, f.task, 0)
			better = append(better, f.overall(filters)-f.overall(plain))
			for x := -9; x <= 9; x++ {
				mid := 1000 * math.Pow(10, float64(x)/10)
				_, target := f.gain(filters, mid*math.Pow(10, -0.05), mid*math.Pow(10, 0.05), 8)
				worstTarget = math.Max(worstTarget, math.Abs(db(target)))
			}
		}
		sort.Float64s(better)
		median := (better[(n-1)/2] + better[n/2]) / 2
		t.Logf("%s: least %.2f dB, median %.2f dB, %d of %d above %g dB better; target changes by %.4f dB at most",
			v.name, better[0], median, int(n)-sort.SearchFloat64s(better, v.goal), n, v.goal, worstTarget)
		if better[0] < v.least || median < v.median {
			t.Errorf("%s: least %.2f dB, median %.2f dB better than delay-and-sum, want %g and %g", v.name, better[0], median, v.least, v.median)
		}
		if worstTarget > 0.5 {
			t.Errorf("%s: target changes by %.3f dB", v.name, worstTarget)
		}
	}
}

// The same with a steering error of 5 degrees and channel errors of up to 0.5 dB
// and 5 degrees, evenly distributed: still 3 dB better at floor -6 dB, and at
// floor 0 dB no band below the grating limit loses 3 dB of the target. (With
// normally distributed errors of 0.5 dB and 5 degrees rms the line loses more
// than that in some bands in 11 of 50 cases, 5.4 dB at worst: measured noise
// carries the channel errors, and weights may meet the constraint through them.)
func TestMinimumVarianceWithErrors(t *testing.T) {
	n := seeds(t)
	for name, onLine := range map[string]bool{"ring": false, "line": true} {
		least, worst := math.Inf(1), 0.0
		for seed := uint64(1); seed <= n; seed++ {
			r := rand.New(rand.NewPCG(seed, 78))
			f := draw(r, onLine, -10)
			for m := range f.fault {
				f.fault[m] = cmplx.Rect(math.Pow(10, 0.5*(2*r.Float64()-1)/20), 5*math.Pi/180*(2*r.Float64()-1))
			}
			f.target = acoustics.Plane{From: rig.Direction{Azimuth: f.task.Look.Direction(rig.Point{}).Azimuth + 5*math.Pi/180}}
			noise := covariance(t, 32000, f.take(t, r, noiseFrames), f.task.FFTSize, 1<<14, CovarianceOptions{})
			_, plain, _ := built(t, Tapered{}, f.task, 0)
			_, filters, _ := built(t, MVDR{Noise: noise, FloorDB: -6}, f.task, 0)
			better := f.overall(filters) - f.overall(plain)
			least = math.Min(least, better)
			if better < 3 {
				t.Errorf("%s, seed %d: %.2f dB better than delay-and-sum, want 3", name, seed, better)
			}
			_, safe, _ := built(t, MVDR{Noise: noise, FloorDB: 0}, f.task, 0)
			for x := -9; x <= 6; x++ { // up to 4 kHz: a 40 mm line aliases from 4.3 kHz on
				mid := 1000 * math.Pow(10, float64(x)/10)
				_, target := f.gain(safe, mid*math.Pow(10, -0.05), mid*math.Pow(10, 0.05), 8)
				worst = math.Min(worst, db(target))
			}
		}
		t.Logf("%s: least %.2f dB better; target change %.2f dB at worst at floor 0 dB", name, least, worst)
		if worst < -3 {
			t.Errorf("%s: target change %.2f dB at floor 0 dB, want above -3", name, worst)
		}
	}
}
