package pipeline

import (
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/calibration"
	"alidade/pkg/rig"
)

// maxRigBytes bounds a rig file; real ones are a few kilobytes.
const maxRigBytes = 4 << 20

// rigHint says what helps where a rig file cannot be used.
const rigHint = "alidade schema rig says what a rig file holds"

// loadedRig is a rig with the files it came from and the air in force.
type loadedRig struct {
	*rig.Rig
	digest string // SHA-256 of the rig file
	// positions is the SHA-256 of the CSV file that it names for the places of
	// the microphones, empty without one.
	positions string
	files     []string
	air       acoustics.Air
	speed     float64 // m/s
	rule      string  // where the speed comes from
	// centre is the reference point where microphones were left out on the way,
	// which does not move it; else nil.
	centre *rig.Point
}

// ReferencePoint is that of the rig file, whatever was left out since.
func (l *loadedRig) ReferencePoint() rig.Point {
	if l.centre != nil {
		return *l.centre
	}
	return l.Rig.ReferencePoint()
}

// without is the rig without the microphones of the given indices.
func (l *loadedRig) without(mics []int) *loadedRig {
	out := *l
	ref := l.ReferencePoint()
	out.centre = &ref
	changed := *l.Rig
	changed.Mics = slices.Clone(l.Mics)
	for _, m := range mics {
		changed.Mics[m].Use = false
	}
	out.Rig = &changed
	return &out
}

// loadRig reads the rig file at path, with the reference point and the air of
// the options in place of its own.
func loadRig(path string, o Options) (*loadedRig, error) {
	data, err := readSmall(path, maxRigBytes)
	if err != nil {
		hint := rigHint
		if hinted := (*HintedError)(nil); errors.As(unreadable(err), &hinted) {
			hint = hinted.Hint
		}
		return nil, &UsageError{Err: fmt.Errorf("rig: %w", err), Hint: hint}
	}
	l := &loadedRig{digest: digestOf(data), files: []string{path}}
	var beside hash.Hash // of the files that it names
	open := func(name string) (io.ReadCloser, error) {
		if !filepath.IsAbs(name) {
			name = filepath.Join(filepath.Dir(path), name)
		}
		in, err := openInput(name, false)
		if err != nil {
			return nil, err
		}
		l.files = append(l.files, name)
		if beside == nil {
			beside = sha256.New()
		}
		return struct {
			io.Reader
			io.Closer
		}{io.TeeReader(in, beside), in}, nil
	}
	if l.Rig, err = rig.Load(path, data, open); err != nil {
		return nil, &UsageError{Err: err, Hint: rigHint}
	}
	if beside != nil {
		l.positions = hex.EncodeToString(beside.Sum(nil))
	}
	if o.ReferencePoint != "" {
		m, found := l.Find(o.ReferencePoint)
		switch {
		case o.ReferencePoint == rig.CentreReference:
		case !found:
			return nil, &UsageError{Err: fmt.Errorf("--reference-point %q: rig %s has no microphone of that name", o.ReferencePoint, l.Name), Hint: l.namesHint() + ", or centre"}
		case !l.Mics[m].Use:
			return nil, &UsageError{Err: fmt.Errorf("--reference-point %q: the rig file leaves that microphone out", o.ReferencePoint), Hint: l.namesHint() + ", or centre"}
		}
		l.Reference = o.ReferencePoint
	}
	l.air = acoustics.DryAir(20)
	for _, from := range []rig.Air{l.Air, {TemperatureC: o.TemperatureC, HumidityPct: o.HumidityPct, PressureKPa: o.PressureKPa}} {
		for _, v := range []struct {
			given *float64
			into  *float64
		}{{from.TemperatureC, &l.air.TemperatureC}, {from.HumidityPct, &l.air.HumidityPct}, {from.PressureKPa, &l.air.PressureKPa}} {
			if v.given != nil {
				*v.into = *v.given
			}
		}
	}
	if err := l.air.Validate(); err != nil {
		return nil, &UsageError{Err: fmt.Errorf("air: %w", err), Hint: "correct air in the rig file or the air options, or give --speed-of-sound"}
	}
	l.speed, l.rule = l.air.Speed(), l.air.SpeedRule()
	if o.SpeedOfSound != nil {
		l.speed, l.rule = *o.SpeedOfSound, "given"
	}
	return l, nil
}

// corrected returns the used microphones of a take in rig order, with gain and
// polarity corrections.
func (l *loadedRig) corrected(src audio.Source) (audio.Source, error) {
	return l.correctedFrom(src, 0)
}

// correctedFrom is corrected for a src that begins with frame first of the take.
func (l *loadedRig) correctedFrom(src audio.Source, first int64) (audio.Source, error) {
	used := l.Used()
	order, gain := make([]int, len(used)), make([]float64, len(used))
	for i, m := range used {
		order[i], gain[i] = l.Mics[m].Channel-1, l.Mics[m].Factor()
	}
	out, err := audio.Map(src, order, gain)
	if err != nil {
		return nil, err
	}
	if out, err = l.onOneClock(out, first); err != nil {
		return nil, err
	}
	return l.evened(out)
}

// evened returns the used microphones in rig order with their response filters,
// as they are where the rig has none.
func (l *loadedRig) evened(src audio.Source) (audio.Source, error) {
	used := l.Used()
	taps, some := make([][]float64, len(used)), false
	for i, m := range used {
		v := l.Mics[m].Response
		if v == nil {
			continue
		}
		if rate := src.Format().Rate; v.RateHz != rate {
			return nil, &UsageError{
				Err:  fmt.Errorf("rig %s: microphone %q: its response filter is made for %d Hz, the take has %d Hz", l.Name, l.Mics[m].Name, v.RateHz, rate),
				Hint: "calibrate --responses with a take of that rate, or leave response out of the rig file",
			}
		}
		taps[i], some = v.Taps, true
	}
	if !some {
		return src, nil
	}
	return calibration.Undo(src, taps)
}

// namesHint lists the used microphones as a remedy.
func (l *loadedRig) namesHint() string {
	var names []string
	for _, m := range l.Used() {
		names = append(names, l.Mics[m].Name)
	}
	const most = 12
	if n := len(names); n > most {
		names = append(names[:most], fmt.Sprintf("%d more", n-most))
	}
	return "give one of " + strings.Join(names, ", ")
}

// readSmall reads a whole regular file of at most limit bytes.
func readSmall(path string, limit int64) ([]byte, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, err
	}
	if !info.Mode().IsRegular() {
		return nil, fmt.Errorf("%s: is %s, not a file", path, kindOf(info.Mode()))
	}
	if info.Size() > limit {
		return nil, fmt.Errorf("%s: %d bytes, want at most %d", path, info.Size(), limit)
	}
	return os.ReadFile(path)
}

// summary is the rig as the report gives it.
func (l *loadedRig) summary() RigSummary {
	ref := l.ReferencePoint()
	s := RigSummary{
		Name: l.Name, SHA256: l.digest, PositionsSHA256: l.positions, MicrophonesUsed: len(l.Used()), Reference: l.Reference,
		ReferencePointM: [3]float64{ref.X, ref.Y, ref.Z},
		SpeedOfSoundMS:  l.speed, SpeedRule: l.rule, Air: l.air.String(),
		Shape: rig.Spread(l.Positions()).Shape.String(),
	}
	if s.Reference == "" {
		s.Reference = rig.CentreReference
	}
	for _, m := range l.Mics {
		polarity := "normal"
		if m.Inverted {
			polarity = "inverted"
		}
		s.Mics = append(s.Mics, RigMic{
			Name: m.Name, Channel: m.Channel, AtM: [3]float64{m.At.X, m.At.Y, m.At.Z},
			GainDB: m.GainDB, DelayUS: m.Delay * 1e6, ClockPPM: m.ClockPPM, Polarity: polarity, Used: m.Use, SensitivityDBFS: m.SensitivityDBFS,
		})
	}
	return s
}
