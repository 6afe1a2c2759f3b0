package main

import (
	"context"
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"os"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/dashboard/access"
)

// usersEvery is how often the users file is looked at.
const usersEvery = 2 * time.Second

// guardOptions are the flags that say who gets at the page.
type guardOptions struct {
	users, openRole     string
	cert, key, clientCA string
}

func (o *guardOptions) flags(fs *pflag.FlagSet) {
	fs.StringVar(&o.users, "users", "", "file of the people and machines that may come in, kept by throatwatch user (default: nobody is asked)")
	fs.StringVar(&o.openRole, "open-role", "operator", "without --users: role of whoever comes, operator or engineer")
	fs.StringVar(&o.cert, "tls-cert", "", "file with the certificate of the page, PEM; the page is served over TLS then")
	fs.StringVar(&o.key, "tls-key", "", "file with its key, PEM")
	fs.StringVar(&o.clientCA, "tls-client-ca", "", "file with certificates, PEM: who connects needs a certificate by one of them")
}

// check finds what cannot be meant.
func (o *guardOptions) check(fs *pflag.FlagSet) error {
	role, ok := access.ParseRole(o.openRole)
	switch {
	case !ok || role == access.Viewer:
		return fmt.Errorf("--open-role %q: give operator or engineer", o.openRole)
	case o.users != "" && fs.Changed("open-role"):
		return errors.New("--open-role is for a watch without --users: there the file gives the roles")
	case (o.cert == "") != (o.key == ""):
		return errors.New("--tls-cert and --tls-key belong together: give both")
	case o.clientCA != "" && o.cert == "":
		return errors.New("--tls-client-ca is for TLS: add --tls-cert and --tls-key")
	}
	return nil
}

// closed tells that only those who prove who they are get at the page, and nobody
// reads along.
func (o *guardOptions) closed() bool { return o.cert != "" && (o.users != "" || o.clientCA != "") }

// role gives the role of everybody where nobody is asked.
func (o *guardOptions) role() access.Role {
	role, _ := access.ParseRole(o.openRole)
	return role
}

// loopback tells that a host, as in --listen, is this machine's own.
func loopback(host string) bool {
	ip := net.ParseIP(host)
	return host == "localhost" || ip != nil && ip.IsLoopback()
}

// tls gives the TLS settings of the page, nil for none.
func (o *guardOptions) tls() (*tls.Config, error) {
	if o.cert == "" {
		return nil, nil //nolint:nilnil // a page without TLS is no error
	}
	pair, err := tls.LoadX509KeyPair(o.cert, o.key)
	if err != nil {
		return nil, fmt.Errorf("--tls-cert, --tls-key: %w", err)
	}
	c := &tls.Config{MinVersion: tls.VersionTLS12, Certificates: []tls.Certificate{pair}}
	if o.clientCA == "" {
		return c, nil
	}
	text, err := os.ReadFile(o.clientCA)
	if err != nil {
		return nil, fmt.Errorf("--tls-client-ca: %w", err)
	}
	c.ClientCAs, c.ClientAuth = x509.NewCertPool(), tls.RequireAndVerifyClientCert
	if !c.ClientCAs.AppendCertsFromPEM(text) {
		return nil, fmt.Errorf("--tls-client-ca %s: there is no certificate in it", o.clientCA)
	}
	return c, nil
}

// guard keeps a gate up with its users file.
type guard struct {
	path string
	gate *access.Gate
	log  *slog.Logger
	seen os.FileInfo // when the file was read last; belongs to run
}

// open gives the gate, nil when nobody is asked.
func (o *guardOptions) open(log *slog.Logger) (*guard, error) {
	if o.users == "" {
		return nil, nil //nolint:nilnil // a watch that asks nobody is no error
	}
	g := &guard{path: o.users, log: log}
	users, err := g.read()
	if err != nil {
		return nil, fmt.Errorf("--users: %w (throatwatch user add NAME --role engineer --users %s makes it)", err, o.users)
	}
	g.gate = access.NewGate(users)
	return g, nil
}

func (g *guard) read() (*access.Users, error) {
	g.seen, _ = os.Stat(g.path) // what is wrong with it is said by readUsers
	return readUsers(g.path)
}

// run takes changes of the file up until ctx ends. A file with a fault changes
// nothing.
func (g *guard) run(ctx context.Context) {
	tick := time.NewTicker(usersEvery)
	defer tick.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case <-tick.C:
		}
		now, err := os.Stat(g.path)
		if err == nil && g.seen != nil && os.SameFile(now, g.seen) && now.ModTime().Equal(g.seen.ModTime()) && now.Size() == g.seen.Size() && now.Mode() == g.seen.Mode() || err != nil && g.seen == nil {
			continue
		}
		users, err := g.read()
		if err != nil {
			g.log.Error("the users file is not taken up: those before stay in force", "err", err)
			continue
		}
		g.gate.Use(users)
		g.log.Info("the users file is taken up", "users", len(users.List()))
	}
}
