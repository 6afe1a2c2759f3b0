package mqtttest

import (
	"context"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/pem"
	"math/big"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// SitePassword is the password of every data system of a Site.
const SitePassword = "a password of the test"

// Site is a mosquitto with the configuration and the access list that deploy has
// for a site: data systems come by password, watches by certificate.
type Site struct {
	*Server
	DataURL  string // of the listener of data systems; that of Server is the one of watches
	CA       string // file with the certificate by which the broker proves itself
	Cert     string // file with the certificate of a watch
	Key      string // file with its key
	Stranger tls.Certificate
	Pool     *x509.CertPool
}

// MosquittoSite makes such a broker from the files in deploy, the path of that folder,
// with a data system for each name; Start starts it.
func MosquittoSite(tb testing.TB, deploy string, names ...string) *Site {
	tb.Helper()
	dir := tb.TempDir()
	read := func(name string) string {
		text, err := os.ReadFile(filepath.Join(deploy, name))
		if err != nil {
			tb.Fatal(err)
		}
		return string(text)
	}
	write := func(name, text string) string {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
			tb.Fatal(err)
		}
		return path
	}
	site, watches := newAuthority(tb, "site"), newAuthority(tb, "watches")
	s := &Site{CA: write("site-ca.pem", site.pem), Pool: x509.NewCertPool()}
	s.Pool.AddCert(site.cert)
	cert, key := site.sign(tb, "broker")
	write("server.pem", cert)
	write("server.key", key)
	write("watches-ca.pem", watches.pem)
	cert, key = watches.sign(tb, "throatwatch")
	s.Cert, s.Key = write("watch.pem", cert), write("watch.key", key)
	cert, key = site.sign(tb, "throatwatch") // the right name by the wrong authority
	var err error
	if s.Stranger, err = tls.X509KeyPair([]byte(cert), []byte(key)); err != nil {
		tb.Fatal(err)
	}
	passwords := write("passwd", "")
	for _, name := range names {
		if out, err := exec.CommandContext(tb.Context(), "mosquitto_passwd", "-b", passwords, name, SitePassword).CombinedOutput(); err != nil {
			tb.Fatalf("mosquitto_passwd: %v %s", err, out)
		}
	}
	write("acl", read("mosquitto-site.acl"))

	data, own := FreeAddr(tb), FreeAddr(tb)
	s.DataURL = "mqtts://" + data
	conf := read("mosquitto-site.conf")
	for _, c := range [][2]string{
		{"/etc/mosquitto/throatwatch/", dir + "/"},
		{"listener 8883", "listener " + port(tb, data) + " 127.0.0.1"},
		{"listener 8884", "listener " + port(tb, own) + " 127.0.0.1"},
		{"persistence_location /var/lib/mosquitto/", "persistence_location " + dir + "/"},
		{"log_dest syslog", "log_dest none"},
	} {
		if !strings.Contains(conf, c[0]) {
			tb.Fatalf("mosquitto-site.conf has no %q", c[0])
		}
		conf = strings.ReplaceAll(conf, c[0], c[1])
	}
	if os.Geteuid() == 0 {
		conf = "user root\n" + conf // it would else become a user that cannot read dir
	}
	s.Server = mosquitto(tb, write("mosquitto.conf", conf), own)
	s.URL = "mqtts://" + own
	tb.Cleanup(s.stop)
	return s
}

func port(tb testing.TB, addr string) string {
	tb.Helper()
	_, port, err := net.SplitHostPort(addr)
	if err != nil {
		tb.Fatal(err)
	}
	return port
}

// authority signs certificates.
type authority struct {
	cert *x509.Certificate
	key  *ecdsa.PrivateKey
	pem  string
}

func newAuthority(tb testing.TB, name string) *authority {
	tb.Helper()
	a := &authority{}
	der, key := a.certificate(tb, &x509.Certificate{
		Subject: pkix.Name{CommonName: name}, IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageCertSign,
	})
	cert, err := x509.ParseCertificate(der)
	if err != nil {
		tb.Fatal(err)
	}
	return &authority{cert: cert, key: key, pem: text("CERTIFICATE", der)}
}

// sign makes a certificate for a name and 127.0.0.1, and its key, PEM.
func (a *authority) sign(tb testing.TB, name string) (cert, key string) {
	tb.Helper()
	der, k := a.certificate(tb, &x509.Certificate{
		Subject: pkix.Name{CommonName: name}, IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)},
		ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth, x509.ExtKeyUsageClientAuth},
	})
	keyDER, err := x509.MarshalPKCS8PrivateKey(k)
	if err != nil {
		tb.Fatal(err)
	}
	return text("CERTIFICATE", der), text("PRIVATE KEY", keyDER)
}

func (a *authority) certificate(tb testing.TB, c *x509.Certificate) ([]byte, *ecdsa.PrivateKey) {
	tb.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		tb.Fatal(err)
	}
	if c.SerialNumber, err = rand.Int(rand.Reader, big.NewInt(1<<62)); err != nil {
		tb.Fatal(err)
	}
	c.NotBefore, c.NotAfter = time.Now().Add(-time.Hour), time.Now().Add(time.Hour)
	parent, by := a.cert, a.key
	if by == nil {
		parent, by = c, key
	}
	der, err := x509.CreateCertificate(rand.Reader, c, parent, &key.PublicKey, by)
	if err != nil {
		tb.Fatal(err)
	}
	return der, key
}

func text(kind string, der []byte) string {
	return string(pem.EncodeToMemory(&pem.Block{Type: kind, Bytes: der}))
}

// mosquitto gives a broker by a configuration file that listens on addr, not yet
// started.
func mosquitto(tb testing.TB, path, addr string) *Server {
	tb.Helper()
	program, err := exec.LookPath("mosquitto")
	if err != nil {
		program = "/usr/sbin/mosquitto" // not on everyone's path
	}
	var cmd *exec.Cmd
	s := &Server{Addr: addr, URL: "mqtt://" + addr}
	s.start = func() {
		tb.Helper()
		cmd = exec.CommandContext(context.Background(), program, "-c", path)
		if err := cmd.Start(); err != nil {
			tb.Fatal(err)
		}
		waitListening(tb, addr)
	}
	s.stop = func() {
		if cmd == nil || cmd.ProcessState != nil {
			return // not started, or stopped before
		}
		// It writes its persistence file on SIGTERM.
		if err := cmd.Process.Signal(syscall.SIGTERM); err != nil {
			tb.Error(err)
		}
		_ = cmd.Wait() // ending by a signal counts as an error
	}
	return s
}
