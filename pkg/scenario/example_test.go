package scenario_test

import (
	"fmt"

	"alidade/pkg/audio"
	"alidade/pkg/scenario"
)

func Example() {
	sc, err := scenario.Load("demo.yaml", []byte(scenario.Demo()), nil)
	if err != nil {
		fmt.Println(err)
		return
	}
	sc.DurationS = 4
	r, err := sc.Render(scenario.Options{})
	if err != nil {
		fmt.Println(err)
		return
	}
	meter := r.NewMeter()
	err = r.Each(func(mix, target, noise audio.Block) error {
		meter.Add(mix, target, noise)
		return nil
	})
	if err != nil {
		fmt.Println(err)
		return
	}
	for _, s := range meter.Truth().Sources {
		fmt.Printf("%s (%s) at %.0f°\n", s.Name, s.Role, s.Track[0].AzimuthDeg)
	}
	// Output:
	// ferryman (target) at 62°
	// pump (interferer) at 141°
}
