package watch

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"runtime/debug"
	"strings"
	"syscall"

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
	if err := syscall.Flock(int(f.Fd()), syscall.LOCK_EX|syscall.LOCK_NB); err != nil {
		return nil, errors.Join(fmt.Errorf("%s: %w: give another one by --data, or stop that process", dir, ErrLocked), f.Close())
	}
	return func() { _ = f.Close() }, nil
}
