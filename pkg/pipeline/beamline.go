package pipeline

import (
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"sync"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/delay"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// isEnd reports the end of a stream.
func isEnd(err error) bool { return errors.Is(err, io.EOF) }

// The kernels of the methods, and the error that each is stated and tested to
// stay under: the largest over 100 Hz to 0.8 of Nyquist and all fractional
// delays, complex, re the signal, through the float32 chain for sinc and
// spectral (DESIGN: accuracy that tests pin).
const (
	sincTaps      = 64
	spectralTaps  = 128
	farrowTaps    = 32
	farrowOrder   = 6
	sincErrorDB   = -100
	spectralErrDB = -100
	farrowErrorDB = -85
)

// beamline is a beam ready to be run over takes of one rate.
type beamline struct {
	rig     *loadedRig
	used    []int       // indices into rig.Mics
	at      []rig.Point // of the used microphones
	ref     rig.Point
	look    acoustics.Wave
	filters *beam.Filters
	// model are the filters as the geometry alone would have them, without the
	// delay corrections of the rig: what filters are to channels that need
	// corrections, model is to microphones as they stand in the air, and that is
	// what predictions are about. The same as filters where there are none.
	model   *beam.Filters
	set     *settings
	errorDB float64
	// shift are the delay corrections of the rig, seconds, applied to the
	// channels themselves where weights are designed; nil where the filters
	// hold them.
	shift []float64
	// amplitudes are those of the microphones in the beam.
	amplitudes []float64
	fit        *beam.Fit // of designed weights
	nullsFrom  float64   // from where on nulls are exact, Hz; +Inf for nowhere
	// changes are weights that change with time, of which filters and model are
	// the first; nil if they do not.
	changes *changes
}

// nearestFocus is how close to a microphone a focus may lie, metres.
const nearestFocus = 0.01

// newBeamline designs the beam of the settings for takes of the given rate.
func newBeamline(l *loadedRig, s *settings, rate int) (*beamline, error) {
	b := &beamline{rig: l, used: l.Used(), at: l.Positions(), ref: l.ReferencePoint(), set: s}
	if s.point != nil {
		for i, p := range b.at {
			if d := p.Distance(*s.point); d < nearestFocus {
				return nil, &UsageError{Err: fmt.Errorf("--focus %s: %.1f mm from microphone %s: want at least %g mm", s.Focus, 1000*d, l.Mics[b.used[i]].Name, 1000*nearestFocus), Hint: "X,Y,Z count in metres from the rig's origin: look for millimetres, a lost sign or a lost digit"}
			}
		}
		if s.point.Distance(b.ref) < nearestFocus {
			return nil, &UsageError{Err: fmt.Errorf("--focus %s: at the reference point, from where it has no direction", s.Focus), Hint: "X,Y,Z count in metres from the rig's origin: look for millimetres, a lost sign or a lost digit"}
		}
		b.look = acoustics.Spherical{At: *s.point}
	} else {
		b.look = acoustics.Plane{From: *s.direction}
	}
	amplitudes, err := s.taper.Amplitudes(b.at)
	if err != nil {
		return nil, &UsageError{Err: fmt.Errorf("--taper %s: %w", s.taper, err)}
	}
	arrivals := acoustics.Delays(nil, b.look, b.at, b.ref, l.speed)
	corrected := slices.Clone(arrivals)
	if s.designed() {
		b.correctTimes()
	}
	for i, m := range b.used {
		if b.shift != nil {
			break
		}
		// The correction is added to the channel's time: a channel that is late
		// by d has the correction -d and arrives d later than its place says.
		corrected[i] -= l.Mics[m].Delay
	}
	if s.UndoSpreading {
		for i, p := range b.at {
			amplitudes[i] /= b.look.Spreading(p, b.ref)
		}
	}
	b.amplitudes = amplitudes
	kernel, err := b.kernel()
	if err != nil {
		return nil, err
	}
	if b.filters, err = beam.DelayAndSum(kernel, rate, corrected, amplitudes); err != nil {
		return nil, &UsageError{Err: err}
	}
	if b.model = b.filters; !slices.Equal(corrected, arrivals) {
		if b.model, err = beam.DelayAndSum(kernel, rate, arrivals, amplitudes); err != nil {
			return nil, &UsageError{Err: err}
		}
	}
	return b, nil
}

// farrowKernel is the polynomial delay of every beam and clock, designed once.
var farrowKernel = sync.OnceValues(func() (*delay.Farrow, error) { return delay.NewFarrow(farrowTaps, farrowOrder) })

func (b *beamline) kernel() (delay.Kernel, error) {
	switch b.set.Method {
	case MethodSinc:
		b.errorDB = sincErrorDB
		return delay.NewSinc(sincTaps)
	case MethodFarrow:
		b.errorDB = farrowErrorDB
		return farrowKernel()
	}
	b.errorDB = spectralErrDB
	return delay.NewSinc(spectralTaps)
}

// corrected returns the used microphones of a take in rig order, with gain and
// polarity corrections and the high-pass.
func (b *beamline) corrected(src audio.Source) (audio.Source, error) {
	return b.correctedFrom(src, 0)
}

// correctedFrom is corrected for a src that begins with frame first of the take.
func (b *beamline) correctedFrom(src audio.Source, first int64) (audio.Source, error) {
	out, err := b.rig.correctedFrom(src, first)
	if err != nil {
		return nil, err
	}
	if b.shift != nil {
		kernel, err := delay.NewSinc(sincTaps)
		if err != nil {
			return nil, err
		}
		if out, err = delay.NewShift(out, kernel, b.shift); err != nil {
			return nil, &UsageError{Err: err}
		}
	}
	if b.set.HighpassHz > 0 {
		if out, err = spectral.HighPass(out, b.set.HighpassHz); err != nil {
			return nil, &UsageError{Err: fmt.Errorf("--highpass %g: %w", b.set.HighpassHz, err)}
		}
	}
	return out, nil
}

// steered returns the beam over the corrected microphones.
func (b *beamline) steered(src audio.Source) (audio.Source, error) {
	if b.changes != nil {
		return beam.NewChanging(src, b.changes.list, b.changes.fade)
	}
	if b.set.path != nil {
		return b.followed(src)
	}
	if b.set.Method == MethodSpectral {
		return beam.NewOverlapSave(src, b.filters)
	}
	return beam.New(src, b.filters)
}

// blockFrames is how many frames are read at once: what a core's cache holds.
func blockFrames(asked, channels int) int {
	if asked > 0 {
		return asked
	}
	const samples = 1 << 17
	return min(max(samples/channels, 512), 8192)
}

// ahead returns what src yields, read side by side with what uses it where the
// run may have more than one core, and what is to be called when it is done.
// The blocks of all channels stay in a core's cache.
func (r *run) ahead(src audio.Source) (side audio.Source, stop func()) {
	if r.spec.OneCore {
		return src, func() {}
	}
	const samples = 1 << 16
	return audio.Ahead(src, min(max(samples/src.Format().Channels, 512), 8192))
}

// watched is a source that stops when ctx is done and tells how far it is.
type watched struct {
	audio.Source
	ctx   context.Context
	tell  func(frames int64)
	count int64
}

// Read implements audio.Source.
func (w *watched) Read(dst audio.Block) (int, error) {
	if err := context.Cause(w.ctx); err != nil {
		return 0, err
	}
	n, err := w.Source.Read(dst)
	w.count += int64(n)
	if w.tell != nil {
		w.tell(w.count)
	}
	return n, err
}

// part is a sink that passes the frames from..to (half-open) on.
type part struct {
	sink     audio.Sink
	at       int64
	from, to int64
}

// Write implements audio.Sink.
func (p *part) Write(src audio.Block) error {
	n := int64(src.Frames())
	first, last := max(p.from, p.at)-p.at, min(p.to, p.at+n)-p.at
	p.at += n
	if first >= last {
		return nil
	}
	return p.sink.Write(src.Slice(int(first), int(last)))
}

// pick is a sink that passes one channel on.
type pick struct {
	sink    audio.Sink
	channel int
	out     audio.Block
}

// Write implements audio.Sink.
func (p *pick) Write(src audio.Block) error {
	if p.out.Frames() < src.Frames() {
		p.out = audio.NewBlock(1, src.Frames())
	}
	out := p.out.Slice(0, src.Frames())
	copy(out.Channel(0), src.Channel(p.channel))
	return p.sink.Write(out)
}

// louder is a sink that passes every sample on times a factor.
type louder struct {
	sink   audio.Sink
	factor float32
	out    audio.Block
}

// Write implements audio.Sink.
func (l *louder) Write(src audio.Block) error {
	if l.factor == 1 {
		return l.sink.Write(src)
	}
	if l.out.Frames() < src.Frames() {
		l.out = audio.NewBlock(src.Channels(), src.Frames())
	}
	out := l.out.Slice(0, src.Frames())
	for ch := range src.Channels() {
		to := out.Channel(ch)
		for i, x := range src.Channel(ch) {
			to[i] = l.factor * x
		}
	}
	return l.sink.Write(out)
}
