package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"path/filepath"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

// The levels of --fail-on.
const (
	failNever   = "never"
	failWarning = "warning"
	failError   = "error"
)

// engine carries out a spec and says how far it is; renderer writes what came
// of it. They are arguments so that what happens to several takes can be tested
// without sound.
type (
	engine   func(ctx context.Context, spec pipeline.Spec, step func(stage string, done, total int64)) (*pipeline.Result, error)
	renderer func(w io.Writer, r *pipeline.Result) error
)

// takes is how the takes of one command line are carried out.
type takes struct {
	run             engine
	summary, report renderer
	json            bool
	failOn          string
	quiet           bool
}

// all steers one take after the other and renders each result as it comes. One
// bad take does not end the others: its error is said at once, and the command
// ends with exitSome, or if not one take succeeded, as the takes did. An
// interrupt ends everything. With json, one take gives one document and several
// give an array, in which a take that failed has its path and its error.
func (t takes) all(ctx context.Context, u *ui, specs []pipeline.Spec) error {
	progress := u.progress(t.quiet)
	defer progress.finish()
	var failed []error
	missed := 0
	for k, spec := range specs {
		name := filepath.Base(spec.Take[0])
		result, err := t.run(ctx, spec, func(stage string, done, total int64) {
			progress.step(name+": "+stage, done, total)
		})
		progress.finish()
		if ctx.Err() != nil {
			return errors.Join(err, ctx.Err())
		}
		if err != nil && len(specs) == 1 {
			return err
		}
		if err != nil {
			u.complain(err)
			failed = append(failed, err)
			result = nil
		} else if worse(result.Findings, t.failOn) {
			missed++
			u.remark("alidade: %s: a finding of level %s or above (--fail-on)", name, t.failOn)
		}
		if rerr := t.render(u, spec, result, err, k, len(specs)); rerr != nil {
			return rerr
		}
	}
	switch {
	case len(failed) == len(specs):
		return &missedError{worstCode(failed), fmt.Errorf("not one of %d takes was steered", len(specs))}
	case len(failed) > 0:
		return &missedError{exitSome, fmt.Errorf("%d of %d takes failed", len(failed), len(specs))}
	case missed > 0:
		return &missedError{exitSome, nil}
	}
	return nil
}

// render writes the result of take k of n, or in JSON its error.
func (t takes) render(u *ui, spec pipeline.Spec, result *pipeline.Result, err error, k, n int) error {
	if !t.json {
		if result == nil {
			return nil
		}
		if k > 0 {
			u.print("\n")
		}
		return t.summary(u.stdout, result)
	}
	if n > 1 {
		opening := ","
		if k == 0 {
			opening = "["
		}
		u.print(opening + "\n")
	}
	if result != nil {
		err = t.report(u.stdout, result)
	} else {
		err = report.WriteJSON(u.stdout, newFailure(spec.Take[0], err))
	}
	if k == n-1 && n > 1 {
		u.print("]\n")
	}
	return err
}

// worse reports whether a finding reaches the level of --fail-on.
func worse(findings []pipeline.Finding, failOn string) bool {
	for _, f := range findings {
		switch {
		case failOn == failError && f.Severity == pipeline.Error,
			failOn == failWarning && (f.Severity == pipeline.Error || f.Severity == pipeline.Warning):
			return true
		}
	}
	return false
}

// worstCode is the exit code of takes that all failed: wrong usage if that was
// the fault of every one.
func worstCode(failed []error) int {
	for _, err := range failed {
		if exitCode(context.Background(), err) != exitUsage {
			return exitNothing
		}
	}
	return exitUsage
}

// failure is a take of several that failed, in JSON.
type failure struct {
	Take  failedTake `json:"take"`
	Error string     `json:"error"`
}

// failedTake is the part of a report's take that is known anyway.
type failedTake struct {
	Files []failedFile `json:"files"`
}

// failedFile is one file of it.
type failedFile struct {
	Path string `json:"path"`
}

// newFailure is the entry of a take that failed.
func newFailure(take string, err error) failure {
	return failure{failedTake{[]failedFile{{take}}}, pathFirst(err, err.Error())}
}

// steerTake is the engine of the program.
func steerTake(ctx context.Context, spec pipeline.Spec, step func(stage string, done, total int64)) (*pipeline.Result, error) {
	return pipeline.Run(ctx, spec, renderers(spec.Options, "", nil), pipeline.Watch{Progress: step})
}

// runSteer is the verb.
func runSteer(u *ui, c *cli.Context) error {
	options := steerOptions(c)
	if err := checkSteer(c, options); err != nil {
		return err
	}
	var specs []pipeline.Spec
	if files := c.Args().Slice(); oneTake(c) {
		specs = append(specs, u.steerSpec(c, options, files))
	} else {
		for _, take := range files {
			specs = append(specs, u.steerSpec(c, options, []string{take}))
		}
	}
	return takes{
		run:     steerTake,
		summary: func(w io.Writer, r *pipeline.Result) error { return report.Summary(w, r, u.width()) },
		report:  report.JSON,
		json:    c.Bool("json"), failOn: c.String("fail-on"), quiet: c.Bool("quiet"),
	}.all(c.Context, u, specs)
}
