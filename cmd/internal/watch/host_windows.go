package watch

import (
	"fmt"
	"os"

	"golang.org/x/sys/windows"
)

// hold locks a file for as long as it is open, or fails if it is locked.
func hold(f *os.File) error {
	return windows.LockFileEx(windows.Handle(f.Fd()), windows.LOCKFILE_EXCLUSIVE_LOCK|windows.LOCKFILE_FAIL_IMMEDIATELY, 0, 1, 0, &windows.Overlapped{})
}

// FreeSpace gives the bytes that this user may still write to the disk of a path.
func FreeSpace(path string) (float64, error) {
	name, err := windows.UTF16PtrFromString(path)
	if err != nil {
		return 0, fmt.Errorf("free space of %s: %w", path, err)
	}
	var free uint64
	if err := windows.GetDiskFreeSpaceEx(name, &free, nil, nil); err != nil {
		return 0, fmt.Errorf("free space of %s: %w", path, err)
	}
	return float64(free), nil
}
