package watch

import "time"

// SetWall replaces the wall clock by which a loop notices steps of it. It must be
// called before Run.
func (l *Loop) SetWall(now func() time.Time) { l.clock.wall = now }

// WaitMade waits until a run file that is being made is there, without going on to it.
func (s *Store) WaitMade() {
	if s.making != nil {
		<-s.making.done
	}
}
