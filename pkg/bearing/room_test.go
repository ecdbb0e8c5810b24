package bearing

import (
	"math"
	"math/rand/v2"

	"alidade/pkg/rig"
)

// shoebox is a room by the image-source method [Allen & Berkley 1979, eq. 10],
// walls all alike, with their absorption from Eyring's formula. It is a second
// witness to the renderer of the scenarios: plain, and written for this test.
type shoebox struct {
	size rig.Point
	rt60 float64
	rate float64
}

func (r shoebox) beta() float64 {
	v := r.size.X * r.size.Y * r.size.Z
	s := 2 * (r.size.X*r.size.Y + r.size.Y*r.size.Z + r.size.X*r.size.Z)
	alpha := 1 - math.Exp(-24*math.Ln10/testSpeed*v/(s*r.rt60))
	return math.Sqrt(1 - alpha)
}

// sincTable holds a Hann-windowed sinc of 32 taps at 256 phases.
var sincTable = func() (t [257][32]float64) {
	for p := range t {
		f := float64(p) / 256
		for i := range t[p] {
			x := float64(i) - 15 - f
			v := 1.0
			if x != 0 {
				v = math.Sin(math.Pi*x) / (math.Pi * x)
			}
			t[p][i] = v * (0.5 + 0.5*math.Cos(math.Pi*x/16.5))
		}
	}
	return t
}()

// response is the impulse response from src to dst, gain 1 at 1 m.
func (r shoebox) response(src, dst rig.Point) []float64 {
	n := int(math.Max(r.rt60, 0.02) * 1.0 * r.rate)
	reach := float64(n) / r.rate * testSpeed
	h := make([]float64, n+64)
	beta := r.beta()
	nx, ny, nz := int(reach/(2*r.size.X))+1, int(reach/(2*r.size.Y))+1, int(reach/(2*r.size.Z))+1
	for mx := -nx; mx <= nx; mx++ {
		for qx := range 2 {
			dx := float64(1-2*qx)*src.X + 2*float64(mx)*r.size.X - dst.X
			for my := -ny; my <= ny; my++ {
				for qy := range 2 {
					dy := float64(1-2*qy)*src.Y + 2*float64(my)*r.size.Y - dst.Y
					if dx*dx+dy*dy > reach*reach {
						continue
					}
					for mz := -nz; mz <= nz; mz++ {
						for qz := range 2 {
							dz := float64(1-2*qz)*src.Z + 2*float64(mz)*r.size.Z - dst.Z
							d := math.Sqrt(dx*dx + dy*dy + dz*dz)
							if d > reach {
								continue
							}
							order := abs(mx-qx) + abs(mx) + abs(my-qy) + abs(my) + abs(mz-qz) + abs(mz)
							if r.rt60 == 0 && order > 0 {
								continue
							}
							t := d / testSpeed * r.rate
							whole := math.Floor(t)
							row := &sincTable[int((t-whole)*256+0.5)]
							a := math.Pow(beta, float64(order)) / d
							at := int(whole) // 15 samples late, for all alike
							for i, v := range row {
								if at+i < len(h) {
									h[at+i] += a * v
								}
							}
						}
					}
				}
			}
		}
	}
	return h
}

func abs(n int) int {
	if n < 0 {
		return -n
	}
	return n
}

// convolve returns the first len(x) samples of x * h.
func convolve(x, h []float64) []float64 {
	f := planOf(len(x) + len(h))
	re, im := spectrum(f, x)
	hr, hi := spectrum(f, h)
	for k := range re {
		re[k], im[k] = re[k]*hr[k]-im[k]*hi[k], re[k]*hi[k]+im[k]*hr[k]
	}
	y := make([]float64, f.Len())
	f.Inverse(y, re, im)
	return y[:len(x)]
}

// in adds signal s from a place in the room, the rig's origin at centre.
func (m *mixture) in(r shoebox, s []float64, source, centre rig.Point, gain float64) *mixture {
	d := source.Distance(centre)
	for c, p := range m.mics {
		y := convolve(s, r.response(source, centre.Add(p)))
		for i, v := range y {
			m.x[c][i] += gain * d * v
		}
	}
	return m
}

// bursts is noise with the ups and downs of speech: syllables of 80 to 300 ms
// with pauses of 30 to 400 ms, falling with frequency, mean square about 1.
func bursts(n int, rate float64, seed uint64) []float64 {
	x := white(n, seed)
	r := rand.New(rand.NewPCG(seed, 77))
	low := 0.0
	for i := 0; i < n; {
		on := int((0.08 + 0.22*r.Float64()) * rate)
		off := int((0.03 + 0.37*r.Float64()*r.Float64()) * rate)
		g := math.Exp(0.5 * r.NormFloat64())
		tilt := 0.5 + 0.4*r.Float64()
		for k := 0; k < on+off && i < n; k++ {
			e := 0.0
			if k < on {
				e = math.Sin(math.Pi * float64(k) / float64(on))
			}
			low = tilt*low + (1-tilt)*x[i]
			x[i] = 4 * g * e * low
			i++
		}
	}
	return x
}
