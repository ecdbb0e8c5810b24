package render

import (
	"math"
	"sync"

	"alidade/pkg/spectral"
)

// Fractional delays here are windowed sincs of our own design, so that takes
// are a witness that the delay filters under test had no hand in.

// KernelTaps and kernelBeta make the kernel of direct sound: a Kaiser window
// [Kaiser 1974] with side lobes near -130 dB, so that the largest complex
// error is below -120 dB up to 0.9 of Nyquist.
const (
	KernelTaps = 128
	kernelBeta = 13.5
)

// reflectionTaps and reflectionBeta make the shorter kernel of reflections:
// below -90 dB up to 0.85 of Nyquist.
const (
	reflectionTaps = 64
	reflectionBeta = 9.5
)

// sincTaps writes to h, whose length is even, the taps of a delay of frac
// samples, 0 <= frac < 1, on top of len(h)/2 - 1 samples.
func sincTaps(h []float64, frac, beta float64) {
	half := float64(len(h) / 2)
	norm := 1 / spectral.BesselI0(beta)
	sin := math.Sin(math.Pi * frac)
	for t := range h {
		x := float64(t) - (half - 1) - frac // from the centre, samples
		u := x / half
		w := 0.0
		if u > -1 && u < 1 {
			w = spectral.BesselI0(beta*math.Sqrt(1-u*u)) * norm
		}
		// sin(pi·x) = ±sin(pi·frac), the sign alternating with t.
		s := 1.0
		if math.Abs(x) > 1e-9 {
			s = sin / (math.Pi * x)
			if (t-len(h)/2+1)%2 == 0 {
				s = -s
			}
		}
		h[t] = s * w
	}
}

// delayTaps returns the taps of a delay of any sign, samples, and the delay of
// the first one.
func delayTaps(delay float64) (start int, h []float64) {
	whole := math.Floor(delay)
	h = make([]float64, KernelTaps)
	sincTaps(h, delay-whole, kernelBeta)
	return int(whole) - (KernelTaps/2 - 1), h
}

// Table holds a kernel at many fractions. Between them taps are interpolated
// linearly: an error of (pi/phases)²/8 at Nyquist.
type Table struct {
	Taps, phases int
	rows         []float64 // rows[p·taps+t], p = 0..phases
}

// NewTable returns a table of the kernel of taps (a multiple of 4) and a Kaiser
// parameter at a number of fractions.
func NewTable(taps, phases int, beta float64) *Table {
	k := &Table{Taps: taps, phases: phases, rows: make([]float64, (phases+1)*taps)}
	for p := range phases/2 + 1 {
		row := k.rows[p*taps : (p+1)*taps]
		sincTaps(row, float64(p)/float64(phases), beta)
		// The kernel is even: fraction 1-f is fraction f backwards.
		for t, v := range row {
			k.rows[(phases-p)*taps+taps-1-t] = v
		}
	}
	return k
}

// DirectTable returns the table of the kernel of direct sound, reflectionTable
// that of reflections: all share them.
var DirectTable = sync.OnceValue(func() *Table { return NewTable(KernelTaps, 2048, kernelBeta) })
var reflectionTable = sync.OnceValue(func() *Table { return NewTable(reflectionTaps, 512, reflectionBeta) })

// pair returns the rows around a fraction and the weight of the second.
func (k *Table) pair(frac float64) (a, b []float64, w float64) {
	at := frac * float64(k.phases)
	p := min(int(at), k.phases-1)
	return k.rows[p*k.Taps : (p+1)*k.Taps], k.rows[(p+1)*k.Taps : (p+2)*k.Taps], at - float64(p)
}

// At returns the value of x at the position whole + frac, where x[0] is the
// sample whole - taps/2 + 1 and x holds taps samples.
func (k *Table) At(x []float64, frac float64) float64 {
	a, b, w := k.pair(frac)
	// The kernel is even: the row of a delay by frac, read forwards. Four sums a
	// row, none of which waits for the one before; taps come in fours.
	var a0, a1, a2, a3, b0, b1, b2, b3 float64
	for t := 0; t < len(a); t += 4 {
		u, p, q := (*[4]float64)(x[t:]), (*[4]float64)(a[t:]), (*[4]float64)(b[t:])
		a0, a1, a2, a3 = a0+u[0]*p[0], a1+u[1]*p[1], a2+u[2]*p[2], a3+u[3]*p[3]
		b0, b1, b2, b3 = b0+u[0]*q[0], b1+u[1]*q[1], b2+u[2]*q[2], b3+u[3]*q[3]
	}
	return (1-w)*((a0+a1)+(a2+a3)) + w*((b0+b1)+(b2+b3))
}

// add adds the kernel of a delay, times amplitude[b], to each h[b], h[b][0] being
// delay 0. Taps that fall outside h are dropped.
func (k *Table) add(h [][]float64, delay float64, amplitude []float64) {
	whole := math.Floor(delay)
	a, b, w := k.pair(delay - whole)
	first := int(whole) - (k.Taps/2 - 1)
	from, to := max(0, -first), min(k.Taps, len(h[0])-first)
	if from >= to {
		return
	}
	var scratch [reflectionTaps]float64
	taps := append(scratch[:0], a[from:to]...)
	b = b[from:to]
	for t := range taps {
		taps[t] += w * (b[t] - taps[t])
	}
	for i, g := range amplitude {
		x := h[i][first+from : first+to][:len(taps)]
		for t, v := range taps {
			x[t] += g * v
		}
	}
}
