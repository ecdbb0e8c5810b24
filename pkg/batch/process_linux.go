package batch

import (
	"fmt"
	"os"
	"strconv"
	"strings"
	"syscall"
)

// here names the set of processes that this one can see: machine, start of the
// machine, and process namespace.
func here() string {
	host, _ := os.Hostname()
	boot, _ := os.ReadFile("/proc/sys/kernel/random/boot_id")
	space, _ := os.Readlink("/proc/self/ns/pid")
	return digest([]byte(host + "\x00" + string(boot) + "\x00" + space))[:12]
}

// startOf returns when a process of here began, in ticks of the machine, and
// whether it is there.
func startOf(pid int) (string, bool) {
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", pid))
	if err != nil {
		return "", false
	}
	// The name in brackets may hold anything: count from behind it.
	_, rest, ok := strings.Cut(string(text[strings.LastIndexByte(string(text), ')')+1:]), " ")
	fields := strings.Fields(rest)
	if !ok || len(fields) < 20 || fields[0] == "Z" || fields[0] == "X" {
		return "", false
	}
	return fields[19], true
}

// freeBytes returns how many bytes an ordinary user may still write in the file
// system of dir, and false where that cannot be told.
func freeBytes(dir string) (int64, bool) {
	var s syscall.Statfs_t
	if err := syscall.Statfs(dir, &s); err != nil {
		return 0, false
	}
	return int64(s.Bavail) * s.Bsize, true
}

// runMark names this process such that another can tell whether it still runs.
func runMark() string {
	pid := os.Getpid()
	start, _ := startOf(pid)
	return here() + "-" + strconv.Itoa(pid) + "-" + start
}

// ended reports whether the process that a mark names is known to have ended.
// Of one on another machine nothing is known.
func ended(mark string) bool {
	parts := strings.SplitN(mark, "-", 4)
	if len(parts) < 3 || parts[0] != here() {
		return false
	}
	pid, err := strconv.Atoi(parts[1])
	if err != nil {
		return false
	}
	start, running := startOf(pid)
	return !running || start != parts[2]
}
