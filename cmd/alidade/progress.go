package main

import (
	"fmt"
	"io"
	"time"

	"github.com/vbauerster/mpb/v8"
	"github.com/vbauerster/mpb/v8/decor"
)

// progress shows how far a run is. It is used from one goroutine.
type progress interface {
	// step says that done of total frames of what are through. A total of 0 or
	// below is not known.
	step(what string, done, total int64)
	// finish clears away what is on the screen.
	finish()
}

// progress returns what fits standard error: nothing when quiet, a bar on a
// terminal, plain lines elsewhere.
func (u *ui) progress(quiet bool) progress {
	if quiet {
		return silent{}
	}
	if _, ok := terminal(u.stderr); ok && u.env("TERM") != "dumb" {
		return &bar{out: u.stderr}
	}
	return &lines{out: u.stderr, now: u.now, started: u.now()}
}

// silent shows nothing.
type silent struct{}

func (silent) step(string, int64, int64) {}
func (silent) finish()                   {}

// The rhythm of plain lines: one every lineEvery, and one at each lineShare of
// the whole if the last one is at least lineGap old, so that a short run says
// nothing and a long one is not silent for minutes.
const (
	lineEvery = 5 * time.Second
	lineGap   = 2 * time.Second
	lineShare = 10 // per cent
)

// lines shows plain lines.
type lines struct {
	out     io.Writer
	now     func() time.Time
	started time.Time
	last    time.Time // of the last line
	what    string
	tenths  int64
}

func (l *lines) step(what string, done, total int64) {
	now := l.now()
	if what != l.what {
		l.what, l.tenths = what, 0
	}
	if l.last.IsZero() {
		l.last = l.started
	}
	since := now.Sub(l.last)
	var percent int64
	if total > 0 {
		percent = 100 * min(done, total) / total
	}
	if since < lineEvery && (since < lineGap || percent/lineShare <= l.tenths) {
		return
	}
	l.last, l.tenths = now, percent/lineShare
	spent := now.Sub(l.started).Round(time.Second)
	if total > 0 {
		fmt.Fprintf(l.out, "%s: %d %% after %s\n", what, percent, spent)
	} else {
		fmt.Fprintf(l.out, "%s: %d frames after %s\n", what, done, spent)
	}
}

func (l *lines) finish() {}

// bar shows one bar on a terminal, for one thing after the other.
type bar struct {
	out     io.Writer
	options []mpb.ContainerOption // more of them, for tests
	all     *mpb.Progress
	now     *mpb.Bar
	what    string
	total   int64
}

func (b *bar) step(what string, done, total int64) {
	if b.all == nil {
		options := append([]mpb.ContainerOption{mpb.WithOutput(b.out), mpb.WithWidth(72)}, b.options...)
		b.all = mpb.New(options...)
	}
	if b.now == nil || what != b.what {
		b.clear()
		b.what, b.total = what, total
		b.now = b.all.New(max(total, 0), mpb.BarStyle().Lbound("[").Filler("=").Tip(">").Padding(" ").Rbound("]"),
			mpb.BarRemoveOnComplete(),
			mpb.PrependDecorators(decor.Name(what+" ")),
			mpb.AppendDecorators(decor.Percentage(decor.WC{W: 5})))
	}
	if total != b.total && total > 0 {
		b.total = total
		b.now.SetTotal(total, false)
	}
	b.now.SetCurrent(done)
}

// clear takes the bar off the screen.
func (b *bar) clear() {
	if b.now != nil {
		b.now.Abort(true)
		b.now = nil
	}
}

func (b *bar) finish() {
	b.clear()
	if b.all != nil {
		b.all.Wait()
		b.all = nil
	}
}
