package influx

import (
	"errors"
	"fmt"
	"os"
	"strings"
)

const defaultRoom = 64 << 20 // bytes

// ErrRoom is the cause of Status.Err when lines were refused and the file for them
// has no room left. The sink waits until it was emptied or moved away.
var ErrRoom = errors.New("the file for rejected lines is full: find out why the database refuses them, then move it away")

// rejects is the file of refused lines: line protocol with the reason as a comment
// before the lines that it holds for, appended to and never read.
type rejects struct {
	path string
	room int64
}

// add appends lines, all of them or none, and returns when they are on the disk.
func (r *rejects) add(lines []rejection) (err error) {
	var b strings.Builder
	reason := ""
	for _, l := range lines {
		if l.reason != reason {
			reason = l.reason
			fmt.Fprintf(&b, "# %s\n", reason)
		}
		b.WriteString(l.line)
		b.WriteByte('\n')
	}
	f, err := os.OpenFile(r.path, os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o640)
	if err != nil {
		return fmt.Errorf("rejected lines: %w", err)
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	info, err := f.Stat()
	if err != nil {
		return fmt.Errorf("rejected lines: %w", err)
	}
	size := info.Size()
	if size+int64(b.Len()) > r.room {
		return fmt.Errorf("%s: %w", r.path, ErrRoom)
	}
	if _, err := f.WriteString(b.String()); err != nil {
		return errors.Join(fmt.Errorf("rejected lines: %w", err), f.Truncate(size))
	}
	if err := f.Sync(); err != nil {
		return fmt.Errorf("rejected lines: %w", err)
	}
	return nil
}
