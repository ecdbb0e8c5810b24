package report

import (
	"bytes"
	"encoding/csv"
	"fmt"
	"strings"
	"testing"
	"unicode/utf8"

	"alidade/pkg/pipeline"
)

// locatedSample is an invented answer of two sources, one of them near, and
// three times of two tracks.
func locatedSample() *pipeline.Located {
	f := func(v float64) *float64 { return &v }
	b := func(az, el, se float64) pipeline.Bearing {
		return pipeline.Bearing{AzimuthDeg: az, ElevationDeg: el, StandardErrorDeg: f(se), ElevationErrorDeg: f(2 * se), Confidence: f(0.8)}
	}
	near := b(61.94, 12.3, 0.4)
	near.DistanceM, near.DistanceErrorM, near.CompassDeg = f(1.234), f(0.05), f(58.4)
	far := b(-140.04, 0, 3)
	far.CompassDeg = f(359.6)
	return &pipeline.Located{
		Schema: pipeline.LocateSchema, Take: pipeline.Take{Files: []pipeline.File{{Path: "night\x1b[31m_07.wav"}}, DurationS: 2},
		Rig:       pipeline.RigSummary{Name: "ring", Shape: "flat"},
		Search:    pipeline.SearchUsed{WindowS: 0.4, HopS: 0.2, FromHz: 300, ToHz: 5000, Sources: 3},
		Ambiguity: "above and below cannot be told apart",
		Sources:   []pipeline.LocatedSource{{Bearing: near, Windows: 2, Share: 0.7, Track: 1}, {Bearing: far, Windows: 1, Moves: true}},
		Windows: []pipeline.LocatedWindow{
			{StartS: 0, EndS: 0.4, Sources: []pipeline.Bearing{near}}, {StartS: 0.2, EndS: 0.6, Sources: []pipeline.Bearing{}, Reason: "silence"},
			{StartS: 0.4, EndS: 0.8, Sources: []pipeline.Bearing{far, near}}},
		Tracks: []pipeline.LocatedTrack{
			{Windows: 2, Knots: []pipeline.LocatedKnot{{TimeS: 0.2, AzimuthDeg: 62, ElevationDeg: 12, StandardErrorDeg: f(0.5), Heard: true}, {TimeS: 0.4, AzimuthDeg: 62.3, StandardErrorDeg: f(1.5)}}},
			{Windows: 1, Knots: []pipeline.LocatedKnot{{TimeS: 0.6, AzimuthDeg: -140, ElevationDeg: -3, Heard: true}}}},
		Findings: []pipeline.Finding{{Code: "source-moves", Severity: pipeline.Info, Message: "source 2 moves"}},
	}
}

func TestLocatedTextShowsSourcesPathsAndFindings(t *testing.T) {
	var out bytes.Buffer
	if err := LocatedText(&out, locatedSample(), 0); err != nil {
		t.Fatal(err)
	}
	want := `night�[31m_07.wav: 2 sources heard in 2.0 s, 300 to 5000 Hz, windows of 0.40 s

#         azimuth  true      elevation       distance  confidence  heard
1   61.9° ± 0.40°  058°  12.3° ± 0.80°  1.23 ± 0.05 m        0.80   67 %
2  -140.0° ± 3.0°  000°    0.0° ± 6.0°                       0.80   33 %  moves
above and below cannot be told apart

time, s                track 1                 track 2
   0.20  62.0° up 12.0° ± 0.5°
   0.40         (62.3° ± 1.5°)
   0.60                         -140.0° down 3.0° ± –°
(in brackets: carried over a silence)

info: source 2 moves
`
	if got := out.String(); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	for _, width := range []int{60, 80, 120} {
		out.Reset()
		if err := LocatedText(&out, locatedSample(), width); err != nil {
			t.Fatal(err)
		}
		for _, line := range strings.Split(out.String(), "\n") {
			if utf8.RuneCountInString(line) > width {
				t.Errorf("width %d: %q", width, line)
			}
		}
	}
}

// An empty answer still says what was listened to, and why there is nothing.
func TestLocatedTextOfNothing(t *testing.T) {
	r := &pipeline.Located{Take: pipeline.Take{Files: []pipeline.File{{Path: "x.wav"}}, DurationS: 3}, Ambiguity: "front and back cannot be told apart",
		Findings: []pipeline.Finding{{Code: "no-direction", Severity: pipeline.Warning, Message: "no direction found: silence (3 of 3 windows)"}}}
	var out bytes.Buffer
	if err := LocatedText(&out, r, 80); err != nil {
		t.Fatal(err)
	}
	want := "x.wav: no source heard in 3.0 s, 0 to 0 Hz, windows of 0.00 s\nwarning: no direction found: silence (3 of 3 windows)\n"
	if out.String() != want {
		t.Errorf("got %q, want %q", out.String(), want)
	}
}

// Long takes are shown in at most a screen, and it is said that they are.
func TestLocatedTextThinsLongTakes(t *testing.T) {
	r := locatedSample()
	r.Tracks = nil
	for n := range 5 {
		track := pipeline.LocatedTrack{}
		for k := range 500 {
			track.Knots = append(track.Knots, pipeline.LocatedKnot{TimeS: float64(k) * 0.2, AzimuthDeg: float64(10 * n), Heard: true})
		}
		r.Tracks = append(r.Tracks, track)
	}
	var out bytes.Buffer
	if err := LocatedText(&out, r, 80); err != nil {
		t.Fatal(err)
	}
	if n := strings.Count(out.String(), "\n"); n > 40 {
		t.Errorf("%d lines", n)
	}
	if !strings.Contains(out.String(), "3 of 5 tracks, every 4.2 s; --csv and --json have all of it") {
		t.Errorf("nothing says what is left out:\n%s", out.String())
	}
}

func TestLocatedCSVHasEverySourceWindowAndKnot(t *testing.T) {
	var out bytes.Buffer
	if err := LocatedCSV(&out, locatedSample()); err != nil {
		t.Fatal(err)
	}
	rows, err := csv.NewReader(&out).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var kinds []string
	for _, row := range rows[1:] {
		kinds = append(kinds, row[0]+row[1])
	}
	if got, want := strings.Join(kinds, " "), "source1 source2 window1 window1 window2 track1 track1 track2"; got != want {
		t.Errorf("rows %s, want %s", got, want)
	}
	want := []string{
		"[kind number start_s end_s azimuth_deg elevation_deg compass_deg distance_m standard_error_deg elevation_error_deg confidence heard]",
		"[source 1 0 2 61.94 12.3 58.4 1.234 0.4 0.8 0.8 true]",
	}
	for i, w := range want {
		if got := fmt.Sprint(rows[i]); got != w {
			t.Errorf("row %d: %s, want %s", i, got, w)
		}
	}
	if got := fmt.Sprint(rows[8]); got != "[track 2 0.4 0.8 -140 -3      true]" {
		t.Errorf("a knot without an error: %s", got)
	}
}
