//go:build !linux

package batch

import (
	"errors"
	"os"
	"strconv"
)

// runMark names this process.
func runMark() string {
	host, _ := os.Hostname()
	return digest([]byte(host))[:12] + "-" + strconv.Itoa(os.Getpid()) + "-0"
}

// fateOf knows nothing: whether another process still runs cannot be told here,
// so what it left is removed when a merge finds everything done.
func fateOf(string) fate { return isUnknown }

// freeBytes fails: how much room is left cannot be told here.
func freeBytes(string) (int64, error) { return 0, errors.ErrUnsupported }
