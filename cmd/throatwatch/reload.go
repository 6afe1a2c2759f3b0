package main

import (
	"bytes"
	"context"
	"crypto/rand"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"slices"
	"strings"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/rules/pipeline"
)

// mostWhy bounds what is journalled of the faults of files, bytes.
const mostWhy = 500

// inForce gives the configuration that the watch begins with: that of the files,
// unless limits and rules may not change now. The loop refuses the files then, and
// this is what was in force before.
func (w *watcher) inForce(core *watch.Core, files pipeline.Config) pipeline.Config {
	old, ok := core.Machine.Config()
	if !ok || old.Hash == files.Hash {
		return files
	}
	why := core.State.MayChange(max(time.Now().UnixNano(), core.State.Host))
	if why == nil {
		return files
	}
	_, _ = fmt.Fprintf(w.stderr, "throatwatch watch: the rig and rule files are others than before: %v. What was in force stays; `throatwatch reload` takes the files in when the engine is off\n", why)
	return old
}

// reload takes the rig and rule files as they are now into force, for who a says.
// Files with faults are not tried; that they were refused is recorded.
func (w *watcher) reload(ctx context.Context, a pipeline.Action) (pipeline.Reply, []dashboard.Fault, error) {
	bundle, cfg, faults := config.Load(w.rig)
	if len(faults) == 0 {
		faults = w.needRestart(&cfg)
	}
	if len(faults) == 0 {
		res, err := w.loop.Configure(ctx, a, bundle.Marshal())
		return res, nil, err
	}
	out := shownFaults(faults)
	a.Do = pipeline.DoConfigRefused
	a.Text = out[0].At + ": " + out[0].Message
	if more := len(out) - 1; more > 0 {
		a.Text += fmt.Sprintf("; and %d more", more)
	}
	a.Text = a.Text[:min(len(a.Text), mostWhy)]
	res, err := w.loop.Act(ctx, a)
	return res, out, err
}

// shownFaults gives faults as the page and the interface tell them.
func shownFaults(faults []config.Fault) []dashboard.Fault {
	out := make([]dashboard.Fault, len(faults))
	for i, f := range faults {
		at := f.File
		if f.Line > 0 {
			at = fmt.Sprintf("%s:%d:%d", f.File, f.Line, f.Column)
		}
		out[i] = dashboard.Fault{At: at, Message: strings.TrimPrefix(f.Path+": "+f.Message, ": "), Hint: f.Hint}
	}
	return out
}

// needRestart tells what the sessions of the broker were opened for, and cannot
// change while they are.
func (w *watcher) needRestart(cfg *pipeline.Config) []config.Fault {
	const hint = "stop the watch and start it with these files"
	switch {
	case cfg.Rig.ID != w.cfg.Rig.ID:
		return []config.Fault{{File: w.rig, Path: "rig.id", Message: fmt.Sprintf("the watch is on rig %q, this is %q", w.cfg.Rig.ID, cfg.Rig.ID), Hint: hint}}
	case !slices.Equal(cfg.Align.Inputs, w.cfg.Align.Inputs):
		return []config.Fault{{File: w.rig, Path: "inputs", Message: "the inputs are others than those that the watch has subscribed to", Hint: hint}}
	}
	return nil
}

// reloadCommand asks a running watch to take its rig and rule files in anew. It gives
// 0 when they are in force, 1 when not.
func reloadCommand(ctx context.Context, args []string, stdout, stderr io.Writer) int {
	fs := newFlags("reload", "Let a running watch take its rig and rule files in anew: with the engine off, and only files without faults.", stderr)
	base := fs.String("url", "http://127.0.0.1:8189", "address of the watch")
	by := fs.String("by", "", "who made the change (default: the rig file's change.engineer)")
	approved := fs.String("approved-by", "", "who approved it, another person (default: the rig file's change.approver)")
	reason := fs.String("reason", "", "why")
	tokenFile := fs.String("token-file", "", "file with a token of an engineer's role, for a watch with users")
	rest, code := parseArgs(fs, args, stderr)
	switch {
	case code >= 0:
		return code
	case len(rest) > 0:
		_, _ = fmt.Fprintln(stderr, "throatwatch reload: the files are those that the watch was started with: give no file")
		return 2
	}
	token, err := readSecret(*tokenFile)
	if err == nil {
		err = askReload(ctx, strings.TrimRight(*base, "/"), token, map[string]string{"by": *by, "approved_by": *approved, "reason": *reason, "request_id": rand.Text()}, stdout)
	}
	if err != nil {
		_, _ = fmt.Fprintln(stderr, "throatwatch reload:", err)
		return 1
	}
	return 0
}

// askReload finds the rig of a watch and asks for the reload.
func askReload(ctx context.Context, base, token string, body map[string]string, stdout io.Writer) error {
	var rigs []pipeline.RigInfo
	if err := call(ctx, http.MethodGet, base+"/api/rigs", token, nil, &rigs); err != nil {
		return err
	}
	if len(rigs) == 0 {
		return errors.New("no rig is watched there")
	}
	text, err := json.Marshal(body)
	if err != nil {
		return fmt.Errorf("request: %w", err)
	}
	rig := base + "/api/rigs/" + url.PathEscape(rigs[0].ID)
	if err := call(ctx, http.MethodPost, rig+"/config", token, text, nil); err != nil {
		return err
	}
	var hello struct {
		Config pipeline.InForce `json:"config"`
	}
	if err := call(ctx, http.MethodGet, rig+"/hello", token, nil, &hello); err != nil {
		return err
	}
	c := &hello.Config
	who := "not approved"
	if c.ApprovedBy != "" {
		who = "approved by " + c.ApprovedBy
	}
	_, _ = fmt.Fprintf(stdout, "in force: %s, %s\n", c.Hash, phrase(named("changed by ", c.By), who))
	return nil
}

// call does a request and decodes the answer into v, unless that is nil. A problem
// becomes an error with its faults, one per line.
func call(ctx context.Context, method, to, token string, body []byte, v any) error {
	ctx, cancel := context.WithTimeout(ctx, 10*time.Second)
	defer cancel()
	r, err := http.NewRequestWithContext(ctx, method, to, bytes.NewReader(body))
	if err != nil {
		return fmt.Errorf("--url: %w", err)
	}
	if token != "" {
		r.Header.Set("Authorization", "Bearer "+token)
	}
	res, err := http.DefaultClient.Do(r)
	if err != nil {
		return fmt.Errorf("is a watch running there? %w", err)
	}
	defer res.Body.Close() //nolint:errcheck // it was read
	const most = 4 << 20
	answer, err := io.ReadAll(io.LimitReader(res.Body, most))
	if err != nil {
		return fmt.Errorf("%s: %w", to, err)
	}
	var problem struct {
		Detail string            `json:"detail"`
		Faults []dashboard.Fault `json:"faults"`
	}
	switch {
	case res.StatusCode < 300:
		if v == nil {
			return nil
		}
		if err := json.Unmarshal(answer, v); err != nil {
			return fmt.Errorf("%s: %w", to, err)
		}
		return nil
	case json.Unmarshal(answer, &problem) != nil || problem.Detail == "":
		return fmt.Errorf("%s: %s", to, res.Status)
	}
	lines := []string{problem.Detail}
	for _, f := range problem.Faults {
		lines = append(lines, f.At+": "+f.Message, wrap("      hint: ", f.Hint))
	}
	return errors.New(strings.Join(lines, "\n"))
}
