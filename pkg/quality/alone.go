package quality

import (
	"fmt"
	"math"
	"slices"

	"alidade/pkg/audio"
)

// deadOnes finds the channels that hold no sound.
func (j *judgement) deadOnes() {
	level := make([]float64, len(j.strips))
	var all []float64
	for m, s := range j.strips {
		level[m] = audio.PowerDB(2*s.rms()*s.rms()) + j.mics[m].GainDB
		all = append(all, level[m])
	}
	slices.Sort(all)
	middle := all[len(all)/2] // the upper one of two: half of the channels may be dead
	j.dead = make([]bool, len(level))
	if j.frames < int64(j.rate/10) { // a blink of sound says nothing of a channel
		return
	}
	var silent, low []int
	for m, l := range level {
		switch {
		case l < j.limits.SilentDBFS:
			silent = append(silent, m)
		case j.limits.DeadDB > 0 && l < middle-j.limits.DeadDB:
			low = append(low, m)
		default:
			continue
		}
		j.dead[m] = true
		j.result.Dead = append(j.result.Dead, m)
	}
	for _, m := range low {
		j.add(CodeDead, Error, []int{m}, fmt.Sprintf("%s lies %.1f dB below the middle channel, at %.1f dBFS", j.names([]int{m}), middle-level[m], level[m]),
			fmt.Sprintf("within %.0f dB of the others", j.limits.DeadDB), "look at its cable, plug and power; leave it out until then")
	}
	if len(silent) > 0 {
		j.add(CodeDead, Error, silent, fmt.Sprintf("%s: nothing above %.0f dBFS", j.names(silent), j.limits.SilentDBFS),
			"sound", "look at cable, plug and power, and at the recorder's inputs; leave it out until then")
	}
}

// tops finds clipping, peaks between samples and offsets.
func (j *judgement) tops() {
	for m, s := range j.strips {
		if s.frames == 0 || j.dead[m] {
			continue
		}
		c := &j.result.Channels[m]
		one := []int{m}
		share := float64(c.ClippedFrames) / float64(s.frames)
		switch {
		case j.limits.ClippedShare < 0:
		case share >= j.limits.ClippedShare || s.full > 0 && j.limits.ClippedShare <= defaultClippedShare:
			severity := Warning
			if share >= 0.01 {
				severity = Error
			}
			expected := fmt.Sprintf("under %.2g %%", 100*j.limits.ClippedShare)
			if share < j.limits.ClippedShare {
				expected = "no run of three at full scale (a limit above the default of 0.05 % allows them)"
			}
			where := "at full scale"
			if c.PeakDBFS < -0.1 {
				where = fmt.Sprintf("at %.1f dBFS, below full scale: the clipping lies before the recorder's converter", c.PeakDBFS)
			}
			j.add(CodeClipped, severity, one, fmt.Sprintf("%s: %d frames (%.2g %%) on a flat top %s", j.names(one), c.ClippedFrames, 100*share, where),
				expected, "record with less gain; a beam spreads the distortion over all directions")
		case c.TruePeakDBFS > 0.1 && c.PeakDBFS <= 0:
			j.add(CodeOvers, Info, one, fmt.Sprintf("%s passes full scale between samples by %.1f dB", j.names(one), c.TruePeakDBFS), "", "no sample is lost; leave headroom before converting the rate")
		}
		if s.frames < int64(s.rate/2) || j.limits.DC < 0 {
			continue
		}
		// The constant part must stand out of what slow sound leaves over the take;
		// moments up to a third of a second apart may move together.
		n := float64(max(1, s.moments))
		doubt := 4 * math.Sqrt(math.Max(0, s.meanSquare/n-c.DC*c.DC)/n)
		if math.Abs(c.DC) > j.limits.DC && math.Abs(c.DC) > 3*doubt {
			j.add(CodeDC, Warning, one, fmt.Sprintf("%s has a constant offset of %.2g %% of full scale", j.names(one), 100*c.DC),
				fmt.Sprintf("under %.2g %%", 100*j.limits.DC), "harmless to the beam but for headroom; a high-pass takes it away (--highpass)")
		}
	}
}

// stills finds drop-outs and repeated blocks.
func (j *judgement) stills() {
	list := j.alive()
	for _, m := range list {
		s := j.strips[m]
		if !s.wide() {
			continue
		}
		rms := s.rms()
		var count, longest int64
		for _, e := range s.still {
			if e.edge < 0.1*rms || math.Abs(float64(e.value)) > 0.9*float64(s.peak) && float64(s.peak) > 4*rms/3 {
				continue
			}
			count++
			longest = max(longest, e.to-e.from)
		}
		if count > 0 {
			count += s.lost
			j.result.Channels[m].DropOuts = count
			j.add(CodeDropOut, Warning, []int{m}, fmt.Sprintf("%s stands still %s, for up to %.1f ms", j.names([]int{m}), times(count), 1000*float64(longest)/s.rate),
				"sound throughout", "a loose plug, a radio link or a full buffer: look at the connection, and leave the channel out if it is often")
		}
		if s.copies > 0 {
			j.result.Channels[m].Repeats = s.copies
			j.add(CodeRepeat, Warning, []int{m}, fmt.Sprintf("%s repeats a block of samples %s", j.names([]int{m}), times(s.copies)),
				"no block twice", "the recorder or its driver lost data and filled the gap: use larger buffers or a faster card")
		}
	}
}

// times puts a count in words.
func times(n int64) string {
	if n == 1 {
		return "once"
	}
	return fmt.Sprintf("%d times", n)
}

// noises finds hum, wind and handling noise.
func (j *judgement) noises() {
	for _, m := range j.alive() {
		c := &j.result.Channels[m]
		s := j.strips[m]
		one := []int{m}
		if j.limits.HumDB > 0 {
			if hz, level, above := j.lines.hum(m, j.limits.HumDB); hz > 0 {
				c.HumHz, c.HumDBFS = hz, known(level)
				j.add(CodeHum, Warning, one, fmt.Sprintf("%s: mains hum of %.0f Hz at %.1f dBFS, its lines %.0f dB above the sound around them", j.names(one), hz, level, above),
					fmt.Sprintf("no line more than %.0f dB above", j.limits.HumDB), "look for a ground loop or an unbalanced cable near power lines; --highpass 120 takes the lowest lines away")
			}
		}
		if share, level, above := j.lines.wind(m, j.at, j.dead, j.speed); !math.IsNaN(share) {
			c.WindDBFS = known(level)
			if j.limits.WindShare > 0 && share > j.limits.WindShare && above > 5 && level > -75 {
				j.add(CodeWind, Warning, one, fmt.Sprintf("%s: %.0f %% of the power from 20 to 120 Hz is its own (%.1f dBFS), no sound that the others hear", j.names(one), 100*share, level),
					fmt.Sprintf("under %.0f %%", 100*j.limits.WindShare), "wind: use a windshield; --highpass 150 keeps it out of the beam")
			}
		}
		if low := momentLevel(&s.lows, 0.5); j.limits.HandlingDB > 0 && s.moments >= 20 {
			from := max(0, int(math.Ceil(math.Max(low+j.limits.HandlingDB, -60)+200)))
			for b := from; b < momentBins; b++ {
				c.Thumps += int64(s.onsets[b])
			}
			if c.Thumps > 0 && float64(c.Thumps) < 0.1*float64(s.moments) {
				j.add(CodeHandling, Warning, one, fmt.Sprintf("%s: %d thumps below 80 Hz that rise more than %.0f dB above the middle level there", j.names(one), c.Thumps, j.limits.HandlingDB),
					"none", "handling, steps on the floor or cables that knock: hang the rig up softly; --highpass 100 helps")
			}
		}
	}
}

// floors finds channels that are loud where they are quiet, beyond what their
// level explains.
func (j *judgement) floors() {
	level := func(m int) (float64, bool) {
		c := j.result.Channels[m]
		if c.NoiseDBFS == nil {
			return 0, false
		}
		db := *c.NoiseDBFS + j.mics[m].GainDB
		if c.LevelDB != nil {
			db -= *c.LevelDB
		}
		return db, true
	}
	var all []float64
	for _, m := range j.alive() {
		if db, ok := level(m); ok {
			all = append(all, db)
		}
	}
	if len(all) < 3 || j.limits.NoiseFloorDB < 0 {
		return
	}
	middle := median(all)
	for _, m := range j.alive() {
		if db, ok := level(m); ok && db-middle > j.limits.NoiseFloorDB {
			j.add(CodeNoiseFloor, Warning, []int{m}, fmt.Sprintf("%s is %.1f dB louder than the middle channel where it is quiet", j.names([]int{m}), db-middle),
				fmt.Sprintf("within %.0f dB", j.limits.NoiseFloorDB), "a noisy microphone, cable or input, or too much gain")
		}
	}
}
