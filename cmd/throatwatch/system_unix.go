//go:build unix

package main

import (
	"fmt"
	"os"
	"syscall"
)

// addressInUse is the error of a port that another program listens on.
const addressInUse = syscall.EADDRINUSE

// closedToOthers gives an error for a file of secrets that others may read, or that
// its group may change.
func closedToOthers(info os.FileInfo) error {
	if mode := info.Mode().Perm(); mode&0o027 != 0 {
		return fmt.Errorf("its mode %04o lets others read or change it: chmod 600 (or 640)", mode)
	}
	return nil
}

// ownerOf gives user and group of a file, -1 where they are not known.
func ownerOf(info os.FileInfo) (user, group int) {
	if st, ok := info.Sys().(*syscall.Stat_t); ok {
		return int(st.Uid), int(st.Gid)
	}
	return -1, -1
}
