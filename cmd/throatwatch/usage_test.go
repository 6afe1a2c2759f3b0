package main

import (
	"bytes"
	"context"
	"net"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"

	"throatwatch/ingest/mqtt/mqtttest"
)

// notAFolder gives a place where no data folder can be: one that may not be written
// to, or, for a user who may write everywhere, below a file.
func notAFolder(t *testing.T) string {
	t.Helper()
	dir := t.TempDir()
	if os.Geteuid() == 0 {
		file := filepath.Join(dir, "file")
		if err := os.WriteFile(file, nil, 0o600); err != nil {
			t.Fatal(err)
		}
		return filepath.Join(file, "data")
	}
	if err := os.Chmod(dir, 0o500); err != nil {
		t.Fatal(err)
	}
	return filepath.Join(dir, "data")
}

// Whoever calls a command wrongly gets one line that says what, where and what to
// do, and 2; 1 where the call was right and the world was not.
func TestWrongUse(t *testing.T) {
	t.Parallel()
	taken, err := (&net.ListenConfig{}).Listen(t.Context(), "tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer taken.Close()
	const rig = rehearseRig
	dir := t.TempDir()
	for _, tt := range []struct {
		name string
		args []string // of a watch, --data DIR and free ports are added
		code int
		want string // TAKEN, DIR and NOFOLDER stand for what they name
	}{
		{"unknown command", []string{"wach"}, 2, `throatwatch: there is no command "wach": throatwatch --help lists them`},
		{"no rig", []string{"watch"}, 2, "throatwatch watch: give one rig file, as in testdata/rigs/example.yaml (0 arguments were given)"},
		{"two rigs", []string{"watch", rig, rig}, 2, "throatwatch watch: give one rig file, as in testdata/rigs/example.yaml (2 arguments were given)"},
		{"unknown flag", []string{"watch", rig, "--lisen", "x"}, 2, "throatwatch watch: unknown flag: --lisen (--help lists the flags)"},
		{"no time", []string{"watch", rig, "--for", "soon"}, 2, `throatwatch watch: invalid argument "soon" for "--for" flag: must be a duration like "30s" or "5m" (--help lists the flags)`},
		{"negative time", []string{"watch", rig, "--for", "-3s"}, 2, "throatwatch watch: --for -3s: give a time above 0"},
		{"no address", []string{"watch", rig, "--listen", "here"}, 2, `throatwatch watch: --listen "here" is no address: give host:port`},
		{"an open page", []string{"watch", rig, "--listen", "0.0.0.0:0"}, 2, "throatwatch watch: --listen 0.0.0.0:0 can be reached from other machines, and whoever reaches it can acknowledge alarms: use 127.0.0.1, or --users with --tls-cert and --tls-key, or --allow-remote on a closed network"},
		{"an open page by name", []string{"watch", rig, "--listen", "rig-pc:8189"}, 2, "throatwatch watch: --listen rig-pc:8189 can be reached from other machines, and whoever reaches it can acknowledge alarms: use 127.0.0.1, or --users with --tls-cert and --tls-key, or --allow-remote on a closed network"},
		{"an open broker", []string{"watch", rig, "--broker-listen", "0.0.0.0:0"}, 1, `throatwatch watch: broker configuration: listen "0.0.0.0:0" reaches beyond this machine: use 127.0.0.1:1883, or allow remote clients explicitly`},
		{"two brokers", []string{"watch", rig, "--broker", "mqtt://127.0.0.1:1", "--broker-listen", "127.0.0.1:0"}, 2, "throatwatch watch: --broker-listen is for the embedded broker, --broker names another: give one of them"},
		{"user without broker", []string{"watch", rig, "--broker-user", "me"}, 2, "throatwatch watch: --broker-user and --broker-password-file are for a site broker: add --broker"},
		{"certificate without broker", []string{"watch", rig, "--broker-cert", "c.pem"}, 2, "throatwatch watch: --broker-ca, --broker-cert and --broker-key are for a site broker: add --broker mqtts://host:port"},
		{"certificate without key", []string{"watch", rig, "--broker", "mqtts://127.0.0.1:1", "--broker-cert", "c.pem"}, 2, "throatwatch watch: --broker-cert and --broker-key belong together: give both"},
		{"certificate of nothing", []string{"rehearse", rig, "--broker", "mqtts://127.0.0.1:1", "--broker-ca", "nowhere"}, 1, "throatwatch rehearse: --broker-ca: open nowhere: no such file or directory"},
		{"certificate without TLS", []string{"watch", rig, "--broker", "mqtt://127.0.0.1:1", "--broker-ca", "../../go.mod"}, 1, "throatwatch watch: --broker-ca ../../go.mod: there is no certificate in it"},
		{"not a broker", []string{"watch", rig, "--broker", "http://127.0.0.1:1"}, 1, `throatwatch watch: mqtt configuration: broker URL: unknown scheme "http" (give mqtt://host:port or mqtts://host:port, several separated by commas)`},
		{"no password", []string{"watch", rig, "--broker", "mqtt://127.0.0.1:1", "--broker-password-file", "nowhere"}, 1, "throatwatch watch: password file: open nowhere: no such file or directory"},
		{"fault of nothing", []string{"watch", rig, "--fault", "burst@1s"}, 2, "throatwatch watch: --fault says what is rehearsed: add --rehearse"},
		{"no time of a fault", []string{"watch", rig, "--rehearse", "--fault", "burst"}, 2, `throatwatch watch: rehearsal: "burst": no time; write name@time[+duration][*size][:channel], as in probe-open@25s:egt_3: fault is not understood`},
		{"fault of a missing channel", []string{"watch", rig, "--rehearse", "--fault", "probe-open@1s:egt_99"}, 1, `throatwatch watch: rehearsal: fault probe-open: the rig has no channel "egt_99": fault is not understood`},
		{"too fast", []string{"watch", rig, "--rehearse", "--speed", "1000"}, 1, "throatwatch watch: rehearsal: speed 1000: give 0.1 to 100"},
		{"page in use", []string{"watch", rig, "--listen", "TAKEN"}, 1, "throatwatch watch: --listen TAKEN: another program listens there, perhaps another watch: give another address, or port 0 for a free one"},
		{"a pair without a site broker", []string{"watch", rig, "--pair", "alpha", "--pair-secret-file", "x"}, 2, "throatwatch watch: --pair: the two watches meet at the site's broker: add --broker"},
		{"a pair without a secret", []string{"watch", rig, "--broker", "mqtt://127.0.0.1:1", "--pair", "alpha"}, 2, "throatwatch watch: --pair: without a shared secret whoever publishes could acknowledge alarms: add --pair-secret-file"},
		{"a secret of no pair", []string{"watch", rig, "--broker", "mqtt://127.0.0.1:1", "--pair-secret-file", "x"}, 2, "throatwatch watch: --pair-secret-file is for one of two watches: add --pair NAME"},
		{"broker in use", []string{"watch", rig, "--broker-listen", "TAKEN"}, 1, "throatwatch watch: --broker-listen TAKEN: another program listens there: if it is the site's broker, name it by --broker, else give another address"},
		{"no data folder", []string{"watch", rig, "--data", "NOFOLDER"}, 1, "throatwatch watch: data folder: mkdir *"},
		{"runs with something", []string{"runs", "all"}, 2, "throatwatch runs: takes no arguments"},
		{"runs of nothing", []string{"runs", "--data", "DIR"}, 1, "throatwatch runs: DIR holds no runs: give the folder of a watch by --data"},
		{"unknown flag of runs", []string{"runs", "--jason"}, 2, "throatwatch runs: unknown flag: --jason (--help lists the flags)"},
		{"replay of nothing", []string{"replay"}, 2, "throatwatch replay: give one run; `throatwatch runs` lists them"},
		{"log of nothing", []string{"log"}, 2, "throatwatch log: give one run; `throatwatch runs` lists them"},
		{"figures of two runs", []string{"figures", "x", "y"}, 2, "throatwatch figures: give one run; `throatwatch runs` lists them"},
		{"log without a folder", []string{"log", "x", "--data", "DIR"}, 1, "throatwatch log: DIR holds no runs: give the folder of a watch by --data"},
		{"export of nothing", []string{"export"}, 2, "throatwatch export: give one run; `throatwatch runs` lists them"},
		{"export without a form", []string{"export", "x", "--data", "DIR"}, 2, "throatwatch export: format \"\": give one of parquet, csv, lines"},
		{"export without a folder", []string{"export", "x", "--data", "DIR", "--format", "csv"}, 1, "throatwatch export: DIR holds no runs: give the folder of a watch by --data"},
		{"export of an unknown table", []string{"export", "x", "--what", "all"}, 2, `throatwatch export: what "all": give one of operating-points, scans, samples, events`},
		{"export in no time", []string{"export", "x", "--format", "csv", "--every", "0"}, 2, `throatwatch export: every "0": give a time of 1ms or more, as 1s or 250ms`},
		{"statistics of every row", []string{"export", "x", "--format", "csv", "--statistics", "max"}, 2, "throatwatch export: --statistics is for --every: add it"},
		{"verify of nothing", []string{"verify"}, 2, "throatwatch verify: give runs, or --all; `throatwatch runs` lists them"},
		{"verify of all and one", []string{"verify", "x", "--all"}, 2, "throatwatch verify: give runs, or --all; `throatwatch runs` lists them"},
		{"verify without a folder", []string{"verify", "x", "--data", "DIR"}, 1, "throatwatch verify: DIR holds no runs: give the folder of a watch by --data"},
		{"copy to nowhere", []string{"copy", "x"}, 2, "throatwatch copy: give one run and --to FILE; `throatwatch runs` lists the runs"},
		{"import of nothing", []string{"import", "x.csv"}, 2, "throatwatch import: give one recording, --map MAP.yaml and --rig RIG.yaml"},
		{"replay without a folder", []string{"replay", "x", "--data", "DIR"}, 1, "throatwatch replay: DIR holds no runs: give the folder of a watch by --data"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			free := filepath.Join(t.TempDir(), "data")
			put := strings.NewReplacer("TAKEN", taken.Addr().String(), "DIR", dir, "NOFOLDER", notAFolder(t))
			args := []string{}
			for _, a := range tt.args {
				args = append(args, put.Replace(a))
			}
			for flag, value := range map[string]string{"--data": free, "--listen": "127.0.0.1:0", "--broker-listen": "127.0.0.1:0"} {
				if said := strings.Join(tt.args, " "); tt.args[0] == "watch" && !strings.Contains(said, flag) && (flag != "--broker-listen" || !strings.Contains(said, "--broker")) {
					args = append(args, flag, value)
				}
			}
			ctx, cancel := context.WithTimeout(t.Context(), patience)
			defer cancel()
			var stdout, stderr bytes.Buffer
			code := run(ctx, args, &stdout, &stderr)
			want := regexp.MustCompile("^" + strings.ReplaceAll(regexp.QuoteMeta(put.Replace(tt.want)), `\*`, ".*") + "\n$")
			if code != tt.code || stdout.Len() > 0 || !want.MatchString(stderr.String()) {
				t.Errorf("exit code %d, want %d; it says\n%s%swant\n%s", code, tt.code, stdout.String(), stderr.String(), put.Replace(tt.want))
			}
			if _, err := os.Stat(free); tt.code == 2 && err == nil {
				t.Error("a data folder was made")
			}
		})
	}
}

// Help comes on request, on standard output where that is all that was asked for.
func TestHelp(t *testing.T) {
	t.Parallel()
	for _, args := range [][]string{{"help"}, {"--help"}, {"-h"}} {
		code, stdout, stderr := invoke(t, args...)
		for _, c := range commands() {
			if !strings.Contains(stdout, "\n  "+c.name+" ") {
				t.Errorf("%v does not name %s", args, c.name)
			}
		}
		if code != 0 || stderr != "" || !strings.Contains(stdout, notProtection) {
			t.Errorf("%v: exit code %d, %q", args, code, stderr)
		}
	}
	if code, stdout, stderr := invoke(t); code != 2 || stdout != "" || !strings.HasPrefix(stderr, "usage: throatwatch COMMAND\n") {
		t.Errorf("without a command: exit code %d, %q", code, stderr)
	}
	for _, c := range commands() {
		if c.name == "version" {
			continue
		}
		if code, stdout, stderr := invoke(t, c.name, "--help"); code != 0 || !strings.Contains(stdout+stderr, "throatwatch "+c.name) {
			t.Errorf("%s --help: exit code %d, %q", c.name, code, stderr)
		}
	}
	if code, stdout, _ := invoke(t, "version"); code != 0 || !strings.HasPrefix(stdout, "throatwatch ") {
		t.Errorf("version: exit code %d, %q", code, stdout)
	}
}

// Two daemons cannot write to one data folder: the second says so and leaves the
// first alone.
func TestSecondWatch(t *testing.T) {
	t.Parallel()
	data, site := dataFolder(t), mqtttest.Mosquitto(t)
	args := []string{"watch", rehearseRig, "--data", data, "--listen", "127.0.0.1:0", "--broker", site.URL}
	first := start(t, args...)
	page := first.page()
	second := start(t, args...)
	if code := second.wait(); code != 1 {
		t.Errorf("exit code %d, want 1", code)
	}
	want := "throatwatch watch: " + data + ": another throatwatch writes to this data folder: give another one by --data, or stop that process\n"
	if got := second.stderr.String(); got != want || second.stdout.String() != "" {
		t.Errorf("it says %q, want %q", got, want)
	}
	follow(t, page, "").await("the first goes on", allConnected)
	first.stop()
}

// A watch begins before its broker is there, says that its input path is deaf, and
// takes the broker up when it comes.
func TestWatchBeforeItsBroker(t *testing.T) {
	t.Parallel()
	site := mqtttest.Mosquitto(t)
	site.Stop()
	p := start(t, "watch", rehearseRig, "--data", dataFolder(t), "--listen", "127.0.0.1:0", "--broker", site.URL)
	page := p.page()
	live := follow(t, page, "")
	raised := live.await("the input path is deaf", func(f *frame) bool { return f.Kind == "alarm" && f.Alarm.Rule == "input_path_deaf" })
	if raised.Alarm.Priority != "warning" || raised.Alarm.State != "unacknowledged" || raised.Alarm.Caution == "" {
		t.Errorf("without a broker: %+v", raised.Alarm)
	}
	if code, _ := fetch(t, "GET", page+"/healthz", nil); code != 503 {
		t.Errorf("healthz without a broker: %d", code)
	}
	site.Start()
	live.await("the sessions are up", allConnected)
	live.await("the alarm returns", func(f *frame) bool {
		return f.Alarm.ID == raised.Alarm.ID && f.Alarm.State == "returned_unacknowledged"
	})
	for deadline := time.Now().Add(patience); ; time.Sleep(50 * time.Millisecond) {
		if code, _ := fetch(t, "GET", page+"/healthz", nil); code == 200 {
			break
		}
		if time.Now().After(deadline) {
			t.Fatal("with a broker it is not well")
		}
	}
	p.stop()
}
