package main

// How the program speaks.
//
// Results go to standard output and nothing else does: a pipe gets the same
// text as a file, without colour. Everything else goes to standard error, where
// a line that reports a fault reads
//
//	alidade: where: what: why
//	hint: what helps
//
// with the fault in lower case and without a full stop, and a hint only where
// something certain can be said. Each fault has a line of its own. Source lines
// of a rig or scenario file stand beneath their fault, set in.
//
// Progress is a bar on a terminal and a plain line now and then elsewhere;
// --quiet silences it. It never decides anything: the run is the same without.

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"slices"
	"strconv"
	"strings"
	"time"

	"golang.org/x/term"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/sheet"
)

// ui is where a run reads and writes.
type ui struct {
	args   []string // the command line, without the program's name
	stdin  io.Reader
	stdout *careful
	stderr io.Writer
	env    func(string) string
	now    func() time.Time
}

func newUI(args []string, stdin io.Reader, stdout, stderr io.Writer, env func(string) string, now func() time.Time) *ui {
	return &ui{args: args, stdin: stdin, stdout: &careful{w: stdout}, stderr: stderr, env: env, now: now}
}

// careful is a writer that remembers its first error: a result that did not
// arrive must not count as done.
type careful struct {
	w   io.Writer
	err error
}

func (c *careful) Write(p []byte) (int, error) {
	if c.err != nil {
		return 0, c.err
	}
	n, err := c.w.Write(p)
	c.err = err
	return n, err
}

func (u *ui) print(text string)              { io.WriteString(u.stdout, text) }
func (u *ui) printf(format string, a ...any) { fmt.Fprintf(u.stdout, format, a...) }
func (u *ui) remark(format string, a ...any) { fmt.Fprintf(u.stderr, format+"\n", a...) }

// stdoutError is why standard output did not take everything, or nil.
func (u *ui) stdoutError() error {
	if u.stdout.err == nil {
		return nil
	}
	return fmt.Errorf("standard output: %w", bare(u.stdout.err))
}

// bare is the reason of a file error without operation and path.
func bare(err error) error {
	var p *fs.PathError
	if errors.As(err, &p) {
		return p.Err
	}
	return err
}

// complain prints an error, a line a fault, and what helps.
func (u *ui) complain(err error) {
	text := pathFirst(err, sheet.Annotated(err))
	if text != "" {
		for _, line := range strings.Split(text, "\n") {
			if strings.HasPrefix(line, " ") {
				fmt.Fprintln(u.stderr, harmless(line))
				continue
			}
			fmt.Fprintf(u.stderr, "alidade: %s\n", harmless(line))
		}
	}
	for _, h := range hints(err, nil) {
		fmt.Fprintf(u.stderr, "hint: %s\n", h)
	}
}

// pathFirst rewrites the file errors within text from "open x.wav: no such
// file" to "x.wav: no such file": where, then what.
func pathFirst(err error, text string) string {
	var p *fs.PathError
	if errors.As(err, &p) {
		where := p.Path + ": "
		text = strings.ReplaceAll(text, p.Error(), where+p.Err.Error())
		// A caller that named the path too has said it once already.
		text = strings.ReplaceAll(text, where+where, where)
	}
	return text
}

// hints collects what the errors joined or wrapped in err know to help, each
// once.
func hints(err error, list []string) []string {
	add := func(h string) {
		if h != "" && !slices.Contains(list, h) {
			list = append(list, h)
		}
	}
	switch e := err.(type) {
	case nil:
	case *usageError:
		add(e.hint)
	case *pipeline.UsageError:
		add(e.Hint)
	case *pipeline.HintedError:
		add(e.Hint)
	case *batch.TroubleError:
		add(e.Hint)
	}
	switch e := err.(type) {
	case interface{ Unwrap() []error }:
		for _, inner := range e.Unwrap() {
			list = hints(inner, list)
		}
	case interface{ Unwrap() error }:
		if inner := e.Unwrap(); inner != nil {
			list = hints(inner, list)
		}
	}
	return list
}

// terminal reports whether w is one, and how many columns it has.
func terminal(w io.Writer) (columns int, ok bool) {
	f, isFile := w.(interface{ Fd() uintptr })
	if !isFile || !term.IsTerminal(int(f.Fd())) {
		return 0, false
	}
	columns, _, err := term.GetSize(int(f.Fd()))
	if err != nil || columns <= 0 {
		columns = 80
	}
	return columns, true
}

// width is how many columns a result may take: the terminal's, or COLUMNS, or
// 80, within reason.
func (u *ui) width() int {
	columns, ok := terminal(u.stdout.w)
	if !ok {
		columns = 80
		if n, err := strconv.Atoi(u.env("COLUMNS")); err == nil {
			columns = n
		}
	}
	return min(max(columns, 60), 120)
}
