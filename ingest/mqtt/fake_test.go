package mqtt_test

import (
	"errors"
	"net"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/eclipse/paho.mqtt.golang/packets"

	"throatwatch/ingest/mqtt"
)

// fake is a broker that answers as it is told, for what no real one can be made
// to do. It grants, acknowledges and echoes to the connection itself.
type fake struct {
	connack byte
	grant   func(filter string, asked byte) byte // SUBACK code
	echo    bool                                 // sends a PUBLISH back
}

func (f fake) start(t *testing.T) string {
	t.Helper()
	var config net.ListenConfig
	l, err := config.Listen(t.Context(), "tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	var all sync.WaitGroup
	all.Go(func() {
		for {
			c, err := l.Accept()
			if err != nil {
				return
			}
			all.Go(func() { f.serve(c) })
		}
	})
	t.Cleanup(func() { l.Close(); all.Wait() })
	return "mqtt://" + l.Addr().String()
}

func (f fake) serve(c net.Conn) {
	defer c.Close()
	for {
		packet, err := packets.ReadPacket(c)
		if err != nil {
			return
		}
		var answers []packets.ControlPacket
		switch p := packet.(type) {
		case *packets.ConnectPacket:
			a := packets.NewControlPacket(packets.Connack).(*packets.ConnackPacket)
			a.ReturnCode = f.connack
			answers = append(answers, a)
		case *packets.SubscribePacket:
			a := packets.NewControlPacket(packets.Suback).(*packets.SubackPacket)
			a.MessageID = p.MessageID
			for i, filter := range p.Topics {
				a.ReturnCodes = append(a.ReturnCodes, f.grant(filter, p.Qoss[i]))
			}
			answers = append(answers, a)
		case *packets.PublishPacket:
			a := packets.NewControlPacket(packets.Puback).(*packets.PubackPacket)
			a.MessageID = p.MessageID
			answers = append(answers, a)
			if f.echo {
				p.Qos = 0
				answers = append(answers, p)
			}
		case *packets.PingreqPacket:
			answers = append(answers, packets.NewControlPacket(packets.Pingresp))
		}
		for _, a := range answers {
			if a.Write(c) != nil {
				return
			}
		}
	}
}

func grantAll(_ string, asked byte) byte { return asked }

func TestRefusedSubscriptionIsFatalForItsSession(t *testing.T) {
	t.Parallel()
	tests := []struct {
		name  string
		grant func(filter string, asked byte) byte
		named string // in the event
	}{
		// 0x80 is failure [MQTT-3.9.3]; paho reports no error for it.
		{"filter refused", func(filter string, asked byte) byte {
			if filter == "rigs/r1/secret" {
				return 0x80
			}
			return asked
		}, "rigs/r1/secret"},
		// A broker may grant less than was asked [MQTT-3.8.4-6]: it would keep nothing.
		{"only QoS 0 granted", func(filter string, asked byte) byte {
			if filter == "rigs/r1/secret" {
				return 0
			}
			return asked
		}, "rigs/r1/secret"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			url := fake{grant: tt.grant, echo: true}.start(t)
			c := run(t, mqtt.Config{URL: url, Filters: []string{"rigs/r1/secret", "rigs/r1/open"}})
			e := c.event(mqtt.EventRefused)
			if e.Session != 0 || e.Filter != "rigs/r1/secret" || !errors.Is(e.Err, mqtt.ErrRefused) || !strings.Contains(e.Err.Error(), tt.named) {
				t.Errorf("event = %+v, want the refused filter named", e)
			}
			for deadline := time.Now().Add(patience); ; time.Sleep(20 * time.Millisecond) {
				st := c.Stats()
				if st[0].Refused && !st[0].Connected && !st[1].Refused && st[1].Connected {
					break
				}
				if time.Now().After(deadline) {
					t.Fatalf("stats = %+v, want only session 0 refused", st)
				}
			}
			select {
			case <-c.Ready():
				t.Error("ready although a session is refused")
			default:
			}
		})
	}
	t.Run("probe topic refused", func(t *testing.T) {
		t.Parallel()
		url := fake{grant: func(filter string, asked byte) byte {
			if strings.Contains(filter, "probe") {
				return 0x80
			}
			return asked
		}, echo: true}.start(t)
		c := run(t, mqtt.Config{URL: url, Filters: []string{"rigs/r1/open"}})
		if e := c.event(mqtt.EventRefused); !strings.Contains(e.Err.Error(), "throatwatch/probe/") {
			t.Errorf("event = %v, want the probe topic named", e)
		}
	})
}

func TestGrantedButDeaf(t *testing.T) {
	t.Parallel()
	// The link, the subscription and every acknowledgement are good, but nothing
	// is delivered: an access list that denies reading looks like this.
	c := ready(t, mqtt.Config{URL: fake{grant: grantAll}.start(t), Filters: []string{"rigs/r1/senml"}, KeepAlive: time.Second})
	c.event(mqtt.EventDeaf)
	if e := c.event(mqtt.EventDisconnected); !errors.Is(e.Err, mqtt.ErrDeaf) {
		t.Errorf("event = %v, want the connection given up as deaf", e)
	}
	if e := c.event(mqtt.EventConnected); e.Generation < 2 {
		t.Errorf("event = %+v, want a new connection", e)
	}
}

func TestRefusedConnectionIsReportedOnce(t *testing.T) {
	t.Parallel()
	c := run(t, mqtt.Config{URL: fake{connack: packets.ErrRefusedNotAuthorised}.start(t), Filters: []string{"rigs/r1/senml"}})
	for range 2 { // the session and the publisher
		if e := c.event(mqtt.EventDisconnected); !errors.Is(e.Err, packets.ConnErrors[packets.ErrRefusedNotAuthorised]) {
			t.Errorf("event = %v, want the broker's reason", e)
		}
	}
	time.Sleep(time.Second) // three more attempts
	select {
	case e := <-c.Events():
		t.Errorf("reported again: %v", e)
	default:
	}
	if st := c.Stats()[0]; st.Generation < 3 || st.LastFailure == "" {
		t.Errorf("stats = %+v, want further attempts and the reason", st)
	}
}
