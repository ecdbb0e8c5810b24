package measure

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
	"alidade/pkg/spectral"
)

// MeterOptions say what a Meter keeps. The zero value measures the mean over
// all channels and the totals of each.
type MeterOptions struct {
	// Used are the channels, 0-based, whose mean power is the reference; nil is
	// all of them.
	Used []int
	// PerChannel keeps a series of every used channel too.
	PerChannel bool
	// SeriesBytes bounds the memory of the mean series, ChannelBytes that of
	// all channel series together; 0 is 6 MiB and 48 MiB. When one is used up,
	// neighbouring entries are merged in pairs and entries last twice as long.
	SeriesBytes, ChannelBytes int
}

// Meter is a sink that measures band powers over time and the totals of every
// channel. Create one with NewMeter, Close it after the last frame.
type Meter struct {
	layout *layout
	format audio.Format
	used   []int
	slot   []int // slot[ch]: place of channel ch in used, -1 if not used

	pending audio.Block // the window of the undecimated signal
	fill    int         // frames in pending
	totals  []total
	low     []decimator
	lowAt   int // samples of the decimated signal so far

	fft     []*spectral.FFT[float32] // one a grid
	x       []float32
	re, im  []float32
	p       []float32
	power   []float64    // power[band], of one channel
	mean    [][]float64  // mean[grid][i]
	byGrid  [][]float64  // scratch of one channel's powers in the order of the grid
	sums    [][]float64  // sums[ch][band] over all windows
	counts  []int        // windows of each grid
	stores  []*History   // one a grid
	perChan [][]*History // perChan[slot][grid]
	closed  bool
	failed  error
}

// shortChannelS is the least hop of a channel series, seconds.
const shortChannelS = 0.04

// NewMeter returns a meter for frames of the given format. It returns an error
// for a rate outside 8 to 384 kHz, for no channels, and for a used channel that
// does not exist or is named twice.
func NewMeter(format audio.Format, o MeterOptions) (*Meter, error) {
	l, err := newLayout(format.Rate)
	if err != nil {
		return nil, err
	}
	if format.Channels < 1 {
		return nil, fmt.Errorf("measure: %d channels", format.Channels)
	}
	m := &Meter{layout: l, format: format, slot: make([]int, format.Channels)}
	for ch := range m.slot {
		m.slot[ch] = -1
	}
	if o.Used == nil {
		for ch := range format.Channels {
			m.used = append(m.used, ch)
		}
	} else {
		m.used = append(m.used, o.Used...)
	}
	if len(m.used) == 0 {
		return nil, fmt.Errorf("measure: no channel is used")
	}
	for i, ch := range m.used {
		if ch < 0 || ch >= format.Channels {
			return nil, fmt.Errorf("measure: used channel %d: there are %d", ch+1, format.Channels)
		}
		if m.slot[ch] >= 0 {
			return nil, fmt.Errorf("measure: used channel %d is named twice", ch+1)
		}
		m.slot[ch] = i
	}
	if o.SeriesBytes <= 0 {
		o.SeriesBytes = 6 << 20
	}
	if o.ChannelBytes <= 0 {
		o.ChannelBytes = 48 << 20
	}
	m.allocate(o)
	for i := range l.grids {
		f, err := spectral.NewFFT[float32](l.grids[i].size)
		if err != nil {
			return nil, fmt.Errorf("measure: %w", err)
		}
		m.fft = append(m.fft, f)
	}
	return m, nil
}

func (m *Meter) allocate(o MeterOptions) {
	l := m.layout
	top := &l.grids[0]
	m.pending = audio.NewBlock(m.format.Channels, top.size)
	m.totals = make([]total, m.format.Channels)
	longest := max(top.size, l.longest)
	m.x = make([]float32, longest)
	m.re = make([]float32, longest/2+1)
	m.im = make([]float32, longest/2+1)
	m.p = make([]float32, longest/2+1)
	m.power = make([]float64, len(l.bands))
	m.counts = make([]int, len(l.grids))
	m.low = make([]decimator, len(m.used))
	for i := range m.low {
		m.low[i] = newDecimator(l.taps, l.factor, top.hop, l.longest)
	}
	m.sums = make([][]float64, len(m.used))
	for i := range m.sums {
		m.sums[i] = make([]float64, len(l.bands))
	}
	rate := 0.0 // entries of all bands a second
	for _, g := range l.grids {
		rate += float64(len(g.bands)) / g.seconds
	}
	// What g gets of so many bytes.
	history := func(g grid, frames, bytes int) *History {
		share := float64(bytes) * float64(len(g.bands)) / g.seconds / rate
		return NewHistory(len(g.bands), frames, int(share)/(4*max(1, len(g.bands))))
	}
	for _, g := range l.grids {
		m.stores = append(m.stores, history(g, 1, o.SeriesBytes))
		m.mean = append(m.mean, make([]float64, len(g.bands)))
		m.byGrid = append(m.byGrid, make([]float64, len(g.bands)))
	}
	if !o.PerChannel {
		return
	}
	m.perChan = make([][]*History, len(m.used))
	for i := range m.perChan {
		for _, g := range l.grids {
			frames := 1
			for float64(frames)*g.seconds < shortChannelS {
				frames *= 2
			}
			m.perChan[i] = append(m.perChan[i], history(g, frames, o.ChannelBytes/len(m.used)))
		}
	}
}

// Write implements audio.Sink. It returns an error for a block of the wrong
// channel count, for a sample that is not a finite number, and after Close.
func (m *Meter) Write(src audio.Block) error {
	if m.failed != nil {
		return m.failed
	}
	if m.closed {
		return fmt.Errorf("measure: write after close")
	}
	if src.Channels() != m.format.Channels {
		return fmt.Errorf("measure: block of %d channels, the meter has %d", src.Channels(), m.format.Channels)
	}
	size, hop := m.layout.grids[0].size, m.layout.grids[0].hop
	for at := 0; at < src.Frames(); {
		room := (m.fill/hop+1)*hop - m.fill
		n := min(room, src.Frames()-at)
		m.pending.Slice(m.fill, m.fill+n).CopyFrom(src.Slice(at, at+n))
		m.fill += n
		at += n
		if m.fill%hop != 0 {
			continue
		}
		if err := m.chunk(m.fill-hop, m.fill); err != nil {
			return err
		}
		if m.fill == size {
			m.window()
			m.pending.Slice(0, size-hop).CopyFrom(m.pending.Slice(hop, size))
			m.fill = size - hop
		}
	}
	return nil
}

// chunk takes the frames from..to of pending into the totals and the
// decimated signal.
func (m *Meter) chunk(from, to int) error {
	for ch := range m.totals {
		x := m.pending.Channel(ch)[from:to]
		if i := m.totals[ch].add(x); i >= 0 {
			m.failed = fmt.Errorf("measure: channel %d: frame %d: sample is %g", ch+1, m.totals[ch].frames+int64(i), x[i])
			return m.failed
		}
	}
	for i, ch := range m.used {
		m.low[i].add(m.pending.Channel(ch)[from:to])
	}
	m.drain()
	return nil
}

// window analyses the window of the undecimated signal in pending.
func (m *Meter) window() {
	size := m.layout.grids[0].size
	for i, ch := range m.used {
		m.analyse(0, i, m.pending.Channel(ch)[:size])
	}
	m.finish(0)
}

// analyse adds one window x of used channel i to the mean of grid g.
func (m *Meter) analyse(g, i int, x []float32) {
	l := &m.layout.grids[g]
	y := m.x[:len(x)]
	kernel.Multiply(y, x, l.window)
	bins := l.size/2 + 1
	m.fft[g].Forward(m.re[:bins], m.im[:bins], y)
	l.powers(m.power, m.p[:bins], m.re, m.im)
	own := m.byGrid[g]
	for j, b := range l.bands {
		p := m.power[b]
		own[j] = p
		m.sums[i][b] += p
		m.mean[g][j] += p
	}
	if m.perChan != nil {
		m.perChan[i][g].Add(own)
	}
}

// finish closes the window of grid g after the last channel.
func (m *Meter) finish(g int) {
	scale := 1 / float64(len(m.used))
	for j := range m.mean[g] {
		m.mean[g][j] *= scale
	}
	m.stores[g].Add(m.mean[g])
	clear(m.mean[g])
	m.counts[g]++
}

// drain takes the new samples of the decimated signal, which all channels have
// in the same number, through the windows they complete.
func (m *Meter) drain() {
	step := lowSizes[len(lowSizes)-1] / 2
	for m.low[0].ready() >= step {
		for i := range m.low {
			m.low[i].advance(step)
		}
		m.lowAt += step
		for g := 1; g < len(m.layout.grids); g++ {
			size, hop := m.layout.grids[g].size, m.layout.grids[g].hop
			if m.lowAt < size || (m.lowAt-size)%hop != 0 {
				continue
			}
			for i := range m.low {
				m.analyse(g, i, m.low[i].last(size))
			}
			m.finish(g)
		}
	}
}

// Close takes in the rest of the frames. A last window that the signal does
// not fill is left out of the band powers; the totals count every frame.
func (m *Meter) Close() error {
	if m.failed != nil || m.closed {
		return m.failed
	}
	m.closed = true
	hop := m.layout.grids[0].hop
	if rest := m.fill % hop; rest > 0 {
		if err := m.chunk(m.fill-rest, m.fill); err != nil {
			return err
		}
	}
	for i := range m.low {
		m.low[i].flush()
	}
	m.drain()
	return nil
}

// Thirds returns the mean power over the used channels in one-third octaves.
// The tracks share the meter's memory: call it after Close.
func (m *Meter) Thirds() *Series { return m.series(m.stores, 0, m.layout.thirds) }

// Octaves returns the mean power over the used channels in octaves.
func (m *Meter) Octaves() *Series { return m.series(m.stores, m.layout.thirds, len(m.layout.bands)) }

// ChannelThirds returns the one-third octaves of every used channel, in the
// order of Used, nil without PerChannel.
func (m *Meter) ChannelThirds() []*Series { return m.channels(0, m.layout.thirds) }

// ChannelOctaves returns the octaves of every used channel.
func (m *Meter) ChannelOctaves() []*Series {
	return m.channels(m.layout.thirds, len(m.layout.bands))
}

func (m *Meter) channels(from, to int) []*Series {
	if m.perChan == nil {
		return nil
	}
	list := make([]*Series, len(m.perChan))
	for i, s := range m.perChan {
		list[i] = m.series(s, from, to)
	}
	return list
}

func (m *Meter) series(stores []*History, from, to int) *Series {
	s := &Series{Tracks: make([]Track, to-from)}
	for g := range m.layout.grids {
		l := &m.layout.grids[g]
		for j, b := range l.bands {
			if b < from || b >= to {
				continue
			}
			frames := float64(stores[g].Windows())
			s.Tracks[b-from] = Track{
				Band:    m.layout.bands[b],
				HopS:    frames * l.seconds,
				LengthS: (frames + 1) * l.seconds,
				Power:   stores[g].Power(j),
			}
		}
	}
	return s
}

// BandPower returns the mean power of used channel i (in the order of Used) in
// every one-third octave, re a full-scale sine, NaN where the signal is shorter
// than the window of the band.
func (m *Meter) BandPower(i int) []float64 {
	list := make([]float64, m.layout.thirds)
	for b := range list {
		list[b] = math.NaN()
	}
	for g := range m.layout.grids {
		for _, b := range m.layout.grids[g].bands {
			if b < len(list) && m.counts[g] > 0 {
				list[b] = m.sums[i][b] / float64(m.counts[g])
			}
		}
	}
	return list
}
