package batch

import (
	"errors"
	"fmt"
	"syscall"
)

// TroubleError is storage that failed: nobody's take is at fault, and another
// try may succeed.
type TroubleError struct {
	Err  error
	Hint string
}

// Error implements error.
func (e *TroubleError) Error() string { return e.Err.Error() }

// Unwrap gives the cause.
func (e *TroubleError) Unwrap() error { return e.Err }

// full are errors of a place that takes no more outputs: going on with other
// takes is of no use.
var full = []error{syscall.ENOSPC, syscall.EDQUOT, syscall.EROFS, syscall.EMFILE, syscall.ENFILE}

// shaky are errors of storage that may be there again later.
var shaky = []error{syscall.EIO, syscall.ESTALE, syscall.ETIMEDOUT, syscall.EBUSY, syscall.ENOTCONN, syscall.EHOSTDOWN, syscall.EHOSTUNREACH}

func isAny(err error, list []error) bool {
	for _, e := range list {
		if errors.Is(err, e) {
			return true
		}
	}
	return false
}

// trouble wraps an error of the output folder.
func trouble(err error) error {
	if err == nil {
		return nil
	}
	var already *TroubleError
	if errors.As(err, &already) {
		return err
	}
	hint := "look after the output folder (alidade check-storage shows what it can do), and run again: what is done stays done"
	if isAny(err, []error{syscall.ENOSPC, syscall.EDQUOT}) {
		hint = "free some room, and run again: what is done stays done"
	}
	return &TroubleError{fmt.Errorf("output folder: %w", err), hint}
}
