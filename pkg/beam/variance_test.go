package beam

import (
	"fmt"
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
	f.task = Task{Mics: ring(8, 0.06), Speed: 343, Rate: 32000, FFTSize: 2048}
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
	t.Log("2 of 50 seeds; ALIDADE_LONG=1 runs them all")
	return 2
}

// noiseFrames is what the weights are found from: four seconds.
const noiseFrames = 1 << 17

// spectra are the power of target and noise alike over a logarithmic axis of
// frequency from 100 Hz to 8 kHz: what "overall" means depends on it. That of
// speech is flat up to 500 Hz and falls by 9 dB an octave of density above,
// roughly the long-term average (common practice).
var spectra = []struct {
	name  string
	power func(hz float64) float64
}{
	{"pink", func(hz float64) float64 { return 1 }},
	{"white", func(hz float64) float64 { return hz }},
	{"speech", func(hz float64) float64 { return hz / (1 + math.Pow(hz/500, 3)) }},
}

// gains are the overall SNR gains, dB, of responses in every spectrum.
func (f field) gains(response func(hz float64) []complex128) (overall [3]float64) {
	const points = 160
	n := len(f.task.Mics)
	var in, out, target, all [3]float64
	for i := range points {
		hz := 100 * math.Pow(80, (float64(i)+0.5)/points)
		g := response(hz)
		r := f.noise(hz)
		d := steering(f.task, f.target, hz)
		var y, power complex128
		mean := 0.0
		for m := range g {
			y += g[m] * d[m] * f.fault[m]
			mean += real(r[m*n+m]) / float64(n)
			for j := range g {
				power += g[m] * r[m*n+j] * cmplx.Conj(g[j])
			}
		}
		for s, spectrum := range spectra {
			p := spectrum.power(hz)
			in[s] += p * mean
			out[s] += p * real(power)
			target[s] += p * abs2(y)
			all[s] += p
		}
	}
	for s := range overall {
		overall[s] = db(in[s] / out[s] * target[s] / all[s])
	}
	return overall
}

// best are the gains that no weights with the floor can exceed: the optimum for
// the exact covariance, frequency by frequency, with no filter to be built.
func (f field) best(t *testing.T, floorDB float64) [3]float64 {
	t.Helper()
	n := len(f.task.Mics)
	job := newBinJob(n, 1)
	w := make([]complex128, n)
	return f.gains(func(hz float64) []complex128 {
		copy(job.c, steering(f.task, f.task.Look, hz))
		clear(job.p)
		copy(job.r, f.noise(hz))
		if _, _, err := job.solve(math.Min(floorOf(floorDB), float64(n)*(1-1e-9)), w); err != nil {
			t.Fatal(err)
		}
		for m := range w {
			w[m] = cmplx.Conj(w[m])
		}
		return w
	})
}

// Minimum variance against delay-and-sum, one interferer as loud as the target,
// weights from 4 s of noise, gains in the expected noise, floor -6 dB; ring (45°
// apart or more) and line (30°). Wanted are 6 dB more than delay-and-sum with
// diffuse noise at -10 dB and 12 dB with it at -20 dB. Over 50 seeds, with pink
// spectra, the ring reaches it in 50 and 45 of 50 and the line in 48 and 46: as
// many as the optimum for the exact covariance does, which no weights that keep
// the floor can exceed. Without a floor that optimum reaches it in all 50 of
// each, so that the floor is what the rest stand at: their interferer lies near
// the target, and to turn from the one to the other within the lowest octaves
// takes more white noise gain than 6 dB. With the spectra of speech the numbers
// are 50, 48, 48 and 47, of the optimum the same; with white ones 50, 50, 43 and
// 41 where the optimum has 50, 50, 45 and 42, and for the line 45 and 44 even
// without a floor: diffuse noise and its grating lobe above 4.3 kHz fill the rest.
//
// So the test is against that optimum: at most 0.5 dB below it in every case and
// spectrum. The target is kept within 0.5 dB in every band.
func TestMinimumVarianceGainOverDelayAndSum(t *testing.T) {
	n := seeds(t)
	for _, v := range []struct {
		name          string
		onLine        bool
		diffuse, goal float64
	}{
		{"ring, diffuse -10 dB", false, -10, 6}, {"line, diffuse -10 dB", true, -10, 6},
		{"ring, diffuse -20 dB", false, -20, 12}, {"line, diffuse -20 dB", true, -20, 12},
	} {
		rows := map[string]*[3][]float64{}
		worstTarget, worstLoss := 0.0, 0.0
		for seed := uint64(1); seed <= n; seed++ {
			r := rand.New(rand.NewPCG(seed, 77))
			f := draw(r, v.onLine, v.diffuse)
			_, plain, _ := built(t, Tapered{}, f.task, 0)
			base := f.gains(func(hz float64) []complex128 { return plain.Response(nil, hz) })
			noise := covariance(t, 32000, f.take(t, r, noiseFrames), f.task.FFTSize, 1<<14, CovarianceOptions{})
			_, filters, _ := built(t, MVDR{Noise: noise, FloorDB: -6}, f.task, 0)
			learned := f.gains(func(hz float64) []complex128 { return filters.Response(nil, hz) })
			best := f.best(t, -6)
			for name, gains := range map[string][3]float64{"as built": learned, "optimum": best, "without a floor": f.best(t, math.Inf(-1))} {
				if rows[name] == nil {
					rows[name] = &[3][]float64{}
				}
				for s := range gains {
					rows[name][s] = append(rows[name][s], gains[s]-base[s])
				}
			}
			for s := range best {
				loss := best[s] - learned[s]
				worstLoss = math.Max(worstLoss, loss)
				if loss > 0.5 {
					t.Errorf("%s, seed %d, %s: %.2f dB better than delay-and-sum, want at most 0.5 dB below the optimum of %.2f", v.name, seed, spectra[s].name, learned[s]-base[s], best[s]-base[s])
				}
			}
			for x := -9; x <= 9; x++ {
				mid := 1000 * math.Pow(10, float64(x)/10)
				_, target := f.gain(filters, mid*math.Pow(10, -0.05), mid*math.Pow(10, 0.05), 8)
				worstTarget = math.Max(worstTarget, math.Abs(db(target)))
			}
		}
		for _, name := range []string{"as built", "optimum", "without a floor"} {
			text := ""
			for s, spectrum := range spectra {
				x := rows[name][s]
				sort.Float64s(x)
				text += fmt.Sprintf("; %s least %5.2f, median %5.2f, %2d of %d", spectrum.name, x[0], (x[(n-1)/2]+x[n/2])/2, int(n)-sort.SearchFloat64s(x, v.goal), n)
			}
			t.Logf("%s, dB above delay-and-sum, and how many reach %g dB, %-15s%s", v.name, v.goal, name, text)
		}
		t.Logf("%s: at most %.2f dB below the optimum; target changes by %.4f dB at most", v.name, worstLoss, worstTarget)
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
