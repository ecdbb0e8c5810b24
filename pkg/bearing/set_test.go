package bearing

import (
	"fmt"
	"os"
	"testing"

	"alidade/pkg/kernel"
)

// TestMain runs the tests with the set of kernels that ALIDADE_KERNEL names, the
// best one if it is unset.
func TestMain(m *testing.M) {
	if err := kernel.Use(os.Getenv("ALIDADE_KERNEL")); err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(2)
	}
	os.Exit(m.Run())
}
