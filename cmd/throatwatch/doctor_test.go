package main

import (
	"crypto/tls"
	"encoding/json"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"throatwatch/ingest/mqtt/mqtttest"
)

// examine runs doctor with --json, free addresses and a new data folder.
func examine(t *testing.T, code int, args ...string) map[string]finding {
	t.Helper()
	args = append([]string{"doctor", "--json", "--listen", "127.0.0.1:0"}, args...)
	if !strings.Contains(strings.Join(args, " "), "--broker") {
		args = append(args, "--broker-listen", "127.0.0.1:0")
	}
	if !strings.Contains(strings.Join(args, " "), "--data") {
		args = append(args, "--data", dataFolder(t))
	}
	got, stdout, stderr := invoke(t, args...)
	if got != code || stderr != "" {
		t.Errorf("doctor gives %d, want %d: %s%s", got, code, stdout, stderr)
	}
	var answer struct {
		Failed   int
		Findings []finding
	}
	if err := json.Unmarshal([]byte(stdout), &answer); err != nil {
		t.Fatalf("%v in %s", err, stdout)
	}
	out := map[string]finding{}
	for _, f := range answer.Findings {
		out[f.Of] = f
		if (f.Verdict == passed) != (f.Do == "") {
			t.Errorf("%+v: what did not pass says what to do, and nothing else does", f)
		}
	}
	if (answer.Failed > 0) != (code == 1) {
		t.Errorf("%d failed, exit code %d", answer.Failed, code)
	}
	return out
}

// wants compares a finding with a verdict and a part of its text.
func wants(t *testing.T, all map[string]finding, of string, v verdict, text string) {
	t.Helper()
	if f, ok := all[of]; !ok || f.Verdict != v || !strings.Contains(f.Found, text) {
		t.Errorf("%s: %+v, want it %s with %q", of, f, v, text)
	}
}

// TestDoctor: a site's broker over mutual TLS as a watch needs it, with a users file
// and certificates. The database is examined where it runs for other tests.
func TestDoctor(t *testing.T) {
	t.Parallel()
	site := mqtttest.MosquittoSite(t, "../../deploy")
	site.Start()
	users := filepath.Join(t.TempDir(), "users.json")
	if code, _, stderr := invoke(t, "user", "token", "collector", "--role", "engineer", "--users", users); code != 0 {
		t.Fatal(stderr)
	}
	got := examine(t, 0, rehearseRig, "--users", users, "--tls-cert", site.Cert, "--tls-key", site.Key,
		"--broker", site.URL, "--broker-ca", site.CA, "--broker-cert", site.Cert, "--broker-key", site.Key)
	wants(t, got, "rig file", passed, "cell_2, 42 channels")
	wants(t, got, "disk space", passed, "GB free")
	wants(t, got, "disk writing", passed, "64 writes of 4096 B with fsync")
	wants(t, got, "page address", passed, "is free")
	wants(t, got, "broker's certificate", warning, "valid until")
	wants(t, got, "broker", passed, "6096 messages counted back at QoS 1")
	wants(t, got, "broker", passed, "4096 of them held unacknowledged")
	wants(t, got, "retained", passed, "")
	wants(t, got, "users", passed, "1 engineers")
	wants(t, got, "certificate", warning, ": 0 days") // that of a test lives for an hour
	if f := got["clock"]; f.Verdict == failed {
		t.Errorf("clock: %+v", f)
	}
}

// TestDoctorFinds: what would lose messages or keep a watch from its work is told,
// each with what to do.
func TestDoctorFinds(t *testing.T) {
	t.Parallel()
	t.Run("a broker with the limits it comes with", func(t *testing.T) {
		t.Parallel()
		b := mqtttest.MosquittoWith(t, "allow_anonymous true\n")
		wants(t, examine(t, 1, "--broker", b.URL), "broker", failed, "it delivers 20 before the first is acknowledged")
	})
	t.Run("a broker whose access list forgets the probes", func(t *testing.T) {
		t.Parallel()
		b := mqtttest.Mosquitto(t, "allow_anonymous true", "acl_file "+secretFile(t, "acl", "topic readwrite rigs/#\n"))
		wants(t, examine(t, 1, "--broker", b.URL), "broker", failed, "none came back")
	})
	t.Run("a broker that keeps nothing retained", func(t *testing.T) {
		t.Parallel()
		b := mqtttest.Mosquitto(t, "allow_anonymous true", "retain_available false")
		got := examine(t, 1, "--broker", b.URL)
		wants(t, got, "retained", failed, "not given to who comes later")
	})
	t.Run("no broker, no database, no receiver", func(t *testing.T) {
		t.Parallel()
		nobody := mqtttest.FreeAddr(t)
		got := examine(t, 1, "--broker", "mqtt://"+nobody, "--influx", "http://"+nobody, "--influx-bucket", "site",
			"--webhook", "http://"+nobody+"/a", "--webhook-secret-file", secretFile(t, "secret", "0123456789abcdef"))
		wants(t, got, "broker", failed, "connection refused")
		wants(t, got, "database", failed, "connection refused")
		wants(t, got, "webhook", failed, "connection refused")
	})
	t.Run("ports, folder, users, certificate", func(t *testing.T) {
		t.Parallel()
		taken, err := (&net.ListenConfig{}).Listen(t.Context(), "tcp", "127.0.0.1:0")
		if err != nil {
			t.Fatal(err)
		}
		defer taken.Close()
		users := filepath.Join(t.TempDir(), "users.json")
		if err := os.WriteFile(users, []byte("{}"), 0o644); err != nil { //nolint:gosec // that is what is to be found
			t.Fatal(err)
		}
		pki := newPKI(t)
		got := examine(t, 1, "--broker-listen", taken.Addr().String(), "--data", notAFolder(t), "--users", users,
			"--tls-cert", pki.cert, "--tls-key", secretFile(t, "key", "no key"))
		wants(t, got, "broker address", failed, "is taken by "+filepath.Base(os.Args[0])[:8])
		wants(t, got, "disk writing", failed, "")
		wants(t, got, "users", failed, "its mode 0644 lets others read")
		if _, there := got["broker"]; there {
			t.Errorf("a broker that is not ours was examined: %+v", got["broker"])
		}
	})
	t.Run("a rig file with a fault", func(t *testing.T) {
		t.Parallel()
		wants(t, examine(t, 1, secretFile(t, "rig.yaml", "rig: {id: a b}\n")), "rig file", failed, "rig.yaml:1:")
	})
}

// What a person reads: a line for each examination, below it what to do, and at the
// end the count.
func TestDoctorTable(t *testing.T) {
	t.Parallel()
	code, stdout, stderr := invoke(t, "doctor", "--data", dataFolder(t), "--listen", "127.0.0.1:0", "--broker", "mqtt://"+mqtttest.FreeAddr(t))
	if code != 1 || stderr != "" {
		t.Errorf("%d %s", code, stderr)
	}
	for _, want := range []string{
		"\npassed   disk writing     64 writes of 4096 B with fsync: median ", "\nfailed   broker           mqtt://127.0.0.1:",
		"\n                          → look whether it runs and can be reached", " examinations passed, ", " 1 failed. Not a clearance to start. " + notProtection + "\n",
	} {
		if !strings.Contains(stdout, want) {
			t.Errorf("%q is not in\n%s", want, stdout)
		}
	}
}

// A step is what the wall clock does beyond the monotonic one.
func TestClockStep(t *testing.T) {
	t.Parallel()
	began := seeClock()
	for _, tt := range []struct {
		by   time.Duration
		step bool
	}{{0, false}, {20 * time.Millisecond, false}, {-60 * time.Millisecond, true}, {time.Hour, true}} {
		later := clockSeen{began.at.Add(3 * time.Second), began.wall + int64(3*time.Second+tt.by)}
		d := &doctor{tell: func(finding) {}}
		d.clock(began, later)
		if f := d.found[0]; (f.Verdict == failed) != tt.step || tt.step && !strings.Contains(f.Found, "put by "+tt.by.String()+" within 3s") {
			t.Errorf("put by %v: %+v", tt.by, f)
		}
	}
}

// Dates of certificates against a time: not yet, in force, soon over, over.
func TestCertificateDates(t *testing.T) {
	t.Parallel()
	pki := newPKI(t) // in force from an hour ago for two hours
	all, err := readCertificates(pki.cert)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := tls.LoadX509KeyPair(pki.cert, pki.key); err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct {
		name string
		now  time.Time
		want verdict
	}{
		{"before", all[0].NotBefore.Add(-time.Second), failed},
		{"soon over", all[0].NotAfter.Add(-time.Minute), warning},
		{"over", all[0].NotAfter.Add(time.Second), failed},
	} {
		d := &doctor{tell: func(finding) {}}
		d.dates("certificate", "c.pem", all, tt.now)
		if d.found[0].Verdict != tt.want {
			t.Errorf("%s: %+v, want %s", tt.name, d.found[0], tt.want)
		}
	}
}
