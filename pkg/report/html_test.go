package report

import (
	"bytes"
	"crypto/sha256"
	"encoding/base64"
	"fmt"
	"math"
	"regexp"
	"strings"
	"testing"
	"time"

	"alidade/pkg/pipeline"
)

// hostileTake has texts from files that try to be more than texts.
func hostileTake() *pipeline.Result {
	r := followedTake()
	const script = `<script>window.hacked=1</script><img src=x onerror="window.hacked=1">"'><svg onload=window.hacked=1>`
	turn := "\u202eabc\u2066\u0000\u001b[31m"
	long := strings.Repeat("a very long name ", 600)
	r.Take.Files[0].Path = "takes/" + script + turn + ".wav"
	r.Rig.Name = long + script
	r.Rig.Reference = script
	r.Rig.Air, r.Rig.SpeedRule, r.Version, r.Take.Encoding, r.Take.StartTime, r.CreatedUTC = script, script, script, script, script, script
	r.Steer.Ambiguity, r.Steer.Method, r.Steer.Weights, r.Steer.Kind = script+long, script, script, script
	r.Segments.Source = script
	for i := range r.Rig.Mics {
		r.Rig.Mics[i].Name = script + turn
		r.Channels[i].Name = strings.Repeat("x", 10000)
		r.Channels[i].Flags = []string{script}
	}
	r.Findings = append(r.Findings, pipeline.Finding{Code: script, Severity: "fatal", Message: script + turn + strings.Repeat("m", 10000)})
	r.Bands[3].Flags = []string{script, "grating"}
	r.Overall.BestMicrophone = script
	r.Output.Path, r.Output.ReadBack = script, script
	r.Provenance.Command = []string{"alidade", "steer", script, "</script>", "javascript:alert(1)"}
	r.Provenance.Kernel = script
	return r
}

func TestHostileTextsStayTexts(t *testing.T) {
	for name, text := range map[string]string{"take": string(page(t, hostileTake())), "folder": string(hostileFolder(t))} {
		if n := strings.Count(strings.ToLower(text), "<script"); n != 1 {
			t.Errorf("%s: %d scripts, want its own", name, n)
		}
		for _, bad := range []string{"<img src=x", "<svg onload", "\u202e", "\u2066", "\x1b", "\x00", `href="javascript:`} {
			if strings.Contains(text, bad) {
				t.Errorf("%s: %q got through", name, bad)
			}
		}
		if len(text) > 1500000 {
			t.Errorf("%s: %d bytes", name, len(text))
		}
	}
}

func hostileFolder(t *testing.T) []byte {
	t.Helper()
	var b bytes.Buffer
	r := hostileTake()
	err := Index(&b, "<script>x</script>\u202e", "<script>", []Entry{
		{Name: r.Take.Files[0].Path, Link: "javascript:alert(1)", Result: r}, {Name: `"><script>x</script>`, Failure: "<script>\x1b"}, {Name: strings.Repeat("n", 10000), Result: &pipeline.Result{}},
	})
	if err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestPolicyAllowsTheStyleAndTheScriptOfThePageAndNothingElse(t *testing.T) {
	for name, text := range map[string]string{"take": string(page(t, goodTake())), "folder": string(folderPage(t, 3))} {
		m := regexp.MustCompile(`http-equiv="Content-Security-Policy" content="([^"]*)"`).FindStringSubmatch(text)
		if m == nil {
			t.Fatalf("%s: no policy", name)
		}
		got := strings.NewReplacer("&#39;", "'", "&#43;", "+", "&#34;", `"`).Replace(m[1])
		hash := func(tag string) string {
			_, rest, _ := strings.Cut(text, "<"+tag+">")
			inside, _, _ := strings.Cut(rest, "</"+tag+">")
			sum := sha256.Sum256([]byte(inside))
			return "'sha256-" + base64.StdEncoding.EncodeToString(sum[:]) + "'"
		}
		want := "default-src 'none'; img-src data:; style-src " + hash("style") + "; script-src " + hash("script") + "; base-uri 'none'; form-action 'none'"
		if got != want {
			t.Errorf("%s: policy\n%s\nwant\n%s", name, got, want)
		}
		for _, bad := range []string{"http://", "https://", "style=\"", "onclick", "unsafe-inline"} {
			if i := strings.Index(text, bad); i >= 0 {
				t.Errorf("%s: %q in it: %.80s", name, bad, text[i:])
			}
		}
	}
}

func TestPageIsMadeOfTheReportAlone(t *testing.T) {
	for name, r := range map[string]*pipeline.Result{"good": picturedTake(), "bare": bareTake(), "bad": badRig(), "followed": followedTake()} {
		back, err := Read("x.report.json", reportText(t, r))
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if !bytes.Equal(page(t, back), page(t, r)) {
			t.Errorf("%s: the page of the report differs from the page of the result", name)
		}
		if !bytes.Equal(page(t, r), page(t, r)) {
			t.Errorf("%s: two pages of one result differ", name)
		}
	}
}

// Of a take of a minute, as large as its pictures are meant to be.
func TestPageIsSmallAndQuicklyWritten(t *testing.T) {
	r := picturedTake()
	r.Preview = nil
	for _, s := range []*pipeline.Spectrogram{r.Pictures.Reference, r.Pictures.Output} {
		rows, columns := s.Levels.Rows, 1200
		old := s.Levels
		s.Levels = grid(rows, columns, old.LowDB, old.HighDB, func(row, column int) float64 { return level(old, row, column/2) })
	}
	start := time.Now()
	text := page(t, r)
	took := time.Since(start)
	if len(text) > 1500000 {
		t.Errorf("%d bytes, want under 1.5 MB", len(text))
	}
	if took > time.Second {
		t.Errorf("took %v, want under 1 s", took)
	}
	t.Logf("%d bytes in %v", len(text), took)
}

func TestAPicturelessOrBrokenPictureIsLeftOut(t *testing.T) {
	for name, change := range map[string]func(p *pipeline.Pictures){
		"bytes missing":      func(p *pipeline.Pictures) { p.Response.Levels.Bytes = p.Response.Levels.Bytes[:10] },
		"rows do not match":  func(p *pipeline.Pictures) { p.Response.Hz = p.Response.Hz[:3] },
		"negative size":      func(p *pipeline.Pictures) { p.Response.Levels.Rows, p.Response.Levels.Columns = -160, -361 },
		"overflowing size":   func(p *pipeline.Pictures) { p.Response.Levels.Rows, p.Response.Levels.Columns = 1<<40, 1<<40 },
		"no range of levels": func(p *pipeline.Pictures) { p.Response.Levels.HighDB = p.Response.Levels.LowDB },
		"no response":        func(p *pipeline.Pictures) { p.Response = nil },
	} {
		r := picturedTake()
		change(r.Pictures)
		if text := string(page(t, r)); strings.Contains(text, `id="response"`) || !strings.Contains(text, "Before: the reference") {
			t.Errorf("%s: the response is drawn, or the rest is not", name)
		}
	}
}

func TestWordsOfTheSummary(t *testing.T) {
	r := goodTake()
	if got := heading(r); got != "7.9 dB clearer toward 60.0°" {
		t.Errorf("heading %q", got)
	}
	const want = "Against the mean microphone the wanted sound stands out by 7.9 dB (95 %: 7.2 to 8.6) more. The noise falls by 8.1 dB, the wanted sound falls by 0.2 dB. " +
		"Every band of 80 Hz–4 kHz gains for certain: its whole interval lies above 0 dB. Distrust 5–16 kHz (grating lobes), 50 Hz (a rig too small for the wavelength)."
	if got := lead(r); got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
	for _, c := range []struct {
		gain, reduction *float64
		kind, want      string
	}{
		{f(-1.24), nil, "given", "1.2 dB less clear toward 60.0°"}, {f(0.01), nil, "given", "No clearer toward 60.0°"}, {nil, f(4), "followed", "4.0 dB less noise toward a moving source"},
		{nil, f(-1), "given", "No less noise toward 60.0°"}, {nil, nil, "given", "Steered toward 60.0°, gain not measured"},
	} {
		r.Overall = pipeline.Overall{SNRGainDB: c.gain, NoiseReductionDB: c.reduction}
		r.Steer.Kind = c.kind
		if got := heading(r); got != c.want {
			t.Errorf("heading %q, want %q", got, c.want)
		}
		negative := c.gain != nil && *c.gain < -0.05 || c.reduction != nil && *c.reduction < 0
		if got := lead(r); strings.Contains(got, " -") != negative || strings.Contains(got, "falls by -") || strings.Contains(got, "more by -") {
			t.Errorf("lead %q", got)
		}
	}
}

func TestStateFollowsTheWorstFinding(t *testing.T) {
	for _, c := range []struct {
		severities []pipeline.Severity
		measured   bool
		want       string
	}{
		{nil, true, "good"}, {nil, false, "caution"}, {[]pipeline.Severity{pipeline.Info}, true, "good"}, {[]pipeline.Severity{pipeline.Info, pipeline.Warning}, true, "caution"},
		{[]pipeline.Severity{pipeline.Warning, pipeline.Error, pipeline.Info}, true, "fault"}, {[]pipeline.Severity{pipeline.Error, pipeline.Warning}, false, "fault"},
	} {
		r := &pipeline.Result{}
		if c.measured {
			r.Overall.SNRGainDB = f(1)
		}
		for _, s := range c.severities {
			r.Findings = append(r.Findings, pipeline.Finding{Severity: s})
		}
		if got := stateOf(r).Word; got != c.want {
			t.Errorf("%v, measured %v: %s, want %s", c.severities, c.measured, got, c.want)
		}
	}
}

// WCAG 2.2, success criterion 1.4.3 and the relative luminance it is defined
// by: 4.5 to 1 for every pair of text and ground in the style.
func TestTextStandsOutFromItsGround(t *testing.T) {
	luminance := func(hex string) float64 {
		if len(hex) == 3 {
			hex = string([]byte{hex[0], hex[0], hex[1], hex[1], hex[2], hex[2]})
		}
		var v [3]int
		if _, err := fmt.Sscanf(hex, "%02x%02x%02x", &v[0], &v[1], &v[2]); err != nil {
			t.Fatalf("colour %q: %v", hex, err)
		}
		sum := 0.0
		for i, weight := range []float64{0.2126, 0.7152, 0.0722} {
			c := float64(v[i]) / 255
			if c <= 0.04045 {
				c /= 12.92
			} else {
				c = math.Pow((c+0.055)/1.055, 2.4)
			}
			sum += weight * c
		}
		return sum
	}
	sets := regexp.MustCompile(`--paper:[^}]*`).FindAllString(pageCSS, -1)
	if len(sets) < 4 {
		t.Fatalf("%d sets of colours", len(sets))
	}
	for _, set := range sets {
		colour := map[string]string{}
		for _, m := range regexp.MustCompile(`--([a-z]+):#([0-9a-f]+)`).FindAllStringSubmatch(set, -1) {
			colour[m[1]] = m[2]
		}
		for _, ground := range []string{"paper", "card"} {
			for _, ink := range []string{"ink", "quiet", "after", "before", "good", "caution", "fault"} {
				a, b := luminance(colour[ground])+0.05, luminance(colour[ink])+0.05
				if contrast := math.Max(a, b) / math.Min(a, b); contrast < 4.5 {
					t.Errorf("%s on %s: %.2f to 1 in %.60s", ink, ground, contrast, set)
				}
			}
		}
	}
}

func TestFolderCountsAndOrders(t *testing.T) {
	text := string(folderPage(t, 10))
	for _, want := range []string{"2 of 10 takes ready to use", "failed or at fault, 4", "caution, 4", "good, 2", "Data chunk at byte 44"} {
		if !strings.Contains(text, want) {
			t.Errorf("no %q in the page", want)
		}
	}
	var order []string
	for _, m := range regexp.MustCompile(`<tr role="row" data-rank="\d" data-state="(\w+)"`).FindAllStringSubmatch(text, -1) {
		order = append(order, m[1])
	}
	if got := strings.Join(order, " "); got != "failed failed fault fault caution caution caution caution good good" {
		t.Errorf("order %s", got)
	}
	var b bytes.Buffer
	if err := Index(&b, "empty", "1", nil); err != nil || !strings.Contains(b.String(), "0 of 0 takes") {
		t.Errorf("an empty folder: %v", err)
	}
	var one bytes.Buffer
	if err := Index(&one, "one", "1", folderOf(1)); err != nil || !strings.Contains(one.String(), "1 of 1 take ready") {
		t.Errorf("a folder of one: %v", err)
	}
}

func BenchmarkHTML(b *testing.B) {
	r := picturedTake()
	for b.Loop() {
		page(b, r)
	}
}
