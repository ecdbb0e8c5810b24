package main

import (
	"io"
	"maps"
	"slices"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
)

// The options that several verbs have. Their order is of no matter: the help
// texts are written by hand.

// takeFlags say which files are one take, and its rig.
func takeFlags() []cli.Flag {
	return []cli.Flag{
		&cli.StringFlag{Name: "rig"},
		&cli.BoolFlag{Name: "chain"},
		&cli.BoolFlag{Name: "set"},
		&cli.BoolFlag{Name: "find-chain"},
		&cli.BoolFlag{Name: "find-set"},
	}
}

// airFlags put other air in the place of that of the rig file.
func airFlags() []cli.Flag {
	return []cli.Flag{
		&cli.Float64Flag{Name: "temperature-c"},
		&cli.Float64Flag{Name: "humidity-pct"},
		&cli.Float64Flag{Name: "pressure-kpa"},
		&cli.Float64Flag{Name: "speed-of-sound"},
	}
}

// beamFlags shape a beam, wherever it points.
func beamFlags() []cli.Flag {
	return append(airFlags(),
		&cli.StringFlag{Name: "reference-point"},
		&cli.StringFlag{Name: "method"},
		&cli.StringFlag{Name: "taper"},
		&cli.StringFlag{Name: "weights"},
		&cli.StringSliceFlag{Name: "null"},
		&cli.Float64Flag{Name: "white-noise-gain-floor-db"},
	)
}

// aimFlags point a beam to one place.
func aimFlags() []cli.Flag {
	return []cli.Flag{
		&cli.StringFlag{Name: "toward"},
		&cli.StringFlag{Name: "focus"},
		&cli.BoolFlag{Name: "undo-spreading"},
	}
}

// trackFlags say what is measured on a take and how tracks are written.
func trackFlags() []cli.Flag {
	return []cli.Flag{
		&cli.Float64Flag{Name: "highpass"},
		&cli.Float64Flag{Name: "gain-db"},
		&cli.StringSliceFlag{Name: "noise"},
		&cli.StringSliceFlag{Name: "target"},
		&cli.StringFlag{Name: "noise-cue"},
		&cli.StringFlag{Name: "target-cue"},
		&cli.StringFlag{Name: "isolated-noise"},
		&cli.StringFlag{Name: "isolated-target"},
		&cli.BoolFlag{Name: "no-measure"},
		&cli.BoolFlag{Name: "keep-dead"},
		&cli.StringFlag{Name: "format"},
		&cli.BoolFlag{Name: "overwrite"},
		&cli.BoolFlag{Name: "verify"},
		&cli.BoolFlag{Name: "no-verify"},
		&cli.BoolFlag{Name: "private"},
		&cli.BoolFlag{Name: "reproducible"},
		&cli.BoolFlag{Name: "json"},
		&cli.BoolFlag{Name: "quiet"},
	}
}

// sheets are the files that the command line asks for, of those that writers
// there are for, by option.
func sheets[R any](c *cli.Context, writers map[string]func(io.Writer, R) error) (list []pipeline.Sheet[R]) {
	for _, option := range slices.Sorted(maps.Keys(writers)) {
		if c.IsSet(option) {
			list = append(list, pipeline.Sheet[R]{Option: option, Path: c.String(option), Write: writers[option]})
		}
	}
	return list
}
