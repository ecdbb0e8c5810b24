package report

import (
	"bytes"
	"errors"
	"fmt"
	"strings"
	"testing"

	"github.com/jedib0t/go-pretty/v6/text"

	"alidade/pkg/pipeline"
)

func summary(t testing.TB, r *pipeline.Result, width int) []string {
	t.Helper()
	var b bytes.Buffer
	if err := Summary(&b, r, width); err != nil {
		t.Fatal(err)
	}
	return strings.Split(strings.TrimSuffix(b.String(), "\n"), "\n")
}

func TestSummaryReadsAsWritten(t *testing.T) {
	const want = `rig 60.0°, compass 042° true: SNR gain 7.9 dB (95 %: 7.2 to 8.6); warning: chan…
a line of microphones hears every direction of a cone around its axis alike:
front and back, above and below cannot be told apart
 mean of the             noise  target   SNR  gain predicted in
 bands, dB              change  change  gain     diffuse, white  remarks
 rumble 50–100 Hz         -0.9    -0.2   0.7         1.2,   8.5  rig small 1/4
 low 125–400 Hz           -2.6    -0.2   2.4         2.9,   8.5
 middle 500 Hz–1.6 kHz    -6.4    -0.2   6.2         6.7,   8.5
 high 2–5 kHz             -8.8    -0.2   8.6         9.1,   8.5  grating 1/5
 top 6.3–16 kHz           -9.0    -0.2   8.8         9.3,   8.5  grating
overall, dB: speech-weighted SNR gain 8.3, A-weighted noise reduction 8.4,
  target change -0.2, SNR gain over best microphone M4 7.1
warning: channel 6 (M6) is 11.4 dB below the others: check its gain, or run
  calibrate
info: the source is 1.2 m away: levels differ by 2.1 dB along the rig
wrote out/yard_03_az+060.0.wav (pcm24, 1440000 frames, peak -11.2 dBFS)`
	if got := strings.Join(summary(t, goodTake(), 80), "\n"); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
}

func TestFirstLineHoldsDirectionGainIntervalAndFirstCaution(t *testing.T) {
	r := goodTake()
	r.Findings = append([]pipeline.Finding{{Code: "x", Severity: pipeline.Info, Message: "remark"}}, r.Findings...)
	r.Findings = append(r.Findings, pipeline.Finding{Code: "dead", Severity: pipeline.Error, Message: "channel 1 is silent"})
	first := summary(t, r, 120)[0]
	if want := "rig 60.0°, compass 042° true: SNR gain 7.9 dB (95 %: 7.2 to 8.6); error: channel 1 is silent"; first != want {
		t.Errorf("got  %s\nwant %s", first, want)
	}
	r.Findings = nil
	r.Steer = pipeline.Steer{AzimuthDeg: -88.24, ElevationDeg: -12.3, PointM: &[3]float64{0.455, 1.154, -0.0001}}
	r.Overall = pipeline.Overall{NoiseReductionDB: f(4.25)}
	if first, want := summary(t, r, 120)[0], "point 0.46, 1.15, 0.00 m (-88.2° down 12.3°): noise reduction 4.2 dB"; first != want {
		t.Errorf("got  %s\nwant %s", first, want)
	}
	r.Steer = pipeline.Steer{AzimuthDeg: 12, CompassDeg: f(359.7)}
	r.Direction = &pipeline.Direction{StandardErrorDeg: f(0.34)}
	r.Overall = pipeline.Overall{}
	if first, want := summary(t, r, 120)[0], "rig 12.0°, compass 000° true ± 0.3°: gain not measured"; first != want {
		t.Errorf("got  %s\nwant %s", first, want)
	}
}

// A point with angles and compass is longer than a line has room for beside the
// gain: the gain stays whole, and the direction follows.
func TestFirstLineKeepsTheGainBesideALongDirection(t *testing.T) {
	r := goodTake()
	r.Steer.PointM, r.Steer.AzimuthDeg, r.Steer.ElevationDeg, r.Steer.CompassDeg = &[3]float64{-10.5, 0.4, 0.2}, 177.8, 1.1, f(302)
	r.Findings = []pipeline.Finding{{Code: "x", Severity: pipeline.Warning, Message: "look at channel 3"}}
	for width, want := range map[int][]string{
		130: {"point -10.50, 0.40, 0.20 m (rig 177.8° up 1.1°, compass 302° true): SNR gain 7.9 dB (95 %: 7.2 to 8.6); warning: look at channel 3"},
		80: {"point -10.50, 0.40, 0.20 m: SNR gain 7.9 dB (95 %: 7.2 to 8.6); warning: look a…",
			"in full: point -10.50, 0.40, 0.20 m (rig 177.8° up 1.1°, compass 302° true)"},
	} {
		lines := summary(t, r, width)
		if got := lines[:len(want)]; strings.Join(got, "\n") != strings.Join(want, "\n") {
			t.Errorf("width %d: got\n%s\nwant\n%s", width, strings.Join(got, "\n"), strings.Join(want, "\n"))
		}
		if len(lines) > SummaryLines {
			t.Errorf("width %d: %d lines", width, len(lines))
		}
	}
	r.Steer.PointM, r.Steer.ElevationDeg = nil, -12.34
	lines := summary(t, r, 60)
	if want := "177.8° down 12.3°: SNR gain 7.9 dB (95 %: 7.2 to 8.6); warn…"; lines[0] != want {
		t.Errorf("got %q, want %q", lines[0], want)
	}
	if want := "in full: rig 177.8° down 12.3°, compass 302° true"; lines[1] != want {
		t.Errorf("got %q, want %q", lines[1], want)
	}
}

// A gain over some of the bands is said to be one: the noise of the others is
// not in it, and with that noise it would be smaller.
func TestGainOfSomeBandsIsSaidToBeThat(t *testing.T) {
	r := goodTake()
	r.Findings = nil
	for i := range 4 {
		r.Bands[i].SNRGainDB, r.Bands[i].SNRGainCI95, r.Bands[i].TargetChangeDB = nil, nil, nil
	}
	if first, want := summary(t, r, 120)[0], "rig 60.0°, compass 042° true: SNR gain 7.9 dB (95 %: 7.2 to 8.6) in 22 of 26 bands"; first != want {
		t.Errorf("got  %s\nwant %s", first, want)
	}
	if got, want := lead(r), "stands out by 7.9 dB (95 %: 7.2 to 8.6) more in 22 of 26 bands. In the other bands"; !strings.Contains(got, want) {
		t.Errorf("lead %q, want %q in it", got, want)
	}
	r.Overall = pipeline.Overall{NoiseReductionDB: f(4)}
	r.Bands[0].NoiseReductionDB = nil
	if first, want := summary(t, r, 120)[0], "noise reduction 4.0 dB in 25 of 26 bands"; !strings.HasSuffix(first, want) {
		t.Errorf("got  %s\nwant %s", first, want)
	}
	if got := lead(goodTake()); strings.Contains(got, "other bands") {
		t.Errorf("all bands are measured: %q", got)
	}
}

func TestSummaryKeepsItsLinesAndItsWidth(t *testing.T) {
	r := goodTake()
	long := strings.Repeat("a finding that goes on and on about 音 and so forth ", 12)
	for i := range 40 {
		r.Findings = append(r.Findings, pipeline.Finding{Code: "x", Severity: pipeline.Warning, Message: fmt.Sprintf("%d %s", i, long)})
	}
	r.Findings = append(r.Findings, pipeline.Finding{Code: "x", Severity: pipeline.Error, Message: strings.Repeat("w", 500)})
	for _, width := range []int{0, 60, 80, 81, 132} {
		lines := summary(t, r, width)
		if len(lines) > SummaryLines {
			t.Errorf("width %d: %d lines, want at most %d", width, len(lines), SummaryLines)
		}
		if !strings.Contains(strings.Join(lines, "\n"), "more findings in the report") {
			t.Errorf("width %d: nothing says that there are more findings", width)
		}
		limit := width
		if width == 0 {
			limit = 80
		}
		for _, line := range lines {
			if w := text.StringWidthWithoutEscSequences(line); w > limit {
				t.Errorf("width %d: %d cells in %q", width, w, line)
			}
		}
	}
	for n := range 8 {
		r.Findings = r.Findings[:n]
		if lines := summary(t, r, 80); len(lines) > SummaryLines {
			t.Errorf("%d findings: %d lines", n, len(lines))
		}
		r = goodTake()
		for range n + 1 {
			r.Findings = append(r.Findings, pipeline.Finding{Severity: pipeline.Warning, Message: long})
		}
	}
}

func TestSummaryOfNothingStillSaysSo(t *testing.T) {
	lines := summary(t, &pipeline.Result{}, 80)
	if len(lines) != 1 || lines[0] != "0.0°: gain not measured" {
		t.Errorf("got %q", lines)
	}
	lines = summary(t, bareTake(), 80)
	if !strings.Contains(lines[0], "gain not measured; warning: no stretch of noise") {
		t.Errorf("first line %q", lines[0])
	}
}

func TestTextFromFilesCannotSteerTheTerminal(t *testing.T) {
	r := goodTake()
	r.Overall.BestMicrophone = "M4\x1b[31m\u202e"
	r.Output.Path = "out/\x1b]0;x\x07\na.wav"
	r.Findings[0].Message = "a\rb\x9bc\u2066d"
	var b bytes.Buffer
	if err := Summary(&b, r, 80); err != nil {
		t.Fatal(err)
	}
	for _, c := range b.String() {
		if c != '\n' && (c < ' ' || c >= 0x7f && c < 0xa0 || c == '\u202e' || c == '\u2066') {
			t.Errorf("character %#x got through in\n%q", c, b.String())
		}
	}
}

type brokenWriter struct{ after int }

func (w *brokenWriter) Write(p []byte) (int, error) {
	if w.after -= len(p); w.after < 0 {
		return 0, errDisk
	}
	return len(p), nil
}

var errDisk = errors.New("disk full")

func TestAWriterThatFailsIsReported(t *testing.T) {
	for name, write := range map[string]func(w *brokenWriter) error{
		"JSON":    func(w *brokenWriter) error { return JSON(w, goodTake()) },
		"CSV":     func(w *brokenWriter) error { return CSV(w, goodTake()) },
		"Summary": func(w *brokenWriter) error { return Summary(w, goodTake(), 80) },
	} {
		if err := write(&brokenWriter{after: 10}); !errors.Is(err, errDisk) {
			t.Errorf("%s on a full disk gave %v", name, err)
		}
	}
}
