package beam

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/delay"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// Task is what a design is asked for. Every field must be set but
// UndoSpreading.
type Task struct {
	Mics      []rig.Point // the microphones in use, metres
	Reference rig.Point   // the point whose sound the output reproduces
	Look      acoustics.Wave
	Speed     float64 // of sound, m/s
	Rate      int     // frames per second
	FFTSize   int     // N, a power of two; the weights have N/2+1 bins
	// UndoSpreading makes Tapered undo the level differences of a near source.
	// The other designs always do: to them the steering vector is what the
	// source sends.
	UndoSpreading bool
}

// maxFFTSize bounds Task.FFTSize.
const maxFFTSize = 1 << 16

// Validate reports everything that is wrong with the task.
func (t Task) Validate() error {
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("beam: "+format, args...)) }
	if len(t.Mics) == 0 {
		fault("no microphones")
	}
	if !(t.Speed > 0) || math.IsInf(t.Speed, 0) {
		fault("speed of sound %g m/s", t.Speed)
	}
	if t.Rate <= 0 {
		fault("rate %d frames per second", t.Rate)
	}
	if t.FFTSize < 16 || t.FFTSize > maxFFTSize || t.FFTSize&(t.FFTSize-1) != 0 {
		fault("transform of %d points: want a power of two from 16 to %d", t.FFTSize, maxFFTSize)
	}
	if t.Look == nil {
		fault("no direction or point to steer to")
	} else if t.Speed > 0 {
		for m, p := range t.Mics {
			if x := t.Look.Delay(p, t.Reference, t.Speed); math.IsNaN(x) || math.IsInf(x, 0) {
				fault("microphone %d: the steered wave arrives %g s after the reference point", m+1, x)
			}
			if g := t.Look.Spreading(p, t.Reference); !(g > 1e-6 && g < 1e6) {
				fault("microphone %d: level of the source %g times that at the reference point: the point steered to is a microphone or the reference point", m+1, g)
			}
		}
		if n := float64(t.FFTSize) / float64(t.Rate); len(faults) == 0 && rig.Spread(t.Mics).Extent/t.Speed > n/4 {
			fault("transform of %d points lasts %.1f ms: want at least four times the %.1f ms that sound takes over the rig", t.FFTSize, 1000*n, 1000*rig.Spread(t.Mics).Extent/t.Speed)
		}
	}
	return errors.Join(faults...)
}

// Hz returns the frequency of bin k.
func (t Task) Hz(k int) float64 { return float64(k) * float64(t.Rate) / float64(t.FFTSize) }

// Design finds weights.
type Design interface {
	Weights(t Task) (*Weights, error)
}

// Weights are the weights of a beam y = wᴴx, bin by bin.
type Weights struct {
	Task Task
	W    []complex128 // w[k*M+m], k = 0..N/2

	// Loading is the diagonal loading of every bin, as a part of the mean
	// power of the microphones; nil for designs without.
	Loading []float64
	// Held says for every bin whether the nulls asked for are exact there; nil
	// if none was asked for. Where they would cost more white noise gain than
	// the floor allows they are only as deep as it allows.
	Held []bool

	level []float64 // level[m] of the steered source that the constraint means
	rest  []float64 // amplitudes of the aligned microphones to fade to at Nyquist
}

// newWeights returns weights of zeros for a valid task.
func newWeights(t Task) *Weights {
	w := &Weights{Task: t, W: make([]complex128, (t.FFTSize/2+1)*len(t.Mics))}
	w.level, w.rest = make([]float64, len(t.Mics)), make([]float64, len(t.Mics))
	return w
}

// Bins is the number of bins, N/2+1.
func (w *Weights) Bins() int { return w.Task.FFTSize/2 + 1 }

// Bin returns the weights of bin k, one a microphone, shared with W.
func (w *Weights) Bin(k int) []complex128 {
	m := len(w.Task.Mics)
	return w.W[k*m : (k+1)*m : (k+1)*m]
}

// WhiteNoiseGain returns |wᴴd|²/(wᴴw) of bin k as a power ratio, d the steering
// vector of the design.
func (w *Weights) WhiteNoiseGain(k int) float64 {
	delays := acoustics.Delays(nil, w.Task.Look, w.Task.Mics, w.Task.Reference, w.Task.Speed)
	d := acoustics.Steering(nil, delays, w.level, 2*math.Pi*w.Task.Hz(k))
	var y complex128
	var power float64
	for m, v := range w.Bin(k) {
		y += complex(real(v), -imag(v)) * d[m]
		power += real(v)*real(v) + imag(v)*imag(v)
	}
	return (real(y)*real(y) + imag(y)*imag(y)) / power
}

// HeldFrom returns the lowest frequency, Hz, at which the nulls are exact; ok is
// false if there is none or no null was asked for. Above it they may have to
// give way again, where a grating lobe lies in the direction of one.
func (w *Weights) HeldFrom() (hz float64, ok bool) {
	for k, held := range w.Held {
		if held {
			return w.Task.Hz(k), true
		}
	}
	return 0, false
}

// Fit says how well filters match the weights they were made from.
type Fit struct {
	Taps int // of the frequency-dependent part, without the fractional delay
	// TruncationDB is the energy that cutting the impulse responses to Taps took
	// away, 10·log10 re all of it; -Inf if nothing.
	TruncationDB float64
	// ConstraintDB is the largest deviation of the built filters' response to
	// the steered wave from the one designed, complex, from 100 Hz to 0.8 of
	// Nyquist, 20·log10.
	ConstraintDB float64
}

// Parameters of filters built from weights.
const (
	// truncationGoalDB is the truncation that the automatic length aims at.
	truncationGoalDB = -90.0
	// fadeFrom is the part of Nyquist from which on weights fade to those of
	// delay-and-sum, and fadeBins the bin down from which they do so: at Nyquist
	// and at 0 the response of a real filter is real, so that a design cannot be
	// followed there, and its imaginary part must not jump.
	fadeFrom = 0.85
	fadeBins = 4
	// delayTaps is the length of the fractional delays.
	delayTaps = 128
	// constraintPoints is how many frequencies the constraint is checked at.
	constraintPoints = 96
)

// Filters returns real filters of limited length whose frequency response is
// the conjugate of the weights. taps is the length of the frequency-dependent
// part, a multiple of 4 and at most FFTSize; 0 takes the shortest of N/8, N/4,
// N/2 whose truncation is below -90 dB, else N.
//
// The impulse responses are found with the microphones aligned by the delays of
// the steered wave. There the distortionless constraint is a unit impulse
// whatever the frequency, so that the window which cuts them (flat over its
// middle half, with raised-cosine flanks) keeps it exactly. Fractional delays
// of 128 taps then restore the alignment. Filters of limited length run by
// linear convolution, or by overlap-save with room for them, have no circular
// effects at all.
func (w *Weights) Filters(taps int) (*Filters, Fit, error) {
	n, mics := w.Task.FFTSize, len(w.Task.Mics)
	if taps != 0 && (taps < 4 || taps > n || taps%4 != 0) {
		return nil, Fit{}, fmt.Errorf("beam: filters of %d taps from weights of %d points: want a multiple of 4 up to that", taps, n)
	}
	delays := acoustics.Delays(nil, w.Task.Look, w.Task.Mics, w.Task.Reference, w.Task.Speed)
	aligned, err := w.aligned(delays)
	if err != nil {
		return nil, Fit{}, err
	}
	fit := Fit{Taps: taps}
	if taps == 0 {
		fit.Taps = n
		for _, try := range []int{n / 8, n / 4, n / 2} {
			if try >= 4 && truncation(aligned, try) <= truncationGoalDB {
				fit.Taps = try
				break
			}
		}
	}
	fit.TruncationDB = truncation(aligned, fit.Taps)
	kernel, err := delay.NewSinc(delayTaps)
	if err != nil {
		return nil, Fit{}, fmt.Errorf("beam: fractional delay: %w", err)
	}
	f := &Filters{Rate: w.Task.Rate, Start: make([]int, mics), H: make([][]float64, mics)}
	var shift []float64
	for m := range mics {
		part, from := cut(aligned[m], fit.Taps)
		var start int
		start, shift = kernel.Taps(shift, -delays[m]*float64(w.Task.Rate))
		f.Start[m] = from + start
		f.H[m] = convolve(part, shift)
	}
	if err := f.Validate(); err != nil {
		return nil, Fit{}, err
	}
	fit.ConstraintDB = w.constraint(f, delays)
	return f, fit, nil
}

// aligned returns the impulse responses h[m][i] of the filters behind the
// alignment, circular with time 0 at index 0.
func (w *Weights) aligned(delays []float64) ([][]float64, error) {
	n, mics := w.Task.FFTSize, len(w.Task.Mics)
	fft, err := spectral.NewFFT[float64](n)
	if err != nil {
		return nil, fmt.Errorf("beam: %w", err)
	}
	re, im := make([]float64, n/2+1), make([]float64, n/2+1)
	h := make([][]float64, mics)
	for m := range mics {
		for k := range re {
			fade := 1.0
			if x := (float64(k)/float64(n/2) - fadeFrom) / (1 - fadeFrom); x > 0 {
				fade = 0.5 + 0.5*math.Cos(math.Pi*x)
			} else if k < fadeBins {
				fade = 0.5 - 0.5*math.Cos(math.Pi*float64(k)/fadeBins)
			}
			// Conjugate of w_m e^{+jωτ}.
			s, c := math.Sincos(2 * math.Pi * w.Task.Hz(k) * delays[m])
			v := w.W[k*mics+m]
			a, b := real(v)*c-imag(v)*s, real(v)*s+imag(v)*c
			re[k] = w.rest[m] + fade*(a-w.rest[m])
			im[k] = -fade * b
		}
		im[0], im[n/2] = 0, 0
		h[m] = make([]float64, n)
		fft.Inverse(h[m], re, im)
	}
	return h, nil
}

// windowAt is the window that cuts an aligned response to taps, at time i.
func windowAt(i, taps int) float64 {
	x := math.Abs(float64(i)) / (float64(taps) / 2)
	switch {
	case x <= 0.5:
		return 1
	case x >= 1:
		return 0
	}
	return 0.5 + 0.5*math.Cos(2*math.Pi*(x-0.5))
}

// cut returns the taps of a circular response from time -taps/2 on.
func cut(h []float64, taps int) (part []float64, from int) {
	part = make([]float64, taps)
	from = -taps / 2
	for t := range part {
		i := from + t
		part[t] = h[(i+len(h))%len(h)] * windowAt(i, taps)
	}
	return part, from
}

// truncation returns what cutting to taps takes away, dB re all energy.
func truncation(h [][]float64, taps int) float64 {
	var lost, all float64
	for _, hm := range h {
		n := len(hm)
		for t, v := range hm {
			i := t
			if t >= n/2 {
				i = t - n
			}
			e := v * (1 - windowAt(i, taps))
			lost += e * e
			all += v * v
		}
	}
	// Nothing but the rounding of the transform is nothing.
	if lost <= 1e-30*all {
		return math.Inf(-1)
	}
	return 10 * math.Log10(lost/all)
}

// convolve returns the linear convolution of a and b.
func convolve(a, b []float64) []float64 {
	y := make([]float64, len(a)+len(b)-1)
	for i, v := range a {
		if v == 0 {
			continue
		}
		for j, u := range b {
			y[i+j] += v * u
		}
	}
	return y
}

// constraint returns the largest deviation of the filters' response to the
// steered wave from the designed one, dB.
func (w *Weights) constraint(f *Filters, delays []float64) float64 {
	nyquist := float64(w.Task.Rate) / 2
	want := 0.0
	for m, a := range w.rest {
		want += a * w.level[m]
	}
	worst := 0.0
	var g, d []complex128
	low, high := math.Min(100, 0.1*nyquist), 0.8*nyquist
	for i := range constraintPoints {
		hz := low + (high-low)*float64(i)/(constraintPoints-1)
		g = f.Response(g, hz)
		d = acoustics.Steering(d, delays, w.level, 2*math.Pi*hz)
		var y complex128
		for m := range g {
			y += g[m] * d[m]
		}
		worst = math.Max(worst, math.Hypot(real(y)-want, imag(y)))
	}
	return 20 * math.Log10(worst)
}
