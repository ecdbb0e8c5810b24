package pipeline

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"alidade/pkg/audio"
	"alidade/pkg/calibration"
	"alidade/pkg/rig"
)

// CalibrateSpec is a calibration to be carried out.
type CalibrateSpec struct {
	Take    []string        // files of the take, as in Spec
	More    []CalibrateTake // further takes, for positions
	RigPath string
	Options CalibrateOptions
	Version string
}

// CalibrateTake are the files of one more take.
type CalibrateTake []string

// calibrating is one calibration on its way.
type calibrating struct {
	ctx   context.Context
	spec  CalibrateSpec
	set   *calibrateSettings
	watch Watch
	rig   *loadedRig
	takes []*take
	out   string
	res   *Calibration
}

// Calibrate finds the corrections of a rig from a take of a known sound and
// writes a new rig file, whole or not at all. The old one is left alone. The
// errors are those of Run; a take that does not carry the calibration is a
// *HintedError that wraps a *calibration.RefusedError.
func Calibrate(ctx context.Context, spec CalibrateSpec, watch Watch) (res *Calibration, err error) {
	set, err := spec.Options.resolve()
	if err != nil {
		return nil, err
	}
	c := &calibrating{ctx: ctx, spec: spec, set: set, watch: watch}
	if c.rig, err = loadRig(spec.RigPath, set.shared()); err != nil {
		return nil, err
	}
	defer func() {
		for _, t := range c.takes {
			err = joinErrors(err, t.close())
		}
		if err != nil {
			res = nil
		}
	}()
	if len(spec.More) > 0 && !set.Several() {
		return nil, &UsageError{Err: fmt.Errorf("%d takes, want one: only --positions and --calibrator-db listen to several", 1+len(spec.More))}
	}
	for _, files := range append([]CalibrateTake{spec.Take}, spec.More...) {
		if err := c.open(files); err != nil {
			return nil, err
		}
	}
	c.res = &Calibration{
		Schema: CalibrationSchema, Version: spec.Version, Kind: CalibratedChannels,
		Rig: c.rig.summary(), Findings: []Finding{}, Microphones: []CalibratedMic{},
	}
	kind := c.places
	switch {
	case set.Positions:
		c.res.Kind = CalibratedPositions
	case set.CalibratorDB != 0:
		c.res.Kind, kind = CalibratedLevels, c.levels
	default:
		e, err := c.expect()
		if err != nil {
			return nil, err
		}
		kind = func() (*rig.Rig, []string, error) { return c.channels(e) }
	}
	if err := c.name(); err != nil {
		return nil, err
	}
	changed, notes, err := kind()
	if err != nil {
		return nil, c.explained(err)
	}
	return c.res, c.write(changed, notes)
}

// open opens one take of the given files.
func (c *calibrating) open(files []string) error {
	t, err := openTake(files, c.set.shared().joining(), true)
	if err != nil {
		return err
	}
	c.takes = append(c.takes, t)
	if err := c.as(t).fits(); err != nil {
		return err
	}
	if t.header.Frames == 0 {
		return &HintedError{
			Err:  fmt.Errorf("%s: holds no sound: its header promises %d channels at %d Hz, and no frame follows", t.path(), t.header.Channels, t.header.Rate),
			Hint: "record or copy it again",
		}
	}
	return nil
}

// as is a take on its way, for what every way needs.
func (c *calibrating) as(t *take) *run {
	set := &settings{Options: c.set.shared()}
	set.Options.Excerpt, set.excerpt = c.set.Excerpt, c.set.excerpt
	return &run{ctx: c.ctx, rig: c.rig, take: t, watch: c.watch, set: set}
}

// name settles the name of the new rig file and refuses one that is in use.
func (c *calibrating) name() error {
	old := c.spec.RigPath
	stem := strings.TrimSuffix(filepath.Base(old), filepath.Ext(old))
	c.out = filepath.Join(filepath.Dir(old), stem+".calibrated.yaml")
	if out := c.set.Out; out != "" {
		c.out = out
		if info, err := os.Stat(out); err == nil && info.IsDir() {
			c.out = filepath.Join(out, stem+".calibrated.yaml")
		} else if ext := strings.ToLower(filepath.Ext(out)); ext != ".yaml" && ext != ".yml" {
			return &UsageError{Err: fmt.Errorf("--out %q: a rig file ends in .yaml", out)}
		}
	}
	inputs := slices.Clone(c.rig.files)
	for _, t := range c.takes {
		inputs = append(inputs, t.paths()...)
	}
	if err := refuseInputs([]string{c.out}, inputs); err != nil {
		return err
	}
	// Found before the work, not after it.
	s, err := stage(c.out, c.set.Overwrite)
	s.abandon()
	return err
}

// explained gives the refusal of a take its place and what helps.
func (c *calibrating) explained(err error) error {
	var refused *calibration.RefusedError
	var placed *HintedError // by the take that it is about
	if errors.As(err, &refused) && !errors.As(err, &placed) {
		return &HintedError{Err: fmt.Errorf("%s: carries no calibration: %w", c.takes[len(c.takes)-1].path(), refused), Hint: refused.Help}
	}
	return err
}

// raw returns a way to read a take from the start of its excerpt, time and
// again: the used microphones in rig order, on one clock as in steering, without
// other corrections.
func (c *calibrating) raw(t *take, stage string) (func() (audio.Source, error), error) {
	from, to, err := c.as(t).excerpt()
	if err != nil {
		return nil, err
	}
	var order []int
	for _, m := range c.rig.Used() {
		order = append(order, c.rig.Mics[m].Channel-1)
	}
	low, high := c.rig.clockReach(from, to, t.header.Frames)
	return func() (audio.Source, error) {
		if err := t.reader.SeekFrame(low); err != nil {
			return nil, fmt.Errorf("%s: %w", t.path(), err)
		}
		src := audio.Source(&watched{Source: t.source(), ctx: c.ctx, tell: c.as(t).tell(stage, high-low)})
		out, err := audio.Map(audio.Section(src, 0, high-low), order, nil)
		if err != nil {
			return out, err
		}
		if out, err = c.rig.onOneClock(out, low); err != nil {
			return nil, err
		}
		if out = audio.Section(out, from-low, to-low); c.set.Responses {
			return out, nil
		}
		// Filters that stay are part of the channels.
		return c.rig.evened(out)
	}, nil
}

// used returns the used microphones and their indices.
func (c *calibrating) used() (used []int, mics []rig.Mic) {
	used = c.rig.Used()
	for _, m := range used {
		mics = append(mics, c.rig.Mics[m])
	}
	return used, mics
}

// or returns the value of a number, or what stands for none.
func or(v *float64, def float64) float64 {
	if v == nil {
		return def
	}
	return *v
}

// expect returns what the geometry says of the source, and fills in the
// source of the result.
func (c *calibrating) expect() (*calibration.Expected, error) {
	ref, o := c.rig.ReferencePoint(), c.set
	src := &CalibrationSource{
		TemperatureStdC: or(o.TemperatureStdC, DefaultTemperatureStdC), PlacementStdMM: or(o.PlacementStdMM, DefaultPlacementStdMM),
		SpeedOfSoundMS: c.rig.speed, RelativeTo: o.RelativeTo, PolarityByMajority: true, DelayFromOneSideOnly: true,
	}
	// The speed of sound follows the root of the absolute temperature.
	doubt := calibration.Doubt{Speed: src.TemperatureStdC / (2 * (273.15 + c.rig.air.TemperatureC)), Placement: src.PlacementStdMM / 1000}
	distance, d := math.Inf(1), rig.Direction{}
	if o.point != nil {
		distance, d = o.point.Distance(ref), rig.Toward(o.point.Sub(ref))
		src.PointM = &[3]float64{o.point.X, o.point.Y, o.point.Z}
		std := or(o.FocusStdMM, DefaultFocusStdMM) / 1000
		if distance > 0 {
			doubt.Direction, doubt.Distance = math.Min(std/distance, 0.5), std
		}
	} else {
		d = *o.direction
		doubt.Direction = or(o.DirectionStdDeg, DefaultDirectionStdDeg) * math.Pi / 180
		if o.DistanceM != 0 {
			distance = o.DistanceM
			doubt.Distance = or(o.DistanceStdM, distance/10)
		}
	}
	src.AzimuthDeg, src.ElevationDeg, src.DirectionStdDeg = d.AzimuthDeg(), d.ElevationDeg(), doubt.Direction*180/math.Pi
	if !math.IsInf(distance, 1) {
		src.DistanceM, src.DistanceStdM = number(distance), number(doubt.Distance)
	}
	e, err := calibration.Expect(c.rig.Positions(), ref, d, distance, c.rig.speed, doubt)
	if err != nil {
		return nil, &UsageError{Err: err, Hint: "X,Y,Z count in metres from the rig's origin: look for millimetres, a lost sign or a lost digit"}
	}
	c.res.Source = src
	if c.set.RelativeTo != RelativeToMean {
		if m, ok := c.rig.Find(c.set.RelativeTo); !ok || !c.rig.Mics[m].Use {
			return nil, &UsageError{
				Err:  fmt.Errorf("--relative-to %q: rig %s has no microphone of that name in use", c.set.RelativeTo, c.rig.Name),
				Hint: c.rig.namesHint() + ", or " + RelativeToMean,
			}
		}
	}
	return e, nil
}

// channels calibrates gain, delay and polarity.
func (c *calibrating) channels(e *calibration.Expected) (*rig.Rig, []string, error) {
	t := c.takes[0]
	open, err := c.raw(t, "listening")
	if err != nil {
		return nil, nil, err
	}
	used, mics := c.used()
	if to := c.set.ToHz; to > 0.45*float64(t.header.Rate) {
		return nil, nil, &UsageError{Err: fmt.Errorf("--to-hz %g: above 0.45 of the take's rate of %d Hz", to, t.header.Rate)}
	}
	against := 0
	if m, ok := c.rig.Find(c.set.RelativeTo); ok && c.set.RelativeTo != RelativeToMean {
		against = 1 + slices.Index(used, m)
	}
	r, err := calibration.Channels(open, e, mics, calibration.Options{
		Claps: c.set.Sound == SoundClaps, FromHz: c.set.FromHz, ToHz: c.set.ToHz, MaxDelay: c.set.MaxDelayUS / 1e6, Responses: c.set.Responses, Against: against,
	})
	if err != nil {
		return nil, nil, err
	}
	c.res.Source.MisfitUS, c.res.Source.ChannelsHeard = number(1e6*r.Misfit), r.Heard
	c.res.Heard = &Listening{Sound: c.set.Sound, Frames: r.Frames, ShareTaken: r.Loud, LowHz: r.LowHz, HighHz: r.HighHz}
	c.clapsLeftOut(t, r.LeftOut)
	changed := c.correct(used, r)
	if err := c.judge(used, r); err != nil {
		return nil, nil, err
	}
	return changed, c.channelNotes(used, r), nil
}

// correct returns the rig with the corrections that the result asks for, and
// fills in the microphones of the result.
func (c *calibrating) correct(used []int, r *calibration.Relative) *rig.Rig {
	changed := *c.rig.Rig
	changed.Mics = slices.Clone(changed.Mics)
	// What stays as it was: the mean of those heard, or one of them.
	var gain, delay, n float64
	for i, m := range used {
		one := c.set.RelativeTo != RelativeToMean
		if ch := r.Channels[i]; ch.Heard && (!one || c.rig.Mics[m].Name == c.set.RelativeTo) {
			gain += c.rig.Mics[m].GainDB + ch.LevelDB
			delay += c.rig.Mics[m].Delay + ch.Late
			n++
		}
	}
	if n > 0 {
		gain, delay = gain/n, delay/n
	}
	keep := func(what string) bool { return slices.Contains(c.set.keep, what) }
	for i, m := range used {
		ch, mic := r.Channels[i], &changed.Mics[m]
		if !ch.Heard || n == 0 {
			continue
		}
		if !keep(KeepGain) {
			mic.GainDB = rounded(gain-ch.LevelDB, 4)
		}
		if !keep(KeepDelay) {
			mic.Delay = nanoseconds(delay - ch.Late)
		}
		if v := ch.Response; v != nil {
			mic.Response = &rig.Response{RateHz: c.takes[0].header.Rate, Taps: v.Taps}
		}
		if !keep(KeepPolarity) && ch.Opposite < uncertainPolarity {
			mic.Inverted = ch.Inverted
		}
	}
	place := map[int]int{}
	for i, m := range used {
		place[m] = i
	}
	for m, mic := range changed.Mics {
		old := c.rig.Mics[m]
		entry := CalibratedMic{
			Channel: mic.Channel, Name: mic.Name, Used: mic.Use,
			GainBeforeDB: old.GainDB, GainDB: mic.GainDB, DelayBeforeUS: 1e6 * old.Delay, DelayUS: 1e6 * mic.Delay,
			PolarityBefore: polarityWord(old.Inverted), Polarity: polarityWord(mic.Inverted),
		}
		if i, ok := place[m]; ok && r.Channels[i].Heard {
			ch := r.Channels[i]
			entry.Heard = true
			entry.GainUncertaintyDB, entry.DelayUncertaintyUS = number(2*ch.LevelStd), number(2e6*ch.LateStd)
			entry.GainNoiseDB, entry.DelayNoiseUS = number(ch.LevelNoise), number(1e6*ch.LateNoise)
			entry.GainBandsDB, entry.SNRDB = number(ch.LevelBands), number(ch.SNRDB)
			if r.Heard == 2 {
				entry.GainBandsDB = number(math.NaN()) // one cross-spectrum does not show it
			}
			if v := ch.Response; v != nil {
				entry.ResponseTaps = len(v.Taps)
				for _, b := range v.Bands {
					entry.Response = append(entry.Response, CalibratedBand{CentreHz: b.CentreHz, LevelDB: b.LevelDB, PhaseDeg: b.PhaseDeg, UncertaintyDB: 2 * b.Std, LeftDB: b.LeftDB})
				}
			}
		}
		c.res.Microphones = append(c.res.Microphones, entry)
	}
	return &changed
}

// nanoseconds returns a time in seconds rounded so that in microseconds it has
// three decimals, as a rig file writes it.
func nanoseconds(seconds float64) float64 {
	v, err := strconv.ParseFloat(strconv.FormatFloat(1e6*seconds, 'f', 3, 64)+"e-6", 64)
	if err != nil {
		return seconds
	}
	return v + 0 // never a negative zero
}

// unevenDB is the standard deviation of a gain over octaves that is spoken of.
const unevenDB = 0.3

// uncertainPolarity is how high the correlation of the other polarity may be
// against that of the one found before the old one is kept.
const uncertainPolarity = 0.92

func polarityWord(inverted bool) string {
	if inverted {
		return "inverted"
	}
	return "normal"
}

// judge adds what a person should know of the corrections that were filled in,
// and refuses where too few channels were heard.
func (c *calibrating) judge(used []int, r *calibration.Relative) error {
	var silent, uncertain, large, uneven []int
	for i, m := range used {
		ch := c.rig.Mics[m].Channel
		switch v := r.Channels[i]; {
		case !v.Heard:
			silent = append(silent, ch)
		case v.Opposite >= uncertainPolarity:
			uncertain = append(uncertain, ch)
		}
		if v, e := r.Channels[i], c.res.Microphones[m]; math.Abs(e.DelayUS-e.DelayBeforeUS) > math.Max(50, 6e6*v.LateStd) {
			large = append(large, ch)
		}
		if v := r.Channels[i]; v.LevelBands > unevenDB && v.Response == nil {
			uneven = append(uneven, ch)
		}
	}
	if len(used) > 2 && r.Heard < 3 || 2*r.Heard <= len(used) {
		return &calibration.RefusedError{
			Why:  fmt.Sprintf("the sound is in %d of %d channels", r.Heard, len(used)),
			Help: "alidade check says what is wrong with the channels",
		}
	}
	if m, ok := c.rig.Find(c.set.RelativeTo); ok && slices.Contains(silent, c.rig.Mics[m].Channel) {
		return &calibration.RefusedError{Why: fmt.Sprintf("microphone %s, which the others are to be compared with, does not carry the sound", c.set.RelativeTo)}
	}
	add := func(code string, severity Severity, channels []int, format string, args ...any) {
		c.res.Findings = append(c.res.Findings, Finding{Code: code, Severity: severity, Channels: channels, Message: fmt.Sprintf(format, args...)})
	}
	if len(silent) > 0 {
		add("channel-not-heard", Warning, silent, "%s without the sound: left as before; alidade check says what is wrong with it", plural(silent, "channel %s", "channels %s"))
	}
	if len(uncertain) > 0 {
		add("polarity-uncertain", Warning, uncertain, "the polarity of %s cannot be told in so narrow a band: left as before", plural(uncertain, "channel %s", "channels %s"))
	}
	if len(large) > 0 {
		add("delay-large", Warning, large, "the delay of %s changes by more than 50 µs: a channel that is late, or a microphone that is not where the rig file has it (17 mm are 50 µs)", plural(large, "channel %s", "channels %s"))
	}
	if len(uneven) > 0 {
		add("gain-over-frequency", Info, uneven, "the gain of %s differs from octave to octave by more than noise explains: its uncertainty says so; --responses corrects what the channels do over frequency, claps what is a room's", plural(uneven, "channel %s", "channels %s"))
	}
	if r.Heard == 2 {
		add("two-microphones", Warning, nil, "with two microphones there is no third that would tell noise from level: gains hold if both channels have the same signal-to-noise ratio, and their uncertainty allows for noise in one alone, not for gains that differ over frequency")
	}
	if r.Fitted != nil {
		add("direction-differs", Info, nil, "the arrivals would fit a direction %.1f° away better: by %.1f µs instead of %.1f µs", r.Turned*180/math.Pi, 1e6*r.Fitted.Residual, 1e6*r.Misfit)
	}
	if a := rig.Spread(c.rig.Positions()).Ambiguity(); a != "" && c.set.Sound == SoundSteady {
		add("one-direction", Info, nil, "delays hold for this direction: where a microphone is not where the rig file has it, the correction makes up for it from here alone; a second take from across, or --positions, shows it")
	}
	for _, t := range c.takes {
		c.res.Findings = append(c.res.Findings, t.findings()...)
	}
	sortFindings(c.res.Findings)
	return nil
}
