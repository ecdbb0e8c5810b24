package rig_test

import (
	"fmt"

	"alidade/pkg/rig"
	"alidade/pkg/sheet"
)

func ExampleLoad() {
	r, err := rig.Load("roof.yaml", []byte("line: {count: 4, spacing_mm: 40}\nheading_deg: 12\n"), nil)
	if err != nil {
		fmt.Println(err)
		return
	}
	compass, _ := r.Compass(rig.Degrees(60, 0))
	fmt.Printf("%s: %d microphones, 60° is compass %03.0f°\n", r.Name, len(r.Used()), compass)
	fmt.Println(rig.Spread(r.Positions()).Shape)
	// Output:
	// roof: 4 microphones, 60° is compass 042°
	// line
}

func ExampleLoad_faults() {
	_, err := rig.Load("roof.yaml", []byte("line: {count: 4, spacing: 40}\nrefrence: M2\n"), nil)
	fmt.Println(sheet.Annotated(err))
	// Output:
	// roof.yaml:1:7: line: missing key "spacing_mm"
	//      1 | line: {count: 4, spacing: 40}
	//        |       ^
	// roof.yaml:1:18: line.spacing: unknown key, did you mean "spacing_mm"?
	//      1 | line: {count: 4, spacing: 40}
	//        |                  ^
	// roof.yaml:2:1: refrence: unknown key, did you mean "reference"?
	//      2 | refrence: M2
	//        | ^
}
