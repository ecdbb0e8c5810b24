package scan

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/measure"
)

// Options say what an Analysis is of.
type Options struct {
	// Entries is the most that a band of a beam keeps over time, 0 is 12,000;
	// when they are used up, neighbours are merged and stand for twice the time.
	Entries int
}

// defaultEntries hold 8 minutes at the usual windows.
const defaultEntries = 12000

// Analysis is an audio.Sink that measures the one-third octaves of many beams.
// Create one with New, Close it after the last frame.
type Analysis struct {
	format audio.Format
	bands  []measure.Band
	grids  []*grid
	place  [][2]int // place[band]: grid, and index in it
	beams  int
	closed bool
}

// New returns an analysis for sets of filters, one a beam, of streams of the
// given format, whose channels are the microphones of the filters. It returns an
// error for filters that do not fit the stream and for a rate that no band can be
// measured at.
func New(format audio.Format, sets []*beam.Filters, o Options) (*Analysis, error) {
	if len(sets) == 0 {
		return nil, errors.New("scan: no beams")
	}
	for i, f := range sets {
		if err := f.Validate(); err != nil {
			return nil, fmt.Errorf("scan: beam %d of %d: %w", i+1, len(sets), err)
		}
		if f.Mics() != format.Channels || f.Rate != format.Rate {
			return nil, fmt.Errorf("scan: beam %d of %d: filters of %d microphones at %d frames per second for a stream of %d at %d",
				i+1, len(sets), f.Mics(), f.Rate, format.Channels, format.Rate)
		}
	}
	if o.Entries <= 0 {
		o.Entries = defaultEntries
	}
	a := &Analysis{format: format, bands: measure.ThirdOctaves(format.Rate), beams: len(sets)}
	if len(a.bands) == 0 {
		return nil, fmt.Errorf("scan: %d frames per second hold no band", format.Rate)
	}
	short, long := sizes(format.Rate, sets)
	split := 0 // the first band of the short windows
	for long > 0 && split < len(a.bands) && a.bands[split].CentreHz*float64(short)/float64(format.Rate) < leastPeriods {
		split++
	}
	for _, part := range []struct{ size, from, to int }{{long, 0, split}, {short, split, len(a.bands)}} {
		if part.from == part.to {
			continue
		}
		g, err := newGrid(format, part.size, a.bands, part.from, part.to, sets, o)
		if err != nil {
			return nil, fmt.Errorf("scan: %w", err)
		}
		for i := range g.bands {
			a.place = append(a.place, [2]int{len(a.grids), i})
		}
		a.grids = append(a.grids, g)
	}
	return a, nil
}

// BeamBytes is about how much memory one beam with such filters takes in an
// analysis of a stream of so many frames, bytes.
func BeamBytes(format audio.Format, f *beam.Filters, o Options, frames int64) int64 {
	if o.Entries <= 0 {
		o.Entries = defaultEntries
	}
	short, long := sizes(format.Rate, []*beam.Filters{f})
	bins := int64(short)*9/20 + int64(long)/64
	entries := min(int64(o.Entries), 2*frames/int64(short)+1)
	return 8*bins*int64(format.Channels) + 8*entries*int64(len(measure.ThirdOctaves(format.Rate)))
}

// Bands are the one-third octaves measured, lowest first.
func (a *Analysis) Bands() []measure.Band { return a.bands }

// Write implements audio.Sink. It returns an error for a block of another
// number of channels and after Close.
func (a *Analysis) Write(src audio.Block) error {
	if a.closed {
		return errors.New("scan: write after close")
	}
	if src.Channels() != a.format.Channels {
		return fmt.Errorf("scan: block of %d channels, the analysis is of %d", src.Channels(), a.format.Channels)
	}
	for _, g := range a.grids {
		if err := g.stft.Write(src); err != nil {
			return err
		}
	}
	return nil
}

// Close takes in what waits. A last window that the stream does not fill is left
// out.
func (a *Analysis) Close() error {
	if !a.closed {
		a.closed = true
		for _, g := range a.grids {
			g.beamsOf()
		}
	}
	return nil
}

// Level returns the mean power of each band of a beam over the whole stream, re
// a full-scale sine; NaN for a band whose window the stream does not fill. Call
// it after Close.
func (a *Analysis) Level(i int) []float64 {
	return a.levels(func(g *grid) *store { return g.beams[i] })
}

// ReferenceLevel is Level of the reference.
func (a *Analysis) ReferenceLevel() []float64 {
	return a.levels(func(g *grid) *store { return g.ref })
}

func (a *Analysis) levels(of func(*grid) *store) []float64 {
	list := make([]float64, len(a.bands))
	for b, at := range a.place {
		s := of(a.grids[at[0]])
		list[b] = math.NaN()
		if s.count > 0 {
			list[b] = s.all[at[1]] / float64(s.count)
		}
	}
	return list
}

// Beam returns the one-third octaves of a beam over time, which share memory
// with the analysis. Call it after Close.
func (a *Analysis) Beam(i int) *measure.Series {
	return a.series(func(g *grid) *store { return g.beams[i] })
}

// Reference returns the mean over the microphones, like Beam.
func (a *Analysis) Reference() *measure.Series {
	return a.series(func(g *grid) *store { return g.ref })
}

func (a *Analysis) series(of func(*grid) *store) *measure.Series {
	s := &measure.Series{Tracks: make([]measure.Track, len(a.bands))}
	for b, at := range a.place {
		g := a.grids[at[0]]
		st := of(g)
		n := float64(st.Windows())
		s.Tracks[b] = measure.Track{Band: a.bands[b], HopS: n * g.seconds, LengthS: (n + 1) * g.seconds, Power: st.Power(at[1])}
	}
	return s
}
