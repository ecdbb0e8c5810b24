package main

import (
	"encoding/json"
	"fmt"
	"time"

	"alidade/pkg/batch"
)

// nightWatch shows how a batch goes on: lines of JSON where standard error is
// no terminal.
type nightWatch struct {
	u       *ui
	quiet   bool
	bar     progress // nil for lines
	standby time.Time
}

// statusEvery is the rhythm of status lines.
const statusEvery = 30 * time.Second

func (u *ui) nightWatch(quiet bool) *nightWatch {
	w := &nightWatch{u: u, quiet: quiet, standby: u.now()}
	if _, ok := terminal(u.stderr); ok && u.env("TERM") != "dumb" && !quiet {
		w.bar = u.progress(false)
	}
	return w
}

// event is a line of JSON.
type event struct {
	At       string      `json:"at"` // RFC 3339
	Event    string      `json:"event"`
	Take     string      `json:"take,omitempty"`
	State    batch.State `json:"state,omitempty"`
	Cause    string      `json:"cause,omitempty"`
	Error    string      `json:"error,omitempty"`
	TookS    float64     `json:"took_s,omitempty"`
	Takes    int         `json:"takes,omitempty"`
	Standing int         `json:"standing,omitempty"`
	Others   int         `json:"other_runs,omitempty"`
	Open     *int        `json:"open,omitempty"`
	Need     int64       `json:"need_bytes,omitempty"`
	Free     *int64      `json:"free_bytes,omitempty"`
}

func (w *nightWatch) say(e event) {
	if w.quiet || w.bar != nil {
		return
	}
	e.At = w.u.now().UTC().Format(time.RFC3339)
	if text, err := json.Marshal(e); err == nil {
		w.u.remark("%s", text)
	}
}

func (w *nightWatch) observer() batch.Observer {
	committed := 0
	return batch.Observer{
		Begun: func(takes, standing, others int) {
			committed = standing
			if others > 0 && w.bar != nil {
				w.u.remark("another run is at work in this folder: the takes are shared")
			}
			w.say(event{Event: "begun", Takes: takes, Standing: standing, Others: others})
		},
		Short: func(need, free int64) {
			if w.bar != nil || w.quiet {
				w.u.remark("alidade: %s", shortWords(need, free))
			}
			w.say(event{Event: "short-of-room", Need: need, Free: &free})
		},
		Step: func(t batch.Take, stage string, done, total int64) {
			if now := w.u.now(); now.Sub(w.standby) >= statusEvery {
				w.standby = now
				w.say(event{Event: "status", Take: t.Key, Takes: committed})
			}
		},
		Finished: func(t batch.Take, o *batch.Outcome, took time.Duration, tally batch.Tally) {
			committed++
			e := event{Event: "take", Take: t.Key, State: "elsewhere", TookS: took.Round(time.Millisecond).Seconds(), Open: &tally.Open}
			if o != nil {
				e.State, e.Cause, e.Error = o.State, o.Cause, o.Error
			}
			w.say(e)
			if w.bar != nil {
				if o != nil && o.State != batch.Done {
					w.bar.finish()
					w.u.remark("%s: %s: %s", t.Key, o.State, o.Error)
				}
				w.bar.step("takes", int64(tally.Takes-tally.Open), int64(tally.Takes))
			}
		},
		Left: func(t batch.Take, err error) {
			w.say(event{Event: "open", Take: t.Key, Error: err.Error()})
		},
	}
}

// shortWords says that the outputs may not find room.
func shortWords(need, free int64) string {
	return fmt.Sprintf("the outputs need up to %.1f MB, %.1f MB are free", float64(need)/1e6, float64(free)/1e6)
}

func (w *nightWatch) close() {
	if w.bar != nil {
		w.bar.finish()
	}
}
