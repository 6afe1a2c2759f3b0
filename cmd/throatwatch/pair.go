package main

import (
	"errors"
	"fmt"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/cmd/internal/pair"
	"throatwatch/dashboard"
	"throatwatch/ingest/mqtt"
)

// pairOptions are the flags that make this watch one of two on a rig.
type pairOptions struct {
	name, secretFile string
}

func (o *pairOptions) flags(fs *pflag.FlagSet) {
	fs.StringVar(&o.name, "pair", "", "name of this watch as one of two on the rig, each with another; one speaks, the other does when it falls silent")
	fs.StringVar(&o.secretFile, "pair-secret-file", "", "file with the secret, 16 bytes at least, that the two share")
}

// check finds what cannot be meant.
func (o *pairOptions) check(broker string) error {
	switch {
	case o.name == "" && o.secretFile != "":
		return errors.New("--pair-secret-file is for one of two watches: add --pair NAME")
	case o.name != "" && broker == "":
		return errors.New("--pair: the two watches meet at the site's broker: add --broker")
	case o.name != "" && o.secretFile == "":
		return errors.New("--pair: without a shared secret whoever publishes could acknowledge alarms: add --pair-secret-file")
	}
	return nil
}

// join makes this watch one of a pair, if it is to be. c is how its inputs come.
func (w *watcher) join(c mqtt.Config) (err error) {
	if w.opt.pair.name == "" {
		return nil
	}
	secret, err := readSecret(w.opt.pair.secretFile)
	if err != nil {
		return fmt.Errorf("--pair-secret-file: %w", err)
	}
	set := pair.Config{
		Name: w.opt.pair.name, Secret: []byte(secret), Rig: w.cfg.Rig.ID, Inputs: c.Filters, Broker: c, Log: w.log,
	}
	if w.hook != nil {
		set.Behind = w.hook.behind
	}
	if w.pair, err = pair.New(set); err != nil {
		return fmt.Errorf("--pair: %w", err)
	}
	return nil
}

// behind gives how long the oldest alarm has waited for the receiver.
func (r *receiver) behind() time.Duration {
	st := r.sender.Status()
	if st.Oldest.IsZero() {
		return 0
	}
	return time.Since(st.Oldest)
}

// speaking gives how this watch stands to the other, for the page.
func (w *watcher) speaking() dashboard.Speaking {
	st := w.pair.Standing()
	out := dashboard.Speaking{Watch: w.pair.Name(), Why: st.Why}
	if st.Name != "" {
		since := st.Since.UTC()
		out.Name, out.Since = &st.Name, &since
	}
	if st.Other != "" {
		out.Other = &st.Other
	}
	return out
}

// pairMetrics gives the figures of the pair.
func (w *watcher) pairMetrics() []dashboard.Metric {
	st := w.pair.Standing()
	truth := func(b bool) float64 {
		if b {
			return 1
		}
		return 0
	}
	return []dashboard.Metric{
		{Name: "pair_speaks", Help: "1 while this watch speaks for the pair.", Value: truth(st.Speaks)},
		{Name: "pair_other_heard", Help: "1 while the other watch is heard.", Value: truth(st.Other != "")},
		{Name: "pair_foreign_total", Help: "Messages on the topics of the pair that were not used: not signed by a watch of it, or too old.", Total: true, Value: float64(w.pair.Foreign())},
	}
}
