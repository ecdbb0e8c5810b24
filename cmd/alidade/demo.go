package main

import (
	"context"
	"fmt"
	"io"
	"math"
	"path/filepath"
	"strconv"
	"time"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
	"alidade/pkg/scenario"
	"alidade/pkg/wav"
)

const demoHelp = `alidade demo: an invented take made, steered and measured

Usage
  alidade demo [OPTIONS]

Example
  $ alidade demo

A voice by the water in wind and the noise of a pump, before a line of eight
microphones, one of them set too low: the take is made, steered towards the
voice, and the gain printed. Everything lies in a folder afterwards, the
scenario that it was made from as well; truth.json says what is to be found.

Options
  --out DIR      the folder, which must not exist yet, or be empty (by default
                 alidade-demo)
  --json         the report on standard output instead of a summary
  --reproducible leave the time of day out of the report
  --quiet        no progress
  --help, -h     this text
`

func demoVerb() verb {
	return verb{
		name: "demo", does: "an invented take made, steered and measured",
		help: demoHelp,
		flags: func() []cli.Flag {
			return []cli.Flag{
				&cli.StringFlag{Name: "out", Value: "alidade-demo"},
				&cli.BoolFlag{Name: "json"},
				&cli.BoolFlag{Name: "reproducible"},
				&cli.BoolFlag{Name: "quiet"},
			}
		},
		run: runDemo,
	}
}

// scenarioFile is the scenario in the folder of the demo.
const scenarioFile = "scenario.yaml"

func runDemo(u *ui, c *cli.Context) error {
	if c.NArg() > 0 {
		return &usageError{fmt.Errorf("demo: %q: it takes no file", c.Args().First()), "alidade steer TAKE --rig RIG --toward AZ is the command for your own"}
	}
	out := filepath.Clean(c.String("out"))
	text := []byte(scenario.Demo())
	made, err := newScenario(scenarioFile, text)
	if err != nil {
		return err
	}
	truth, err := u.simulate(c.Context, made, out, wav.PCM24, map[string][]byte{scenarioFile: text}, c.Bool("quiet"))
	if err != nil {
		return err
	}
	target, err := firstOf(scenario.RoleTarget, truth)
	if err != nil {
		return err
	}
	other, err := firstOf(scenario.RoleInterferer, truth)
	if err != nil {
		return err
	}
	spec := pipeline.Spec{
		Take:    []string{filepath.Join(out, takeFile)},
		RigPath: filepath.Join(out, rigFile),
		// Nobody is heard in it: the voice is made up.
		Options: pipeline.Options{Toward: degreesText(target.Track[0].AzimuthDeg), Preview: true},
		Version: version, Command: append([]string{"alidade"}, u.args...),
	}
	if !c.Bool("reproducible") {
		spec.Created = u.now().UTC().Format(time.RFC3339)
	}
	page := ""
	err = takes{
		run: func(ctx context.Context, spec pipeline.Spec, step func(stage string, done, total int64)) (*pipeline.Result, error) {
			r, err := steerTake(ctx, spec, step)
			if err == nil {
				page = reportFile(r.Output.Path, pipeline.ReportHTML)
			}
			return r, err
		},
		summary: func(w io.Writer, r *pipeline.Result) error { return report.Summary(w, r, u.width()) },
		report:  report.JSON,
		json:    c.Bool("json"), failOn: failNever, quiet: c.Bool("quiet"),
	}.all(c.Context, u, []pipeline.Spec{spec})
	if err != nil || c.Bool("json") {
		return err
	}
	u.printf("\nthe take, its rig, track, report and truth lie in %s\n", out)
	u.printf("try next: alidade steer %s --rig %s --toward %s\n", spec.Take[0], spec.RigPath, degreesText(other.Track[0].AzimuthDeg))
	u.printf("to look at and to listen to, in a browser: %s\n", page)
	return nil
}

// degreesText is an angle as a person would type it, to a thousandth.
func degreesText(deg float64) string {
	return strconv.FormatFloat(math.Round(1000*deg)/1000, 'f', -1, 64)
}
