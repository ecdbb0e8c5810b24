package main

import (
	"bytes"
	"fmt"
	"strings"
	"testing"

	"alidade/pkg/wav"
)

// What a file claims to say cannot reach the terminal as anything but text.
func TestTextsOfFilesAreHarmlessOnATerminal(t *testing.T) {
	hostile := "\x1b]0;owned\x07\x1b[2J\u202eabc\r\nalidade: done\x00\u009b31m"
	d := wav.Description{
		Path: "a" + hostile + ".wav", Container: wav.RIFF, Encoding: wav.PCM24, Bits: 24, ValidBits: 20, Channels: 1, Rate: 48000, Frames: 48000,
		TrackNames: []string{hostile},
		Metadata: wav.Metadata{
			Bext: &wav.Bext{Description: hostile, Originator: hostile, OriginationDate: hostile, CodingHistory: hostile},
			IXML: &wav.IXML{Project: hostile, Scene: hostile, Note: strings.Repeat("long ", 200), FileSet: wav.FileSet{FamilyName: hostile, TotalFiles: 3}},
			Info: []wav.InfoEntry{{ID: "I\x1bM", Text: hostile}},
			Cues: []wav.Cue{{Frame: 24000, Frames: 480, Label: hostile, Note: hostile}},
		},
		Chunks:   []wav.Chunk{{ID: "\x1b[1m", Size: 4}},
		Warnings: []wav.Warning{{Code: "x", Message: hostile}},
	}
	for _, width := range []int{60, 80, 120} {
		var out bytes.Buffer
		describe(&out, d, width)
		for k, line := range strings.Split(out.String(), "\n") {
			for _, r := range line {
				if r < ' ' || r == 0x7f || r >= 0x80 && r < 0xa0 || r == '\u202e' {
					t.Errorf("line %d holds %U: %q", k+1, r, line)
				}
			}
			if n := len([]rune(line)); k > 0 && n > width {
				t.Errorf("line %d of %d columns has %d: %q", k+1, width, n, line)
			}
			if strings.HasPrefix(line, "alidade:") {
				t.Errorf("line %d looks like one of the program: %q", k+1, line)
			}
		}
		for _, want := range []string{"20 of 24 bits in use", "1 channel", "0.500 s, for 0.010 s", "0:00:01.000", "files of set  3"} {
			if !strings.Contains(out.String(), want) {
				t.Errorf("no %q in\n%s", want, out.String())
			}
		}
	}
}

func TestLongListsAreCutShortForPeople(t *testing.T) {
	d := wav.Description{Path: "x.wav", Rate: 8000, Channels: 2}
	for k := range 500 {
		d.Cues = append(d.Cues, wav.Cue{Frame: int64(k)})
		d.Info = append(d.Info, wav.InfoEntry{ID: "ICMT", Text: "x"})
		d.Chunks = append(d.Chunks, wav.Chunk{ID: "abcd"})
		d.Warnings = append(d.Warnings, wav.Warning{Message: "odd"})
	}
	var out bytes.Buffer
	describe(&out, d, 80)
	for _, want := range []string{"and 480 more texts", "and 480 more cues", "and 480 more (bytes)", "and 480 more warnings"} {
		if !strings.Contains(strings.Join(strings.Fields(out.String()), " "), want) {
			t.Errorf("no %q", want)
		}
	}
	if n := strings.Count(out.String(), "\n"); n > 80 {
		t.Errorf("%d lines", n)
	}
}

func TestLengthsAsClock(t *testing.T) {
	for _, c := range []struct {
		frames int64
		rate   int
		want   string
	}{
		{0, 48000, "0:00:00.000"}, {47999, 48000, "0:00:00.999"}, {48000 * 3661, 48000, "1:01:01.000"},
		{384000 * 3600 * 100, 384000, "100:00:00.000"}, {1, 8000, "0:00:00.000"}, {9, 8000, "0:00:00.001"},
	} {
		if got := clock(c.frames, c.rate); got != c.want {
			t.Errorf("%d frames at %d Hz: %s, want %s", c.frames, c.rate, got, c.want)
		}
	}
}

func TestFoldedTextLosesNothingButBlanks(t *testing.T) {
	for _, text := range []string{"", "short", strings.Repeat("word ", 40), strings.Repeat("x", 95), "a " + strings.Repeat("é", 50)} {
		lines := folded(text, 20)
		for _, l := range lines {
			if len([]rune(l)) > 20 {
				t.Errorf("%q is wider than 20", l)
			}
		}
		squeeze := func(s string) string { return strings.ReplaceAll(s, " ", "") }
		if got := squeeze(strings.Join(lines, "")); got != squeeze(text) {
			t.Errorf("%q became %q", text, got)
		}
	}
	if got := fmt.Sprint(folded("one two three four five", 10)); got != "[one two three four five]" || len(folded("one two three four five", 10)) != 3 {
		t.Errorf("%q", folded("one two three four five", 10))
	}
}
