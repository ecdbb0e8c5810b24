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
	limit      float64      // Hz from which on a grating lobe is there: c/(d(1+|cos|)), as in check A13
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

// The rigs of the drawn fields: a ring of eight 16 cm across and a line of eight
// 35 cm long.
const (
	ringRadius  = 0.08
	lineSpacing = 0.05
)

// draw makes a field: an eight-microphone ring with the interferer at least 45
// degrees from the target, or a line with it at least 30, both then within 60
// degrees of broadside: a line hears the cosine of the angle alone, and 30
// degrees from its end are a quarter of the cosine that they are at broadside.
func draw(r *rand.Rand, onLine bool, diffuseDB float64) field {
	f := field{diffuse: math.Pow(10, diffuseDB/10), sensor: 1e-4, fault: []complex128{1, 1, 1, 1, 1, 1, 1, 1}, limit: math.Inf(1)}
	f.task = Task{Mics: ring(8, ringRadius), Speed: 343, Rate: 32000, FFTSize: 2048}
	target := 360 * r.Float64()
	other := target + 45 + 270*r.Float64()
	if onLine {
		f.task.Mics = line(8, lineSpacing)
		target = 30 + 120*r.Float64()
		for other = target; math.Abs(other-target) < 30; {
			other = 30 + 120*r.Float64()
		}
		f.limit = f.task.Speed / (lineSpacing * (1 + math.Abs(math.Cos(target*math.Pi/180))))
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
	t.Log("1 of 50 seeds, the line alone; ALIDADE_LONG=1 runs them all, and the ring")
	return 1
}

// noiseFrames is what the weights are found from: four seconds.
const noiseFrames = 1 << 17

// spectra are the power of target and noise alike over a logarithmic axis of
// frequency from 100 Hz to 8 kHz: what "overall" means depends on it. That of
// speech is flat up to 500 Hz and falls by 9 dB an octave of density above,
// roughly the long-term average (common practice). White noise has nine tenths of
// its power above 0.9 kHz, and on a line most of it above the grating limit, where
// the interferer may stand in a grating lobe and nothing tells it from the target:
// such bands carry the flag grating, and white is taken both without them and with.
var spectra = []struct {
	name  string
	power func(hz, limit float64) float64
	held  bool // to the goal in every case
}{
	{"pink", func(hz, _ float64) float64 { return 1 }, true},
	{"speech", func(hz, _ float64) float64 { return hz / (1 + math.Pow(hz/500, 3)) }, true},
	{"white unflagged", func(hz, limit float64) float64 {
		if hz >= limit {
			return 0
		}
		return hz
	}, true},
	{"white to 8 kHz", func(hz, _ float64) float64 { return hz }, false},
}

// gains are the overall SNR gains, dB, of responses in every spectrum.
func (f field) gains(response func(hz float64) []complex128) (overall [4]float64) {
	const points = 160
	n := len(f.task.Mics)
	var in, out, target, all [4]float64
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
			p := spectrum.power(hz, f.limit)
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
func (f field) best(t *testing.T, floorDB float64) [4]float64 {
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
// apart or more) and line (30°). It is 6 dB better than delay-and-sum with
// diffuse noise at -10 dB and 12 dB with it at -20 dB, in every one of 50 cases
// each, with pink spectra, those of speech, and white ones in the bands without a
// grating lobe: least for the ring 9.0 and 13.0, for the line 6.0 and 13.1. No
// case is more than 0.5 dB below the optimum for the exact covariance, which no
// weights that keep the floor can exceed. The target is kept within 0.5 dB in
// every band.
//
// What the rigs and angles have to be, by that optimum: a ring of 60 mm misses the
// 12 dB in one case of 14 (pink), since to turn from the target to an interferer
// 45° away within the lowest octaves takes more white noise gain than 6 dB; 80 mm
// and more miss none of 200. A line does so where both stand near its end (0° and
// 30° are 0.13 apart in the cosine, 60° and 90° are 0.5): 40 mm with angles down to
// the end miss 6 dB in 4 and 12 dB in 8 of 100, 30 to 60 mm within 60° of broadside
// in 0 to 2, 50 mm in none. With white spectra to 8 kHz any line of 40 mm and more
// misses them in 10 to 40 of 100, with a floor or without: most of the power then
// lies above the grating limit, where the interferer may stand in a grating lobe.
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
		if n == 1 && (!v.onLine || v.diffuse != -10) {
			continue
		}
		rows := map[string]*[4][]float64{}
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
			for name, gains := range map[string][4]float64{"as built": learned, "optimum": best, "without a floor": f.best(t, math.Inf(-1))} {
				if rows[name] == nil {
					rows[name] = &[4][]float64{}
				}
				for s := range gains {
					rows[name][s] = append(rows[name][s], gains[s]-base[s])
				}
			}
			for s := range best {
				loss := best[s] - learned[s]
				worstLoss = math.Max(worstLoss, loss)
				if spectra[s].held && learned[s]-base[s] < v.goal {
					t.Errorf("%s, seed %d, %s: %.2f dB better than delay-and-sum, want %g", v.name, seed, spectra[s].name, learned[s]-base[s], v.goal)
				}
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
// normally distributed errors of 0.5 dB and 5 degrees rms the ring loses 2.7 dB at
// most and the line more than 3 dB in some bands in 14 of 50 cases, 5.7 dB at
// worst: measured noise carries the channel errors, and weights may meet the
// constraint through them. Better than delay-and-sum it is by 8.0 dB and more.)
func TestMinimumVarianceWithErrors(t *testing.T) {
	n := seeds(t)
	for name, onLine := range map[string]bool{"ring": false, "line": true} {
		if n == 1 && !onLine {
			continue
		}
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
			for x := -9; x <= 6; x++ { // up to 4 kHz: the line has grating lobes from 3.5 to 6.9 kHz on
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
