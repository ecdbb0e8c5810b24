package main

import (
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/quality"
	"alidade/pkg/report"
)

const checkHelp = `alidade check: what is wrong with a take, channel by channel

Usage
  alidade check TAKE --rig RIG [OPTIONS]

Example
  $ alidade check roof_07.wav --rig roof.yaml

Looks at every channel: level, clipping, silence, drop-outs, repeated blocks,
constant offset, mains hum, wind, handling noise; and at the channels together:
level, polarity, swapped plugs, late channels, drifting clocks, and whether the
delays fit the rig. Each finding says what was measured, what was expected and
what to do. One direction cannot show everything: a line rig mirrored end for
end looks like sound from the other side.

Which files
  --rig FILE             the rig file
  --chain                the files named are one take, one after the other
  --set                  the files named are one take, side by side
  --find-chain           find the files that the recorder split the take into
  --find-set             find the other files of the set by iXML

Air, where the rig file's is not right
  --temperature-c C      air temperature
  --humidity-pct PCT     relative humidity
  --pressure-kpa KPA     air pressure
  --speed-of-sound MS    speed of sound in m/s, in place of the three above

Limits (a negative number turns a check off)
  --limit-dead-db DB     below the middle channel (default 35)
  --limit-level-db DB    against the middle channel (default 1)
  --limit-clipped SHARE  of frames on a flat top (default 0.0005)
  --limit-delay-us US    against the geometry (default 6)
  --limit-drift-ppm PPM  one clock against the others (default 0.5)

What is said
  --json                 one JSON document: state, channels[], findings[]
  --html FILE            the page to look at
  --overwrite            replace a page that exists
  --fail-on LEVEL        exit code 3 on a finding of this level or above:
                         never (default), warning or error
  --quiet                no progress
  --help, -h             this text
`

// checkLimits are the options that change a limit.
var checkLimits = []struct {
	name string
	at   func(*quality.Limits) *float64
}{
	{"limit-dead-db", func(l *quality.Limits) *float64 { return &l.DeadDB }},
	{"limit-level-db", func(l *quality.Limits) *float64 { return &l.LevelDB }},
	{"limit-clipped", func(l *quality.Limits) *float64 { return &l.ClippedShare }},
	{"limit-delay-us", func(l *quality.Limits) *float64 { return &l.DelayUS }},
	{"limit-drift-ppm", func(l *quality.Limits) *float64 { return &l.DriftPPM }},
}

func checkVerb() verb {
	return verb{
		name: "check", does: "what is wrong with a take, channel by channel",
		help: checkHelp,
		flags: func() []cli.Flag {
			list := slices.Concat(takeFlags(), airFlags(), []cli.Flag{
				&cli.BoolFlag{Name: "json"}, &cli.StringFlag{Name: "html"}, &cli.BoolFlag{Name: "overwrite"},
				&cli.StringFlag{Name: "fail-on", Value: failNever}, &cli.BoolFlag{Name: "quiet"},
			})
			for _, l := range checkLimits {
				list = append(list, &cli.Float64Flag{Name: l.name})
			}
			return list
		},
		run: runCheck,
	}
}

func runCheck(u *ui, c *cli.Context) error {
	files := c.Args().Slice()
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("check: "+format, args...)) }
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
	var limits quality.Limits
	for _, l := range checkLimits {
		if !c.IsSet(l.name) {
			continue
		}
		if *l.at(&limits) = c.Float64(l.name); c.Float64(l.name) == 0 {
			fault("--%s 0: everything would be a finding; want a limit above 0, or a negative number to turn the check off", l.name)
		}
	}
	if err := limits.Validate(); err != nil {
		fault("%w", err)
	}
	if c.IsSet("speed-of-sound") && !(c.Float64("speed-of-sound") >= 100 && c.Float64("speed-of-sound") <= 2000) {
		fault("--speed-of-sound %g: want 100 to 2000 m/s", c.Float64("speed-of-sound"))
	}
	if len(faults) > 0 {
		return &usageError{errors.Join(faults...), "alidade check --help shows its options"}
	}
	number := func(name string) *float64 {
		if !c.IsSet(name) {
			return nil
		}
		v := c.Float64(name)
		return &v
	}
	spec := pipeline.Spec{Take: files, RigPath: c.String("rig"), Version: version, Limits: limits, Options: pipeline.Options{
		Overwrite: c.Bool("overwrite"), Chain: c.Bool("chain"), FindChain: c.Bool("find-chain"), FindSet: c.Bool("find-set"),
		TemperatureC: number("temperature-c"), HumidityPct: number("humidity-pct"), PressureKPa: number("pressure-kpa"), SpeedOfSound: number("speed-of-sound"),
	}}
	progress := u.progress(c.Bool("quiet"))
	res, err := pipeline.Check(c.Context, spec, pipeline.Watch{Progress: progress.step},
		sheets(c, map[string]func(io.Writer, *pipeline.CheckResult) error{"html": report.CheckHTML})...)
	progress.finish()
	if err != nil {
		return err
	}
	if c.Bool("json") {
		if err := report.WriteJSON(u.stdout, res); err != nil {
			return err
		}
	} else {
		printCheck(u, res)
	}
	var list []pipeline.Finding
	for _, f := range res.Findings {
		list = append(list, pipeline.Finding{Severity: f.Severity})
	}
	if worse(list, c.String("fail-on")) {
		return &missedError{exitSome, fmt.Errorf("a finding of level %s or above (--fail-on)", c.String("fail-on"))}
	}
	return nil
}

// printCheck writes the result for people.
func printCheck(u *ui, r *pipeline.CheckResult) {
	paragraph := func(indent, text string) {
		for _, line := range folded(harmless(text), max(30, u.width()-len(indent))) {
			u.print(indent + line + "\n")
		}
	}
	paragraph("", r.Verdict)
	u.print("\n  ch  name          rms dBFS  peak dBFS  level dB   late µs  coherence\n")
	cell := func(v pipeline.Number, width, digits int) string {
		if v == nil {
			return fmt.Sprintf("%*s", width, "-")
		}
		text := fmt.Sprintf("%*.*f", width, digits, *v)
		if strings.Trim(text, " -0.") == "" {
			text = fmt.Sprintf("%*.*f", width, digits, 0.0)
		}
		return text
	}
	for _, ch := range r.Channels {
		name := []rune(harmless(ch.Name))
		if len(name) > 12 {
			name = name[:12]
		}
		u.printf("%4d  %-12s  %s  %s  %s  %s  %s\n", ch.Channel, string(name),
			cell(ch.RMSDBFS, 8, 1), cell(ch.PeakDBFS, 9, 1), cell(ch.LevelDB, 8, 1), cell(ch.DelayUS, 8, 1), cell(ch.MeanSquaredCoher, 9, 2))
	}
	for _, f := range r.Findings {
		u.printf("\n%s: %s\n", f.Severity, f.Code)
		paragraph("  ", f.Measured)
		if f.Expected != "" {
			paragraph("  ", "expected: "+f.Expected)
		}
		if f.Do != "" {
			paragraph("  ", "do: "+f.Do)
		}
	}
}
