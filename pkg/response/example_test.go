package response_test

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/response"
	"alidade/pkg/rig"
)

// What a line of eight microphones 50 mm apart does when it is steered to its
// side: half a wavelength, and beyond one.
func ExampleBeam_Predict() {
	var mics []rig.Point
	for m := range 8 {
		mics = append(mics, rig.Point{X: 0.05 * (float64(m) - 3.5)})
	}
	look := acoustics.Plane{From: rig.Degrees(90, 0)}
	w, err := beam.Tapered{}.Weights(beam.Task{Mics: mics, Look: look, Speed: 343, Rate: 48000, FFTSize: 512})
	if err != nil {
		fmt.Println(err)
		return
	}
	filters, _, err := w.Filters(0)
	if err != nil {
		fmt.Println(err)
		return
	}
	b := response.Beam{Transfer: filters, Mics: mics, Look: look, Speed: 343}
	for _, f := range b.Predict(response.NewCut(mics, look.From), []float64{3430, 8575}) {
		fmt.Printf("%.0f Hz: width %.2f°, side lobes to %.2f dB, directivity index %.2f dB, %d grating lobes\n",
			f.Hz, *f.Beamwidth*180/math.Pi, *f.HighestSideLobeDB, f.DirectivityIndexDB, len(f.GratingLobes))
	}
	// Output:
	// 3430 Hz: width 12.80°, side lobes to -12.80 dB, directivity index 9.03 dB, 0 grating lobes
	// 8575 Hz: width 5.11°, side lobes to -12.80 dB, directivity index 8.30 dB, 2 grating lobes
}
