package main

import (
	"errors"
	"fmt"
	"math"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

const calibrateHelp = `alidade calibrate: a rig file whose channels agree, from a known sound

Usage
  alidade calibrate TAKE --rig RIG --toward AZ[,EL] [OPTIONS]
  alidade calibrate TAKE --rig RIG --focus X,Y,Z [OPTIONS]
  alidade calibrate TAKE... --rig RIG --positions [OPTIONS]
  alidade calibrate TAKE... --rig RIG --calibrator-db 94 [OPTIONS]

Example
  $ alidade calibrate roof_07.wav --rig roof.yaml --toward 141 --excerpt 0..3

One sound from a known place (noise, a sweep, speech, claps) gives the gain,
delay and polarity corrections of every channel against the others. A new rig
file holds them, the old values in comments; the old file is left alone. Each
figure comes with its uncertainty, from the take itself and from how well
direction, air and places are known. A take that does not carry it is refused,
with the reason. At calibration levels, protect your ears and those of others.

Where the sound comes from
  --rig FILE             the rig file as it is
  --toward AZ[,EL]       direction of the sound in degrees
  --distance-m M         its distance from the reference point (far if absent)
  --focus X,Y,Z          or its place in metres from the rig's origin

How it is listened to
  --sound NAME           steady (default): all of the take in which the sound
                         is loud; claps: the first 2 ms of each clap or of
                         measured responses, before a room's reflections
  --from-hz HZ           from this frequency (300)
  --to-hz HZ             up to this one (16000, at most 0.4 of the rate)
  --responses            find what each channel does over frequency too, and
                         write short filters that undo it (response in the
                         rig file), where the take carries it
  --max-delay-us US      largest error of a delay that is looked for (1000)
  --excerpt A..B         only this part of the take
  --chain                the files named are one take, one after the other
  --set                  the files named are one take, side by side
  --find-chain           find the files that the recorder split the take into
  --find-set             find the other files of the set by iXML

How well the circumstances are known (standard uncertainties)
  --direction-uncertainty-deg DEG   of azimuth and elevation (0.5)
  --distance-uncertainty-m M        of the distance (a tenth of it)
  --focus-uncertainty-mm MM         of the point in each axis (10)
  --temperature-uncertainty-c C     of the air (1)
  --placement-uncertainty-mm MM     of each microphone in each axis (0.5)
  --temperature-c C                 air temperature, in place of the rig's
  --humidity-pct PCT                relative humidity
  --pressure-kpa KPA                air pressure
  --speed-of-sound MS               in m/s, in place of the three above

Places of the microphones, from sounds of unknown directions
  --positions            find them from claps all around, above and below, in
                         one take or several; gains and delays stay as they
                         are, and should be calibrated before. With --sound
                         steady each take is one sound from one direction
  --elevations DEG[,DEG...]
                         elevation of all sounds, or of each in order of
                         takes and time: without it a flat rig or a line is
                         found in part only, and the rest is named
  --elevation-uncertainty-deg DEG   of those (2)
  --delay-uncertainty-us US         of the channels' delays (2)
  --distance-m M and --placement-uncertainty-mm MM (20 here) hold too

Levels in dB SPL, from a sound level calibrator (IEC 60942)
  --calibrator-db DB     its level: 94 or 114. It sits on one microphone after
                         the other, two seconds or more each, in one take or
                         one take each; reports then give dB SPL too. On every
                         microphone, it sets the gain corrections as well
  --calibrator-hz HZ     its frequency (1000)
  --calibrator-class C   LS, 1 (default) or 2: what its level may be off
  --channel N            it sits on this channel throughout; found if absent

What is written
  --relative-to NAME     this microphone keeps its corrections; without it
                         the mean of all stays as it was
  --keep LIST            of gain, delay and polarity: what stays as it is
  --out PATH             the new rig file (by default the old one's name with
                         .calibrated.yaml)
  --overwrite            replace a file of that name; never the old rig file

What is said
  --json                 everything as one JSON document
  --quiet                no progress
  --help, -h             this text
`

func calibrateVerb() verb {
	return verb{
		name: "calibrate", does: "a rig file whose channels agree, from a known sound",
		help: calibrateHelp,
		flags: func() []cli.Flag {
			var flags []cli.Flag
			for _, name := range []string{"rig", "toward", "focus", "elevations", "calibrator-class", "sound", "excerpt", "relative-to", "keep", "out"} {
				flags = append(flags, &cli.StringFlag{Name: name})
			}
			for _, name := range []string{
				"distance-m", "from-hz", "to-hz", "max-delay-us", "direction-uncertainty-deg", "distance-uncertainty-m",
				"focus-uncertainty-mm", "temperature-uncertainty-c", "placement-uncertainty-mm",
				"calibrator-db", "calibrator-hz", "channel", "elevation-uncertainty-deg", "delay-uncertainty-us",
				"temperature-c", "humidity-pct", "pressure-kpa", "speed-of-sound",
			} {
				flags = append(flags, &cli.Float64Flag{Name: name})
			}
			for _, name := range []string{"chain", "set", "find-chain", "find-set", "responses", "positions", "overwrite", "json", "quiet"} {
				flags = append(flags, &cli.BoolFlag{Name: name})
			}
			return flags
		},
		run: runCalibrate,
	}
}

// calibrateOptions puts the flags into the options of the pipeline.
func calibrateOptions(c *cli.Context) pipeline.CalibrateOptions {
	number := func(name string) *float64 {
		if !c.IsSet(name) {
			return nil
		}
		v := c.Float64(name)
		return &v
	}
	return pipeline.CalibrateOptions{
		Toward: c.String("toward"), Focus: c.String("focus"), DistanceM: c.Float64("distance-m"),
		Sound: c.String("sound"), FromHz: c.Float64("from-hz"), ToHz: c.Float64("to-hz"), MaxDelayUS: c.Float64("max-delay-us"),
		Excerpt:         c.String("excerpt"),
		DirectionStdDeg: number("direction-uncertainty-deg"), FocusStdMM: number("focus-uncertainty-mm"), DistanceStdM: number("distance-uncertainty-m"),
		TemperatureStdC: number("temperature-uncertainty-c"), PlacementStdMM: number("placement-uncertainty-mm"),
		CalibratorDB: c.Float64("calibrator-db"), CalibratorHz: c.Float64("calibrator-hz"), CalibratorClass: c.String("calibrator-class"), Channel: int(c.Float64("channel")),
		Responses: c.Bool("responses"), Positions: c.Bool("positions"), Elevations: c.String("elevations"),
		ElevationStdDeg: number("elevation-uncertainty-deg"), DelayStdUS: number("delay-uncertainty-us"),
		RelativeTo: c.String("relative-to"), Keep: c.String("keep"),
		TemperatureC: number("temperature-c"), HumidityPct: number("humidity-pct"), PressureKPa: number("pressure-kpa"), SpeedOfSound: number("speed-of-sound"),
		Chain: c.Bool("chain"), FindChain: c.Bool("find-chain"), FindSet: c.Bool("find-set"),
		Out: c.String("out"), Overwrite: c.Bool("overwrite"),
	}
}

func runCalibrate(u *ui, c *cli.Context) error {
	options := calibrateOptions(c)
	files := c.Args().Slice()
	var faults []error
	fault := func(format string, args ...any) { faults = append(faults, fmt.Errorf("calibrate: "+format, args...)) }
	switch {
	case len(files) == 0:
		fault("no take: name a WAV file")
	case len(files) > 1 && !oneTake(c) && !options.Several():
		fault("%d takes, want one (several files of one take: --chain or --set; several takes: --positions, --calibrator-db)", len(files))
	}
	if !c.IsSet("rig") {
		fault("no rig: give --rig FILE")
	}
	if c.Bool("chain") && c.Bool("set") {
		fault("both --chain and --set: files follow each other or lie side by side")
	}
	if ch := c.Float64("channel"); ch != math.Trunc(ch) || c.IsSet("channel") && ch < 1 {
		fault("--channel %g: channels are counted from 1", ch)
	}
	if c.IsSet("calibrator-db") && options.CalibratorDB == 0 {
		fault("--calibrator-db 0: want 60 to 140 dB")
	}
	if err := options.Validate(); err != nil {
		for _, line := range strings.Split(err.Error(), "\n") {
			fault("%s", line)
		}
	}
	if len(faults) > 0 {
		return &usageError{errors.Join(faults...), "alidade calibrate --help shows its options"}
	}
	progress := u.progress(c.Bool("quiet"))
	spec := pipeline.CalibrateSpec{Take: files, RigPath: c.String("rig"), Options: options, Version: version}
	if !oneTake(c) {
		spec.Take = files[:1]
		for _, file := range files[1:] {
			spec.More = append(spec.More, []string{file})
		}
	}
	result, err := pipeline.Calibrate(c.Context, spec, pipeline.Watch{Progress: progress.step})
	progress.finish()
	if err != nil {
		return err
	}
	if c.Bool("json") {
		return report.WriteJSON(u.stdout, result)
	}
	return report.Calibration(u.stdout, result, u.width())
}
