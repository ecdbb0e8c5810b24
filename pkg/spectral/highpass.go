package spectral

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
)

// HighPass returns a source that is src without what lies below cutoffHz: a
// Butterworth filter of fourth order, 24 dB an octave, -3.01 dB at the cutoff,
// as two biquads by the bilinear transform with the cutoff prewarped
// [Oppenheim & Schafer 1989, 7.1], in float64. It is causal, with no look-ahead
// and no group delay taken out: the phase lead is 180° at the cutoff and
// 2.6131·cutoff/f radians, about 150°·cutoff/f, far above it; the group delay
// there is 0.416·cutoff/f² seconds, 0.33 ms at 250 Hz for 50 Hz. All channels
// get the same filter, so delays between them stay as they are. It returns an
// error unless 0 < cutoffHz < rate/2.
func HighPass(src audio.Source, cutoffHz float64) (audio.Source, error) {
	f := src.Format()
	if !(cutoffHz > 0 && cutoffHz < float64(f.Rate)/2) {
		return nil, fmt.Errorf("spectral: high-pass at %g Hz: want more than 0 and less than %g Hz, half the rate", cutoffHz, float64(f.Rate)/2)
	}
	h := &highPass{src: src, state: make([][4]float64, f.Channels)}
	w := math.Tan(math.Pi * cutoffHz / float64(f.Rate))
	for k, angle := range []float64{math.Pi / 8, 3 * math.Pi / 8} {
		// s²/(s² + s/Q + 1) with 1/Q = 2·cos of the pole's angle.
		damping := 2 * math.Cos(angle)
		norm := 1 / (1 + damping*w + w*w)
		h.gain[k] = norm
		h.a1[k] = 2 * (w*w - 1) * norm
		h.a2[k] = (1 - damping*w + w*w) * norm
	}
	return h, nil
}

type highPass struct {
	src          audio.Source
	gain, a1, a2 [2]float64
	state        [][4]float64
}

// Format implements audio.Source.
func (h *highPass) Format() audio.Format { return h.src.Format() }

// Read implements audio.Source.
func (h *highPass) Read(dst audio.Block) (int, error) {
	n, err := h.src.Read(dst)
	g0, p0, q0 := h.gain[0], h.a1[0], h.a2[0]
	g1, p1, q1 := h.gain[1], h.a1[1], h.a2[1]
	for ch := range h.state {
		s := h.state[ch]
		x := dst.Channel(ch)[:n]
		for i, v := range x {
			// Transposed direct form II, numerator 1 - 2z⁻¹ + z⁻².
			u := g0 * float64(v)
			y := u + s[0]
			s[0] = -2*u - p0*y + s[1]
			s[1] = u - q0*y
			u = g1 * y
			z := u + s[2]
			s[2] = -2*u - p1*z + s[3]
			s[3] = u - q1*z
			x[i] = float32(z)
			// After the sound is gone the state decays into numbers that the
			// processor handles a hundred times slower.
			if math.Abs(s[1]) < 1e-60 && math.Abs(s[3]) < 1e-60 {
				s = settle(s)
			}
		}
		h.state[ch] = s
	}
	return n, err
}

// settle sets a state to zero where all of it is below 1e-60, -1200 dB.
func settle(s [4]float64) [4]float64 {
	for _, v := range s {
		if math.Abs(v) >= 1e-60 {
			return s
		}
	}
	return [4]float64{}
}
