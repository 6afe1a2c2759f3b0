package mqtt_test

import (
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"errors"
	"log/slog"
	"math/big"
	"net"
	"runtime"
	"testing"
	"time"

	"github.com/eclipse/paho.mqtt.golang/packets"

	"throatwatch/ingest/broker"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

// certificate makes a self-signed certificate for 127.0.0.1.
func certificate(t *testing.T) (tls.Certificate, *x509.CertPool) {
	t.Helper()
	key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	template := &x509.Certificate{
		SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "test broker"},
		NotBefore: time.Now().Add(-time.Hour), NotAfter: time.Now().Add(time.Hour),
		IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, IsCA: true, BasicConstraintsValid: true,
	}
	der, err := x509.CreateCertificate(rand.Reader, template, template, &key.PublicKey, key)
	if err != nil {
		t.Fatal(err)
	}
	leaf, err := x509.ParseCertificate(der)
	if err != nil {
		t.Fatal(err)
	}
	pool := x509.NewCertPool()
	pool.AddCert(leaf)
	return tls.Certificate{Certificate: [][]byte{der}, PrivateKey: key}, pool
}

func TestTLSAndUsers(t *testing.T) {
	t.Parallel()
	cert, pool := certificate(t)
	b, err := broker.New(broker.Config{
		Listen: "127.0.0.1:0", StoreDir: t.TempDir(),
		TLS:   &tls.Config{Certificates: []tls.Certificate{cert}, MinVersion: tls.VersionTLS12},
		Users: []broker.User{{Name: "daemon", Password: "correct"}},
	}, slog.New(slog.DiscardHandler))
	if err != nil {
		t.Fatal(err)
	}
	if err := b.Start(t.Context()); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := b.Close(); err != nil {
			t.Error(err)
		}
	})
	b.Open()
	cfg := mqtt.Config{
		URL: b.URL(), Filters: []string{"rigs/r1/senml"}, Username: "daemon", Password: "correct",
		TLS: &tls.Config{RootCAs: pool, MinVersion: tls.VersionTLS12},
	}
	ready(t, cfg)

	stranger := cfg
	stranger.TLS = nil // the system's authorities do not know the certificate
	c := run(t, stranger)
	var unknown x509.UnknownAuthorityError
	if e := c.event(mqtt.EventDisconnected); !errors.As(e.Err, &unknown) {
		t.Errorf("unknown certificate: %v, want it refused", e)
	}
	wrong := cfg
	wrong.Password = "incorrect"
	c = run(t, wrong)
	if e := c.event(mqtt.EventDisconnected); e.Err == nil || !isRefusal(e.Err) {
		t.Errorf("wrong password: %v, want it refused", e)
	}
}

// isRefusal accepts both ways in which a broker may refuse a user: with a return
// code, or by closing the connection [MQTT-3.1.4-1].
func isRefusal(err error) bool {
	return errors.Is(err, packets.ErrorRefusedNotAuthorised) || errors.Is(err, packets.ErrorRefusedBadUsernameOrPassword) ||
		errors.Is(err, packets.ErrorNetworkError)
}

// TestRunLeavesNothing is not parallel: it counts goroutines.
func TestRunLeavesNothing(t *testing.T) {
	s := mqtttest.Mosquitto(t)
	before := runtime.NumGoroutine()
	cfg := mqtt.Config{URL: s.URL, Filters: []string{"a/1", "a/2", "a/3"}, Dir: t.TempDir()}
	for range 3 {
		ready(t, cfg).stop()
	}
	s.Stop()
	c := run(t, cfg) // no broker
	c.event(mqtt.EventDisconnected)
	c.stop()
	for deadline := time.Now().Add(patience); runtime.NumGoroutine() > before; time.Sleep(20 * time.Millisecond) {
		if time.Now().After(deadline) {
			buf := make([]byte, 1<<16)
			t.Fatalf("%d goroutines, %d before:\n%s", runtime.NumGoroutine(), before, buf[:runtime.Stack(buf, true)])
		}
	}
}
