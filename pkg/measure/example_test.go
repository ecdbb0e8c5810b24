package measure_test

import (
	"fmt"
	"math"
	"math/rand/v2"

	"alidade/pkg/audio"
	"alidade/pkg/measure"
)

// Four microphones with noise of their own and one tone in all: their mean
// keeps the tone and has a quarter of the noise power.
func ExampleSNRGain() {
	const rate, mics, seconds = 16000, 4, 12
	take, track := audio.NewBlock(mics, seconds*rate), audio.NewBlock(1, seconds*rate)
	r := rand.New(rand.NewPCG(1, 1))
	for i := range take.Frames() {
		tone := 0.0
		if i >= 6*rate {
			tone = 0.1 * math.Sin(2*math.Pi*1000/rate*float64(i))
		}
		for m := range mics {
			x := float32(tone + 0.02*r.NormFloat64())
			take.Channel(m)[i] = x
			track.Channel(0)[i] += x / mics
		}
	}
	in, err := measure.NewMeter(audio.Format{Rate: rate, Channels: mics}, measure.MeterOptions{})
	if err != nil {
		fmt.Println(err)
		return
	}
	out, err := measure.NewMeter(audio.Format{Rate: rate, Channels: 1}, measure.MeterOptions{})
	if err != nil {
		fmt.Println(err)
		return
	}
	for _, err := range []error{in.Write(take), in.Close(), out.Write(track), out.Close()} {
		if err != nil {
			fmt.Println(err)
			return
		}
	}
	gains, err := measure.SNRGain(measure.Scene{
		Pair:   measure.Pair{Reference: in.Thirds(), Output: out.Thirds()},
		Noise:  []measure.Stretch{{From: 0, To: 6}},
		Target: []measure.Stretch{{From: 6, To: 12}},
		Named:  -1,
	})
	if err != nil {
		fmt.Println(err)
		return
	}
	for _, b := range gains.Bands {
		switch b.Band.NominalHz {
		case 1000:
			fmt.Printf("%g Hz: target at %.1f dBFS, SNR gain %.1f dB\n", b.Band.NominalHz, *b.TargetIn, *b.SNRGain)
		case 4000:
			fmt.Printf("%g Hz: noise reduction %.1f dB, target: %s\n", b.Band.NominalHz, *b.NoiseReduction, b.TargetReason)
		}
	}
	// Output:
	// 1000 Hz: target at -20.0 dBFS, SNR gain 6.1 dB
	// 4000 Hz: noise reduction 6.0 dB, target: not-above-noise
}
