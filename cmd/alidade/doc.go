// Command alidade aims a recording made with many microphones at one sound and
// accounts for what that gained.
//
// A verb is a file: its help text, its flags, and the function that turns them
// into a call of package pipeline or scenario and renders what comes back.
// main.go holds run, the table of verbs and the one switch of exit codes;
// args.go lets options stand anywhere; ui.go says how the program speaks.
//
// Longer than 2,000 lines because each verb carries its help text, written out,
// and its flags: a file a verb.
//
// # Use
//
//	alidade demo
//	alidade steer roof_07.wav --rig roof.yaml --toward 60
//	alidade steer --help
//
// # Sources
//
// [Damerau 1964] F. J. Damerau, "A technique for computer detection and
// correction of spelling errors", Communications of the ACM 7(3), 171–176.
package main
