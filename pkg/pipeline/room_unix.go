//go:build unix

package pipeline

import "golang.org/x/sys/unix"

// freeBytes returns how many bytes an ordinary user may still write in the
// file system of dir, and false where that cannot be told.
func freeBytes(dir string) (int64, bool) {
	var s unix.Statfs_t
	if err := unix.Statfs(dir, &s); err != nil {
		return 0, false
	}
	return int64(s.Bavail) * int64(s.Bsize), true
}
