package pipeline

import (
	"bufio"
	"fmt"
	"io"
)

// WriteWhole writes a file that appears under its name whole or not at all. An
// existing file is replaced only with overwrite, and none of the inputs ever.
func WriteWhole(path string, overwrite bool, inputs []string, write func(io.Writer) error) (err error) {
	if err := refuseInputs([]string{path}, inputs); err != nil {
		return err
	}
	file, err := stage(path, overwrite)
	if err != nil {
		return err
	}
	defer file.abandon()
	buffered := bufio.NewWriter(file)
	if err := write(buffered); err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	if err := buffered.Flush(); err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	return file.commit()
}
