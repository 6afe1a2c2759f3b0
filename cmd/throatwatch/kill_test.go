package main

import (
	"path/filepath"
	"testing"

	"throatwatch/cmd/internal/faults"
)

// TestKilledDaemon kills the daemon again and again in the middle of a run while
// its data system publishes on: with a site broker that outlives it, and with the
// embedded one that dies with it, so that the data system has to reconnect and to
// send again. After each restart the run goes on. In the end everything that a
// broker has acknowledged is recorded, and is in the scans once. deploy/faults does
// the same for longer, and more.
func TestKilledDaemon(t *testing.T) {
	t.Parallel()
	const kills = 6
	for _, tt := range []struct {
		name string
		with faults.Options
	}{
		{"site broker", faults.Options{SiteKills: kills, Seed: 1}},
		{"embedded broker", faults.Options{EmbeddedKills: kills, Seed: 2}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			o := tt.with
			o.Program, o.Env = itself()
			o.Dir, o.Data, o.Speed = t.TempDir(), dataFolder(t), 2
			// On a busy machine this process may publish late, which is no loss of the daemon's.
			o.Rig = testRig(t, [2]string{"lateness: 120 ms", "lateness: 500 ms"})
			var c *faults.Counts
			if err := faults.Run(t.Context(), o, func(counts *faults.Counts) { c = counts }); err != nil {
				t.Fatal(err)
			}
			if !c.Lossless() || c.Lives <= kills/2 || c.Scans < 400 {
				t.Errorf("%+v", c)
			}
			t.Logf("%+v", c)
			folders, err := filepath.Glob(filepath.Join(o.Data, "*"))
			if err != nil || len(folders) != 1 {
				t.Fatalf("%q, %v", folders, err)
			}
			replayed(t, folders[0])
		})
	}
}
