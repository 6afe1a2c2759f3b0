// Package access says who may do what at the interface: the users of a file with
// their roles, the sessions of those who signed in, and how often a password may
// be tried.
//
// What it promises:
//
//   - A password is kept as a bcrypt hash, a machine's token and the id of a session
//     as a SHA-256: who reads the file or a core dump of the table can sign in with
//     neither. Nothing here writes a secret anywhere.
//   - An unknown name costs a password check as a known one does.
//   - Passwords are checked one at a time: a flood of tries takes at most one
//     processor from the watch. Tries are throttled by name and address, and by
//     address; the table of tries is bounded.
//   - Sessions live in memory. They end when they are not used for IdleFor, after
//     LongestSession in any case, at a restart, and when their user is removed or
//     gets another password or role.
package access

import (
	"fmt"
	"strings"
)

// Role is what somebody may do. A higher role may all that a lower one may. The
// zero value may nothing.
type Role uint8

// The roles.
const (
	Nobody   Role = iota
	Viewer        // reads
	Operator      // acknowledges, shelves, marks, starts and ends runs, enters into the log
	Engineer      // takes out of service, changes configuration, swaps and readmits sensors
)

// String gives the name of the role.
func (r Role) String() string {
	return [...]string{"nobody", "viewer", "operator", "engineer"}[r]
}

// ParseRole gives the role of a name, and whether there is one.
func ParseRole(s string) (r Role, ok bool) {
	for r := Viewer; r <= Engineer; r++ {
		if r.String() == s {
			return r, true
		}
	}
	return Nobody, false
}

// MarshalText writes the name.
func (r Role) MarshalText() ([]byte, error) { return []byte(r.String()), nil }

// UnmarshalText reads the name.
func (r *Role) UnmarshalText(b []byte) (err error) {
	*r, err = role(string(b))
	return err
}

func role(s string) (Role, error) {
	r, ok := ParseRole(s)
	if !ok {
		return Nobody, fmt.Errorf("role %q: give viewer, operator or engineer", s)
	}
	return r, nil
}

// Who is somebody with a role.
type Who struct {
	Name string
	Role Role
}

// same tells that two names are of one user: people do not remember capitals.
func same(a, b string) bool { return strings.EqualFold(a, b) }
