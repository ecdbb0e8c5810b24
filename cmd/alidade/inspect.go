package main

import (
	"fmt"
	"io"
	"strings"
	"time"
	"unicode"

	"github.com/urfave/cli/v2"

	"alidade/pkg/pipeline"
	"alidade/pkg/report"
	"alidade/pkg/wav"
)

const inspectHelp = `alidade inspect: what a take's header and metadata say

Usage
  alidade inspect TAKE... [--json]

Example
  $ alidade inspect roof_07.wav

Container, encoding, length, time reference, bext, iXML, texts, cues and chunks
of each file, and whatever is odd about it. No sample is read. A name with
{ch} in it stands for a set of files, "roof_07_{ch}.wav".

Options
  --json      one JSON document: files[] with path and what was found, or
              path and error
  --help, -h  this text
`

func inspectVerb() verb {
	return verb{
		name: "inspect", does: "what a take's header and metadata say",
		help:  inspectHelp,
		flags: func() []cli.Flag { return []cli.Flag{&cli.BoolFlag{Name: "json"}} },
		run:   runInspect,
	}
}

// unreadable is a file of inspect that could not be read.
type unreadable struct {
	Path  string `json:"path"`
	Error string `json:"error"`
}

func runInspect(u *ui, c *cli.Context) error {
	if c.NArg() == 0 {
		return &usageError{fmt.Errorf("inspect: no take: name at least one WAV file"), "alidade inspect --help shows its options"}
	}
	document := struct {
		Files []any `json:"files"`
	}{[]any{}}
	var failed []error
	count := 0
	for _, arg := range c.Args().Slice() {
		files, err := pipeline.Files(arg)
		if err != nil {
			count++
			failed = append(failed, err)
			document.Files = append(document.Files, unreadable{arg, pathFirst(err, err.Error())})
			u.complain(err)
			continue
		}
		for _, path := range files {
			count++
			d, err := pipeline.Describe(path)
			if err != nil {
				failed = append(failed, err)
				document.Files = append(document.Files, unreadable{path, pathFirst(err, err.Error())})
				u.complain(err)
				continue
			}
			document.Files = append(document.Files, d)
			if !c.Bool("json") {
				if count > 1+len(failed) {
					u.print("\n")
				}
				describe(u.stdout, d, u.width())
			}
		}
	}
	if c.Bool("json") {
		if err := report.WriteJSON(u.stdout, document); err != nil {
			return err
		}
	}
	switch {
	case len(failed) == 0:
		return nil
	case len(failed) < count:
		return &missedError{exitSome, fmt.Errorf("%d of %d files could not be read", len(failed), count)}
	}
	return &missedError{exitNothing, nil}
}

// most bounds the cues, texts and chunks that the readable form lists; the JSON
// form has all.
const most = 20

// describe writes a description for people, in lines of at most width columns.
func describe(w io.Writer, d wav.Description, width int) {
	fmt.Fprintln(w, harmless(d.Path))
	line := func(what, format string, a ...any) {
		text := harmless(fmt.Sprintf(format, a...))
		for k, part := range folded(text, max(20, width-16)) {
			if k > 0 {
				what = ""
			}
			fmt.Fprintf(w, "  %-12s  %s\n", harmless(what), part)
		}
	}
	kind := string(d.Container)
	if d.Extensible {
		kind += " (extensible)"
	}
	bits := ""
	if d.ValidBits != d.Bits {
		bits = fmt.Sprintf(", %d of %d bits in use", d.ValidBits, d.Bits)
	}
	line("sound", "%s, %s%s, %s at %d Hz", kind, d.Encoding, bits, plural(d.Channels, "channel"), d.Rate)
	line("length", "%s (%d frames)", clock(d.Frames, d.Rate), d.Frames)
	if d.StartTime != "" {
		text := d.StartTime
		if d.Timecode != "" {
			text += ", timecode " + d.Timecode
		}
		line("starts at", "%s", text)
	}
	if b := d.Bext; b != nil {
		for _, f := range []struct{ what, text string }{
			{"description", b.Description}, {"originator", strings.TrimSpace(b.Originator + " " + b.OriginatorReference)},
			{"recorded", strings.TrimSpace(b.OriginationDate + " " + b.OriginationTime)},
		} {
			if f.text != "" {
				line(f.what, "%s", strings.TrimSpace(f.text))
			}
		}
		line("bext", "version %d, time reference %d", b.Version, b.TimeReference)
		for _, h := range strings.Split(strings.TrimSpace(b.CodingHistory), "\n") {
			if h = strings.TrimSpace(h); h != "" {
				line("history", "%s", h)
			}
		}
	}
	if x := d.IXML; x != nil {
		for _, f := range []struct{ what, text string }{
			{"project", x.Project}, {"scene", x.Scene}, {"take", x.Take}, {"tape", x.Tape}, {"note", x.Note},
			{"set", strings.TrimSpace(x.FileSet.FamilyName + " " + x.FileSet.Index)},
		} {
			if f.text != "" {
				line(f.what, "%s", f.text)
			}
		}
		if x.FileSet.TotalFiles > 1 {
			line("files of set", "%d", x.FileSet.TotalFiles)
		}
	}
	var names []string
	for k, n := range d.TrackNames {
		if n != "" {
			names = append(names, fmt.Sprintf("%d %s", k+1, n))
		}
	}
	if len(names) > 0 {
		line("tracks", "%s", strings.Join(names, ", "))
	}
	for k, e := range d.Info {
		if k == most {
			line("", "and %d more texts", len(d.Info)-most)
			break
		}
		line(e.ID, "%s", e.Text)
	}
	for k, q := range d.Cues {
		if k == most {
			line("", "and %d more cues", len(d.Cues)-most)
			break
		}
		text := fmt.Sprintf("%.3f s", float64(q.Frame)/float64(d.Rate))
		if q.Frames > 0 {
			text += fmt.Sprintf(", for %.3f s", float64(q.Frames)/float64(d.Rate))
		}
		line("cue", "%s", strings.TrimSpace(text+" "+q.Label+" "+q.Note))
	}
	var chunks []string
	for k, ch := range d.Chunks {
		if k == most {
			chunks = append(chunks, fmt.Sprintf("and %d more", len(d.Chunks)-most))
			break
		}
		chunks = append(chunks, fmt.Sprintf("%s %d", strings.TrimSpace(ch.ID), ch.Size))
	}
	line("chunks", "%s (bytes)", strings.Join(chunks, ", "))
	for k, warning := range d.Warnings {
		if k == most {
			line("", "and %d more warnings", len(d.Warnings)-most)
			break
		}
		line("warning", "%s", warning)
	}
}

// plural is a number and what it counts.
func plural(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

// clock is a length as H:MM:SS.sss.
func clock(frames int64, rate int) string {
	ms := frames/int64(rate)*1000 + frames%int64(rate)*1000/int64(rate)
	d := time.Duration(ms) * time.Millisecond
	return fmt.Sprintf("%d:%02d:%02d.%03d", int(d.Hours()), int(d.Minutes())%60, int(d.Seconds())%60, ms%1000)
}

// harmless makes the text of a file or a name fit for a terminal: no control
// characters, which could move the cursor or change colours, and no ends of
// lines.
func harmless(text string) string {
	return strings.Map(func(r rune) rune {
		switch {
		case r == '\n' || r == '\r' || r == '\t':
			return ' '
		case !unicode.IsPrint(r):
			return '?'
		}
		return r
	}, text)
}

// folded cuts a text into lines of at most width columns, at blanks where there
// are any.
func folded(text string, width int) []string {
	var list []string
	rest := []rune(strings.TrimSpace(text))
	for len(rest) > width {
		cut := width
		for k := width; k > width/2; k-- {
			if rest[k] == ' ' {
				cut = k
				break
			}
		}
		list = append(list, strings.TrimSpace(string(rest[:cut])))
		rest = []rune(strings.TrimSpace(string(rest[cut:])))
	}
	return append(list, string(rest))
}
