//go:build !unix

package main

import "os"

// engineSignals are none: no engine runs tasks here.
var engineSignals []os.Signal
