package pipeline

import (
	"bytes"
	"fmt"
	"math"
	"slices"

	"github.com/mewkiz/flac"
	"github.com/mewkiz/flac/frame"
	"github.com/mewkiz/flac/meta"

	"alidade/pkg/audio"
	"alidade/pkg/spectral"
	"alidade/pkg/wav"
)

// What a listening excerpt is.
const (
	previewS        = 20    // chosen by itself
	previewMostS    = 30    // of an --excerpt or --preview-at
	previewFadeS    = 0.05  // at its beginning and end
	previewPeak     = 0.5   // -6.02 dBFS
	previewMostRate = 48000 // Hz; what has more is decimated
	previewMostDB   = 40    // of gain
	previewNoiseS   = 3     // of noise alone is enough to hear what it was
	previewWarmupS  = 1     // run before the excerpt, for the high-pass

	// previewRoom bounds the bytes of a pair in base64: two clips of 16 bit.
	previewRoom = 2 * previewMostS * previewMostRate * 2 * 4 / 3
)

// preview fills in the listening excerpts: the microphone that stands for the
// reference, corrected, and the track as it was written, over the same frames.
func (r *run) preview(res *Result) error {
	from, to := r.previewFrames(res)
	none := func(why string) error {
		r.report(Finding{Code: "no-preview", Severity: Info, Message: "no listening excerpt: " + why})
		return nil
	}
	rate := r.take.header.Rate
	if to-from < int64(4*previewFadeS*float64(rate)) {
		return none("the track is too short")
	}
	before, err := r.referenceClip(res, from, to)
	if err != nil {
		return err
	}
	after, err := r.trackClip(from, to)
	if err != nil {
		return err
	}
	k := decimation(rate)
	clips := [2][]float64{decimate(before, k), decimate(after, k)}
	rate /= k
	peak := 0.0
	for _, x := range clips {
		fade(x, int(previewFadeS*float64(rate)))
		for _, v := range x {
			peak = math.Max(peak, math.Abs(v))
		}
	}
	if peak == 0 {
		return none("there is nothing but silence in it")
	}
	gain := math.Min(previewPeak/peak, audio.FromAmplitudeDB(previewMostDB))
	p := &Preview{
		StartS: float64(from) / float64(r.take.header.Rate), EndS: float64(to) / float64(r.take.header.Rate),
		SampleRateHz: rate, GainDB: audio.AmplitudeDB(gain),
	}
	for i, into := range []*Clip{&p.Reference, &p.Output} {
		if *into, err = newClip(clips[i], gain, rate); err != nil {
			return fmt.Errorf("listening excerpt: %w", err)
		}
	}
	res.Preview = p
	return nil
}

// previewGiven returns the frames of the take that --preview-at names.
func (r *run) previewGiven() (from, to int64, err error) {
	if r.set.previewAt == nil {
		return 0, 0, nil
	}
	s, err := r.seconds(*r.set.previewAt)
	if err != nil {
		return 0, 0, &UsageError{Err: fmt.Errorf("--preview-at %s: %w", r.set.PreviewAt, err)}
	}
	rate := float64(r.take.header.Rate)
	from, to = max(r.from, frameAt(s[0], rate)), min(r.to, frameAt(s[1], rate))
	switch {
	case from >= to:
		return 0, 0, &UsageError{Err: fmt.Errorf("--preview-at %s: the track holds %.3f to %.3f s of the take", r.set.PreviewAt, float64(r.from)/rate, float64(r.to)/rate), Hint: "times count in seconds from the take's first frame"}
	case to-from > frameAt(previewMostS, rate):
		return 0, 0, &UsageError{Err: fmt.Errorf("--preview-at %s: %.1f s, want at most %d s", r.set.PreviewAt, float64(to-from)/rate, previewMostS)}
	}
	return from, to, nil
}

// previewFrames chooses the frames of the take that are heard: those of
// --preview-at, of --excerpt, or the part of the track with most of the target and some noise
// alone before or after it; without stretches, where the beam is loudest.
func (r *run) previewFrames(res *Result) (from, to int64) {
	if from, to, err := r.previewGiven(); err == nil && to > from {
		return from, to
	}
	rate := float64(r.take.header.Rate)
	long := r.to - r.from
	if r.set.excerpt != nil && long <= frameAt(previewMostS, rate) || long <= frameAt(previewS, rate) {
		return r.from, r.to
	}
	span := frameAt(previewS, rate)
	low, high := float64(r.from)/rate, float64(r.to-span)/rate
	starts := []float64{low, high}
	g := res.Segments
	worth := func(t float64) float64 {
		return overlapS(g.Target, t, t+previewS) + 3*math.Min(overlapS(g.Noise, t, t+previewS), previewNoiseS)
	}
	if known := len(g.Noise)+len(g.Target) > 0 && g.Source != SegmentsIsolated; known {
		for _, list := range [][][2]float64{g.Noise, g.Target} {
			for _, s := range list {
				starts = append(starts, s[0], s[0]-previewNoiseS, s[1]-previewNoiseS, s[1]-previewS)
			}
		}
	} else if r.painter != nil {
		loud := r.painter.after.power()
		step := r.painter.after.stepS()
		for i := range loud {
			starts = append(starts, float64(i)*step)
		}
		sums := make([]float64, len(loud)+1)
		for i, p := range loud {
			sums[i+1] = sums[i] + p
		}
		at := func(t float64) float64 { return sums[min(max(int(math.Round(t/step)), 0), len(loud))] }
		worth = func(t float64) float64 { return at(t+previewS) - at(t) }
	}
	slices.Sort(starts)
	best := low
	for _, t := range starts {
		if t = math.Min(math.Max(t, low), high); worth(t) > worth(best)*(1+1e-9) {
			best = t
		}
	}
	from = min(max(frameAt(best, rate), r.from), r.to-span)
	return from, from + span
}

// overlapS is how many seconds of from..to lie in stretches.
func overlapS(list [][2]float64, from, to float64) float64 {
	sum := 0.0
	for _, s := range list {
		sum += math.Max(0, math.Min(s[1], to)-math.Max(s[0], from))
	}
	return sum
}

// referenceClip reads the frames from..to of the microphone that stands for the
// reference, with its corrections and the high-pass.
func (r *run) referenceClip(res *Result, from, to int64) ([]float32, error) {
	mics := r.line.witnesses()
	if r.painter != nil {
		mics = r.painter.mics
	}
	mic := r.line.witness(mics, res.Channels)
	start := max(0, from-int64(previewWarmupS*float64(r.take.header.Rate)))
	start, _ = r.rig.clockReach(start, to, r.take.header.Frames)
	if err := r.take.reader.SeekFrame(start); err != nil {
		return nil, fmt.Errorf("%s: %w", r.take.path(), err)
	}
	src, err := r.line.correctedFrom(&watched{Source: r.take.source(), ctx: r.ctx}, start)
	if err != nil {
		return nil, err
	}
	if src, err = audio.Map(src, []int{mic}, nil); err != nil {
		return nil, err
	}
	return plane(audio.Section(src, from-start, to-start), to-from, r.take.path())
}

// trackClip reads the frames from..to of the take back from the finished track,
// without the track's gain.
func (r *run) trackClip(from, to int64) ([]float32, error) {
	path := r.track.file.final
	reader, err := wav.Open(r.track.file, r.track.writer.Written().Bytes)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	if err := reader.SeekFrame(from - r.track.first); err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	src := audio.Gain(named{reader, path}, audio.FromAmplitudeDB(-r.set.GainDB))
	return plane(audio.Section(src, 0, to-from), to-from, path)
}

// plane reads the only channel of a source of so many frames.
func plane(src audio.Source, frames int64, path string) ([]float32, error) {
	b, err := audio.ReadAll(src)
	if err != nil {
		return nil, err
	}
	if int64(b.Frames()) != frames {
		return nil, fmt.Errorf("%s: %d frames for the listening excerpt, want %d", path, b.Frames(), frames)
	}
	return b.Channel(0), nil
}

// decimation is by how much the rate is divided to be at most previewMostRate;
// 1 where no small divisor does it.
func decimation(rate int) int {
	const most = 16
	for k := 1; k <= most; k++ {
		if rate%k == 0 && rate/k <= previewMostRate {
			return k
		}
	}
	return 1
}

// decimate keeps every k-th sample of x, cut above 0.45 of the new rate (to
// -80 dB at 0.55 of it, by a Kaiser window).
func decimate(x []float32, k int) []float64 {
	const wing, beta = 28, 8
	out := make([]float64, (len(x)+k-1)/k)
	if k == 1 {
		for i, v := range x {
			out[i] = float64(v)
		}
		return out
	}
	taps := spectral.Symmetric(2*wing*k+1, spectral.Kaiser(beta))
	sum := 0.0
	for i := range taps {
		if u := float64(i-wing*k) / float64(k); u != 0 {
			taps[i] *= math.Sin(math.Pi*u) / (math.Pi * u)
		}
		sum += taps[i]
	}
	for n := range out {
		acc := 0.0
		for i, h := range taps {
			if at := n*k + i - wing*k; at >= 0 && at < len(x) {
				acc += h * float64(x[at])
			}
		}
		out[n] = acc / sum
	}
	return out
}

// fade raises the first n samples from silence and lowers the last n to it.
func fade(x []float64, n int) {
	n = min(n, len(x)/2)
	for i := range n {
		w := 0.5 - 0.5*math.Cos(math.Pi*float64(i)/float64(n))
		x[i] *= w
		x[len(x)-1-i] *= w
	}
}

// newClip makes a file of samples times a gain, no sample above previewPeak.
func newClip(x []float64, gain float64, rate int) (Clip, error) {
	const full = 1 << 15
	samples := make([]int32, len(x))
	sum, peak := 0.0, 0.0
	for i, v := range x {
		q := math.Max(-previewPeak*full, math.Min(previewPeak*full, math.Round(v*gain*full)))
		samples[i] = int32(q)
		sum, peak = sum+q*q, math.Max(peak, math.Abs(q))
	}
	c := Clip{LevelDBFS: silentClipDB, PeakDBFS: silentClipDB}
	if peak > 0 {
		c.LevelDBFS = audio.PowerDB(2 * sum / float64(len(x)) / (full * full)) // a full-scale sine reads 0 (AES17)
		c.PeakDBFS = audio.AmplitudeDB(peak / full)
	}
	var err error
	c.Audio, err = flacFile(samples, rate)
	return c, err
}

// silentClipDB is the level of a clip without a sample other than 0: below what
// 16 bits hold.
const silentClipDB = -120

// flacFile returns samples of 16 bits as a FLAC file.
func flacFile(samples []int32, rate int) ([]byte, error) {
	const block = 4096
	var b bytes.Buffer
	enc, err := flac.NewEncoder(&b, &meta.StreamInfo{
		BlockSizeMin: block, BlockSizeMax: block, SampleRate: uint32(rate), NChannels: 1, BitsPerSample: 16, NSamples: uint64(len(samples)),
	})
	if err != nil {
		return nil, err
	}
	for at := 0; at < len(samples); at += block {
		part := samples[at:min(at+block, len(samples))]
		f := &frame.Frame{
			Header: frame.Header{
				HasFixedBlockSize: true, BlockSize: uint16(len(part)), SampleRate: uint32(rate),
				Channels: frame.ChannelsMono, BitsPerSample: 16, Num: uint64(at / block),
			},
			Subframes: []*frame.Subframe{{SubHeader: flacHeader(part), Samples: part, NSamples: len(part)}},
		}
		if err := enc.WriteFrame(f); err != nil {
			return nil, err
		}
	}
	if err := enc.Close(); err != nil {
		return nil, err
	}
	return b.Bytes(), nil
}

// flacHeader chooses how a block is predicted: the fixed polynomial of the
// smallest residual, and the Rice parameter that codes it shortest (RFC 9639,
// sections 9.2.5 and 9.2.7).
func flacHeader(x []int32) frame.SubHeader {
	const mostOrder, mostParam = 4, 14
	residual := append([]int32(nil), x...) // of the order at hand, from that index on
	best, least := 0, math.Inf(1)
	for order := 0; order <= mostOrder && order < len(x); order++ {
		if order > 0 {
			for i := len(x) - 1; i >= order; i-- {
				residual[i] -= residual[i-1]
			}
		}
		sum := 0.0
		for _, v := range residual[order:] {
			sum += math.Abs(float64(v))
		}
		if order == 0 && sum == 0 {
			return frame.SubHeader{Pred: frame.PredConstant}
		}
		if sum += float64(order) * (1 << 12); sum < least {
			best, least = order, sum
		}
	}
	// The folded residual is about twice as large; its bits at parameter k are
	// those of the quotients, one to end each, and k.
	bits := func(k uint) int {
		n := 0
		prev := [mostOrder + 1]int32{}
		for i, v := range x {
			e := v
			for order := range best {
				e, prev[order] = e-prev[order], e
			}
			if i >= best {
				n += int(uint32(e<<1)^uint32(e>>31))>>k + 1 + int(k)
			}
		}
		return n
	}
	guess := int(math.Round(math.Log2(math.Max(1, 1.4*least/float64(len(x))))))
	param, fewest := uint(0), math.MaxInt
	for k := max(0, guess-1); k <= min(mostParam, guess+1); k++ {
		if n := bits(uint(k)); n < fewest {
			param, fewest = uint(k), n
		}
	}
	if fewest > 16*len(x) { // noise at full scale is shorter as it stands
		return frame.SubHeader{Pred: frame.PredVerbatim}
	}
	return frame.SubHeader{
		Pred: frame.PredFixed, Order: best, ResidualCodingMethod: frame.ResidualCodingMethodRice1,
		RiceSubframe: &frame.RiceSubframe{Partitions: []frame.RicePartition{{Param: param}}},
	}
}
