// Package sheet reads a YAML file of a known form strictly and gives every
// fault its place.
//
// # Conventions
//
// A form is a Go struct with json tags, described for readers and editors by
// the JSON Schema that SchemaOf makes of it. A file is read in one go: its
// text, its YAML, its form. Whatever is wrong is collected and reported at
// once, in file order, each fault with line and column (counted from 1, columns
// in characters) and with the path of the value, such as
// microphones[1].at_mm[2]. JSON is accepted wherever YAML is.
//
// Plain values are resolved by the core schema of YAML 1.2: 1e3 is a number,
// yes and 1_000 are texts, and a whole number with a leading zero is refused,
// since readers differ on its meaning. Tags, directives, merge keys, several
// documents in one file, and keys that are not texts are refused. Anchors and
// aliases are read.
//
// A hostile file costs little: MaxBytes, MaxMarks and MaxDepth bound its size,
// the number of its values with every alias written out, and its nesting.
//
// # Use
//
//	schema, err := sheet.NewSchema(text) // text from SchemaOf
//	doc := sheet.Parse("rig.yaml", data, schema)
//	var f file
//	doc.Fill(&f) // what is sound of the file
//	if doc.Has("heading_deg") && f.HeadingDeg > 360 {
//		doc.Fault("heading_deg", "%g: want 0 to 360", f.HeadingDeg)
//	}
//	return doc.Err() // a *FaultsError, or nil
//
// # Sources
//
// YAML Ain't Markup Language version 1.2.2 (2021), section 10.3, core schema.
// JSON Schema draft 2020-12. Damerau, F. J., "A technique for computer
// detection and correction of spelling errors", Communications of the ACM 7(3),
// 1964, for the distance of keys.
package sheet
