//go:build unix

package watch

import (
	"fmt"
	"os"
	"syscall"
)

// hold locks a file for as long as it is open, or fails if it is locked.
func hold(f *os.File) error { return syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB) }

// FreeSpace gives the bytes that this user may still write to the disk of a path.
func FreeSpace(path string) (float64, error) {
	var st syscall.Statfs_t
	if err := syscall.Statfs(path, &st); err != nil {
		return 0, fmt.Errorf("free space of %s: %w", path, err)
	}
	return float64(st.Bavail) * float64(st.Bsize), nil
}
