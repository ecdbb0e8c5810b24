package calibration

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/spectral"
)

// Calibrator is a sound level calibrator.
type Calibrator struct {
	LevelDB float64 // dB re 20 µPa: 94 or 114
	Hz      float64 // 1000
	// Tolerance is the half width of what its class allows its level, dB.
	Tolerance float64
}

// Tolerances of the level of a calibrator by its class, dB [IEC 60942:2017, table
// 2: 160 Hz to 1250 Hz].
var calibratorTolerance = map[string]float64{"LS": 0.10, "1": 0.25, "2": 0.40}

// CalibratorTolerance is the half width of what a class allows the level of a
// calibrator, dB, and whether there is such a class: LS, 1 or 2.
func CalibratorTolerance(class string) (db float64, ok bool) {
	db, ok = calibratorTolerance[class]
	return db, ok
}

// What counts as the calibrator's tone.
const (
	toneOff      = 0.02  // of its frequency: class 2 allows 1.7 % [IEC 60942:2017, table 4]
	tonePurity   = 0.9   // share of the power that lies in it
	toneSteadyDB = 0.15  // of a frame against the middle of its stretch: class 2 allows 0.15 dB [table 7]
	toneLeastS   = 1.0   // length of the stretch, seconds
	toneOverDB   = 10    // above the other channels, which the calibrator reaches through the air
	toneClipped  = 0.985 // of full scale: flat tops
	toneFrameS   = 0.1   // length of a frame, at least
)

// Tone is a calibrator's stretch in one channel.
type Tone struct {
	Found    bool
	Why      string  // why none was found, where it is not
	From, To float64 // seconds from the start of the take
	DBFS     float64 // level of the tone, a full-scale sine reads 0 (AES17)
	StdDB    float64 // standard deviation of its level over the stretch
	Hz       float64
	// SensitivityDBFS is what 94 dB would read, dBFS; Std is its standard
	// uncertainty, dB.
	SensitivityDBFS, Std float64
}

// toneFrame is what one frame of one channel says.
type toneFrame struct {
	db     float32 // level of the tone, dBFS
	purity float32
	hz     float32
	peak   float32
}

// maxToneFrames bounds what is kept of a take: two hours of eight channels.
const maxToneFrames = 2 << 20

// Tones finds the stretch of a calibrator's tone in every channel of a take: one
// channel after the other, or one alone. only, where it is not negative, is
// the channel that the calibrator sits on throughout, counted from 0. A stretch
// is at least a second of a steady tone, 10 dB above the other channels. The
// error is that of the take, or a *RefusedError where it cannot be looked at.
func Tones(src audio.Source, c Calibrator, only int) ([]Tone, error) {
	channels, rate := src.Format().Channels, float64(src.Format().Rate)
	if !(c.Hz > 0) || c.Hz*(1+toneOff) > 0.45*rate {
		return nil, fmt.Errorf("calibration: a tone of %g Hz at %g frames per second", c.Hz, rate)
	}
	size := 1024
	for float64(size) < toneFrameS*rate {
		size *= 2
	}
	hop := size / 2
	window := spectral.Periodic(size, spectral.Hann)
	energy := 0.0
	for _, w := range window {
		energy += w * w
	}
	frames := make([][]toneFrame, channels)
	peaks := &peakHold{hop: hop, channels: channels}
	df := rate / float64(size)
	stft, err := spectral.NewSTFT(channels, size, hop, window, func(j int64, s *spectral.Spectra) error {
		if (j+1)*int64(channels) > maxToneFrames {
			return &RefusedError{Why: "too long a take to look for a calibrator in", Help: "give the part with the calibrator by --excerpt A..B"}
		}
		for ch := range channels {
			frames[ch] = append(frames[ch], look(s.Re[ch], s.Im[ch], c.Hz, df, energy, float64(size)))
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	if _, err := audio.Copy(src, 4096, peaks, stft); err != nil {
		return nil, err
	}
	var out []Tone
	for ch := range channels {
		for j := range frames[ch] {
			frames[ch][j].peak = max(peaks.at(ch, j), peaks.at(ch, j+1))
		}
	}
	for ch := range channels {
		if only >= 0 && ch != only {
			out = append(out, Tone{Why: "not the channel with the calibrator"})
			continue
		}
		out = append(out, stretch(frames, ch, c, float64(hop)/rate, float64(size)/rate, only >= 0))
	}
	return out, nil
}

// look measures the tone in the spectrum of one Hann-weighted frame.
func look(re, im []float32, hz, df, energy, size float64) toneFrame {
	power := func(k int) float64 { return float64(re[k])*float64(re[k]) + float64(im[k])*float64(im[k]) }
	from, to := int(math.Floor(hz*(1-toneOff)/df)), int(math.Ceil(hz*(1+toneOff)/df))
	best := from
	for k := from; k <= to && k < len(re); k++ {
		if power(k) > power(best) {
			best = k
		}
	}
	const reach = 3 // lines: a Hann window has all but 1e-5 of a tone within them
	tone, total := 0.0, 1e-30
	for k := 1; k < len(re); k++ {
		p := power(k)
		if math.Abs(float64(k-best)) <= reach {
			tone += p
		}
		if float64(k)*df > 20 {
			total += p
		}
	}
	f := toneFrame{purity: float32(tone / total)}
	// The mean square of the frame is 2·Σ|X|²/(size·Σw²); a full-scale sine has 1/2.
	f.db = float32(10 * math.Log10(math.Max(4*tone/(size*energy), 1e-20)))
	// Frequency between lines: the ratio of two neighbours of a Hann window
	// [Harris 1978].
	at := float64(best)
	if best > 0 && best+1 < len(re) && power(best) > 0 {
		left, mid, right := math.Sqrt(power(best-1)), math.Sqrt(power(best)), math.Sqrt(power(best+1))
		if right > left {
			at += (2*right - mid) / (mid + right)
		} else {
			at -= (2*left - mid) / (mid + left)
		}
	}
	f.hz = float32(at * df)
	return f
}

// stretch finds the longest steady stretch of the tone in channel ch.
func stretch(frames [][]toneFrame, ch int, c Calibrator, hop, length float64, alone bool) Tone {
	good := func(j int) (ok bool, why string) {
		f := frames[ch][j]
		switch {
		case math.Abs(float64(f.hz)-c.Hz) > toneOff*c.Hz || f.purity < tonePurity:
			return false, fmt.Sprintf("no pure tone of %.0f Hz", c.Hz)
		case !alone && slices.ContainsFunc(frames, func(other []toneFrame) bool {
			return &other[0] != &frames[ch][0] && other[j].db > f.db-toneOverDB
		}):
			return false, fmt.Sprintf("the tone is never %d dB above the other channels", toneOverDB)
		}
		return true, ""
	}
	t := Tone{Why: fmt.Sprintf("no pure tone of %.0f Hz", c.Hz)}
	var first, last int
	var bestDB float64
	for j := 0; j < len(frames[ch]); {
		ok, why := good(j)
		if !ok {
			if frames[ch][j].purity >= tonePurity && math.Abs(float64(frames[ch][j].hz)-c.Hz) <= toneOff*c.Hz {
				t.Why = why
			}
			j++
			continue
		}
		// As long as it goes on and keeps its level, by the middle of it so far.
		end := j
		var levels runningMedian
		for end < len(frames[ch]) {
			if ok, _ := good(end); !ok {
				break
			}
			v := float64(frames[ch][end].db)
			if levels.count() > 2 && math.Abs(v-levels.median()) > toneSteadyDB {
				break
			}
			levels.add(v)
			end++
		}
		if end-j > last-first {
			first, last, bestDB = j, end, levels.median()
		}
		j = max(end, j+1)
	}
	t.From, t.To = float64(first)*hop, float64(last-1)*hop+length
	if last-first == 0 || t.To-t.From < toneLeastS {
		if last > first {
			t.Why = fmt.Sprintf("the tone is steady for %.1f s, want %.0f s", t.To-t.From, toneLeastS)
		}
		t.From, t.To = 0, 0
		return t
	}
	// Where the tone begins or ends, frames hold a part of it.
	var levels []float64
	sum, square, hz, peak := 0.0, 0.0, 0.0, 0.0
	within := frames[ch][first:last]
	if len(within) > 4 {
		within = within[1 : len(within)-1]
	}
	for _, f := range within {
		if math.Abs(float64(f.db)-bestDB) <= toneSteadyDB {
			levels = append(levels, float64(f.db))
		}
		hz += float64(f.hz) / float64(len(within))
		peak = math.Max(peak, float64(f.peak))
	}
	for _, v := range levels {
		sum += v / float64(len(levels))
	}
	for _, v := range levels {
		square += (v - sum) * (v - sum) / float64(max(1, len(levels)-1))
	}
	if peak >= toneClipped {
		t.Why = fmt.Sprintf("the tone reaches %.3f of full scale and may be clipped: turn the gain down and set it back by a known step, or take the lower level", peak)
		t.From, t.To = 0, 0
		return t
	}
	t.Found, t.Why = true, ""
	t.DBFS, t.StdDB, t.Hz = sum, math.Sqrt(square), hz
	t.SensitivityDBFS = t.DBFS - (c.LevelDB - 94)
	// What the class allows is spread evenly [JCGM 100:2008, 4.3.7].
	t.Std = math.Hypot(c.Tolerance/math.Sqrt(3), t.StdDB)
	return t
}

// peakHold is a sink that keeps the largest sample of every hop.
type peakHold struct {
	hop, channels int
	count         int
	now           []float32
	peaks         [][]float32
}

// Write implements audio.Sink.
func (p *peakHold) Write(src audio.Block) error {
	if p.now == nil {
		p.now, p.peaks = make([]float32, p.channels), make([][]float32, p.channels)
	}
	for i := 0; i < src.Frames(); {
		n := min(src.Frames()-i, p.hop-p.count)
		for ch := range p.now {
			for _, v := range src.Channel(ch)[i : i+n] {
				p.now[ch] = max(p.now[ch], v, -v)
			}
		}
		i += n
		if p.count += n; p.count == p.hop {
			for ch := range p.now {
				p.peaks[ch] = append(p.peaks[ch], p.now[ch])
				p.now[ch] = 0
			}
			p.count = 0
		}
	}
	return nil
}

// at is the peak of hop j.
func (p *peakHold) at(ch, j int) float32 {
	if p.peaks == nil || j >= len(p.peaks[ch]) {
		return 0
	}
	return p.peaks[ch][j]
}
