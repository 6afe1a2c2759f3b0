package pair

import (
	"context"
	"errors"
	"log/slog"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"throatwatch/ingest/mqtt"
	"throatwatch/ingest/mqtt/mqtttest"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

var sharedSecret = []byte("shared by two watches of a test")

// stub is a loop that notes what it is asked for.
type stub struct {
	state pipeline.State
	done  chan pipeline.Action // by the other watch; holds what a test asks for
	err   error
}

func (l *stub) Act(context.Context, pipeline.Action) (pipeline.Reply, error) {
	return pipeline.Reply{Epoch: 1, N: 2, Err: l.err}, nil
}

func (l *stub) ActFor(_ context.Context, a pipeline.Action, _ mqtt.Message) (pipeline.Reply, error) {
	l.done <- a
	return pipeline.Reply{}, nil
}

func (l *stub) Ask(_ context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	fn(nil, &l.state)
	return nil
}

// begin starts one of two watches.
func begin(t *testing.T, url, name string, secret []byte) (*Pair, *stub) {
	t.Helper()
	p, err := New(Config{
		Name: name, Secret: secret, Rig: "bench_1", Inputs: []string{"rigs/bench_1/senml"},
		Broker: mqtt.Config{URL: url, Dir: t.TempDir()}, Log: slog.New(slog.DiscardHandler),
	})
	if err != nil {
		t.Fatal(err)
	}
	l := &stub{done: make(chan pipeline.Action, 16)}
	l.state.Rules.Instances = []rules.Instance{{Rule: "oil_low", ID: "run-1/oil_low/5", Raised: 5, Revision: 4}}
	p.Join(l)
	ctx, stop := context.WithCancel(t.Context())
	var running sync.WaitGroup
	running.Go(func() { p.Run(ctx) })
	t.Cleanup(func() { stop(); running.Wait() })
	<-p.client.Ready()
	return p, l
}

// What is done at one watch is done at the other, as it was; what is refused there is
// not. Whoever has no secret can do nothing, and nobody can say again what was said a
// while ago.
func TestActions(t *testing.T) {
	t.Parallel()
	url := mqtttest.Mosquitto(t).URL
	alpha, atAlpha := begin(t, url, "alpha", sharedSecret)
	_, atBeta := begin(t, url, "beta", sharedSecret)
	stranger, _ := begin(t, url, "alpha", []byte("guessed by somebody else, in vain"))

	publish := func(v any, secret []byte) {
		t.Helper()
		text, err := sign(secret, alpha.actions, v)
		if err == nil {
			err = alpha.client.Publish(t.Context(), alpha.actions, text, 1, false)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	forged := pipeline.Action{Do: rules.DoAcknowledge, Alarm: "run-1/oil_low/5", By: "nobody", RequestID: "f"}
	if _, err := stranger.Act(t.Context(), forged); err != nil { // signed by another secret
		t.Fatal(err)
	}
	now := time.Now().UnixNano()
	for _, bad := range []told{
		{Name: "alpha", Life: "another", Sent: now - 2*int64(fresh), Action: forged},
		{Name: "alpha", Life: "another", Sent: now + 2*int64(fresh), Action: forged},
		{Name: "alpha", Life: "another", Sent: now, Action: pipeline.Action{Do: pipeline.DoConfig, By: "nobody", RequestID: "g"}},
		{Name: "alpha", Life: "another", Sent: now, Action: pipeline.Action{Do: pipeline.DoMark, By: "nobody"}},
	} {
		publish(bad, sharedSecret)
	}
	if err := alpha.client.Publish(t.Context(), alpha.actions, []byte(`{"do":"acknowledge"}`), 1, false); err != nil {
		t.Fatal(err)
	}
	atAlpha.err = errors.New("refused")
	if r, err := alpha.Act(t.Context(), forged); err != nil || r.Err == nil {
		t.Errorf("a refused action gives %+v, %v", r, err)
	}
	atAlpha.err = nil
	wants := []pipeline.Action{
		{Do: rules.DoAcknowledge, Alarm: "run-1/oil_low/5", Revision: 2, By: "T. Ester", Role: "operator", RequestID: "a"},
		{Do: pipeline.DoMark, Text: "bleed opened", By: "T. Ester", Role: "operator"},
	}
	for _, a := range wants {
		if r, err := alpha.Act(t.Context(), a); err != nil || r != (pipeline.Reply{Epoch: 1, N: 2}) {
			t.Errorf("an action is answered with %+v, %v", r, err)
		}
	}
	for i, want := range wants {
		var got pipeline.Action
		select {
		case got = <-atBeta.done:
		case <-time.After(20 * time.Second):
			t.Fatal("the other watch does not follow")
		}
		if i == 0 {
			want.Revision = 4 // that of the alarm there
		} else {
			want.RequestID = got.RequestID
		}
		if got.RequestID == "" || got.Do != want.Do || got.Alarm != want.Alarm || got.Revision != want.Revision ||
			got.By != want.By || got.Role != want.Role || got.Text != want.Text || got.RequestID != want.RequestID {
			t.Errorf("at the other watch %+v, want %+v", got, want)
		}
	}
	if n := len(atAlpha.done) + len(atBeta.done); n > 0 {
		t.Errorf("%d more actions are done", n)
	}
	if n := alpha.Foreign(); n < 6 { // beats of the stranger beside them
		t.Errorf("%d messages were not used, 6 are forged", n)
	}
}

// A watch cannot be one of a pair with these.
func TestNew(t *testing.T) {
	t.Parallel()
	good := Config{Name: "alpha", Secret: sharedSecret, Rig: "bench_1", Inputs: []string{"rigs/bench_1/senml"}, Broker: mqtt.Config{URL: "mqtt://127.0.0.1:1"}}
	for name, tt := range map[string]struct {
		change func(*Config)
		want   string
	}{
		"no name":               {func(c *Config) { c.Name = "" }, "name"},
		"a name with a slash":   {func(c *Config) { c.Name = "a/b" }, "name"},
		"a short secret":        {func(c *Config) { c.Secret = c.Secret[:15] }, "at least 16"},
		"inputs that take all":  {func(c *Config) { c.Inputs = []string{"rigs/#"} }, "overlap"},
		"no broker that parses": {func(c *Config) { c.Broker.URL = "127.0.0.1" }, "broker URL"},
	} {
		c := good
		c.Secret, c.Inputs = slices.Clone(c.Secret), slices.Clone(c.Inputs)
		c.Broker.Dir = t.TempDir()
		tt.change(&c)
		if _, err := New(c); err == nil || !strings.Contains(err.Error(), tt.want) {
			t.Errorf("%s: %v", name, err)
		}
	}
}
