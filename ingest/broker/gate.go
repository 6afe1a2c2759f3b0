package broker

import (
	"crypto/sha256"
	"crypto/subtle"
	"strings"
	"sync"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"golang.org/x/crypto/bcrypt"
)

// gateTimeout is how long a client waits for Open before it is refused. It is
// below the time after which common clients give a CONNECT up by themselves.
const gateTimeout = 4 * time.Second

type credentials struct{ name, password string }

func (c credentials) match(name, password string) bool {
	// Hashing first makes the comparison independent of the lengths.
	a, b := sha256.Sum256([]byte(c.name+"\x00"+c.password)), sha256.Sum256([]byte(name+"\x00"+password))
	return subtle.ConstantTimeCompare(a[:], b[:]) == 1
}

// gate decides who may connect, and when. The broker calls Check on the
// goroutine of the connection, holding no lock, so it may wait.
type gate struct {
	users   []User
	own     credentials // the daemon's MQTT client
	manager credentials // the connection in process

	ready  chan struct{} // closed when redelivery has been forced
	open   chan struct{} // closed by Open
	closed chan struct{} // closed by Close

	openOnce, closeOnce sync.Once
}

var _ server.Authentication = (*gate)(nil)

// Check reports whether the client may connect.
func (g *gate) Check(c server.ClientAuthentication) bool {
	opts := c.GetOpts()
	if g.manager.match(opts.Username, opts.Password) {
		return true
	}
	wait := g.open
	switch {
	case g.own.match(opts.Username, opts.Password):
		wait = g.ready
	case !g.known(opts.Username, opts.Password):
		return false
	}
	timeout := time.NewTimer(gateTimeout)
	defer timeout.Stop()
	select {
	case <-wait:
	case <-g.closed:
		return false
	case <-timeout.C:
		return false
	}
	c.RegisterUser(&server.User{Username: opts.Username, Permissions: clientPermissions()})
	return true
}

// clientPermissions keeps MQTT clients away from the subjects by which the
// store is read and purged. A client needs $MQTT.sub for its own deliveries.
func clientPermissions() *server.Permissions {
	return &server.Permissions{
		Publish:   &server.SubjectPermission{Deny: []string{"$JS.>", "$SYS.>", "$MQTT.>", "_INBOX.>"}},
		Subscribe: &server.SubjectPermission{Deny: []string{"$JS.>", "$SYS.>", "$MQTT.msgs.>", "$MQTT.rmsgs.>", "$MQTT.sess.>", "$MQTT.JSA.>", "_INBOX.>"}},
	}
}

func (g *gate) known(name, password string) bool {
	if len(g.users) == 0 {
		return true
	}
	for _, u := range g.users {
		if u.Name != name {
			continue
		}
		if strings.HasPrefix(u.Password, "$2") {
			return bcrypt.CompareHashAndPassword([]byte(u.Password), []byte(password)) == nil
		}
		return credentials{u.Name, u.Password}.match(name, password)
	}
	return false
}
