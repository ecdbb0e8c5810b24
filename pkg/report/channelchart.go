package report

import (
	"fmt"
	"math"

	"alidade/pkg/pipeline"
	"alidade/pkg/report/internal/draw"
)

// channelLevel is what the picture of the channels shows of one.
type channelLevel struct {
	channel   int
	name      string
	used      bool
	remarks   bool
	rms, peak pipeline.Number // dBFS
}

// levelsOf are the channels of a take that was steered.
func levelsOf(channels []pipeline.Channel) []channelLevel {
	var list []channelLevel
	for _, c := range channels {
		list = append(list, channelLevel{c.Channel, c.Name, c.Used, len(c.Flags) > 0, c.RMSDBFS, c.PeakDBFS})
	}
	return list
}

// channelChart draws level and peak of every channel; nil where no level is
// known.
func channelChart(channels []channelLevel) *chart {
	lowest, quietest, loudest, known := 0.0, -1, -1, 0
	for i, c := range channels {
		if c.rms == nil {
			continue
		}
		known++
		lowest = math.Min(lowest, *c.rms)
		if quietest < 0 || *c.rms < *channels[quietest].rms {
			quietest = i
		}
		if loudest < 0 || *c.rms > *channels[loudest].rms {
			loudest = i
		}
	}
	if known == 0 {
		return nil
	}
	low := math.Max(10*math.Floor((lowest-6)/10), -140)
	y := draw.Linear(0, low)
	var s draw.SVG
	s.Open("levels", fmt.Sprintf("Level of %d channels in dBFS, measured in %d: from %s dBFS on channel %d to %s dBFS on channel %d.", len(channels), known,
		levelText(channels[quietest].rms), channels[quietest].channel, levelText(channels[loudest].rms), channels[loudest].channel))
	for _, v := range draw.Ticks(low, 0, 6) {
		s.Line(0, y.At(v), 100, y.At(v), "grid")
		s.Text(0, y.At(v), "tick left", draw.Number(v), "dx", "-8", "dy", "4")
	}
	step := 100 / float64(len(channels))
	every := (len(channels) + 15) / 16 // names beneath the picture: at most sixteen
	for i, c := range channels {
		x := float64(i) * step
		s.Group("channel", "data-channel", fmt.Sprint(c.channel))
		class := "bar"
		switch {
		case !c.used:
			class += " left-out"
		case c.remarks:
			class += " flagged"
		}
		if c.rms != nil {
			s.Rect(x+0.16*step, y.At(*c.rms), 0.68*step, 100-y.At(*c.rms), class, "data-value", Round(*c.rms, "rms_dbfs"))
		} else {
			s.Rect(x+0.16*step, 98, 0.68*step, 2, "unmeasured")
		}
		if c.peak != nil {
			s.Line(x+0.1*step, y.At(*c.peak), x+0.9*step, y.At(*c.peak), "peak", "data-value", Round(*c.peak, "peak_dbfs"))
		}
		s.End()
		if i%every == 0 {
			name := shorten(clean(c.name), 5)
			if name == "" || every > 1 {
				name = fmt.Sprint(c.channel)
			}
			s.Text(x+step/2, 100, "tick mid", name, "dy", "18")
		}
	}
	s.Line(0, 100, 100, 100, "zero")
	return &chart{Key: "levels", Name: "Level of each channel, dBFS", Picture: s.Close(),
		Caption: "Bars are levels as recorded, lines peaks. Microphones side by side hear about the same: a bar that stands out is a gain, a cable or a windshield to look at. Hatched channels carry a remark, pale ones are left out, dotted ones hold nothing."}
}
