package sheet_test

import (
	"fmt"

	"alidade/pkg/sheet"
)

func ExampleParse() {
	type file struct {
		Name  string  `json:"name"`
		Angle float64 `json:"angle_deg,omitempty" jsonschema:"minimum=0,maximum=360"`
	}
	text, err := sheet.SchemaOf(file{}, "urn:example:file", "A file")
	if err != nil {
		fmt.Println(err)
		return
	}
	schema, err := sheet.NewSchema(text)
	if err != nil {
		fmt.Println(err)
		return
	}
	doc := sheet.Parse("a.yaml", []byte("name: north mast\nangel_deg: 12\n"), schema)
	var f file
	doc.Fill(&f)
	if doc.Has("name") && f.Name != "mast" {
		doc.Fault("name", "%q is not a mast that is known", f.Name)
	}
	fmt.Println(sheet.Annotated(doc.Err()))
	// Output:
	// a.yaml:1:7: name: "north mast" is not a mast that is known
	//      1 | name: north mast
	//        |       ^
	// a.yaml:2:1: angel_deg: unknown key, did you mean "angle_deg"?
	//      2 | angel_deg: 12
	//        | ^
}
