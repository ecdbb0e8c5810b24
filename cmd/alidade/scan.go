package main

import (
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"time"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

const scanHelp = `alidade scan: what a beam hears of a take in many directions

Usage
  alidade scan TAKE --rig RIG --from A --to B --step S [OPTIONS]
  alidade scan TAKE --rig RIG --toward AZ[,EL] --toward AZ[,EL] ... [OPTIONS]

Example
  $ alidade scan roof_07.wav --rig roof.yaml --from 0 --to 180 --step 5

All channels are analysed once and steered to every direction: level against
angle in each one-third octave, and the gain in signal-to-noise ratio where it
is known when only the noise sounds. On steady sound the levels are those of
the steered tracks to 0.1 dB, to 0.2 dB where the beam hears 10 dB less than the
microphones; where it hears 30 dB less or more, they read too high.

Which take: the files named are one take
  --chain                the files follow each other
  --set                  the files lie side by side
  --find-chain           find the files that the recorder split the take into
  --find-set             find the other files of the set by iXML

Which directions
  --rig FILE             the rig file
  --from A               the first azimuth in degrees
  --to B                 the last one
  --step S               from one to the next
  --elevation EL         of all of them; default 0
  --elevation-from A     or several elevations, each with all azimuths: the
                         first one in degrees
  --elevation-to B       the last one
  --elevation-step S     from one to the next
  --toward AZ[,EL]       directions one by one, with several --toward
  --reference-point NAME a microphone's name, or centre

How, as in steer
  --method NAME          of the tracks: spectral (default), sinc or farrow
  --taper NAME           uniform (default), hann, hamming, kaiser:BETA,
                         dolph-chebyshev:DB or taylor:DB:N
  --weights NAME         delay-and-sum (default), constant-beamwidth,
                         superdirective or minimum-variance
  --null AZ[,EL]         a direction that is not to be heard
  --white-noise-gain-floor-db DB
                         the least white noise gain of such weights
  --highpass HZ          cut below HZ
  --temperature-c C      air temperature, where the rig file's is not right
  --humidity-pct PCT     relative humidity, likewise
  --pressure-kpa KPA     air pressure, likewise
  --speed-of-sound MS    speed of sound in m/s, in place of the three

What is measured, as in steer
  --noise A..B[,A..B]    where only the noise sounds
  --target A..B[,A..B]   where the wanted sound sounds too
  --noise-cue LABEL      where cues of that label say that only noise sounds
  --target-cue LABEL     where cues say that the wanted sound sounds too
  --isolated-noise TAKE  the same scene with the noise alone
  --isolated-target TAKE the same scene with the wanted sound alone
                         (without any of these, the stretches are found in the
                         loudest direction)
  --no-measure           levels only
  --intervals            95 % intervals of the gains too
  --keep-dead            listen with dead microphones all the same

What is written
  --csv FILE             the figures as a table
  --html FILE            the page to look at
  --tracks FOLDER        a track of each direction. Tracks of an earlier scan
                         of the same take with the same options are kept, so
                         that the same command goes on where it ended
  --format NAME          auto (default), pcm16, pcm24 or float32
  --gain-db DB           gain of the tracks; no level contains it
  --overwrite            replace tables, pages and other tracks that exist
  --verify               read the written tracks back, as is done anyway
  --no-verify            do not read the written tracks back
  --private              leave out what names places, people and machines
  --reproducible         leave the time of day out

What is said
  --json                 one JSON document on standard output
  --quiet                no progress
  --help, -h             this text
`

func scanVerb() verb {
	return verb{
		name: "scan", does: "level and gain against angle, and a track for each angle",
		help:  scanHelp,
		flags: scanFlags,
		run:   runScan,
	}
}

func scanFlags() []cli.Flag {
	return slices.Concat(takeFlags(), beamFlags(), trackFlags(), []cli.Flag{
		&cli.Float64Flag{Name: "from"},
		&cli.Float64Flag{Name: "to"},
		&cli.Float64Flag{Name: "step"},
		&cli.Float64Flag{Name: "elevation"},
		&cli.Float64Flag{Name: "elevation-from"},
		&cli.Float64Flag{Name: "elevation-to"},
		&cli.Float64Flag{Name: "elevation-step"},
		&cli.StringSliceFlag{Name: "toward"},
		&cli.BoolFlag{Name: "intervals"},
		&cli.StringFlag{Name: "csv"},
		&cli.StringFlag{Name: "html"},
		&cli.StringFlag{Name: "tracks"},
	})
}

// scanOptions puts the flags into the options of the pipeline.
func scanOptions(c *cli.Context) pipeline.ScanOptions {
	number := func(name string) *float64 {
		if !c.IsSet(name) {
			return nil
		}
		v := c.Float64(name)
		return &v
	}
	o := pipeline.ScanOptions{
		Options: steerOptions(c),
		From:    number("from"), To: number("to"), Step: number("step"),
		Elevation:     number("elevation"),
		ElevationFrom: number("elevation-from"), ElevationTo: number("elevation-to"), ElevationStep: number("elevation-step"),
		Directions: c.StringSlice("toward"),
		Intervals:  c.Bool("intervals"), Tracks: c.String("tracks"),
	}
	o.Options.Toward = ""
	return o
}

// runScan is the verb.
func runScan(u *ui, c *cli.Context) error {
	o := scanOptions(c)
	files := c.Args().Slice()
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("scan: "+format, args...)) }
	switch {
	case len(files) == 0:
		fault("no take: name a WAV file")
	case len(files) > 1 && !oneTake(c):
		fault("%d files: a scan is of one take; --chain or --set make one of several files", len(files))
	}
	if !c.IsSet("rig") {
		fault("no rig: give --rig FILE")
	}
	if c.Bool("chain") && c.Bool("set") {
		fault("both --chain and --set: files follow each other or lie side by side (a set of each part of a chain is named by {ch})")
	}
	if c.Bool("set") && c.Bool("find-set") {
		fault("both --set and --find-set: the files are named or found")
	}
	if c.Bool("verify") && c.Bool("no-verify") {
		fault("both --verify and --no-verify")
	}
	if o.Intervals && o.NoMeasure {
		fault("--intervals with --no-measure: nothing would be measured")
	}
	if err := o.Validate(); err != nil {
		for _, line := range strings.Split(err.Error(), "\n") {
			fault("%s", line)
		}
	}
	if len(faults) > 0 {
		return &usageError{errors.Join(faults...), "alidade scan --help shows its options"}
	}
	spec := pipeline.ScanSpec{Take: files, RigPath: c.String("rig"), Options: o, Version: version, NoHashes: !c.Bool("json") && !c.IsSet("html")}
	if !c.Bool("reproducible") {
		spec.Created = u.now().UTC().Format(time.RFC3339)
	}
	progress := u.progress(c.Bool("quiet"))
	defer progress.finish()
	r, err := pipeline.RunScan(c.Context, spec, pipeline.Watch{Progress: progress.step},
		sheets(c, map[string]func(io.Writer, *pipeline.ScanResult) error{"csv": report.ScanCSV, "html": report.ScanHTML})...)
	progress.finish()
	if err != nil {
		return err
	}
	if c.Bool("json") {
		return report.WriteJSON(u.stdout, r)
	}
	return report.ScanSummary(u.stdout, r, u.width())
}
