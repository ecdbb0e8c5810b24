package main

import (
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

const predictHelp = `alidade predict: what a rig can do, before anything is recorded

Usage
  alidade predict --rig RIG --toward AZ[,EL] [OPTIONS]
  alidade predict --rig RIG --focus X,Y,Z [OPTIONS]

Example
  $ alidade predict --rig roof.yaml --toward 60

Says in which bands the rig helps and by how much, in diffuse noise and in
noise that is of its own at every microphone; then beamwidth, nulls, side and
grating lobes, directivity index and white noise gain at each frequency. All of
it comes from the filters as a steer run would build them. Microphones are
taken as omnidirectional in a free field. What is not defined is said to be so.

Where to
  --rig FILE             the rig file (alidade schema rig describes it)
  --toward AZ[,EL]       direction in degrees
  --focus X,Y,Z          point in metres from the rig's origin
  --reference-point NAME a microphone's name, or centre

How
  --method NAME          spectral (default), sinc or farrow
  --taper NAME           uniform (default), hann, hamming, kaiser:BETA,
                         dolph-chebyshev:DB or taylor:DB:N
  --weights NAME         delay-and-sum (default), constant-beamwidth or
                         superdirective (minimum-variance needs a take)
  --null AZ[,EL]         a direction that is not to be heard; several with
                         several --null
  --white-noise-gain-floor-db DB
                         the least white noise gain of such weights; default 0
  --undo-spreading       with --focus: undo the level differences of a near
                         source

Air, where the rig file's is not right
  --temperature-c C      air temperature
  --humidity-pct PCT     relative humidity
  --pressure-kpa KPA     air pressure
  --speed-of-sound MS    speed of sound in m/s, in place of the three above

At which frequencies
  --rate HZ              frames per second of the takes to come; default 48000
  --at-hz LIST           frequencies in Hz, commas between; by default the
                         one-third octaves from 125 Hz up
  --pattern              the response over angle too, in JSON
  --pattern-step DEG     from angle to angle; default 1

How well the rig is known: standard deviations of errors to be tried
  --placement-mm MM      of the places, along each axis
  --gain-error-db DB     of the gains
  --phase-error-deg DEG  of the phases
  --temperature-error-c C
                         of the air temperature
  --trials N             rigs to draw; default 1000
  --seed N               of the draw; default 1

What is said
  --json                 one JSON document on standard output
  --csv FILE             the figures at each frequency as a table
  --pattern-csv FILE     the response over angle and frequency as a table
  --html FILE            the page to look at
  --overwrite            replace tables and pages that exist
  --help, -h             this text
`

func predictVerb() verb {
	return verb{
		name: "predict", does: "what a rig can do: which bands it helps in, and by how much",
		help:  predictHelp,
		flags: predictFlags,
		run:   runPredict,
	}
}

func predictFlags() []cli.Flag {
	return slices.Concat(beamFlags(), aimFlags(), []cli.Flag{
		&cli.StringFlag{Name: "rig"},
		&cli.IntFlag{Name: "rate"},
		&cli.StringFlag{Name: "at-hz"},
		&cli.BoolFlag{Name: "pattern"},
		&cli.Float64Flag{Name: "pattern-step"},
		&cli.Float64Flag{Name: "placement-mm"},
		&cli.Float64Flag{Name: "gain-error-db"},
		&cli.Float64Flag{Name: "phase-error-deg"},
		&cli.Float64Flag{Name: "temperature-error-c"},
		&cli.IntFlag{Name: "trials"},
		&cli.Uint64Flag{Name: "seed"},
		&cli.BoolFlag{Name: "json"},
		&cli.StringFlag{Name: "csv"},
		&cli.StringFlag{Name: "pattern-csv"},
		&cli.StringFlag{Name: "html"},
		&cli.BoolFlag{Name: "overwrite"},
	})
}

// runPredict is the verb.
func runPredict(u *ui, c *cli.Context) error {
	o := pipeline.PredictOptions{
		Options: steerOptions(c),
		RateHz:  c.Int("rate"), AtHz: c.String("at-hz"),
		Pattern: c.Bool("pattern") || c.IsSet("pattern-csv"), StepDeg: c.Float64("pattern-step"),
		PlacementMM: c.Float64("placement-mm"), GainErrorDB: c.Float64("gain-error-db"),
		PhaseErrorDeg: c.Float64("phase-error-deg"), TemperatureErrorC: c.Float64("temperature-error-c"),
		Trials: c.Int("trials"), Seed: c.Uint64("seed"), Picture: c.IsSet("html"),
	}
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("predict: "+format, args...)) }
	if c.NArg() > 0 {
		fault("%q: a prediction needs no take", c.Args().First())
	}
	if !c.IsSet("rig") {
		fault("no rig: give --rig FILE")
	}
	for _, option := range []string{"rate", "trials", "seed"} {
		if v := c.Value(option); c.IsSet(option) && (v == 0 || v == uint64(0)) {
			fault("--%s 0: want 1 or more", option)
		}
	}
	if c.IsSet("pattern-step") && o.StepDeg == 0 {
		fault("--pattern-step 0: want more than 0°; leave it out for the default")
	}
	if err := o.Validate(); err != nil {
		for _, line := range strings.Split(err.Error(), "\n") {
			fault("%s", line)
		}
	}
	if len(faults) > 0 {
		return &usageError{errors.Join(faults...), "alidade predict --help shows its options"}
	}
	p, err := pipeline.Predict(c.String("rig"), o, version, sheets(c, map[string]func(io.Writer, *pipeline.Prediction) error{
		"csv": report.PredictionCSV, "pattern-csv": report.PatternCSV, "html": report.PredictionHTML})...)
	if err != nil {
		return err
	}
	if c.Bool("json") {
		return report.WriteJSON(u.stdout, p)
	}
	return report.Prediction(u.stdout, p, u.width())
}
