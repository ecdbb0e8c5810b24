package quality

import (
	"math"
	"slices"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// lines are the long spectra of all channels: mean power spectra [Welch 1967],
// fine enough to tell mains lines, and the cross-spectra of neighbours from 20
// to 120 Hz.
type lines struct {
	rate, size int
	stft       *spectral.STFT
	frames     int
	power      [][]float64 // [ch][k]
	near       [][]int     // [ch], up to four nearest
	re, im     [][]float64 // [ch][n·bins+k]
	from, to   int         // bins from 20 to 120 Hz
}

// neighbours is how many microphones near each are compared with it.
const neighbours = 4

func newLines(at []rig.Point, rate int) (*lines, error) {
	l := &lines{rate: rate, size: 4096}
	for float64(l.size) < 0.6*float64(rate) && l.size < spectral.MaxSize {
		l.size *= 2
	}
	df := float64(rate) / float64(l.size)
	l.from, l.to = int(math.Ceil(20/df)), int(120/df)+1
	for m := range at {
		l.power = append(l.power, make([]float64, l.size/2+1))
		var order []int
		for j := range at {
			if j != m {
				order = append(order, j)
			}
		}
		slices.SortStableFunc(order, func(a, b int) int {
			return int(math.Copysign(1, at[a].Distance(at[m])-at[b].Distance(at[m])+1e-12))
		})
		order = order[:min(len(order), neighbours)]
		l.near = append(l.near, order)
		l.re = append(l.re, make([]float64, len(order)*(l.to-l.from)))
		l.im = append(l.im, make([]float64, len(order)*(l.to-l.from)))
	}
	return l, l.begin()
}

// begin begins a stretch of the take; what does not fill a frame is dropped.
func (l *lines) begin() (err error) {
	l.stft, err = spectral.NewSTFT(len(l.power), l.size, l.size/2, spectral.Periodic(l.size, spectral.Hann), l.take)
	return err
}

func (l *lines) take(_ int64, s *spectral.Spectra) error {
	l.frames++
	width := l.to - l.from
	for m, p := range l.power {
		re, im := s.Re[m], s.Im[m]
		for k := range p {
			p[k] += float64(re[k])*float64(re[k]) + float64(im[k])*float64(im[k])
		}
		for n, j := range l.near[m] {
			a, b := s.Re[j], s.Im[j]
			for k := l.from; k < l.to; k++ {
				x, y, u, v := float64(re[k]), float64(im[k]), float64(a[k]), float64(b[k])
				l.re[m][n*width+k-l.from] += x*u + y*v
				l.im[m][n*width+k-l.from] += y*u - x*v
			}
		}
	}
	return nil
}

// leastLineFrames is how many frames stand behind a word on hum or wind.
const leastLineFrames = 6

// scale turns a sum of bins of a channel's power into a mean square: the Hann
// window has a mean square of 3/8, and each bin stands for its mirror too.
func (l *lines) scale() float64 {
	n := float64(l.size)
	return 2 / (n * n * 3 / 8) / float64(max(1, l.frames))
}

// hum is the mains hum on a channel: its frequency, 0 if there is none, its
// level in dBFS and how far its lines stand above the spectrum around them.
func (l *lines) hum(m int, limitDB float64) (hz, levelDBFS, aboveDB float64) {
	if l.frames < leastLineFrames {
		return 0, math.NaN(), math.NaN()
	}
	df := float64(l.rate) / float64(l.size)
	p := l.power[m]
	levelDBFS = math.NaN()
	for _, f := range []float64{50, 60} {
		odd, all := 0, 0
		sum, mean := 0.0, 0.0
		for h := 1; h <= 8; h++ {
			at := int(math.Round(f * float64(h) / df))
			if at+14 >= len(p) || at < 8 {
				continue
			}
			line := 0.0
			for k := at - 2; k <= at+2; k++ {
				line = math.Max(line, p[k])
			}
			var around []float64
			for d := 5; d <= 14; d++ {
				if at-d > 0 {
					around = append(around, p[at-d])
				}
				around = append(around, p[at+d])
			}
			slices.Sort(around)
			floor := around[len(around)/2]
			top := around[len(around)*9/10]
			db := 10 * math.Log10((line+1e-30)/(floor+1e-30))
			if db < limitDB || line < 2*top || line*l.scale() < 1e-13 {
				continue
			}
			all++
			if h == 1 || h == 3 || h == 5 {
				odd++
			}
			mean += db
			for k := at - 2; k <= at+2; k++ {
				sum += p[k] - floor
			}
		}
		if all >= 3 && odd >= 2 && 10*math.Log10(2*sum*l.scale()) > levelOr(levelDBFS) {
			hz, levelDBFS, aboveDB = f, 10*math.Log10(2*sum*l.scale()), mean/float64(all)
		}
	}
	return hz, levelDBFS, aboveDB
}

// levelOr is a level, and far below all others where there is none.
func levelOr(v float64) float64 {
	if math.IsNaN(v) {
		return -1e9
	}
	return v
}

// mains reports a frequency that lies within reach of 50, 60, 100 or 120 Hz.
func mains(hz, reach float64) bool {
	for _, f := range []float64{50, 60, 100, 120} {
		if math.Abs(hz-f) < reach {
			return true
		}
	}
	return false
}

// wind is the part of the power from 20 to 120 Hz that a channel has in common
// with none of its neighbours, beyond what diffuse sound explains, its level in
// dBFS, and how far its density lies above the smallest of the spectrum's
// octaves, dB.
func (l *lines) wind(m int, at []rig.Point, dead []bool, speed float64) (share, levelDBFS, aboveDB float64) {
	if l.frames < leastLineFrames {
		return math.NaN(), math.NaN(), math.NaN()
	}
	width := l.to - l.from
	n := float64(l.frames)
	df := float64(l.rate) / float64(l.size)
	best := math.NaN()
	for c, j := range l.near[m] {
		if dead[j] {
			continue
		}
		common, total := 0.0, 0.0
		for k := l.from; k < l.to; k++ {
			re, im := l.re[m][c*width+k-l.from], l.im[m][c*width+k-l.from]
			gamma := math.Abs(acoustics.DiffuseCoherence(at[m].Distance(at[j]), float64(k)*df, speed))
			if gamma < 0.3 || mains(float64(k)*df, 1.6*df) {
				continue
			}
			// The frames overlap by half: 1.9 of them count as one (common practice).
			msc := (re*re+im*im)/(l.power[m][k]*l.power[j][k]+1e-300) - 1.9/n
			common += l.power[m][k] * math.Min(1, math.Sqrt(math.Max(0, msc))/gamma)
			total += l.power[m][k]
		}
		if total == 0 {
			continue
		}
		if v := 1 - common/total; !(v > best) {
			best = v
		}
	}
	if math.IsNaN(best) {
		return math.NaN(), math.NaN(), math.NaN()
	}
	low := 0.0
	for k := l.from; k < l.to; k++ {
		if !mains(float64(k)*df, 1.6*df) {
			low += l.power[m][k]
		}
	}
	density := best * low / float64(width)
	least := math.Inf(1)
	for f := 500.0; 2*f < 0.45*float64(l.rate); f *= 2 {
		a, b := int(f/df), int(2*f/df)
		sum := 0.0
		for k := a; k < b; k++ {
			sum += l.power[m][k]
		}
		least = math.Min(least, sum/float64(b-a))
	}
	return best, 10 * math.Log10(2*best*low*l.scale()+1e-30), 10 * math.Log10((density+1e-30)/(least+1e-30))
}
