package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/audio"
	"alidade/pkg/report"
	"alidade/pkg/scenario"
	"alidade/pkg/sheet"
	"alidade/pkg/wav"
)

const simulateHelp = `alidade simulate: a take of an imagined place, with its truth

Usage
  alidade simulate SCENARIO.yaml [OPTIONS]

Example
  $ alidade simulate quay.yaml --out quay/

A scenario file says where the microphones are, what sounds around them and
where, which room or noise is about, and what is wrong with the rig; alidade
schema scenario describes it. The same file gives the same bytes each time.

The folder gets
  take.wav             what the rig records
  isolated-target.wav  the same with the wanted sounds alone
  isolated-noise.wav   the same without them
  rig.yaml             the rig as its file states it
  truth.json           where everything was, how loud, and what was wrong

Options
  --out DIR      the folder, which must not exist yet, or be empty (by default
                 the scenario's name without its ending)
  --format NAME  pcm24 (default) or float32
  --json         truth.json on standard output instead of a few lines
  --quiet        no progress
  --help, -h     this text
`

func simulateVerb() verb {
	return verb{
		name: "simulate", does: "a take of an imagined place, with its truth",
		help: simulateHelp,
		flags: func() []cli.Flag {
			return []cli.Flag{
				&cli.StringFlag{Name: "out"},
				&cli.StringFlag{Name: "format", Value: string(wav.PCM24)},
				&cli.BoolFlag{Name: "json"},
				&cli.BoolFlag{Name: "quiet"},
			}
		},
		run: runSimulate,
	}
}

// The files of a simulated take.
const (
	takeFile           = "take.wav"
	isolatedTargetFile = "isolated-target.wav"
	isolatedNoiseFile  = "isolated-noise.wav"
	rigFile            = "rig.yaml"
	truthFile          = "truth.json"
)

func runSimulate(u *ui, c *cli.Context) error {
	if c.NArg() != 1 {
		return &usageError{fmt.Errorf("simulate: %d scenario files, want one", c.NArg()), ""}
	}
	encoding := wav.Encoding(c.String("format"))
	if encoding != wav.PCM24 && encoding != wav.Float32 {
		return &usageError{fmt.Errorf("simulate: --format %q: want %s or %s", encoding, wav.PCM24, wav.Float32), ""}
	}
	path := c.Args().First()
	out := c.String("out")
	if out == "" {
		out = strings.TrimSuffix(path, filepath.Ext(path))
		if out == path || out == "" {
			return &usageError{fmt.Errorf("simulate: %s has no ending to leave out: name the folder with --out", path), ""}
		}
	}
	made, err := openScenario(path)
	if err != nil {
		return &usageError{err: err}
	}
	truth, err := u.simulate(c.Context, made, out, encoding, nil, c.Bool("quiet"))
	if err != nil {
		return err
	}
	if c.Bool("json") {
		text, err := truthText(truth)
		if err == nil {
			u.print(string(text))
		}
		return err
	}
	u.printf("%s: %d channels, %.2f s at %d Hz, seed %d\n", truth.Scenario, truth.Channels,
		float64(truth.Frames)/float64(truth.RateHz), truth.RateHz, truth.Seed)
	for _, s := range truth.Sources {
		u.printf("%s: %s\n", s.Role, sourceWords(s))
	}
	u.printf("wrote %s, %s, %s, %s and %s into %s\n", takeFile, isolatedTargetFile, isolatedNoiseFile, rigFile, truthFile, filepath.Clean(out))
	return nil
}

// sourceWords say where a source is at the start, and how loud.
func sourceWords(s scenario.TruthSource) string {
	text := fmt.Sprintf("%s (%s), %.1f dBFS", s.Name, s.Kind, s.LevelDBFS)
	if len(s.Track) == 0 {
		return text
	}
	p := s.Track[0]
	text += fmt.Sprintf(", azimuth %.1f°, elevation %.1f°", p.AzimuthDeg, p.ElevationDeg)
	if p.DistanceM != nil {
		text += fmt.Sprintf(", %.2f m away", *p.DistanceM)
	}
	if len(s.Track) > 1 {
		text += " at first, moving"
	}
	return text
}

// openScenario reads a scenario file and what it names, and prepares it.
func openScenario(path string) (*scenario.Rendering, error) {
	file, err := openBounded(path, sheet.MaxBytes)
	if err != nil {
		return nil, err
	}
	data, err := io.ReadAll(file)
	if err = errors.Join(err, file.Close()); err != nil {
		return nil, err
	}
	return newScenario(path, data)
}

// newScenario prepares a scenario of the given text. The files that it names
// lie beside path.
func newScenario(path string, data []byte) (*scenario.Rendering, error) {
	beside := func(name string) string {
		if filepath.IsAbs(name) {
			return name
		}
		return filepath.Join(filepath.Dir(path), name)
	}
	sc, err := scenario.Load(path, data, func(name string) (io.ReadCloser, error) {
		return openBounded(beside(name), sheet.MaxBytes)
	})
	if err != nil {
		return nil, err
	}
	made, err := sc.Render(scenario.Options{Sound: func(name string) (int, []float32, error) { return readSound(beside(name)) }})
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	return made, nil
}

// openBounded opens a regular file of at most limit bytes.
func openBounded(path string, limit int64) (*os.File, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, err
	}
	if !info.Mode().IsRegular() {
		return nil, fmt.Errorf("%s: not a regular file", path)
	}
	if info.Size() > limit {
		return nil, fmt.Errorf("%s: %d bytes, want at most %d", path, info.Size(), limit)
	}
	return os.Open(path)
}

// maxSoundFrames bounds a recording that a scenario plays: it lies in memory.
const maxSoundFrames = 1 << 26

// readSound reads a one-channel recording.
func readSound(path string) (rate int, samples []float32, err error) {
	file, err := openBounded(path, math.MaxInt64)
	if err != nil {
		return 0, nil, err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return 0, nil, err
	}
	r, err := wav.Open(file, info.Size())
	if err != nil {
		return 0, nil, fmt.Errorf("%s: %w", path, err)
	}
	if f := r.Format(); f.Channels != 1 {
		return 0, nil, fmt.Errorf("%s: has %d channels, want one", path, f.Channels)
	}
	if r.Frames() > maxSoundFrames {
		return 0, nil, fmt.Errorf("%s: has %d frames, want at most %d", path, r.Frames(), maxSoundFrames)
	}
	all, err := audio.ReadAll(r)
	if err != nil {
		return 0, nil, fmt.Errorf("%s: %w", path, err)
	}
	return r.Format().Rate, all.Channel(0), nil
}

// simulate renders a take into the folder out, with more files beside it, and
// returns its truth. The folder appears whole or not at all.
func (u *ui) simulate(ctx context.Context, made *scenario.Rendering, out string, encoding wav.Encoding, more map[string][]byte, quiet bool) (*scenario.Truth, error) {
	f, err := newFolder(out)
	if err != nil {
		return nil, err
	}
	defer f.abandon()
	progress := u.progress(quiet)
	defer progress.finish()

	var sounds []*sound
	defer func() {
		for _, s := range sounds {
			s.abandon()
		}
	}()
	for _, name := range []string{takeFile, isolatedTargetFile, isolatedNoiseFile} {
		s, err := f.sound(name, made.Format(), encoding)
		if err != nil {
			return nil, err
		}
		sounds = append(sounds, s)
	}
	meter, done := made.NewMeter(), int64(0)
	err = made.Each(func(mix, target, noise audio.Block) error {
		if err := ctx.Err(); err != nil {
			return err
		}
		meter.Add(mix, target, noise)
		done += int64(mix.Frames())
		progress.step(filepath.Base(f.final)+": rendering", done, made.Frames())
		for k, block := range []audio.Block{mix, target, noise} {
			if err := sounds[k].Write(block); err != nil {
				return err
			}
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	for _, s := range sounds {
		if err := s.close(); err != nil {
			return nil, err
		}
	}
	sounds = nil
	truth := meter.Truth()
	text, err := truthText(truth)
	if err != nil {
		return nil, err
	}
	if err := errors.Join(f.write(rigFile, made.Rig().YAML()), f.write(truthFile, text)); err != nil {
		return nil, err
	}
	for name, data := range more {
		if err := f.write(name, data); err != nil {
			return nil, err
		}
	}
	return truth, f.commit()
}

// truthText is the truth as its file has it.
func truthText(t *scenario.Truth) ([]byte, error) {
	var b bytes.Buffer
	err := report.WriteJSON(&b, t)
	return b.Bytes(), err
}

// firstOf is the first source of a role in a truth.
func firstOf(role string, t *scenario.Truth) (scenario.TruthSource, error) {
	for _, s := range t.Sources {
		if s.Role == role && len(s.Track) > 0 {
			return s, nil
		}
	}
	return scenario.TruthSource{}, fmt.Errorf("%s: no %s sounds", t.Scenario, role)
}
