package bearing

import "math"

// desk is a place where one window is looked at.
type desk struct {
	look       *looker
	sum, noise *crossSum
	noisy      bool // noise is to be taken out
	index      int  // of the window
	window     Window
	mean       float64 // power
	found      []sighting
	held       bool          // a window lies here
	done       chan struct{} // and it has been looked at
}

// mostDesks is how many windows are looked at at once, at most: more would
// cost memory, and the frames need a core too.
const mostDesks = 2

// work looks at the window.
func (p *desk) work() {
	var noise *crossSum
	if p.noisy {
		noise = p.noise
	}
	if p.window.Reason = p.look.load(p.sum, noise); p.window.Reason == "" {
		p.found, p.window.Reason = p.look.look(p.index, p.window.Active)
	}
	p.done <- struct{}{}
}

// collect waits for the window at p, if there is one, and takes what was found
// in it. Windows are collected in order.
func (f *Finder) collect(p *desk) {
	if !p.held {
		return
	}
	<-p.done
	p.held = false
	w := p.window
	if len(p.found) > 0 {
		addTo(f.picture, p.look.firstMap)
		f.pictureWindows++
		for _, d := range p.look.leads {
			d.a, d.b = d.a+len(f.sightings), d.b+len(f.sightings)
			f.leads = append(f.leads, d)
		}
		for _, s := range p.found {
			s.level = p.mean
			inv, _ := s.info.invert(p.look.unknowns(), f.space.lift(s.at))
			at := s.at
			at.kappa = 0 // one window alone gives no distance
			fix := f.space.fix(at, inv, math.Inf(1))
			fix.Confidence = peakConfidence(s.value, s.rest) * agreementFactor(s.fit)
			w.Sources = append(w.Sources, fix)
			if f.detailed >= maxDetailed {
				s.groups = nil
			} else {
				f.detailed++
			}
			f.sightings = append(f.sightings, s)
		}
	}
	if w.Reason != "" {
		f.reasons[w.Reason]++
	}
	f.windows = append(f.windows, w)
}
