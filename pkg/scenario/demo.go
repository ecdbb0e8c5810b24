package scenario

import _ "embed"

//go:embed demo.yaml
var demo string

// Demo returns the text of a scenario file to begin with: an invented take
// outdoors on a line of eight microphones, one of them too quiet and its rig
// file aware of it, a talker, a pump, and wind and town from all sides.
func Demo() string { return demo }
