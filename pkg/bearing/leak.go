package bearing

import "math"

// A line of a Hann frame holds side lobes of stronger lines. Their phase is that
// of the line they come from, not of their own frequency: on the noise of a
// microphone they are nothing, but of a clean tone they are most of the lines,
// and the phase transform counts every line alike.
const (
	leakNear = 3   // lines nearer than this are within the main lobe
	leakFar  = 160 // side lobes farther out are below -140 dB, the rounding of a transform
	leakPart = 4   // a line holds more than side lobes from this many times them on
)

// hannLeak is the greatest power of a Hann window's side lobes at d lines from
// the strongest line of a tone, re that line: the envelope of
// sin(πx)/(πx·(1-x²)) [Harris 1978] at d - 1/2, since a tone lies up to half a
// line off, where its strongest line is 1.42 dB down.
var hannLeak = func() (v [leakFar + 1]float64) {
	for d := leakNear; d <= leakFar; d++ {
		x := float64(d) - 0.5
		a := 1 / (math.Pi * x * (x*x - 1))
		v[d] = a * a * math.Pow(10, 0.142)
	}
	return v
}()

// leaks marks the lines whose power, over the living microphones, is no more
// than side lobes of other lines explain.
func (l *looker) leaks(sum *crossSum) {
	K := l.bins
	power := l.w[:K]
	clear(power)
	for m, alive := range l.alive {
		if alive {
			addTo(power, sum.auto[m*K:m*K+K])
		}
	}
	for k, v := range power {
		if sum.weight[k] > 0 {
			power[k] = v / sum.weight[k] // frames count differently from line to line
		}
	}
	for k, v := range power {
		side := 0.0
		for d := leakNear; d <= leakFar; d++ {
			if k >= d {
				side = max(side, power[k-d]*hannLeak[d])
			}
			if k+d < K {
				side = max(side, power[k+d]*hannLeak[d])
			}
		}
		l.leaked[k] = v < leakPart*side
	}
}
