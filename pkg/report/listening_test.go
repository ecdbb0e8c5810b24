package report

import (
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/chromedp"
)

func TestListeningSwitchesWithoutMovingThePlayhead(t *testing.T) {
	ctx := browser(t)
	heard := listen(t, ctx)
	visit(t, ctx, save(t, "good", page(t, picturedTake())), 1280)
	const state = `(() => { const d = document.querySelector("#player").dataset; return {Playing: d.playing === "1", Side: d.side, Position: +d.position, Levels: document.querySelector("#player").alidadeLevels()}; })()`
	type player struct {
		Playing  bool
		Side     string
		Position float64
		Levels   []float64
	}
	read := func() player { return eval[player](t, ctx, state) }
	wait := func(what string, ok func(p player) bool) player {
		t.Helper()
		for range 100 {
			if p := read(); ok(p) {
				return p
			}
			time.Sleep(20 * time.Millisecond)
		}
		t.Fatalf("waited in vain for: %s; %+v", what, read())
		return player{}
	}
	key := func(keys string) {
		t.Helper()
		if err := chromedp.Do(ctx, chromedp.KeyEvent(keys)); err != nil {
			t.Fatal(err)
		}
	}
	if p := read(); p.Playing || p.Position != 0 {
		t.Fatalf("the page plays by itself: %+v", p)
	}
	key(" ")
	after := wait("the track to sound", func(p player) bool { return p.Playing && p.Position > 0.3 && p.Levels[1] > 0.02 })
	if after.Side != "output" || after.Levels[0] > 1e-4 {
		t.Errorf("at first %s sounds, levels %v", after.Side, after.Levels)
	}
	// The playhead against the clock of the sound, over a switch and the
	// pictures after it.
	drift := eval[float64](t, ctx, `new Promise(done => {
		const clock = document.querySelector("#player").alidadeClock, a = clock();
		document.dispatchEvent(new KeyboardEvent("keydown", {key: "x"}));
		let n = 0; const step = () => { if (++n < 12) { requestAnimationFrame(step); return; } const b = clock(); done(Math.abs((b[0] - a[0]) - (b[1] - a[1])) + (b[1] > a[1] ? 0 : 1)); };
		requestAnimationFrame(step); })`, chromedp.EvalAwaitPromise)
	if drift > 0.005 {
		t.Errorf("over a switch the playhead moved %.1f ms against the sound", 1000*drift)
	}
	before := wait("the reference to sound", func(p player) bool { return p.Side == "reference" && p.Levels[0] > 0.02 && p.Levels[1] < 1e-4 })
	if before.Position < after.Position {
		t.Errorf("the playhead went back from %g to %g", after.Position, before.Position)
	}
	// And against the clock of the page: what is played is played in real time.
	real := eval[float64](t, ctx, `new Promise(done => { const clock = document.querySelector("#player").alidadeClock, p0 = clock()[0], t0 = performance.now();
		document.querySelector("#sides [data-side=output]").click();
		setTimeout(() => done((clock()[0] - p0) - (performance.now() - t0) / 1000), 250); })`, chromedp.EvalAwaitPromise)
	if math.Abs(real) > 0.05 {
		t.Errorf("in a quarter of a second the playhead moved %.0f ms too far", 1000*real)
	}
	key("j") // back to the beginning, and on
	wait("the jump back", func(p player) bool { return p.Playing && p.Position < 0.6 })
	key(" ")
	stopped := wait("the pause", func(p player) bool { return !p.Playing })
	time.Sleep(60 * time.Millisecond)
	if again := read(); again.Position != stopped.Position {
		t.Errorf("paused, the playhead moved from %g to %g", stopped.Position, again.Position)
	}
	// Only the louder one is turned down, by the stated offset.
	offset := eval[string](t, ctx, `document.querySelector("#match option").textContent`)
	if want := "equal level (before "; !strings.HasPrefix(offset, want) {
		t.Errorf("the offset reads %q", offset)
	}
	// Blind: the labels tell nothing, a guess is judged.
	judged := eval[string](t, ctx, `document.querySelector("#blind").click(); const labels = [...document.querySelectorAll("#sides button")].map(b => b.textContent).join();
		document.querySelector("#guess button").click(); labels + " " + document.querySelector("#say").textContent`)
	if !strings.HasPrefix(judged, "X,Y Right: 1 of 1") && !strings.HasPrefix(judged, "X,Y Wrong: 0 of 1") {
		t.Errorf("blind: %q", judged)
	}
	heard.Lock()
	defer heard.Unlock()
	if len(heard.said) > 0 {
		t.Errorf("listening said %v", heard.said)
	}
}

// What is heard says itself where it stands in the excerpt: the playhead of the
// page against it, before, between and after switches, and after a jump. One
// quantum of the sound (128 frames, Web Audio API 1.0, section 1.1) may lie
// between the two.
func TestPlayheadIsThatOfWhatIsHeard(t *testing.T) {
	ctx := browser(t)
	r := picturedTake()
	r.Preview = ramps()
	visit(t, ctx, save(t, "ramps", page(t, r)), 1280)
	eval[bool](t, ctx, `(m => { m.value = "none"; m.dispatchEvent(new Event("change")); return true; })(document.querySelector("#match"))`)
	eval[bool](t, ctx, `document.querySelector("#play").click(); true`)
	var offs []float64
	for k, action := range []string{"", `x`, `x`, `x`, "jump"} {
		switch action {
		case "x":
			eval[bool](t, ctx, `document.dispatchEvent(new KeyboardEvent("keydown", {key: "x"})); true`)
		case "jump":
			eval[bool](t, ctx, `(s => { s.value = 1.7; s.dispatchEvent(new Event("input")); return true; })(document.querySelector("#seek"))`)
		}
		// Once ramps are over: the smallest of a few offsets, a busy machine reads late.
		heard := eval[[]float64](t, ctx, `new Promise(done => { const p = document.querySelector("#player"); let best = null, n = 0; const look = () => {
			if (p.dataset.playing !== "1") { setTimeout(look, 10); return; }
			const h = p.alidadeHeard(), one = Math.abs(h[1]) > Math.abs(h[2]) ? [h[0], h[1], 0] : [h[0], -h[2], 1];
			const other = Math.min(Math.abs(h[1]), Math.abs(h[2]));
			if (other === 0 && one[1] > 0) { const off = one[0] - (one[1] / `+fmt.Sprint(rampSlope)+` - 1); if (best === null || Math.abs(off) < Math.abs(best[0])) best = [off, one[2]]; n++; }
			if (n < 8) setTimeout(look, 15); else done(best);
		}; setTimeout(look, 120); })`, chromedp.EvalAwaitPromise)
		offs = append(offs, heard[0])
		if want := float64((k + 1) % 2); k < 4 && heard[1] != want {
			t.Errorf("after %d switches track %g is heard", k, heard[1])
		}
	}
	for k, off := range offs {
		if math.Abs(off) > 0.005 {
			t.Errorf("after %d actions the playhead stands %.1f ms from what is heard", k, 1000*off)
		}
	}
	t.Logf("playhead against what is heard: %.2f ms", 1000*offs[0])
}
