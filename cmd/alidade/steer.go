package main

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
)

const steerHelp = `alidade steer: one clean track from each take, aimed at the wanted sound

Usage
  alidade steer TAKE... --rig RIG --toward AZ[,EL] [OPTIONS]
  alidade steer TAKE... --rig RIG --focus X,Y,Z [OPTIONS]
  alidade steer TAKE... --rig RIG --toward auto [OPTIONS]

Example
  $ alidade steer roof_07.wav --rig roof.yaml --toward 60 --noise 0..2

Each argument is one take: a WAV file with a channel for each microphone.
The track has the take's length, and its frame i is the sound at the
reference point at frame i of the take. Beside it go a report with the gain
in each band, measured and predicted, and its 95 % intervals.

A take of several files is one argument too: "roof_07_{ch}.wav" is the set of
one-channel files of that name with a channel number in place of {ch}.

Which files
  --chain                the files named are one take, one after the other
  --set                  the files named are one take, side by side
  --find-chain           find the files that the recorder split the take into
                         from its first one
  --find-set             find the other files of the set by iXML (done anyway
                         for a file of one channel)

Where to
  --rig FILE             the rig file (alidade schema rig describes it)
  --toward AZ[,EL]       direction in degrees: azimuth from +x towards +y,
                         elevation up; a negative value needs no quoting
  --focus X,Y,Z          point in metres from the rig's origin
  --toward auto          the direction of the dominant sound, found in the take
                         (alidade locate shows what is heard from where)
  --toward follow        the path of a source that moves; goes with --method
                         farrow and --weights delay-and-sum, and takes them
  --focus auto           the point of a source near enough to tell its distance
  --pick N               with auto and follow: source N of those found, 1
                         (default) the dominant one
  --reference-point NAME a microphone's name, or centre

How
  --method NAME          spectral (default), sinc or farrow
  --taper NAME           uniform (default), hann, hamming, kaiser:BETA,
                         dolph-chebyshev:DB or taylor:DB:N
  --weights NAME         delay-and-sum (default), constant-beamwidth,
                         superdirective, or minimum-variance (from the noise
                         of the take)
  --null AZ[,EL]         a direction that is not to be heard; several with
                         several --null
  --white-noise-gain-floor-db DB
                         the least white noise gain of such weights: 0, the
                         default, keeps the noise of the microphones
                         themselves as it is, -6 lets it rise by 6 dB
  --reestimate-every S   find minimum-variance weights again from the noise
                         of every S seconds, 0.5 or more, and cross-fade
                         between them: for noise that moves
  --postfilter NAME      none (default), white or diffuse: lower what is left
                         of such noise by gains that follow the sound
  --postfilter-floor-db DB
                         its smallest gain, -15 if absent
  --undo-spreading       with --focus: undo the level differences of a near
                         source
  --highpass HZ          cut below HZ, in track and measurement alike
  --gain-db DB           gain of the track; no reported level contains it

Air, where the rig file's is not right
  --temperature-c C      air temperature
  --humidity-pct PCT     relative humidity
  --pressure-kpa KPA     air pressure
  --speed-of-sound MS    speed of sound in m/s, in place of the three above

What is measured
  --noise A..B[,A..B]    where only the noise sounds: seconds from the
                         take's start, or HH:MM:SS if the take has a time
  --target A..B[,A..B]   where the wanted sound sounds too
  --noise-cue LABEL      where cues of that label say that only noise sounds:
                         regions, or from a cue to the next
  --target-cue LABEL     likewise where the wanted sound sounds too
  --isolated-noise TAKE  the same scene with the noise alone
  --isolated-target TAKE the same scene with the wanted sound alone
  --compare-to NAME      gain over this microphone as well
  --keep-dead            dead microphones, found by an inspection of parts of
                         the take, stay in the beam; else they are left out
  --align-clocks         measure how far the clocks of the channels run apart,
                         and resample to one (clock_ppm in the rig file states
                         it; needs sound from one side)
  --no-measure           write the track only

What is written
  --out PATH             the track, or a folder for it (by default the track
                         stands beside the take)
  --format NAME          auto (default), pcm16, pcm24 or float32
  --over-range NAME      where the track outgrows its format: fail (default)
                         or float32
  --with-reference       the reference as a track of its own too
  --excerpt A..B         only this part of the take
  --handles S            this many seconds more at both ends of the excerpt
  --reports LIST         json,csv,html (default), some of them, or none; html
                         is the page to look at
  --preview              listening excerpts in the page and in the JSON report,
                         up to 20 s (those of --excerpt: up to 30 s): whoever
                         gets them hears the voices in them
  --preview-at A..B      these up to 30 s of the take are heard
  --overwrite            replace tracks and reports that exist
  --verify               read the written track back, as is done anyway
  --no-verify            do not read the written track back
  --private              leave out of report and track what names places,
                         people and machines: notes, texts, paths; the page's
                         spectrograms are too coarse for words
  --reproducible         leave the time of day out of the report

What is said
  --json                 the report on standard output instead of a summary
  --fail-on LEVEL        exit code 3 on a finding of this level or above:
                         never (default), warning or error
  --quiet                no progress
  --help, -h             this text
`

func steerVerb() verb {
	return verb{
		name: "steer", does: "one clean track from each take, and an account of the gain",
		help:  steerHelp,
		flags: steerFlags,
		run:   runSteer,
	}
}

func steerFlags() []cli.Flag {
	return slices.Concat(takeFlags(), beamFlags(), aimFlags(), trackFlags(), []cli.Flag{
		&cli.IntFlag{Name: "pick"},
		&cli.Float64Flag{Name: "reestimate-every"},
		&cli.StringFlag{Name: "postfilter"},
		&cli.Float64Flag{Name: "postfilter-floor-db"},
		&cli.StringFlag{Name: "compare-to"},
		&cli.BoolFlag{Name: "align-clocks"},
		&cli.StringFlag{Name: "out"},
		&cli.StringFlag{Name: "over-range"},
		&cli.BoolFlag{Name: "with-reference"},
		&cli.StringFlag{Name: "excerpt"},
		&cli.Float64Flag{Name: "handles"},
		&cli.StringFlag{Name: "reports"},
		&cli.BoolFlag{Name: "preview"},
		&cli.StringFlag{Name: "preview-at"},
		&cli.StringFlag{Name: "fail-on", Value: failNever},
	})
}

// steerOptions puts the flags into the options of the pipeline.
func steerOptions(c *cli.Context) pipeline.Options {
	number := func(name string) *float64 {
		if !c.IsSet(name) {
			return nil
		}
		v := c.Float64(name)
		return &v
	}
	list := func(name string) string { return strings.Join(c.StringSlice(name), ",") }
	return pipeline.Options{
		Chain:          c.Bool("chain"),
		FindChain:      c.Bool("find-chain"),
		FindSet:        c.Bool("find-set"),
		NoiseCue:       c.String("noise-cue"),
		TargetCue:      c.String("target-cue"),
		Private:        c.Bool("private"),
		Toward:         c.String("toward"),
		Focus:          c.String("focus"),
		Pick:           c.Int("pick"),
		ReferencePoint: c.String("reference-point"),
		Method:         c.String("method"),
		Taper:          c.String("taper"),
		Weights:        c.String("weights"),
		Null:           c.StringSlice("null"),
		UndoSpreading:  c.Bool("undo-spreading"),

		WhiteNoiseGainFloorDB: number("white-noise-gain-floor-db"),
		ReestimateEvery:       c.Float64("reestimate-every"),
		Postfilter:            c.String("postfilter"),
		PostfilterFloorDB:     number("postfilter-floor-db"),

		HighpassHz:     c.Float64("highpass"),
		GainDB:         c.Float64("gain-db"),
		TemperatureC:   number("temperature-c"),
		HumidityPct:    number("humidity-pct"),
		PressureKPa:    number("pressure-kpa"),
		SpeedOfSound:   number("speed-of-sound"),
		Noise:          list("noise"),
		Target:         list("target"),
		IsolatedNoise:  c.String("isolated-noise"),
		IsolatedTarget: c.String("isolated-target"),
		CompareTo:      c.String("compare-to"),
		NoMeasure:      c.Bool("no-measure"),
		KeepDead:       c.Bool("keep-dead"),
		AlignClocks:    c.Bool("align-clocks"),
		Out:            c.String("out"),
		Format:         c.String("format"),
		OverRange:      c.String("over-range"),
		WithReference:  c.Bool("with-reference"),
		Excerpt:        c.String("excerpt"),
		Handles:        c.Float64("handles"),
		Reports:        c.String("reports"),
		Preview:        c.Bool("preview"),
		PreviewAt:      c.String("preview-at"),
		Overwrite:      c.Bool("overwrite"),
		NoVerify:       c.Bool("no-verify") || c.IsSet("verify") && !c.Bool("verify"),
	}
}

// checkSteer returns everything that is wrong with a command line of steer
// before any file is opened.
func checkSteer(c *cli.Context, o pipeline.Options) error {
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("steer: "+format, args...)) }
	takes := c.Args().Slice()
	if len(takes) == 0 {
		fault("no take: name at least one WAV file")
	}
	if !c.IsSet("rig") {
		fault("no rig: give --rig FILE")
	}
	if err := o.Validate(); err != nil {
		for _, line := range strings.Split(err.Error(), "\n") {
			fault("%s", line)
		}
	}
	if c.IsSet("pick") && o.Pick == 0 {
		fault("--pick 0: sources are counted from 1, the dominant one")
	}
	switch c.String("fail-on") {
	case failNever, failWarning, failError:
	default:
		fault("--fail-on %q: want one of %s, %s, %s", c.String("fail-on"), failNever, failWarning, failError)
	}
	if c.Bool("verify") && c.Bool("no-verify") {
		fault("both --verify and --no-verify")
	}
	if c.Bool("chain") && c.Bool("set") {
		fault("both --chain and --set: files follow each other or lie side by side (a set of each part of a chain is named by {ch})")
	}
	if c.Bool("set") && c.Bool("find-set") {
		fault("both --set and --find-set: the files are named or found")
	}
	if len(takes) > 1 && !oneTake(c) {
		faults = append(faults, checkTogether(takes, o.Out)...)
	}
	if len(faults) > 0 {
		return &usageError{errors.Join(faults...), "alidade steer --help shows its options"}
	}
	return nil
}

// checkTogether refuses several takes whose tracks would get one name.
func checkTogether(takes []string, out string) (faults []error) {
	seen := map[string]string{}
	if out != "" && !strings.HasSuffix(out, "/") && !strings.HasSuffix(out, string(filepath.Separator)) {
		if info, err := os.Stat(out); err != nil || !info.IsDir() {
			faults = append(faults, fmt.Errorf("steer: --out %q: one track for %d takes: name a folder that exists, or end it in /", out, len(takes)))
		}
	}
	for _, take := range takes {
		key := strings.TrimSuffix(filepath.Clean(take), filepath.Ext(take))
		if out != "" {
			key = filepath.Base(key)
		}
		key = strings.ToLower(key)
		if before, ok := seen[key]; ok {
			faults = append(faults, fmt.Errorf("steer: takes %s and %s: their tracks would get the same name", before, take))
			continue
		}
		seen[key] = take
	}
	return faults
}

// oneTake says whether all files of the command line are one take.
func oneTake(c *cli.Context) bool { return c.Bool("chain") || c.Bool("set") }

// steerSpec is what the pipeline is to do for one take of the given files.
func (u *ui) steerSpec(c *cli.Context, o pipeline.Options, files []string) pipeline.Spec {
	s := pipeline.Spec{Take: files, RigPath: c.String("rig"), Options: o, Version: version}
	s.NoHashes = o.Reports == "none" && !c.Bool("json")
	if !o.Private {
		s.Command = append([]string{"alidade"}, u.args...)
	}
	if !c.Bool("reproducible") {
		s.Created = u.now().UTC().Format(time.RFC3339)
	}
	return s
}
