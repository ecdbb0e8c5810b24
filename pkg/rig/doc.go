// Package rig describes the microphones: where each stands, which channel it
// feeds, how it is calibrated. It is the one place that defines axes and
// angles.
//
// # Axes and angles
//
// Right-handed axes on the rig: x to the right (a line rig lies along x), y to
// the front, z up; metres. Azimuth runs from +x towards +y, -pi < az <= pi;
// elevation from the horizontal plane up, -pi/2..pi/2. Radians in code,
// degrees in files and output. For a line rig along x, azimuth in the front
// half plane is the usual angle from the array axis: 0 endfire, pi/2
// broadside, pi the other end. A compass heading is clockwise from true north;
// heading_deg is the heading of +y.
//
// # Corrections
//
// Mic.GainDB and Mic.Delay are what is added to a channel so that it agrees
// with the others: a quiet channel has a positive gain, a channel that arrives
// late has a negative delay.
//
// # Files
//
// Load reads a rig file in YAML or JSON, strictly, and reports every fault at
// once with line and column. The microphones stand in a list, in a CSV file
// that the rig names, or in one of the shorthands line, ring, grid and spiral;
// Schema gives the JSON Schema with the meaning of every key. YAML writes a rig
// as a file that Load reads back into an equal one.
//
// # Use
//
//	r, err := rig.Load("roof.yaml", data, open)
//	if err != nil {
//		return err // sheet.Annotated(err) shows the lines
//	}
//	if err := r.CheckTake(channels); err != nil {
//		return err
//	}
//	toward := rig.Degrees(60, 0)
//	heading, known := r.Compass(toward)
//	shape := rig.Spread(r.Positions())
//	fmt.Println(r.ReferencePoint(), heading, known, shape.Ambiguity())
//
// # Sources
//
// Golub, G. H., and Van Loan, C. F., "Matrix Computations", 4th edition, 2013,
// section 8.5, for the Jacobi rotations of Spread.
package rig
