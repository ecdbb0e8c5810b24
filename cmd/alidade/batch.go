package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"runtime/debug"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"time"

	"github.com/urfave/cli/v2"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/quality"
	"alidade/pkg/sheet"
)

const batchHelp = `alidade batch: steer a folder of takes, and go on where the last run ended

Usage
  alidade batch JOB.yaml|PLAN.json [OPTIONS]

Example
  $ alidade batch night.yaml --workers 2

The outputs of each take appear in a folder of its own, whole or not at all.
What is done and has not changed is not made again; one bad take does not end
the others. At the end stand summary.json, summary.txt and index.html. A plan
cut into parts is carried out one part at a time; alidade merge then sums up.

Options
  --workers N        takes at once (default: SLURM_CPUS_PER_TASK, or the cores)
  --memory-mib N     what all of them may need together (default: no bound)
  --part K/N         this part of a plan (default: the array index that Slurm,
                     Kubernetes, AWS, Google, PBS, LSF or SGE gives; else all)
  --retry-failed     make failed takes again
  --need-room        begin nothing (exit code 75) where the outputs of all takes
                     may need more room than there is; without it that is said,
                     and the batch goes as far as it gets
  --root DIR         the folder of the takes, where it is another one here
  --out DIR          the output folder, where it is another one here
  --max-restarts N   exit code 3 in place of 75 when the engine has started the
                     part again so often (default 5)
  --bad-takes-done   exit code 0 when every take was dealt with, bad ones too:
                     for engines that would start the part again
  --json             the summary as JSON on standard output
  --quiet            no progress
  --help, -h         this text

Exit codes
  0   every take is done
  3   every take was dealt with, some failed or missed a limit
  2   wrong usage, or a plan that does not fit its job
  75  interrupted, or storage trouble: the same command goes on
`

// exitAgain ends a batch that is worth another try.
const exitAgain = 75

// openError ends a batch that left takes open, by a signal or for storage. Its
// code holds whatever ended it.
type openError struct {
	code int
	err  error
}

func (e *openError) Error() string { return e.err.Error() }
func (e *openError) Unwrap() error { return e.err }

// alsoFor are the signals that end a batch in good order beside the usual ones.
func alsoFor(args []string) []os.Signal {
	if slices.Contains(args, "batch") {
		return append([]os.Signal{syscall.SIGHUP}, engineSignals...)
	}
	return nil
}

func batchVerb() verb {
	return verb{
		name: "batch", does: "a folder of takes, resumed where it ended, in parts if you like",
		help: batchHelp,
		flags: func() []cli.Flag {
			return []cli.Flag{
				&cli.Float64Flag{Name: "workers"}, &cli.Float64Flag{Name: "memory-mib"}, &cli.StringFlag{Name: "part"},
				&cli.BoolFlag{Name: "retry-failed"}, &cli.BoolFlag{Name: "need-room"}, &cli.StringFlag{Name: "root"}, &cli.StringFlag{Name: "out"},
				&cli.Float64Flag{Name: "max-restarts", Value: 5}, &cli.BoolFlag{Name: "bad-takes-done"},
				&cli.BoolFlag{Name: "json"}, &cli.BoolFlag{Name: "quiet"},
			}
		},
		run: runBatch,
	}
}

// undertaking is a plan and where it is carried out.
type undertaking struct {
	plan      *batch.Plan
	base      string // folder of the plan
	root, out string
	oneCore   bool // several takes are on their way: none may use a second core
}

// undertake reads a plan, or makes one of a job.
func (u *ui) undertake(c *cli.Context, name string) (*undertaking, error) {
	planned, err := isPlan(name)
	if err != nil {
		return nil, err
	}
	t := &undertaking{base: filepath.Dir(name)}
	if planned {
		data, err := readBounded(name, batch.MaxPlanBytes)
		if err != nil {
			return nil, err
		}
		if t.plan, err = batch.ReadPlan(name, data); err != nil {
			return nil, &usageError{err, "alidade plan makes it again"}
		}
		if t.plan.Version != version {
			return nil, &usageError{fmt.Errorf("%s: plan of version %s, this is version %s", name, t.plan.Version, version), "make the plan again, or use that version"}
		}
	} else {
		j, err := readJob(name)
		if err != nil {
			return nil, err
		}
		parts := 1
		if _, n, ok := strings.Cut(c.String("part"), "/"); ok {
			parts, _ = strconv.Atoi(n) // what is no number is found with the part
		}
		if t.plan, err = u.plan(j, max(parts, 1)); err != nil {
			return nil, err
		}
	}
	if t.root = c.String("root"); t.root == "" {
		if t.root = filepath.FromSlash(t.plan.Root); !filepath.IsAbs(t.root) {
			t.root = filepath.Join(t.base, t.root)
		}
	}
	if t.out = c.String("out"); t.out == "" {
		t.out = filepath.Join(t.base, filepath.FromSlash(t.plan.Folder))
	}
	return t, nil
}

// checkRigs holds the rigs against the plan.
func (t *undertaking) checkRigs() error {
	seen := map[string]string{}
	for _, r := range t.plan.Recipes {
		at := t.rig(r)
		sum, ok := seen[at]
		if !ok {
			var err error
			if sum, _, err = rigState(at); err != nil {
				return &usageError{err: err}
			}
			seen[at] = sum
		}
		if sum != r.RigSHA256 {
			return &usageError{fmt.Errorf("%s: changed since the plan was made", at), "make the plan again"}
		}
	}
	return nil
}

func (t *undertaking) rig(r batch.Recipe) string {
	if at := filepath.FromSlash(r.Rig); filepath.IsAbs(at) {
		return at
	}
	return filepath.Join(t.base, filepath.FromSlash(r.Rig))
}

func runBatch(u *ui, c *cli.Context) error {
	if c.NArg() != 1 {
		return &usageError{fmt.Errorf("batch: %d files, want one job file or plan", c.NArg()), "alidade batch --help shows an example"}
	}
	s := batch.Settings{Now: u.now, RetryFailed: c.Bool("retry-failed"), NeedRoom: c.Bool("need-room"), Workers: runtime.NumCPU()}
	if n, err := strconv.Atoi(u.env("SLURM_CPUS_PER_TASK")); err == nil && n > 0 {
		s.Workers = n
	}
	var err error
	if c.IsSet("workers") {
		if s.Workers, err = whole(c, "batch", "workers", 1); err != nil {
			return err
		}
	}
	if c.IsSet("memory-mib") {
		if s.MemoryMiB, err = whole(c, "batch", "memory-mib", 1); err != nil {
			return err
		}
		debug.SetMemoryLimit(int64(s.MemoryMiB) << 20)
	}
	restarts, err := whole(c, "batch", "max-restarts", 0)
	if err != nil {
		return err
	}
	t, err := u.undertake(c, c.Args().First())
	if err != nil {
		return err
	}
	if err := t.checkRigs(); err != nil {
		return err
	}
	var source string
	if s.Part, source, err = batch.PartOf(c.String("part"), t.plan.Parts, u.env); err != nil {
		return &usageError{fmt.Errorf("batch: %w", err), ""}
	}
	s.Root, s.Out, t.oneCore = t.root, t.out, s.Workers > 1
	if s.Part >= 0 {
		u.remark("part %d of %d (%s), plan %.12s", s.Part+1, t.plan.Parts, source, t.plan.PlanID)
	}
	show := u.nightWatch(c.Bool("quiet"))
	begun := u.now()
	tally, err := batch.Run(c.Context, t.plan, t.steer, s, show.observer())
	show.close()
	if err != nil {
		return t.again(c.Context, err, tally, restarts, u.env)
	}
	took := u.now().Sub(begun)
	u.remark("%s", tallyWords(tally, took))
	if w := tally.Work; w.Takes > 0 && took > 0 {
		u.remark("%s", workWords(w)+fmt.Sprintf(", %.2f workers busy", w.Spent.Seconds()/took.Seconds()))
	}
	if s.Part < 0 {
		summary, err := t.sumUp(batch.MergeSettings{Out: t.out, Worst: worstFigure, Angles: angleFigures}, tally.Standing < tally.Takes)
		if err != nil {
			return t.again(c.Context, err, tally, restarts, u.env)
		}
		if err := u.showSummary(summary, c.Bool("json")); err != nil {
			return err
		}
	}
	if tally.Bad() && !c.Bool("bad-takes-done") {
		return &missedError{exitSome, nil}
	}
	return nil
}

// again is the end of a run that left takes open.
func (t *undertaking) again(ctx context.Context, err error, tally batch.Tally, most int, env func(string) string) error {
	var occupied *batch.OccupiedError
	if errors.As(err, &occupied) {
		return &usageError{err: err}
	}
	code := exitAgain
	if n := batch.Restarts(env); n > 0 && n >= most {
		code = exitSome
		err = fmt.Errorf("%w (started again %d times already: not once more)", err, n)
	}
	if ctx.Err() != nil {
		err = fmt.Errorf("%w: %d takes committed, %d open: the same command goes on", err, tally.Takes-tally.Open, tally.Open)
	}
	return &openError{code, err}
}

// takesWord is a number of takes.
func takesWord(n int) string {
	if n == 1 {
		return "1 take"
	}
	return fmt.Sprintf("%d takes", n)
}

// workWords is what lies behind results.
func workWords(w batch.Work) string {
	s := max(w.Spent.Seconds(), 1e-3)
	return fmt.Sprintf("%s of %.1f MB in %.1f s of work: %.1f takes a minute and worker, %.1f MB a second", takesWord(w.Takes), float64(w.Bytes)/1e6, w.Spent.Seconds(), float64(w.Takes)*60/s, float64(w.Bytes)/1e6/s)
}

func tallyWords(t batch.Tally, took time.Duration) string {
	text := fmt.Sprintf("%s: %d done, %d missed a limit, %d failed", takesWord(t.Takes), t.Done, t.Missed, t.Failed)
	if t.Standing > 0 {
		text += fmt.Sprintf(", %d stood from before", t.Standing)
	}
	if t.Others > 0 {
		text += fmt.Sprintf(", %d by another run", t.Others)
	}
	text += fmt.Sprintf("; %s", took.Round(100*time.Millisecond))
	if made := t.Done + t.Missed + t.Failed; made > 0 && took > 0 {
		text += fmt.Sprintf(", %.1f takes a minute", float64(made)/took.Minutes())
	}
	return text
}

// The figures of a take in a summary.
const (
	worstFigure  = "snr_gain_db"
	figureAz     = "azimuth_deg"
	figureEl     = "elevation_deg"
	figureNoise  = "noise_reduction_db"
	figureTarget = "target_change_db"
	figureError  = "standard_error_deg"
)

// angleFigures are those that turn round.
var angleFigures = []string{figureAz}

// steer is the work of the batch: one take into its staging folder.
func (t *undertaking) steer(ctx context.Context, a batch.Assignment) (batch.Report, error) {
	recipe, err := recipeOf(a.Recipe)
	if err != nil {
		return batch.Report{}, err
	}
	o := recipe.Steer
	o.Out = a.Folder + string(filepath.Separator)
	for _, path := range []*string{&o.IsolatedNoise, &o.IsolatedTarget} {
		if *path != "" && !filepath.IsAbs(*path) {
			*path = filepath.Join(a.Root, filepath.FromSlash(*path))
		}
	}
	if o.Reports = strings.Join(recipe.Reports, ","); o.Reports == "" {
		o.Reports = "none"
	}
	// Reports say the same wherever they are made: paths are those of the plan.
	tidy := func(r *pipeline.Result) *pipeline.Result { return t.tidy(r, a) }
	render := renderers(o, folderPage(a.Take.Key), tidy)
	spec := pipeline.Spec{Take: a.Paths(), RigPath: t.rig(a.Recipe), Options: o, Limits: quality.Limits(recipe.Limits.Limits), Version: version, OneCore: t.oneCore}
	r, err := pipeline.Run(ctx, spec, render, pipeline.Watch{Progress: a.Step})
	if err != nil {
		return batch.Report{}, t.plain(err, a)
	}
	digests := map[string]string{}
	for _, f := range r.Take.Files {
		digests[f.Path] = f.SHA256
	}
	done := tidy(r)
	out := batch.Report{Digests: digests, Figures: map[string]*float64{
		worstFigure: done.Overall.SNRGainDB, figureNoise: done.Overall.NoiseReductionDB,
		figureTarget: done.Overall.TargetChangeDB, figureAz: &done.Steer.AzimuthDeg, figureEl: &done.Steer.ElevationDeg,
	}}
	if done.Direction != nil {
		out.Figures[figureError] = done.Direction.StandardErrorDeg
	}
	out.Missed = recipe.Limits.missed(done)
	return out, nil
}

// missed says which limit a result misses; empty for none.
func (l jobLimits) missed(r *pipeline.Result) string {
	if worse(r.Findings, l.FailOn) {
		for _, f := range r.Findings {
			if worse([]pipeline.Finding{f}, l.FailOn) {
				return "fail_on " + l.FailOn + ": " + f.Message
			}
		}
	}
	if low := l.MinimumSNRGainDB; low != nil {
		switch g := r.Overall.SNRGainDB; {
		case g == nil:
			return fmt.Sprintf("minimum_snr_gain_db %g: the gain could not be measured", *low)
		case *g < *low:
			return fmt.Sprintf("minimum_snr_gain_db %g: the gain is %.1f dB", *low, *g)
		}
	}
	return ""
}

// tidy is a result with the paths of the plan in place of those of this
// machine.
func (t *undertaking) tidy(r *pipeline.Result, a batch.Assignment) *pipeline.Result {
	c := *r
	c.Take.Files = append([]pipeline.File{}, r.Take.Files...)
	for k := range c.Take.Files {
		c.Take.Files[k].Path = t.strip(c.Take.Files[k].Path, a)
	}
	c.Output.Path = t.strip(c.Output.Path, a)
	c.OtherOutputs = append([]pipeline.Output{}, r.OtherOutputs...)
	for k := range c.OtherOutputs {
		c.OtherOutputs[k].Path = t.strip(c.OtherOutputs[k].Path, a)
	}
	if len(r.OtherOutputs) == 0 {
		c.OtherOutputs = nil
	}
	c.Findings = append([]pipeline.Finding{}, r.Findings...)
	for k := range c.Findings {
		c.Findings[k].Message = t.strip(c.Findings[k].Message, a)
	}
	return &c
}

// strip takes folders of this machine out of a text.
func (t *undertaking) strip(text string, a batch.Assignment) string {
	for _, dir := range []string{a.Folder, a.Root, t.base} {
		if dir = filepath.Clean(dir); dir != "." && dir != string(filepath.Separator) {
			text = strings.ReplaceAll(text, dir+string(filepath.Separator), "")
		}
	}
	return filepath.ToSlash(text)
}

// takeFailure is why a take failed, with its cause for the summary.
type takeFailure struct {
	err   error
	text  string
	cause string
}

func (e *takeFailure) Error() string { return e.text }
func (e *takeFailure) Unwrap() error { return e.err }
func (e *takeFailure) Cause() string { return e.cause }

// plain is an error of the pipeline in one line, with the paths of the plan.
func (t *undertaking) plain(err error, a batch.Assignment) error {
	e := &takeFailure{err: err, text: t.strip(pathFirst(err, err.Error()), a), cause: "unreadable"}
	e.text = strings.ReplaceAll(e.text, "\n", "; ")
	var usage *pipeline.UsageError
	var faults *sheet.FaultsError
	switch {
	case errors.As(err, &usage) || errors.As(err, &faults):
		e.cause = "options" // or a rig that does not fit the take
	case errors.Is(err, fs.ErrPermission):
		e.cause = "permission"
	}
	return e
}
