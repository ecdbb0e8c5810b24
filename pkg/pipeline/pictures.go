package pipeline

import (
	"math"
	"slices"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/response"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// What a spectrogram is made of.
const (
	mostColumns    = 1000
	rowsPerOctave  = 12
	lowestRowHz    = 49
	highestRowHz   = 20000
	highestRowPart = 0.45 // of the rate
	spectrumPerS   = 24   // transforms are as long as this part of a second, or up to twice
	shownRangeDB   = 70

	// Under --private a spectrogram shows when something sounded and in which
	// bands, and no word of what was said: half a second from column to column is
	// longer than a syllable.
	privateColumnS       = 0.5
	privateRowsPerOctave = 3
)

// logRows returns frequencies n to the octave, 1 kHz among them, from low up to
// high, Hz.
func logRows(low, high float64, n int) []float64 {
	var hz []float64
	for i := math.Ceil(float64(n) * math.Log2(low/1000)); ; i++ {
		f := 1000 * math.Exp2(i/float64(n))
		if f > high {
			return hz
		}
		hz = append(hz, f)
	}
}

// sonagram gathers the power over time and frequency of some channels: the mean
// power in twelfths of an octave and in columns of time. Its memory does not
// grow with the length of the take. It is an audio.Sink.
type sonagram struct {
	stft    *spectral.STFT
	hz      []float64
	first   []int       // the first bin of each row
	weights [][]float64 // of the bins from there on
	size    int         // of a transform
	hop     int
	perCol  int // transforms to a column
	columns int
	rate    float64
	cells   [][]float64 // [channel][row*columns+column], sum of powers
	count   []int       // transforms in each column
}

// newSonagram returns a sonagram of a stream of so many channels and frames;
// nil for a stream too short for two columns.
func newSonagram(channels, rate int, frames int64, private bool) (*sonagram, error) {
	size := 64
	for size*spectrumPerS < rate {
		size *= 2
	}
	step, rows := max(int64(size/4), (frames+mostColumns-1)/mostColumns), rowsPerOctave
	if private {
		step, rows = max(step, int64(privateColumnS*float64(rate))), privateRowsPerOctave
	}
	// Transforms overlap by half, in a take of many minutes not at all.
	widest := int64(size / 2)
	if step > 4*int64(size) {
		widest = int64(size)
	}
	perCol := (step + widest - 1) / widest
	hop := (step + perCol - 1) / perCol
	step = hop * perCol
	s := &sonagram{size: size, hop: int(hop), perCol: int(perCol), columns: int((frames + step - 1) / step), rate: float64(rate)}
	s.hz = logRows(lowestRowHz, min(highestRowHz, highestRowPart*s.rate), rows)
	if s.columns < 2 || len(s.hz) < 2 {
		return nil, nil
	}
	window := spectral.Periodic(size, spectral.Hann)
	energy := 0.0
	for _, w := range window {
		energy += w * w
	}
	// Bin k stands for the half a bin on either side of its frequency.
	bin := s.rate / float64(size)
	edge := math.Exp2(0.5 / float64(rows))
	for _, f := range s.hz {
		low, high := f/edge/bin, f*edge/bin
		k0, k1 := int(math.Floor(low+0.5)), min(int(math.Floor(high+0.5)), size/2-1)
		var w []float64
		for k := k0; k <= k1; k++ {
			part := math.Min(high, float64(k)+0.5) - math.Max(low, float64(k)-0.5)
			w = append(w, part*2/(float64(size)*energy))
		}
		s.first, s.weights = append(s.first, k0), append(s.weights, w)
	}
	s.count = make([]int, s.columns)
	for range channels {
		s.cells = append(s.cells, make([]float64, len(s.hz)*s.columns))
	}
	var err error
	if s.stft, err = spectral.NewSTFT(channels, size, s.hop, window, s.add); err != nil {
		return nil, err
	}
	// With half a transform of silence ahead, transform j is about frame j·hop.
	return s, s.stft.Write(audio.NewBlock(channels, size/2))
}

// add takes the spectra of transform j.
func (s *sonagram) add(j int64, spec *spectral.Spectra) error {
	column := int(j / int64(s.perCol))
	if column >= s.columns {
		return nil
	}
	s.count[column]++
	for ch, cells := range s.cells {
		re, im := spec.Re[ch], spec.Im[ch]
		for row, weights := range s.weights {
			sum := 0.0
			for i, w := range weights {
				k := s.first[row] + i
				sum += w * (float64(re[k])*float64(re[k]) + float64(im[k])*float64(im[k]))
			}
			cells[row*s.columns+column] += sum
		}
	}
	return nil
}

// Write implements audio.Sink.
func (s *sonagram) Write(src audio.Block) error { return s.stft.Write(src) }

// finish takes the transforms about the last frames.
func (s *sonagram) finish() error {
	if err := s.stft.Write(audio.NewBlock(len(s.cells), s.size/2)); err != nil {
		return err
	}
	return s.stft.Flush()
}

// levels returns the cells of a channel in dBFS.
func (s *sonagram) levels(channel int) []float64 {
	out := make([]float64, len(s.cells[channel]))
	for i, sum := range s.cells[channel] {
		n := s.count[i%s.columns]
		if n == 0 || sum == 0 {
			out[i] = math.Inf(-1)
			continue
		}
		out[i] = 10 * math.Log10(2*sum/float64(n)) // a full-scale sine reads 0 (AES17)
	}
	return out
}

// picture is the levels of a channel on a scale that ends at high.
func (s *sonagram) picture(levels []float64, of string, high float64) *Spectrogram {
	return &Spectrogram{
		Of: of, StepS: s.stepS(), Hz: s.hz,
		Levels: levelGrid(len(s.hz), s.columns, high-shownRangeDB, high, levels),
	}
}

// levelGrid puts levels into bytes.
func levelGrid(rows, columns int, low, high float64, levels []float64) Levels {
	l := Levels{Rows: rows, Columns: columns, LowDB: low, HighDB: high, Bytes: make([]byte, len(levels))}
	for i, v := range levels {
		x := math.Round(255 * (v - low) / (high - low))
		if x > 0 { // and not NaN
			l.Bytes[i] = byte(math.Min(x, 255))
		}
	}
	return l
}

// painter draws a take before and after the beam while it passes.
type painter struct {
	before, after *sonagram
	mics          []int       // of before, indices into the used microphones
	few           audio.Block // their frames
}

// newPainter returns the painter of the take; its mics are the microphone that
// stands for the reference, and another should that one turn out to be broken.
// It is nil where there is no page or the take is too short for a picture.
func (r *run) newPainter() (*painter, error) {
	if !slices.Contains(r.set.reports, ReportHTML) {
		return nil, nil
	}
	h := r.take.header
	p := &painter{mics: r.line.witnesses()}
	var err error
	if p.before, err = newSonagram(len(p.mics), h.Rate, h.Frames, r.set.Private); err != nil || p.before == nil {
		return nil, err
	}
	p.after, err = newSonagram(1, h.Rate, h.Frames, r.set.Private)
	return p, err
}

// witnesses are the used microphones that can stand for the reference, the
// nearest to the reference point or the one that the rig names first, at most
// two.
func (b *beamline) witnesses() []int {
	list := make([]int, len(b.used))
	for i := range list {
		list[i] = i
	}
	named := slices.Index(b.used, b.referenceMic())
	slices.SortStableFunc(list, func(i, j int) int {
		switch {
		case i == named:
			return -1
		case j == named:
			return 1
		case b.at[i].Distance(b.ref) < b.at[j].Distance(b.ref)-1e-9:
			return -1
		case b.at[j].Distance(b.ref) < b.at[i].Distance(b.ref)-1e-9:
			return 1
		}
		return 0
	})
	return list[:min(2, len(list))]
}

// witness is the first of some used microphones that no flag of its channel
// speaks against, or else the first.
func (b *beamline) witness(mics []int, channels []Channel) int {
	for _, i := range mics {
		number := b.rig.Mics[b.used[i]].Channel
		if !slices.ContainsFunc(channels, func(c Channel) bool { return c.Channel == number && len(c.Flags) > 0 }) {
			return i
		}
	}
	return mics[0]
}

// Write implements audio.Sink for the corrected microphones.
func (p *painter) Write(src audio.Block) error {
	if p.few.Frames() < src.Frames() {
		p.few = audio.NewBlock(len(p.mics), src.Frames())
	}
	few := p.few.Slice(0, src.Frames())
	for k, i := range p.mics {
		copy(few.Channel(k), src.Channel(i))
	}
	return p.before.Write(few)
}

// pictures fills in what the page draws, where there is one.
func (r *run) pictures(res *Result) error {
	if !slices.Contains(r.set.reports, ReportHTML) {
		return nil
	}
	res.Pictures = &Pictures{Response: r.line.pattern()}
	p := r.painter
	if p == nil {
		return nil
	}
	for _, s := range []*sonagram{p.before, p.after} {
		if err := s.finish(); err != nil {
			return err
		}
	}
	witness := r.line.witness(p.mics, res.Channels)
	before, after := p.before.levels(slices.Index(p.mics, witness)), p.after.levels(0)
	top := math.Max(slices.Max(before), slices.Max(after))
	if math.IsInf(top, -1) {
		return nil // digital silence has no picture
	}
	top = 5 * math.Ceil(top/5)
	res.Pictures.Reference = p.before.picture(before, r.rig.Mics[r.line.used[witness]].Name, top)
	res.Pictures.Output = p.after.picture(after, "", top)
	return nil
}

// What the picture of the response is made of.
const (
	responseRowsPerOctave = 18
	responseRangeDB       = 40
	responseMostDB        = 20  // above the steered direction
	fineMics              = 64  // up to so many the angles are 1° apart, else 2°
	lobesPerFrequency     = 6   // the highest
	leastLobeDB           = -30 // of a side lobe that is marked
)

// lobeHz are the frequencies at which lobes are marked.
var lobeHz = [...]float64{500, 1000, 2000, 4000, 8000, 12500}

// pattern is what the weights in force let through, for sources at the
// elevation that the beam is steered to and at the distance of a focus.
func (b *beamline) pattern() *Response {
	rate := float64(b.model.Rate)
	look := b.look.Direction(b.ref)
	beam := response.Beam{Transfer: b.model, Mics: b.at, Reference: b.ref, Look: b.look, Speed: b.rig.speed}
	p := &Response{ElevationDeg: look.ElevationDeg(), Lobes: []Lobe{}}
	p.Hz = logRows(lowestRowHz, min(highestRowHz, highestRowPart*rate), responseRowsPerOctave)
	step := 1
	if len(b.at) > fineMics {
		step = 2
	}
	metres, near := beam.CutDistance()
	if near {
		p.DistanceM = number(metres)
	}
	var waves []acoustics.Wave
	for a := -180; a <= 180; a += step {
		p.AnglesDeg = append(p.AnglesDeg, float64(a))
		from := rig.Direction{Azimuth: float64(a) * math.Pi / 180, Elevation: look.Elevation}
		if near {
			waves = append(waves, acoustics.Spherical{At: b.ref.Add(from.Unit().Scale(metres))})
		} else {
			waves = append(waves, acoustics.Plane{From: from})
		}
	}
	pattern := beam.Pattern(waves, p.Hz)
	levels := make([]float64, 0, len(p.Hz)*len(waves))
	top := 0.0
	for f := range p.Hz {
		for d := range waves {
			v := pattern.LevelDB(f, d)
			if v > top && !math.IsInf(v, 1) {
				top = v
			}
			levels = append(levels, v)
		}
	}
	if top < 0.5 {
		top = 0
	}
	top = math.Min(5*math.Ceil(top/5), responseMostDB)
	p.Levels = levelGrid(len(p.Hz), len(waves), top-responseRangeDB, top, levels)
	if hz, found := response.GratingLimit(b.at, look, b.rig.speed, rate/2); found {
		p.GratingFreeBelowHz = number(hz)
	}
	p.Lobes = append(p.Lobes, lobes(beam, look, p.Hz[len(p.Hz)-1])...)
	return p
}

// lobes returns the lobes of a beam that lie in the picture of its response, by
// frequency and azimuth.
func lobes(b response.Beam, look rig.Direction, highest float64) []Lobe {
	var hz []float64
	for _, f := range lobeHz {
		if f <= highest {
			hz = append(hz, f)
		}
	}
	cut := response.NewCut(b.Mics, look)
	place := placer(b.Mics, cut, look)
	list := []Lobe{}
	for _, at := range b.Predict(cut, hz) {
		var found []response.Lobe
		for _, l := range at.SideLobes {
			if l.LevelDB >= leastLobeDB {
				found = append(found, l)
			}
		}
		slices.SortStableFunc(found, func(x, y response.Lobe) int {
			switch {
			case x.LevelDB > y.LevelDB:
				return -1
			case x.LevelDB < y.LevelDB:
				return 1
			}
			return 0
		})
		var here []Lobe
		for _, l := range found[:min(len(found), lobesPerFrequency)] {
			for _, az := range place(l.Angle) {
				here = append(here, Lobe{Hz: at.Hz, AzimuthDeg: az, LevelDB: l.LevelDB, Kind: "side"})
			}
		}
		for _, a := range at.GratingLobes {
			for _, az := range place(a) {
				level := b.Pattern([]acoustics.Wave{b.CutWave(cut, a)}, []float64{at.Hz}).LevelDB(0, 0)
				here = append(here, Lobe{Hz: at.Hz, AzimuthDeg: az, LevelDB: level, Kind: "grating"})
			}
		}
		if at.Beamwidth != nil {
			for _, az := range place(at.Peak) {
				level := b.Pattern([]acoustics.Wave{b.CutWave(cut, at.Peak)}, []float64{at.Hz}).LevelDB(0, 0)
				here = append(here, Lobe{Hz: at.Hz, AzimuthDeg: az, LevelDB: level, Kind: "main"})
			}
		}
		here = slices.DeleteFunc(here, func(l Lobe) bool { return number(l.LevelDB) == nil })
		slices.SortStableFunc(here, func(x, y Lobe) int {
			switch {
			case x.AzimuthDeg < y.AzimuthDeg:
				return -1
			case x.AzimuthDeg > y.AzimuthDeg:
				return 1
			}
			return 0
		})
		list = append(list, here...)
	}
	return list
}

// placer returns what turns an angle of the cut into azimuths of a picture at
// the elevation of look: none where the cut leaves that elevation, two for a
// level line of microphones, which hears both sides alike.
func placer(mics []rig.Point, cut response.Cut, look rig.Direction) func(angle float64) []float64 {
	const near = 0.01 // radians
	axis, mirrored := 0.0, false
	if g := rig.Spread(mics); g.Shape == rig.ShapeLine {
		end := rig.Toward(g.Axis)
		axis, mirrored = end.Azimuth, math.Abs(end.Elevation) < near && math.Abs(look.Elevation) < near
	}
	degrees := func(rad float64) float64 { return 180 / math.Pi * math.Remainder(rad, 2*math.Pi) }
	return func(angle float64) []float64 {
		d := cut.Toward(angle)
		if math.Abs(d.Elevation-look.Elevation) > near {
			return nil
		}
		list := []float64{degrees(d.Azimuth)}
		if other := degrees(2*axis - d.Azimuth); mirrored && math.Abs(math.Remainder(other-list[0], 360)) > 0.5 {
			list = append(list, other)
		}
		return list
	}
}

// stepS is the time from column to column, seconds.
func (s *sonagram) stepS() float64 { return float64(s.hop*s.perCol) / s.rate }

// power is the power of the first channel in each column, over all rows.
func (s *sonagram) power() []float64 {
	out := make([]float64, s.columns)
	for i, sum := range s.cells[0] {
		if n := s.count[i%s.columns]; n > 0 {
			out[i%s.columns] += sum / float64(n)
		}
	}
	return out
}
