package beam

import (
	"fmt"
	"math"

	"alidade/pkg/audio"
	"alidade/pkg/delay"
)

// largestSpan bounds the delays that an engine holds in memory, frames.
const largestSpan = 1 << 18

// DelayAndSum returns the filters that align the microphones and add them:
// filter m advances its signal by delays[m], the seconds by which the wave
// arrives at microphone m later than at the reference point, and multiplies it
// with amplitudes[m] (taper over the sum of the taper, polarity, gain). It
// panics if the lengths differ, and returns an error for values that are not
// finite or delays of more than 2^17 frames.
func DelayAndSum(kernel delay.Kernel, rate int, delays, amplitudes []float64) (*Filters, error) {
	if len(delays) != len(amplitudes) {
		panic(fmt.Sprintf("beam: %d delays and %d amplitudes", len(delays), len(amplitudes)))
	}
	f := &Filters{Rate: rate, Start: make([]int, len(delays)), H: make([][]float64, len(delays))}
	for m, d := range delays {
		frames := d * float64(rate)
		if !(math.Abs(frames) <= largestSpan/2) {
			return nil, fmt.Errorf("beam: microphone %d: delay of %g s: want at most %g s either way", m+1, d, largestSpan/2/float64(rate))
		}
		f.Start[m], f.H[m] = kernel.Taps(nil, -frames)
		for t := range f.H[m] {
			f.H[m][t] *= amplitudes[m]
		}
	}
	if err := f.Validate(); err != nil {
		return nil, err
	}
	return f, nil
}

// runnable reports what keeps filters from running on a source.
func runnable(src audio.Source, f *Filters) error {
	if err := f.Validate(); err != nil {
		return err
	}
	format := src.Format()
	if format.Channels != f.Mics() {
		return fmt.Errorf("beam: filters of %d microphones for a source of %d channels", f.Mics(), format.Channels)
	}
	if format.Rate != f.Rate {
		return fmt.Errorf("beam: filters for %d frames per second for a source of %d", f.Rate, format.Rate)
	}
	for m, start := range f.Start { // before they are added to, which could overflow
		if start < -largestSpan || start > largestSpan {
			return fmt.Errorf("beam: filter of microphone %d reaches from frame %d: want at most %d either way", m+1, start, largestSpan)
		}
	}
	from, to := f.Span()
	if from < -largestSpan || to > largestSpan || to-from > largestSpan {
		return fmt.Errorf("beam: filters reach from frame %d to %d: want at most %d either way", from, to, largestSpan)
	}
	return nil
}
