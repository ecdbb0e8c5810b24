package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/vbauerster/mpb/v8"

	"alidade/pkg/pipeline"
	"alidade/pkg/sheet"
)

// bench is a ui that writes into memory.
type bench struct {
	*ui
	out, errs bytes.Buffer
	at        time.Time
}

func newBench(args ...string) *bench {
	b := &bench{at: time.Date(2026, 5, 1, 21, 0, 0, 0, time.UTC)}
	b.ui = newUI(args, strings.NewReader(""), &b.out, &b.errs, func(string) string { return "" }, func() time.Time { return b.at })
	return b
}

func TestEveryLineOfHelpFitsEightyColumns(t *testing.T) {
	texts := map[string]string{"alidade --help": helpText(verbs())}
	for _, v := range verbs() {
		texts["alidade "+v.name+" --help"] = v.help
		if !strings.HasPrefix(v.help, "alidade "+v.name+": ") {
			t.Errorf("the help of %s begins %q", v.name, strings.SplitN(v.help, "\n", 2)[0])
		}
		if !strings.Contains(v.help, "\nExample") {
			t.Errorf("the help of %s has no example", v.name)
		}
		if !strings.Contains(helpText(verbs()), "\n  "+v.name+" ") {
			t.Errorf("alidade --help does not list %s", v.name)
		}
	}
	for name, text := range texts {
		if !strings.HasSuffix(text, "\n") || strings.HasSuffix(text, "\n\n") {
			t.Errorf("%s: does not end with one newline", name)
		}
		for k, line := range strings.Split(text, "\n") {
			if n := len([]rune(line)); n > 80 {
				t.Errorf("%s, line %d: %d columns: %q", name, k+1, n, line)
			}
			if strings.TrimRight(line, " ") != line || strings.Contains(line, "\t") {
				t.Errorf("%s, line %d: blanks at the end, or a tab: %q", name, k+1, line)
			}
		}
	}
}

// Each flag is explained, and each option that a help text explains exists.
func TestHelpAndFlagsSayTheSame(t *testing.T) {
	for _, v := range verbs() {
		known := map[string]bool{"--help": true}
		for _, f := range v.flags() {
			for _, n := range f.Names() {
				known[dashed(n)] = true
				if !strings.Contains(v.help, "\n  "+dashed(n)+" ") {
					t.Errorf("the help of %s does not explain %s", v.name, dashed(n))
				}
			}
		}
		for _, word := range strings.FieldsFunc(v.help, func(r rune) bool { return strings.ContainsRune(" \n,;:()[]=.", r) }) {
			if strings.HasPrefix(word, "--") && word != "--" && !known[word] {
				t.Errorf("the help of %s speaks of %s, which it does not take", v.name, word)
			}
		}
	}
}

func TestComplaintsStateWhereWhatAndWhyOnALineEach(t *testing.T) {
	_, pathErr := os.Open("no/such/take.wav")
	for _, c := range []struct {
		name string
		err  error
		want string
	}{
		{"plain", errors.New("takes/07.wav: has no frames"), "alidade: takes/07.wav: has no frames\n"},
		{"several", errors.Join(errors.New("a: b"), errors.New("c: d")), "alidade: a: b\nalidade: c: d\n"},
		{"file", pathErr, "alidade: no/such/take.wav: no such file or directory\n"},
		{"file named twice", fmt.Errorf("no/such/take.wav: %w", pathErr), "alidade: no/such/take.wav: no such file or directory\n"},
		{"file within", fmt.Errorf("rig: %w", pathErr), "alidade: rig: no/such/take.wav: no such file or directory\n"},
		{"hint of usage", &usageError{errors.New("steer: no take"), "name one"}, "alidade: steer: no take\nhint: name one\n"},
		{"hint of the run", fmt.Errorf("x: %w", &pipeline.HintedError{Err: errors.New("peak +2.1 dB"), Hint: "lower it"}),
			"alidade: x: peak +2.1 dB\nhint: lower it\n"},
		{"hint said twice", errors.Join(&pipeline.UsageError{Err: errors.New("a"), Hint: "h"}, &pipeline.UsageError{Err: errors.New("b"), Hint: "h"}),
			"alidade: a\nalidade: b\nhint: h\n"},
		{"no text", &missedError{exitSome, nil}, ""},
	} {
		b := newBench()
		b.complain(c.err)
		if got := b.errs.String(); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
		if b.out.Len() > 0 {
			t.Errorf("%s: %q on standard output", c.name, b.out.String())
		}
	}
}

func TestFaultsOfAFileShowItsLines(t *testing.T) {
	type form struct {
		Count int `json:"count"`
	}
	text, err := sheet.SchemaOf(form{}, "https://alidade.example/test", "test")
	if err != nil {
		t.Fatal(err)
	}
	schema, err := sheet.NewSchema(text)
	if err != nil {
		t.Fatal(err)
	}
	var into form
	b := newBench()
	b.complain(sheet.Decode("rig.yaml", []byte("count: many\n"), schema, &into))
	lines := strings.Split(b.errs.String(), "\n")
	if len(lines) < 3 || !strings.HasPrefix(lines[0], "alidade: rig.yaml:1:8: count: ") ||
		!strings.HasPrefix(lines[1], " ") || !strings.Contains(lines[1], "count: many") || !strings.HasSuffix(lines[2], "^") {
		t.Errorf("%q", b.errs.String())
	}
}

func TestEachKindOfErrorHasItsExitCode(t *testing.T) {
	plain := context.Background()
	signalled := func(s syscall.Signal) context.Context {
		ctx, cancel := context.WithCancelCause(plain)
		cancel(&signalError{s})
		return ctx
	}
	stopped, cancel := context.WithCancel(plain)
	cancel()
	for _, c := range []struct {
		name string
		ctx  context.Context
		err  error
		want int
	}{
		{"done", plain, nil, 0},
		{"a file", plain, fs.ErrNotExist, 1},
		{"stopped from inside", stopped, context.Canceled, 1},
		{"usage", plain, &usageError{err: errors.New("x")}, 2},
		{"usage of an option", plain, fmt.Errorf("x: %w", &pipeline.UsageError{Err: errors.New("x")}), 2},
		{"faults of a file", plain, fmt.Errorf("x: %w", &sheet.FaultsError{Name: "r", Faults: make([]sheet.Fault, 1)}), 2},
		{"some of several", plain, &missedError{exitSome, nil}, 3},
		{"interrupted", signalled(syscall.SIGINT), context.Canceled, 130},
		{"ended", signalled(syscall.SIGTERM), errors.New("read: cancelled"), 143},
		{"ended after it was done", signalled(syscall.SIGTERM), nil, 0},
	} {
		if got := exitCode(c.ctx, c.err); got != c.want {
			t.Errorf("%s: %d, want %d", c.name, got, c.want)
		}
	}
}

func TestTheFirstSignalCancelsTheContext(t *testing.T) {
	ctx, stop := untilSignalled(context.Background())
	defer stop()
	if err := syscall.Kill(os.Getpid(), syscall.SIGTERM); err != nil {
		t.Fatal(err)
	}
	select {
	case <-ctx.Done():
	case <-time.After(10 * time.Second):
		t.Fatal("the context is still open")
	}
	var s *signalError
	if !errors.As(context.Cause(ctx), &s) || s.signal != syscall.SIGTERM {
		t.Errorf("cause = %v", context.Cause(ctx))
	}
}

func TestPlainProgressIsRare(t *testing.T) {
	b := newBench()
	p := b.progress(false)
	// Half a second of work says nothing.
	for k := range 50 {
		b.at = b.at.Add(10 * time.Millisecond)
		p.step("a.wav: steering", int64(k), 50)
	}
	if b.errs.Len() > 0 {
		t.Errorf("after half a second: %q", b.errs.String())
	}
	// A hundred seconds say a line for each tenth of the whole.
	b = newBench()
	p = b.progress(false)
	for k := range 1001 {
		p.step("a.wav: steering", int64(k), 1000)
		b.at = b.at.Add(100 * time.Millisecond)
	}
	p.finish()
	got := strings.Split(strings.TrimSuffix(b.errs.String(), "\n"), "\n")
	if len(got) < 10 || len(got) > 25 {
		t.Errorf("%d lines in 100 s: %q", len(got), got)
	}
	if got[0] != "a.wav: steering: 5 % after 5s" || got[len(got)-1] != "a.wav: steering: 100 % after 1m40s" {
		t.Errorf("the first line is %q, the last %q", got[0], got[len(got)-1])
	}
	// Without a known whole it counts frames, every five seconds.
	b = newBench()
	p = b.progress(false)
	for k := range 12 {
		p.step("a.wav: hashing", int64(k*1000), 0)
		b.at = b.at.Add(time.Second)
	}
	if got := b.errs.String(); got != "a.wav: hashing: 5000 frames after 5s\na.wav: hashing: 10000 frames after 10s\n" {
		t.Errorf("%q", got)
	}
	// Quiet is silent.
	b = newBench()
	p = b.progress(true)
	b.at = b.at.Add(time.Hour)
	p.step("a.wav: steering", 1, 2)
	p.finish()
	if b.errs.Len() > 0 {
		t.Errorf("quiet: %q", b.errs.String())
	}
}

func TestTheBarNamesWhatItShowsAndLeavesNothingRunning(t *testing.T) {
	var out bytes.Buffer
	refresh := make(chan any)
	b := &bar{out: &out, options: []mpb.ContainerOption{mpb.WithManualRefresh(refresh), mpb.WithAutoRefresh()}}
	b.step("a.wav: steering", 25, 100)
	refresh <- time.Now()
	b.step("a.wav: steering", 50, 100)
	b.step("b.wav: steering", 10, 200)
	refresh <- time.Now()
	b.finish()
	b.finish() // once more does no harm
	for _, want := range []string{"a.wav: steering", "b.wav: steering", " 5 %"} {
		if !strings.Contains(out.String(), want) {
			t.Errorf("the bar does not show %q: %q", want, out.String())
		}
	}
}

func TestTheWidthIsTheTerminalsOrColumnsWithinReason(t *testing.T) {
	for columns, want := range map[string]int{"": 80, "100": 100, "20": 60, "9999": 120, "wide": 80} {
		b := newBench()
		b.env = func(string) string { return columns }
		if got := b.width(); got != want {
			t.Errorf("COLUMNS=%q: %d, want %d", columns, got, want)
		}
	}
}

// failingWriter takes some bytes and then none.
type failingWriter struct{ left int }

func (w *failingWriter) Write(p []byte) (int, error) {
	if len(p) > w.left {
		return w.left, &fs.PathError{Op: "write", Path: "/dev/stdout", Err: syscall.ENOSPC}
	}
	w.left -= len(p)
	return len(p), nil
}

func TestALostResultIsAFailure(t *testing.T) {
	var errs bytes.Buffer
	code := run(context.Background(), []string{"--version"}, nil, &failingWriter{3}, &errs, os.Getenv)
	if code != exitNothing || errs.String() != "alidade: standard output: no space left on device\n" {
		t.Errorf("exit code %d, %q", code, errs.String())
	}
}
