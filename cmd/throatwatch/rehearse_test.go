package main

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/ingest/decode"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

const rehearseRig = "../../testdata/rigs/example.yaml"

func TestRehearseUsage(t *testing.T) {
	for _, tt := range []struct {
		args []string
		code int
		want string // on stderr
	}{
		{[]string{"--help"}, 0, "throatwatch rehearse RIG.yaml"},
		{nil, 2, "give one rig file"},
		{[]string{"a", "b"}, 2, "give one rig file"},
		{[]string{rehearseRig, "--start", "2026-03-02T09:00:00Z"}, 2, "--start is for --into"},
		{[]string{rehearseRig, "--into", "x", "--start", "tomorrow"}, 2, "tomorrow"},
		{[]string{rehearseRig, "--into", "x", "--for", "1s"}, 2, "--into takes no --for"},
		{[]string{rehearseRig, "--broker-password-file", "no-such-file"}, 1, "no-such-file"},
		{[]string{rehearseRig, "--fast"}, 2, "unknown flag"},
		{[]string{rehearseRig, "--for", "-1s"}, 2, "--for"},
		{[]string{rehearseRig, "--fault", "burst", "--fault", "bang@1s"}, 2, "no such fault"},
		{[]string{"no-such.yaml"}, 1, "no file"},
		{[]string{rehearseRig, "--fault", "probe-open@1s:egt_99"}, 1, `no channel "egt_99"`},
		{[]string{rehearseRig, "--speed", "1000"}, 1, "speed 1000"},
		{[]string{rehearseRig, "--broker", "http://localhost"}, 1, "unknown scheme"},
	} {
		t.Run(strings.Join(tt.args, " "), func(t *testing.T) {
			var stdout, stderr bytes.Buffer
			code := rehearseCommand(t.Context(), tt.args, &stdout, &stderr)
			if code != tt.code || !strings.Contains(stderr.String(), tt.want) {
				t.Errorf("exit code %d, want %d; stderr without %q:\n%s", code, tt.code, tt.want, stderr.String())
			}
		})
	}
	var stderr bytes.Buffer
	rehearseCommand(t.Context(), []string{"--help"}, &stderr, &stderr)
	for _, k := range rehearsal.FaultKinds() {
		if !strings.Contains(stderr.String(), k.String()) || !strings.Contains(stderr.String(), k.Text()) {
			t.Errorf("the help does not tell of %s", k)
		}
	}
}

// A rehearsal over a site broker: what is published arrives, in real time.
func TestRehearseLive(t *testing.T) {
	server := mqtttest.Mosquitto(t)
	ctx, cancel := context.WithTimeout(t.Context(), 30*time.Second)
	defer cancel()
	client, err := mqtt.New(mqtt.Config{URL: server.URL, Dir: t.TempDir(), Filters: []string{"rigs/cell_2/senml"}})
	if err != nil {
		t.Fatal(err)
	}
	running, stop := context.WithCancel(ctx)
	ended := make(chan struct{})
	go func() { _ = client.Run(running); close(ended) }()
	defer func() { stop(); <-ended }()
	<-client.Ready()

	var stdout, stderr bytes.Buffer
	begun := time.Now()
	code := rehearseCommand(ctx, []string{rehearseRig, "--broker", server.URL, "--quick", "--for", "2s", "--rate", "20", "--seed", "3"}, &stdout, &stderr)
	if took := time.Since(begun); code != 0 || took < 2*time.Second || took > 10*time.Second {
		t.Fatalf("exit code %d after %v: %s", code, took, stderr.String())
	}
	var published, acknowledged int
	for line := range strings.Lines(stdout.String()) {
		_, _ = fmt.Sscanf(line, "%d messages published, %d acknowledged by the broker", &published, &acknowledged)
	}
	if published < 35 || published > 41 || acknowledged != published {
		t.Errorf("2 s at 20 per second: %s", stdout.String())
	}
	if n := strings.Count(stderr.String(), "NPR"); n < 2 || n > 3 {
		t.Errorf("%d progress lines in 2 s", n)
	}
	d := decode.New(decode.Limits{})
	for range published {
		select {
		case m := <-client.Messages():
			client.Ack(m)
			now := time.Now()
			res := d.Decode(decode.SenMLJSON, m.Topic, m.Payload, now.UnixNano())
			if res.Faults.Total() > 0 || len(res.Samples) < 20 {
				t.Fatalf("%q: %v", m.Payload, res.Fault)
			}
			if at := time.Unix(0, res.Samples[0].Time); at.Before(begun.Add(-time.Millisecond)) || at.After(now) {
				t.Errorf("device time %v is not the time of this machine", at)
			}
		case <-ctx.Done():
			t.Fatal("messages are missing")
		}
	}
}

// A whole test lies in the run files in far less time than it takes, and twice the
// same.
func TestRehearseInto(t *testing.T) {
	var digests []string
	for range 2 {
		dir := t.TempDir()
		var stdout, stderr bytes.Buffer
		if code := rehearseCommand(t.Context(), []string{rehearseRig, "--into", dir, "--quick", "--start", "2026-03-02T09:00:00Z"}, &stdout, &stderr); code != 0 {
			t.Fatalf("exit code %d: %s", code, stderr.String())
		}
		runs, err := filepath.Glob(filepath.Join(dir, "runs", "cell_2-20260302T0900*.db"))
		if err != nil || len(runs) != 1 {
			t.Fatalf("run files %v, %v", runs, err)
		}
		stderr.Reset()
		id := strings.TrimSuffix(filepath.Base(runs[0]), ".db")
		if code := replayCommand(t.Context(), []string{id, "--data", dir}, io.Discard, &stderr); code != 0 {
			t.Fatalf("replay gives exit code %d: %s", code, stderr.String())
		}
		for line := range strings.Lines(stderr.String()) {
			if strings.HasPrefix(line, "sha256 ") {
				digests = append(digests, line)
			}
		}
	}
	if len(digests) != 2 || digests[0] != digests[1] {
		t.Errorf("digests of two rehearsals with one seed: %q", digests)
	}
}

// A broker that is not there is said, with what to do; an end of ctx is not an error.
func TestRehearseNoBroker(t *testing.T) {
	ctx, cancel := context.WithTimeout(t.Context(), 200*time.Millisecond)
	defer cancel()
	var stdout, stderr bytes.Buffer
	if code := rehearseCommand(ctx, []string{rehearseRig, "--broker", "mqtt://127.0.0.1:1"}, &stdout, &stderr); code != 0 || stdout.Len() > 0 {
		t.Errorf("exit code %d: %s%s", code, stdout.String(), stderr.String())
	}
}
