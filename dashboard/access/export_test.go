package access

import "time"

// Bounds that tests go to.
const (
	MostSessions = mostSessions
	MostTries    = mostTries
)

// Fail notes a failed sign-in.
func (g *Gate) Fail(name, address string, now time.Time) { g.tries.failed(name, address, now) }

// Tries gives how many names and addresses are remembered.
func (g *Gate) Tries() int { return len(g.tries) }

// Hold checks a password until it is released.
func (g *Gate) Hold() (release func()) {
	g.checking <- struct{}{}
	return func() { <-g.checking }
}
