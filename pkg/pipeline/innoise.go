package pipeline

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/measure"
	"alidade/pkg/spectral"
)

// Parameters of what is predicted in the measured noise.
const (
	inNoiseS          = 8.0      // of the noise at most, taken from all of it
	inNoiseChunkS     = 0.5      // and at least at once, where it is taken in parts
	inNoiseWarmS      = 0.1      // before each part, for the high-pass to settle
	inNoiseTransforms = 8        // fewer tell nothing
	inNoiseLeastS     = 1.0 / 12 // of a transform
	unlikeModelsDB    = 3.0      // from the nearest of the models on, noise is unlike them
)

// Predicted are gains predicted for the weights in force, overall: SNR gains in
// noise of the measured levels of the bands, from all sides (diffuse), on each
// microphone by itself (white), and from where the measured noise comes.
type Predicted struct {
	WhiteDB         Number `json:"white_db"`
	DiffuseDB       Number `json:"diffuse_db"`
	MeasuredNoiseDB Number `json:"measured_noise_db"`
}

// inNoise predicts what the filters do in the noise as it was measured, from
// the frequency responses of the filters and the spatial covariance of the
// noise: with R the covariance of the microphones and G the responses,
//
//	tr R / (M · GᵀRG*)
//
// of the bins of each band, as a gain in SNR for the target where it is said to
// be. The sums of |GᵀX|² over spectra X are GᵀRG* without R.
type inNoise struct {
	rate, size int
	bands      []Band
	models     [][][]complex128 // [set][m][k], made when first asked for
	sets       []beam.Handover
	fade       int64
	reference  []float64 // [band], Σ|x_m|²/M
	output     []float64
	transforms int
	start      int64 // frame of the take that the stream begins at
	from, to   int64 // frames of the take that count
}

// predictInNoise fills in the gains predicted in the measured noise, and says
// where it is unlike the models.
func (r *run) predictInNoise(res *Result) error {
	if len(res.Segments.Noise) == 0 {
		return nil
	}
	if r.set.path != nil {
		r.report(Finding{Code: "noise-unpredicted", Severity: Info, Message: "no gain was predicted in the measured noise: the beam moves"})
		return nil
	}
	t := r.take
	if res.Segments.Source == SegmentsIsolated {
		if r.set.IsolatedNoise == "" {
			return nil
		}
		var err error
		if t, err = openTake([]string{r.set.IsolatedNoise}, r.isolatedJoining(), false); err != nil {
			return err
		}
		defer t.close()
	}
	rate := float64(t.header.Rate)
	p := &inNoise{rate: t.header.Rate, size: 16, bands: res.Bands, sets: []beam.Handover{{Filters: r.line.filters}}}
	if r.line.changes != nil {
		p.sets, p.fade = r.line.changes.list, r.line.changes.fade
	}
	first, last := 0, 0
	for _, s := range p.sets {
		from, to := s.Filters.Span()
		first, last = min(first, from), max(last, to)
	}
	for float64(p.size) < inNoiseLeastS*rate || p.size < last-first {
		p.size *= 2
	}
	p.models = make([][][]complex128, len(p.sets))
	p.reference, p.output = make([]float64, len(p.bands)), make([]float64, len(p.bands))
	for _, part := range someNoise(res.Segments.Noise, inNoiseS, inNoiseChunkS) {
		p.from, p.to = frameAt(part[0], rate), min(frameAt(part[1], rate), t.header.Frames)
		p.start = max(0, p.from-int64(inNoiseWarmS*rate))
		if p.to-p.from < int64(p.size) {
			continue
		}
		if err := r.listen(t, p); err != nil {
			return err
		}
	}
	if p.transforms < inNoiseTransforms {
		r.report(Finding{Code: "noise-unpredicted", Severity: Info, Message: fmt.Sprintf(
			"no gain was predicted in the measured noise: its stretches hold %d transforms of %.0f ms, %d are needed", p.transforms, 1000*float64(p.size)/rate, inNoiseTransforms)})
		return nil
	}
	white, diffuse, measured, all := 0.0, 0.0, 0.0, 0.0
	var more, less []float64
	models := r.line.models(r.take.header.Frames)
	for i := range res.Bands {
		b := &res.Bands[i]
		if !(p.reference[i] > 0) || !(p.output[i] > 0) || b.NoiseInDBFS == nil || b.PredictedWhiteDB == nil || b.PredictedDiffuseDB == nil {
			continue
		}
		_, _, target := r.line.bandGains(models, measure.Band{LowHz: b.LowHz, HighHz: b.HighHz})
		b.PredictedInNoiseDB = number(audio.PowerDB(p.reference[i]/p.output[i]) + target)
		power := audio.FromPowerDB(*b.NoiseInDBFS)
		all += power
		white += power * audio.FromPowerDB(-*b.PredictedWhiteDB)
		diffuse += power * audio.FromPowerDB(-*b.PredictedDiffuseDB)
		measured += power * audio.FromPowerDB(-*b.PredictedInNoiseDB)
		if hasFlag(*b, measure.Sparse) {
			continue
		}
		switch low, high := math.Min(*b.PredictedWhiteDB, *b.PredictedDiffuseDB), math.Max(*b.PredictedWhiteDB, *b.PredictedDiffuseDB); {
		case *b.PredictedInNoiseDB > high+unlikeModelsDB:
			more = append(more, b.NominalHz)
		case *b.PredictedInNoiseDB < low-unlikeModelsDB:
			less = append(less, b.NominalHz)
		}
	}
	if all > 0 {
		res.Steer.Predicted = &Predicted{number(audio.PowerDB(all / white)), number(audio.PowerDB(all / diffuse)), number(audio.PowerDB(all / measured))}
	}
	for _, f := range []struct {
		code, message string
		bands         []float64
	}{
		{"noise-from-elsewhere", "in %s the weights lower the noise as it was measured by %g dB more than noise from all sides or of the microphones: it comes from few directions, and they lie where this beam hears little", more},
		{"noise-from-the-target", "in %s the weights lower the noise as it was measured by %g dB less than noise from all sides or of the microphones: it comes from near the steered direction or from a grating lobe, and a beam in that direction cannot do more; a null or minimum variance may, if it stands far enough aside", less},
	} {
		if len(f.bands) > 0 {
			r.report(Finding{Code: f.code, Severity: Info, Bands: f.bands, Message: fmt.Sprintf(f.message, bandCount(len(f.bands)), unlikeModelsDB)})
		}
	}
	return nil
}

// someNoise takes at most total seconds from stretches, the same part of each
// from its middle, and least at once (or the longest of them): stretches whose
// part would be shorter are taken in turn.
func someNoise(stretches [][2]float64, total, least float64) [][2]float64 {
	all, longest := 0.0, 0.0
	for _, s := range stretches {
		all += s[1] - s[0]
		longest = math.Max(longest, s[1]-s[0])
	}
	least = math.Min(least, longest)
	if all <= total {
		return stretches
	}
	var out [][2]float64
	owed := 0.0
	for _, s := range stretches {
		owed += (s[1] - s[0]) * total / all
		if take := math.Min(owed, s[1]-s[0]); take >= least-1e-9 {
			middle := (s[0] + s[1]) / 2
			out = append(out, [2]float64{middle - take/2, middle + take/2})
			owed -= take
		}
	}
	return out
}

// listen runs the corrected microphones of a part of a take into p.
func (r *run) listen(t *take, p *inNoise) error {
	from, to := r.rig.clockReach(p.start, p.to, t.header.Frames)
	p.start = from
	if err := t.reader.SeekFrame(from); err != nil {
		return fmt.Errorf("%s: %w", t.path(), err)
	}
	src, err := r.line.correctedFrom(audio.Section(&watched{Source: t.source(), ctx: r.ctx}, 0, to-from), from)
	if err != nil {
		return err
	}
	stft, err := spectral.NewSTFT(len(r.line.used), p.size, p.size/2, spectral.Periodic(p.size, spectral.Hann), p.add)
	if err != nil {
		return err
	}
	counted := &part{sink: stft, from: p.from - p.start, to: p.to - p.start}
	_, err = audio.Copy(src, blockFrames(r.spec.Options.BlockFrames, t.header.Channels), counted)
	return err
}

// add takes one transform in.
func (p *inNoise) add(frame int64, spec *spectral.Spectra) error {
	middle := p.from + frame*int64(p.size/2) + int64(p.size/2)
	set := 0
	for set+1 < len(p.sets) && p.sets[set+1].At <= middle {
		set++
	}
	g, err := p.model(set)
	if err != nil {
		return err
	}
	for b, band := range p.bands {
		// Bins as cells of their width: the first and the last count in part.
		low, high := band.LowHz*float64(p.size)/float64(p.rate), band.HighHz*float64(p.size)/float64(p.rate)
		for k := int(math.Floor(low + 0.5)); k <= int(math.Ceil(high-0.5)) && k < spec.Bins(); k++ {
			part := math.Min(high, float64(k)+0.5) - math.Max(low, float64(k)-0.5)
			if part <= 0 {
				continue
			}
			var y complex128
			var power float64
			for m := range g {
				x := complex(float64(spec.Re[m][k]), float64(spec.Im[m][k]))
				y += g[m][k] * x
				power += real(x)*real(x) + imag(x)*imag(x)
			}
			p.reference[b] += part * power / float64(len(g))
			p.output[b] += part * (real(y)*real(y) + imag(y)*imag(y))
		}
	}
	p.transforms++
	return nil
}

// model returns the responses G[m][k] of a set; those of sets before it are not
// asked for again.
func (p *inNoise) model(set int) ([][]complex128, error) {
	if p.models[set] != nil {
		return p.models[set], nil
	}
	fft, err := spectral.NewFFT[float64](p.size)
	if err != nil {
		return nil, err
	}
	f := p.sets[set].Filters
	x, re, im := make([]float64, p.size), make([]float64, fft.Bins()), make([]float64, fft.Bins())
	g := make([][]complex128, f.Mics())
	for m, h := range f.H {
		clear(x)
		for t, v := range h {
			at := (f.Start[m] + t) % p.size
			if at < 0 {
				at += p.size
			}
			x[at] += v
		}
		fft.Forward(re, im, x)
		g[m] = make([]complex128, fft.Bins())
		for k := range re {
			g[m][k] = complex(re[k], im[k])
		}
	}
	for before := range set {
		p.models[before] = nil
	}
	p.models[set] = g
	return g, nil
}
