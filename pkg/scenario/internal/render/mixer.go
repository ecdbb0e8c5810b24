package render

import "alidade/pkg/spectral"

// Mono is a signal that is given out from its first frame on.
type Mono interface {
	// next writes the next len(dst) frames.
	Next(dst []float64)
}

// Bank is the responses from some inputs to some outputs:
// out_m[i] = Σ_j Σ_t taps[m][j][t]·in_j[i-start-t].
type Bank struct {
	Start int           // delay of the first tap, frames
	Taps  [][][]float64 // Taps[m][j][t], all of one length
}

// Outputs is the number of outputs.
func (b *Bank) Outputs() int { return len(b.Taps) }

// Inputs is the number of inputs.
func (b *Bank) Inputs() int { return len(b.Taps[0]) }

// Length is the number of taps.
func (b *Bank) Length() int { return len(b.Taps[0][0]) }

// Response returns Σ_t taps[m][j][t]·e^{-jω(start+t)}, ω in radians a sample.
func (b *Bank) Response(m, j int, omega float64) complex128 {
	return TapResponse(b.Taps[m][j], b.Start, omega)
}

// Emitter adds what it sounds like at the microphones, frame after frame.
type Emitter interface {
	// add adds the next frames to dst, dst[m][i]; all rows are hopFrames long.
	Add(dst [][]float64)
}

// HopFrames is how many frames of the sound field are computed at a time.
const HopFrames = 2048

// Mixer runs inputs through a filter bank by overlap-save.
type Mixer struct {
	bank  *Bank
	in    []Mono
	fft   *spectral.FFT[float64]
	fresh int // frames of each block that are new

	spectra    [2][][]float64 // real and imaginary bins of taps, [m·J+j]
	window     [][]float64    // window[j], the last n frames of input j
	inRe, inIm [][]float64    // bins of the windows
	re, im     []float64
	time       []float64
	out        [][]float64 // out[m], frames at..fresh still to be given
	at         int
}

// NewMixer returns a mixer whose first frame out needs the frame
// first - start - length + 1 of the inputs as their first: see Lead.
func NewMixer(bank *Bank, in []Mono) *Mixer {
	length := bank.Length()
	n := 1024
	for n < 4*length && n < 4096 || n < 2*length {
		n *= 2
	}
	x := &Mixer{bank: bank, in: in, fft: plan64(n), fresh: n - length + 1}
	outputs, inputs, bins := bank.Outputs(), bank.Inputs(), n/2+1
	padded := make([]float64, n)
	for m := range outputs {
		for j := range inputs {
			re, im := make([]float64, bins), make([]float64, bins)
			clear(padded)
			copy(padded, bank.Taps[m][j])
			x.fft.Forward(re, im, padded)
			x.spectra[0], x.spectra[1] = append(x.spectra[0], re), append(x.spectra[1], im)
		}
	}
	rows := func(count, size int) [][]float64 {
		r := make([][]float64, count)
		for i := range r {
			r[i] = make([]float64, size)
		}
		return r
	}
	x.window, x.inRe, x.inIm = rows(inputs, n), rows(inputs, bins), rows(inputs, bins)
	x.re, x.im, x.time = make([]float64, bins), make([]float64, bins), make([]float64, n)
	x.out, x.at = rows(outputs, x.fresh), x.fresh
	for j, s := range in {
		s.Next(x.window[j][n-length+1:]) // the past of the first frame
	}
	return x
}

// Lead is how many frames before its first frame a bank needs its inputs from.
func (b *Bank) Lead() int64 { return int64(b.Start + b.Length() - 1) }

// Add implements Emitter.
func (x *Mixer) Add(dst [][]float64) {
	for done := 0; done < len(dst[0]); {
		if x.at == x.fresh {
			x.run()
		}
		n := min(x.fresh-x.at, len(dst[0])-done)
		for m := range dst {
			to, from := dst[m][done:done+n], x.out[m][x.at:x.at+n]
			for i, v := range from {
				to[i] += v
			}
		}
		x.at += n
		done += n
	}
}

// run computes the next fresh frames of every output.
func (x *Mixer) run() {
	n := x.fft.Len()
	for j, s := range x.in {
		w := x.window[j]
		copy(w, w[x.fresh:])
		s.Next(w[n-x.fresh:])
		x.fft.Forward(x.inRe[j], x.inIm[j], w)
	}
	inputs := len(x.in)
	for m := range x.out {
		clear(x.re)
		clear(x.im)
		for j := range inputs {
			hr, hi := x.spectra[0][m*inputs+j], x.spectra[1][m*inputs+j]
			multiplyAdd(x.re, x.im, hr, hi, x.inRe[j], x.inIm[j])
		}
		x.fft.Inverse(x.time, x.re, x.im)
		copy(x.out[m], x.time[n-x.fresh:])
	}
	x.at = 0
}

// multiplyAdd adds the complex products a·b to re, im.
func multiplyAdd(re, im, ar, ai, br, bi []float64) {
	im, ar, ai, br, bi = im[:len(re)], ar[:len(re)], ai[:len(re)], br[:len(re)], bi[:len(re)]
	for k := range re {
		re[k] += ar[k]*br[k] - ai[k]*bi[k]
		im[k] += ar[k]*bi[k] + ai[k]*br[k]
	}
}

// plan64 returns a transform of a size that the limits of a scenario keep legal.
func plan64(n int) *spectral.FFT[float64] {
	f, err := spectral.NewFFT[float64](n)
	if err != nil {
		panic("scenario: " + err.Error())
	}
	return f
}

// filtered is a mono signal through one filter.
type filtered struct {
	Mixer *Mixer
	row   [1][]float64
}

// NewFiltered returns taps convolved with in, whose first frame must be
// len(taps)-1 frames before the first of the result.
func NewFiltered(taps []float64, in Mono) *filtered {
	return &filtered{Mixer: NewMixer(&Bank{Taps: [][][]float64{{taps}}}, []Mono{in})}
}

// Next implements Mono.
func (f *filtered) Next(dst []float64) {
	clear(dst)
	f.row[0] = dst
	f.Mixer.Add(f.row[:])
}
