package main

import (
	"context"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"encoding/pem"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/dashboard/access"
	"throatwatch/dashboard/webhook"
	"throatwatch/ingest"
	"throatwatch/ingest/broker"
	"throatwatch/ingest/mqtt"
	"throatwatch/monitor/influx"
)

const (
	// reachWithin bounds what it takes to reach another program.
	reachWithin = 10 * time.Second
	// quietFor is how long nothing more comes until what is missing counts as missing.
	quietFor = 2 * time.Second
	// burstBeyond is how many messages a burst has beyond the window of a session: they
	// have to wait at the broker.
	burstBeyond = 2000
	burstBytes  = 256
	// certificateAhead is how long before its end a certificate is a warning.
	certificateAhead = 30 * 24 * time.Hour
)

// port looks whether an address can be listened on, and says who does otherwise.
func (d *doctor) port(ctx context.Context, of, flag, addr string) (free bool) {
	l, err := (&net.ListenConfig{}).Listen(ctx, "tcp", addr)
	if err == nil {
		err = l.Close()
	}
	switch {
	case err == nil:
		d.add(of, passed, addr+" is free", "")
	case !inUse(err):
		d.add(of, failed, err.Error(), "give an address of this machine by "+flag)
	default:
		found := addr + " is taken"
		if who := holder(addr); who != "" {
			found += " by " + who
		}
		if d.runs {
			d.add(of, passed, found+"; a watch runs on the data folder", "")
		} else {
			d.add(of, failed, found, "end that program, or give another address by "+flag)
		}
	}
	return err == nil
}

func (d *doctor) pageAddress(ctx context.Context) {
	d.port(ctx, "page address", "--listen", d.opt.listen)
}

// broker lets the broker of the watch, or the embedded one for this, count a burst back.
func (d *doctor) broker(ctx context.Context) {
	const of = "broker"
	c := mqtt.Config{URL: d.opt.broker.url}
	if c.URL == "" {
		switch free := d.port(ctx, "broker address", "--broker-listen", d.opt.brokerListen); {
		case !free && !d.runs:
			return
		case !free:
			c.URL = "mqtt://" + d.opt.brokerListen
		default:
			stop, b, err := embeddedForTrial(ctx)
			if d.fail(of, err, "the embedded broker does not start: look at the folder for temporary files and its disk") {
				return
			}
			defer stop()
			c.URL = b.URL()
		}
	} else {
		site, err := d.opt.broker.publisher()
		if d.fail(of, err, "correct the flag, or the file that it names") {
			return
		}
		c.Username, c.Password, c.TLS = site.Username, site.Password, site.TLS
		for node := range strings.SplitSeq(c.URL, ",") {
			if u, err := url.Parse(strings.TrimSpace(node)); err == nil && u.Scheme == "mqtts" {
				d.far(ctx, "broker's certificate", u, "8883", c.TLS)
			}
		}
	}
	t, err := tryBroker(ctx, c)
	d.judgeTrial(c.URL, t, err)
}

// embeddedForTrial starts an embedded broker that keeps nothing.
func embeddedForTrial(ctx context.Context) (stop func(), b *broker.Broker, err error) {
	dir, err := os.MkdirTemp("", "throatwatch-doctor-")
	if err != nil {
		return nil, nil, err
	}
	remove := func() { _ = os.RemoveAll(dir) } // what is left is the system's to clear away
	b, err = broker.New(broker.Config{Listen: "127.0.0.1:0", StoreDir: dir}, slog.New(slog.DiscardHandler))
	if err == nil {
		err = b.Start(ctx)
	}
	if err != nil {
		remove()
		return nil, nil, err
	}
	b.Open()
	return func() {
		_ = b.Close() // it has nothing to lose
		remove()
	}, b, nil
}

// trial is what a broker did with a burst.
type trial struct {
	window, sent   int
	held           int // delivered while nothing was acknowledged
	returned       int // without copies
	took           time.Duration
	deaf, retained bool
}

// judgeTrial says what a trial means for a watch.
func (d *doctor) judgeTrial(where string, t trial, err error) {
	const of = "broker"
	const limits = "deploy/mosquitto.conf shows the limits that a broker must have"
	switch {
	case errors.Is(err, mqtt.ErrRefused):
		d.add(of, failed, where+": "+err.Error(), "let this user publish and subscribe below throatwatch/probe/")
		return
	case err != nil:
		d.add(of, failed, where+": "+err.Error(), "look whether it runs and can be reached, and at --broker, user, password and certificates")
		return
	case t.returned == 0:
		d.add(of, failed, fmt.Sprintf("%s: %d messages were taken, and none came back", where, t.sent), "let this user publish and subscribe below throatwatch/probe/ in its access list")
		return
	case t.returned < t.sent:
		d.add(of, failed, fmt.Sprintf("%s: of %d messages that it took at QoS 1 it lost %d; it delivers %d before the first is acknowledged", where, t.sent, t.sent-t.returned, t.held),
			"raise max_inflight_messages and max_queued_messages: "+limits)
		return
	case t.held < t.window:
		d.add(of, failed, fmt.Sprintf("%s: it delivers only %d messages before the first is acknowledged; a watch needs %d", where, t.held, t.window),
			"raise max_inflight_messages: "+limits)
	default:
		d.add(of, passed, fmt.Sprintf("%s: %d messages counted back at QoS 1 in %.1f s, %d of them held unacknowledged", where, t.returned, t.took.Seconds(), t.held), "")
	}
	if t.deaf {
		d.add("broker's echo", failed, "a probe message did not come back within 2 s", "look at the load of the broker and of the link")
	}
	if t.retained {
		d.add("retained", passed, "what is published retained is given to who comes later", "")
	} else {
		d.add("retained", failed, "what is published retained is not given to who comes later", "let the broker keep retained messages (retain_available): status and alarms need it")
	}
}

// tryBroker publishes a burst and counts it back, as a watch would that cannot store
// for a while: it acknowledges nothing until a window is full.
func tryBroker(ctx context.Context, c mqtt.Config) (t trial, err error) {
	base := "throatwatch/probe/doctor/" + rand.Text()
	burst, kept := base+"/burst", base+"/kept"
	reader, closeReader, err := trialClient(ctx, c, burst)
	if err != nil {
		return t, err
	}
	defer func() { err = errors.Join(err, closeReader()) }()
	t.window = mqtt.DefaultWindow
	t.sent = t.window + burstBeyond
	if t.took, err = publishBurst(ctx, c, burst, t.sent); err != nil {
		return t, err
	}
	seen := make([]bool, t.sent)
	var held []mqtt.Message
	quiet := time.NewTimer(quietFor)
	defer quiet.Stop()
	for acking := false; t.returned < t.sent; {
		select {
		case m := <-reader.Messages():
			quiet.Reset(quietFor)
			if n := len(m.Payload); n == burstBytes {
				if i := int(m.Payload[0])<<8 | int(m.Payload[1]); i < len(seen) && !seen[i] {
					seen[i] = true
					t.returned++
				}
			}
			held = append(held, m)
			if !acking {
				t.held++
				acking = t.held == t.window
			}
		case <-quiet.C:
			if acking {
				t.deaf = reader.Stats()[0].Deaf
				return t, nil
			}
			acking = true // the broker gives no more before the first is acknowledged
			quiet.Reset(quietFor)
		case <-ctx.Done():
			return t, ctx.Err()
		}
		if acking {
			for _, m := range held {
				reader.Ack(m)
			}
			held = held[:0]
		}
	}
	t.deaf = reader.Stats()[0].Deaf
	t.retained = tryRetained(ctx, c, reader, kept)
	return t, nil
}

// publishBurst publishes n numbered messages and waits until the broker has taken them.
func publishBurst(ctx context.Context, c mqtt.Config, topic string, n int) (took time.Duration, err error) {
	p, err := mqtt.NewPublisher(mqtt.PublisherConfig{URL: c.URL, Username: c.Username, Password: c.Password, TLS: c.TLS})
	if err != nil {
		return 0, err
	}
	running, stop := context.WithCancel(ctx)
	ended := make(chan struct{})
	go func() { defer close(ended); _ = p.Run(running) }() // stopped by stop; its error is that of running
	defer func() { stop(); <-ended }()
	began := time.Now()
	for i := range n {
		payload := make([]byte, burstBytes)
		payload[0], payload[1] = byte(i>>8), byte(i)
		if err := p.Publish(ctx, topic, payload); err != nil {
			return 0, fmt.Errorf("publish a burst: %w", err)
		}
	}
	if err := p.Flush(ctx); err != nil {
		return 0, fmt.Errorf("publish a burst: %d of %d messages were taken: %w", p.Stats().Acknowledged, n, err)
	}
	return time.Since(began), nil
}

// tryRetained tells whether who subscribes later gets what was published retained.
// A broker that keeps nothing ends the connection of who publishes it.
func tryRetained(ctx context.Context, c mqtt.Config, by *mqtt.Client, topic string) (ok bool) {
	if by.Publish(ctx, topic, []byte("kept"), 1, true) != nil {
		return false
	}
	later, closeLater, err := trialClient(ctx, c, topic)
	if err != nil {
		return false
	}
	select {
	case m := <-later.Messages():
		ok = m.Flags&ingest.FlagRetained != 0
		later.Ack(m)
	case <-time.After(quietFor):
	case <-ctx.Done():
	}
	err = by.Publish(ctx, topic, nil, 1, true) // an empty one removes it [MQTT-3.3.1-10]
	return errors.Join(err, closeLater()) == nil && ok
}

// trialClient connects with a session of its own, which done removes from the broker.
func trialClient(ctx context.Context, c mqtt.Config, filter string) (client *mqtt.Client, done func() error, err error) {
	if c.Dir, err = os.MkdirTemp("", "throatwatch-doctor-"); err != nil {
		return nil, nil, err
	}
	c.Filters = []string{filter}
	if client, err = mqtt.New(c); err != nil {
		return nil, nil, errors.Join(err, os.RemoveAll(c.Dir))
	}
	running, stop := context.WithCancel(context.WithoutCancel(ctx))
	ended := make(chan struct{})
	go func() { defer close(ended); _ = client.Run(running) }() // stopped by stop; its error is that of running
	done = func() error {
		stop()
		for range client.Messages() { // until Run has ended
		}
		<-ended
		forgetting, cancel := context.WithTimeout(context.WithoutCancel(ctx), reachWithin)
		defer cancel()
		return errors.Join(client.Forget(forgetting), os.RemoveAll(c.Dir))
	}
	for late := time.After(reachWithin); ; {
		select {
		case <-client.Ready():
			go func() {
				for range client.Events() { // until Run has ended: Stats tells what counts
				}
			}()
			return client, done, nil
		case e := <-client.Events():
			if e.Err == nil {
				continue
			}
			err = e.Err
		case <-late:
			err = fmt.Errorf("it is not reached within %v", reachWithin)
		case <-ctx.Done():
			err = ctx.Err()
		}
		_ = done() // what cannot be reached has no session
		return nil, nil, err
	}
}

// database writes a point into the site's database and looks for it.
func (d *doctor) database(ctx context.Context) {
	const of = "database"
	o := d.opt.influx
	if o.url == "" {
		return
	}
	token, err := readSecret(o.tokenFile)
	if d.fail(of, err, "correct --influx-token-file, or the file that it names") {
		return
	}
	rig := "doctor"
	if d.cfg != nil {
		rig = d.cfg.Rig.ID
	}
	target := influx.Target{URL: o.url, Org: o.org, Bucket: o.bucket, Token: token}
	ctx, cancel := context.WithTimeout(ctx, reachWithin)
	defer cancel()
	began := time.Now()
	unread, err := influx.Check(ctx, target, rig, began)
	found := fmt.Sprintf("%s took a point within %.0f ms", target, ms(time.Since(began)))
	switch {
	case err != nil:
		d.add(of, failed, err.Error(), "look whether it runs, and at --influx, --influx-org, --influx-bucket and the token's right to write")
	case unread != nil:
		d.add(of, warning, found+"; "+unread.Error(), "a watch only writes; who looks at it there needs a token that may read the bucket")
	default:
		d.add(of, passed, found+", and gives it back", "")
	}
}

// webhook looks whether the receiver can be reached; it is told no alarm.
func (d *doctor) webhook(ctx context.Context) {
	const of = "webhook"
	o := d.opt.webhook
	if o.url == "" {
		return
	}
	secret, err := readSecret(o.secretFile)
	if err == nil && len(secret) < webhook.ShortestSecret {
		err = fmt.Errorf("the shared secret has %d bytes: at least %d are needed", len(secret), webhook.ShortestSecret)
	}
	if d.fail(of, err, "correct --webhook-secret-file, or the file that it names") {
		return
	}
	u, err := url.Parse(o.url)
	if err != nil || u.Host == "" {
		d.add(of, failed, "the address does not parse", "give --webhook https://host/path") // the text may hold a secret
		return
	}
	if u.Scheme == "https" {
		d.far(ctx, of, u, "443", nil)
		return
	}
	conn, err := (&net.Dialer{Timeout: reachWithin}).DialContext(ctx, "tcp", hostPort(u, "80"))
	if !d.fail(of, err, "look whether the receiver runs and can be reached from here") {
		_ = conn.Close() // nothing was sent
		d.add(of, passed, u.Host+" can be reached; no alarm was sent", "")
	}
}

func hostPort(u *url.URL, port string) string {
	if p := u.Port(); p != "" {
		port = p
	}
	return net.JoinHostPort(u.Hostname(), port)
}

// far looks at the certificate of another machine.
func (d *doctor) far(ctx context.Context, of string, u *url.URL, port string, c *tls.Config) {
	ctx, cancel := context.WithTimeout(ctx, reachWithin)
	defer cancel()
	if c == nil {
		c = &tls.Config{MinVersion: tls.VersionTLS12}
	}
	conn, err := (&tls.Dialer{Config: c}).DialContext(ctx, "tcp", hostPort(u, port))
	if d.fail(of, err, "look whether it runs, and whether its certificate is by an authority that is trusted here and names "+u.Hostname()) {
		return
	}
	defer conn.Close() //nolint:errcheck // nothing was sent
	if secure, ok := conn.(*tls.Conn); ok {
		d.dates(of, u.Host, secure.ConnectionState().PeerCertificates[:1], time.Now())
	}
}

// users looks at the users file.
func (d *doctor) users() {
	const of = "users"
	path := d.opt.guard.users
	if path == "" {
		return
	}
	users, err := readUsers(path)
	if d.fail(of, err, "throatwatch user keeps the file; only the user of the watch may read it") {
		return
	}
	var n [access.Engineer + 1]int
	for _, u := range users.List() {
		n[u.Role]++
	}
	found := fmt.Sprintf("%s: %d engineers, %d operators, %d viewers", path, n[access.Engineer], n[access.Operator], n[access.Viewer])
	if n[access.Engineer] == 0 {
		d.add(of, warning, found, "without an engineer nobody can change the configuration: throatwatch user add NAME --role engineer --users "+path)
		return
	}
	d.add(of, passed, found, "")
}

// certificates looks at the certificates that the flags name.
func (d *doctor) certificates(fs *pflag.FlagSet, now time.Time) {
	if d.opt.guard.cert != "" {
		_, err := d.opt.guard.tls()
		d.fail("certificate", err, "certificate and key have to belong together")
	}
	for _, name := range []string{"tls-cert", "tls-client-ca", "broker-cert", "broker-ca"} {
		path := fs.Lookup(name).Value.String()
		if path == "" {
			continue
		}
		all, err := readCertificates(path)
		if !d.fail("certificate", err, "correct --"+name+", or the file that it names") {
			d.dates("certificate", path, all, now)
		}
	}
}

// readCertificates reads the certificates of a PEM file.
func readCertificates(path string) (all []*x509.Certificate, err error) {
	text, err := os.ReadFile(filepath.Clean(path))
	if err != nil {
		return nil, err
	}
	for block, rest := pem.Decode(text); block != nil; block, rest = pem.Decode(rest) {
		if block.Type != "CERTIFICATE" {
			continue
		}
		c, err := x509.ParseCertificate(block.Bytes)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", path, err)
		}
		all = append(all, c)
	}
	if len(all) == 0 {
		return nil, fmt.Errorf("%s: there is no certificate in it", path)
	}
	return all, nil
}

// dates judges when the first of some certificates ends.
func (d *doctor) dates(of, where string, all []*x509.Certificate, now time.Time) {
	first := slices.MinFunc(all, func(a, b *x509.Certificate) int { return a.NotAfter.Compare(b.NotAfter) })
	begins := slices.MaxFunc(all, func(a, b *x509.Certificate) int { return a.NotBefore.Compare(b.NotBefore) })
	found := fmt.Sprintf("%s: valid until %s", where, first.NotAfter.UTC().Format("2006-01-02 15:04 UTC"))
	switch left := first.NotAfter.Sub(now); {
	case now.Before(begins.NotBefore):
		d.add(of, failed, fmt.Sprintf("%s: valid from %s", where, begins.NotBefore.UTC().Format("2006-01-02 15:04 UTC")), "look at the clocks of this machine and of the authority")
	case left <= 0:
		d.add(of, failed, found+": it has ended", "renew it")
	case left < certificateAhead:
		d.add(of, warning, fmt.Sprintf("%s: %.0f days", found, left.Hours()/24), "renew it in time")
	default:
		d.add(of, passed, found, "")
	}
}
