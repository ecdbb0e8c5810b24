package report

import (
	"bytes"
	"context"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"
	"time"

	"github.com/chromedp/chromedp"

	"alidade/pkg/audio"
	"alidade/pkg/pipeline"
	"alidade/pkg/wav"
)

// steered runs a take of a line of four through the pipeline: a minute of noise
// that differs from channel to channel, and a tone from broadside that comes
// and goes every five seconds.
func steered(t *testing.T) (r *pipeline.Result, page, text []byte, html time.Duration) {
	t.Helper()
	const rate, seconds = 16000, 60
	dir := t.TempDir()
	rigPath, take := filepath.Join(dir, "rig.yaml"), filepath.Join(dir, "take.wav")
	if err := os.WriteFile(rigPath, []byte("rig: four\nline: {count: 4, spacing_mm: 50}\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	file, err := os.Create(take)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	w, err := wav.NewWriter(file, wav.Format{Rate: rate, Channels: 4, Encoding: wav.PCM16}, wav.Option{})
	if err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(21, 22))
	b := audio.NewBlock(4, rate*seconds)
	for i := range b.Frames() {
		tone := 0.0
		if i/(5*rate)%2 == 1 {
			tone = 0.05 * math.Sin(2*math.Pi*700*float64(i)/rate)
		}
		for ch := range 4 {
			b.Channel(ch)[i] = float32(tone + 0.01*rng.NormFloat64())
		}
	}
	if err := w.Write(b); err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	render := pipeline.Renderers{
		pipeline.ReportJSON: JSON, pipeline.ReportCSV: CSV,
		pipeline.ReportHTML: func(w io.Writer, r *pipeline.Result) error {
			from := time.Now()
			defer func() { html = time.Since(from) }()
			return HTML(w, r, Assets{})
		},
	}
	spec := pipeline.Spec{Take: []string{take}, RigPath: rigPath, Version: "test", Options: pipeline.Options{Toward: "90", Noise: "0..5,10..15,20..25", Preview: true, Out: filepath.Join(dir, "y.wav")}}
	if r, err = pipeline.Run(context.Background(), spec, render, pipeline.Watch{}); err != nil {
		t.Fatal(err)
	}
	for name, into := range map[string]*[]byte{"y.html": &page, "y.report.json": &text} {
		if *into, err = os.ReadFile(filepath.Join(dir, name)); err != nil {
			t.Fatal(err)
		}
	}
	return r, page, text, html
}

// The page of a real run: made again of its JSON report to the byte, small,
// quickly written, quiet in a browser, and both of its excerpts play.
func TestPageOfARun(t *testing.T) {
	r, made, text, took := steered(t)
	back, err := Read("y.report.json", text)
	if err != nil {
		t.Fatal(err)
	}
	if again := page(t, back); !bytes.Equal(again, made) {
		t.Error("the page made of the JSON report is another one")
	}
	silent := *r
	silent.Preview = nil
	bare := page(t, &silent)
	t.Logf("page %d bytes, %d without sound, report %d bytes; written in %v", len(made), len(bare), len(text), took)
	if len(bare) > 1500000 || took > 5*time.Second {
		t.Errorf("%d bytes in %v", len(bare), took)
	}
	if r.Preview == nil || r.Preview.EndS-r.Preview.StartS != 20 {
		t.Fatalf("preview %+v", r.Preview)
	}

	ctx := browser(t)
	heard := listen(t, ctx)
	visit(t, ctx, save(t, "run", made), 1280)
	eval[bool](t, ctx, `document.querySelector("#play").click(); true`)
	levels := func(side string) []float64 {
		return eval[[]float64](t, ctx, `new Promise(done => { document.querySelector("#sides [data-side=`+side+`]").click(); const p = document.querySelector("#player"); let n = 0;
			const look = () => { const l = p.alidadeLevels(); if (p.dataset.playing === "1" && p.dataset.side === "`+side+`" && l["`+side+`" === "reference" ? 0 : 1] > 1e-3 && l["`+side+`" === "reference" ? 1 : 0] < 1e-6 || ++n > 200) done(l); else setTimeout(look, 20); };
			setTimeout(look, 100); })`, chromedp.EvalAwaitPromise)
	}
	if l := levels("output"); l[1] < 1e-3 || l[0] > 1e-6 {
		t.Errorf("after: levels %v", l)
	}
	if l := levels("reference"); l[0] < 1e-3 || l[1] > 1e-6 {
		t.Errorf("before: levels %v", l)
	}
	// The pictures are there, of the sizes that the report has.
	sizes := eval[[]int](t, ctx, `Promise.all([...document.querySelectorAll(".heat image")].map(i => { const m = new Image(); m.src = i.getAttribute("href"); return m.decode().then(() => [m.naturalWidth, m.naturalHeight]); })).then(l => l.flat())`, chromedp.EvalAwaitPromise)
	p := r.Pictures
	want := []int{p.Reference.Levels.Columns, p.Reference.Levels.Rows, p.Output.Levels.Columns, p.Output.Levels.Rows, p.Response.Levels.Columns, p.Response.Levels.Rows}
	if len(sizes) != len(want) {
		t.Fatalf("%d sizes of pictures, want %d", len(sizes), len(want))
	}
	for i := range want {
		if sizes[i] != want[i] {
			t.Errorf("sizes of pictures %v, want %v", sizes, want)
			break
		}
	}
	heard.Lock()
	defer heard.Unlock()
	for _, s := range heard.said {
		t.Errorf("the page said: %.300s", s)
	}
}
