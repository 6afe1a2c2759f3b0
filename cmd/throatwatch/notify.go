package main

import (
	"context"
	"fmt"
	"log/slog"
	"net"
	"strconv"
	"time"

	"throatwatch/rules/pipeline"
)

const (
	// notifyEvery is how often a loop is asked how it goes on, unless the service
	// manager wants to hear from it more often.
	notifyEvery = time.Second
	// notifyWithin bounds the sending of a line: a manager that takes none is no
	// reason to wait.
	notifyWithin = 100 * time.Millisecond
)

// serviceManager tells the program that started this one how it is, as systemd
// asks for it [sd_notify(3)]. Nil, it tells nobody.
type serviceManager struct {
	conn  net.Conn
	every time.Duration // between signs of life
	log   *slog.Logger
}

// openServiceManager gives the one that the environment names, nil for none.
func openServiceManager(ctx context.Context, env func(string) string, log *slog.Logger) (*serviceManager, error) {
	path := env("NOTIFY_SOCKET")
	if path == "" {
		return nil, nil //nolint:nilnil // a program that nobody manages is no error
	}
	conn, err := (&net.Dialer{}).DialContext(ctx, "unixgram", path)
	if err != nil {
		return nil, fmt.Errorf("service manager: NOTIFY_SOCKET: %w: start by the unit, or without that variable", err)
	}
	m := &serviceManager{conn: conn, every: notifyEvery, log: log}
	// Four signs within the time that is allowed, so that a late one ends nothing.
	if us, err := strconv.ParseUint(env("WATCHDOG_USEC"), 10, 32); err == nil && us > 0 {
		m.every = min(m.every, time.Duration(us)*time.Microsecond/4)
	}
	return m, nil
}

// tell sends assignments, one a line.
func (m *serviceManager) tell(lines string) {
	if m == nil {
		return
	}
	err := m.conn.SetWriteDeadline(time.Now().Add(notifyWithin))
	if err == nil {
		_, err = m.conn.Write([]byte(lines))
	}
	if err != nil {
		m.log.Info("the service manager does not take what it is told", "err", err)
	}
}

// close ends the telling.
func (m *serviceManager) close() {
	if m != nil {
		_ = m.conn.Close() // nothing waits in it
	}
}

// asker answers between two records, as watch.Loop does.
type asker interface {
	Ask(ctx context.Context, fn func(*pipeline.Machine, *pipeline.State)) error
}

// watch gives signs of life until ctx ends: one each time that the loop answers and
// has stepped a record since the last. So they end with the loop's progress,
// whatever else still runs. Once ready is closed it tells that too, and the state
// whenever it is another.
func (m *serviceManager) watch(ctx context.Context, loop asker, ready <-chan struct{}) {
	if m == nil {
		return
	}
	tick := time.NewTicker(m.every)
	defer tick.Stop()
	var seq uint64
	told := ""
	for {
		select {
		case <-ctx.Done():
			return
		case <-ready:
			ready = nil
			m.tell("READY=1")
		case <-tick.C:
		}
		var at uint64
		var status string
		if loop.Ask(ctx, func(machine *pipeline.Machine, s *pipeline.State) {
			at, status = s.Seq, statusLine(machine, s, ready == nil)
		}) != nil {
			return
		}
		if at > seq {
			seq = at
			m.tell("WATCHDOG=1")
		}
		if status != told {
			told = status
			m.tell("STATUS=" + status)
		}
	}
}

// statusLine says in one line what a watch does.
func statusLine(machine *pipeline.Machine, s *pipeline.State, listens bool) string {
	cfg, _ := machine.Config()
	line := "watches " + cfg.Rig.ID
	if s.RunActive {
		line += ", run " + s.Run.ID
	} else {
		line += ", no run is on"
	}
	switch {
	case !listens:
		line += "; waits for the broker"
	case s.Health.InputPathDeaf:
		line += "; input path deaf"
	}
	if s.Health.NotRecordingSince != 0 {
		line += "; NOT RECORDING"
	}
	return line
}
