package scenario

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
)

// leadFrames is how many frames before the take the sound field begins, so
// that late and drifting channels hear it too.
const leadFrames = 2 * render.HopFrames

// plan is a scenario made ready to render.
type plan struct {
	sc     *Scenario
	frames int64
	mics   []rig.Point // where they really are, in the order of the rig file
	ref    rig.Point
	air    acoustics.Air
	speed  float64
	room   *render.Chamber // nil outdoors

	tracks     []*render.Track
	banks      []*render.Bank // of sources that stand still, else nil
	direct     []*render.Bank // their direct sound alone
	gains      []float64      // amplitude of each source
	levels     []float64      // level of each source, dBFS
	recordings [][]float64    // of sources of kind file
	shapes     [][]float64    // spectra of sources of kind noise, nil for white
	diffuse    []*render.Diffuse
	kernel     *render.Table // for whatever moves or drifts
	channels   []render.Strip
	lead       int64
}

// newPlan prepares a scenario that Validate has found sound.
func newPlan(sc *Scenario, opt Options) (*plan, error) {
	p := &plan{sc: sc, frames: sc.frames(), ref: sc.Rig.ReferencePoint(), air: sc.air()}
	p.speed = p.air.Speed()
	p.place()
	if sc.Room != nil {
		room, err := newChamber(sc.Room, p.air, sc.RateHz)
		if err != nil {
			return nil, fmt.Errorf("scenario: room: %w", err)
		}
		p.room = room
		for m, at := range p.mics {
			if !room.Holds(at) {
				return nil, fmt.Errorf("scenario: room: microphone %q at %s lies outside the room", sc.Rig.Mics[m].Name, placeText(at))
			}
		}
	}
	for i := range sc.Sources {
		if err := p.addSource(&sc.Sources[i], opt); err != nil {
			return nil, fmt.Errorf("scenario: source %q: %w", sc.Sources[i].Name, err)
		}
	}
	for i, d := range sc.Diffuse {
		if err := p.addDiffuse(i, d); err != nil {
			return nil, fmt.Errorf("scenario: diffuse noise %d: %w", i+1, err)
		}
	}
	if err := p.setLevels(); err != nil {
		return nil, err
	}
	p.wire()
	p.kernel = render.DirectTable()
	return p, p.findClipping()
}

// place puts the microphones where they really are.
func (p *plan) place() {
	scale := or(p.sc.PositionScale, 1)
	rng := render.Stream(p.sc.Seed, "places", 0)
	for _, m := range p.sc.Rig.Mics {
		at := m.At.Scale(scale)
		if s := p.sc.MisplacedMM / 1000; s > 0 {
			at = at.Add(rig.Point{X: s * rng.NormFloat64(), Y: s * rng.NormFloat64(), Z: s * rng.NormFloat64()})
		}
		for _, f := range p.sc.Faults {
			if f.MovedMM != nil && f.names(m.Channel) {
				at = at.Add(rig.Point{X: f.MovedMM[0], Y: f.MovedMM[1], Z: f.MovedMM[2]}.Scale(0.001))
			}
		}
		p.mics = append(p.mics, at)
	}
}

// names reports whether the fault is one of a channel, counted from 1.
func (f *Fault) names(ch int) bool {
	if len(f.Channels) == 0 {
		return true
	}
	for _, c := range f.Channels {
		if c == ch {
			return true
		}
	}
	return false
}

// addSource prepares where a source is and what reaches the microphones.
func (p *plan) addSource(s *Source, opt Options) error {
	tr := newTrack(s, p.ref, p.speed)
	extent := rig.Spread(append([]rig.Point{p.ref}, p.mics...)).Extent
	if v := tr.Fastest(extent); v > 0.3*p.speed {
		return fmt.Errorf("moves at %.4g m/s, more than 0.3 of the speed of sound", v)
	}
	const nearest = 0.01 // metres
	if !tr.Far {
		for i, t := range tr.Times {
			for m, at := range p.mics {
				if d := tr.Point(t).Distance(at); d < nearest {
					return fmt.Errorf("place %d is %.3g mm from microphone %q, nearer than 10 mm", i+1, d*1000, p.sc.Rig.Mics[m].Name)
				}
			}
			if p.room != nil && !p.room.Holds(tr.Point(t)) {
				return fmt.Errorf("place %d at %s lies outside the room", i+1, placeText(tr.Point(t)))
			}
		}
		if tr.Origin < nearest {
			return fmt.Errorf("at time 0 it is %.3g mm from the reference point, nearer than 10 mm", tr.Origin*1000)
		}
	} else if p.room != nil {
		return fmt.Errorf("a far source cannot be in a room: give it distance_m or point_m")
	}
	p.tracks = append(p.tracks, tr)
	var bank, direct *render.Bank
	if !tr.Moves() {
		direct = render.DirectBank(tr, p.mics, p.sc.RateHz)
		bank = direct
		if p.room != nil {
			bank = render.Sum(direct, p.room.Responses(tr.Point(0), p.mics, tr.Origin))
		}
	}
	p.banks, p.direct = append(p.banks, bank), append(p.direct, direct)
	var recording []float64
	if s.Kind == KindFile {
		if opt.Sound == nil {
			return fmt.Errorf("file %q: nobody provides recordings", s.File)
		}
		rate, x, err := opt.Sound(s.File)
		if err != nil {
			return fmt.Errorf("file %q: %w", s.File, err)
		}
		if rate < 1000 || rate > MaxRateHz {
			return fmt.Errorf("file %q: %d frames per second, want 1000 to %d", s.File, rate, MaxRateHz)
		}
		for i, v := range x {
			if math.IsNaN(float64(v)) || math.IsInf(float64(v), 0) {
				return fmt.Errorf("file %q: frame %d is %g", s.File, i, v)
			}
		}
		most := int(math.Ceil(p.sc.DurationS*float64(rate))) + render.KernelTaps
		recording = render.Resample(x[:min(len(x), most)], rate, p.sc.RateHz)
	}
	p.recordings = append(p.recordings, recording)
	p.shapes = append(p.shapes, render.Shape(s.Spectrum, p.sc.RateHz))
	return nil
}

// maxFilterValues bounds the memory of the filters of diffuse noise.
const maxFilterValues = 1 << 26

func (p *plan) addDiffuse(i int, d Diffuse) error {
	count := len(p.mics)
	inputs, length := count, 4096
	if d.Method == MethodWaves {
		inputs, length = or(d.Waves, 512), 1024
	}
	if extent := rig.Spread(p.mics).Extent; float64(length) < 16*extent/p.speed*float64(p.sc.RateHz) {
		length = int(16 * extent / p.speed * float64(p.sc.RateHz))
	}
	if values := count * inputs * length; values > maxFilterValues {
		return fmt.Errorf("%d microphones and %d noises need %d filter values, more than %d", count, inputs, values, maxFilterValues)
	}
	f := &render.Diffuse{Shape: render.Shape(d.Spectrum, p.sc.RateHz)}
	if d.Method == MethodWaves {
		f.Bank = render.WaveBank(d.Field, p.mics, p.ref, inputs, p.sc.RateHz, p.speed, render.Stream(p.sc.Seed, "waves", i))
	} else {
		f.Bank = render.MixingBank(d.Field, p.mics, p.sc.RateHz, p.speed)
	}
	g := math.Sqrt(render.PowerOfDBFS(d.LevelDBFS))
	for _, row := range f.Bank.Taps {
		for _, h := range row {
			for t := range h {
				h[t] *= g
			}
		}
	}
	p.diffuse = append(p.diffuse, f)
	return nil
}

// setLevels finds the amplitude of every source.
func (p *plan) setLevels() error {
	var noise float64
	for _, d := range p.sc.Diffuse {
		noise += render.PowerOfDBFS(d.LevelDBFS)
	}
	if p.sc.SensorDBFS != nil {
		noise += render.PowerOfDBFS(*p.sc.SensorDBFS)
	}
	for i := range p.sc.Sources {
		if s := &p.sc.Sources[i]; s.role() == RoleInterferer {
			noise += render.PowerOfDBFS(*s.LevelDBFS)
		}
	}
	for i := range p.sc.Sources {
		s := &p.sc.Sources[i]
		level := 0.0
		if s.LevelDBFS != nil {
			level = *s.LevelDBFS
		} else {
			if noise == 0 {
				return fmt.Errorf("scenario: source %q: snr_db without any noise: state level_dbfs", s.Name)
			}
			level = render.DBFSOfPower(noise) + *s.SNRDB
		}
		p.levels = append(p.levels, level)
	}
	gains, err := p.calibrate(p.sc.Seed, p.frames, false)
	p.gains = gains
	return err
}

// calibrate returns the amplitude that gives each source its level in the mean
// over the time it is on. For fresh noise targets get none, and an interferer
// that is not on within its length may be silent.
func (p *plan) calibrate(seed uint64, frames int64, fresh bool) ([]float64, error) {
	var gains []float64
	buffer := make([]float64, render.HopFrames)
	for i := range p.sc.Sources {
		s := &p.sc.Sources[i]
		if fresh && s.role() == RoleTarget {
			gains = append(gains, 0)
			continue
		}
		sig, calibrated, err := p.signal(i, seed, 0)
		if err != nil {
			return nil, fmt.Errorf("scenario: %w", err)
		}
		power := 1.0
		if !calibrated {
			var energy float64
			for at := int64(0); at < frames; at += render.HopFrames {
				part := buffer[:min(render.HopFrames, frames-at)]
				sig.Next(part)
				for _, v := range part {
					energy += v * v
				}
			}
			sounding := frames
			if s.Kind == KindFile { // it is over when the recording is
				sounding = min(frames, int64(len(p.recordings[i])))
			}
			power = energy / float64(onFrames(s, p.sc.RateHz, sounding))
			if power == 0 && fresh {
				power = 1
			}
			if !(power > 0) {
				return nil, fmt.Errorf("scenario: source %q: it is silent while it is on", s.Name)
			}
		}
		gains = append(gains, math.Sqrt(render.PowerOfDBFS(p.levels[i])/power))
	}
	return gains, nil
}

// onFrames is how many of the first frames of a source it is on, at least 1.
func onFrames(s *Source, rate int, frames int64) int64 {
	if s.OnS == nil {
		return frames
	}
	var n int64
	for _, on := range s.OnS {
		from, to := int64(math.Round(on[0]*float64(rate))), int64(math.Round(on[1]*float64(rate)))
		n += max(0, min(to, frames)-max(from, 0))
	}
	return max(n, 1)
}

// part says what of a take is rendered.
type part int

const (
	partTarget part = iota // all targets
	partDirect             // their direct sound alone
	partNoise              // all else
)

// emitters returns what makes up a part of the sound field from frame first on.
func (p *plan) emitters(what part, seed uint64, gains []float64, first int64) []render.Emitter {
	var all []render.Emitter
	for i := range p.sc.Sources {
		s := &p.sc.Sources[i]
		if (s.role() == RoleInterferer) != (what == partNoise) {
			continue
		}
		tr, bank := p.tracks[i], p.banks[i]
		moverLead, walkLead := int64(0), int64(0)
		var longest int64
		if bank != nil {
			longest = bank.Lead()
		} else {
			moverLead = render.MoverLead(tr, p.mics, first, p.sc.RateHz)
			if p.room != nil {
				walkLead = render.WalkLead(p.room, tr)
			}
			longest = max(moverLead, walkLead)
		}
		// All that sounds from a source begins at one frame, whatever part of it is
		// wanted, so that its random signal is the same.
		dry := func(lead int64) render.Mono {
			sig, _, err := p.signal(i, seed, first-longest)
			if err != nil {
				panic("scenario: " + err.Error()) // newPlan has been through every kind
			}
			return render.Skip(&render.Scaled{In: sig, Gain: gains[i]}, longest-lead)
		}
		if bank == nil {
			all = append(all, render.NewMover(tr, p.mics, p.sc.RateHz, first, dry(moverLead), p.kernel))
			if p.room != nil && what != partDirect {
				all = append(all, render.NewWalker(p.room, tr, p.mics, first, dry(walkLead)))
			}
			continue
		}
		if what == partDirect {
			bank = p.direct[i]
		}
		all = append(all, render.NewMixer(bank, []render.Mono{dry(bank.Lead())}))
	}
	if what == partNoise {
		for i, d := range p.diffuse {
			all = append(all, d.Emitter(seed, i))
		}
	}
	return all
}

// placeText shows a place in rig coordinates.
func placeText(p rig.Point) string { return fmt.Sprintf("(%.3g, %.3g, %.3g) m", p.X, p.Y, p.Z) }
