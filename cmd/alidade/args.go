package main

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"github.com/urfave/cli/v2"
)

// arguments are the arguments of a verb, sorted out.
type arguments struct {
	options  []string // --name=value each, as the flag parser takes them without a doubt
	operands []string // everything else, in order
	help     bool     // --help or -h stands among them
}

// arrange sorts options from operands, wherever each stands, by the verb's own
// list of flags. The flag parser behind it stops at the first operand and would
// lose every option after it.
//
// An option is --name VALUE, --name=VALUE, or --name alone for a switch;
// whatever stands after an option that takes a value is its value, so that
// --toward -5 and --null -30,10 need no quoting, unless it is an option of the
// verb or begins with --, in which case the value was forgotten. The argument
// -- ends the options. What is left over and looks like an option is refused,
// and so is an option given twice, unless it collects values or both times say
// the same. All faults are returned together.
func arrange(args []string, flags []cli.Flag) (arguments, error) {
	var a arguments
	var faults []error
	known := map[string]cli.Flag{}
	var names []string
	for _, f := range flags {
		for _, n := range f.Names() {
			known[dashed(n)] = f
			names = append(names, dashed(n))
		}
	}
	isOption := func(arg string) bool {
		name, _, _ := strings.Cut(arg, "=")
		_, ok := known[name]
		return ok || arg == "--help" || arg == "-h"
	}
	given := map[string]string{}
	take := func(f cli.Flag, value string) {
		name := f.Names()[0]
		if err := checkValue(f, value); err != nil {
			faults = append(faults, err)
			return
		}
		before, twice := given[name]
		if _, collects := f.(*cli.StringSliceFlag); twice && !collects {
			if before != value {
				faults = append(faults, fmt.Errorf("%s: given twice, as %q and as %q", dashed(name), before, value))
			}
			return
		}
		given[name] = value
		a.options = append(a.options, dashed(name)+"="+value)
	}
	for i := 0; i < len(args); i++ {
		arg := args[i]
		name, value, attached := strings.Cut(arg, "=")
		f, ok := known[name]
		switch {
		case arg == "--":
			a.operands = append(a.operands, args[i+1:]...)
			return a, errors.Join(faults...)
		case arg == "--help" || arg == "-h":
			a.help = true
		case ok && attached:
			take(f, value)
		case ok && isSwitch(f):
			take(f, "true")
		case ok && i+1 == len(args):
			faults = append(faults, fmt.Errorf("%s: no value after it", name))
		case ok && isOption(args[i+1]):
			faults = append(faults, fmt.Errorf("%s: no value: what follows is the option %s", name, args[i+1]))
		case ok && strings.HasPrefix(args[i+1], "--"):
			faults = append(faults, fmt.Errorf("%s: no value: what follows is %s (if that is the value, write %s=%s)", name, args[i+1], name, args[i+1]))
			i++
		case ok:
			i++
			take(f, args[i])
		case len(arg) > 1 && arg[0] == '-':
			faults = append(faults, unknownOption(arg, names))
			// Its value, if there is one, must not turn up as a take.
			if !attached && strings.HasPrefix(arg, "--") && i+1 < len(args) && looksLikeValue(args[i+1]) {
				i++
			}
		default:
			a.operands = append(a.operands, arg)
		}
	}
	return a, errors.Join(faults...)
}

// dashed is the way an option is written.
func dashed(name string) string {
	if len(name) == 1 {
		return "-" + name
	}
	return "--" + name
}

// isSwitch reports whether the flag takes no value.
func isSwitch(f cli.Flag) bool {
	_, ok := f.(*cli.BoolFlag)
	return ok
}

// looksLikeValue reports whether an argument reads as numbers: no take does.
func looksLikeValue(arg string) bool {
	return arg != "" && strings.Trim(arg, "0123456789.,:-") == ""
}

// checkValue holds a value against the kind of its flag.
func checkValue(f cli.Flag, value string) error {
	name := dashed(f.Names()[0])
	switch f.(type) {
	case *cli.BoolFlag:
		if value != "true" && value != "false" {
			return fmt.Errorf("%s=%s: a switch is true or false", name, value)
		}
	case *cli.Float64Flag:
		if x, err := strconv.ParseFloat(value, 64); err != nil || math.IsNaN(x) || math.IsInf(x, 0) {
			return fmt.Errorf("%s %q: not a number", name, value)
		}
	case *cli.Uint64Flag:
		if _, err := strconv.ParseUint(value, 10, 64); err != nil {
			return fmt.Errorf("%s %q: not a whole number from 0 up", name, value)
		}
	case *cli.IntFlag:
		if _, err := strconv.ParseInt(value, 10, 63); err != nil {
			return fmt.Errorf("%s %q: not a whole number", name, value)
		}
	default:
		if strings.TrimSpace(value) == "" {
			return fmt.Errorf("%s %q: an empty value", name, value)
		}
	}
	return nil
}

// unknownOption is the fault of an argument that looks like an option and is
// none of names.
func unknownOption(arg string, names []string) error {
	name, _, _ := strings.Cut(arg, "=")
	if looksLikeValue(arg) {
		return fmt.Errorf("%s: not an option; a negative value stands directly after its option", arg)
	}
	if !strings.HasPrefix(name, "--") && slices.Contains(names, "-"+name) {
		return fmt.Errorf("%s: no such option; did you mean -%s?", name, name)
	}
	if near, ok := nearest(name, names); ok {
		return fmt.Errorf("%s: no such option; did you mean %s?", name, near)
	}
	if !strings.HasPrefix(arg, "--") {
		return fmt.Errorf("%s: no such option (a file of that name is ./%s)", arg, arg)
	}
	return fmt.Errorf("%s: no such option", name)
}

// nearest returns the word that is the fewest slips of typing from text, if it
// is near enough to be meant: a third of its letters, at least one. Of several
// the first in order of the alphabet.
func nearest(text string, words []string) (string, bool) {
	best, at := "", math.MaxInt
	for _, w := range words {
		d := slips(text, w)
		// A word that was cut short is meant by its beginning.
		if len(strings.Trim(text, "-")) >= 3 && strings.HasPrefix(w, text) {
			d = 1
		}
		if d < at || d == at && w < best {
			best, at = w, d
		}
	}
	letters := len([]rune(strings.TrimLeft(text, "-")))
	return best, at <= max(1, letters/3)
}

// slips counts the insertions, deletions, replacements and swaps of neighbours
// that make b of a: the optimal string alignment distance [Damerau 1964].
func slips(a, b string) int {
	s, t := []rune(a), []rune(b)
	before, last, row := make([]int, len(t)+1), make([]int, len(t)+1), make([]int, len(t)+1)
	for j := range last {
		last[j] = j
	}
	for i := 1; i <= len(s); i++ {
		row[0] = i
		for j := 1; j <= len(t); j++ {
			cost := 1
			if s[i-1] == t[j-1] {
				cost = 0
			}
			row[j] = min(last[j]+1, row[j-1]+1, last[j-1]+cost)
			if i > 1 && j > 1 && s[i-1] == t[j-2] && s[i-2] == t[j-1] {
				row[j] = min(row[j], before[j-2]+1)
			}
		}
		before, last, row = last, row, before
	}
	return last[len(t)]
}
