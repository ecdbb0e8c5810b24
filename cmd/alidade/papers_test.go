package main

import (
	"bytes"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/scenario"
)

// command is a command of a document, and the output that is shown beneath it.
type command struct {
	line  int // of the document, from 1
	text  string
	shown []string
}

// consoleCommands returns the commands of the fenced console blocks of a
// Markdown text: each line that begins with "$ ", a backslash at its end going
// on in the next, with the lines up to the next command as its output.
func consoleCommands(text string) []command {
	var list []command
	inside, open := false, false
	for k, line := range strings.Split(text, "\n") {
		switch {
		case strings.HasPrefix(line, "```"):
			inside = !inside && strings.TrimSpace(strings.TrimPrefix(line, "```")) == "console"
			open = false
		case !inside:
		case open:
			c := &list[len(list)-1]
			c.text, open = strings.CutSuffix(c.text+strings.TrimSpace(line), `\`)
		case strings.HasPrefix(line, "$ "):
			c := command{line: k + 1}
			c.text, open = strings.CutSuffix(strings.TrimPrefix(line, "$ "), `\`)
			list = append(list, c)
		case len(list) > 0:
			list[len(list)-1].shown = append(list[len(list)-1].shown, line)
		}
	}
	for k := range list {
		s := list[k].shown
		for len(s) > 0 && strings.TrimSpace(s[len(s)-1]) == "" {
			s = s[:len(s)-1]
		}
		list[k].shown = s
	}
	return list
}

// matches reports whether an output is the shown one: line by line, where a
// line ... or … stands for any number of lines, and either of them within or at
// the end of a line for any text. It returns the first shown line that is
// missing.
func matches(shown, output []string) (missing string, ok bool) {
	at, anywhere := 0, false
	for _, want := range shown {
		if w := strings.TrimSpace(want); w == "..." || w == "…" {
			anywhere = true
			continue
		}
		found := false
		for at < len(output) && !found {
			found = sameLine(want, output[at])
			at++
			if !anywhere {
				break
			}
		}
		if !found {
			return want, false
		}
		anywhere = false
	}
	if !anywhere && len(shown) > 0 && at < len(output) {
		return "the end, instead of " + output[at], false
	}
	return "", true
}

// sameLine compares a shown line with one of the output.
func sameLine(want, got string) bool {
	want, got = strings.TrimRight(want, " "), strings.TrimRight(got, " ")
	parts := strings.Split(strings.ReplaceAll(want, "…", "..."), "...")
	for k, p := range parts {
		i := strings.Index(got, p)
		last := k == len(parts)-1
		switch {
		case i < 0, k == 0 && i != 0:
			return false
		case last:
			return strings.HasSuffix(got, p) && (k > 0 || got == p)
		}
		got = got[i+len(p):]
	}
	return false
}

// runPaper carries out the commands of a document in one new folder, in order.
// What builds, tests or fetches is not run: then the paths it names must be
// there. Nor is what is known to run.
func runPaper(t *testing.T, name string, known map[string]bool) {
	root := filepath.Join("..", "..")
	text, err := os.ReadFile(filepath.Join(root, name))
	if os.IsNotExist(err) {
		t.Skipf("%s is not there", name)
	}
	if err != nil {
		t.Fatal(err)
	}
	commands := consoleCommands(string(text))
	if len(commands) == 0 {
		t.Fatalf("%s has no command in a console block", name)
	}
	dir := t.TempDir()
	for _, c := range commands {
		where := fmt.Sprintf("%s:%d: $ %s", name, c.line, c.text)
		words := strings.Fields(c.text)
		if len(words) > 2 && words[0] == "go" && words[1] == "run" && words[2] == "./cmd/alidade" {
			words = append([]string{"alidade"}, words[3:]...)
			c.text = strings.Replace(c.text, "go run ./cmd/alidade", "alidade", 1)
		}
		switch words[0] {
		case "alidade", "cat", "head", "ls", "cd", "mkdir", "cp", "printf":
			if testing.Short() || known[c.text] {
				continue
			}
			out, errs, err := shell(dir, c.text)
			if err != nil {
				t.Errorf("%s: %v\n%s", where, err, errs)
				continue
			}
			lines := strings.Split(strings.TrimSuffix(string(out), "\n"), "\n")
			if missing, ok := matches(c.shown, lines); !ok {
				t.Errorf("%s: the document shows %q, the output is\n%s", where, missing, out)
			}
		case "go", "git", "sudo", "apt-get":
			for _, w := range words[1:] {
				if p, ok := strings.CutPrefix(w, "./"); ok {
					mustExist(t, where, filepath.Join(root, strings.TrimSuffix(strings.TrimSuffix(p, "..."), "/")))
				}
			}
		default:
			if !strings.HasPrefix(words[0], "scripts/") && !strings.HasPrefix(words[0], ".ci/") {
				t.Errorf("%s: a command that this test does not know", where)
				continue
			}
			mustExist(t, where, filepath.Join(root, words[0]))
		}
	}
}

// shell runs a command line and returns its standard output and error. What is
// shown beneath a command is its standard output: progress depends on the
// machine.
func shell(dir, text string) (out []byte, errs string, err error) {
	cmd := exec.Command("sh", "-c", text)
	cmd.Dir = dir
	cmd.Env = append(os.Environ(), "COLUMNS=80")
	var stdout, stderr bytes.Buffer
	cmd.Stdout, cmd.Stderr = &stdout, &stderr
	err = cmd.Run()
	return stdout.Bytes(), stderr.String(), err
}

func mustExist(t *testing.T, where, path string) {
	t.Helper()
	if _, err := os.Stat(path); err != nil {
		t.Errorf("%s: %v", where, err)
	}
}

func TestReadmeCommandsRunAndShowWhatTheyPrint(t *testing.T) {
	if !long() {
		t.Skip("every command of the README: set ALIDADE_LONG=1, as scripts/check does")
	}
	runPaper(t, "README.md", nil)
}

// The table of commands has every verb, with a line of its own.
func TestReadmeListsEveryCommand(t *testing.T) {
	text, err := os.ReadFile(filepath.Join("..", "..", "README.md"))
	if err != nil {
		t.Fatal(err)
	}
	_, table, _ := strings.Cut(string(text), "## The commands\n")
	table, _, _ = strings.Cut(table, "\n## ")
	rows := strings.Count(table, "\n| `alidade ")
	for _, v := range verbs() {
		if n := strings.Count(table, "\n| `alidade "+v.name+"`") + strings.Count(table, "\n| `alidade "+v.name+" "); n != 1 {
			t.Errorf("alidade %s stands %d times in the README's table of commands, want once", v.name, n)
		}
	}
	if rows != len(verbs()) {
		t.Errorf("%d rows, %d commands", rows, len(verbs()))
	}
}

func TestReadmeForDevelopersNamesCommandsThatExist(t *testing.T) {
	// The README shows the demo, and what it prints.
	runPaper(t, "DEVELOPERS.md", map[string]bool{"alidade demo": true})
}

func TestConsoleBlocksAreReadAsTheyAreWritten(t *testing.T) {
	text := "# x\n\n```console\n$ alidade a \\\n    --b c\nout 1\n\nout 2\n\n$ alidade d\n```\n\n```sh\n$ not this\n```\n$ nor this\n```console\n$ last\n```\n"
	got := fmt.Sprintf("%#v", consoleCommands(text))
	want := fmt.Sprintf("%#v", []command{{4, "alidade a --b c", []string{"out 1", "", "out 2"}}, {10, "alidade d", nil}, {18, "last", nil}})
	if got != want {
		t.Errorf("%s, want %s", got, want)
	}
}

func TestShownOutputMayLeaveOutLinesAndNothingElse(t *testing.T) {
	output := []string{"one", "two 2.50 s", "three", "four"}
	for _, c := range []struct {
		shown string
		ok    bool
	}{
		{"", true}, {"one|two 2.50 s|three|four", true}, {"one|two 2.50 s|three", false}, {"one|...|four", true},
		{"…", true}, {"...|four", true}, {"one|…", true}, {"one|two ... s|...", true}, {"one|two …|...", true},
		{"one|three|four", false}, {"two 2.50 s|...", false}, {"one|...|five", false}, {"one|two ... m|...", false},
		{"...|three", false}, {"one|two 2.5|...", false}, {"...|wo 2.50 s|...", false},
	} {
		var shown []string
		if c.shown != "" {
			shown = strings.Split(c.shown, "|")
		}
		if missing, ok := matches(shown, output); ok != c.ok {
			t.Errorf("%q: %v (%q), want %v", c.shown, ok, missing, c.ok)
		}
	}
}

// Every example of a help text runs, in a folder with the files that the
// examples speak of.
func TestHelpExamplesRun(t *testing.T) {
	if !long() {
		t.Skip("every example of every --help: set ALIDADE_LONG=1, as scripts/check does")
	}
	dir := t.TempDir()
	quay := strings.Replace(scenario.Demo(), "duration_s: 12", "duration_s: 6", 1)
	if err := os.WriteFile(filepath.Join(dir, "quay.yaml"), []byte(quay), 0o666); err != nil {
		t.Fatal(err)
	}
	if _, errs, err := shell(dir, "alidade simulate quay.yaml --out roof && cp roof/take.wav roof_07.wav && cp roof/take.wav roof_08.wav && cp roof/rig.yaml roof.yaml"); err != nil {
		t.Fatalf("%v\n%s", err, errs)
	}
	night := "rig: roof.yaml\ntakes: [\"roof_0?.wav\"]\nsteer: {toward: 60, noise: 0..2}\n"
	if err := os.WriteFile(filepath.Join(dir, "night.yaml"), []byte(night), 0o666); err != nil {
		t.Fatal(err)
	}
	for _, v := range verbs() {
		ran := 0
		for _, line := range strings.Split(v.help, "\n") {
			text, ok := strings.CutPrefix(strings.TrimSpace(line), "$ ")
			if !ok {
				continue
			}
			ran++
			out, errs, err := shell(dir, text)
			if err != nil || len(out) == 0 {
				t.Errorf("alidade %s --help: $ %s: %v, %d bytes of output\n%s", v.name, text, err, len(out), errs)
			}
		}
		if ran == 0 {
			t.Errorf("alidade %s --help: no example that begins with $", v.name)
		}
	}
}
