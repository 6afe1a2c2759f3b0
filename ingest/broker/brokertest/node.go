// Package brokertest gives tests a cluster of three brokers, each a process of its own
// that can be killed. It is a site's cluster, not the daemon's embedded broker: messages
// and sessions are stored on all three nodes.
package brokertest

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/nats-io/nats-server/v2/server"
)

// nodeEnv holds the node that a process is to be, as JSON.
const nodeEnv = "THROATWATCH_TEST_NODE"

// AckWait is after how long a node sends again what is unacknowledged.
const AckWait = 4 * time.Second

// ready bounds the start of a node on a loaded machine.
const ready = 60 * time.Second

// node is what a process is told to be.
type node struct {
	Name, Dir, Listen, Route string
	Routes                   []string
}

// IsNode tells that this process is to be a node: TestMain then calls RunNode.
func IsNode() bool { return os.Getenv(nodeEnv) != "" }

// RunNode is a node until ctx ends.
func RunNode(ctx context.Context) error {
	var n node
	if err := json.Unmarshal([]byte(os.Getenv(nodeEnv)), &n); err != nil {
		return fmt.Errorf("node: %w", err)
	}
	host, port, err := split(n.Listen)
	if err != nil {
		return err
	}
	routeHost, routePort, err := split(n.Route)
	if err != nil {
		return err
	}
	s, err := server.NewServer(&server.Options{
		ServerName: n.Name, Host: "127.0.0.1", Port: server.RANDOM_PORT, NoSigs: true,
		Cluster:   server.ClusterOpts{Name: "site", Host: routeHost, Port: routePort},
		Routes:    server.RoutesFromStr(strings.Join(n.Routes, ",")),
		JetStream: true, StoreDir: n.Dir,
		MQTT: server.MQTTOpts{Host: host, Port: port, AckWait: AckWait, MaxAckPending: 4096},
	})
	if err != nil {
		return fmt.Errorf("node %s: %w", n.Name, err)
	}
	go s.Start() // ends by Shutdown
	if !s.ReadyForConnections(ready) {
		return errors.New("node is not up in time")
	}
	<-ctx.Done()
	s.Shutdown()
	s.WaitForShutdown()
	return nil
}

func split(addr string) (host string, port int, err error) {
	host, text, err := net.SplitHostPort(addr)
	if err == nil {
		port, err = strconv.Atoi(text)
	}
	if err != nil {
		return "", 0, fmt.Errorf("node: address %q: %w", addr, err)
	}
	return host, port, nil
}

// Cluster is three nodes.
type Cluster struct {
	URLs  []string // of the nodes, mqtt://host:port
	nodes []*exec.Cmd
}

// Start starts a cluster from the test's own binary, whose TestMain must know IsNode.
// addrs are six loopback addresses that nothing listens on. It ends with the test.
func Start(tb testing.TB, dir string, addrs [6]string) *Cluster {
	tb.Helper()
	c := &Cluster{}
	for i := range 3 {
		n := node{Name: fmt.Sprintf("node-%d", i+1), Dir: filepath.Join(dir, strconv.Itoa(i)), Listen: addrs[i], Route: addrs[3+i]}
		for _, route := range addrs[3:] {
			n.Routes = append(n.Routes, "nats-route://"+route)
		}
		text, err := json.Marshal(n)
		if err != nil {
			tb.Fatal(err)
		}
		cmd := exec.CommandContext(context.Background(), os.Args[0])
		cmd.Env = append(os.Environ(), nodeEnv+"="+string(text))
		cmd.Stderr = os.Stderr
		if err := cmd.Start(); err != nil {
			tb.Fatal(err)
		}
		c.nodes, c.URLs = append(c.nodes, cmd), append(c.URLs, "mqtt://"+n.Listen)
	}
	tb.Cleanup(func() {
		for i := range c.nodes {
			c.Kill(i)
		}
	})
	return c
}

// Kill ends a node as a power cut would, if it still runs.
func (c *Cluster) Kill(i int) {
	if c.nodes[i] != nil {
		_ = c.nodes[i].Process.Kill()
		_ = c.nodes[i].Wait() // it was killed
		c.nodes[i] = nil
	}
}
