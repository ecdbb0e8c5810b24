package wav

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"reflect"
	"slices"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

// split makes files of the channels first..to of frames from..until of b.
func split(t testing.TB, b audio.Block, channels [2]int, frames [2]int) []byte {
	t.Helper()
	part := audio.NewBlock(channels[1]-channels[0], frames[1]-frames[0])
	for ch := range part.Channels() {
		copy(part.Channel(ch), b.Channel(channels[0] + ch)[frames[0]:frames[1]])
	}
	m, _ := write(t, Format{48000, part.Channels(), Float32}, Option{}, part, 4096)
	return m.b
}

// pieces are the same take as a set of one-channel files, as a chain of three,
// and as a set of chains.
func pieces(t testing.TB, b audio.Block) map[string]func() Take {
	one := func(file []byte, name string) Part { return Part{name, open(t, file)} }
	n, f := b.Channels(), b.Frames()
	cuts := []int{0, f / 3, f/3 + 1, f, f} // the last part is empty
	must := func(take Take, err error) Take {
		if err != nil {
			t.Fatal(err)
		}
		return take
	}
	var mono, chain [][]byte
	var grid [][][]byte
	for ch := range n {
		mono = append(mono, split(t, b, [2]int{ch, ch + 1}, [2]int{0, f}))
		var row [][]byte
		for k := range 4 {
			row = append(row, split(t, b, [2]int{ch, ch + 1}, [2]int{cuts[k], cuts[k+1]}))
		}
		grid = append(grid, row)
	}
	for k := range 4 {
		chain = append(chain, split(t, b, [2]int{0, n}, [2]int{cuts[k], cuts[k+1]}))
	}
	parts := func(files [][]byte) (list []Part) {
		for k, x := range files {
			list = append(list, one(x, fmt.Sprintf("file %d", k+1)))
		}
		return list
	}
	return map[string]func() Take{
		"set":   func() Take { return must(Join(parts(mono))) },
		"chain": func() Take { return must(Chain(parts(chain))) },
		"set of chains": func() Take {
			var list []Part
			for ch, row := range grid {
				list = append(list, Part{fmt.Sprintf("channel %d", ch+1), must(Chain(parts(row)))})
			}
			return must(Join(list))
		},
		"pairs": func() Take {
			return must(Join([]Part{one(split(t, b, [2]int{0, 2}, [2]int{0, f}), "a"), one(split(t, b, [2]int{2, n}, [2]int{0, f}), "b")}))
		},
	}
}

func TestSeveralFilesAreOneTake(t *testing.T) {
	b := noise(5, 7001)
	for name, take := range pieces(t, b) {
		t.Run(name, func(t *testing.T) {
			audiotest.TestSource(t, func() audio.Source { return take() }, b, audiotest.Options{Rate: 48000, Sizes: []int{joinFrames, 7001 / 3}})
			x := take()
			if x.Frames() != 7001 || x.Format() != (audio.Format{Rate: 48000, Channels: 5}) {
				t.Errorf("%d frames, %+v", x.Frames(), x.Format())
			}
			rng := rand.New(rand.NewPCG(7, 7))
			dst := audio.NewBlock(5, 3000)
			for range 200 {
				at := rng.IntN(7001)
				if err := x.SeekFrame(int64(at)); err != nil {
					t.Fatal(err)
				}
				n := min(1+rng.IntN(3000), 7001-at)
				if got, err := x.Read(dst.Slice(0, n)); got != n || err != nil {
					t.Fatalf("%d frames at %d: %d, %v", n, at, got, err)
				}
				sameBits(t, dst.Slice(0, n), b.Slice(at, at+n))
			}
			if err := x.SeekFrame(7001); err != nil {
				t.Fatal(err)
			}
			if n, err := x.Read(dst); n != 0 || err != io.EOF {
				t.Errorf("at the end: %d, %v", n, err)
			}
			if x.SeekFrame(7002) == nil || x.SeekFrame(-1) == nil {
				t.Error("a frame outside is sought")
			}
		})
	}
}

func TestReadingSeveralFilesAllocatesNothing(t *testing.T) {
	for name, take := range pieces(t, noise(4, 60000)) {
		x, dst := take(), audio.NewBlock(4, 1000)
		if n := testing.AllocsPerRun(50, func() {
			if _, err := x.Read(dst); err != nil {
				t.Fatal(err)
			}
		}); n != 0 {
			t.Errorf("%s: %g allocations a read", name, n)
		}
	}
}

func TestFilesThatDoNotFitAreAllNamed(t *testing.T) {
	take := func(channels, rate, frames int) Take {
		return open(t, recipe{channels: channels, rate: rate, frames: frames}.make().file)
	}
	_, err := Join([]Part{{"a.wav", take(1, 48000, 100)}, {"b.wav", take(1, 44100, 100)}, {"c.wav", take(1, 48000, 99)}})
	if err == nil || err.Error() != "b.wav: 44100 Hz, but a.wav has 48000 Hz\nc.wav: 99 frames, but a.wav has 100" {
		t.Error(err)
	}
	_, err = Chain([]Part{{"a.wav", take(2, 48000, 100)}, {"b.wav", take(1, 44100, 10)}, {"c.wav", take(2, 48000, 99)}})
	if err == nil || err.Error() != "b.wav: 44100 Hz, but a.wav has 48000 Hz\nb.wav: 1 channels, but a.wav has 2" {
		t.Error(err)
	}
	if _, err = Join([]Part{{"a", take(256, 48000, 5)}, {"b", take(1, 48000, 5)}}); err == nil || !strings.Contains(err.Error(), "257 channels in all: up to 256") {
		t.Error(err)
	}
	for _, make := range []func([]Part) (Take, error){Join, Chain} {
		if _, err := make(nil); err == nil {
			t.Error("no files are a take")
		}
	}
}

func TestAFailureOfOneFileIsTheTakesAndNamesIt(t *testing.T) {
	disk := errors.New("the disk is on fire")
	broken := func(channels, good, frames int) Take {
		x := recipe{channels: channels, frames: frames, rate: 48000}.make()
		r, err := Open(failingAt{x.file, int64(44 + 2*channels*good), disk}, int64(len(x.file)))
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	whole := func(channels, frames int) Take {
		return open(t, recipe{channels: channels, frames: frames}.make().file)
	}
	join, err := Join([]Part{{"a.wav", whole(1, 9000)}, {"b.wav", broken(2, 5000, 9000)}, {"c.wav", whole(1, 9000)}})
	if err != nil {
		t.Fatal(err)
	}
	chain, err := Chain([]Part{{"a.wav", whole(4, 3000)}, {"b.wav", broken(4, 2000, 6000)}})
	if err != nil {
		t.Fatal(err)
	}
	for name, take := range map[string]Take{"join": join, "chain": chain} {
		for _, size := range []int{10000, 777} {
			if err := take.SeekFrame(0); err != nil {
				t.Fatal(err)
			}
			b, total := audio.NewBlock(4, size), 0
			var err error
			for err == nil {
				var n int
				n, err = take.Read(b)
				total += n
			}
			if total != 5000 || !errors.Is(err, disk) || !strings.HasPrefix(err.Error(), "b.wav: data chunk at byte ") {
				t.Errorf("%s in blocks of %d: %d frames, %v, want 5000", name, size, total, err)
			}
			if n, again := take.Read(b); n != 0 || again == nil {
				t.Errorf("%s: after the failure %d, %v", name, n, again)
			}
		}
	}
}

func TestSamplesThatAreNotNumbersAreToldOfAllFiles(t *testing.T) {
	b := noise(3, 6000)
	b.Channel(2)[4000] = float32(math.NaN())
	b.Channel(1)[5000] = float32(math.Inf(1))
	file := func(channels [2]int, frames [2]int) []byte {
		n := channels[1] - channels[0]
		x := recipe{tag: tagFloat, bits: 32, channels: n, frames: frames[1] - frames[0]}.make()
		for i := frames[0]; i < frames[1]; i++ {
			for ch := channels[0]; ch < channels[1]; ch++ {
				le.PutUint32(x.file[44+4*((i-frames[0])*n+ch-channels[0]):], math.Float32bits(b.Channel(ch)[i]))
			}
		}
		return x.file
	}
	join, _ := Join([]Part{{"a", open(t, file([2]int{0, 1}, [2]int{0, 6000}))}, {"b", open(t, file([2]int{1, 3}, [2]int{0, 6000}))}})
	chain, _ := Chain([]Part{{"a", open(t, file([2]int{0, 3}, [2]int{0, 3500}))}, {"b", open(t, file([2]int{0, 3}, [2]int{3500, 4500}))}, {"c", open(t, file([2]int{0, 3}, [2]int{4500, 6000}))}})
	for name, take := range map[string]Take{"join": join, "chain": chain} {
		readAll(t, take)
		if got, want := take.NonFinite(), (NonFinite{2, 4000, 2}); got != want {
			t.Errorf("%s: %+v, want %+v", name, got, want)
		}
	}
}

func TestPatternsPickTheChannelsInOrder(t *testing.T) {
	names := []string{"roof_07_10.wav", "roof_07_2.wav", "roof_07_1.wav", "roof_08_1.wav", "roof_07_x.wav", "roof_07_.wav", "roof_07_3.WAV", "roof_07_-4.wav", "x/roof_07_5.wav",
		"roof_07_3.wav", "roof_07_4.wav", "roof_07_5.wav", "roof_07_6.wav", "roof_07_7.wav", "roof_07_8.wav", "roof_07_9.wav"}
	got, err := MatchPattern("roof_07_{ch}.wav", names)
	var order []string
	for k, m := range got {
		if m.Number != k+1 {
			t.Errorf("place %d has number %d", k, m.Number)
		}
		order = append(order, m.Name)
	}
	if err != nil || strings.Join(order, " ") != "roof_07_1.wav roof_07_2.wav roof_07_3.wav roof_07_4.wav roof_07_5.wav roof_07_6.wav roof_07_7.wav roof_07_8.wav roof_07_9.wav roof_07_10.wav" {
		t.Errorf("%q, %v", order, err)
	}
	if got, err := MatchPattern("{ch}", []string{"05", "06"}); err != nil || len(got) != 2 || got[0].Number != 5 {
		t.Errorf("%v, %v", got, err)
	}
	for _, c := range []struct {
		pattern string
		names   []string
		want    string
	}{
		{"a.wav", []string{"a.wav"}, "want {ch} in it once"}, {"{ch}{ch}", []string{"11"}, "want {ch} in it once"}, {"a{ch}.wav", []string{"b1.wav"}, "none of 1 files fits"},
		{"a{ch}.wav", []string{"a1.wav", "a01.wav"}, "a1.wav and a01.wav are both number 1"}, {"a{ch}.wav", []string{"a1.wav", "a3.wav"}, "number 2 is missing"},
		{"a{ch}.wav", []string{"a1.wav", "a5.wav", "a7.wav"}, "numbers 2 to 4 are missing\npattern \"a{ch}.wav\": number 6 is missing"}, {"a{ch}a", []string{"a"}, "none of 1"},
	} {
		if _, err := MatchPattern(c.pattern, c.names); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s of %q: %v, want %q", c.pattern, c.names, err, c.want)
		}
	}
}

// recorded is a file of a recorder: start in frames since midnight, 0 is none.
type recorded struct {
	name          string
	start, frames int64
	family, scene string
	channel       int // recorder's channel of its first track, 0 is none
	index         string
	total         int
	rate          int
}

func (r recorded) file() File {
	if r.rate == 0 {
		r.rate = 48000
	}
	f := File{Name: r.name, Header: Header{Rate: r.rate, Channels: 1, Encoding: PCM24, Bits: 24, Frames: r.frames, DataOffset: 1000, DataSize: 3 * r.frames}, Metadata: &Metadata{}}
	if r.start > 0 {
		f.Metadata.Bext = &Bext{TimeReference: r.start}
	}
	if r.family != "" || r.scene != "" {
		f.Metadata.IXML = &IXML{Scene: r.scene, FileSet: FileSet{FamilyUID: r.family, FamilyName: "fam " + r.family, Index: r.index, TotalFiles: r.total}}
		if r.channel > 0 {
			f.Metadata.IXML.Tracks = []Track{{Channel: r.channel, Interleave: 1}}
		}
	}
	return f
}

func files(list ...recorded) (out []File) {
	for _, r := range list {
		out = append(out, r.file())
	}
	return out
}

func TestSetsAreFoundByTheirFamily(t *testing.T) {
	for _, c := range []struct {
		name  string
		files []File
		want  [][]int
		err   string
	}{
		{"by channel", files(recorded{name: "b", family: "F", channel: 2, frames: 9}, recorded{name: "x", family: "G", channel: 1}, recorded{name: "a", family: "F", channel: 1, frames: 9}), [][]int{{2}, {0}}, ""},
		{"by index", files(recorded{name: "a", family: "F", index: "10"}, recorded{name: "b", family: "F", index: "9"}), [][]int{{1}, {0}}, ""},
		{"by name", files(recorded{name: "b", family: "F"}, recorded{name: "a", family: "F"}), [][]int{{1}, {0}}, ""},
		{"two channels of three files each", files(
			recorded{name: "a2", family: "F", channel: 1, start: 2000, frames: 1000}, recorded{name: "b1", family: "F", channel: 2, start: 1000, frames: 1000},
			recorded{name: "a1", family: "F", channel: 1, start: 1000, frames: 1000}, recorded{name: "b3", family: "F", channel: 2, start: 3000, frames: 10},
			recorded{name: "b2", family: "F", channel: 2, start: 2000, frames: 1000}, recorded{name: "a3", family: "F", channel: 1, start: 3000, frames: 10, total: 6}),
			[][]int{{2, 0, 5}, {1, 4, 3}}, ""},
		{"over midnight", files(recorded{name: "2", family: "F", start: 100, frames: 10}, recorded{name: "1", family: "F", start: 24*3600*48000 - 900, frames: 1000}), [][]int{{1, 0}}, ""},
		{"no family", files(recorded{name: "a"}), nil, "a: iXML names no set of files"},
		{"too few", files(recorded{name: "a", family: "F", total: 3}, recorded{name: "b", family: "F"}), nil, `its set "fam F" has 3 files, 2 are here`},
		{"one file of the second row is missing", files(recorded{name: "a1", family: "F", channel: 1, start: 1000, frames: 1000}, recorded{name: "b1", family: "F", channel: 2, start: 1000, frames: 1000},
			recorded{name: "a2", family: "F", channel: 1, start: 2000, frames: 1000}), nil, "a1: 2 files of the set start with it, 1 with a2"},
	} {
		got, err := FindSet(c.files, 0)
		if !reflect.DeepEqual(got, c.want) || (err == nil) != (c.err == "") || err != nil && !strings.Contains(err.Error(), c.err) {
			t.Errorf("%s: %v, %v, want %v, %q", c.name, got, err, c.want, c.err)
		}
	}
}

func TestChainsAreFoundByTimeAndByName(t *testing.T) {
	const gib = 1 << 30
	full := (int64(2*gib) - 5000) / 3
	day := int64(24 * 3600 * 48000)
	for _, c := range []struct {
		name  string
		files []File
		want  []int
		err   string
	}{
		{"by time", files(recorded{name: "c", start: 5000, frames: 1000}, recorded{name: "a", start: 7000, frames: 10}, recorded{name: "b", start: 6000, frames: 1000}, recorded{name: "z", start: 99999, frames: 5}), []int{0, 2, 1}, ""},
		{"20 ms apart", files(recorded{name: "a", start: 5000, frames: 1000}, recorded{name: "b", start: 6960, frames: 10}), []int{0, 1}, ""},
		{"a second apart", files(recorded{name: "a", start: 5000, frames: 1000}, recorded{name: "b", start: 54000, frames: 10}), []int{0}, ""},
		{"over midnight", files(recorded{name: "a", start: day - 1000, frames: 1500}, recorded{name: "b", start: 500, frames: 10}), []int{0, 1}, ""},
		{"two that follow", files(recorded{name: "a", start: 5000, frames: 1000}, recorded{name: "b", start: 6000, frames: 10}, recorded{name: "c", start: 6000, frames: 10}), nil, "a: both b and c could follow it"},
		{"two that nearly follow", files(recorded{name: "a", start: 5000, frames: 1000}, recorded{name: "b", start: 6001, frames: 10}, recorded{name: "c", start: 6000, frames: 10}), []int{0, 2, 1}, ""},
		{"another scene", files(recorded{name: "a", start: 5000, frames: 1000, scene: "1"}, recorded{name: "b", start: 6000, frames: 10, scene: "2"}), []int{0}, ""},
		{"another family", files(recorded{name: "a", start: 5000, frames: 1000, family: "F"}, recorded{name: "b", start: 6000, frames: 10, family: "G"}), []int{0}, ""},
		{"other channels of the set", files(recorded{name: "a", start: 5000, frames: 1000, family: "F", channel: 1}, recorded{name: "b2", start: 6000, frames: 10, family: "F", channel: 2},
			recorded{name: "a2", start: 6000, frames: 10, family: "F", channel: 1}), []int{0, 2}, ""},
		{"another rate", files(recorded{name: "a", start: 5000, frames: 1000}, recorded{name: "b", start: 6000, frames: 10, rate: 44100}), []int{0}, ""},
		{"by name, full files", files(recorded{name: "t_01.wav", frames: full}, recorded{name: "t_02.WAV", frames: full}, recorded{name: "t_03.wav", frames: 10}, recorded{name: "t_04.wav", frames: 10}), []int{0, 1, 2}, ""},
		{"by name, a suffix", files(recorded{name: "t.wav", frames: full}, recorded{name: "t-2.wav", frames: full}, recorded{name: "t-3.wav", frames: 10}), []int{0, 1, 2}, ""},
		{"by name, short files are takes of their own", files(recorded{name: "t_01.wav", frames: 1000}, recorded{name: "t_02.wav", frames: 1000}), []int{0}, ""},
		{"by name, the next but one", files(recorded{name: "t_01.wav", frames: full}, recorded{name: "t_03.wav", frames: 1000}, recorded{name: "u_02.wav"}, recorded{name: "t.wav"}), []int{0}, ""},
	} {
		got, err := FindChain(c.files, 0)
		if !slices.Equal(got, c.want) || (err == nil) != (c.err == "") || err != nil && !strings.Contains(err.Error(), c.err) {
			t.Errorf("%s: %v, %v, want %v, %q", c.name, got, err, c.want, c.err)
		}
	}
}

func TestGapsAndOverlapsAreSaid(t *testing.T) {
	list := files(recorded{name: "a.wav", start: 5000, frames: 1000}, recorded{name: "b.wav", start: 6480, frames: 100}, recorded{name: "c.wav", start: 6580, frames: 10},
		recorded{name: "d.wav", start: 6500, frames: 10}, recorded{name: "e.wav", frames: 10})
	got := Seams(list)
	want := []Seam{{"a.wav", "b.wav", 1000, 480}, {"c.wav", "d.wav", 1110, -90}}
	if !slices.Equal(got, want) {
		t.Errorf("%+v, want %+v", got, want)
	}
	if a, b := got[0].String(), got[1].String(); a != "480 frames are missing between a.wav and b.wav" || b != "d.wav starts 90 frames before the end of c.wav" {
		t.Errorf("%s; %s", a, b)
	}
}

// From bytes: the files of a recorder are written, opened, found and read.
func TestAChainOnDiskIsFoundAndReadAsOne(t *testing.T) {
	b := noise(2, 3000)
	var readers []*Reader
	var list []File
	for k, cut := range [][2]int{{2000, 3000}, {0, 1000}, {1000, 2000}} {
		meta := &Metadata{Bext: &Bext{TimeReference: 480000 + int64(cut[0])}}
		m, _ := write(t, Format{48000, 2, Float32}, Option{Metadata: meta}, b.Slice(cut[0], cut[1]), 999)
		r, err := Open(bytes.NewReader(m.b), int64(len(m.b)))
		if err != nil {
			t.Fatal(err)
		}
		readers = append(readers, r)
		list = append(list, FileOf(fmt.Sprintf("%d.wav", k), r))
	}
	order, err := FindChain(list, 1)
	if err != nil || !slices.Equal(order, []int{1, 2, 0}) {
		t.Fatal(order, err)
	}
	var parts []Part
	for _, k := range order {
		parts = append(parts, Part{list[k].Name, readers[k]})
	}
	take, err := Chain(parts)
	if err != nil {
		t.Fatal(err)
	}
	sameBits(t, readAll(t, take), b)
}
