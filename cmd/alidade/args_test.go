package main

import (
	"slices"
	"strings"
	"testing"

	"github.com/urfave/cli/v2"
)

// someFlags are flags of each kind. --null is one that takes several numbers
// with a sign.
func someFlags() []cli.Flag {
	return []cli.Flag{
		&cli.StringFlag{Name: "rig"},
		&cli.StringFlag{Name: "toward"},
		&cli.StringSliceFlag{Name: "null"},
		&cli.StringSliceFlag{Name: "noise"},
		&cli.Float64Flag{Name: "gain-db"},
		&cli.BoolFlag{Name: "overwrite"},
		&cli.StringFlag{Name: "out", Aliases: []string{"o"}},
	}
}

func TestOptionsWorkWhereverTheyStand(t *testing.T) {
	for _, c := range []struct {
		line              string
		options, operands []string
	}{
		{"x.wav --rig r.yaml --toward -5", []string{"--rig=r.yaml", "--toward=-5"}, []string{"x.wav"}},
		{"--rig r.yaml x.wav --toward -5", []string{"--rig=r.yaml", "--toward=-5"}, []string{"x.wav"}},
		{"--rig=r.yaml x.wav --toward=-5 y.wav", []string{"--rig=r.yaml", "--toward=-5"}, []string{"x.wav", "y.wav"}},
		{"x.wav --null -30,10", []string{"--null=-30,10"}, []string{"x.wav"}},
		{"--null -30,10 x.wav --null -.5", []string{"--null=-30,10", "--null=-.5"}, []string{"x.wav"}},
		{"--overwrite x.wav", []string{"--overwrite=true"}, []string{"x.wav"}},
		{"x.wav --overwrite", []string{"--overwrite=true"}, []string{"x.wav"}},
		{"--overwrite=false x.wav", []string{"--overwrite=false"}, []string{"x.wav"}},
		{"--gain-db -6.5e0 x.wav", []string{"--gain-db=-6.5e0"}, []string{"x.wav"}},
		{"-o there x.wav", []string{"--out=there"}, []string{"x.wav"}},
		{"--rig=a=b x.wav", []string{"--rig=a=b"}, []string{"x.wav"}},
		{"--rig=--odd.yaml x.wav", []string{"--rig=--odd.yaml"}, []string{"x.wav"}},
		{"--rig -odd.yaml x.wav", []string{"--rig=-odd.yaml"}, []string{"x.wav"}},
		{"--rig r.yaml -- --toward -5", []string{"--rig=r.yaml"}, []string{"--toward", "-5"}},
		{"-- -- x.wav", nil, []string{"--", "x.wav"}},
		{"--noise 0..2 x.wav --noise 3..4,5..6", []string{"--noise=0..2", "--noise=3..4,5..6"}, []string{"x.wav"}},
		{"--rig r.yaml --rig r.yaml x.wav", []string{"--rig=r.yaml"}, []string{"x.wav"}},
		{"- x.wav", nil, []string{"-", "x.wav"}},
		{"", nil, nil},
	} {
		a, err := arrange(strings.Fields(c.line), someFlags())
		if err != nil {
			t.Errorf("%q: %v", c.line, err)
			continue
		}
		if !slices.Equal(a.options, c.options) || !slices.Equal(a.operands, c.operands) {
			t.Errorf("%q gives options %q and operands %q, want %q and %q", c.line, a.options, a.operands, c.options, c.operands)
		}
	}
}

func TestEveryFaultOfTheArgumentsIsNamed(t *testing.T) {
	for _, c := range []struct {
		line   string
		faults []string
	}{
		{"x.wav --rig", []string{"--rig: no value after it"}},
		{"x.wav --rig --toward 5", []string{"--rig: no value: what follows is the option --toward"}},
		{"x.wav --rig --help", []string{"--rig: no value: what follows is the option --help"}},
		{"x.wav --rig --", []string{"--rig: no value: what follows is --"}},
		{"x.wav --rig --odd.yaml", []string{"if that is the value, write --rig=--odd.yaml"}},
		{"x.wav --towards 5", []string{"--towards: no such option; did you mean --toward?"}},
		{"x.wav --towrad=5", []string{"--towrad: no such option; did you mean --toward?"}},
		{"x.wav --over", []string{"--over: no such option; did you mean --overwrite?"}},
		{"x.wav -rig r.yaml", []string{"-rig: no such option; did you mean --rig?"}},
		{"x.wav --frobnicate", []string{"--frobnicate: no such option"}},
		{"x.wav -5", []string{"-5: not an option; a negative value stands directly after its option"}},
		{"-x.wav", []string{"-x.wav: no such option (a file of that name is ./-x.wav)"}},
		{"x.wav --overwrite=perhaps", []string{"--overwrite=perhaps: a switch is true or false"}},
		{"x.wav --gain-db loud", []string{`--gain-db "loud": not a number`}},
		{"x.wav --gain-db NaN", []string{`--gain-db "NaN": not a number`}},
		{"x.wav --gain-db -Inf", []string{`--gain-db "-Inf": not a number`}},
		{"x.wav --rig=", []string{`--rig "": an empty value`}},
		{"x.wav --toward 60 --toward 70", []string{`--toward: given twice, as "60" and as "70"`}},
		{"x.wav --overwrite --overwrite=false", []string{`--overwrite: given twice, as "true" and as "false"`}},
		{"--towards 5 x.wav --gain-db loud --rig", []string{
			"--towards: no such option; did you mean --toward?", `--gain-db "loud": not a number`, "--rig: no value after it"}},
	} {
		_, err := arrange(strings.Fields(c.line), someFlags())
		if err == nil {
			t.Errorf("%q passes, want %q", c.line, c.faults)
			continue
		}
		got := strings.Split(err.Error(), "\n")
		if len(got) != len(c.faults) {
			t.Errorf("%q has %d faults, want %d: %q", c.line, len(got), len(c.faults), got)
			continue
		}
		for k, f := range c.faults {
			if !strings.Contains(got[k], f) {
				t.Errorf("%q: fault %d is %q, want %q", c.line, k, got[k], f)
			}
		}
	}
}

func TestHelpIsFoundAnywhereButAfterTheEndOfOptions(t *testing.T) {
	for line, want := range map[string]bool{
		"--help": true, "-h": true, "x.wav --rig r.yaml --help": true, "x.wav --nonsense --help": true,
		"-- --help": false, "x.wav": false, "--rig=--help": false,
	} {
		if a, _ := arrange(strings.Fields(line), someFlags()); a.help != want {
			t.Errorf("%q: help = %v, want %v", line, a.help, want)
		}
	}
}

// What arrange makes must reach the verb through the flag parser unchanged.
func TestTheFlagParserTakesWhatArrangeMakes(t *testing.T) {
	a, err := arrange(strings.Fields("x.wav --toward -5 --null -30,10 --null 4 --gain-db -3 y.wav --overwrite -- --rig"), someFlags())
	if err != nil {
		t.Fatal(err)
	}
	ran := false
	app := flagParser("v", someFlags(), func(c *cli.Context) error {
		ran = true
		if got := c.String("toward"); got != "-5" {
			t.Errorf("toward = %q", got)
		}
		if got := c.StringSlice("null"); !slices.Equal(got, []string{"-30,10", "4"}) {
			t.Errorf("null = %q", got)
		}
		if got := c.Float64("gain-db"); got != -3 {
			t.Errorf("gain-db = %v", got)
		}
		if !c.Bool("overwrite") || c.IsSet("rig") {
			t.Errorf("overwrite = %v, rig set = %v", c.Bool("overwrite"), c.IsSet("rig"))
		}
		if got := c.Args().Slice(); !slices.Equal(got, []string{"x.wav", "y.wav", "--rig"}) {
			t.Errorf("operands = %q", got)
		}
		return nil
	})
	if err := app.Run(a.line("v")); err != nil || !ran {
		t.Errorf("ran %v, %v", ran, err)
	}
}

func TestSlipsAreCountedAsAHandWouldMakeThem(t *testing.T) {
	for _, c := range []struct {
		a, b string
		want int
	}{
		{"", "", 0}, {"", "abc", 3}, {"abc", "", 3}, {"toward", "toward", 0}, {"towrad", "toward", 1},
		{"twoard", "toward", 1}, {"towards", "toward", 1}, {"kitten", "sitting", 3}, {"é", "e", 1},
		// Optimal string alignment edits no place twice: "ca" to "abc" is 3,
		// by its definition, where the unrestricted distance is 2.
		{"ca", "abc", 3},
	} {
		if got := slips(c.a, c.b); got != c.want {
			t.Errorf("slips(%q, %q) = %d, want %d", c.a, c.b, got, c.want)
		}
	}
}

func TestTheNearestWordIsNamedOnlyIfItIsNear(t *testing.T) {
	words := []string{"steer", "schema", "simulate", "demo"}
	for text, want := range map[string]string{"stear": "steer", "sim": "simulate", "dem": "demo", "schemes": "schema", "zzz": "", "x": ""} {
		got, ok := nearest(text, words)
		if !ok {
			got = ""
		}
		if got != want {
			t.Errorf("nearest(%q) = %q, want %q", text, got, want)
		}
	}
}

// No arguments, however odd, may panic or lose an operand.
func FuzzArrange(f *testing.F) {
	f.Add("x.wav --rig r.yaml --toward -5 -- -x")
	f.Add("--=\x00-\x00--\x00")
	f.Fuzz(func(t *testing.T, line string) {
		args := strings.FieldsFunc(line, func(r rune) bool { return r == ' ' || r == 0 })
		a, err := arrange(args, someFlags())
		if err != nil {
			return
		}
		for _, o := range a.options {
			if !strings.HasPrefix(o, "--") || !strings.Contains(o, "=") {
				t.Errorf("%q: option %q", args, o)
			}
		}
		for _, o := range a.operands {
			if !slices.Contains(args, o) {
				t.Errorf("%q: operand %q was not among the arguments", args, o)
			}
		}
	})
}
