package access

import (
	"cmp"
	"context"
	"crypto/sha256"
	"crypto/subtle"
	"errors"
	"fmt"
	"strings"
	"sync"
	"time"

	"golang.org/x/crypto/bcrypt"
)

const (
	// IdleFor is how long a session lives without a request and without an open
	// websocket.
	IdleFor = time.Hour
	// LongestSession is how long it lives in any case: a shift.
	LongestSession = 12 * time.Hour
	// mostSessions bounds the table. When it is full the one not used for longest
	// ends.
	mostSessions = 256
	// checkWait is how long a sign-in waits for those before it.
	checkWait = 5 * time.Second
)

var (
	// ErrCredentials is returned for a name and password that do not belong together,
	// whichever of them is wrong.
	ErrCredentials = errors.New("name or password is wrong")
	// ErrBusy is returned when too many sign in at once.
	ErrBusy = errors.New("too many sign in at once: try again")
)

// ThrottledError says how long no further try is taken.
type ThrottledError struct{ Wait time.Duration }

func (e *ThrottledError) Error() string {
	return fmt.Sprintf("too many tries: wait %v", e.Wait.Round(time.Second))
}

// Session is one sign-in.
type Session struct {
	ID   string // the secret of the cookie
	Who  Who
	CSRF string // to be sent in a header with what changes something
	Ends time.Time
}

// session is a Session in the table.
type session struct {
	who  Who
	hash string // of the password that opened it
	csrf string
	ends time.Time
	used time.Time
}

// Gate lets people and machines in. Its methods may be called from any goroutine.
type Gate struct {
	checking chan struct{} // one slot, held while a password is checked

	mu       sync.Mutex // protects the fields below
	users    *Users
	sessions map[[sha256.Size]byte]*session // by the hash of the id
	tries    tries
}

// NewGate gives a gate for the users of a file; they belong to the gate then.
func NewGate(u *Users) *Gate {
	return &Gate{
		checking: make(chan struct{}, 1), users: u,
		sessions: map[[sha256.Size]byte]*session{}, tries: tries{},
	}
}

// Use puts other users in force. Sessions end of those who are gone or have another
// password or role.
func (g *Gate) Use(u *Users) {
	g.mu.Lock()
	defer g.mu.Unlock()
	g.users = u
	for id, s := range g.sessions {
		i := u.find(s.who.Name)
		if i < 0 || u.list[i].Password != s.hash || u.list[i].Role != s.who.Role {
			delete(g.sessions, id)
		}
	}
}

// Known tells that there is a user of this name: a log must not show another, which
// may be a password in the wrong field.
func (g *Gate) Known(name string) bool {
	g.mu.Lock()
	defer g.mu.Unlock()
	return g.users.find(name) >= 0
}

// SignIn opens a session. address is where the request comes from. The errors are
// ErrCredentials, *ThrottledError, ErrBusy and that of ctx.
func (g *Gate) SignIn(ctx context.Context, name, password, address string, now time.Time) (Session, error) {
	wait, cancel := context.WithTimeout(ctx, checkWait)
	defer cancel()
	select {
	case g.checking <- struct{}{}:
	case <-wait.Done():
		return Session{}, cmp.Or(ctx.Err(), ErrBusy)
	}
	defer func() { <-g.checking }()

	one, hash, err := g.mayTry(name, address, now)
	if err != nil {
		return Session{}, err
	}
	wrong := bcrypt.CompareHashAndPassword([]byte(hash), []byte(password)) != nil || len(password) > longestPassword

	g.mu.Lock()
	defer g.mu.Unlock()
	if wrong || one.Password == "" {
		g.tries.failed(name, address, now)
		return Session{}, ErrCredentials
	}
	if i := g.users.find(name); i < 0 || g.users.list[i] != one { // changed meanwhile
		return Session{}, ErrCredentials
	}
	g.tries.passed(name, address)
	return g.open(&one, now), nil
}

// mayTry gives the user of a name and the hash to compare with, unless no further try
// is taken now. For who has no password it is that of somebody else, so that it costs
// the same.
func (g *Gate) mayTry(name, address string, now time.Time) (one User, hash string, err error) {
	g.mu.Lock()
	defer g.mu.Unlock()
	if wait := g.tries.wait(name, address, now); wait > 0 {
		return User{}, "", &ThrottledError{wait}
	}
	if i := g.users.find(name); i >= 0 {
		one = g.users.list[i]
	}
	hash = one.Password
	for i := range g.users.list {
		hash = cmp.Or(hash, g.users.list[i].Password)
	}
	return one, hash, nil
}

func (g *Gate) open(one *User, now time.Time) Session {
	if len(g.sessions) >= mostSessions {
		g.makeRoom(now)
	}
	id := random()
	s := &session{who: Who{one.Name, one.Role}, hash: one.Password, csrf: random(), ends: now.Add(LongestSession), used: now}
	g.sessions[sha256.Sum256([]byte(id))] = s
	return Session{id, s.who, s.csrf, s.ends}
}

// makeRoom ends sessions that are over, or else the one not used for longest.
func (g *Gate) makeRoom(now time.Time) {
	var oldest [sha256.Size]byte
	var used time.Time
	for id, s := range g.sessions {
		if s.over(now) {
			delete(g.sessions, id)
		} else if used.IsZero() || s.used.Before(used) {
			oldest, used = id, s.used
		}
	}
	if len(g.sessions) >= mostSessions {
		delete(g.sessions, oldest)
	}
}

func (s *session) over(now time.Time) bool {
	return !now.Before(s.ends) || now.Sub(s.used) >= IdleFor
}

// Session gives the session of an id and notes that it is used.
func (g *Gate) Session(id string, now time.Time) (Session, bool) {
	g.mu.Lock()
	defer g.mu.Unlock()
	key := sha256.Sum256([]byte(id))
	s, ok := g.sessions[key]
	if !ok {
		return Session{}, false
	}
	if s.over(now) {
		delete(g.sessions, key)
		return Session{}, false
	}
	s.used = now
	return Session{id, s.who, s.csrf, s.ends}, true
}

// SignOut ends a session.
func (g *Gate) SignOut(id string) {
	g.mu.Lock()
	defer g.mu.Unlock()
	delete(g.sessions, sha256.Sum256([]byte(id)))
}

// Machine gives the machine of a token.
func (g *Gate) Machine(token string) (Who, bool) {
	if !strings.HasPrefix(token, tokenMark) {
		return Who{}, false
	}
	g.mu.Lock()
	defer g.mu.Unlock()
	return g.users.machine(token)
}

// SameText compares secrets in a time that does not tell where they differ.
func SameText(a, b string) bool { return subtle.ConstantTimeCompare([]byte(a), []byte(b)) == 1 }
