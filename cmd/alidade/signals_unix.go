//go:build unix

package main

import (
	"os"
	"syscall"
)

// engineSignals are what engines send before they end a task.
var engineSignals = []os.Signal{syscall.SIGUSR1}
