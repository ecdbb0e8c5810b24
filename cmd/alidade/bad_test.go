//go:build linux

package main

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"
)

var le = binary.LittleEndian

// body is one chunk of a WAV file with the size it claims.
type body struct {
	id   string
	size int64 // claimed; -1 is the true one
	data []byte
}

// riff puts chunks into a file of the given form ("RIFF", "RF64").
func riff(form string, chunks ...body) []byte {
	b := append([]byte(form), 0, 0, 0, 0, 'W', 'A', 'V', 'E')
	for _, c := range chunks {
		size := uint32(c.size)
		if c.size < 0 {
			size = uint32(len(c.data))
		}
		b = le.AppendUint32(append(b, c.id...), size)
		b = append(b, c.data...)
		if len(c.data)%2 == 1 {
			b = append(b, 0)
		}
	}
	le.PutUint32(b[4:], uint32(len(b)-8))
	return b
}

// format is a fmt chunk.
func format(tag, channels int, rate int64, bits int) body {
	align := channels * ((bits + 7) / 8)
	b := le.AppendUint16(nil, uint16(tag))
	b = le.AppendUint16(b, uint16(channels))
	b = le.AppendUint32(b, uint32(rate))
	b = le.AppendUint32(b, uint32(rate*int64(align)))
	b = le.AppendUint16(b, uint16(align))
	return body{"fmt ", -1, le.AppendUint16(b, uint16(bits))}
}

// guid is an extensible fmt chunk with the given sub-format.
func guid(channels int, sub string) body {
	f := format(0xFFFE, channels, 48000, 16)
	f.data = le.AppendUint16(f.data, 22)
	f.data = le.AppendUint16(f.data, 16)
	f.data = append(le.AppendUint32(f.data, 0), sub...)
	return f
}

// hiss is a data chunk of a quiet hiss, 16 bits.
func hiss(channels, frames int) body {
	b := make([]byte, 0, 2*channels*frames)
	seed := uint32(1)
	for range channels * frames {
		seed = seed*1664525 + 1013904223
		b = le.AppendUint16(b, uint16(int16(seed>>16)>>6))
	}
	return body{"data", -1, b}
}

// floats is a data chunk of float32 samples with v in every k-th place.
func floats(channels, frames, k int, v float64) body {
	var b []byte
	for i := range channels * frames {
		x := float32(math.Sin(float64(i)*0.7) * 0.1)
		if i%k == 0 {
			x = float32(v)
		}
		b = le.AppendUint32(b, math.Float32bits(x))
	}
	return body{"data", -1, b}
}

func good(channels, frames int) []byte {
	return riff("RIFF", format(1, channels, 48000, 16), hiss(channels, frames))
}

// yard is a folder with a rig of four, rig.yaml, and a take for it, good.wav.
type yard struct {
	t   *testing.T
	dir string
}

func newYard(t *testing.T) *yard {
	y := &yard{t, t.TempDir()}
	y.put("rig.yaml", []byte("rig: four in a row\nline: {count: 4, spacing_mm: 50}\n"))
	y.put("good.wav", good(4, 24000))
	return y
}

func (y *yard) put(name string, data []byte) {
	y.t.Helper()
	if err := os.MkdirAll(filepath.Dir(y.at(name)), 0o777); err != nil {
		y.t.Fatal(err)
	}
	if err := os.WriteFile(y.at(name), data, 0o666); err != nil {
		y.t.Fatal(err)
	}
}

func (y *yard) at(name string) string { return filepath.Join(y.dir, name) }

// all lists every entry below the folder with its size.
func (y *yard) all() (list []string) {
	y.t.Helper()
	err := filepath.WalkDir(y.dir, func(path string, d os.DirEntry, err error) error {
		if err != nil {
			return err
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		size := info.Size()
		if d.IsDir() {
			size = 0
		}
		list = append(list, fmt.Sprint(path, " ", size))
		return nil
	})
	if err != nil {
		y.t.Fatal(err)
	}
	return list
}

// outcome is how a run of the program ended.
type outcome struct {
	code           int
	stdout, stderr string
	took           time.Duration
	residentMiB    float64 // largest resident set
}

// alidade runs the program in the folder.
func (y *yard) alidade(args ...string) outcome { return y.as(nil, args...) }

func (y *yard) as(who *syscall.SysProcAttr, args ...string) outcome {
	y.t.Helper()
	path, err := exec.LookPath("alidade")
	if err != nil {
		y.t.Fatal(err)
	}
	cmd := exec.Command(path, args...)
	cmd.Dir, cmd.SysProcAttr = y.dir, who
	var stdout, stderr bytes.Buffer
	cmd.Stdout, cmd.Stderr = &stdout, &stderr
	start := time.Now()
	err = cmd.Run()
	var exit *exec.ExitError
	if err != nil && !errors.As(err, &exit) {
		y.t.Fatalf("%v: %v", args, err)
	}
	o := outcome{code: cmd.ProcessState.ExitCode(), stdout: stdout.String(), stderr: stderr.String(), took: time.Since(start)}
	if usage, ok := cmd.ProcessState.SysUsage().(*syscall.Rusage); ok && runtime.GOOS == "linux" {
		o.residentMiB = float64(usage.Maxrss) / 1024
	}
	return o
}

// Limits of a refusal.
const (
	refusalTime = 2 * time.Second
	refusalMiB  = 200
)

// refused holds a run to what every refusal is: one line that says where and
// what, what helps, the exit code, nothing written, quickly and in little room.
func (y *yard) refused(o outcome, code int, want string, before []string) {
	y.t.Helper()
	y.t.Logf("exit %d, %v, %.0f MiB\n%s", o.code, o.took.Round(time.Millisecond), o.residentMiB, o.stderr)
	if o.code != code {
		y.t.Errorf("exit code %d, want %d", o.code, code)
	}
	lines := strings.Split(strings.TrimSuffix(o.stderr, "\n"), "\n")
	var faults, remedies []string
	for _, l := range lines {
		switch {
		case strings.HasPrefix(l, "alidade: "):
			faults = append(faults, l)
		case strings.HasPrefix(l, "hint: "):
			remedies = append(remedies, l)
		case !strings.HasPrefix(l, " "): // a line of the rig file that is shown
			y.t.Errorf("a line of another kind: %q", l)
		}
	}
	if len(faults) != 1 || !strings.Contains(o.stderr, want) {
		y.t.Errorf("%d faults, want one with %q:\n%s", len(faults), want, o.stderr)
	}
	remedy := len(remedies) > 0
	for _, word := range []string{"; give ", ": give ", " want ", "want "} {
		remedy = remedy || strings.Contains(o.stderr, word)
	}
	if !remedy {
		y.t.Errorf("nothing says what helps:\n%s", o.stderr)
	}
	if strings.Contains(o.stderr, "goroutine ") || strings.Contains(o.stderr, "panic") {
		y.t.Errorf("a panic:\n%s", o.stderr)
	}
	if o.stdout != "" {
		y.t.Errorf("on standard output: %q", o.stdout)
	}
	if after := y.all(); !slices.Equal(before, after) {
		y.t.Errorf("%v became %v", before, after)
	}
	if o.took > refusalTime || o.residentMiB > refusalMiB {
		y.t.Errorf("took %v and %.0f MiB", o.took, o.residentMiB)
	}
}

// bad is an input that cannot be used. make writes what is wanted beside
// good.wav and rig.yaml; without args the take is x.wav.
type bad struct {
	name string
	make func(y *yard)
	args []string
	code int
	want string
}

// file makes x.wav of data.
func file(data []byte) func(*yard) { return func(y *yard) { y.put("x.wav", data) } }

func steerArgs(args ...string) []string {
	return append([]string{"steer", "--toward", "60", "--rig", "rig.yaml", "--quiet"}, args...)
}

func badInputs() []bad {
	ixml := func(text string) body { return body{"iXML", -1, []byte("<BWFXML>" + text + "</BWFXML>")} }
	none := func(*yard) {}
	return []bad{
		// What is no WAV file.
		{"empty file", file(nil), nil, 1, "x.wav: "},
		{"three bytes", file([]byte("RIF")), nil, 1, "x.wav: "},
		{"text", file([]byte(strings.Repeat("this is not sound\n", 100))), nil, 1, "x.wav: "},
		{"zeros", file(make([]byte, 100000)), nil, 1, "x.wav: "},
		{"AVI", file(append([]byte("RIFF\x00\x10\x00\x00AVI "), make([]byte, 4096)...)), nil, 1, "x.wav: "},
		{"AIFF", file(append([]byte("FORM\x00\x00\x10\x00AIFFCOMM"), make([]byte, 4096)...)), nil, 1, "x.wav: "},
		{"RIFX", file(append([]byte("RIFX\x00\x00\x10\x00WAVEfmt "), make([]byte, 4096)...)), nil, 1, "x.wav: "},
		{"FLAC", file(append([]byte("fLaC\x00\x00\x00\x22"), make([]byte, 4096)...)), nil, 1, "x.wav: "},
		{"Ogg", file(append([]byte("OggS\x00\x02"), make([]byte, 4096)...)), nil, 1, "x.wav: "},
		{"an ID3 tag alone", file([]byte("ID3\x04\x00\x00\x00\x00\x00\x0aTIT2AAAAAA")), nil, 1, "x.wav: "},

		// Headers that cannot be.
		{"no fmt", file(riff("RIFF", hiss(4, 100))), nil, 1, "x.wav: "},
		{"no data", file(riff("RIFF", format(1, 4, 48000, 16))), nil, 1, "x.wav: "},
		{"cut within fmt", file(good(4, 10)[:30]), nil, 1, "x.wav: "},
		{"fmt of 4 bytes", file(riff("RIFF", body{"fmt ", -1, []byte{1, 0, 4, 0}}, hiss(4, 100))), nil, 1, "fmt"},
		{"zero channels", file(riff("RIFF", format(1, 0, 48000, 16), hiss(4, 100))), nil, 1, "channels"},
		{"65,535 channels", file(riff("RIFF", format(1, 65535, 48000, 16), hiss(4, 100))), nil, 1, "65535 channels"},
		{"257 channels", file(riff("RIFF", format(1, 257, 48000, 16), hiss(257, 100))), nil, 1, "257 channels"},
		{"rate of zero", file(riff("RIFF", format(1, 4, 0, 16), hiss(4, 100))), nil, 1, "0 Hz"},
		{"rate of 1 Hz", file(riff("RIFF", format(1, 4, 1, 16), hiss(4, 100))), nil, 1, "1 Hz"},
		{"rate of 4 GHz", file(riff("RIFF", format(1, 4, 4000000000, 16), hiss(4, 100))), nil, 1, "4000000000 Hz"},
		{"samples of no bits", file(riff("RIFF", format(1, 4, 48000, 0), hiss(4, 100))), nil, 1, "bits"},
		{"samples of 48 bits", file(riff("RIFF", format(1, 4, 48000, 48), hiss(4, 100))), nil, 1, "48"},
		{"float of 16 bits", file(riff("RIFF", format(3, 4, 48000, 16), hiss(4, 100))), nil, 1, "16"},
		{"no frames", file(riff("RIFF", format(1, 4, 48000, 16), body{"data", -1, nil})), nil, 1, "holds no sound"},
		{"a size that lies, and no frames", file(riff("RIFF", format(1, 4, 48000, 16), body{"data", 1 << 30, nil})), nil, 1, "x.wav: "},
		{"fmt that claims 4 GiB", file(riff("RIFF", body{"fmt ", math.MaxUint32, []byte{1, 0, 4, 0}})), nil, 1, "x.wav: "},

		// Sound in other forms, named.
		{"MPEG layer 3", file(riff("RIFF", format(0x55, 2, 48000, 0), hiss(2, 100))), nil, 1, "MPEG layer 3 in WAV"},
		{"ADPCM", file(riff("RIFF", format(2, 2, 48000, 4), hiss(2, 100))), nil, 1, "ADPCM"},
		{"A-law", file(riff("RIFF", format(6, 4, 48000, 8), hiss(4, 100))), nil, 1, "A-law"},
		{"µ-law", file(riff("RIFF", format(7, 4, 48000, 8), hiss(4, 100))), nil, 1, "law"},
		{"unknown tag", file(riff("RIFF", format(0x7123, 4, 48000, 16), hiss(4, 100))), nil, 1, "0x7123"},
		{"unknown sub-format", file(riff("RIFF", guid(4, "sixteen unknown."), hiss(4, 100))), nil, 1, "x.wav: "},

		// What is no file, or not there.
		{"missing", none, steerArgs("x.wav"), 1, "x.wav: no such file"},
		{"folder", func(y *yard) { y.check(os.Mkdir(y.at("x.wav"), 0o777)) }, nil, 1, "is a folder"},
		{"named pipe", func(y *yard) { y.check(syscall.Mkfifo(y.at("x.wav"), 0o666)) }, nil, 1, "is a named pipe"},
		{"socket", func(y *yard) { y.check(syscall.Mknod(y.at("x.wav"), syscall.S_IFSOCK|0o666, 0)) }, nil, 1, "is a socket"},
		{"device", none, steerArgs("/dev/zero"), 1, "/dev/zero: is a device"},
		{"link to nothing", func(y *yard) { y.check(os.Symlink("gone.wav", y.at("x.wav"))) }, nil, 1, "no such file"},
		{"link to itself", func(y *yard) { y.check(os.Symlink("x.wav", y.at("x.wav"))) }, nil, 1, "x.wav: "},
		{"name too long", none, steerArgs(strings.Repeat("x", 300) + ".wav"), 1, "too long"},

		// Takes that do not fit.
		{"one channel", file(good(1, 24000)), nil, 2, "x.wav"},
		{"rig with more channels", file(good(3, 24000)), nil, 2, "x.wav"},
		{"isolated noise of another rate", file(riff("RIFF", format(1, 4, 44100, 16), hiss(4, 1000))), steerArgs("good.wav", "--isolated-noise", "x.wav"), 2, "44100 Hz"},
		{"isolated noise missing", none, steerArgs("good.wav", "--isolated-noise", "x.wav"), 1, "x.wav: no such file"},
		{"isolated target cut off", file(good(4, 1000)[:20]), steerArgs("good.wav", "--isolated-target", "x.wav"), 1, "x.wav: "},
		{"chain of unequal rates", file(riff("RIFF", format(1, 4, 44100, 16), hiss(4, 1000))), steerArgs("good.wav", "x.wav", "--chain"), 1, "44100 Hz"},
		{"chain with a missing file", none, steerArgs("good.wav", "x.wav", "--chain"), 1, "x.wav: no such file"},
		{"file twice in a chain", none, steerArgs("good.wav", "./good.wav", "--chain"), 2, "is the same file as"},
		{"set with a number missing", func(y *yard) {
			for _, n := range []int{1, 2, 3, 5} {
				y.put(fmt.Sprintf("s%d.wav", n), good(1, 1000))
			}
		}, steerArgs("s{ch}.wav"), 1, "number 4 is missing"},
		{"set of unequal lengths", func(y *yard) {
			for n := range 4 {
				y.put(fmt.Sprintf("s%d.wav", n+1), good(1, 1000-n/3))
			}
		}, steerArgs("s{ch}.wav"), 1, "s4.wav: 999 frames"},
		{"set of no files", none, steerArgs("s{ch}.wav"), 1, "none of"},
		{"set of which files are missing", file(riff("RIFF", format(1, 1, 48000, 16), ixml("<FILE_SET><TOTAL_FILES>4</TOTAL_FILES><FAMILY_UID>F</FAMILY_UID></FILE_SET>"), hiss(1, 1000))), nil, 1, "has 4 files, 1 are here"},
		{"time of day without one", none, steerArgs("good.wav", "--noise", "10:00:00..10:00:01"), 2, "no time reference"},
		{"stretch behind the end", none, steerArgs("good.wav", "--noise", "7..8"), 2, "0.500 s long"},
		{"excerpt behind the end", none, steerArgs("good.wav", "--excerpt", "7..8"), 2, "0.500 s long"},
		{"unknown cue", none, steerArgs("good.wav", "--noise-cue", "hush"), 2, "no cue of good.wav"},

		// Rigs.
		{"rig missing", none, []string{"steer", "good.wav", "--rig", "no.yaml", "--toward", "60"}, 2, "no.yaml"},
		{"a take for a rig", none, []string{"steer", "good.wav", "--rig", "good.wav", "--toward", "60"}, 2, "good.wav"},
		{"empty rig", func(y *yard) { y.put("rig.yaml", nil) }, steerArgs("good.wav"), 2, "rig.yaml"},
		{"rig that is a pipe", func(y *yard) { y.check(os.Remove(y.at("rig.yaml"))); y.check(syscall.Mkfifo(y.at("rig.yaml"), 0o666)) }, steerArgs("good.wav"), 2, "rig.yaml"},

		// Outputs.
		{"no folder for the output", none, steerArgs("good.wav", "--out", "no/t.wav"), 1, "no: no such"},
		{"output onto the take", none, steerArgs("good.wav", "--out", "good.wav", "--overwrite"), 2, "never written to"},
		{"output onto the take by a link", func(y *yard) { y.check(os.Link(y.at("good.wav"), y.at("l.wav"))) }, steerArgs("good.wav", "--out", "l.wav", "--overwrite"), 2, "never written to"},
		{"output that differs in case", none, steerArgs("good.wav", "--out", "GOOD.wav"), 2, "only in case"},
		{"output exists", func(y *yard) { y.put("t.wav", []byte("mine")) }, steerArgs("good.wav", "--out", "t.wav"), 1, "t.wav: exists already"},
		{"output is a pipe", func(y *yard) { y.check(syscall.Mkfifo(y.at("t.wav"), 0o666)) }, steerArgs("good.wav", "--out", "t.wav", "--overwrite"), 1, "is a named pipe"},
		{"output is a device", none, steerArgs("good.wav", "--out", "/dev/null", "--overwrite"), 1, "/dev/"},
		{"output below a file", none, steerArgs("good.wav", "--out", "rig.yaml/"), 1, "rig.yaml"},
		{"track beyond full scale", none, steerArgs("good.wav", "--gain-db", "60"), 1, "pcm24 would clip"},

		// The same through inspect.
		{"inspect of text", file([]byte("no sound")), []string{"inspect", "x.wav"}, 1, "x.wav: "},
		{"inspect of nothing", none, []string{"inspect", "x.wav"}, 1, "x.wav: no such file"},
		{"inspect of a device", none, []string{"inspect", "/dev/zero"}, 1, "is a device"},
	}
}

func (y *yard) check(err error) {
	y.t.Helper()
	if err != nil {
		y.t.Fatal(err)
	}
}

// TestBadInputs runs the program on every kind of bad input.
func TestBadInputs(t *testing.T) {
	list := badInputs()
	if len(list) < 40 {
		t.Errorf("%d kinds, want at least 40", len(list))
	}
	slowest, largest := time.Duration(0), 0.0
	for _, c := range list {
		t.Run(c.name, func(t *testing.T) {
			y := newYard(t)
			c.make(y)
			before := y.all()
			args := c.args
			if args == nil {
				args = steerArgs("x.wav")
			}
			o := y.alidade(args...)
			y.refused(o, c.code, c.want, before)
			slowest, largest = max(slowest, o.took), max(largest, o.residentMiB)
		})
	}
	t.Logf("%d kinds; the slowest took %v, the largest %.0f MiB", len(list), slowest.Round(time.Millisecond), largest)
}
