package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"slices"
	"strings"
	"syscall"
	"time"

	"github.com/urfave/cli/v2"

	"alidade/pkg/kernel"
	"alidade/pkg/pipeline"
	"alidade/pkg/sheet"
)

// version of the program, as reports and tracks state it.
const version = "0.1.0"

func main() {
	ctx, stop := untilSignalled(context.Background(), alsoFor(os.Args)...)
	code := run(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr, os.Getenv)
	stop()
	os.Exit(code)
}

// verb is one command of the program.
type verb struct {
	name string
	does string // one line for the list of commands
	help string // hand-laid, at most 80 columns
	// flags are made anew for each run: the flag parser writes into them.
	flags func() []cli.Flag
	run   func(u *ui, c *cli.Context) error
}

// verbs are the commands in the order in which --help lists them.
func verbs() []verb {
	return []verb{
		demoVerb(), steerVerb(), locateVerb(), checkVerb(), calibrateVerb(), predictVerb(), scanVerb(), simulateVerb(), inspectVerb(),
		planVerb(), batchVerb(), mergeVerb(), checkStorageVerb(), reportVerb(), schemaVerb(),
	}
}

// The exit codes.
const (
	exitDone    = 0
	exitNothing = 1
	exitUsage   = 2
	exitSome    = 3
	exitSignal  = 128 // plus the signal's number
)

// exitHelp is what --help says of them.
const exitHelp = `Exit codes
  0    done
  1    nothing usable was produced: take unreadable, output not writable
  2    wrong usage, or a rig, job or scenario file with faults
  3    some takes of several failed, or a limit asked for (--fail-on) was missed
  75   a batch was interrupted or met storage trouble: the same command goes on
  130  interrupted from the keyboard
  143  asked to end by another program
`

// exitCode is the one place where an error becomes an exit code.
func exitCode(ctx context.Context, err error) int {
	var (
		signalled *signalError
		missed    *missedError
		open      *openError
		usage     *usageError
		option    *pipeline.UsageError
		faults    *sheet.FaultsError
	)
	switch {
	case err == nil:
		return exitDone
	case errors.As(err, &open):
		return open.code // by whatever it ended
	case errors.As(context.Cause(ctx), &signalled):
		return exitSignal + int(signalled.signal)
	case errors.As(err, &missed):
		return missed.code
	case errors.As(err, &usage), errors.As(err, &option), errors.As(err, &faults):
		return exitUsage
	default:
		return exitNothing
	}
}

// usageError is a command line that cannot be carried out as it stands.
type usageError struct {
	err  error
	hint string
}

func (e *usageError) Error() string { return e.err.Error() }
func (e *usageError) Unwrap() error { return e.err }

// missedError ends a run that was carried out but must not count as done. What
// was wrong has been said already where err is nil.
type missedError struct {
	code int
	err  error
}

func (e *missedError) Error() string {
	if e.err == nil {
		return ""
	}
	return e.err.Error()
}
func (e *missedError) Unwrap() error { return e.err }

// signalError is the cause of a context that a signal ended.
type signalError struct{ signal syscall.Signal }

func (e *signalError) Error() string {
	if e.signal == syscall.SIGINT {
		return "interrupted"
	}
	return "asked to end: " + e.signal.String()
}

// untilSignalled returns a context that the first SIGINT or SIGTERM cancels, so
// that unfinished files are removed on the way out. The second one ends the
// program as it would any other. More signals count like these.
func untilSignalled(parent context.Context, more ...os.Signal) (ctx context.Context, stop func()) {
	ctx, cancel := context.WithCancelCause(parent)
	incoming := make(chan os.Signal, 1)
	signal.Notify(incoming, append(more, syscall.SIGINT, syscall.SIGTERM)...)
	go func() {
		select {
		case s := <-incoming:
			cancel(&signalError{s.(syscall.Signal)})
			signal.Stop(incoming)
		case <-ctx.Done():
		}
	}()
	return ctx, func() { signal.Stop(incoming); cancel(context.Canceled) }
}

// run carries out one command line, without the program's name, and returns
// the exit code.
func run(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer, env func(string) string) int {
	u := newUI(args, stdin, stdout, stderr, env, time.Now)
	err := dispatch(ctx, u, args)
	if err == nil {
		err = u.stdoutError()
	}
	if err != nil {
		var open *openError
		if cause := context.Cause(ctx); cause != nil && !errors.As(err, &open) {
			err = cause
		}
		u.complain(err)
	}
	return exitCode(ctx, err)
}

// dispatch finds the verb and gives it its arguments.
func dispatch(ctx context.Context, u *ui, args []string) error {
	if err := kernel.Use(u.env("ALIDADE_KERNEL")); err != nil {
		return &usageError{fmt.Errorf("ALIDADE_KERNEL: %w", err), "leave it unset for the best that the processor has"}
	}
	list := verbs()
	var names []string
	for _, v := range list {
		names = append(names, v.name)
	}
	helpHint := "alidade --help lists the commands"
	if len(args) == 0 {
		return &usageError{errors.New("no command"), helpHint}
	}
	switch args[0] {
	case "--version", "version":
		u.printf("alidade %s\n", version)
		return nil
	case "--help", "-h":
		u.print(helpText(list))
		return nil
	case "help":
		if len(args) == 1 {
			u.print(helpText(list))
			return nil
		}
		args = []string{args[1], "--help"}
	}
	// Options stand wherever they like, before the verb too.
	at := 0
	if strings.HasPrefix(args[0], "-") {
		at = max(0, slices.IndexFunc(args, func(a string) bool { return slices.Contains(names, a) }))
	}
	k := slices.Index(names, args[at])
	if k < 0 {
		what := fmt.Errorf("%q: no such command", args[at])
		if near, ok := nearest(args[at], names); ok {
			what = fmt.Errorf("%w; did you mean %s?", what, near)
		}
		return &usageError{what, helpHint}
	}
	v := list[k]
	flags := v.flags()
	a, err := arrange(slices.Concat(args[:at], args[at+1:]), flags)
	if a.help {
		u.print(v.help)
		return nil
	}
	if err != nil {
		return &usageError{prefixed(v.name, err), fmt.Sprintf("alidade %s --help shows its options", v.name)}
	}
	app := flagParser(v.name, flags, func(c *cli.Context) error { return v.run(u, c) })
	app.Writer, app.ErrWriter = u.stdout, u.stderr
	return app.RunContext(ctx, a.line(v.name))
}

// flagParser reads what arrange makes of a command line, and gives it to
// action. A value is one value, commas and all: 30,10 is one direction.
func flagParser(name string, flags []cli.Flag, action cli.ActionFunc) *cli.App {
	return &cli.App{
		Name: "alidade", HideHelp: true, HideVersion: true,
		DisableSliceFlagSeparator: true,
		ExitErrHandler:            func(*cli.Context, error) {},
		Commands: []*cli.Command{{
			Name: name, Flags: flags, HideHelp: true,
			OnUsageError: func(_ *cli.Context, err error, _ bool) error { return &usageError{err: err} },
			Action:       action,
		}},
	}
}

// line is the arguments as the flag parser takes them.
func (a arguments) line(verb string) []string {
	return slices.Concat([]string{"alidade", verb}, a.options, []string{"--"}, a.operands)
}

// prefixed puts the verb before each of several joined faults.
func prefixed(name string, err error) error {
	joined, ok := err.(interface{ Unwrap() []error })
	if !ok {
		return fmt.Errorf("%s: %w", name, err)
	}
	var list []error
	for _, e := range joined.Unwrap() {
		list = append(list, fmt.Errorf("%s: %w", name, e))
	}
	return errors.Join(list...)
}

// helpText is what alidade --help prints.
func helpText(list []verb) string {
	var b strings.Builder
	b.WriteString(`alidade: aims a recording of many microphones at one sound, and says how sure
it is, how much noise went away in each band, and what it cost the wanted sound

Usage
  alidade COMMAND [FILES] [OPTIONS]

Options stand wherever you like, before or after file names; -- ends them.
Results go to standard output, progress and remarks to standard error.

Commands
`)
	for _, v := range list {
		fmt.Fprintf(&b, "  %-13s %s\n", v.name, v.does)
	}
	b.WriteString(`
  alidade COMMAND --help shows a command's options and an example;
  alidade --version prints the version.

`)
	b.WriteString(exitHelp)
	return b.String()
}
