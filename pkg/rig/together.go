package rig

import (
	"errors"
	"fmt"
	"strings"

	"alidade/pkg/sheet"
)

// place says where a microphone stands in its file, and what of it is sound.
type place struct {
	doc   *sheet.Document
	path  string       // microphones[2], or the key of a shorthand
	table *sheet.Table // nil unless it stands in a table
	row   int          // of table

	nameSound    bool // no fault lies on the name
	channelSound bool // nor on the channel
	atSound      bool // nor on the place
}

// fault adds a fault at a key of the microphone.
func (p place) fault(key, format string, args ...any) {
	switch {
	case p.table != nil:
		p.table.Fault(p.row, strings.TrimPrefix(key, "."), format, args...)
	case p.doc.Has(p.path + key):
		p.doc.Fault(p.path+key, format, args...)
	default:
		p.doc.Fault(p.path, format, args...)
	}
}

// name returns what a microphone is called in a fault.
func (p place) name(m Mic) string {
	if m.Name != "" {
		return fmt.Sprintf("%q", m.Name)
	}
	return p.path
}

// together adds the faults that lie between microphones, and between them and
// the rest of the file.
func (l *loader) together(r *Rig, at func(m int) place) {
	names, channels := map[string]int{}, map[int]int{}
	for m, mic := range r.Mics {
		p := at(m)
		if mic.Name == CentreReference {
			p.fault(".name", "the name %s stands for the mean of the microphones", CentreReference)
		} else if first, twice := names[mic.Name]; mic.Name != "" && twice {
			p.fault(".name", "the name %q is given twice, first in channel %d", mic.Name, r.Mics[first].Channel)
		} else {
			names[mic.Name] = m
		}
		if !p.channelSound {
			continue
		}
		if first, twice := channels[mic.Channel]; twice {
			p.fault(".channel", "channel %d is given twice, first to %s", mic.Channel, at(first).name(r.Mics[first]))
		} else {
			channels[mic.Channel] = m
		}
	}
	l.distances(r, at)
	used, sound, named := r.Used(), true, true
	for m := range r.Mics {
		p := at(m)
		named = named && p.nameSound
		sound = sound && p.channelSound && p.atSound // what has faults may have meant anything
	}
	if len(used) < 2 && sound {
		l.doc.Fault("", "%s in use, a beam needs two or more", count(len(used)))
	}
	if r.Reference != CentreReference && l.doc.Has("reference") && named {
		if _, ok := r.Find(r.Reference); !ok {
			l.doc.Fault("reference", "no microphone is named %q, want %s or one of %s", r.Reference, CentreReference, someNames(r))
		}
	}
}

func count(n int) string {
	switch n {
	case 0:
		return "no microphone"
	case 1:
		return "1 microphone"
	}
	return fmt.Sprintf("%d microphones", n)
}

// someNames lists the microphones, a few of them where there are many.
func someNames(r *Rig) string {
	var names []string
	for _, m := range r.Mics {
		if len(names) == 12 {
			names = append(names, "…")
			break
		}
		if m.Name != "" {
			names = append(names, m.Name)
		}
	}
	return strings.Join(names, ", ")
}

// distances adds the faults of microphones too near or too far from each other.
func (l *loader) distances(r *Rig, at func(m int) place) {
	for m := range r.Mics {
		p := at(m)
		if !r.Mics[m].Use || !p.atSound {
			continue
		}
		for q := range m {
			if !r.Mics[q].Use || !at(q).atSound {
				continue
			}
			d := r.Mics[m].At.Distance(r.Mics[q].At)
			switch {
			case d < minApart:
				p.fault(".at_mm", "%.3g mm from %s, want at least %g mm: places are in millimetres (or use: false)", 1000*d, at(q).name(r.Mics[q]), 1000*minApart)
			case d > maxExtent:
				p.fault(".at_mm", "%.4g m from %s, want at most %g m", d, at(q).name(r.Mics[q]), maxExtent)
			default:
				continue
			}
			break // one fault a microphone says enough
		}
	}
}

// CheckTake reports, microphone by microphone, what the rig needs that a take
// of that many channels does not have. Microphones out of use need nothing.
func (r *Rig) CheckTake(channels int) error {
	var faults []error
	for _, m := range r.Used() {
		if mic := r.Mics[m]; mic.Channel > channels {
			has := fmt.Sprintf("%d channels", channels)
			if channels == 1 {
				has = "1 channel"
			}
			faults = append(faults, fmt.Errorf("rig %s: microphone %q: channel %d, but the take has %s", r.Name, mic.Name, mic.Channel, has))
		}
	}
	return errors.Join(faults...)
}
