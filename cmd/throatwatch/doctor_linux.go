package main

import (
	"bufio"
	"encoding/hex"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
)

// ntp asks the kernel whether a time service keeps the clock [adjtimex(2)].
func ntp() (synchronised bool, what string, err error) {
	const unsynchronised = 0x40 // STA_UNSYNC
	var t syscall.Timex
	if _, err := syscall.Adjtimex(&t); err != nil {
		return false, "", fmt.Errorf("adjtimex: %w", err)
	}
	if t.Status&unsynchronised != 0 {
		return false, "the kernel holds it for unsynchronised", nil
	}
	return true, fmt.Sprintf("kept by a time service, within %.0f ms", float64(t.Maxerror)/1e3), nil
}

// farDisk names the kind of a file system on which locks do not hold, "" for others
// [statfs(2)].
func farDisk(path string) string {
	var st syscall.Statfs_t
	if syscall.Statfs(path, &st) != nil {
		return ""
	}
	switch st.Type {
	case 0x6969:
		return "a network disk (NFS)"
	case 0xff534d42, 0xfe534d42, 0x517b:
		return "a network disk (SMB)"
	case 0x01021997:
		return "a shared folder (9P)"
	}
	return ""
}

// holder names the program that listens on a TCP port, "" where it cannot be seen:
// other users' programs show themselves to root only.
func holder(addr string) string {
	_, port, err := net.SplitHostPort(addr)
	if err != nil {
		return ""
	}
	number, err := strconv.ParseUint(port, 10, 16)
	if err != nil {
		return ""
	}
	sockets := map[string]bool{} // links of file descriptors
	for _, table := range []string{"/proc/net/tcp", "/proc/net/tcp6"} {
		for _, inode := range listening(table, uint16(number)) {
			sockets["socket:["+inode+"]"] = true
		}
	}
	links, err := filepath.Glob("/proc/[0-9]*/fd/*")
	if err != nil || len(sockets) == 0 {
		return ""
	}
	for _, link := range links {
		if to, err := os.Readlink(link); err == nil && sockets[to] {
			dir := filepath.Dir(filepath.Dir(link))
			name, _ := os.ReadFile(filepath.Join(dir, "comm")) // it may have ended
			return fmt.Sprintf("%s, process %s", strings.TrimSpace(string(name)), filepath.Base(dir))
		}
	}
	return ""
}

// listening gives the inodes of the sockets in a table that listen on a port [proc(5)].
func listening(table string, port uint16) (inodes []string) {
	f, err := os.Open(table)
	if err != nil {
		return nil
	}
	defer f.Close() //nolint:errcheck // it is only read
	const listens = "0A"
	want := strings.ToUpper(hex.EncodeToString([]byte{byte(port >> 8), byte(port)}))
	for s := bufio.NewScanner(f); s.Scan(); {
		cells := strings.Fields(s.Text())
		if len(cells) > 9 && cells[3] == listens && strings.HasSuffix(cells[1], ":"+want) {
			inodes = append(inodes, cells[9])
		}
	}
	return inodes
}
