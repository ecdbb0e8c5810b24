package main

import (
	"fmt"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/report"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
)

const schemaHelp = `alidade schema: the JSON Schema of a file the program reads or writes

Usage
  alidade schema rig|job|sidecar|scenario|report

  rig       the rig file: where the microphones stand, how they are calibrated
  job       the job file of alidade plan and alidade batch
  sidecar   settings beside a take of a job, TAKE.alidade.yaml
  scenario  the scenario file of alidade simulate
  report    the report of alidade steer, <track>.report.json

An editor that knows JSON Schema completes and checks YAML with it too.

Example
  $ alidade schema rig

Options
  --help, -h  this text
`

func schemaVerb() verb {
	return verb{
		name: "schema", does: "prints the JSON Schema of a file that is read or written",
		help:  schemaHelp,
		flags: func() []cli.Flag { return nil },
		run:   runSchema,
	}
}

// schema is a file with a form.
type schema struct {
	name string
	text func() ([]byte, error)
}

func schemas() []schema {
	return []schema{{"rig", rig.Schema}, {"job", jobSchema}, {"sidecar", sidecarSchema}, {"scenario", scenario.Schema}, {"report", report.Schema}}
}

func runSchema(u *ui, c *cli.Context) error {
	var names []string
	for _, s := range schemas() {
		names = append(names, s.name)
	}
	want := strings.Join(names, ", ")
	if c.NArg() != 1 {
		return &usageError{fmt.Errorf("schema: %d names, want one of %s", c.NArg(), want), ""}
	}
	for _, s := range schemas() {
		if s.name == c.Args().First() {
			text, err := s.text()
			if err == nil {
				u.print(string(text))
			}
			return err
		}
	}
	return &usageError{fmt.Errorf("schema: %q is not a file with a schema: want one of %s", c.Args().First(), want), ""}
}
