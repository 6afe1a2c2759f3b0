package watch_test

import (
	"testing"
	"time"

	"throatwatch/cmd/internal/watch"
)

// TestDiskTellsBeforeItIsFull fills disks at a steady rate, 1 s between readings.
// When it has to tell follows from the bounds: less than the floor is free, or the
// rest divided by the rate is less than the time ahead.
func TestDiskTellsBeforeItIsFull(t *testing.T) {
	const gb, hour = 1e9, time.Hour
	for _, tt := range []struct {
		name  string
		floor float64
		ahead time.Duration
		free  float64       // at first
		rate  float64       // bytes per second
		at    time.Duration // when it tells first; -1 s = never
		what  string
	}{
		{"no rate, above the floor", 2 * gb, 4 * hour, 2.1 * gb, 0, -time.Second, "2.1 GB free"},
		{"no rate, below the floor", 2 * gb, 4 * hour, 1.96 * gb, 0, 0, "2.0 GB free"},
		{"reaches the floor", 2 * gb, 0, 2.0005 * gb, 1e6, time.Second, "2.0 GB free"},
		{"4 h at 1 MB/s are 14.4 GB", 0, 4 * hour, 14.5 * gb, 1e6, 101 * time.Second, "14.4 GB free, enough for about 4.0 h as it fills now"},
		{"one minute gives no rate yet", 0, 4 * hour, 10 * gb, 1e6, time.Minute, "9.9 GB free, enough for about 2.8 h as it fills now"},
		{"space is gained", 2 * gb, 4 * hour, 3 * gb, -1e6, -time.Second, "3.9 GB free"},
		{"no bounds", 0, 0, 0, 0, -time.Second, "0.0 GB free"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			d := watch.Disk{Floor: tt.floor, Ahead: tt.ahead}
			began := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
			told, what := -time.Second, ""
			for s := time.Duration(0); s <= 15*time.Minute && told < 0; s += time.Second {
				var low bool
				if low, what = d.See(tt.free-tt.rate*s.Seconds(), began.Add(s)); low {
					told = s
				}
			}
			if told != tt.at || what != tt.what {
				t.Errorf("told after %v %q, want %v %q", told, what, tt.at, tt.what)
			}
		})
	}
}

// TestDiskIsWellAgain: at its floor it does not tell to and fro, and a rate is
// forgotten ten minutes after.
func TestDiskIsWellAgain(t *testing.T) {
	at := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
	d := watch.Disk{Floor: 2e9}
	for _, step := range []struct {
		free float64
		low  bool
	}{{2.1e9, false}, {1.9e9, true}, {2.1e9, true}, {2.39e9, true}, {2.41e9, false}, {2.1e9, false}} {
		if low, _ := d.See(step.free, at); low != step.low {
			t.Errorf("%.2f GB: little is %v", step.free/1e9, low)
		}
		at = at.Add(time.Second)
	}
	d = watch.Disk{Ahead: time.Hour}
	free, last := 3e9, time.Duration(0)
	for s := time.Duration(0); s < 25*time.Minute; s += time.Second {
		if s < 5*time.Minute {
			free -= 1e6 // a copy of 300 MB
		}
		if low, _ := d.See(free, at.Add(s)); low {
			last = s
		}
	}
	// 2.7 GB last 1.2 h at a mean rate of 0.62 MB/s, 300 MB in 480 s.
	if last < 470*time.Second || last > 500*time.Second {
		t.Errorf("little until %v, want 480 s", last)
	}
}

func TestFreeSpace(t *testing.T) {
	if free, err := watch.FreeSpace(t.TempDir()); err != nil || free < 1e6 {
		t.Errorf("%g bytes, %v", free, err)
	}
	if _, err := watch.FreeSpace("/nowhere/at/all"); err == nil {
		t.Error("no error where there is no folder")
	}
}
