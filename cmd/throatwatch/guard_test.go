package main

import (
	"bytes"
	"context"
	"crypto/ecdsa"
	"crypto/elliptic"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"crypto/x509/pkix"
	"encoding/json"
	"encoding/pem"
	"fmt"
	"io"
	"math/big"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"

	"github.com/gorilla/websocket"
)

const testPassword = "nine grey herons stand"

// secretFile writes a file that only its owner reads.
func secretFile(t *testing.T, name, text string) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// TestUserCommand keeps a file through its life.
func TestUserCommand(t *testing.T) {
	t.Parallel()
	file := filepath.Join(t.TempDir(), "users.json")
	password := secretFile(t, "password", testPassword+"\n")
	short := secretFile(t, "short", "too short\n")
	token := ""
	for _, tt := range []struct {
		args   []string
		code   int
		stdout string // a pattern
		stderr string // a part
	}{
		{[]string{}, 2, "", "say what to do"},
		{[]string{"rename", "x"}, 2, "", `no "rename"`},
		{[]string{"list"}, 2, "", "--users"},
		{[]string{"list", "--users", file}, 1, "", "no such file"},
		{[]string{"add", "Mo Oduya", "--users", file, "--password-file", password}, 2, "", "--role"},
		{[]string{"add", "--role", "viewer", "--users", file}, 2, "", "1 is needed"},
		{[]string{"add", "Mo Oduya", "--role", "chief", "--users", file}, 2, "", `"chief"`},
		{[]string{"add", "Mo Oduya", "--role", "operator", "--users", file, "--password-file", short}, 1, "", "at least 12"},
		{[]string{"add", "Mo Oduya", "--role", "operator", "--users", file, "--password-file", password}, 0, "", ""},
		{[]string{"add", "mo oduya", "--role", "viewer", "--users", file, "--password-file", password}, 1, "", "already"},
		{[]string{"token", "collector", "--role", "viewer", "--users", file}, 0, `throatwatch-[A-Za-z0-9_-]{43}\n`, ""},
		{[]string{"token", "other", "--role", "viewer", "--users", file, "--password-file", password}, 2, "", "no --password-file"},
		{[]string{"list", "--users", file}, 0, `viewer +machine +collector\noperator +person +Mo Oduya\n`, ""},
		{[]string{"set-password", "Mo Oduya", "--users", file, "--password-file", password}, 0, "", ""},
		{[]string{"set-password", "Mo Oduya", "--role", "viewer", "--users", file}, 2, "", "no --role"},
		{[]string{"set-password", "collector", "--users", file, "--password-file", password}, 1, "", "token"},
		{[]string{"remove", "collector", "--users", file}, 0, "", ""},
		{[]string{"remove", "collector", "--users", file}, 1, "", "no user"},
		{[]string{"list", "--json", "--users", file}, 0, `(?s)\[\s*\{\s*"name": "Mo Oduya",\s*"role": "operator",\s*"kind": "person"\s*\}\s*\]\n`, ""},
	} {
		code, stdout, stderr := invoke(t, append([]string{"user"}, tt.args...)...)
		if code != tt.code || !regexp.MustCompile("^"+tt.stdout+"$").MatchString(stdout) || !strings.Contains(stderr, tt.stderr) || tt.code == 0 && stderr != "" {
			t.Errorf("%v: exit code %d, %q, %q", tt.args, code, stdout, stderr)
		}
		if strings.HasPrefix(stdout, "throatwatch-") {
			token = strings.TrimSpace(stdout)
		}
	}
	info, err := os.Stat(file)
	if err != nil || info.Mode().Perm() != 0o600 {
		t.Errorf("mode %v, %v", info.Mode(), err)
	}
	text, err := os.ReadFile(file)
	if err != nil || strings.Contains(string(text), testPassword) || strings.Contains(string(text), token) {
		t.Errorf("%v: the file shows a secret:\n%s", err, text)
	}
	if err := os.Chmod(file, 0o644); err != nil {
		t.Fatal(err)
	}
	if code, _, stderr := invoke(t, "user", "list", "--users", file); code != 1 || !strings.Contains(stderr, "chmod 600") {
		t.Errorf("a file that everybody reads: %d, %q", code, stderr)
	}
	if err := os.Chmod(file, 0o640); err != nil { // the group of a service
		t.Fatal(err)
	}
	if code, _, stderr := invoke(t, "user", "set-password", "Mo Oduya", "--users", file, "--password-file", password); code != 0 {
		t.Errorf("%q", stderr)
	}
	if info, err := os.Stat(file); err != nil || info.Mode().Perm() != 0o640 {
		t.Errorf("the mode becomes %v, %v", info.Mode(), err)
	}
}

// The password can come from standard input too, and from nothing it is refused.
func TestUserPasswordFromInput(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct {
		text string
		ok   bool
	}{{testPassword + "\nmore\n", true}, {testPassword, true}, {"", false}} {
		in, err := os.Open(secretFile(t, "in", tt.text))
		if err != nil {
			t.Fatal(err)
		}
		defer in.Close()
		o := userOptions{file: filepath.Join(t.TempDir(), "users.json"), role: "viewer"}
		if err := o.do([]string{"add", "a"}, in, io.Discard, io.Discard); (err == nil) != tt.ok {
			t.Errorf("%q: %v", tt.text, err)
		}
	}
}

// pki is a certificate authority with a certificate for the server and one for a client.
type pki struct {
	ca, cert, key string // files
	pool          *x509.CertPool
	client        tls.Certificate
}

func newPKI(t *testing.T) *pki {
	t.Helper()
	dir := t.TempDir()
	write := func(name, kind string, der []byte) string {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, pem.EncodeToMemory(&pem.Block{Type: kind, Bytes: der}), 0o600); err != nil {
			t.Fatal(err)
		}
		return path
	}
	make1 := func(c, parent *x509.Certificate, by *ecdsa.PrivateKey) ([]byte, *ecdsa.PrivateKey) {
		key, err := ecdsa.GenerateKey(elliptic.P256(), rand.Reader)
		if err != nil {
			t.Fatal(err)
		}
		c.NotBefore, c.NotAfter = time.Now().Add(-time.Hour), time.Now().Add(time.Hour)
		if by == nil {
			parent, by = c, key
		}
		der, err := x509.CreateCertificate(rand.Reader, c, parent, &key.PublicKey, by)
		if err != nil {
			t.Fatal(err)
		}
		return der, key
	}
	ca := &x509.Certificate{SerialNumber: big.NewInt(1), Subject: pkix.Name{CommonName: "test"}, IsCA: true, BasicConstraintsValid: true, KeyUsage: x509.KeyUsageCertSign}
	caDER, caKey := make1(ca, nil, nil)
	serverDER, serverKey := make1(&x509.Certificate{
		SerialNumber: big.NewInt(2), IPAddresses: []net.IP{net.IPv4(127, 0, 0, 1)}, ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageServerAuth},
	}, ca, caKey)
	clientDER, clientKey := make1(&x509.Certificate{SerialNumber: big.NewInt(3), ExtKeyUsage: []x509.ExtKeyUsage{x509.ExtKeyUsageClientAuth}}, ca, caKey)
	keyDER, err := x509.MarshalPKCS8PrivateKey(serverKey)
	if err != nil {
		t.Fatal(err)
	}
	p := &pki{
		ca: write("ca.pem", "CERTIFICATE", caDER), cert: write("cert.pem", "CERTIFICATE", serverDER), key: write("key.pem", "PRIVATE KEY", keyDER),
		pool: x509.NewCertPool(), client: tls.Certificate{Certificate: [][]byte{clientDER}, PrivateKey: clientKey},
	}
	parsed, err := x509.ParseCertificate(caDER)
	if err != nil {
		t.Fatal(err)
	}
	p.pool.AddCert(parsed)
	return p
}

// TestGuardedWatch: the daemon with users over mutual TLS, reachable from other
// machines without a further flag. Somebody signs in, and somebody else is removed
// while it runs. No secret is in what it says.
func TestGuardedWatch(t *testing.T) {
	t.Parallel()
	keys := newPKI(t)
	file := filepath.Join(t.TempDir(), "users.json")
	password := secretFile(t, "password", testPassword)
	token := ""
	for _, args := range [][]string{
		{"add", "Edda Marsh", "--role", "engineer", "--password-file", password},
		{"token", "collector", "--role", "viewer"},
	} {
		code, stdout, stderr := invoke(t, append(append([]string{"user"}, args...), "--users", file)...)
		if code != 0 {
			t.Fatal(stderr)
		}
		token = strings.TrimSpace(stdout)
	}
	p := start(t, "watch", rehearseRig, "--data", dataFolder(t), "--listen", "0.0.0.0:0", "--broker-listen", "127.0.0.1:0", "--verbose",
		"--users", file, "--tls-cert", keys.cert, "--tls-key", keys.key, "--tls-client-ca", keys.ca)
	address := p.says(regexp.MustCompile(`https://\S+:(\d+)/`))
	page := "https://127.0.0.1:" + address[1]

	config := &tls.Config{RootCAs: keys.pool, MinVersion: tls.VersionTLS12}
	stranger := &http.Client{Transport: &http.Transport{TLSClientConfig: config}, Timeout: patience}
	defer stranger.CloseIdleConnections()
	known := config.Clone()
	known.Certificates = []tls.Certificate{keys.client}
	client := &http.Client{Transport: &http.Transport{TLSClientConfig: known}, Timeout: patience}
	defer client.CloseIdleConnections()
	type answer struct {
		status  int
		cookies []*http.Cookie
		text    string
	}
	ask := func(c *http.Client, method, path, body string, header http.Header) (answer, error) {
		r, err := http.NewRequestWithContext(t.Context(), method, page+path, strings.NewReader(body))
		if err != nil {
			t.Fatal(err)
		}
		for k := range header {
			r.Header.Set(k, header.Get(k))
		}
		res, err := c.Do(r)
		if err != nil {
			return answer{}, err
		}
		defer res.Body.Close()
		text, err := io.ReadAll(res.Body)
		return answer{res.StatusCode, res.Cookies(), string(text)}, err
	}
	if _, err := ask(stranger, http.MethodGet, "/healthz", "", nil); err == nil {
		t.Error("who has no certificate gets an answer")
	}
	must := func(method, path, body string, header http.Header, status int) answer {
		t.Helper()
		a, err := ask(client, method, path, body, header)
		if err != nil {
			t.Fatal(err)
		}
		if a.status != status {
			t.Errorf("%s %s: %d %s, want %d", method, path, a.status, a.text, status)
		}
		return a
	}
	bearer := http.Header{"Authorization": {"Bearer " + token}}
	must(http.MethodGet, "/healthz", "", nil, http.StatusOK)
	must(http.MethodGet, "/api/alarms", "", nil, http.StatusUnauthorized)
	must(http.MethodGet, "/api/alarms", "", bearer, http.StatusOK)
	must(http.MethodPost, "/api/session", `{"name":"Edda Marsh","password":"not the password"}`, nil, http.StatusUnauthorized)
	in := must(http.MethodPost, "/api/session", fmt.Sprintf(`{"name":"Edda Marsh","password":%q}`, testPassword), nil, http.StatusOK)
	var session struct{ Role, CSRF string }
	if err := json.Unmarshal([]byte(in.text), &session); err != nil || session.Role != "engineer" || len(in.cookies) != 1 {
		t.Fatalf("%v %s", err, in.text)
	}
	cookie := in.cookies[0]
	signed := http.Header{"Cookie": {cookie.Name + "=" + cookie.Value}}
	dialer := websocket.Dialer{TLSClientConfig: known}
	conn, res, err := dialer.DialContext(t.Context(), "wss"+strings.TrimPrefix(page, "https")+"/live", signed)
	if err != nil {
		t.Fatal(err)
	}
	_ = res.Body.Close()
	defer conn.Close()
	if _, hello, err := conn.ReadMessage(); err != nil || !bytes.Contains(hello, []byte(`"kind":"hello"`)) {
		t.Errorf("%v %.200s", err, hello)
	}
	metrics := must(http.MethodGet, "/metrics", "", bearer, http.StatusOK).text

	if code, _, stderr := invoke(t, "user", "remove", "collector", "--users", file); code != 0 {
		t.Fatal(stderr)
	}
	for deadline := time.Now().Add(patience); ; time.Sleep(100 * time.Millisecond) {
		a, err := ask(client, http.MethodGet, "/api/alarms", "", bearer)
		if err == nil && a.status == http.StatusUnauthorized {
			break
		}
		if time.Now().After(deadline) {
			t.Fatal("a machine that was removed still reads")
		}
	}
	must(http.MethodGet, "/api/alarms", "", signed, http.StatusOK) // the others go on
	if err := os.WriteFile(file, []byte(`{"users":[`), 0o600); err != nil {
		t.Fatal(err)
	}
	p.logs(`not taken up`)
	must(http.MethodGet, "/api/alarms", "", signed, http.StatusOK)
	p.logs(`msg="signed in" name="Edda Marsh" role=engineer from=127.0.0.1`)
	p.logs(`msg="sign-in refused" name="Edda Marsh"`)
	p.stop()
	for _, hidden := range []string{testPassword, "not the password", token, cookie.Value, session.CSRF, "$2a$"} {
		if strings.Contains(p.stdout.String()+p.stderr.String()+metrics, hidden) {
			t.Errorf("the log or /metrics shows %q", hidden)
		}
	}
}

// says waits until standard output has what matches.
func (p *program) says(want *regexp.Regexp) []string {
	p.t.Helper()
	for deadline := time.Now().Add(patience); time.Now().Before(deadline); time.Sleep(10 * time.Millisecond) {
		if m := want.FindStringSubmatch(p.stdout.String()); m != nil {
			return m
		}
	}
	p.t.Fatalf("the daemon does not say %v", want)
	return nil
}

// logs waits until the log has a text.
func (p *program) logs(want string) {
	p.t.Helper()
	for deadline := time.Now().Add(patience); !strings.Contains(p.stderr.String(), want); time.Sleep(10 * time.Millisecond) {
		if time.Now().After(deadline) {
			p.t.Fatalf("the log lacks %q", want)
		}
	}
}

// Flags that cannot be meant, and files that are not what they should be.
func TestGuardFlags(t *testing.T) {
	t.Parallel()
	keys := newPKI(t)
	empty := secretFile(t, "empty.pem", "")
	for _, tt := range []struct {
		name string
		args []string
		code int
		err  string
	}{
		{"role of a viewer", []string{"--open-role", "viewer"}, 2, `--open-role "viewer": give operator or engineer`},
		{"role beside users", []string{"--open-role", "engineer", "--users", "x"}, 2, "without --users"},
		{"no key", []string{"--tls-cert", keys.cert}, 2, "--tls-key"},
		{"client certificates without TLS", []string{"--tls-client-ca", keys.ca}, 2, "add --tls-cert"},
		{"users without TLS in the open", []string{"--listen", "0.0.0.0:0", "--users", "x"}, 2, "--tls-cert"},
		{"TLS without users in the open", []string{"--listen", "0.0.0.0:0", "--tls-cert", keys.cert, "--tls-key", keys.key}, 2, "--users"},
		{"no users file", []string{"--users", "nowhere.json"}, 1, "throatwatch user add"},
		{"another key", []string{"--tls-cert", keys.ca, "--tls-key", keys.key}, 1, "--tls-cert, --tls-key"},
		{"no client certificate", []string{"--tls-cert", keys.cert, "--tls-key", keys.key, "--tls-client-ca", empty}, 1, "no certificate in it"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			ctx, cancel := context.WithTimeout(t.Context(), patience)
			defer cancel()
			var stdout, stderr bytes.Buffer
			args := append([]string{"watch", rehearseRig, "--data", filepath.Join(t.TempDir(), "data"), "--broker-listen", "127.0.0.1:0"}, tt.args...)
			if tt.args[0] != "--listen" {
				args = append(args, "--listen", "127.0.0.1:0")
			}
			if code := run(ctx, args, &stdout, &stderr); code != tt.code || !strings.Contains(stderr.String(), tt.err) || stdout.Len() > 0 {
				t.Errorf("exit code %d, want %d with %q: %s%s", code, tt.code, tt.err, stdout.String(), stderr.String())
			}
		})
	}
}
