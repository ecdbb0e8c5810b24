package kernel

import "fmt"

// The sets of kernels.
const (
	Plain = "plain"
	AVX2  = "avx2"
)

// vector says that the vector functions are in use. It is set before any work
// and not changed after.
var vector = haveVector()

// Name is the set in use.
func Name() string {
	if vector {
		return AVX2
	}
	return Plain
}

// Use takes the set of that name, "" the best that the processor has. It is for
// the start of a program and for tests: no kernel may run meanwhile. It returns
// an error for a name that is none and for a set that the processor lacks.
func Use(name string) error {
	switch {
	case name == "":
		vector = haveVector()
	case name == Plain:
		vector = false
	case name == AVX2 && haveVector():
		vector = true
	case name == AVX2:
		return fmt.Errorf("kernel: set %q: this processor has no AVX2 with FMA", name)
	default:
		return fmt.Errorf("kernel: set %q: want %s or %s", name, Plain, AVX2)
	}
	return nil
}
