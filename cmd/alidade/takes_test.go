package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"reflect"
	"strings"
	"syscall"
	"testing"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

// steerLine gives the flag parser a command line of steer, as dispatch does,
// and what it makes of it to use.
func steerLine(t *testing.T, line string, use func(c *cli.Context)) {
	t.Helper()
	a, err := arrange(strings.Fields(line), steerFlags())
	if err != nil {
		t.Fatalf("%q: %v", line, err)
	}
	used := false
	app := flagParser("steer", steerFlags(), func(c *cli.Context) error { used = true; use(c); return nil })
	if err := app.Run(a.line("steer")); err != nil || !used {
		t.Fatalf("%q: used %v, %v", line, used, err)
	}
}

func TestEachFlagOfSteerReachesItsOption(t *testing.T) {
	f := func(v float64) *float64 { return &v }
	reached := map[string]bool{}
	for line, want := range map[string]pipeline.Options{
		"x.wav":                                {},
		"x.wav --toward -5,10":                 {Toward: "-5,10"},
		"x.wav --focus -1,2,.5":                {Focus: "-1,2,.5"},
		"x.wav --toward auto --pick 2":         {Toward: "auto", Pick: 2},
		"x.wav --reference-point M4":           {ReferencePoint: "M4"},
		"x.wav --method farrow":                {Method: "farrow"},
		"x.wav --taper taylor:30:4":            {Taper: "taylor:30:4"},
		"x.wav --weights superdirective":       {Weights: "superdirective"},
		"x.wav --null -30,10 --null 4":         {Null: []string{"-30,10", "4"}},
		"x.wav --white-noise-gain-floor-db -6": {WhiteNoiseGainFloorDB: f(-6)},
		"x.wav --chain":                        {Chain: true},
		"x.wav --find-chain":                   {FindChain: true},
		"x.wav --find-set":                     {FindSet: true},
		"x.wav --noise-cue wind":               {NoiseCue: "wind"},
		"x.wav --target-cue voice":             {TargetCue: "voice"},
		"x.wav --private":                      {Private: true},
		"x.wav --undo-spreading":               {UndoSpreading: true},
		"x.wav --highpass 80":                  {HighpassHz: 80},
		"x.wav --gain-db -6":                   {GainDB: -6},
		"x.wav --temperature-c 0":              {TemperatureC: f(0)},
		"x.wav --temperature-c -12.5":          {TemperatureC: f(-12.5)},
		"x.wav --humidity-pct 40":              {HumidityPct: f(40)},
		"x.wav --pressure-kpa 98":              {PressureKPa: f(98)},
		"x.wav --speed-of-sound 340":           {SpeedOfSound: f(340)},
		"x.wav --noise 0..2,3..4":              {Noise: "0..2,3..4"},
		"x.wav --noise 0..2 --noise 3..4":      {Noise: "0..2,3..4"},
		"x.wav --target 5..6":                  {Target: "5..6"},
		"x.wav --isolated-noise n.wav":         {IsolatedNoise: "n.wav"},
		"x.wav --isolated-target t.wav":        {IsolatedTarget: "t.wav"},
		"x.wav --compare-to M2":                {CompareTo: "M2"},
		"x.wav --no-measure":                   {NoMeasure: true},
		"x.wav --align-clocks":                 {AlignClocks: true},
		"x.wav --keep-dead":                    {KeepDead: true},
		"x.wav --out o/":                       {Out: "o/"},
		"x.wav --format pcm16":                 {Format: "pcm16"},
		"x.wav --over-range float32":           {OverRange: "float32"},
		"x.wav --with-reference":               {WithReference: true},
		"x.wav --excerpt 21:00:00..21:00:05":   {Excerpt: "21:00:00..21:00:05"},
		"x.wav --handles 1.5":                  {Handles: 1.5},
		"x.wav --reports none":                 {Reports: "none"},
		"x.wav --reestimate-every 2.5":         {ReestimateEvery: 2.5},
		"x.wav --postfilter white":             {Postfilter: "white"},
		"x.wav --postfilter-floor-db -12":      {PostfilterFloorDB: f(-12)},
		"x.wav --preview":                      {Preview: true},
		"x.wav --preview --preview-at 3..9":    {Preview: true, PreviewAt: "3..9"},
		"x.wav --overwrite":                    {Overwrite: true},
		"x.wav --verify":                       {},
		"x.wav --verify=false":                 {NoVerify: true},
		"x.wav --no-verify":                    {NoVerify: true},
	} {
		steerLine(t, line, func(c *cli.Context) {
			got, want := mustJSON(t, steerOptions(c)), mustJSON(t, want)
			if got != want {
				t.Errorf("%q gives %s, want %s", line, got, want)
			}
			if rest := c.Args().Slice(); len(rest) != 1 || rest[0] != "x.wav" {
				t.Errorf("%q leaves %q", line, rest)
			}
		})
		var keys map[string]any
		if err := json.Unmarshal([]byte(mustJSON(t, want)), &keys); err != nil {
			t.Fatal(err)
		}
		for key := range keys {
			reached[key] = true
		}
	}
	for _, field := range reflect.VisibleFields(reflect.TypeFor[pipeline.Options]()) {
		key, _, _ := strings.Cut(field.Tag.Get("json"), ",")
		if key != "-" && !reached[key] {
			t.Errorf("no command line above reaches the option %s: give it a line", field.Name)
		}
	}
}

func mustJSON(t *testing.T, v any) string {
	t.Helper()
	text, err := json.Marshal(v)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

func TestSteerNamesEveryFaultOfItsCommandLineAtOnce(t *testing.T) {
	for _, c := range []struct {
		line   string
		faults []string
	}{
		{"x.wav --rig r.yaml --toward 60", nil},
		{"x.wav y.wav --rig r.yaml --toward 60 --fail-on error", nil},
		{"x.wav --rig r.yaml --toward 60 --verify --no-verify", []string{"steer: both --verify and --no-verify"}},
		{"--fail-on sometimes", []string{
			"steer: no take: name at least one WAV file", "steer: no rig: give --rig FILE",
			"steer: no direction: give --toward AZ[,EL] or --focus X,Y,Z",
			`steer: --fail-on "sometimes": want one of never, warning, error`}},
		{"x.wav y.wav --rig r.yaml --toward 60 --out one.wav", []string{
			`steer: --out "one.wav": one track for 2 takes: name a folder that exists, or end it in /`}},
		{"a/x.wav b/x.wav --rig r.yaml --toward 60 --out o/", []string{
			"steer: takes a/x.wav and b/x.wav: their tracks would get the same name"}},
		{"a/x.wav b/x.wav --rig r.yaml --toward 60", nil},
		{"a/x.wav a/X.wav --rig r.yaml --toward 60", []string{
			"steer: takes a/x.wav and a/X.wav: their tracks would get the same name"}},
		{"x.wav ./x.wav --rig r.yaml --toward 60", []string{
			"steer: takes x.wav and ./x.wav: their tracks would get the same name"}},
	} {
		steerLine(t, c.line, func(ctx *cli.Context) {
			err := checkSteer(ctx, steerOptions(ctx))
			var got []string
			if err != nil {
				got = strings.Split(err.Error(), "\n")
				if exitCode(context.Background(), err) != exitUsage {
					t.Errorf("%q: exit code %d", c.line, exitCode(context.Background(), err))
				}
			}
			if strings.Join(got, "|") != strings.Join(c.faults, "|") {
				t.Errorf("%q: %q, want %q", c.line, got, c.faults)
			}
		})
	}
}

func TestTheSpecHoldsTheTimeUnlessReproducible(t *testing.T) {
	for line, want := range map[string]string{
		"x.wav --rig r.yaml":                "2026-05-01T21:00:00Z",
		"x.wav --rig r.yaml --reproducible": "",
	} {
		steerLine(t, line, func(c *cli.Context) {
			b := newBench(strings.Fields("steer " + line)...)
			s := b.steerSpec(c, steerOptions(c), []string{"x.wav"})
			if s.Created != want || s.RigPath != "r.yaml" || s.Version != version || len(s.Take) != 1 || s.Take[0] != "x.wav" ||
				strings.Join(s.Command, " ") != "alidade steer "+line {
				t.Errorf("%q: %+v", line, s)
			}
		})
	}
}

// fakeEngine succeeds with the severity that a take's name says, and fails for
// the names that begin with "bad" and "wrong".
func fakeEngine(_ context.Context, spec pipeline.Spec, step func(string, int64, int64)) (*pipeline.Result, error) {
	step("steering", 1, 2)
	take := spec.Take[0]
	r := &pipeline.Result{Schema: pipeline.ReportSchema, Take: pipeline.Take{Files: []pipeline.File{{Path: take}}}}
	switch {
	case strings.HasPrefix(take, "bad"):
		return nil, fmt.Errorf("%s: has no frames", take)
	case strings.HasPrefix(take, "wrong"):
		return nil, &pipeline.UsageError{Err: fmt.Errorf("%s: has 4 channels, the rig 8", take), Hint: "give the rig of this take"}
	case strings.HasPrefix(take, "warn"):
		r.Findings = []pipeline.Finding{{Severity: pipeline.Info}, {Severity: pipeline.Warning}}
	case strings.HasPrefix(take, "error"):
		r.Findings = []pipeline.Finding{{Severity: pipeline.Error}}
	}
	return r, nil
}

func TestOneBadTakeDoesNotEndTheOthers(t *testing.T) {
	for _, c := range []struct {
		takes, failOn string
		code          int
		out, errs     string
	}{
		{"good", failNever, 0, "good\n", ""},
		{"a b", failNever, 0, "a\n\nb\n", ""},
		{"bad", failNever, 1, "", "alidade: bad: has no frames\n"},
		{"wrong", failNever, 2, "", "alidade: wrong: has 4 channels, the rig 8\nhint: give the rig of this take\n"},
		{"a bad c", failNever, 3, "a\n\nc\n", "alidade: bad: has no frames\nalidade: 1 of 3 takes failed\n"},
		{"bad1 bad2", failNever, 1, "", "alidade: bad1: has no frames\nalidade: bad2: has no frames\nalidade: not one of 2 takes was steered\n"},
		{"wrong1 bad2", failNever, 1, "", ""},
		{"wrong1 wrong2", failNever, 2, "", ""},
		{"warn", failNever, 0, "warn\n", ""},
		{"warn", failError, 0, "warn\n", ""},
		{"warn", failWarning, 3, "warn\n", "alidade: warn: a finding of level warning or above (--fail-on)\n"},
		{"error", failWarning, 3, "error\n", ""},
		{"error", failError, 3, "error\n", "alidade: error: a finding of level error or above (--fail-on)\n"},
		{"error", failNever, 0, "error\n", ""},
	} {
		b, code := steerFake(c.takes, takes{run: fakeEngine, failOn: c.failOn})
		if code != c.code || b.out.String() != c.out || c.errs != "" && b.errs.String() != c.errs {
			t.Errorf("%q, --fail-on %s: exit code %d, %q, %q; want %d, %q, %q", c.takes, c.failOn, code, b.out.String(), b.errs.String(), c.code, c.out, c.errs)
		}
	}
}

// steerFake runs takes of the given names and returns what was written and the
// exit code.
func steerFake(names string, k takes) (*bench, int) {
	return steerFakeIn(context.Background(), names, k)
}

func steerFakeIn(ctx context.Context, names string, k takes) (*bench, int) {
	b := newBench()
	var specs []pipeline.Spec
	for _, n := range strings.Fields(names) {
		specs = append(specs, pipeline.Spec{Take: []string{n}})
	}
	k.summary = func(w io.Writer, r *pipeline.Result) error {
		_, err := fmt.Fprintln(w, r.Take.Files[0].Path)
		return err
	}
	k.report = report.JSON
	err := k.all(ctx, b.ui, specs)
	if err != nil {
		b.complain(err)
	}
	return b, exitCode(ctx, err)
}

func TestJSONIsOneDocumentForOneTakeAndAnArrayForSeveral(t *testing.T) {
	b, code := steerFake("good", takes{run: fakeEngine, json: true})
	var one pipeline.Result
	if err := json.Unmarshal(b.out.Bytes(), &one); err != nil || code != 0 || one.Take.Files[0].Path != "good" {
		t.Errorf("exit code %d, %v: %s", code, err, b.out.String())
	}
	b, code = steerFake("a bad c", takes{run: fakeEngine, json: true})
	var list []struct {
		Take  pipeline.Take `json:"take"`
		Error string        `json:"error"`
	}
	if err := json.Unmarshal(b.out.Bytes(), &list); err != nil || code != exitSome || len(list) != 3 {
		t.Fatalf("exit code %d, %v: %s", code, err, b.out.String())
	}
	for k, want := range []string{"a", "bad", "c"} {
		if list[k].Take.Files[0].Path != want || (list[k].Error != "") != (want == "bad") {
			t.Errorf("entry %d: %+v", k, list[k])
		}
	}
	if list[1].Error != "bad: has no frames" {
		t.Errorf("error = %q", list[1].Error)
	}
}

func TestAnInterruptEndsAllTakes(t *testing.T) {
	ctx, cancel := context.WithCancelCause(context.Background())
	began := 0
	b, code := steerFakeIn(ctx, "a b c", takes{run: func(ctx context.Context, s pipeline.Spec, step func(string, int64, int64)) (*pipeline.Result, error) {
		if began++; began == 2 {
			cancel(&signalError{syscall.SIGINT})
			return nil, ctx.Err()
		}
		return fakeEngine(ctx, s, step)
	}})
	if code != 130 || began != 2 || b.out.String() != "a\n" {
		t.Errorf("exit code %d after %d takes, %q", code, began, b.out.String())
	}
}

func TestALostSummaryEndsTheRun(t *testing.T) {
	b := newBench()
	lost := errors.New("no space")
	k := takes{run: fakeEngine, summary: func(io.Writer, *pipeline.Result) error { return lost }}
	if err := k.all(context.Background(), b.ui, []pipeline.Spec{{Take: []string{"a"}}, {Take: []string{"b"}}}); !errors.Is(err, lost) {
		t.Errorf("%v", err)
	}
}
