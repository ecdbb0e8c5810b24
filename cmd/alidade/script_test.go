package main

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/rogpeppe/go-internal/testscript"

	"alidade/pkg/audio"
	"alidade/pkg/wav"
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
//	take FILE C N       makes a take of C channels and N frames, 48 kHz, 24 bit:
//	                    seeded noise, and a sound from 60° on a line of 40 mm
//	                    spacing in its last two thirds
//	silence FILE C N    makes such a take of silence, without filling the disk
//	signal SIG N GLOB COMMAND...
//	                    runs the command, sends it the signal once a file that
//	                    matches is there, and expects exit code N
func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir:                 "testdata",
		RequireExplicitExec: true,
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			"exits": exits, "within": withinColumns, "only": only, "size": size,
			"take": makeTake, "silence": makeSilence, "signal": signalled,
		},
		Condition: func(cond string) (bool, error) {
			switch cond {
			case "long":
				return os.Getenv("ALIDADE_LONG") == "1", nil
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

// numbersOf parses the arguments FILE C N.
func numbersOf(ts *testscript.TestScript, neg bool, args []string) (path string, channels, frames int) {
	if neg || len(args) != 3 {
		ts.Fatalf("usage: FILE CHANNELS FRAMES")
	}
	channels, err := strconv.Atoi(args[1])
	ts.Check(err)
	frames, err = strconv.Atoi(args[2])
	ts.Check(err)
	return ts.MkAbs(args[0]), channels, frames
}

func makeTake(ts *testscript.TestScript, neg bool, args []string) {
	path, channels, frames := numbersOf(ts, neg, args)
	ts.Check(os.MkdirAll(filepath.Dir(path), 0o777))
	file, err := os.Create(path)
	ts.Check(err)
	defer file.Close()
	w, err := wav.NewWriter(file, wav.Format{Rate: 48000, Channels: channels, Encoding: wav.PCM24}, wav.Option{})
	ts.Check(err)
	rng := rand.New(rand.NewPCG(uint64(channels), uint64(frames)))
	b := audio.NewBlock(channels, frames)
	var phase [24]float64
	for k := range phase {
		phase[k] = 2 * math.Pi * rng.Float64()
	}
	sum := make([]float64, frames)
	for ch := range channels {
		for i := range sum {
			sum[i] = 0.02 * rng.NormFloat64()
		}
		// Arrival at a microphone (ch - (channels-1)/2)·40 mm along x.
		late := -(float64(ch) - float64(channels-1)/2) * 0.04 * math.Cos(math.Pi/3) / 343.2
		begin := frames/3 + 1
		for k, p := range phase {
			w := 2 * math.Pi * 150 * math.Pow(1.2, float64(k))
			// The tone as a number of the complex plane that turns by one
			// angle a frame.
			turn := cmplx.Rect(1, w/48000)
			z := cmplx.Rect(0.01, w*(float64(begin)/48000-late)+p)
			for i := begin; i < frames; i++ {
				sum[i] += imag(z)
				z *= turn
			}
		}
		for i, v := range sum {
			b.Channel(ch)[i] = float32(v)
		}
	}
	ts.Check(w.Write(b))
	ts.Check(w.Close())
}

func makeSilence(ts *testscript.TestScript, neg bool, args []string) {
	path, channels, frames := numbersOf(ts, neg, args)
	file, err := os.Create(path)
	ts.Check(err)
	defer file.Close()
	// The header says what the hole after it is.
	bytes := 3 * channels * frames
	head := binary.LittleEndian.AppendUint32([]byte("RIFF"), uint32(36+bytes))
	head = binary.LittleEndian.AppendUint32(append(head, "WAVEfmt "...), 16)
	head = binary.LittleEndian.AppendUint16(head, 1)
	head = binary.LittleEndian.AppendUint16(head, uint16(channels))
	head = binary.LittleEndian.AppendUint32(head, 48000)
	head = binary.LittleEndian.AppendUint32(head, uint32(48000*3*channels))
	head = binary.LittleEndian.AppendUint16(head, uint16(3*channels))
	head = binary.LittleEndian.AppendUint16(head, 24)
	head = binary.LittleEndian.AppendUint32(append(head, "data"...), uint32(bytes))
	_, err = file.Write(head)
	ts.Check(err)
	ts.Check(file.Truncate(int64(len(head) + bytes)))
}

func signalled(ts *testscript.TestScript, neg bool, args []string) {
	signals := map[string]syscall.Signal{"INT": syscall.SIGINT, "TERM": syscall.SIGTERM, "KILL": syscall.SIGKILL, "USR1": syscall.SIGUSR1, "HUP": syscall.SIGHUP}
	if neg || len(args) < 4 || signals[args[0]] == 0 {
		ts.Fatalf("usage: signal INT|TERM|KILL|USR1|HUP N GLOB COMMAND...")
	}
	want, err := strconv.Atoi(args[1])
	ts.Check(err)
	path, err := exec.LookPath(args[3])
	ts.Check(err)
	cmd := exec.Command(path, args[4:]...)
	cmd.Dir = ts.MkAbs(".")
	cmd.Env = append(os.Environ(), "SLURM_RESTART_COUNT="+ts.Getenv("SLURM_RESTART_COUNT"))
	var stderr strings.Builder
	cmd.Stderr = &stderr
	ts.Check(cmd.Start())
	ended := make(chan error, 1)
	go func() { ended <- cmd.Wait() }()
	deadline := time.After(time.Minute)
	for sent := false; ; {
		select {
		case err = <-ended:
			if got := cmd.ProcessState.ExitCode(); !sent || got != want {
				ts.Fatalf("exit code %d (%v), signal sent: %v, want exit code %d\n%s", got, err, sent, want, stderr.String())
			}
			ts.Logf("[stderr]\n%s", stderr.String())
			return
		case <-deadline:
			_ = cmd.Process.Kill()
			ts.Fatalf("still running after a minute\n%s", stderr.String())
		case <-time.After(2 * time.Millisecond):
			if found, _ := filepath.Glob(ts.MkAbs(args[2])); len(found) > 0 && !sent {
				ts.Check(cmd.Process.Signal(signals[args[0]]))
				sent = true
			}
		}
	}
}
