package batch

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"time"
)

// Assignment is one take to be made.
type Assignment struct {
	Take   Take
	Recipe Recipe
	Root   string // of the takes
	Folder string // empty, where all outputs go
	// Step says how far the work is; it may be called from the work's goroutine
	// alone.
	Step func(stage string, done, total int64)
}

// Paths are the paths of the take as the work opens them.
func (a Assignment) Paths() []string {
	list := make([]string, len(a.Take.Paths))
	for k, p := range a.Take.Paths {
		list[k] = filepath.Join(a.Root, filepath.FromSlash(p))
	}
	return list
}

// Report is what the work says of a take that it made.
type Report struct {
	Missed  string              // which limit was missed; empty for none
	Digests map[string]string   // SHA-256 of files of the take by the path opened, where known
	Figures map[string]*float64 // for the summary; nil where not measured
}

// Do makes one take. It is called from several goroutines at once. It ends soon
// after ctx is done. An error with a method Cause() string gives the outcome
// its cause; a *TroubleError leaves the take open.
type Do func(ctx context.Context, a Assignment) (Report, error)

// Settings are how a plan is carried out here.
type Settings struct {
	Root    string // folder that the paths of takes are relative to
	Out     string // output folder
	Workers int    // takes at once; below 1 is 1
	// MemoryMiB bounds the sum of what the takes in work need; 0 is no bound. A
	// take that needs more than that runs alone.
	MemoryMiB   int
	Part        int // -1 is all of them
	RetryFailed bool
	// NeedRoom ends the run before its first take where the outputs of all its
	// takes may not find room; otherwise it goes as far as it gets.
	NeedRoom bool
	Now      func() time.Time
}

// Tally counts takes.
type Tally struct {
	Takes    int // of the part
	Standing int // done, missed or failed before, and not made again
	Done     int // by this run
	Missed   int
	Failed   int
	Others   int // committed by another run meanwhile
	Open     int // not committed
	// BadStanding is how many of Standing and Others are missed or failed.
	BadStanding int
	// Work lies behind what this run committed.
	Work Work
}

// Bad reports whether a committed take is missed or failed.
func (t Tally) Bad() bool { return t.Missed+t.Failed+t.BadStanding > 0 }

// Observer is told how a run goes on, one call at a time. Functions may be nil.
type Observer struct {
	Begun    func(takes, standing int, others int)                     // others: runs at work in the same folder
	Short    func(need, free int64)                                    // the outputs may need more bytes than are free
	Started  func(t Take)                                              // work on a take begins
	Step     func(t Take, stage string, done, total int64)             // it goes on
	Finished func(t Take, o *Outcome, took time.Duration, tally Tally) // it was committed; o is nil if by another run
	Left     func(t Take, err error)                                   // it stays open
}

// Run carries out a plan, or a part of it, as far as it is not done. The error
// is nil when every take was committed, well or badly; a *TroubleError when
// takes stay open for storage that failed; the cause of ctx when that ended
// first, and then nothing of the takes in work is left.
func Run(ctx context.Context, plan *Plan, do Do, s Settings, watch Observer) (Tally, error) {
	r := &run{plan: plan, do: do, s: s, watch: watch}
	if r.s.Now == nil {
		return Tally{}, errors.New("batch: settings without a clock")
	}
	r.room.L = &r.mu
	for _, t := range plan.Takes {
		if s.Part < 0 || t.Part == s.Part {
			r.takes = append(r.takes, t)
		}
	}
	r.tally.Takes = len(r.takes)
	if err := r.all(ctx); err != nil {
		return r.tally, err
	}
	return r.tally, nil
}

// run is one run.
type run struct {
	plan  *Plan
	do    Do
	s     Settings
	watch Observer
	takes []Take

	mu      sync.Mutex // guards what follows, and the observer
	room    sync.Cond  // signalled when memory was given back
	memory  int
	queue   []job
	tally   Tally
	ledger  *Ledger
	staging *staging
	open    []error // why takes stay open
	stop    context.CancelCauseFunc
}

// job is a take to be made.
type job struct {
	take     Take
	before   *Outcome
	deferred bool // another run had it in work
}

func (r *run) all(ctx context.Context) error {
	if err := os.MkdirAll(r.s.Out, 0o777); err != nil {
		return trouble(err)
	}
	sweep(r.s.Out, false)
	resume, err := newResume(r.plan, &r.s)
	if err != nil {
		return trouble(err)
	}
	for _, t := range r.takes {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		st, err := resume.look(t)
		var occupied *OccupiedError
		if errors.As(err, &occupied) {
			return err
		}
		if err != nil {
			return trouble(err)
		}
		if st.state == "" {
			r.queue = append(r.queue, job{take: t, before: st.before})
			continue
		}
		r.tally.Standing++
		if st.state != Done {
			r.tally.BadStanding++
		}
	}
	r.tally.Open = len(r.queue)
	others := len(otherRuns(r.s.Out, ""))
	if r.watch.Begun != nil {
		r.watch.Begun(r.tally.Takes, r.tally.Standing, others)
	}
	if len(r.queue) == 0 {
		return nil
	}
	if err := r.lookAhead(); err != nil {
		return err
	}
	if r.staging, err = newStaging(r.s.Out); err != nil {
		return trouble(err)
	}
	defer r.staging.close()
	r.ledger = &Ledger{out: r.s.Out, run: r.staging.name}
	if err := r.note(Line{Event: EventBegun, PlanID: r.plan.PlanID}); err != nil {
		return errors.Join(trouble(err), r.ledger.Close())
	}
	err = r.work(ctx)
	r.mu.Lock()
	defer r.mu.Unlock()
	ending := Line{Event: EventEnded}
	if err != nil {
		ending.Error = err.Error()
	}
	if lerr := errors.Join(r.note(ending), r.ledger.Close()); err == nil && lerr != nil {
		err = trouble(lerr)
	}
	return err
}

// lookAhead holds what the outputs of the queue need against what is free.
func (r *run) lookAhead() error {
	var need int64
	for _, j := range r.queue {
		need += j.take.OutputBytes
	}
	free, ok := FreeBytes(r.s.Out)
	if !ok || need <= free {
		return nil
	}
	if r.watch.Short != nil {
		r.watch.Short(need, free)
	}
	if r.s.NeedRoom {
		return &TroubleError{fmt.Errorf("output folder: the outputs of %d takes need up to %.1f MB, %.1f MB are free: nothing was begun", len(r.queue), float64(need)/1e6, float64(free)/1e6),
			"free some room, and run again"}
	}
	return nil
}

// note writes into the ledger.
func (r *run) note(l Line) error {
	l.At = r.s.Now().UTC().Format("2006-01-02T15:04:05.000000000Z")
	return r.ledger.Append(l)
}

// work runs the workers.
func (r *run) work(outer context.Context) error {
	ctx, stop := context.WithCancelCause(outer)
	defer stop(nil)
	r.stop = stop
	// Waiting for memory ends with the run.
	defer context.AfterFunc(ctx, func() {
		r.mu.Lock()
		r.room.Broadcast()
		r.mu.Unlock()
	})()
	var workers sync.WaitGroup
	for range min(max(r.s.Workers, 1), len(r.queue)) {
		workers.Add(1)
		go func() {
			defer workers.Done()
			for {
				j, need, ok := r.next(ctx)
				if !ok {
					return
				}
				r.make(ctx, j)
				r.mu.Lock()
				r.memory -= need
				r.room.Broadcast()
				r.mu.Unlock()
			}
		}()
	}
	workers.Wait()
	if outer.Err() != nil {
		return context.Cause(outer)
	}
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	if len(r.open) > 0 {
		return &TroubleError{fmt.Errorf("%d of %d takes stay open: %w", len(r.open), r.tally.Takes, r.open[0]),
			"run again when the storage is well: what is done stays done"}
	}
	return nil
}

// next takes a job off the queue, once there is memory for it.
func (r *run) next(ctx context.Context) (j job, need int, ok bool) {
	r.mu.Lock()
	defer r.mu.Unlock()
	for {
		if ctx.Err() != nil || len(r.queue) == 0 {
			return job{}, 0, false
		}
		// A take that another run has in work comes last: that run may commit
		// it meanwhile.
		if first := r.queue[0]; !first.deferred && r.staging.inWork(first.take.Key) {
			first.deferred = true
			r.queue = append(r.queue[1:], first)
			continue
		}
		j = r.queue[0]
		need = r.plan.Recipes[j.take.Recipe].MemoryMiB
		if r.s.MemoryMiB <= 0 || r.memory == 0 || r.memory+need <= r.s.MemoryMiB {
			r.queue = r.queue[1:]
			r.memory += need
			return j, need, true
		}
		r.room.Wait()
	}
}

// make makes one take and commits what came of it.
func (r *run) make(ctx context.Context, j job) {
	t := j.take
	if j.before == nil {
		if o, err := ReadOutcome(r.s.Out, t.Key); err == nil {
			r.byOthers(t, o) // since the run began
			return
		}
	}
	r.mu.Lock()
	if r.watch.Started != nil {
		r.watch.Started(t)
	}
	r.mu.Unlock()
	begun := r.s.Now()
	dir, err := r.staging.begin(t.Key)
	if err != nil {
		r.lost(ctx, j, err)
		return
	}
	defer r.staging.drop(t.Key)
	o, err := r.outcome(ctx, t, dir)
	if ctx.Err() != nil {
		return // interrupted: nothing of it is kept
	}
	if err != nil {
		r.lost(ctx, j, err)
		return
	}
	size, err := r.staging.commit(dir, o, j.before)
	if err != nil {
		r.lost(ctx, j, err)
		return
	}
	r.committed(t, o, size, r.s.Now().Sub(begun))
}

// lost deals with an error of the output folder: somebody else may have
// committed the take, and removed our staging with everything done.
func (r *run) lost(ctx context.Context, j job, err error) {
	o, rerr := ReadOutcome(r.s.Out, j.take.Key)
	if rerr == nil && (j.before == nil || o.Sum != j.before.Sum) {
		r.byOthers(j.take, o)
		return
	}
	r.mu.Lock()
	defer r.mu.Unlock()
	if ctx.Err() != nil {
		return
	}
	r.open = append(r.open, fmt.Errorf("%s: %w", j.take.Key, err))
	if r.watch.Left != nil {
		r.watch.Left(j.take, err)
	}
	// Without a ledger the run goes on as long as the folder takes results.
	_ = r.note(Line{Event: EventLeft, Take: j.take.Key, Error: err.Error()})
	var open *openError
	if !errors.As(err, &open) || isAny(err, full) {
		r.stop(trouble(fmt.Errorf("take %s: %w", j.take.Key, err)))
	}
}

func (r *run) byOthers(t Take, o *Outcome) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.tally.Others++
	r.tally.Open--
	if o.State != Done {
		r.tally.BadStanding++
	}
	if r.watch.Finished != nil {
		r.watch.Finished(t, nil, 0, r.tally)
	}
}

func (r *run) committed(t Take, o *Outcome, size int64, took time.Duration) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.tally.Open--
	r.tally.Work.add(took, o.Files)
	switch o.State {
	case Done:
		r.tally.Done++
	case Missed:
		r.tally.Missed++
	default:
		r.tally.Failed++
	}
	err := r.note(Line{Event: EventCommitted, Take: t.Key, Recipe: o.Recipe, State: o.State, Cause: o.Cause, Error: o.Error,
		Files: o.Files, Size: size, Things: o.entries(), Bytes: o.bytes(), Took: took.Seconds()})
	if err != nil {
		// The take is committed all the same: its folder says so.
		r.stop(trouble(fmt.Errorf("ledger: %w", err)))
	}
	if r.watch.Finished != nil {
		r.watch.Finished(t, o, took, r.tally)
	}
}

func (r *run) step(t Take) func(string, int64, int64) {
	if r.watch.Step == nil {
		return func(string, int64, int64) {}
	}
	return func(stage string, done, total int64) {
		r.mu.Lock()
		defer r.mu.Unlock()
		r.watch.Step(t, stage, done, total)
	}
}
