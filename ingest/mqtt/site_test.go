package mqtt_test

import (
	"crypto/tls"
	"encoding/json"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"testing"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
)

// dataSystem connects to the listener of data systems as name, with the client id
// that it asks for; err tells why it cannot.
func dataSystem(t *testing.T, address, name, id string, config *tls.Config) (c paho.Client, err error) {
	t.Helper()
	u, err := url.Parse(address)
	if err != nil {
		t.Fatal(err)
	}
	o := paho.NewClientOptions().AddBroker("ssl://" + u.Host).SetClientID(id).SetUsername(name).SetPassword(mqtttest.SitePassword).
		SetTLSConfig(config).SetAutoReconnect(false).SetConnectTimeout(patience)
	c = paho.NewClient(o)
	token := c.Connect()
	token.Wait()
	t.Cleanup(func() { c.Disconnect(0) })
	return c, token.Error()
}

// TestSiteBroker: by the configuration and the access list that ship, a data system
// can write the inputs of its own rig and nothing else, and nobody but a watch can
// be on the listener of watches or hold the client id of one.
func TestSiteBroker(t *testing.T) {
	t.Parallel()
	site := mqtttest.MosquittoSite(t, "../../deploy", "cell_2", "display")
	site.Start()
	pair, err := tls.LoadX509KeyPair(site.Cert, site.Key)
	if err != nil {
		t.Fatal(err)
	}
	plain := &tls.Config{RootCAs: site.Pool, MinVersion: tls.VersionTLS12}
	own := plain.Clone()
	own.Certificates = []tls.Certificate{pair}
	dir := t.TempDir()
	daemon := ready(t, mqtt.Config{URL: site.URL, Dir: dir, Filters: []string{"rigs/#"}, TLS: own})

	text, err := os.ReadFile(filepath.Join(dir, "mqtt-client.json"))
	if err != nil {
		t.Fatal(err)
	}
	var identity struct{ Client string }
	if err := json.Unmarshal(text, &identity); err != nil {
		t.Fatal(err)
	}
	thief, err := dataSystem(t, site.DataURL, "cell_2", identity.Client+"-0", plain)
	if err != nil {
		t.Fatal(err)
	}
	for _, topic := range []string{
		"rigs/cell_2/alarms", "rigs/cell_2/status", "rigs/cell_2/operating-point", "rigs/cell_2/actions", "rigs/cell_2/speaking", "rigs/cell_3/senml", "rigs/cell_3/channels/p7",
		"rigs/cell_2/channels/p7", "rigs/cell_2/lines", "rigs/cell_2/senml-cbor", "rigs/cell_2/senml", // the last is the end
	} {
		token := thief.Publish(topic, 1, false, "1")
		if token.Wait(); token.Error() != nil {
			t.Fatalf("%s: %v", topic, token.Error())
		}
	}
	var got []string
	for !slices.Contains(got, "rigs/cell_2/senml") {
		m := daemon.next()
		got = append(got, m.Topic)
		daemon.Ack(m)
	}
	if want := []string{"rigs/cell_2/channels/p7", "rigs/cell_2/lines", "rigs/cell_2/senml-cbor", "rigs/cell_2/senml"}; !slices.Equal(got, want) {
		t.Errorf("came through: %q, want %q", got, want)
	}
	if st := daemon.Stats()[0]; !st.Connected || st.Generation != 1 {
		t.Errorf("somebody with the client id of the watch ended its session: %+v", st)
	}

	// What a watch tells is read by a display and cannot be written by it.
	display, err := dataSystem(t, site.DataURL, "display", "any", plain)
	if err != nil {
		t.Fatal(err)
	}
	seen := make(chan string, 16)
	token := display.Subscribe("rigs/#", 1, func(_ paho.Client, m paho.Message) { seen <- m.Topic() })
	if token.Wait(); token.Error() != nil {
		t.Fatal(token.Error())
	}
	display.Publish("rigs/cell_2/alarms", 1, false, "1").Wait()
	for _, topic := range []string{"rigs/cell_2/senml", "rigs/cell_2/alarms"} {
		if err := daemon.Publish(t.Context(), topic, []byte("1"), 1, false); err != nil {
			t.Fatal(err)
		}
	}
	select {
	case topic := <-seen:
		if topic != "rigs/cell_2/alarms" {
			t.Errorf("a display reads %s", topic)
		}
	case <-time.After(patience):
		t.Error("a display does not read the alarms")
	}
	if n := len(seen); n > 0 {
		t.Errorf("%d more came, of which a display wrote one itself", n)
	}

	stranger := plain.Clone()
	stranger.Certificates = []tls.Certificate{site.Stranger}
	for _, tt := range []struct {
		name, url, user string
		config          *tls.Config
	}{
		{"the listener of watches without a certificate", site.URL, "cell_2", plain},
		{"the listener of watches with a certificate by another authority", site.URL, "throatwatch", stranger},
		{"a name that is not known", site.DataURL, "cell_9", plain},
		{"the name of the watch without its certificate", site.DataURL, "throatwatch", plain},
	} {
		if _, err := dataSystem(t, tt.url, tt.user, identity.Client+"-0", tt.config); err == nil {
			t.Errorf("%s: let in", tt.name)
		}
	}
}
