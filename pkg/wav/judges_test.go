package wav

import (
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

// judge runs an outside program, and skips where it is absent. It fails the
// test unless the program ends with 0.
func judge(t *testing.T, name string, args ...string) (stdout, stderr string) {
	t.Helper()
	path, err := exec.LookPath(name)
	if err != nil {
		t.Skipf("%s is not installed: it is an outside judge of WAV files (Debian: sndfile-programs, sox, mediainfo, ffmpeg)", name)
	}
	var out, bad strings.Builder
	cmd := exec.Command(path, args...)
	cmd.Stdout, cmd.Stderr = &out, &bad
	if err := cmd.Run(); err != nil {
		t.Fatalf("%s %q: %v\n%s%s", name, args, err, out.String(), bad.String())
	}
	return out.String(), bad.String()
}

// outputs writes a track of each encoding, plain and grown into RF64, with
// metadata made from those of a take.
func outputs(t *testing.T) map[string]string {
	t.Helper()
	m, dir, paths := carried(t), t.TempDir(), map[string]string{}
	for _, e := range []Encoding{PCM16, PCM24, Float32} {
		for _, c := range []Container{RIFF, RF64} {
			format := Format{48000, 1, e}
			// Of a length and a settings text that make odd chunks of bext and iXML,
			// were they not filled up.
			meta, _ := m.Derive(Change{Output: format, TakeFrames: 5000, Frames: 5000, TrackName: "az +60.0", Software: "alidade 1.2", Settings: "toward 60" + strings.Repeat("!", len(paths))})
			meta.other = nil // judges warn of chunks that they do not know
			f := &memory{}
			w, err := NewWriter(f, format, Option{Metadata: meta})
			if err != nil {
				t.Fatal(err)
			}
			if c == RF64 {
				w.limit = 100
			}
			if err := errors.Join(w.Write(noise(1, 5000)), w.Close()); err != nil {
				t.Fatal(err)
			}
			name := string(e) + " " + string(c)
			paths[name] = filepath.Join(dir, strings.ReplaceAll(name, " ", "_")+".wav")
			if err := os.WriteFile(paths[name], f.b, 0o600); err != nil {
				t.Fatal(err)
			}
		}
	}
	return paths
}

func eachOutput(t *testing.T, check func(t *testing.T, name, path string)) {
	if testing.Short() {
		t.Skip("outside programs are not run in short mode")
	}
	for name, path := range outputs(t) {
		t.Run(name, func(t *testing.T) { check(t, name, path) })
	}
}

func TestSndfileReadsOurFilesWithoutComplaint(t *testing.T) {
	eachOutput(t, func(t *testing.T, name, path string) {
		out, bad := judge(t, "sndfile-info", path)
		for _, line := range strings.Split(out+bad, "\n") {
			// Its RF64 reader knows no fact, cue and iXML and says so.
			strange := strings.HasSuffix(name, "RF64") && strings.Contains(line, "(unknown marker)")
			if strings.Contains(line, "***") && !strange || strings.Contains(line, "rror") {
				t.Error(line)
			}
		}
		for _, want := range []string{"Frames      : 5000", "Channels    : 1", "Sample Rate : 48000", "bext : "} {
			if !strings.Contains(out, want) {
				t.Errorf("no %q in %s", want, out)
			}
		}
	})
}

func TestSoxReadsOurFilesWithoutComplaint(t *testing.T) {
	eachOutput(t, func(t *testing.T, name, path string) {
		out, bad := judge(t, "sox", "--i", path)
		if bad != "" || !strings.Contains(out, "= 5000 samples") || !strings.Contains(out, "Sample Rate    : 48000") {
			t.Errorf("%s%s", out, bad)
		}
	})
}

func TestMediainfoReadsOurFilesAndTheirBext(t *testing.T) {
	eachOutput(t, func(t *testing.T, name, path string) {
		out, bad := judge(t, "mediainfo", "--Output=JSON", path)
		for _, want := range []string{`"SamplingRate": "48000"`, `"Description": "herons at dawn, sTRK1=left"`, `"Encoded_Application": "alidade 1.2"`, "T=alidade 1.2; toward 60", `"Delay": "36000`} {
			if !strings.Contains(out, want) && !(strings.HasPrefix(want, `"Delay`) && strings.HasPrefix(name, "pcm")) {
				t.Errorf("no %s in %s", want, out)
			}
		}
		if bad != "" {
			t.Error(bad)
		}
	})
}

func TestFFmpegReadsOurFilesAndTheirBext(t *testing.T) {
	eachOutput(t, func(t *testing.T, name, path string) {
		_, bad := judge(t, "ffmpeg", "-v", "warning", "-i", path, "-f", "null", "-")
		for _, line := range strings.Split(strings.TrimSpace(bad), "\n") {
			// It says this of every file without loudspeaker positions.
			if line != "" && !strings.HasPrefix(line, "Guessed Channel Layout") {
				t.Error(line)
			}
		}
		out, bad := judge(t, "ffprobe", "-v", "error", "-show_format", "-show_streams", path)
		for _, want := range []string{"TAG:time_reference=1728000000", "TAG:encoded_by=Ana", "TAG:originator_reference=SN 4711", "TAG:date=2026-12-31", "duration_ts=5000", "TAG:encoder=alidade 1.2"} {
			if !strings.Contains(out, want) {
				t.Errorf("no %s in %s", want, out)
			}
		}
		if bad != "" {
			t.Error(bad)
		}
		// The samples as it decodes them are those that we decode.
		raw := filepath.Join(t.TempDir(), "x.raw")
		judge(t, "ffmpeg", "-v", "error", "-i", path, "-f", "f32le", "-c:a", "pcm_f32le", raw)
		b, err := os.ReadFile(raw)
		if err != nil {
			t.Fatal(err)
		}
		file, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		got := readAll(t, open(t, file))
		theirs := readAll(t, open(t, recipe{tag: tagFloat, bits: 32, channels: 1, frames: len(b) / 4, change: func(f []byte) []byte { return append(f[:44], b...) }}.make().file))
		sameBits(t, got, theirs)
	})
}

// Files of other writers, with 5000 frames of 3 channels, read to the sample
// against the file that they were made from.
func TestWeReadTheFilesOfOthers(t *testing.T) {
	if testing.Short() {
		t.Skip("outside programs are not run in short mode")
	}
	dir := t.TempDir()
	in := noise(3, 5001) // odd, so that 24-bit data are padded
	m, _ := write(t, Format{48000, 3, PCM16}, Option{}, in, 5001)
	source := filepath.Join(dir, "source.wav")
	if err := os.WriteFile(source, m.b, 0o600); err != nil {
		t.Fatal(err)
	}
	want := readAll(t, open(t, m.b))
	path := func(name string) string { return filepath.Join(dir, name) }
	ff := func(name string, args ...string) (string, []string) {
		return "ffmpeg", append(append([]string{"-v", "error", "-y", "-i", source}, args...), path(name))
	}
	shell := func(command string) (string, []string) { return "sh", []string{"-c", command} }
	for _, c := range []struct {
		name      string
		run       func() (string, []string)
		container Container
		encoding  Encoding
		warnings  string
	}{
		{"ffmpeg_rf64.wav", func() (string, []string) { return ff("ffmpeg_rf64.wav", "-c:a", "pcm_s24le", "-rf64", "always") }, RF64, PCM24, ""},
		{"ffmpeg_bext.wav", func() (string, []string) {
			return ff("ffmpeg_bext.wav", "-c:a", "pcm_s24le", "-write_bext", "1", "-metadata", "description=reeds", "-metadata", "time_reference=1728000000")
		}, RIFF, PCM24, ""},
		{"ffmpeg_f64.wav", func() (string, []string) { return ff("ffmpeg_f64.wav", "-c:a", "pcm_f64le") }, RIFF, Float64, ""},
		{"ffmpeg.w64", func() (string, []string) { return ff("ffmpeg.w64", "-c:a", "pcm_s24le", "-f", "w64") }, Wave64, PCM24, ""},
		{"ffmpeg_pipe.wav", func() (string, []string) {
			return shell("ffmpeg -v error -i " + source + " -f wav -c:a pcm_s24le - | cat > " + path("ffmpeg_pipe.wav"))
		}, RIFF, PCM24, WarnSizeUnknown},
		{"sox_24.wav", func() (string, []string) { return "sox", []string{source, "-b", "24", path("sox_24.wav")} }, RIFF, PCM24, ""},
		{"sox_32.wav", func() (string, []string) { return "sox", []string{source, "-b", "32", path("sox_32.wav")} }, RIFF, PCM32, ""},
		{"sox_float.wav", func() (string, []string) {
			return "sox", []string{source, "-e", "float", "-b", "32", path("sox_float.wav")}
		}, RIFF, Float32, ""},
		{"sox_pipe.wav", func() (string, []string) {
			return shell("sox " + source + " -b 24 -t wav - | cat > " + path("sox_pipe.wav"))
		}, RIFF, PCM24, ""},
		{"sndfile_rf64.rf64", func() (string, []string) {
			return "sndfile-convert", []string{"-pcm24", source, path("sndfile_rf64.rf64")}
		}, RF64, PCM24, ""},
		{"sndfile.w64", func() (string, []string) { return "sndfile-convert", []string{"-pcm24", source, path("sndfile.w64")} }, Wave64, PCM24, ""},
		{"sndfile_32.wav", func() (string, []string) {
			return "sndfile-convert", []string{"-pcm32", source, path("sndfile_32.wav")}
		}, RIFF, PCM32, ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			name, args := c.run()
			if name == "sh" {
				for _, need := range []string{"ffmpeg", "sox"} {
					if _, err := exec.LookPath(need); err != nil {
						t.Skipf("%s is not installed", need)
					}
				}
			}
			judge(t, name, args...)
			b, err := os.ReadFile(path(c.name))
			if err != nil {
				t.Fatal(err)
			}
			r := open(t, b)
			got := codes(r.Warnings())
			if h := r.Header(); h.Container != c.container || h.Encoding != c.encoding || got != c.warnings {
				t.Errorf("%s %s, warnings %v, want %s %s, %q", h.Container, h.Encoding, r.Warnings(), c.container, c.encoding, c.warnings)
			}
			sameBits(t, readAll(t, r), want)
			if x := r.Metadata().Bext; strings.Contains(c.name, "bext") && (x == nil || x.Description != "reeds" || x.TimeReference != 1728000000) {
				t.Errorf("bext %+v", x)
			}
		})
	}
}

// sharedData is the folder of recordings, and skips where it is absent.
func sharedData(t testing.TB) string {
	t.Helper()
	dir := os.Getenv("ALIDADE_DATA")
	if dir == "" {
		dir = filepath.Join("..", "..", "..", "shared", "data")
	}
	if _, err := os.Stat(dir); err != nil {
		t.Skipf("no recordings at %s: set ALIDADE_DATA to their folder", dir)
	}
	return dir
}

// The expected figures are those of sndfile-info; where it is installed, it is
// asked again.
func TestRecordingsOfOthersAreReadAsSndfileReadsThem(t *testing.T) {
	dir := sharedData(t)
	for _, c := range []struct {
		path     string
		encoding Encoding
		channels int
		rate     int
		frames   int64
		warnings string
		check    func(m *Metadata) bool
	}{
		{"wav-headers/32bit.wav", PCM32, 1, 44100, 88200, "", nil},
		{"wav-headers/8bit.wav", PCM8, 1, 44100, 88200, "", nil},
		{"wav-headers/bass.wav", PCM24, 2, 44100, 23957, "", nil},
		{"wav-headers/bwf.wav", PCM24, 1, 44100, 7287, "", func(m *Metadata) bool { return m.Bext != nil && slices.Contains(m.Info, InfoEntry{"IPRD", "WADRA2"}) }},
		{"wav-headers/flloop.wav", PCM16, 2, 44100, 108281, "", func(m *Metadata) bool {
			return len(m.Cues) == 16 && m.Cues[1].Frame == 6750 && m.Cues[9].Frame == 60750 && m.Cues[0].Label == "Hat + Kick"
		}},
		{"wav-headers/kick-16b441k.wav", PCM16, 2, 44100, 7782, "", nil},
		{"wav-headers/listChunkInHeader.wav", PCM24, 2, 44100, 15318, "", func(m *Metadata) bool { return slices.Contains(m.Info, InfoEntry{"ICRD", "2017-11-21"}) }},
		{"wav-headers/listinfo.wav", PCM16, 1, 44100, 88200, "", func(m *Metadata) bool {
			return slices.Equal(m.Info, []InfoEntry{{"INAM", "track title"}, {"IPRD", "album title"}, {"IART", "artist"}, {"ICMT", "my comment"}, {"ICRD", "2017"}, {"IGNR", "genre"}, {"ITRK", "42"}})
		}},
		{"wav-headers/padded24b.wav", PCM24, 1, 44100, 3713, "", nil},
		{"noise/berlin_wind_passersby_crows_A7B4879B.wav", PCM16, 2, 44100, 969950, "", nil},
		{"noise/dishes_40s.wav", PCM16, 1, 16000, 640000, "", nil},
		{"noise/running_tap.wav", PCM16, 1, 16000, 978488, "", nil},
		{"line8-room/noise_rec_one.wav", PCM16, 8, 44100, 114400, "", nil},
		{"line8-room/noise_rec_two.wav", PCM16, 8, 44100, 114400, "", nil},
		{"ring7-room-responses/RLRVarAcLab_Absorptive_000_SBG1_R1_FRL10cm.wav", Float32, 7, 48000, 48001, "", nil},
	} {
		t.Run(filepath.Base(c.path), func(t *testing.T) {
			b, err := os.ReadFile(filepath.Join(dir, filepath.FromSlash(c.path)))
			if err != nil {
				t.Skip(err)
			}
			r := open(t, b)
			h := r.Header()
			readAll(t, r)
			if _, err := exec.LookPath("sndfile-info"); err == nil {
				out, _ := judge(t, "sndfile-info", filepath.Join(dir, filepath.FromSlash(c.path)))
				if want := fmt.Sprintf("Frames      : %d\n", h.Frames); !strings.Contains(out, want) {
					t.Errorf("sndfile-info does not say %q: %s", want, out)
				}
			}
			if (h.Encoding != c.encoding || h.Channels != c.channels || h.Rate != c.rate || h.Frames != c.frames) || codes(r.Warnings()) != c.warnings {
				t.Errorf("%s, %d channels, %d Hz, %d frames, warnings %v", h.Encoding, h.Channels, h.Rate, h.Frames, r.Warnings())
			}
			if c.check != nil && !c.check(r.Metadata()) {
				text, _ := json.Marshal(r.Metadata())
				t.Errorf("metadata %s", text)
			}
		})
	}
}
