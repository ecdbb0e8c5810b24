package pipeline

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"alidade/pkg/wav"
)

// bench is a folder with a rig of four for takes of several files.
type bench struct {
	t    *testing.T
	dir  string
	rig  string
	x    [][]int8
	base shape
}

func newBench(t *testing.T, frames int) *bench {
	b := &bench{t: t, dir: t.TempDir(), x: coarse(4, frames), base: shape{container: "RIFF", bits: 16, rate: 16000}}
	b.rig = writeText(t, filepath.Join(b.dir, "four.yaml"), fourLine)
	return b
}

func (b *bench) at(name string) string { return filepath.Join(b.dir, name) }

// put writes channels from..to-1 of the frames first..end-1 with chunks.
func (b *bench) put(name string, from, to, first, end int, chunks ...chunk) string {
	b.t.Helper()
	s := b.base
	s.chunks = chunks
	return put(b.t, b.at(name), s.file(cut(b.x[from:to], first, end)))
}

func (b *bench) run(o Options, take ...string) (*Result, error) {
	if o.Toward == "" {
		o.Toward = "60"
	}
	spec := Spec{Take: take, RigPath: b.rig, Options: o, Version: "9.9", Command: []string{"alidade", "steer", b.dir}}
	return Run(b.t.Context(), spec, jsonRenderers, Watch{})
}

func (b *bench) must(o Options, take ...string) *Result {
	b.t.Helper()
	r, err := b.run(o, take...)
	if err != nil {
		b.t.Fatal(err)
	}
	return r
}

// bases are the names of the take's files.
func bases(r *Result) (list []string) {
	for _, f := range r.Take.Files {
		list = append(list, filepath.Base(f.Path))
	}
	return list
}

func finding(r *Result, code string) *Finding {
	k := slices.IndexFunc(r.Findings, func(f Finding) bool { return f.Code == code })
	if k < 0 {
		return nil
	}
	return &r.Findings[k]
}

// member is the iXML of a file of a set: track ch of a recorder, total files.
func member(uid string, ch, total int) chunk {
	return ixmlChunk(fmt.Sprintf(`<SCENE>7</SCENE><TAKE>3</TAKE><TRACK_LIST><TRACK_COUNT>1</TRACK_COUNT><TRACK><CHANNEL_INDEX>%d</CHANNEL_INDEX><INTERLEAVE_INDEX>1</INTERLEAVE_INDEX><NAME>T%d</NAME></TRACK></TRACK_LIST><FILE_SET><TOTAL_FILES>%d</TOTAL_FILES><FAMILY_UID>%s</FAMILY_UID><FAMILY_NAME>evening</FAMILY_NAME></FILE_SET>`, ch, ch, total, uid))
}

func TestSetIsFoundByItsIXMLFromAnyOfItsFiles(t *testing.T) {
	b := newBench(t, 4000)
	whole := b.must(Options{NoMeasure: true, Format: FormatFloat32, Out: b.at("w.wav")}, b.put("whole.wav", 0, 4, 0, 4000))
	// The names count in another order than the recorder's channels.
	names := []string{"d.wav", "b.wav", "c.wav", "a.wav"}
	for ch, name := range names {
		b.put(name, ch, ch+1, 0, 4000, member("U1", ch+1, 4))
	}
	b.put("other.wav", 0, 1, 0, 4000, member("U2", 1, 4))
	put(t, b.at("broken.wav"), []byte("RIFF"))
	for _, name := range names {
		r := b.must(Options{NoMeasure: true, Format: FormatFloat32, Out: b.at(name + ".out.wav")}, b.at(name))
		if got := bases(r); !slices.Equal(got, names) {
			t.Errorf("from %s: %v, want %v", name, got, names)
		}
		if finding(r, "set-found") == nil {
			t.Errorf("from %s: nothing says that a set was found: %v", name, r.Findings)
		}
		same(t, r.Output.Path, whole.Output.Path)
	}
	_, err := b.run(Options{NoMeasure: true}, b.at("other.wav"))
	if err == nil || !strings.Contains(err.Error(), `its set "evening" has 4 files, 1 are here`) {
		t.Errorf("an incomplete set: %v", err)
	}
	_, err = b.run(Options{NoMeasure: true, FindSet: true}, b.at("whole.wav"))
	if err == nil || !strings.Contains(err.Error(), "iXML names no set") {
		t.Errorf("--find-set without a set: %v", err)
	}
}

// same compares the samples of two files.
func same(t *testing.T, a, b string) {
	t.Helper()
	x, _ := readWAV(t, a)
	y, _ := readWAV(t, b)
	if x.Channels() != y.Channels() || x.Frames() != y.Frames() {
		t.Fatalf("%s has %d × %d samples, %s has %d × %d", a, x.Channels(), x.Frames(), b, y.Channels(), y.Frames())
	}
	for ch := range x.Channels() {
		if !slices.Equal(x.Channel(ch), y.Channel(ch)) {
			t.Errorf("%s and %s differ in channel %d", a, b, ch+1)
		}
	}
}

// A chain is found by its time references, over midnight, whatever the names;
// also for every file of a set.
func TestChainIsFoundByTimeReference(t *testing.T) {
	b := newBench(t, 9000)
	const day = 24 * 3600 * 16000
	when := func(frame int64) chunk {
		return bextChunk("", "", "2026-05-01", "23:59:59", (day-5000+frame)%day, "")
	}
	whole := b.must(Options{NoMeasure: true, Format: FormatFloat32, Out: b.at("w.wav")}, b.put("whole.wav", 0, 4, 0, 9000))
	if err := os.Mkdir(b.at("c"), 0o777); err != nil {
		t.Fatal(err)
	}
	b.put("c/z.wav", 0, 4, 0, 4000, when(0))
	b.put("c/k.wav", 0, 4, 4000, 8000, when(4000)) // passes midnight
	b.put("c/a.wav", 0, 4, 8000, 9000, when(8000))
	b.put("c/later.wav", 0, 4, 0, 1000, when(60000))
	r := b.must(Options{NoMeasure: true, FindChain: true, Format: FormatFloat32, Out: b.at("c1.wav")}, b.at("c/z.wav"))
	if got := bases(r); !slices.Equal(got, []string{"z.wav", "k.wav", "a.wav"}) {
		t.Errorf("the chain is %v", got)
	}
	same(t, r.Output.Path, whole.Output.Path)
	// 5,000 frames of 16 kHz before midnight.
	if r.Take.StartTime != "23:59:59.687" {
		t.Errorf("starts at %s", r.Take.StartTime)
	}
	if finding(r, "chain-found") == nil || finding(r, "chain-gap") != nil {
		t.Errorf("findings %v", r.Findings)
	}
	alone := b.must(Options{NoMeasure: true, FindChain: true}, b.at("c/a.wav"))
	if f := finding(alone, "chain-not-found"); f == nil || len(alone.Take.Files) != 1 {
		t.Errorf("the last file: %v, findings %v", bases(alone), alone.Findings)
	}

	for ch := range 4 {
		b.put(fmt.Sprintf("s%d.wav", ch+1), ch, ch+1, 0, 4000, when(0))
		b.put(fmt.Sprintf("s%d-more.wav", ch+1), ch, ch+1, 4000, 9000, when(4000))
	}
	_, err := b.run(Options{NoMeasure: true, FindChain: true}, b.at("s{ch}.wav"))
	if err == nil || !strings.Contains(err.Error(), "could follow it") {
		t.Errorf("four files that could all follow: %v, want to be told so", err)
	}
	for ch := range 4 {
		os.Remove(b.at(fmt.Sprintf("s%d-more.wav", ch+1)))
		id := ixmlChunk(fmt.Sprintf(`<TRACK_LIST><TRACK><CHANNEL_INDEX>%d</CHANNEL_INDEX><INTERLEAVE_INDEX>1</INTERLEAVE_INDEX></TRACK></TRACK_LIST>`, ch+1))
		b.put(fmt.Sprintf("s%d.wav", ch+1), ch, ch+1, 0, 4000, when(0), id)
		b.put(fmt.Sprintf("p%d.wav", 5-ch), ch, ch+1, 4000, 9000, when(4000), id)
	}
	r = b.must(Options{NoMeasure: true, FindChain: true, Format: FormatFloat32}, b.at("s{ch}.wav"))
	if got := bases(r); !slices.Equal(got, []string{"s1.wav", "p5.wav", "s2.wav", "p4.wav", "s3.wav", "p3.wav", "s4.wav", "p2.wav"}) {
		t.Errorf("the set of chains is %v", got)
	}
	same(t, r.Output.Path, whole.Output.Path)
	if got := filepath.Base(r.Output.Path); got != "s_az+060.0.wav" {
		t.Errorf("the track is called %s", got)
	}
}

func TestGapsAndOverlapsOfAChainAreSaid(t *testing.T) {
	b := newBench(t, 9000)
	when := func(frame int64) chunk { return bextChunk("", "", "2026-05-01", "10:00:00", 36000*16000+frame, "") }
	one, two := b.put("1.wav", 0, 4, 0, 4000, when(0)), b.put("2.wav", 0, 4, 4000, 8000, when(4160))
	three := b.put("3.wav", 0, 4, 8000, 9000, when(8000))
	r := b.must(Options{NoMeasure: true, Chain: true}, one, two, three)
	gap, overlap := finding(r, "chain-gap"), finding(r, "chain-overlap")
	if gap == nil || !strings.Contains(gap.Message, "160 frames are missing") || !strings.Contains(gap.Message, "at 0.250 s") || gap.Severity != Warning {
		t.Errorf("gap of 160 frames at 0.25 s: %v", gap)
	}
	if overlap == nil || !strings.Contains(overlap.Message, "160 frames before the end") || !strings.Contains(overlap.Message, "at 0.500 s") {
		t.Errorf("overlap of 160 frames at 0.5 s: %v", overlap)
	}
	if !strings.HasSuffix(r.Output.Path, "1_az+060.0.wav") || r.Take.Frames != 9000 {
		t.Errorf("%s of %d frames", r.Output.Path, r.Take.Frames)
	}
}

func TestFilesThatDoNotGoTogether(t *testing.T) {
	b := newBench(t, 4000)
	for ch := range 4 {
		b.put(fmt.Sprintf("a%d.wav", ch+1), ch, ch+1, 0, 4000)
		b.put(fmt.Sprintf("c%d.wav", 2*ch+1), ch, ch+1, 0, 4000)
	}
	short := b.put("short.wav", 3, 4, 0, 3999)
	slow := put(t, b.at("slow.wav"), shape{container: "RIFF", bits: 16, rate: 44100}.file(b.x[3:]))
	wide := b.put("wide.wav", 0, 4, 0, 4000)
	if err := os.Link(b.at("a1.wav"), b.at("twin.wav")); err != nil {
		t.Fatal(err)
	}
	b.put("d01.wav", 0, 1, 0, 4000)
	b.put("d1.wav", 0, 1, 0, 4000)
	a := func(n int) string { return b.at(fmt.Sprintf("a%d.wav", n)) }
	for _, c := range []struct {
		what, want string
		o          Options
		take       []string
		usage      bool
	}{
		{"unequal lengths", "short.wav: 3999 frames, but", Options{}, []string{a(1), a(2), a(3), short}, false},
		{"unequal rates", "slow.wav: 44100 Hz, but", Options{}, []string{a(1), a(2), a(3), slow}, false},
		{"unequal channels in a chain", "4 channels, but", Options{Chain: true}, []string{a(1), wide}, false},
		{"one file twice", "is the same file as", Options{}, []string{a(1), a(2), a(3), a(1)}, true},
		{"one file twice by link", "twin.wav: is the same file as", Options{}, []string{a(1), a(2), a(3), b.at("twin.wav")}, true},
		{"a number missing", "number 2 is missing", Options{}, []string{b.at("c{ch}.wav")}, false},
		{"no file fits", "none of", Options{}, []string{b.at("nothing{ch}.wav")}, false},
		{"a number twice", "both number 1", Options{}, []string{b.at("d{ch}.wav")}, false},
		{"no such folder", "no such file", Options{}, []string{b.at("no/x{ch}.wav")}, false},
		{"mark in the folder", "stands in the folder", Options{}, []string{b.at("{ch}/x.wav")}, true},
		{"mark twice", "want {ch} in it once", Options{}, []string{b.at("{ch}{ch}.wav")}, false},
		{"no file", "a take of no files", Options{}, nil, true},
		{"set of many named", "--find-set with 2 files", Options{FindSet: true}, []string{a(1), a(2)}, true},
		{"set and chain", "--chain with --find-chain", Options{Chain: true, FindChain: true}, []string{a(1)}, true},
		{"too few channels", "3", Options{}, []string{a(1), a(2), a(3)}, true},
	} {
		c.o.NoMeasure = true
		before := entries(t, b.dir)
		r, err := b.run(c.o, c.take...)
		var usage *UsageError
		if err == nil || r != nil || !strings.Contains(err.Error(), c.want) || errors.As(err, &usage) != c.usage {
			t.Errorf("%s: %v (%T), want %q, as usage: %v", c.what, err, err, c.want, c.usage)
		}
		if after := entries(t, b.dir); !slices.Equal(before, after) {
			t.Errorf("%s: %v became %v", c.what, before, after)
		}
	}
}

func entries(t *testing.T, dir string) (names []string) {
	t.Helper()
	list, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range list {
		names = append(names, e.Name())
	}
	return names
}

// A file of a set that changes while it is read, not the first one, is named,
// and so is one that loses its end.
func TestFileOfASetThatChangesIsNamed(t *testing.T) {
	for what, change := range map[string]func(string) error{
		"grows":   func(p string) error { return appendTo(p, "more") },
		"shrinks": func(p string) error { return os.Truncate(p, 60) },
	} {
		b := newBench(t, 200000)
		for ch := range 4 {
			b.put(fmt.Sprintf("m%d.wav", ch+1), ch, ch+1, 0, 200000)
		}
		done := false
		spec := Spec{Take: []string{b.at("m{ch}.wav")}, RigPath: b.rig, Options: Options{Toward: "60", NoMeasure: true, BlockFrames: 1000}}
		_, err := Run(t.Context(), spec, jsonRenderers, Watch{Progress: func(string, int64, int64) {
			if !done {
				done = true
				if err := change(b.at("m3.wav")); err != nil {
					t.Error(err)
				}
			}
		}})
		if err == nil || !strings.Contains(err.Error(), "m3.wav") {
			t.Errorf("%s: %v, want m3.wav named", what, err)
		}
		if got := entries(t, b.dir); len(got) != 5 {
			t.Errorf("%s: left behind: %v", what, got)
		}
	}
}

func appendTo(path, text string) error {
	f, err := os.OpenFile(path, os.O_APPEND|os.O_WRONLY, 0)
	if err != nil {
		return err
	}
	_, err = f.WriteString(text)
	return errors.Join(err, f.Close())
}

func TestNameOfATakeMadeOfAPattern(t *testing.T) {
	for name, want := range map[string]string{
		"roof_07_{ch}.wav": "roof_07.wav", "{ch}-roof.wav": "roof.wav", "a_{ch}_b.wav": "a_b.wav", "{ch}.wav": "take.wav",
		"x/y_{ch}.WAV": "x/y.WAV", "plain.wav": "plain.wav",
	} {
		if got := (&take{name: name}).outputBase(); got != want {
			t.Errorf("%s: %s, want %s", name, got, want)
		}
	}
}

func TestFilesOfAPattern(t *testing.T) {
	b := newBench(t, 10)
	for _, n := range []string{"10", "9", "8", "11"} {
		b.put("q"+n+".wav", 0, 1, 0, 10)
	}
	got, err := Files(b.at("q{ch}.wav"))
	want := []string{b.at("q8.wav"), b.at("q9.wav"), b.at("q10.wav"), b.at("q11.wav")}
	if err != nil || !slices.Equal(got, want) {
		t.Errorf("%v, %v; want %v", got, err, want)
	}
	if d, err := Describe(got[0]); err != nil || d.Frames != 10 || d.Encoding != wav.PCM16 {
		t.Errorf("%+v, %v", d, err)
	}
	if _, err := Describe(b.dir); err == nil || !strings.Contains(err.Error(), "is a folder") {
		t.Errorf("a folder: %v", err)
	}
}

// Isolated takes may be sets too; none of their files is ever an output, and
// with --private none of their folders is named.
func TestIsolatedTakesOfSeveralFiles(t *testing.T) {
	b := newBench(t, 40000)
	take := b.put("take.wav", 0, 4, 0, 40000)
	if err := os.Mkdir(b.at("secret"), 0o777); err != nil {
		t.Fatal(err)
	}
	for ch := range 4 {
		data := b.base.file(cut(b.x[ch:ch+1], 0, 39999))
		if ch == 3 { // odd: cut off within its last frame
			data = b.base.file(b.x[3:])
			data = data[:len(data)-1]
		}
		put(t, b.at(fmt.Sprintf("secret/n%d.wav", ch+1)), data)
	}
	whole := b.put("noise.wav", 0, 4, 0, 39999)
	o := Options{IsolatedNoise: b.at("secret/n{ch}.wav"), Private: true, Out: b.at("set.wav")}
	set := b.must(o, take)
	file := b.must(Options{IsolatedNoise: whole, Out: b.at("file.wav")}, take)
	if *set.Overall.NoiseReductionDB != *file.Overall.NoiseReductionDB {
		t.Errorf("noise reduction %v dB from a set, %v dB from a file", *set.Overall.NoiseReductionDB, *file.Overall.NoiseReductionDB)
	}
	if f := finding(set, "take-"+wav.WarnTruncated); f == nil || strings.Contains(f.Message, "secret/") || !strings.Contains(f.Message, "n4.wav") {
		t.Errorf("the odd file of the set: %v", f)
	}
	o.Out, o.Overwrite = b.at("secret/n2.wav"), true
	if _, err := b.run(o, take); err == nil || !strings.Contains(err.Error(), "never written to") {
		t.Errorf("a track onto a file of the isolated set: %v", err)
	}
}
