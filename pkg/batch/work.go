package batch

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"slices"
	"time"
)

// openError is trouble with reading one take.
type openError struct{ error }

func (e *openError) Unwrap() error { return e.error }

// outcome has the work done and says what came of it. An error is trouble with
// storage.
func (r *run) outcome(ctx context.Context, t Take, dir string) (*Outcome, error) {
	recipe := r.plan.Recipes[t.Recipe]
	o := &Outcome{Schema: OutcomeSchema, Take: t.Key, PlanID: r.plan.PlanID, Recipe: recipe.ID, Version: r.plan.Version, Outputs: []File{}}
	fail := func(cause, format string, a ...any) (*Outcome, error) {
		o.State, o.Cause, o.Error = Failed, cause, fmt.Sprintf(format, a...)
		// Nothing half made goes along.
		if err := os.RemoveAll(dir); err != nil {
			return nil, err
		}
		return o, os.Mkdir(dir, 0o777)
	}
	before, err := r.s.stat(t)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		o.Files = slices.Clone(t.Files)
		return fail(CauseVanished, "%s: is not there any more", missing(t, &r.s))
	case err != nil:
		return nil, &openError{err}
	}
	o.Files = before
	if !sameSizes(before, t.Files) {
		return fail(CauseChanged, "%s since the plan was made: make the plan again", difference(t.Files, before))
	}
	work, cancel := ctx, context.CancelFunc(func() {})
	if r.plan.TimeoutS > 0 {
		work, cancel = context.WithTimeout(ctx, time.Duration(r.plan.TimeoutS*float64(time.Second)))
	}
	defer cancel()
	report, err := r.guarded(work, Assignment{Take: t, Recipe: recipe, Root: r.s.Root, Folder: dir, Step: r.step(t)})
	if ctx.Err() != nil {
		return nil, context.Cause(ctx)
	}
	if _, gone := os.Lstat(dir); err != nil && errors.Is(gone, fs.ErrNotExist) {
		// Not the take's fault: a merge elsewhere found all of its takes done.
		return nil, &openError{fmt.Errorf("the staging folder went away during the work: %w", err)}
	}
	after, serr := r.s.stat(t)
	var crash *crashError
	var open *TroubleError
	var named interface{ Cause() string }
	switch {
	case serr == nil && !slices.Equal(before, after):
		return fail(CauseChanged, "%s while it was read: wait until the recorder or the copy has finished", difference(before, after))
	case err == nil:
	case isAny(err, full) || errors.As(err, &open):
		return nil, err
	case errors.Is(serr, fs.ErrNotExist):
		return fail(CauseVanished, "%s: vanished while it was read", missing(t, &r.s))
	case isAny(err, shaky) || isAny(serr, shaky):
		return nil, &openError{errors.Join(err, serr)}
	case work.Err() != nil:
		return fail(CauseTimeout, "not done after %g s", r.plan.TimeoutS)
	case errors.As(err, &crash):
		return fail(CauseCrash, "%v", err)
	case errors.As(err, &named) && named.Cause() != "":
		return fail(named.Cause(), "%v", err)
	default:
		return fail(CauseFailed, "%v", err)
	}
	o.State, o.Figures = Done, report.Figures
	if report.Missed != "" {
		o.State, o.Cause, o.Error = Missed, "limit", report.Missed
	}
	for k, f := range o.Files {
		o.Files[k].SHA256 = report.Digests[r.s.input(f.Path)]
	}
	o.Outputs, err = outputsOf(dir)
	return o, err
}

// missing names the first file of a take that is not there.
func missing(t Take, s *Settings) string {
	for _, f := range t.Files {
		if _, err := os.Stat(s.input(f.Path)); errors.Is(err, fs.ErrNotExist) {
			return f.Path
		}
	}
	return t.Key
}

// difference says which file changed, and how.
func difference(a, b []File) string {
	for k, f := range a {
		if k < len(b) && f.Bytes != b[k].Bytes {
			return fmt.Sprintf("%s: changed from %d to %d bytes", f.Path, f.Bytes, b[k].Bytes)
		}
		if k < len(b) && f != b[k] {
			return fmt.Sprintf("%s: was written to", f.Path)
		}
	}
	return "its files changed"
}

// crashError is a panic of the work.
type crashError struct{ what any }

// Error implements error.
func (e *crashError) Error() string {
	return fmt.Sprintf("the program met a fault of its own with this take: %v", e.what)
}

// guarded has the work done. A panic fails the take and not the night.
func (r *run) guarded(ctx context.Context, a Assignment) (report Report, err error) {
	defer func() {
		if what := recover(); what != nil {
			err = &crashError{what}
		}
	}()
	return r.do(ctx, a)
}
