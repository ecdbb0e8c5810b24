package main

import (
	"errors"
	"fmt"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

const locateHelp = `alidade locate: where the sounds of a take come from, and when

Usage
  alidade locate TAKE --rig RIG [OPTIONS]

Example
  $ alidade locate roof_07.wav --rig roof.yaml

Lists the sources that are heard, with standard errors and a confidence from 0
to 1, draws the power over angle, and follows each source over time. The
corrections of the rig file count, and microphones that it leaves out do not.
What the rig cannot tell apart is said. Where nothing is found, that is the
answer, with its reason. alidade steer aims at any of the sources by itself, or
follows it.

Which files
  --rig FILE             the rig file (alidade schema rig describes it)
  --chain                the files named are one take, one after the other
  --set                  the files named are one take, side by side
  --find-chain           find the files that the recorder split the take into
  --find-set             find the other files of the set by iXML

How
  --window S             seconds behind one direction (default 0.4): longer
                         ones are surer, shorter ones follow faster
  --hop S                seconds from one window to the next (default: half)
  --from-hz HZ           lowest and highest frequency heeded (default: from
  --to-hz HZ             the rig: its length, and the distance of neighbours)
  --sources N            the most sources looked for, 1 to 8 (default 3)
  --reference-point NAME a microphone's name, or centre: directions are seen
                         from there

Air, where the rig file's is not right
  --temperature-c C      air temperature
  --humidity-pct PCT     relative humidity
  --pressure-kpa KPA     air pressure
  --speed-of-sound MS    speed of sound in m/s, in place of the three above

What is said
  --csv                  one table on standard output instead: sources, what
                         each window heard, tracks
  --json                 one JSON document: sources[], windows[], tracks[],
                         findings[]
  --fail-on LEVEL        exit code 3 on a finding of this level or above:
                         never (default), warning (as when nothing is found)
                         or error
  --quiet                no progress
  --help, -h             this text
`

func locateVerb() verb {
	return verb{
		name: "locate", does: "where the sounds of a take come from, and when",
		help: locateHelp,
		flags: func() []cli.Flag {
			return []cli.Flag{
				&cli.StringFlag{Name: "rig"},
				&cli.BoolFlag{Name: "chain"},
				&cli.BoolFlag{Name: "set"},
				&cli.BoolFlag{Name: "find-chain"},
				&cli.BoolFlag{Name: "find-set"},
				&cli.Float64Flag{Name: "window"},
				&cli.Float64Flag{Name: "hop"},
				&cli.Float64Flag{Name: "from-hz"},
				&cli.Float64Flag{Name: "to-hz"},
				&cli.IntFlag{Name: "sources"},
				&cli.StringFlag{Name: "reference-point"},
				&cli.Float64Flag{Name: "temperature-c"},
				&cli.Float64Flag{Name: "humidity-pct"},
				&cli.Float64Flag{Name: "pressure-kpa"},
				&cli.Float64Flag{Name: "speed-of-sound"},
				&cli.BoolFlag{Name: "csv"},
				&cli.BoolFlag{Name: "json"},
				&cli.StringFlag{Name: "fail-on", Value: failNever},
				&cli.BoolFlag{Name: "quiet"},
			}
		},
		run: runLocate,
	}
}

// locateSpec is what a command line of locate asks for, and everything that is
// wrong with it before any file is opened.
func locateSpec(c *cli.Context) (pipeline.Spec, pipeline.Search, error) {
	files := c.Args().Slice()
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("locate: "+format, args...)) }
	switch {
	case len(files) == 0:
		fault("no take: name a WAV file")
	case len(files) > 1 && !oneTake(c):
		fault("%d files: one take at a time; --chain and --set make one of several files", len(files))
	}
	if !c.IsSet("rig") {
		fault("no rig: give --rig FILE")
	}
	switch c.String("fail-on") {
	case failNever, failWarning, failError:
	default:
		fault("--fail-on %q: want one of %s, %s, %s", c.String("fail-on"), failNever, failWarning, failError)
	}
	if c.Bool("csv") && c.Bool("json") {
		fault("both --csv and --json: standard output holds one document")
	}
	if c.Bool("chain") && c.Bool("set") {
		fault("both --chain and --set: files follow each other or lie side by side (a set of each part of a chain is named by {ch})")
	}
	if c.Bool("set") && c.Bool("find-set") {
		fault("both --set and --find-set: the files are named or found")
	}
	number := func(name string) *float64 {
		if !c.IsSet(name) {
			return nil
		}
		v := c.Float64(name)
		return &v
	}
	spec := pipeline.Spec{
		Take: files, RigPath: c.String("rig"), Version: version, NoHashes: !c.Bool("json"),
		Options: pipeline.Options{
			Toward: pipeline.TowardAuto, // what locate does is the first half of it
			Chain:  c.Bool("chain"), FindChain: c.Bool("find-chain"), FindSet: c.Bool("find-set"),
			ReferencePoint: c.String("reference-point"),
			TemperatureC:   number("temperature-c"), HumidityPct: number("humidity-pct"),
			PressureKPa: number("pressure-kpa"), SpeedOfSound: number("speed-of-sound"),
		},
	}
	search := pipeline.Search{
		Window: c.Float64("window"), Hop: c.Float64("hop"),
		FromHz: c.Float64("from-hz"), ToHz: c.Float64("to-hz"), Sources: c.Int("sources"),
	}
	for _, name := range []string{"window", "hop", "from-hz", "to-hz"} {
		if c.IsSet(name) && c.Float64(name) == 0 {
			fault("--%s 0: want a number above 0; leave it out for the default", name)
		}
	}
	if c.IsSet("sources") && c.Int("sources") == 0 {
		fault("--sources 0: want 1 to 8; leave it out for the default")
	}
	for _, err := range []error{spec.Options.Validate(), search.Validate()} {
		if err != nil {
			for _, line := range strings.Split(err.Error(), "\n") {
				fault("%s", line)
			}
		}
	}
	if len(faults) > 0 {
		return spec, search, &usageError{errors.Join(faults...), "alidade locate --help shows its options"}
	}
	return spec, search, nil
}

func runLocate(u *ui, c *cli.Context) error {
	spec, search, err := locateSpec(c)
	if err != nil {
		return err
	}
	progress := u.progress(c.Bool("quiet"))
	res, err := pipeline.Locate(c.Context, spec, search, pipeline.Watch{Progress: progress.step})
	progress.finish()
	if err != nil {
		return err
	}
	switch {
	case c.Bool("json"):
		err = report.WriteJSON(u.stdout, res)
	case c.Bool("csv"):
		err = report.LocatedCSV(u.stdout, res)
	default:
		err = report.LocatedText(u.stdout, res, u.width())
	}
	if err != nil {
		return err
	}
	if worse(res.Findings, c.String("fail-on")) {
		return &missedError{exitSome, fmt.Errorf("a finding of level %s or above (--fail-on)", c.String("fail-on"))}
	}
	return nil
}
