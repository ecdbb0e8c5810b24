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
// Load reads the YAML of a rig file, strictly, and reports every fault at once
// with line and column.
package rig
