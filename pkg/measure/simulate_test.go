package measure

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sync"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// room is a simulated scene whose truth is known: a line of microphones in
// diffuse noise with sensor noise, a plane wave as the target, and fixed
// weights. Takes are made in the frequency domain, a whole take at a time.
type room struct {
	rate, mics int
	coarse     int            // frequencies of the covariance, 0 to rate/2
	root       [][]complex128 // root[c][m*M+n], of the noise covariance
	gains      [][]complex128 // gains[c][m]: weights of the output, y = Σ G_m X_m
	wave       [][]complex128 // wave[c][m]: target at microphone m re the reference point
	noise      []float64      // noise[c]: power spectrum at a microphone
	out        []float64      // out[c]: of the noise in the output
	target     []float64      // target[c]: shape of the target's power spectrum
	pass       []float64      // pass[c]: |Σ G_m wave_m|²
}

type roomShape struct {
	mics       int
	spacing    float64 // metres
	look, from float64 // azimuths of the beam and of the target, degrees
	sensor     float64 // sensor noise re diffuse noise at 1 kHz, power
}

func newRoom(s roomShape) *room {
	const rate, speed = 16000, 343.0
	r := &room{rate: rate, mics: s.mics, coarse: 2048}
	at := make([]rig.Point, s.mics)
	for m := range at {
		at[m] = rig.Point{X: s.spacing * (float64(m) - float64(s.mics-1)/2)}
	}
	delays := func(deg float64) []float64 {
		return acoustics.Delays(nil, acoustics.Plane{From: rig.Direction{Azimuth: deg * math.Pi / 180}}, at, rig.Point{}, speed)
	}
	look, from := delays(s.look), delays(s.from)
	for c := range r.coarse {
		hz := (float64(c) + 0.5) * rate / 2 / float64(r.coarse)
		diffuse := 1 / (1 + (hz/300)*(hz/300)) // falls by 6 dB an octave above 300 Hz
		sensor := s.sensor / (1 + (1000./300)*(1000./300))
		cov := make([]complex128, s.mics*s.mics)
		for m := range s.mics {
			for n := range s.mics {
				v := diffuse * acoustics.DiffuseCoherence(at[m].Distance(at[n]), hz, speed)
				if m == n {
					v += sensor
				}
				cov[m*s.mics+n] = complex(v, 0)
			}
		}
		gain := acoustics.Steering(nil, look, nil, 2*math.Pi*hz)
		for m := range gain {
			gain[m] = cmplx.Conj(gain[m]) / complex(float64(s.mics), 0)
		}
		wave := acoustics.Steering(nil, from, nil, 2*math.Pi*hz)
		out, pass := complex128(0), complex128(0)
		for m := range s.mics {
			pass += gain[m] * wave[m]
			for n := range s.mics {
				out += gain[m] * cov[m*s.mics+n] * cmplx.Conj(gain[n])
			}
		}
		r.root = append(r.root, cholesky(cov, s.mics))
		r.gains = append(r.gains, gain)
		r.wave = append(r.wave, wave)
		r.noise = append(r.noise, real(cov[0]))
		r.out = append(r.out, real(out))
		r.target = append(r.target, 1/(1+math.Pow(hz/700, 2))*math.Min(1, math.Pow(hz/100, 2)))
		r.pass = append(r.pass, real(pass)*real(pass)+imag(pass)*imag(pass))
	}
	return r
}

func cholesky(a []complex128, n int) []complex128 {
	l := make([]complex128, n*n)
	for i := range n {
		for j := range i + 1 {
			s := a[i*n+j]
			for k := range j {
				s -= l[i*n+k] * cmplx.Conj(l[j*n+k])
			}
			if i == j {
				l[i*n+i] = complex(math.Sqrt(real(s)), 0)
			} else {
				l[i*n+j] = s / l[j*n+j]
			}
		}
	}
	return l
}

// truth is the expected noise reduction and target change of a band, dB: from
// the covariances and weights, through the response of the band's filter.
func (r *room) truth(l *layout, b int) (reduction, change float64) {
	type key struct {
		room *room
		band int
	}
	if v, ok := truths.Load(key{r, b}); ok {
		return v.([2]float64)[0], v.([2]float64)[1]
	}
	reduction, change = r.integrate(l, b)
	truths.Store(key{r, b}, [2]float64{reduction, change})
	return reduction, change
}

// truths holds what rooms have been asked for.
var truths sync.Map

func (r *room) integrate(l *layout, b int) (reduction, change float64) {
	for gi := range l.grids {
		g := &l.grids[gi]
		for i, gb := range g.bands {
			if gb != b {
				continue
			}
			var in, out, tin, tout float64
			for c := range r.coarse {
				hz := (float64(c) + 0.5) * float64(r.rate) / 2 / float64(r.coarse)
				if hz < l.bands[b].LowHz/2 || hz > 2*l.bands[b].HighHz {
					continue
				}
				// Four points a cell: the narrow bands are few cells wide.
				h := 0.0
				for _, off := range []float64{-0.375, -0.125, 0.125, 0.375} {
					h += l.response(g, i, hz+off*float64(r.rate)/2/float64(r.coarse))
				}
				in += h * r.noise[c]
				out += h * r.out[c]
				tin += h * r.target[c]
				tout += h * r.target[c] * r.pass[c]
			}
			return audio.PowerDB(in / out), audio.PowerDB(tout / tin)
		}
	}
	panic("no such band")
}

// maker makes takes of one length.
type maker struct {
	room *room
	n    int
	fft  *spectral.FFT[float32]
	re   [][]float32
	im   [][]float32
}

func (r *room) maker(n int) *maker {
	f, err := spectral.NewFFT[float32](n)
	if err != nil {
		panic(err)
	}
	k := &maker{room: r, n: n, fft: f}
	for range r.mics + 1 {
		k.re = append(k.re, make([]float32, n/2+1))
		k.im = append(k.im, make([]float32, n/2+1))
	}
	return k
}

// take makes the microphones and, as the last channel, the output. envelope is
// the amplitude of the target over time, nil for none; a nil fade is steady
// noise, else the amplitude of the noise over time.
func (k *maker) take(seed uint64, envelope, fade []float32) audio.Block {
	r := k.room
	rnd := rand.New(rand.NewPCG(seed, 77))
	bins := k.n / 2
	scale := math.Sqrt(float64(k.n)) * 0.02
	g := make([]complex128, r.mics)
	for b := 1; b < bins; b++ {
		c := b * r.coarse / bins
		root := r.root[c]
		for m := range g {
			g[m] = complex(rnd.NormFloat64()*scale, rnd.NormFloat64()*scale)
		}
		for m := range r.mics {
			var x complex128
			for j := range m + 1 {
				x += root[m*r.mics+j] * g[j]
			}
			k.re[m][b], k.im[m][b] = float32(real(x)), float32(imag(x))
		}
	}
	block := audio.NewBlock(r.mics+1, k.n)
	if fade != nil {
		for m := range r.mics {
			x := block.Channel(m)
			k.fft.Inverse(x, k.re[m], k.im[m])
			for i := range x {
				x[i] *= fade[i]
			}
			k.fft.Forward(k.re[m], k.im[m], x)
		}
	}
	if envelope != nil {
		s := block.Channel(r.mics)
		re, im := k.re[r.mics], k.im[r.mics]
		clear(re)
		clear(im)
		for b := 1; b < bins; b++ {
			a := scale * math.Sqrt(r.target[b*r.coarse/bins])
			re[b], im[b] = float32(a*rnd.NormFloat64()), float32(a*rnd.NormFloat64())
		}
		k.fft.Inverse(s, re, im)
		for i := range s {
			s[i] *= envelope[i]
		}
		k.fft.Forward(re, im, s)
		for b := 1; b < bins; b++ {
			v := complex(float64(re[b]), float64(im[b]))
			for m, d := range r.wave[b*r.coarse/bins] {
				x := v * d
				k.re[m][b] += float32(real(x))
				k.im[m][b] += float32(imag(x))
			}
		}
	}
	clear(k.re[r.mics])
	clear(k.im[r.mics])
	for b := 1; b < bins; b++ {
		var y complex128
		for m, w := range r.gains[b*r.coarse/bins] {
			y += w * complex(float64(k.re[m][b]), float64(k.im[m][b]))
		}
		k.re[r.mics][b], k.im[r.mics][b] = float32(real(y)), float32(imag(y))
	}
	for m := range r.mics + 1 {
		k.fft.Inverse(block.Channel(m), k.re[m], k.im[m])
	}
	return block
}

// pair measures a take: reference from the microphones, output from the last
// channel.
func (r *room) pair(t testing.TB, b audio.Block) (thirds, octaves Pair) {
	t.Helper()
	used := make([]int, r.mics)
	for m := range used {
		used[m] = m
	}
	in := metered(t, r.rate, b, 4096, MeterOptions{Used: used, PerChannel: true})
	out := metered(t, r.rate, b, 4096, MeterOptions{Used: []int{r.mics}})
	return Pair{in.Thirds(), out.Thirds(), in.ChannelThirds()}, Pair{in.Octaves(), out.Octaves(), in.ChannelOctaves()}
}

// steady is a target of even level over the stretches, with edges of 20 ms.
func steady(n, rate int, amplitude float64, at []Stretch) []float32 {
	e := make([]float32, n)
	for _, s := range at {
		from, to := int(s.From*float64(rate)), int(s.To*float64(rate))
		edge := rate / 50
		for i := max(from-edge, 0); i < min(to+edge, n); i++ {
			v := amplitude
			if i < from {
				v *= 0.5 - 0.5*math.Cos(math.Pi*float64(i-from+edge)/float64(edge))
			} else if i >= to {
				v *= 0.5 + 0.5*math.Cos(math.Pi*float64(i-to)/float64(edge))
			}
			e[i] = float32(v)
		}
	}
	return e
}

// speechlike is a target with syllables (about four a second, 20 dB deep) and
// pauses, of the given mean power over the stretches.
func speechlike(n, rate int, amplitude float64, at []Stretch, seed uint64) []float32 {
	rnd := rand.New(rand.NewPCG(seed, 5))
	e := make([]float32, n)
	sum, count := 0.0, 0
	for _, s := range at {
		from, to := int(s.From*float64(rate)), min(int(s.To*float64(rate)), n)
		for i := from; i < to; {
			length := int((0.12 + 0.2*rnd.Float64()) * float64(rate))
			peak := math.Pow(10, -0.6*rnd.Float64())
			if rnd.Float64() < 0.12 {
				length, peak = int((0.2+0.4*rnd.Float64())*float64(rate)), 0
			}
			for j := 0; j < length && i < to; j, i = j+1, i+1 {
				v := peak * (0.1 + 0.9*math.Sin(math.Pi*float64(j)/float64(length)))
				e[i] = float32(v)
				sum += v * v
				count++
			}
		}
	}
	f := float32(amplitude / math.Sqrt(sum/float64(count)))
	for i := range e {
		e[i] *= f
	}
	return e
}

// gusty is an amplitude that wanders by 3 dB standard deviation over about half
// a second.
func gusty(n, rate int, seed uint64) []float32 {
	rnd := rand.New(rand.NewPCG(seed, 9))
	e := make([]float32, n)
	step := rate / 100
	a := math.Exp(-0.01 / 0.5)
	v, next := rnd.NormFloat64(), 0.0
	for i := 0; i < n; i += step {
		next = a*v + math.Sqrt(1-a*a)*rnd.NormFloat64()
		for j := 0; j < step && i+j < n; j++ {
			x := v + (next-v)*float64(j)/float64(step)
			e[i+j] = float32(math.Pow(10, 3*x/20))
		}
		v = next
	}
	return e
}
