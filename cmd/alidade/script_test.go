package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/rogpeppe/go-internal/testscript"
)

// The program under test is this test binary under another name, run as a
// process of its own.
func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){"alidade": main})
}

// TestScripts runs the text archives of testdata: one behaviour each. Beside
// the usual commands of testscript there are
//
//	exits N COMMAND...  runs the command, which must end with exit code N; its
//	                    output is there for stdout and stderr as after exec
//	within N            each line of the last standard error and output has at
//	                    most N columns
//	only NAME...        the folder . holds these entries and no other, hidden
//	                    ones included
//	size FILE N         the file has N bytes
func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir:                 "testdata",
		RequireExplicitExec: true,
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			"exits": exits, "within": withinColumns, "only": only, "size": size,
		},
		Condition: func(cond string) (bool, error) {
			switch cond {
			case "devfull":
				_, err := os.Stat("/dev/full")
				return err == nil, nil
			}
			return false, fmt.Errorf("%q is not a condition", cond)
		},
	})
}

func exits(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 2 {
		ts.Fatalf("usage: exits N COMMAND...")
	}
	want, err := strconv.Atoi(args[0])
	ts.Check(err)
	err = ts.Exec(args[1], args[2:]...)
	got := 0
	var exit *exec.ExitError
	if errors.As(err, &exit) {
		got = exit.ExitCode()
	} else if err != nil {
		ts.Fatalf("%v", err)
	}
	if got != want {
		ts.Fatalf("exit code %d, want %d", got, want)
	}
	for _, name := range []string{"stdout", "stderr"} {
		if text := ts.ReadFile(name); strings.Contains(text, "panic:") || strings.Contains(text, "goroutine ") {
			ts.Fatalf("a panic on %s", name)
		}
	}
}

func withinColumns(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 1 {
		ts.Fatalf("usage: within N")
	}
	n, err := strconv.Atoi(args[0])
	ts.Check(err)
	for _, name := range []string{"stdout", "stderr"} {
		for k, line := range strings.Split(ts.ReadFile(name), "\n") {
			if c := len([]rune(line)); c > n {
				ts.Fatalf("%s, line %d has %d columns: %q", name, k+1, c, line)
			}
		}
	}
}

func only(ts *testscript.TestScript, neg bool, args []string) {
	if neg {
		ts.Fatalf("usage: only NAME...")
	}
	entries, err := os.ReadDir(ts.MkAbs("."))
	ts.Check(err)
	wanted := map[string]bool{".tmp": true}
	for _, a := range args {
		wanted[a] = true
		if _, err := os.Lstat(ts.MkAbs(a)); errors.Is(err, fs.ErrNotExist) {
			ts.Fatalf("%s is not there", a)
		}
	}
	for _, e := range entries {
		if !wanted[e.Name()] {
			ts.Fatalf("%s should not be there", e.Name())
		}
	}
}

func size(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) != 2 {
		ts.Fatalf("usage: size FILE N")
	}
	want, err := strconv.ParseInt(args[1], 10, 64)
	ts.Check(err)
	info, err := os.Stat(ts.MkAbs(filepath.Clean(args[0])))
	ts.Check(err)
	if info.Size() != want {
		ts.Fatalf("%s has %d bytes, want %d", args[0], info.Size(), want)
	}
}
