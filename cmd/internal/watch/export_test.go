package watch

import (
	"context"
	"time"

	"throatwatch/ingest/runfile"
)

// SetWall replaces the wall clock by which a loop notices steps of it. It must be
// called before Run.
func (l *Loop) SetWall(now func() time.Time) { l.clock.wall = now }

// WaitMade waits until a run file that is being made is there, without going on to it.
func (s *Store) WaitMade() {
	if s.making != nil {
		<-s.making.done
	}
}

// RetainOnce removes the runs beyond r as of now, ns UTC.
func RetainOnce(ctx context.Context, s *Store, r runfile.Retention, now int64) error {
	return s.retain(ctx, r, time.Unix(0, now))
}
