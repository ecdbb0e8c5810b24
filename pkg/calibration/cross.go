package calibration

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/delay"
	"alidade/pkg/spectral"
)

// cross are the cross-spectra of all pairs of channels over the lines
// from..to (half-open) of transforms of size points.
type cross struct {
	mics, size, from, to int
	rate                 float64
	re, im               []float64 // Σ X_m·conj(X_n) at [pair(m,n)*lines+k-from], m >= n
	frames               int
	// weight is how many independent observations stand behind a line.
	weight float64
}

// maxCross bounds the numbers of the cross-spectra: 256 MiB.
const maxCross = 1 << 25

// newCross returns cross-spectra of nothing over fromHz..toHz.
func newCross(mics, size int, rate, fromHz, toHz float64) (*cross, error) {
	df := rate / float64(size)
	c := &cross{mics: mics, size: size, rate: rate}
	c.from = max(1, int(math.Ceil(fromHz/df)))
	c.to = min(size/2, int(math.Floor(toHz/df))+1)
	if c.to-c.from < 4 {
		return nil, fmt.Errorf("calibration: fewer than 4 lines, %.3g Hz apart, lie between %g and %g Hz", df, fromHz, toHz)
	}
	n := c.pair(mics, 0) * c.lines()
	if 2*n > maxCross {
		return nil, fmt.Errorf("calibration: the cross-spectra of %d microphones over %d lines are %d numbers, above %d", mics, c.lines(), 2*n, maxCross)
	}
	c.re, c.im = make([]float64, n), make([]float64, n)
	return c, nil
}

func (c *cross) lines() int        { return c.to - c.from }
func (c *cross) pair(m, n int) int { return m*(m+1)/2 + n }

// hz is the frequency of line k of from..to.
func (c *cross) hz(k int) float64 { return float64(k) * c.rate / float64(c.size) }

// omega is 2π times the frequency of line j counted from from.
func (c *cross) omega(j int) float64 { return 2 * math.Pi * c.hz(c.from+j) }

// add adds the spectra of one frame: re[m][k], im[m][k].
func (c *cross) add(re, im [][]float32) {
	lines := c.lines()
	for m := range c.mics {
		mr, mi := re[m][c.from:c.to], im[m][c.from:c.to]
		for n := range m + 1 {
			nr, ni := re[n][c.from:c.to], im[n][c.from:c.to]
			at := c.pair(m, n) * lines
			tr, ti := c.re[at:at+lines], c.im[at:at+lines]
			for k := range tr {
				a, b, p, q := float64(mr[k]), float64(mi[k]), float64(nr[k]), float64(ni[k])
				tr[k] += a*p + b*q
				ti[k] += b*p - a*q
			}
		}
	}
	c.frames++
}

// row returns the cross-spectrum of m and n over the lines and the sign of its
// imaginary part.
func (c *cross) row(m, n int) (re, im []float64, sign float64) {
	sign = 1
	if m < n {
		m, n, sign = n, m, -1
	}
	at := c.pair(m, n) * c.lines()
	return c.re[at : at+c.lines()], c.im[at : at+c.lines()], sign
}

// power returns the power spectrum of channel m, shared.
func (c *cross) power(m int) []float64 {
	re, _, _ := c.row(m, m)
	return re
}

// frameSize is the size of a transform for takes of the rate and so many
// microphones: about 60 ms, shorter for many microphones, whose cross-spectra
// would fill the memory.
func frameSize(rate float64, mics int) int {
	size := 256
	for float64(2*size) <= 0.09*rate && size < 16384 {
		size *= 2
	}
	for m := 32; m < mics; m *= 2 {
		size /= 2
	}
	return max(size, 256)
}

// alignTaps are the taps of the fractional delays that line the channels up:
// their error is below -120 dB up to 0.8 of Nyquist.
const alignTaps = 64

// aligned returns src with channel m made earlier by late[m] seconds.
func aligned(src audio.Source, late []float64) (audio.Source, error) {
	kernel, err := delay.NewSinc(alignTaps)
	if err != nil {
		return nil, err
	}
	shift := make([]float64, len(late))
	for m, v := range late {
		shift[m] = -v
	}
	return delay.NewShift(src, kernel, shift)
}

// maxWork bounds the multiplications of the cross-spectra of a take; of longer
// takes evenly spread frames are taken.
const maxWork = 4e9

// loudShare is the part of the loud frames' power from which a frame counts as
// one in which the source sounds, and loudQuantile how loud frames are found.
const (
	loudShare    = 0.1
	loudQuantile = 0.99
)

// steady returns the cross-spectra of the frames in which the source sounds,
// with the channels lined up by late, and the share of frames taken.
func (l *listening) steady(late []float64) (*cross, float64, error) {
	rate := float64(l.format.Rate)
	size := frameSize(rate, l.format.Channels)
	c, err := newCross(l.format.Channels, size, rate, l.fromHz, l.toHz)
	if err != nil {
		return nil, 0, err
	}
	window := spectral.Periodic(size, spectral.Hann)
	run := func(emit func(frame int64, s *spectral.Spectra) error) error {
		src, err := l.open()
		if err != nil {
			return err
		}
		if src, err = aligned(src, late); err != nil {
			return err
		}
		stft, err := spectral.NewSTFT(l.format.Channels, size, size/2, window, emit)
		if err != nil {
			return err
		}
		_, err = audio.Copy(src, 4096, stft)
		return err // without the last frame, which is not whole
	}
	// The mean over the channels of the log of the power in the band: which frames
	// are loud does not change with how the channels are lined up.
	look := func(_ int64, s *spectral.Spectra) error {
		sum := 0.0
		for m := range s.Channels() {
			p := 1e-30
			re, im := s.Re[m][c.from:c.to], s.Im[m][c.from:c.to]
			for k := range re {
				p += float64(re[k])*float64(re[k]) + float64(im[k])*float64(im[k])
			}
			sum += math.Log(p)
		}
		l.level = append(l.level, sum/float64(s.Channels()))
		return nil
	}
	if l.level == nil {
		if err := run(look); err != nil {
			return nil, 0, err
		}
	}
	level := l.level
	if len(level) == 0 {
		return nil, 0, &RefusedError{Why: fmt.Sprintf("the take is shorter than one frame of %.0f ms", 1000*float64(size)/rate)}
	}
	sorted := slices.Clone(level)
	slices.Sort(sorted)
	threshold := sorted[int(loudQuantile*float64(len(sorted)-1))] + math.Log(loudShare)
	taken := make([]bool, len(level))
	loud := 0
	for j, v := range level {
		if taken[j] = v >= threshold; taken[j] {
			loud++
		}
	}
	// Of very many, evenly spread ones.
	most := max(16, int(maxWork/float64(c.pair(c.mics, 0)*c.lines())))
	seen := 0
	for j := range taken {
		if taken[j] {
			taken[j] = loud <= most || (seen+1)*most/loud > seen*most/loud
			seen++
		}
	}
	err = run(func(j int64, s *spectral.Spectra) error {
		if taken[j] {
			c.add(s.Re, s.Im)
		}
		return nil
	})
	if err != nil {
		return nil, 0, err
	}
	// Hann windows that overlap by half, and lines 1.5 widths apart in effect:
	// about half an observation a frame and line [Welch 1967].
	c.weight = 0.5 * float64(c.frames)
	return c, float64(loud) / float64(len(level)), nil
}
