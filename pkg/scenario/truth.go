package scenario

import (
	"fmt"
	"math"
	"math/cmplx"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
)

// Truth is what is known about a rendered take. Angles are degrees, times
// seconds from the take's first frame.
type Truth struct {
	Scenario     string            `json:"scenario"`
	Seed         uint64            `json:"seed"`
	RateHz       int               `json:"sample_rate_hz"`
	Channels     int               `json:"channels"`
	Frames       int64             `json:"frames"`
	Air          string            `json:"air"`
	SpeedMS      float64           `json:"speed_of_sound_m_s"`
	ReferenceM   [3]float64        `json:"reference_point_m"`
	Microphones  []TruthMicrophone `json:"microphones"`
	Sources      []TruthSource     `json:"sources"`
	ChannelTruth []TruthChannel    `json:"channel_truth"`

	// CovarianceWhy says why NoiseCovariance does not describe the noise, and is
	// empty if it does.
	CovarianceWhy string `json:"covariance_missing,omitempty"`
}

// TruthMicrophone is where a microphone really is.
type TruthMicrophone struct {
	Name    string     `json:"name"`
	Channel int        `json:"channel"` // as the rig file says
	AtM     [3]float64 `json:"at_m"`
}

// TruthSource is what a source did.
type TruthSource struct {
	Name      string       `json:"name"`
	Role      string       `json:"role"`
	Kind      string       `json:"kind"`
	LevelDBFS float64      `json:"level_dbfs"` // direct sound at the reference point, while on
	OnS       [][2]float64 `json:"on_s"`       // as heard at the reference point
	Track     []TruthPoint `json:"track"`      // one point if it stands still
	// DirectToReverberantDB is the energy of the direct sound over that of the
	// reflections, mean over the microphones; nil outdoors and while moving.
	DirectToReverberantDB *float64 `json:"direct_to_reverberant_db,omitempty"`
}

// TruthPoint is where sound that passes the reference point at a time comes
// from, seen from there.
type TruthPoint struct {
	TimeS        float64  `json:"time_s"`
	AzimuthDeg   float64  `json:"azimuth_deg"`
	ElevationDeg float64  `json:"elevation_deg"`
	DistanceM    *float64 `json:"distance_m,omitempty"` // nil if far
}

// TruthChannel is what a channel does, and how loud it is.
type TruthChannel struct {
	Channel    int     `json:"channel"`
	Microphone string  `json:"microphone,omitempty"` // the one that feeds it; empty if none
	GainDB     float64 `json:"gain_db"`              // of the hardware: a perfect rig file states the opposite
	DelayUS    float64 `json:"delay_us"`
	Inverted   bool    `json:"inverted"`
	ClockPPM   float64 `json:"clock_ppm"`
	Dead       bool    `json:"dead"`
	DC         float64 `json:"dc"`

	// Levels over the frames in which a target is on, and their difference; nil
	// before Measure and where there is nothing to measure.
	TargetDBFS    *float64 `json:"target_dbfs"`
	NoiseDBFS     *float64 `json:"noise_dbfs"`
	SNRDB         *float64 `json:"snr_db"`
	ClippedFrames *int64   `json:"clipped_frames"` // of the mix
}

// trackStep is the time between the points of a moving source's track,
// seconds.
const trackStep = 0.05

// truth returns what is known without rendering.
func (p *plan) truth() *Truth {
	t := &Truth{Scenario: p.sc.Name, Seed: p.sc.Seed, RateHz: p.sc.RateHz, Channels: len(p.channels), Frames: p.frames,
		Air: p.air.String(), SpeedMS: p.speed, ReferenceM: [3]float64{p.ref.X, p.ref.Y, p.ref.Z}, CovarianceWhy: p.covarianceWhy()}
	for m, at := range p.mics {
		mic := p.sc.Rig.Mics[m]
		t.Microphones = append(t.Microphones, TruthMicrophone{mic.Name, mic.Channel, [3]float64{at.X, at.Y, at.Z}})
	}
	for i := range p.sc.Sources {
		t.Sources = append(t.Sources, p.truthSource(i))
	}
	for ch := range p.channels {
		c := &p.channels[ch]
		tc := TruthChannel{Channel: ch + 1, GainDB: audio.AmplitudeDB(c.Factor), DelayUS: c.Delay * 1e6, Inverted: c.Factor < 0,
			ClockPPM: c.ClockPPM, Dead: c.Dead, DC: c.DC}
		if c.Mic >= 0 {
			tc.Microphone = p.sc.Rig.Mics[c.Mic].Name
		}
		t.ChannelTruth = append(t.ChannelTruth, tc)
	}
	return t
}

func (p *plan) truthSource(i int) TruthSource {
	s, tr := &p.sc.Sources[i], p.tracks[i]
	out := TruthSource{Name: s.Name, Role: s.role(), Kind: s.Kind, LevelDBFS: p.levels[i]}
	end := float64(p.frames) / float64(p.sc.RateHz)
	over := math.Inf(1) // when a recording is, source's time
	if s.Kind == KindFile {
		over = float64(len(p.recordings[i])) / float64(p.sc.RateHz)
	}
	heard := func(t0 float64) float64 { // when sound of the source's time t0 passes the reference point
		delay, _ := tr.Reach(t0, p.ref)
		return t0 + delay // +Inf stays what it is: sources stand still at last
	}
	on := s.OnS
	if on == nil {
		out.OnS = [][2]float64{{0, math.Min(end, heard(over))}}
	}
	for _, span := range on {
		from, to := math.Max(0, heard(span[0])), math.Min(end, heard(math.Min(span[1], over)))
		if from < to {
			out.OnS = append(out.OnS, [2]float64{from, to})
		}
	}
	point := func(t, t0 float64) TruthPoint {
		w := tr.Wave(t0)
		d := w.Direction(p.ref)
		tp := TruthPoint{TimeS: t, AzimuthDeg: d.AzimuthDeg(), ElevationDeg: d.ElevationDeg()}
		if !tr.Far {
			r := tr.Point(t0).Distance(p.ref)
			tp.DistanceM = &r
		}
		return tp
	}
	if !tr.Moves() {
		out.Track = []TruthPoint{point(0, 0)}
	} else {
		for k := 0; ; k++ {
			t := math.Min(float64(k)*trackStep, end)
			t0, _ := tr.Emission(t, t, p.ref)
			out.Track = append(out.Track, point(t, t0))
			if t >= end {
				break
			}
		}
	}
	if p.room != nil && p.banks[i] != nil {
		var direct, rest float64
		for m := range p.mics {
			d, all := p.direct[i], p.banks[i]
			at := d.Start - all.Start
			for t, v := range all.Taps[m][0] {
				k := t - at
				if k >= 0 && k < d.Length() {
					x := d.Taps[m][0][k]
					direct += x * x
					v -= x
				}
				rest += v * v
			}
		}
		if rest > 0 {
			db := 10 * math.Log10(direct/rest)
			out.DirectToReverberantDB = &db
		}
	}
	return out
}

// Truth returns what is known about the take without rendering it: the levels
// of the channels are nil.
func (r *Rendering) Truth() *Truth { return r.plan.truth() }

// Meter adds up levels for a Truth while a take is rendered by Each.
type Meter struct {
	r              *Rendering
	frame          int64
	on             [][2]int64
	frames         int64 // in which a target is on
	target, noise  []float64
	noiseAlone     []float64
	clippedAtLeast []int64
}

// NewMeter returns a meter for one run of Each.
func (r *Rendering) NewMeter() *Meter {
	n := len(r.plan.channels)
	m := &Meter{r: r, target: make([]float64, n), noise: make([]float64, n), noiseAlone: make([]float64, n), clippedAtLeast: make([]int64, n)}
	for _, s := range r.truth.Sources {
		if s.Role != RoleTarget {
			continue
		}
		for _, on := range s.OnS {
			m.on = append(m.on, [2]int64{int64(on[0] * float64(r.plan.sc.RateHz)), int64(on[1] * float64(r.plan.sc.RateHz))})
		}
	}
	return m
}

// Add takes the next blocks of Each.
func (m *Meter) Add(mix, target, noise audio.Block) {
	for i := range mix.Frames() {
		sounding := false
		for _, on := range m.on {
			sounding = sounding || m.frame >= on[0] && m.frame < on[1]
		}
		if sounding {
			m.frames++
		}
		for ch := range m.target {
			t, n := float64(target.Channel(ch)[i]), float64(noise.Channel(ch)[i])
			if sounding {
				m.target[ch] += t * t
				m.noise[ch] += n * n
			}
			m.noiseAlone[ch] += n * n
			if at := m.r.plan.channels[ch].ClipAt; !math.IsInf(at, 1) && math.Abs(float64(mix.Channel(ch)[i])) >= float64(float32(at)) {
				m.clippedAtLeast[ch]++
			}
		}
		m.frame++
	}
}

// Truth returns the truth with the levels measured so far.
func (m *Meter) Truth() *Truth {
	t := m.r.plan.truth()
	for ch := range t.ChannelTruth {
		c := &t.ChannelTruth[ch]
		level := func(energy float64, frames int64) *float64 {
			if frames == 0 || energy == 0 {
				return nil
			}
			v := render.DBFSOfPower(energy / float64(frames))
			return &v
		}
		c.TargetDBFS = level(m.target[ch], m.frames)
		c.NoiseDBFS = level(m.noise[ch], m.frames)
		if c.TargetDBFS != nil && c.NoiseDBFS != nil {
			v := *c.TargetDBFS - *c.NoiseDBFS
			c.SNRDB = &v
		}
		if m.frames == 0 {
			c.NoiseDBFS = level(m.noiseAlone[ch], m.frame)
		}
		if m.frame > 0 {
			n := m.clippedAtLeast[ch]
			c.ClippedFrames = &n
		}
	}
	return t
}

// covarianceWhy says why the noise has no covariance that NoiseCovariance can
// state, and is empty if it has.
func (p *plan) covarianceWhy() string {
	for i := range p.sc.Sources {
		s := &p.sc.Sources[i]
		switch {
		case s.role() != RoleInterferer:
		case s.Kind != KindNoise:
			return fmt.Sprintf("interferer %q is a %s, not stationary noise", s.Name, s.Kind)
		case p.tracks[i].Moves():
			return fmt.Sprintf("interferer %q moves", s.Name)
		case s.OnS != nil:
			return fmt.Sprintf("interferer %q is not on all the time", s.Name)
		}
	}
	for ch := range p.channels {
		c := &p.channels[ch]
		switch {
		case c.ClockPPM != 0:
			return fmt.Sprintf("the clock of channel %d drifts", ch+1)
		case c.Dead:
			return fmt.Sprintf("channel %d is dead", ch+1)
		case !math.IsInf(c.ClipAt, 1):
			return fmt.Sprintf("channel %d clips", ch+1)
		case c.DC != 0 || c.Hum != nil || c.Wind != 0 || c.Thumps != nil:
			return fmt.Sprintf("channel %d adds sound of its own", ch+1)
		case c.Silent != nil || c.Repeated != nil:
			return fmt.Sprintf("channel %d drops out or repeats itself", ch+1)
		}
	}
	return ""
}

// NoiseCovariance appends to dst[:0] the spatial covariance of the noise
// between the channels of the take at a frequency, R[m*M+n] = E{X_m·conj(X_n)},
// and returns it: diffuse noise, interferers with their rooms, and sensor
// noise, through the channels' gains, delays and polarities. It is a power
// density in units of full scale squared a normalised bin: its mean over
// frequencies from 0 to the rate is the mean square of the noise. So weights w
// (y = wᴴx, with the rig's corrections inside them or applied to R) leave
// wᴴRw. It returns an error if the noise is not stationary.
func (r *Rendering) NoiseCovariance(dst []complex128, hz float64) ([]complex128, error) {
	p := r.plan
	if why := p.covarianceWhy(); why != "" {
		return nil, fmt.Errorf("scenario: covariance of the noise: %s", why)
	}
	omega := 2 * math.Pi * hz / float64(p.sc.RateHz)
	count := len(p.mics)
	at := make([]complex128, count*count)
	for _, d := range p.diffuse {
		d.Covariance(at, omega)
	}
	h := make([]complex128, count)
	for i := range p.sc.Sources {
		s := &p.sc.Sources[i]
		if s.role() != RoleInterferer {
			continue
		}
		power := p.gains[i] * p.gains[i]
		if taps := p.shapes[i]; taps != nil {
			v := render.TapResponse(taps, 0, omega)
			power *= real(v)*real(v) + imag(v)*imag(v)
		}
		for m := range count {
			h[m] = p.banks[i].Response(m, 0, omega)
		}
		render.AddOuter(at, h, power)
	}
	channels := len(p.channels)
	dst = append(dst[:0], make([]complex128, channels*channels)...)
	for a := range p.channels {
		for b := range p.channels {
			ca, cb := &p.channels[a], &p.channels[b]
			if ca.Mic >= 0 && cb.Mic >= 0 {
				dst[a*channels+b] = at[ca.Mic*count+cb.Mic] * cmplx.Rect(ca.Factor*cb.Factor, -2*math.Pi*hz*(ca.Delay-cb.Delay))
			}
		}
		dst[a*channels+a] += complex(p.channels[a].Sensor*p.channels[a].Sensor, 0)
	}
	return dst, nil
}

// Transfer appends to dst[:0] the transfer at a frequency from the direct
// sound of a source at the reference point to each channel of the take,
// reflections included, and returns it. It returns an error for a source that
// moves or is not there, and where a clock drifts.
func (r *Rendering) Transfer(dst []complex128, source string, hz float64) ([]complex128, error) {
	p := r.plan
	i, err := p.find(source)
	if err != nil {
		return nil, err
	}
	if p.banks[i] == nil {
		return nil, fmt.Errorf("scenario: transfer of source %q: it moves", source)
	}
	dst = dst[:0]
	for ch := range p.channels {
		c := &p.channels[ch]
		switch {
		case c.ClockPPM != 0:
			return nil, fmt.Errorf("scenario: transfer of source %q: the clock of channel %d drifts", source, ch+1)
		case c.Mic < 0 || c.Dead:
			dst = append(dst, 0)
			continue
		}
		turn := cmplx.Rect(c.Factor, -2*math.Pi*hz*c.Delay)
		dst = append(dst, turn*p.banks[i].Response(c.Mic, 0, 2*math.Pi*hz/float64(p.sc.RateHz)))
	}
	return dst, nil
}

// find returns the number of the source of a name.
func (p *plan) find(source string) (int, error) {
	for i := range p.sc.Sources {
		if p.sc.Sources[i].Name == source {
			return i, nil
		}
	}
	return 0, fmt.Errorf("scenario: source %q: there is none of that name", source)
}

// Heard returns where sound of a source that passes the reference point at a
// time, seconds, comes from.
func (r *Rendering) Heard(source string, seconds float64) (rig.Direction, error) {
	i, err := r.plan.find(source)
	if err != nil {
		return rig.Direction{}, err
	}
	tr := r.plan.tracks[i]
	t0, _ := tr.Emission(seconds, seconds, r.plan.ref)
	return tr.Wave(t0).Direction(r.plan.ref), nil
}

// Microphones returns where the microphones really are, in the order of the
// rig file.
func (r *Rendering) Microphones() []rig.Point { return append([]rig.Point(nil), r.plan.mics...) }

// Speed returns the real speed of sound, m/s.
func (r *Rendering) Speed() float64 { return r.plan.speed }
