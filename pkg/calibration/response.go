package calibration

import (
	"fmt"
	"math"
	"math/cmplx"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// Response is how a channel differs from the mean of all over frequency, its
// gain and delay taken out, and a short filter that undoes it.
type Response struct {
	// Taps are the filter, an odd number, the middle one at no delay.
	Taps []float64
	// Bands are the octaves that the take shows.
	Bands []ResponseBand
}

// ResponseBand is one octave of a response.
type ResponseBand struct {
	CentreHz float64 // exact, base 10
	LevelDB  float64 // of the channel against the mean of all, gain taken out
	PhaseDeg float64
	Std      float64 // standard error of LevelDB, dB
	LeftDB   float64 // what the filter leaves of LevelDB
}

// The shape and the limits of response filters.
const (
	responseSeconds = 0.0013 // length: what it can undo is as wide as 1/length, 770 Hz
	responseMostDB  = 12.0   // largest correction
	responseStdDB   = 0.3    // largest standard error of a third of an octave that is used
	responseRounds  = 8
	responseOctaves = 2.0 // least width of the band that is used
)

// responses finds the responses of the channels. A take that does not carry
// them is a *RefusedError.
func (f *factor) responses(r *Relative) error {
	n := len(f.p)
	// A third of an octave at the middle, as a number of lines, but not finer
	// than what a filter of that length can follow.
	reach := func(j int) int {
		third := 0.115 * f.c.hz(f.c.from+j)
		return max(1, int(math.Max(third, 0.25/responseSeconds)*float64(f.c.size)/f.c.rate))
	}
	h := make([][]complex128, len(f.heard)) // so far, relative to gain and delay
	for i := range h {
		h[i] = make([]complex128, n)
		for j := range h[i] {
			h[i][j] = 1
		}
	}
	std := make([]float64, n) // of the worst channel, dB
	// Each channel against the sum of the others, which know their own responses
	// better each time.
	for round := range responseRounds {
		step := make([][]complex128, len(f.heard))
		for i, m := range f.heard {
			f.instrument(m)
			re, im, own, info := make([]float64, n+1), make([]float64, n+1), make([]float64, n+1), make([]float64, n+1)
			cs, sn := f.cos[m], f.sn[m]
			for j := range n {
				q := f.weights(m, j)
				size := f.g[m] * (cs[j]*cs[j] + sn[j]*sn[j])
				re[j+1] = re[j] + q*(f.cr[j]*cs[j]-f.ci[j]*sn[j])
				im[j+1] = im[j] + q*(f.cr[j]*sn[j]+f.ci[j]*cs[j])
				own[j+1] = own[j] + q*f.p[j]*f.b[j]*size
				info[j+1] = info[j] + q*math.Max(0, f.p[j])*f.b[j]*size*f.g[m]
			}
			step[i] = make([]complex128, n)
			for j := range n {
				a, b := max(0, j-reach(j)), min(n, j+reach(j)+1)
				step[i][j] = 1
				if d := own[b] - own[a]; d != 0 {
					if v := complex((re[b]-re[a])/d, (im[b]-im[a])/d); cmplx.Abs(v) > 0.05 && cmplx.Abs(v) < 20 {
						step[i][j] = v
					}
				}
				if round > 0 {
					continue
				}
				v := math.Inf(1)
				if x := info[b] - info[a]; x > 0 {
					v = 20 / math.Ln10 / math.Sqrt(2*f.c.weight*x)
				}
				std[j] = math.Max(std[j], v)
			}
		}
		// Against the mean of all, line by line: what all share is the source's.
		for j := range n {
			mean := complex(0, 0)
			for i := range h {
				mean += cmplx.Log(step[i][j]) / complex(float64(len(h)), 0)
			}
			for i, m := range f.heard {
				v := cmplx.Exp(cmplx.Log(step[i][j]) - mean)
				h[i][j] *= v
				a := complex(f.cos[m][j], -f.sn[m][j]) * v
				f.cos[m][j], f.sn[m][j] = real(a), -imag(a)
			}
		}
		f.source()
	}
	// The widest run of lines that are known well enough.
	from, to := 0, 0
	for a := 0; a < n; {
		b := a
		for b < n && std[b] <= responseStdDB {
			b++
		}
		if b > a && (to == from || f.c.hz(f.c.from+b)*f.c.hz(f.c.from+from) > f.c.hz(f.c.from+to)*f.c.hz(f.c.from+a)) {
			from, to = a, b
		}
		a = max(b, a+1)
	}
	if octaves := math.Log2(f.c.hz(f.c.from+max(to-1, 0)) / f.c.hz(f.c.from+from)); to == from || octaves < responseOctaves {
		return &RefusedError{
			Why:  fmt.Sprintf("the take does not carry responses: over less than %.0f octaves is a third of an octave known within %.1f dB", responseOctaves, responseStdDB),
			Help: "play wideband noise or a sweep, longer or louder",
		}
	}
	for i, m := range f.heard {
		taps, err := f.undo(h[i], from, to)
		if err != nil {
			return err
		}
		r.Channels[m].Response = &Response{Taps: taps, Bands: f.octaves(h[i], std, taps, from, to)}
	}
	return nil
}

// undo returns the taps of a filter that undoes h over the lines from..to. Below
// them the correction keeps its level and loses its phase towards 0 Hz, above
// them it goes on as it ended.
func (f *factor) undo(h []complex128, from, to int) ([]float64, error) {
	size := 1
	for size < 8*int(responseSeconds*f.c.rate) {
		size *= 2
	}
	size = max(size, 256)
	fft, err := spectral.NewFFT[float64](size)
	if err != nil {
		return nil, err
	}
	low, high := f.c.hz(f.c.from+from), f.c.hz(f.c.from+to-1)
	wanted := func(hz float64) complex128 {
		at := math.Min(math.Max(hz, low), high)
		x := at*float64(f.c.size)/f.c.rate - float64(f.c.from)
		j := min(max(int(x), from), to-1)
		v := h[j]
		if j+1 < to {
			t := complex(math.Min(math.Max(x-float64(j), 0), 1), 0)
			v = h[j]*(1-t) + h[j+1]*t
		}
		v = 1 / v
		level := math.Min(math.Max(20*math.Log10(cmplx.Abs(v)), -responseMostDB), responseMostDB)
		phase := cmplx.Phase(v)
		switch {
		case hz < low:
			phase *= hz / low
		case hz > high:
			phase *= math.Max(0, (f.c.rate/2-hz)/(f.c.rate/2-high))
		}
		return cmplx.Rect(math.Pow(10, level/20), phase)
	}
	re, im, x := make([]float64, fft.Bins()), make([]float64, fft.Bins()), make([]float64, size)
	for k := range re {
		v := wanted(float64(k) * f.c.rate / float64(size))
		re[k], im[k] = real(v), imag(v)
	}
	im[0], im[len(im)-1] = 0, 0
	fft.Inverse(x, re, im)
	half := max(8, int(responseSeconds*f.c.rate/2))
	taps := make([]float64, 2*half+1)
	for t := -half; t <= half; t++ {
		// The middle half of the taps stands as it is, then a cosine.
		w := 1.0
		if u := math.Abs(float64(t)) / float64(half+1); u > 0.5 {
			c := math.Cos(math.Pi * (u - 0.5))
			w = c * c
		}
		// As a rig file writes them.
		taps[t+half] = math.Round(1e6*w*x[(t+size)%size]) / 1e6
	}
	return taps, nil
}

// octaves sums a response up by octaves that lie within from..to.
func (f *factor) octaves(h []complex128, std, taps []float64, from, to int) []ResponseBand {
	var list []ResponseBand
	half := (len(taps) - 1) / 2
	for k := -6; k <= 5; k++ {
		centre := 1000 * math.Pow(10, 0.3*float64(k))
		a, b := centre*math.Pow(10, -0.15), centre*math.Pow(10, 0.15)
		var sum, left complex128
		worst, n := 0.0, 0.0
		first, last := math.Inf(1), 0.0
		for j := from; j < to; j++ {
			hz := f.c.hz(f.c.from + j)
			if hz < a || hz >= b {
				continue
			}
			var filter complex128
			for t, v := range taps {
				filter += complex(v, 0) * cmplx.Rect(1, -2*math.Pi*hz/f.c.rate*float64(t-half))
			}
			sum += cmplx.Log(h[j])
			left += cmplx.Log(h[j] * filter)
			worst = math.Max(worst, std[j])
			first, last = math.Min(first, hz), math.Max(last, hz)
			n++
		}
		if n == 0 || first > a*1.12 || last < b/1.12 {
			continue // in part
		}
		const dB = 20 / math.Ln10
		list = append(list, ResponseBand{
			CentreHz: centre, LevelDB: dB * real(sum) / n, PhaseDeg: imag(sum) / n * 180 / math.Pi, Std: worst, LeftDB: dB * real(left) / n,
		})
	}
	return list
}

// Undo returns a source whose channel ch is that of src filtered by taps[ch], an
// odd number, the middle one at no delay; nil taps leave the channel as it is.
// Outside src is silence, and the length is that of src. It panics unless there
// is one set of taps a channel.
func Undo(src audio.Source, taps [][]float64) (audio.Source, error) {
	channels := src.Format().Channels
	if len(taps) != channels {
		panic(fmt.Sprintf("calibration: %d sets of taps for %d channels", len(taps), channels))
	}
	reach := 0
	for ch, t := range taps {
		if t != nil && len(t)%2 == 0 {
			return nil, fmt.Errorf("calibration: channel %d: %d taps, want an odd number", ch+1, len(t))
		}
		reach = max(reach, len(t)/2)
	}
	reversed := make([][]float32, channels)
	for ch, t := range taps {
		for i := len(t) - 1; i >= 0; i-- {
			reversed[ch] = append(reversed[ch], float32(t[i]))
		}
	}
	const frames = 2048
	return audio.Hops(src, audio.Hop{Channels: channels, Frames: frames, Before: reach, After: reach}, func(out, in audio.Block, _ int64) error {
		for ch := range channels {
			x, y := in.Channel(ch), out.Channel(ch)
			half := len(reversed[ch]) / 2
			if reversed[ch] == nil {
				copy(y, x[reach:])
				continue
			}
			clear(y)
			kernel.AddFIR(y, x[reach-half:reach-half+frames+2*half], reversed[ch])
		}
		return nil
	}), nil
}
