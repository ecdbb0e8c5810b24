package scenario

import (
	"fmt"
	"io"
	"math"
	"slices"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
)

// Options is what rendering needs from outside the scenario.
type Options struct {
	// Sound returns the recording of a source of kind file: its frames per
	// second and its samples. Nil if there are none.
	Sound func(name string) (rate int, samples []float32, err error)
}

// Rendering is a scenario ready to be heard. Every source that it returns
// starts at the first frame and is independent of the others; the same
// scenario gives the same samples every time. It is safe for use by several
// goroutines, the sources are not.
type Rendering struct {
	plan  *plan
	truth *Truth
}

// Render prepares a scenario: it validates it, works out the responses of rooms
// and fields, and finds the levels. It renders no sound yet, unless a fault
// asks for a fraction of clipped frames, which takes one pass over the mix.
func (s *Scenario) Render(opt Options) (*Rendering, error) {
	if err := s.Validate(); err != nil {
		return nil, err
	}
	p, err := newPlan(s, opt)
	if err != nil {
		return nil, err
	}
	r := &Rendering{plan: p}
	r.truth = p.truth()
	return r, nil
}

// Format returns rate and channels of the takes.
func (r *Rendering) Format() audio.Format {
	return audio.Format{Rate: r.plan.sc.RateHz, Channels: len(r.plan.channels)}
}

// Frames returns the length of the takes.
func (r *Rendering) Frames() int64 { return r.plan.frames }

// Rig returns the rig as its file states it.
func (r *Rendering) Rig() *rig.Rig { return r.plan.sc.Rig }

// Mix returns the take: targets and noise.
func (r *Rendering) Mix() audio.Source {
	return r.plan.open(r.plan.sc.Seed, r.plan.gains, r.plan.frames, partTarget, partNoise)
}

// Target returns the isolated target: the take with only the targets sounding,
// faults included, without what channels add by themselves.
func (r *Rendering) Target() audio.Source {
	return r.plan.open(r.plan.sc.Seed, r.plan.gains, r.plan.frames, partTarget)
}

// Direct returns Target without reflections.
func (r *Rendering) Direct() audio.Source {
	return r.plan.open(r.plan.sc.Seed, r.plan.gains, r.plan.frames, partDirect)
}

// Noise returns the isolated noise: the take without the targets. Target and
// Noise add up to Mix, except where a channel clips.
func (r *Rendering) Noise() audio.Source {
	return r.plan.open(r.plan.sc.Seed, r.plan.gains, r.plan.frames, partNoise)
}

// FreshNoise returns isolated noise of another length, seconds, and another
// seed: the same scene, other random sound. Faults that strike at certain times
// strike at the same ones.
func (r *Rendering) FreshNoise(seconds float64, seed uint64) (audio.Source, error) {
	if !(seconds > 0 && seconds <= MaxDurationS) {
		return nil, fmt.Errorf("scenario: fresh noise of %g s: want more than 0 and at most %d", seconds, MaxDurationS)
	}
	frames := int64(seconds*float64(r.plan.sc.RateHz) + 0.5)
	gains, err := r.plan.calibrate(seed, frames, true)
	if err != nil {
		return nil, err
	}
	return r.plan.open(seed, gains, frames, partNoise), nil
}

// Each renders mix, isolated target and isolated noise together, which costs
// little more than the mix alone, and calls fn for each block of them in turn.
// The blocks are reused. An error of fn ends it and is returned.
func (r *Rendering) Each(fn func(mix, target, noise audio.Block) error) error {
	p := r.plan
	desk := p.newDesk(p.sc.Seed, p.gains, partTarget, partNoise)
	boards := []*board{p.newBoard(p.sc.Seed, true), p.newBoard(p.sc.Seed, false), p.newBoard(p.sc.Seed, true)}
	fields := [][]*render.Field{{desk.fields[0], desk.fields[1]}, {desk.fields[0]}, {desk.fields[1]}}
	blocks := make([]audio.Block, 3)
	for b := range blocks {
		blocks[b] = audio.NewBlock(len(p.channels), render.HopFrames)
	}
	for at := int64(0); at < p.frames; at += render.HopFrames {
		n := int(min(render.HopFrames, p.frames-at))
		desk.advance(at, n)
		for b, board := range boards {
			board.run(blocks[b].Slice(0, n), at, fields[b])
		}
		if err := fn(blocks[0].Slice(0, n), blocks[1].Slice(0, n), blocks[2].Slice(0, n)); err != nil {
			return err
		}
	}
	return nil
}

// desk is the parts of a sound field that move on together.
type desk struct {
	plan   *plan
	fields []*render.Field
}

func (p *plan) newDesk(seed uint64, gains []float64, parts ...part) *desk {
	d := &desk{plan: p}
	for _, what := range parts {
		d.fields = append(d.fields, render.NewField(p.emitters(what, seed, gains, -p.lead), len(p.mics), -p.lead))
	}
	return d
}

// advance makes what every channel needs for the frames from at on available.
func (d *desk) advance(at int64, n int) {
	from, to := at, at+int64(n)
	for ch := range d.plan.channels {
		c := &d.plan.channels[ch]
		if !c.Shifts() {
			continue
		}
		rate := float64(d.plan.sc.RateHz)
		from = min(from, int64(math.Floor(c.Position(at, rate)))-render.KernelTaps/2+1)
		to = max(to, int64(math.Floor(c.Position(at+int64(n)-1, rate)))+render.KernelTaps/2+1)
	}
	for _, f := range d.fields {
		f.Hold(from, to)
	}
}

// board is all channels at work.
type board struct {
	plan  *plan
	lines []*render.Line
	x     []float64
}

func (p *plan) newBoard(seed uint64, additions bool) *board {
	b := &board{plan: p, x: make([]float64, render.HopFrames)}
	for ch := range p.channels {
		b.lines = append(b.lines, render.NewLine(&p.channels[ch], p.sc.RateHz, seed, ch, additions))
	}
	return b
}

// run writes the frames from at on that the channels make of the fields.
func (b *board) run(dst audio.Block, at int64, fields []*render.Field) {
	rate := float64(b.plan.sc.RateHz)
	n := dst.Frames()
	for ch, l := range b.lines {
		x := b.x[:n]
		clear(x)
		for _, f := range fields {
			if l.Mic < 0 {
				continue
			}
			row := f.Rows[l.Mic]
			if !l.Shifts() {
				for i, v := range row[at-f.Base:][:n] {
					x[i] += v
				}
				continue
			}
			for i := range x {
				pos := l.Position(at+int64(i), rate)
				whole := math.Floor(pos)
				x[i] += b.plan.kernel.At(row[int64(whole)-render.KernelTaps/2+1-f.Base:], pos-whole)
			}
		}
		l.Run(dst.Channel(ch), x)
	}
}

// take is a source of a rendering.
type take struct {
	desk   *desk
	board  *board
	frames int64
	at     int64 // frames computed
	out    audio.Block
	from   int // frames of out already given
	to     int
}

func (p *plan) open(seed uint64, gains []float64, frames int64, parts ...part) *take {
	additions := slices.Contains(parts, partNoise)
	return &take{desk: p.newDesk(seed, gains, parts...), board: p.newBoard(seed, additions), frames: frames,
		out: audio.NewBlock(len(p.channels), render.HopFrames)}
}

// Format implements audio.Source.
func (t *take) Format() audio.Format {
	p := t.desk.plan
	return audio.Format{Rate: p.sc.RateHz, Channels: len(p.channels)}
}

// Read implements audio.Source.
func (t *take) Read(dst audio.Block) (int, error) {
	n := 0
	for n < dst.Frames() {
		if t.from == t.to {
			if t.at >= t.frames {
				if n == 0 {
					return 0, io.EOF
				}
				return n, nil
			}
			t.from, t.to = 0, int(min(render.HopFrames, t.frames-t.at))
			t.desk.advance(t.at, t.to)
			t.board.run(t.out.Slice(0, t.to), t.at, t.desk.fields)
			t.at += int64(t.to)
		}
		k := dst.Slice(n, dst.Frames()).CopyFrom(t.out.Slice(t.from, t.to))
		t.from += k
		n += k
	}
	return n, nil
}

// maxSortedFrames bounds the memory of finding where to clip.
const maxSortedFrames = 1 << 26

// findClipping sets clipAt of the channels that shall clip a share of their
// frames, from one pass over the mix.
func (p *plan) findClipping() error {
	var which []int
	for ch := range p.channels {
		if p.channels[ch].Share > 0 {
			which = append(which, ch)
		}
	}
	if len(which) == 0 {
		return nil
	}
	if total := p.frames * int64(len(which)); total > maxSortedFrames {
		return fmt.Errorf("scenario: clipped_fraction of %d channels over %d frames: more than %d samples to sort, state clip_dbfs", len(which), p.frames, maxSortedFrames)
	}
	all, err := audio.ReadAll(p.open(p.sc.Seed, p.gains, p.frames, partTarget, partNoise))
	if err != nil {
		return err
	}
	for _, ch := range which {
		x := all.Channel(ch)
		for i, v := range x {
			x[i] = float32(math.Abs(float64(v)))
		}
		slices.Sort(x)
		c := &p.channels[ch]
		cut := int(math.Round(c.Share * float64(len(x))))
		if cut > 0 && cut < len(x) {
			c.ClipAt = math.Min(c.ClipAt, float64(x[len(x)-1-cut]))
		}
	}
	return nil
}
