package mqtt_test

import (
	"bytes"
	"context"
	"fmt"
	"log/slog"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strconv"
	"testing"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"throatwatch/ingest/broker"
	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

// The test binary runs itself as the daemon that is killed: broker and client in
// one process, which records what it receives in a file and acknowledges after
// the fsync.
const (
	childDir    = "MQTT_TEST_CHILD_DIR"
	childListen = "MQTT_TEST_CHILD_LISTEN"
	lifeMark    = "life"
)

func TestMain(m *testing.M) {
	if dir := os.Getenv(childDir); dir != "" {
		fmt.Fprintln(os.Stderr, child(dir, os.Getenv(childListen)))
		os.Exit(1)
	}
	code := m.Run()
	if code == 0 {
		code = leaked()
	}
	os.Exit(code)
}

// leaked tells whether goroutines of a client are left.
func leaked() int {
	buf := make([]byte, 1<<20)
	for range 100 {
		buf = buf[:runtime.Stack(buf[:cap(buf)], true)]
		if !bytes.Contains(buf, []byte("throatwatch/ingest/mqtt.")) && !bytes.Contains(buf, []byte("paho.mqtt")) {
			return 0
		}
		time.Sleep(50 * time.Millisecond)
	}
	fmt.Printf("goroutines are left:\n%s\n", buf)
	return 1
}

func child(dir, listen string) error {
	ctx := context.Background()
	record, err := os.OpenFile(filepath.Join(dir, "record"), os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o600)
	if err != nil {
		return err
	}
	// The newline ends a line that the last life may have left unfinished.
	if _, err := record.WriteString("\n" + lifeMark + "\n"); err != nil {
		return err
	}
	b, err := broker.New(broker.Config{Listen: listen, StoreDir: filepath.Join(dir, "broker")}, slog.New(slog.DiscardHandler))
	if err != nil {
		return err
	}
	if err := b.Start(ctx); err != nil {
		return err
	}
	name, password := b.Own()
	c, err := mqtt.New(mqtt.Config{URL: b.URL(), Dir: dir, Filters: []string{"rigs/r1/senml"}, Username: name, Password: password})
	if err != nil {
		return err
	}
	go func() { _ = c.Run(ctx) }() // until the process is killed
	<-c.Ready()
	b.Open()

	const commit = 20 * time.Millisecond
	ticker := time.NewTicker(commit)
	var batch []mqtt.Message
	var lines bytes.Buffer
	for {
		select {
		case m := <-c.Messages():
			batch = append(batch, m)
			lines.Write(m.Payload)
			lines.WriteByte('\n')
		case <-ticker.C:
			if len(batch) == 0 {
				continue
			}
			if _, err := record.Write(lines.Bytes()); err != nil {
				return err
			}
			if err := record.Sync(); err != nil {
				return err
			}
			for _, m := range batch {
				c.Ack(m)
			}
			batch = batch[:0]
			lines.Reset()
		}
	}
}

// TestKilledDaemonLosesNothing kills the daemon under load, again and again.
// Every message that a publisher has an acknowledgement for must be recorded,
// and in each life the backlog must come before anything newer.
func TestKilledDaemonLosesNothing(t *testing.T) {
	t.Parallel()
	const kills = 6
	dir, listen := t.TempDir(), mqtttest.FreeAddr(t)
	random := rand.New(rand.NewPCG(1, 1))
	start := func() *exec.Cmd {
		cmd := exec.CommandContext(t.Context(), os.Args[0])
		cmd.Env = append(os.Environ(), childDir+"="+dir, childListen+"="+listen)
		cmd.Stderr = os.Stderr
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		return cmd
	}
	kill := func(cmd *exec.Cmd) {
		if err := cmd.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		_ = cmd.Wait() // ending by a signal counts as an error
	}
	p := &persistent{t: t, url: "mqtt://" + listen}
	cmd := start()
	for range kills {
		end := time.Now().Add(time.Duration(300+random.IntN(600)) * time.Millisecond)
		p.connect()
		killed := make(chan struct{})
		go func() {
			defer close(killed)
			time.Sleep(time.Until(end))
			kill(cmd)
		}()
		p.publishUntilLost()
		<-killed
		cmd = start()
	}
	p.connect()
	p.publishBatch()
	acked := p.next
	path := filepath.Join(dir, "record")
	for deadline := time.Now().Add(patience); ; time.Sleep(50 * time.Millisecond) {
		text, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if bytes.Contains(text, fmt.Appendf(nil, "\n%d\n", acked-1)) {
			break
		}
		if time.Now().After(deadline) {
			t.Fatalf("the last message, %d, is not recorded", acked-1)
		}
	}
	kill(cmd)

	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	seen := make(map[int]bool)
	lives, doubled, highest := 0, 0, -1
	for line := range bytes.Lines(text) {
		line = bytes.TrimSpace(line)
		if string(line) == lifeMark {
			lives++
			continue
		}
		n, err := strconv.Atoi(string(line))
		if err != nil {
			continue // empty, or cut by the kill
		}
		if seen[n] {
			doubled++
			continue
		}
		seen[n] = true
		if n < highest {
			t.Errorf("life %d: message %d came after the newer %d", lives, n, highest)
		}
		highest = max(highest, n)
	}
	for n := range acked {
		if !seen[n] {
			t.Errorf("message %d was acknowledged to the publisher and is not recorded", n)
		}
	}
	if lives != kills+1 || acked < 1000 {
		t.Errorf("%d lives, %d messages: the test did not load the daemon", lives, acked)
	}
	t.Logf("%d kills, %d acknowledged, %d doubled", kills, acked, doubled)
}

// persistent publishes numbers in order and sends what was not acknowledged
// again, in order, which the library does not do.
type persistent struct {
	t      *testing.T
	url    string
	client paho.Client
	next   int // everything below is acknowledged
}

func (p *persistent) connect() {
	p.t.Helper()
	for deadline := time.Now().Add(patience); ; time.Sleep(20 * time.Millisecond) {
		p.client = paho.NewClient(paho.NewClientOptions().AddBroker(p.url).SetClientID("rig").
			SetProtocolVersion(4).SetAutoReconnect(false).SetConnectTimeout(patience).
			SetWriteTimeout(time.Second)) // else Publish waits 30 s on a link that goes down
		token := p.client.Connect()
		if token.WaitTimeout(patience) && token.Error() == nil {
			return
		}
		if time.Now().After(deadline) {
			p.t.Fatal(token.Error())
		}
	}
}

// publishBatch publishes a batch and reports whether all of it is acknowledged.
func (p *persistent) publishBatch() bool {
	const batch = 100
	var tokens []paho.Token
	for i := range batch {
		tokens = append(tokens, p.client.Publish("rigs/r1/senml", 1, false, fmt.Sprint(p.next+i)))
	}
	for _, token := range tokens {
		// A token that is made while the link goes down may never be done.
		for !token.WaitTimeout(50 * time.Millisecond) {
			if !p.client.IsConnectionOpen() {
				return false
			}
		}
		if token.Error() != nil || !p.client.IsConnectionOpen() {
			return false
		}
		p.next++
	}
	return true
}

func (p *persistent) publishUntilLost() {
	for p.publishBatch() {
	}
	p.client.Disconnect(100)
}
