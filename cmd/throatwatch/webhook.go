package main

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"path/filepath"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/dashboard/webhook"
	"throatwatch/rules"
)

// webhookOptions are the flags that say who gets alarms by HTTP. Without a URL nobody.
type webhookOptions struct {
	url, secretFile string
	notes           bool
}

func (o *webhookOptions) flags(fs *pflag.FlagSet) {
	fs.StringVar(&o.url, "webhook", "", "receiver that gets alarm transitions by POST, http:// or https:// (default: none)")
	fs.StringVar(&o.secretFile, "webhook-secret-file", "", "file with the secret that signs them, shared with the receiver")
	fs.BoolVar(&o.notes, "webhook-notes", false, "send notes too, not only warnings, cautions and advisories")
}

// receiver keeps a receiver of the site up with alarms.
type receiver struct {
	transitions *watch.Transitions
	sender      *webhook.Sender
	log         *slog.Logger
}

// open gives the receiver, nil when there is none. Its files lie in dir. held is that of
// webhook.Config.
func (o webhookOptions) open(s *watch.Store, dir, rig string, held func() (time.Duration, bool), log *slog.Logger) (*receiver, error) {
	switch {
	case o == webhookOptions{}:
		return nil, nil //nolint:nilnil // a site without a receiver is no error
	case o.url == "":
		return nil, errors.New("flags for the webhook are given without its address: add --webhook https://host/path")
	case o.secretFile == "":
		return nil, errors.New("--webhook: a shared secret is needed, so that the receiver can tell who sends: add --webhook-secret-file")
	}
	secret, err := readSecret(o.secretFile)
	if err != nil {
		return nil, fmt.Errorf("--webhook-secret-file: %w", err)
	}
	least := rules.Advisory
	if o.notes {
		least = rules.Note
	}
	r := &receiver{transitions: watch.NewTransitions(s, least, log), log: log}
	r.sender, err = webhook.New(webhook.Config{
		URL: o.url, Secret: []byte(secret), Rig: rig, Source: r.transitions, Held: held,
		Cursor:   watch.HookCursor{Path: filepath.Join(dir, "webhook-cursor.json"), URL: o.url},
		SetAside: filepath.Join(dir, "webhook-refused.ndjson"),
	})
	if err != nil {
		return nil, fmt.Errorf("--webhook: %w", err)
	}
	return r, nil
}

// run sends until ctx ends.
func (r *receiver) run(ctx context.Context) {
	r.sender.Run(ctx)
	if err := r.transitions.Close(); err != nil {
		r.log.Warn("webhook", "err", err)
	}
}

// metrics gives the figures of the webhook.
func (r *receiver) metrics() []dashboard.Metric {
	st := r.sender.Status()
	working := 0.0
	if st.State == webhook.Working {
		working = 1
	}
	total := func(name, help string, v uint64) dashboard.Metric {
		return dashboard.Metric{Name: name, Help: help, Total: true, Value: float64(v)}
	}
	return []dashboard.Metric{
		{Name: "webhook_working", Help: "1 while the receiver takes alarms.", Value: working},
		{Name: "webhook_waiting", Help: "Alarm transitions that wait for the receiver.", Value: float64(st.Waiting)},
		total("webhook_delivered_total", "Alarm transitions that the receiver has taken.", st.Delivered),
		total("webhook_failed_total", "Tries that it did not take.", st.Failed),
		total("webhook_refused_total", "Alarm transitions that it refused, kept in webhook-refused.ndjson.", st.Refused),
		total("webhook_let_go_total", "Alarm transitions dropped from the full queue, oldest first.", st.LetGo),
		total("webhook_skipped_records_total", "Records that were removed or damaged before their alarms were sent.", r.transitions.Skipped()),
	}
}
