package watch_test

import (
	"os"
	"path/filepath"
	"testing"

	"throatwatch/cmd/internal/watch"
)

// The number of a life is given once, whatever is recorded of it.
func TestNextEpoch(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	for _, tt := range []struct {
		name string
		last uint64 // recorded
		want uint64
	}{
		{"the first", 0, 1},
		{"nothing of the first is recorded", 0, 2},
		{"as it should be", 2, 3},
		{"nor of the third", 2, 4},
		{"the file is of an older copy", 9, 10},
	} {
		got, err := watch.NextEpoch(dir, tt.last)
		if err != nil || got != tt.want {
			t.Errorf("%s: %d, %v, want %d", tt.name, got, err, tt.want)
		}
	}
	path := filepath.Join(dir, "epoch")
	must(t, os.WriteFile(path, []byte("ten\n"), 0o600))
	if got, err := watch.NextEpoch(dir, 10); err != nil || got != 11 {
		t.Errorf("over a file that was written into: %d, %v", got, err)
	}
	must(t, os.Remove(path))
	must(t, os.Mkdir(path, 0o750))
	if got, err := watch.NextEpoch(dir, 11); err == nil {
		t.Errorf("without being able to keep it: %d", got)
	}
	if _, err := watch.NextEpoch(filepath.Join(dir, "nowhere"), 0); err == nil {
		t.Error("in a folder that is not there")
	}
}
