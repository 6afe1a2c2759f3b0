package bench

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net"
	"os"
	"strconv"
	"sync/atomic"
	"time"

	paho "github.com/eclipse/paho.mqtt.golang"

	"throatwatch/ingest/broker"
	"throatwatch/ingest/decode"
)

const (
	// window is the number of messages unacknowledged at a time, of publisher and broker.
	window = 4096
	// perPack is the number of readings in a message: about 1 kB of SenML.
	perPack = 20
)

// Part runs one side of a measurement in a process of its own, so that its processor
// time can be told apart. Its words are those of publish, subscribe and relay.
func Part(ctx context.Context, args []string, stdout io.Writer) error {
	switch {
	case len(args) == 6 && args[0] == "publish":
		count, err := strconv.Atoi(args[3])
		if err != nil {
			return err
		}
		perSecond, err := strconv.Atoi(args[4])
		if err != nil {
			return err
		}
		return publish(ctx, args[1], args[2], count, perSecond, args[5], stdout)
	case len(args) == 4 && args[0] == "subscribe":
		count, err := strconv.Atoi(args[3])
		if err != nil {
			return err
		}
		return subscribe(ctx, args[1], args[2], count, stdout)
	}
	if len(args) == 3 && args[0] == "relay" {
		return relay(ctx, args[1], args[2], stdout)
	}
	return errors.New("part: not called by bench")
}

// publish sends count packs to topic, as fast as the broker takes them or so many per
// second, with readings of a file in turn. It says "first" when it begins and "sent"
// when all are acknowledged.
func publish(ctx context.Context, url, topic string, count, perSecond int, file string, stdout io.Writer) error {
	text, err := os.ReadFile(file)
	if err != nil {
		return err
	}
	var readings []decode.Reading
	if err := json.Unmarshal(text, &readings); err != nil {
		return fmt.Errorf("%s: %w", file, err)
	}
	client, err := connect(url, "bench-publisher", nil)
	if err != nil {
		return err
	}
	defer client.Disconnect(100)
	tokens := make(chan paho.Token, window) // full: the publisher waits
	failed := make(chan error, 1)
	go func() {
		var err error
		for t := range tokens {
			t.Wait()
			err = errors.Join(err, t.Error())
		}
		failed <- err
	}()
	_, _ = fmt.Fprintln(stdout, "first")
	began := time.Now()
	for i := range count {
		if perSecond > 0 && i%10 == 0 {
			time.Sleep(time.Until(began.Add(time.Duration(i) * time.Second / time.Duration(perSecond))))
		}
		if ctx.Err() != nil {
			break
		}
		from := i * perPack % len(readings)
		part := readings[from:min(from+perPack, len(readings))]
		for k := range part { // a reading that never moves would be stuck
			part[k].Value *= 1 + 1e-4*float64(i%7-3)/3
		}
		payload := decode.AppendSenMLJSON(make([]byte, 0, 1200), "", time.Now().UnixNano(), part)
		for k := range part {
			part[k].Value /= 1 + 1e-4*float64(i%7-3)/3
		}
		tokens <- client.Publish(topic, 1, false, payload)
	}
	close(tokens)
	if err := errors.Join(<-failed, ctx.Err()); err != nil {
		return err
	}
	_, _ = fmt.Fprintln(stdout, "sent")
	return nil
}

// subscribe takes count messages and acknowledges each by hand, with nothing behind it.
// Without a url it runs the embedded broker too. It says "at URL" when it listens and
// "took" at the end.
func subscribe(ctx context.Context, url, topic string, count int, stdout io.Writer) (err error) {
	if url == "" {
		dir, err := os.MkdirTemp("", "bench-broker-")
		if err != nil {
			return err
		}
		defer os.RemoveAll(dir) //nolint:errcheck // it is in the folder for temporary files
		b, err := broker.New(broker.Config{Listen: "127.0.0.1:0", StoreDir: dir}, slog.New(slog.DiscardHandler))
		if err != nil {
			return err
		}
		if err := b.Start(ctx); err != nil {
			return err
		}
		defer b.Close() //nolint:errcheck // the process ends
		b.Open()
		url = b.URL()
	}
	var n atomic.Int64
	all := make(chan struct{})
	client, err := connect(url, "bench-bare", func(_ paho.Client, m paho.Message) {
		m.Ack()
		if n.Add(1) == int64(count) {
			close(all)
		}
	})
	if err != nil {
		return err
	}
	defer client.Disconnect(100)
	if t := client.Subscribe(topic, 1, nil); t.Wait() && t.Error() != nil {
		return t.Error()
	}
	_, _ = fmt.Fprintln(stdout, "at", url)
	select {
	case <-all:
		_, _ = fmt.Fprintln(stdout, "took")
	case <-ctx.Done():
		return ctx.Err()
	}
	<-ctx.Done() // its processor time is read while it lives
	return nil
}

func connect(url, id string, handler paho.MessageHandler) (paho.Client, error) {
	o := paho.NewClientOptions().AddBroker(url).SetClientID(id).SetCleanSession(handler == nil).SetAutoAckDisabled(true)
	if handler != nil {
		o.SetDefaultPublishHandler(handler)
	}
	c := paho.NewClient(o)
	if t := c.Connect(); t.Wait() && t.Error() != nil {
		return nil, fmt.Errorf("%s: %w", url, t.Error())
	}
	return c, nil
}

// freePort gives a loopback address that nothing listens on.
func freePort(ctx context.Context) (string, error) {
	l, err := (&net.ListenConfig{}).Listen(ctx, "tcp", "127.0.0.1:0")
	if err != nil {
		return "", err
	}
	return l.Addr().String(), l.Close()
}
