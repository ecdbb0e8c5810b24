package bearing

import (
	"fmt"
	"math"
	"runtime"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// Finder is a sink that listens to a take and finds where its sounds come
// from. Channel m of what is written is microphone m, its gain and polarity
// already corrected. Memory does not grow with the length of the take but for
// the findings themselves: a few hundred bytes a source and window.
type Finder struct {
	mics   []rig.Point
	space  *space
	set    settings
	pairs  []pairIndex
	frames *framer
	look   *looker
	floor  *floorTracker

	plain, onset []*crossSum // one a section, a ring of set.sections
	noiseSection *crossSum
	noise        *crossSum // faded sum
	noiseMean    *crossSum
	sectionPower [][]float64
	section      int // sections complete
	inSection    int // frames in the section under way

	late, prev, smooth, weight []float64
	micLevel                   []float64 // sum of frame powers
	frameCount                 int64
	samples                    int64
	picture                    []float64
	pictureWindows             int

	desks []*desk
	turn  int // the desk that is next, whose window is the oldest one
	begun int // windows

	windows   []Window
	sightings []sighting
	leads     []lead // between sightings
	detailed  int
	reasons   map[string]int
	closed    bool
	err       error
	result    *Result
}

// maxDetailed bounds the sightings whose groups of lines are kept, for the
// spread over frequency. Later ones do without.
const maxDetailed = 20000

// silenceFloor is the mean square per bin below which a frame is silence:
// -120 dB re full scale.
const silenceFloor = 1e-12

// Activity limits: the sound of a window is active if its power lies this far
// above the stationary floor on average over the bins, or farther in a part of
// the bins.
const (
	activeDB     = 3.0
	activeBinDB  = 7.0
	activeBins   = 0.15
	reverbTime   = 0.5 // seconds, assumed for the onset weights
	floorFrameDB = 1.5 // a frame whose power is less above the floor is noise
)

// NewFinder returns a finder for microphones at the places mics, metres, and a
// take of rate frames per second. Directions are seen from ref, metres. The
// error lists every fault of the arguments.
func NewFinder(mics []rig.Point, ref rig.Point, rate int, o Options) (*Finder, error) {
	set, err := settle(o, mics, rig.Spread(mics), rate)
	if err != nil {
		return nil, err
	}
	f := &Finder{mics: append([]rig.Point(nil), mics...), set: set, reasons: map[string]int{}}
	f.space = newSpace(mics, ref, set.Speed, o.Corrections)
	f.pairs = choosePairs(len(mics), maxPairs)
	K := set.binTo - set.binFrom
	if f.frames, err = newFramer(len(mics), set.size, set.hop, set.binFrom, set.binTo); err != nil {
		return nil, err
	}
	if f.look, err = newLooker(f.space, &f.set, f.pairs); err != nil {
		return nil, err
	}
	f.floor = newFloorTracker(K, float64(set.hop)/float64(rate))
	fresh := func() *crossSum { return newCrossSum(len(mics), len(f.pairs), K) }
	for range set.sections {
		f.plain = append(f.plain, fresh())
		f.onset = append(f.onset, fresh())
		f.sectionPower = append(f.sectionPower, make([]float64, K))
	}
	f.noiseSection, f.noise, f.noiseMean = fresh(), fresh(), fresh()
	// While frames go on, windows are looked at on another core. Each is looked
	// at by itself and they are collected in order: the result is the same.
	cores := runtime.GOMAXPROCS(0)
	if set.Cores > 0 {
		cores = min(cores, set.Cores)
	}
	for d := range min(cores, mostDesks) {
		p := &desk{look: f.look, sum: fresh(), noise: fresh(), done: make(chan struct{}, 1)}
		if d > 0 {
			if p.look, err = f.look.twin(); err != nil {
				return nil, err
			}
		}
		f.desks = append(f.desks, p)
	}
	for _, p := range []*[]float64{&f.late, &f.prev, &f.smooth, &f.weight} {
		*p = make([]float64, K)
	}
	f.micLevel = make([]float64, len(mics))
	f.picture = make([]float64, len(f.look.grid.points))
	return f, nil
}

// Write implements audio.Sink. It returns an error if src has not one channel
// a microphone, holds a sample that is not a finite number, or the finder is
// closed.
func (f *Finder) Write(src audio.Block) error {
	if f.err != nil {
		return f.err
	}
	if f.closed {
		return fmt.Errorf("bearing: write after close")
	}
	if src.Channels() != len(f.mics) {
		f.err = fmt.Errorf("bearing: block of %d channels for %d microphones", src.Channels(), len(f.mics))
		return f.err
	}
	for at := 0; at < src.Frames(); {
		n := min(src.Frames()-at, f.set.size-f.frames.fill)
		for m, h := range f.frames.hold {
			x := src.Channel(m)[at : at+n]
			to := h[f.frames.fill : f.frames.fill+n]
			for i, v := range x {
				if v-v != 0 {
					f.err = fmt.Errorf("bearing: channel %d, frame %d: sample is %g: want a finite number", m+1, f.samples+int64(i), v)
					return f.err
				}
				to[i] = v
			}
		}
		f.frames.fill += n
		at += n
		f.samples += int64(n)
		if f.frames.fill == f.set.size {
			f.frame()
			for _, h := range f.frames.hold {
				copy(h, h[f.set.hop:])
			}
			f.frames.fill = f.set.size - f.set.hop
		}
	}
	return nil
}

// frame takes the frame that is held.
func (f *Finder) frame() {
	f.frames.transform()
	f.frameCount++
	s := &f.frames.spectra
	for m, p := range f.frames.micPower {
		f.micLevel[m] += p
	}
	boxSmooth(f.smooth, s.power, 3)
	f.floor.update(s.power)
	// Weights that prefer sound that has just begun over its reverberation:
	// what the last frames would still leave at a reverberation time of 0.5 s,
	// and twice the floor, count against a line.
	decay := math.Pow(10, -6*float64(f.set.hop)/float64(f.set.rate)/reverbTime)
	above := 0.0
	for k, p := range f.smooth {
		f.late[k] = decay * math.Max(f.late[k], f.prev[k])
		f.prev[k] = p
		f.weight[k] = 0
		if p > 0 {
			f.weight[k] = math.Min(1, math.Max(0, 1-(f.late[k]+2*f.floor.floor[k])/p))
		}
		above += math.Log10((p + 1e-30) / (f.floor.floor[k] + 1e-30))
	}
	slot := f.section % f.set.sections
	f.plain[slot].add(s, f.pairs, nil)
	f.onset[slot].add(s, f.pairs, f.weight)
	addTo(f.sectionPower[slot], s.power)
	if 10*above/float64(len(f.smooth)) < floorFrameDB {
		f.noiseSection.add(s, f.pairs, nil)
	}
	f.inSection++
	if f.inSection == f.set.section {
		f.endSection()
	}
}

// endSection closes the section under way and looks at the window that ends
// with it.
func (f *Finder) endSection() {
	f.section++
	f.inSection = 0
	if f.noiseSection.frames > 0 {
		// A memory of about five sections.
		if f.noise.frames > 0 {
			f.noise.fade(0.8)
		}
		f.noise.plus(f.noiseSection)
		f.noiseSection.clear()
		K := f.noise.bins
		for k, w := range f.noise.weight {
			f.noiseMean.weight[k] = 1 / math.Max(w, 1e-300)
		}
		for i := range f.noise.re {
			f.noiseMean.re[i] = f.noise.re[i] * f.noiseMean.weight[i%K]
			f.noiseMean.im[i] = f.noise.im[i] * f.noiseMean.weight[i%K]
		}
	}
	if f.section >= f.set.sections {
		f.endWindow(f.section-f.set.sections, f.set.sections)
	}
	next := f.section % f.set.sections
	f.plain[next].clear()
	f.onset[next].clear()
	clear(f.sectionPower[next])
}

// endWindow looks at the window of count sections that begins with section
// first.
func (f *Finder) endWindow(first, count int) {
	K := f.noise.bins
	frames := 0
	power := make([]float64, K)
	for i := range count {
		slot := (first + i) % f.set.sections
		frames += f.plain[slot].frames
		addTo(power, f.sectionPower[slot])
	}
	if frames == 0 {
		return
	}
	step := float64(f.set.hop) / float64(f.set.rate)
	start := float64(first*f.set.section)*step + step/2
	w := Window{Start: start, End: start + float64(frames)*step}
	mean, above, bins := 0.0, 0.0, 0
	for k := range power {
		p := power[k] / float64(frames)
		mean += p / float64(K)
		db := 10 * math.Log10((p+1e-30)/(f.floor.floor[k]+1e-30))
		above += db / float64(K)
		if db > activeBinDB {
			bins++
		}
	}
	w.Active = above > activeDB || float64(bins) > activeBins*float64(K)
	p := f.desks[f.turn]
	f.turn = (f.turn + 1) % len(f.desks)
	f.collect(p)
	p.held, p.index, p.window, p.mean, p.found = true, f.begun, w, mean, nil
	f.begun++
	if mean < silenceFloor {
		p.window.Reason = "silence"
		p.done <- struct{}{}
		return
	}
	p.sum.clear()
	sums := f.plain
	p.noisy = false
	if w.Active {
		sums = f.onset
		if f.noise.frames >= 8 {
			p.noisy = true
			copy(p.noise.re, f.noiseMean.re)
			copy(p.noise.im, f.noiseMean.im)
		}
	}
	for i := range count {
		p.sum.plus(sums[(first+i)%f.set.sections])
	}
	if len(f.desks) > 1 {
		go p.work()
	} else {
		p.work()
	}
}

// Close ends the take: what is left of the last section is looked at, and the
// windows are brought together. It may be called more than once.
func (f *Finder) Close() error {
	if f.closed {
		return f.err
	}
	f.closed = true
	if f.err != nil {
		return f.err
	}
	// A frame that is at least half full of new samples is filled up with
	// silence; so is the first one whatever it holds.
	fresh := f.frames.fill - (f.set.size - f.set.hop)
	if f.frameCount == 0 {
		fresh = f.frames.fill
	}
	if (f.frameCount == 0 && fresh > 0) || fresh >= f.set.hop/2 {
		for _, h := range f.frames.hold {
			clear(h[f.frames.fill:])
		}
		f.frame()
	}
	if f.inSection > 0 && (2*f.inSection >= f.set.section || f.begun == 0) {
		if f.section+1 >= f.set.sections {
			f.endSection()
		} else {
			f.section++
			f.endWindow(0, f.section)
		}
	} else if f.begun == 0 && f.section > 0 {
		f.endWindow(0, f.section)
	}
	for range f.desks {
		f.collect(f.desks[f.turn])
		f.turn = (f.turn + 1) % len(f.desks)
	}
	f.result = f.summarise()
	return nil
}

// Result returns what was found, closing the finder if need be. It is nil if
// writing failed.
func (f *Finder) Result() *Result {
	if f.Close() != nil {
		return nil
	}
	return f.result
}
