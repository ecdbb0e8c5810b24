package batch

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"strconv"
	"strings"
	"syscall"
)

// freeBytes returns how many bytes an ordinary user may still write in the file
// system of dir.
func freeBytes(dir string) (int64, error) {
	var s syscall.Statfs_t
	if err := syscall.Statfs(dir, &s); err != nil {
		return 0, err
	}
	return int64(s.Bavail) * s.Bsize, nil
}

// here names the set of processes that this one can see: machine, start of the
// machine, and process namespace.
func here() string {
	host, _ := os.Hostname()
	boot, _ := os.ReadFile("/proc/sys/kernel/random/boot_id")
	space, _ := os.Readlink("/proc/self/ns/pid")
	return digest([]byte(host + "\x00" + string(boot) + "\x00" + space))[:12]
}

// startOf returns when a process of here began, in ticks of the machine. The
// error is fs.ErrNotExist where there is none.
func startOf(pid int) (string, error) {
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", pid))
	if errors.Is(err, syscall.ESRCH) { // it ended while it was read
		return "", fs.ErrNotExist
	}
	if err != nil {
		return "", err
	}
	// The name in brackets may hold anything: count from behind it.
	_, rest, ok := strings.Cut(string(text[strings.LastIndexByte(string(text), ')')+1:]), " ")
	fields := strings.Fields(rest)
	if !ok || len(fields) < 20 {
		return "", fmt.Errorf("/proc/%d/stat: %d fields", pid, len(fields))
	}
	if fields[0] == "Z" || fields[0] == "X" {
		return "", fs.ErrNotExist
	}
	return fields[19], nil
}

// runMark names this process such that another can tell whether it still runs.
func runMark() string {
	pid := os.Getpid()
	start, _ := startOf(pid)
	return here() + "-" + strconv.Itoa(pid) + "-" + start
}

// fateOf says what became of the process that a mark names. Of one on another
// machine nothing is known.
func fateOf(mark string) fate {
	parts := strings.SplitN(mark, "-", 4)
	if len(parts) < 3 || parts[0] != here() {
		return isUnknown
	}
	pid, err := strconv.Atoi(parts[1])
	if err != nil {
		return isUnknown
	}
	switch start, err := startOf(pid); {
	case errors.Is(err, fs.ErrNotExist):
		return hasEnded
	case err != nil || parts[2] == "":
		return isUnknown
	case start != parts[2]:
		return hasEnded
	}
	return isRunning
}
