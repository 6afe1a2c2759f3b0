package watch

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"log/slog"
	"os"
	"time"

	"throatwatch/dashboard/webhook"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/influx"
	"throatwatch/rules"
	"throatwatch/rules/pipeline"
)

// Transitions gives the recorded transitions of alarms to a webhook.
type Transitions struct {
	follower[webhook.Transition]
	least rules.Priority
}

// NewTransitions gives the transitions of alarms of a priority and above.
func NewTransitions(s *Store, least rules.Priority, log *slog.Logger) *Transitions {
	t := &Transitions{least: least}
	t.follower = follower[webhook.Transition]{
		store: s, log: log, what: "the webhook", spans: map[string]records{}, between: t.between,
		ahead: func(newest uint64) influx.Cursor { return influx.Cursor{Seq: newest} },
	}
	return t
}

// Newest gives the cursor behind everything that is recorded.
func (t *Transitions) Newest() webhook.Cursor {
	f, _ := t.store.Current()
	seq, _ := f.Durable()
	return webhook.Cursor{Seq: seq}
}

// Follow is that of webhook.Source.
func (t *Transitions) Follow(ctx context.Context, after webhook.Cursor, limit int) ([]webhook.Transition, webhook.Cursor, error) {
	got, next, err := t.follower.Follow(ctx, influx.Cursor{Seq: after.Seq, Row: after.Row}, limit)
	return got, webhook.Cursor{Seq: next.Seq, Row: next.Row}, err
}

// between gives transitions after the cursor, of records up to upto.
func (t *Transitions) between(ctx context.Context, f *runfile.File, after influx.Cursor, upto uint64, limit int) (out []webhook.Transition, next influx.Cursor, err error) {
	var seq uint64
	var row, passed int
	err = f.Follow(ctx, after.Seq, upto, nil, func(e *runfile.Event) error {
		if e.Kind != "alarm" {
			return nil
		}
		if e.Seq != seq {
			seq, row = e.Seq, 0
		}
		row++
		if passed < after.Row {
			passed++
			return nil
		}
		var a struct {
			ID       string         `json:"id"`
			Revision uint64         `json:"revision"`
			Priority rules.Priority `json:"priority"`
		}
		if json.Unmarshal(e.JSON, &a) != nil || a.Priority < t.least { // of a later build, or not asked for
			return nil
		}
		out = append(out, webhook.Transition{
			Epoch: e.Epoch, N: e.N, T: time.Unix(0, e.T), ID: a.ID, Revision: a.Revision, Alarm: e.JSON,
			Behind: webhook.Cursor{Seq: e.Seq - 1, Row: row},
		})
		if len(out) == limit {
			return errEnough
		}
		return nil
	})
	switch {
	case errors.Is(err, errEnough):
		last := out[len(out)-1].Behind
		return out, influx.Cursor{Seq: last.Seq, Row: last.Row}, nil
	case err != nil:
		return nil, after, err
	}
	return out, influx.Cursor{Seq: upto}, nil
}

// Show tells a webhook of the transitions among outcomes that are shown.
func (t *Transitions) Show(to *webhook.Sender, outs []pipeline.Outcome, s *pipeline.State) {
	var got []webhook.Transition
	for i := range outs {
		o := &outs[i]
		if o.Kind != pipeline.OutcomeAlarm || o.Alarm.Priority < t.least {
			continue
		}
		text, err := json.Marshal(o.Alarm)
		if err != nil {
			panic("watch: alarm: " + err.Error()) // our own type encodes
		}
		got = append(got, webhook.Transition{
			Epoch: o.Epoch, N: o.N, T: time.Unix(0, o.T), ID: o.Alarm.ID, Revision: o.Alarm.Revision, Alarm: text,
		})
	}
	to.Show(got, s.Health.NotRecordingSince == 0)
}

// HookCursor keeps the cursor of a webhook in a small file. One of another receiver
// is not used: that one begins with what comes from now on.
type HookCursor struct {
	Path string
	URL  string // kept as a hash: it may hold a secret
}

type hookCursor struct {
	Receiver string         `json:"receiver"` // SHA-256 of the URL
	Cursor   webhook.Cursor `json:"cursor"`
}

func (f HookCursor) receiver() string {
	sum := sha256.Sum256([]byte(f.URL))
	return hex.EncodeToString(sum[:])
}

// Load gives the cursor saved last for this receiver; ok is false when there is none.
func (f HookCursor) Load() (c webhook.Cursor, ok bool, err error) {
	b, err := os.ReadFile(f.Path)
	if errors.Is(err, fs.ErrNotExist) {
		return c, false, nil
	}
	var v hookCursor
	if err == nil {
		err = json.Unmarshal(b, &v)
	}
	if err != nil {
		return c, false, fmt.Errorf("cursor file %s: %w: remove it, and the webhook gets what comes from then on", f.Path, err)
	}
	return v.Cursor, v.Receiver == f.receiver(), nil
}

// Save replaces the file in one step.
func (f HookCursor) Save(c webhook.Cursor) error {
	b, err := json.Marshal(hookCursor{f.receiver(), c})
	if err == nil {
		err = replace(f.Path, b)
	}
	if err != nil {
		return fmt.Errorf("cursor file: %w", err)
	}
	return nil
}
