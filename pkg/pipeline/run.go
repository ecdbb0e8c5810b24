package pipeline

import (
	"context"
	"errors"
	"fmt"
	"io"

	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/measure"
	"alidade/pkg/wav"
)

// Watch is told how a run goes on. Its zero value is told nothing.
type Watch struct {
	// Progress gets the frames done and to be done of a stage.
	Progress func(stage string, done, total int64)
}

// Renderers write a result as one of the report files, by the name that
// --reports has for it.
type Renderers map[string]func(w io.Writer, r *Result) error

// Run steers one take: it reads the rig and the take, writes the track and the
// reports, and returns everything that is known. Outputs appear whole or not
// at all: an error leaves none behind. The result is nil on an error.
//
// The errors are *UsageError for options, rig or names that cannot work,
// *HintedError where something helps, and those of the files.
func Run(ctx context.Context, spec Spec, render Renderers, watch Watch) (*Result, error) {
	set, err := spec.Options.resolve()
	if err != nil {
		return nil, err
	}
	for _, kind := range set.reports {
		if render[kind] == nil {
			return nil, &UsageError{Err: fmt.Errorf("--reports %s: no renderer for it", kind)}
		}
	}
	l, err := loadRig(spec.RigPath, spec.Options)
	if err != nil {
		return nil, err
	}
	r := &run{ctx: ctx, spec: spec, set: set, rig: l, watch: watch, render: render}
	result, err := r.steer()
	r.abandon()
	if err != nil {
		return nil, err
	}
	return result, nil
}

// run is one take on its way through.
type run struct {
	ctx    context.Context
	spec   Spec
	set    *settings
	rig    *loadedRig
	watch  Watch
	render Renderers

	take     *take
	line     *beamline
	learned  *beam.Covariance // the noise, for weights of least variance; nil until it is known
	names    names
	from, to int64 // frames of the take that are written

	track, reference *track
	reports          []*staged
	totals           *measure.Totals // nil under --no-measure
	heard            listened        // of the take, through the chain of the track
	painter          *painter        // nil without a page
	painting         *painter        // while the take itself passes
	found            *Direction      // of --toward auto and follow and --focus auto
	findings         []Finding
	flags            map[int][]string // what the inspection found, by channel
	dead             []int            // microphones that it found dead, indices into the rig's
	left             []int            // those of them that it left out
	aligned          *Clocks          // of --align-clocks; nil without
}

// abandon removes whatever was not committed.
func (r *run) abandon() {
	r.track.abandon()
	r.reference.abandon()
	for _, s := range r.reports {
		s.abandon()
	}
}

// report adds a finding.
func (r *run) report(f Finding) { r.findings = append(r.findings, f) }

func (r *run) steer() (result *Result, err error) {
	if r.take, err = openTake(r.spec.Take, r.set.joining(), !r.spec.NoHashes); err != nil {
		return nil, err
	}
	defer func() { err = joinErrors(err, r.take.close()) }()
	h := r.take.header
	if err := r.ready(); err != nil {
		return nil, err
	}
	if r.from, r.to, err = r.excerpt(); err != nil {
		return nil, err
	}
	if err := r.foretold(); err != nil {
		return nil, err
	}
	if err := r.sound(); err != nil {
		return nil, err
	}
	if !r.set.aimed() {
		if err := r.findAim(); err != nil {
			return nil, err
		}
	}
	if r.line, err = newBeamline(r.rig, r.set, h.Rate); err != nil {
		return nil, r.ofThoseLeft(err)
	}
	if r.set.designed() {
		if err := r.design(); err != nil {
			return nil, err
		}
		r.nullsHeld()
	}
	if err := r.prepare(); err != nil {
		return nil, err
	}
	if err := r.pass(r.set.trackEncoding(h)); err != nil {
		return nil, err
	}
	if r.track.over() {
		if r.set.OverRange == OverRangeFail {
			return nil, r.track.overError(r.set.GainDB)
		}
		w := r.track.writer.Written()
		r.report(Finding{Code: "over-range", Severity: Warning, Message: fmt.Sprintf(
			"the track reaches %+.2f dBFS, beyond full scale of %s: written as float32", audio.AmplitudeDB(w.Peak), r.track.format.Encoding)})
		r.track.abandon()
		r.reference.abandon()
		if err := r.take.reader.SeekFrame(0); err != nil {
			return nil, fmt.Errorf("%s: %w", r.take.path(), err)
		}
		if err := r.pass(wav.Float32); err != nil {
			return nil, err
		}
	}
	return r.result()
}

// ready refuses a take that the rig does not fit or that holds nothing.
func (r *run) ready() error {
	if err := r.fits(); err != nil {
		return err
	}
	if err := r.take.sounds(); err != nil {
		return err
	}
	h := r.take.header
	if r.set.HighpassHz >= float64(h.Rate)/2 {
		return &UsageError{Err: fmt.Errorf("--highpass %g: at or above half the take's rate of %d Hz", r.set.HighpassHz, h.Rate)}
	}
	return nil
}

// excerpt returns the frames of the take that are written.
func (r *run) excerpt() (from, to int64, err error) {
	h := r.take.header
	if r.set.excerpt == nil {
		return 0, h.Frames, nil
	}
	s, err := r.seconds(*r.set.excerpt)
	if err != nil {
		return 0, 0, &UsageError{Err: fmt.Errorf("--excerpt %s: %w", r.set.Excerpt, err)}
	}
	rate := float64(h.Rate)
	from = max(0, frameAt(s[0]-r.set.Handles, rate))
	to = min(h.Frames, frameAt(s[1]+r.set.Handles, rate))
	if from >= to {
		return 0, 0, &UsageError{Err: fmt.Errorf("--excerpt %s: the take is %.3f s long", r.set.Excerpt, float64(h.Frames)/rate), Hint: "times count in seconds from the take's first frame"}
	}
	return from, to, nil
}

// prepare settles the names of the outputs and refuses what cannot be written.
func (r *run) prepare() (err error) {
	if r.names, err = outputNames(r.take.outputBase(), r.set.Out, r.set.towardName()); err != nil {
		return err
	}
	if _, _, err := r.previewGiven(); err != nil {
		return err
	}
	outputs := []string{r.names.track}
	h := r.take.header
	frames := r.to - r.from
	format := wav.Format{Rate: h.Rate, Channels: 1, Encoding: r.set.trackEncoding(h)}
	meta, dropped := r.carried(format.Encoding, r.beamName())
	r.dropped(dropped)
	r.trackNames()
	bytes := wav.SizeBound(format, meta, frames)
	if r.set.WithReference {
		outputs = append(outputs, r.names.reference)
		format.Encoding = untouchedEncoding(h)
		bytes += wav.SizeBound(format, meta, frames)
	}
	const reportRoom = 1 << 20
	for _, kind := range r.set.reports {
		outputs = append(outputs, r.names.report(kind))
		bytes += reportRoom
		if r.set.Preview && kind != ReportCSV {
			bytes += previewRoom
		}
	}
	if err := refuseInputs(outputs, r.inputs()); err != nil {
		return err
	}
	if err := checkRoom(r.names.track, bytes); err != nil {
		return err
	}
	// The reports are staged first: what stands in the way is found before the
	// work, not after it.
	for _, kind := range r.set.reports {
		s, err := stage(r.names.report(kind), r.set.Overwrite)
		if err != nil {
			return err
		}
		r.reports = append(r.reports, s)
	}
	return nil
}

// pass runs the beam over the take once: track, reference track, totals and
// meters.
func (r *run) pass(encoding wav.Encoding) (err error) {
	h := r.take.header
	meta, _ := r.carried(encoding, r.beamName())
	if r.track, err = newTrack(r.names.track, r.set.Overwrite, h.Rate, encoding, r.from, meta); err != nil {
		return err
	}
	src := audio.Source(&watched{Source: r.take.source(), ctx: r.ctx, tell: r.tell("steering", h.Frames)})
	if !r.set.NoMeasure {
		r.totals = measure.NewTotals(h.Channels)
		src = audio.Tee(src, r.totals)
	}
	if r.set.WithReference {
		meta, _ := r.carried(untouchedEncoding(h), r.referenceName())
		if r.reference, err = newTrack(r.names.reference, r.set.Overwrite, h.Rate, untouchedEncoding(h), r.from, meta); err != nil {
			return err
		}
		m := r.rig.Mics[r.line.referenceMic()]
		src = audio.Tee(src, &part{sink: &pick{sink: r.reference, channel: m.Channel - 1}, from: r.from, to: r.to})
	}
	sinks := []audio.Sink{&part{
		sink: &louder{sink: r.track, factor: float32(audio.FromAmplitudeDB(r.set.GainDB))},
		from: r.from, to: r.to,
	}}
	if r.painter, err = r.newPainter(); err != nil {
		return err
	}
	if r.painting = r.painter; r.painting != nil {
		sinks = append(sinks, r.painter.after)
	}
	r.heard, err = r.driveTrack(src, nil, sinks...)
	if r.painting = nil; err != nil {
		return err
	}
	if err := r.track.close(); err != nil {
		return err
	}
	if r.reference != nil {
		return r.reference.close()
	}
	return nil
}

// tell returns what reports the progress of a stage.
func (r *run) tell(stage string, total int64) func(int64) {
	if r.watch.Progress == nil {
		return nil
	}
	return func(done int64) { r.watch.Progress(stage, done, total) }
}

// drive runs a chain over src to its end into sinks, with a meter at the
// corrected microphones and one at its end unless nothing is to be measured.
func (r *run) drive(src audio.Source, chain chain, sinks ...audio.Sink) (l listened, err error) {
	channels := src.Format().Channels
	if src, err = r.line.corrected(src); err != nil {
		return l, err
	}
	// Reading, measuring and steering go on side by side.
	src, stop := r.ahead(src)
	defer stop()
	if !r.set.NoMeasure {
		if l.in, err = measure.NewMeter(src.Format(), measure.MeterOptions{PerChannel: true}); err != nil {
			return l, err
		}
		var stop func()
		src, stop = r.ahead(audio.Tee(src, l.in))
		defer stop()
	}
	if r.painting != nil {
		src = audio.Tee(src, r.painting)
	}
	y, err := chain(src)
	if err != nil {
		return l, err
	}
	if !r.set.NoMeasure {
		if l.out, err = measure.NewMeter(y.Format(), measure.MeterOptions{}); err != nil {
			return l, err
		}
		sinks = append(sinks, l.out)
	}
	if _, err := audio.Copy(y, blockFrames(r.spec.Options.BlockFrames, channels), sinks...); err != nil {
		return l, err
	}
	if !r.set.NoMeasure {
		if err := errors.Join(l.in.Close(), l.out.Close()); err != nil {
			return l, err
		}
	}
	return l, nil
}
