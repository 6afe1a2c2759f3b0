package main

import (
	"context"
	"crypto/rand"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/pflag"

	"throatwatch/dashboard"
	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

const (
	// checksAsked is how often a running check is asked after.
	checksAsked = 500 * time.Millisecond
	// checksLate is for how long after its window a check is waited for.
	checksLate = 20 * time.Second
)

// checksOptions are the flags of the command.
type checksOptions struct {
	base, token, data   string
	warm, cold, asJSON  bool
	ticks               []string
	planned             time.Duration
	by, note, tokenFile string
}

// checksCommand begins a check of the data system at a running watch and prints what came
// of it, or prints the checks of a stored run. It gives 0 when every item passed.
func checksCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("checks [before | after | RUN]",
		"Check the data system of a running watch before or after a run, with the engine at rest; or, with a stored run,\n"+
			"print its checks. Alone it prints the last ones and what has to be ticked by hand.", stderr)
	o := checksFlags(fs)
	rest, code := parseArgs(fs, args, stderr)
	if code >= 0 {
		return code
	}
	what := strings.Join(rest, " ")
	live := what == check.Before || what == check.After
	switch {
	case len(rest) > 1:
		_, _ = fmt.Fprintln(stderr, "throatwatch checks: give before, after or one run")
		return 2
	case live && o.warm == o.cold:
		_, _ = fmt.Fprintln(stderr, "throatwatch checks: say --cold, when all of the engine has the temperature of its surroundings, or --warm")
		return 2
	}
	list, zone, err := o.checks(ctx, what, live, stdout)
	if err == nil && o.asJSON {
		err = printJSON(stdout, list)
	} else if err == nil {
		printChecks(stdout, list, zone)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch checks:", err)
		return 1
	}
	for i := range list {
		if list[i].Passed < list[i].Of {
			return 1
		}
	}
	return 0
}

func checksFlags(fs *pflag.FlagSet) *checksOptions {
	o := &checksOptions{}
	fs.BoolVar(&o.cold, "cold", false, "all of the engine has the temperature of its surroundings")
	fs.BoolVar(&o.warm, "warm", false, "it has not")
	fs.StringArrayVar(&o.ticks, "tick", nil, "what was done by hand, and by whom: ID=NAME, ID alone for --by; all=NAME for everything; may be repeated")
	fs.DurationVar(&o.planned, "planned", 0, "length of the run, for which the disk has to last (default: as the rig file has it)")
	fs.StringVar(&o.by, "by", "", "who checks")
	fs.StringVar(&o.note, "note", "", "a remark")
	fs.StringVar(&o.base, "url", "http://127.0.0.1:8189", "address of the watch")
	fs.StringVar(&o.tokenFile, "token-file", "", "file with a token of an operator's role, for a watch with users")
	fs.StringVar(&o.data, "data", "data", "data folder, for a stored run")
	fs.BoolVar(&o.asJSON, "json", false, "JSON")
	return o
}

// checks gives the checks that were asked for.
func (o *checksOptions) checks(ctx context.Context, what string, live bool, stdout io.Writer) ([]check.Result, *time.Location, error) {
	if what != "" && !live {
		f, done, err := openRun(ctx, o.data, what)
		if err != nil {
			return nil, nil, err
		}
		h, err := f.Header(ctx)
		var list []check.Result
		if err == nil {
			list, err = dashboard.ReadChecks(ctx, f, &h)
		}
		return list, zoneOf(h.TimeZone), errors.Join(err, done())
	}
	var err error
	if o.token, err = readSecret(o.tokenFile); err != nil {
		return nil, nil, err
	}
	var rigs []pipeline.RigInfo
	o.base = strings.TrimRight(o.base, "/")
	if err := call(ctx, http.MethodGet, o.base+"/api/rigs", o.token, nil, &rigs); err != nil {
		return nil, nil, err
	}
	if len(rigs) == 0 {
		return nil, nil, errors.New("no rig is watched there")
	}
	at := o.base + "/api/rigs/" + url.PathEscape(rigs[0].ID) + "/checks"
	var now pipeline.ChecksView
	if err := call(ctx, http.MethodGet, at, o.token, nil, &now); err != nil {
		return nil, nil, err
	}
	if live {
		r, err := o.ask(ctx, at, what, &now)
		return []check.Result{r}, rigs[0].Zone(), err
	}
	list := []check.Result{}
	for _, r := range []*check.Result{now.Before, now.After, now.Running} {
		if r != nil {
			list = append(list, *r)
		}
	}
	if !o.asJSON {
		_, _ = fmt.Fprintln(stdout, "To be ticked by hand before a run:")
		for _, t := range now.Ticks {
			_, _ = fmt.Fprintf(stdout, "  %-28s %s\n", t.ID, t.Title)
		}
	}
	return list, rigs[0].Zone(), nil
}

// ticked gives who has done what, as the flags say.
func (o *checksOptions) ticked(known []check.Tick) (map[string]string, error) {
	out := map[string]string{}
	for _, text := range o.ticks {
		id, by, named := strings.Cut(text, "=")
		if !named {
			by = o.by
		}
		if strings.TrimSpace(by) == "" {
			return nil, fmt.Errorf("--tick %s: by whom? Write %s=NAME, or give --by", text, id)
		}
		if id != "all" {
			out[id] = by
			continue
		}
		for _, t := range known {
			out[t.ID] = by
		}
	}
	return out, nil
}

// ask begins a check and waits for what comes of it.
func (o *checksOptions) ask(ctx context.Context, at, phase string, before *pipeline.ChecksView) (r check.Result, err error) {
	warmth := check.Cold
	if o.warm {
		warmth = check.Warm
	}
	ticks, err := o.ticked(before.Ticks)
	if err != nil {
		return r, err
	}
	body, err := json.Marshal(map[string]any{
		"phase": phase, "warmth": warmth, "ticks": ticks, "planned_s": o.planned.Seconds(), "note": o.note, "by": o.by, "request_id": rand.Text(),
	})
	if err != nil {
		return r, fmt.Errorf("request: %w", err)
	}
	if err := call(ctx, http.MethodPost, at, o.token, body, nil); err != nil {
		return r, err
	}
	tick := time.NewTicker(checksAsked)
	defer tick.Stop()
	end := time.Now().Add(time.Duration(before.Window*1e9) + checksLate)
	for time.Now().Before(end) {
		select {
		case <-ctx.Done():
			return r, ctx.Err()
		case <-tick.C:
		}
		var now pipeline.ChecksView
		if err := call(ctx, http.MethodGet, at, o.token, nil, &now); err != nil {
			return r, err
		}
		if now.Running != nil {
			continue
		}
		done, was := now.Before, before.Before
		if phase == check.After {
			done, was = now.After, before.After
		}
		if done != nil && (was == nil || done.Ended != was.Ended) {
			return *done, nil
		}
		return r, errors.New("the check was broken off: `throatwatch log` and the page say why")
	}
	return r, errors.New("the check does not end: is the watch still stepping? Look at its page")
}

// printChecks prints what did not pass first, then all of it.
func printChecks(w io.Writer, list []check.Result, zone *time.Location) {
	if len(list) == 0 {
		_, _ = fmt.Fprintln(w, "no check was made")
	}
	for i := range list {
		r := &list[i]
		if i > 0 {
			_, _ = fmt.Fprintln(w)
		}
		_, _ = fmt.Fprintf(w, "%s the run%s: %s %s, %s\n", r.Phase, named(" ", r.Run), stamp(r.Began, zone), zoneName(zone), phrase(r.Warmth, named("by ", oneLine(r.By)), oneLine(r.Note)))
		t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
		for _, it := range r.Items {
			mark := "passed"
			if !it.Passed {
				mark = "NOT PASSED"
			}
			_, _ = fmt.Fprintf(t, "%s\t%s\t%s\t%s\n", mark, it.ID, oneLine(it.Title), oneLine(it.Text))
		}
		_ = t.Flush()
		if r.State != check.Done {
			_, _ = fmt.Fprintln(w, r.State, r.Why)
			continue
		}
		for _, it := range r.Items {
			if !it.Passed {
				_, _ = fmt.Fprintf(w, "not passed: %s: %s\n", it.ID, oneLine(it.Text))
			}
		}
		_, _ = fmt.Fprintln(w, r.Summary)
	}
}
