package beam_test

import (
	"fmt"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// A superdirective beam on a line of four, towards its end, whose sensor noise
// is never raised, and the filters that make it.
func ExampleSuperdirective() {
	mics := []rig.Point{{X: -0.06}, {X: -0.02}, {X: 0.02}, {X: 0.06}}
	w, err := beam.Superdirective{FloorDB: 0}.Weights(beam.Task{
		Mics: mics, Look: acoustics.Plane{From: rig.Degrees(0, 0)},
		Speed: 343.2, Rate: 48000, FFTSize: 1024,
	})
	if err != nil {
		fmt.Println(err)
		return
	}
	filters, fit, err := w.Filters(0)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Println(filters.Mics(), "filters, constraint kept within -100 dB:", fit.ConstraintDB < -100)
	// Output: 4 filters, constraint kept within -100 dB: true
}
