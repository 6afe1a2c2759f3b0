package watch

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime/debug"
	"strconv"
	"strings"

	"throatwatch/cmd/internal/config"
	"throatwatch/rules/pipeline"
)

// Parse reads a recorded bundle, with the faults as one error.
func Parse(bundle []byte) (pipeline.Config, error) {
	cfg, faults := config.Parse(bundle)
	return cfg, Faults(faults)
}

// Faults gives the faults of a configuration as one error, nil when there are none.
func Faults(faults []config.Fault) error {
	if len(faults) == 0 {
		return nil
	}
	lines := make([]string, len(faults))
	for i, f := range faults {
		lines[i] = f.String()
	}
	return errors.New(strings.Join(lines, "\n"))
}

// Build names the build: its revision if it is known, else the module version.
func Build() string {
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return "unknown"
	}
	revision, dirty := info.Main.Version, ""
	for _, s := range info.Settings {
		switch {
		case s.Key == "vcs.revision":
			revision = s.Value[:min(12, len(s.Value))]
		case s.Key == "vcs.modified" && s.Value == "true":
			dirty = "+"
		}
	}
	return revision + dirty
}

// ErrLocked is returned for a data folder that another process writes to.
var ErrLocked = errors.New("another throatwatch writes to this data folder")

// Lock makes this process the only one that writes to a data folder.
func Lock(dir string) (unlock func(), err error) {
	if err := os.MkdirAll(dir, 0o750); err != nil {
		return nil, fmt.Errorf("data folder: %w", err)
	}
	f, err := os.OpenFile(filepath.Join(dir, "lock"), os.O_CREATE|os.O_RDWR, 0o600)
	if err != nil {
		return nil, fmt.Errorf("data folder: %w", err)
	}
	if err := hold(f); err != nil {
		return nil, errors.Join(fmt.Errorf("%s: %w: give another one by --data, or stop that process", dir, ErrLocked), f.Close())
	}
	return func() { _ = f.Close() }, nil
}

// NextEpoch gives the number of a new life of the daemon: above last, the newest
// that is recorded, and above all that it gave before for this data folder. A file
// keeps it, so that a life that ended before its boot was recorded leaves its
// number to nobody: what it has shown must not be taken for what the next one shows.
func NextEpoch(dir string, last uint64) (uint64, error) {
	path := filepath.Join(dir, "epoch")
	b, err := os.ReadFile(path)
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return 0, fmt.Errorf("data folder: %w", err)
	}
	kept, err := strconv.ParseUint(strings.TrimSpace(string(b)), 10, 64)
	if err != nil {
		kept = 0 // there is none, or somebody has written into it
	}
	next := max(last, kept) + 1
	if err := replace(path, strconv.AppendUint(nil, next, 10)); err != nil {
		return 0, fmt.Errorf("data folder: %w", err)
	}
	return next, nil
}

// replace gives a file new content in one step.
func replace(path string, content []byte) error {
	temp := path + ".new"
	f, err := os.OpenFile(temp, os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o640)
	if err != nil {
		return err
	}
	_, err = f.Write(append(content, '\n'))
	if err := errors.Join(err, f.Sync(), f.Close()); err != nil {
		return err
	}
	return os.Rename(temp, path)
}
