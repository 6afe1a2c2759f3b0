package main

import (
	"context"
	"encoding/json"
	"errors"
	"log/slog"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/dashboard"
	"throatwatch/dashboard/access"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// rehearsedDay is a watch that is fed without waiting and answers as one: what people do
// comes in at the host time that the rehearsal has reached.
type rehearsedDay struct {
	t    *testing.T
	core *watch.Core
	feed *watch.Feed
	http *httptest.Server
}

func (d *rehearsedDay) Ask(_ context.Context, fn func(*pipeline.Machine, *pipeline.State)) error {
	fn(d.core.Machine, d.core.State)
	return nil
}

// Act enters an action. Whether it was done is what the requests that the state remembers
// say; the reason of a refusal is not looked at here.
func (d *rehearsedDay) Act(ctx context.Context, a pipeline.Action) (pipeline.Reply, error) {
	text, err := json.Marshal(a)
	if err != nil {
		return pipeline.Reply{}, err
	}
	if err := d.feed.Take(ctx, watch.Input{Kind: ingest.KindAction, Payload: text}, d.core.State.Host); err != nil {
		return pipeline.Reply{}, err
	}
	r := pipeline.Reply{Epoch: d.core.State.Epoch, N: d.core.State.N}
	if !slices.Contains(d.core.State.Done, a.RequestID) {
		r.Err = errors.New("refused")
	}
	return r, nil
}

// do gives a command that must succeed.
func (d *rehearsedDay) do(args ...string) string {
	d.t.Helper()
	code, stdout, stderr := invoke(d.t, append(args, "--url", d.http.URL)...)
	if code != 0 {
		d.t.Fatalf("%q at %v: exit code %d: %s", args, time.Unix(0, d.core.State.Host).UTC(), code, stderr)
	}
	return stdout
}

// post does what has no command of its own.
func (d *rehearsedDay) post(path, body string) {
	d.t.Helper()
	if err := call(d.t.Context(), http.MethodPost, d.http.URL+"/api/rigs/cell_2"+path, "", []byte(body), nil); err != nil {
		d.t.Fatal(err)
	}
}

// due tells that something is to be done: it is time for it, and the engine is stabilised
// at the point of the card if that is asked for.
func (d *rehearsedDay) due(now int64, began time.Time, at float64, settled bool) bool {
	return float64(now-began.UnixNano())/1e9 >= at && (!settled || d.core.State.Card.Now.Stabilised && !d.core.State.Card.Average.On)
}

// A whole test day: a check before the run finds two planted faults, a card of five points
// is taken, one of them twice since it was rejected and one by itself, a sensor is swapped,
// and a check after the run finds a zero that has shifted. Points, log, checks, report and
// replay of the stored run show all of it; a reduction keeps the points.
func TestDay(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	rigFile := edited(t, dir, rehearseRig, "rate: 20/s", "rate: 10/s", "window: 20 s", "window: 12 s", "dwell: 3 s", "dwell: 1 s",
		"pressure_slope: 0.25 %/min", "pressure_slope: 1 %/min", "temperature_slope: 6 K/min", "temperature_slope: 30 K/min",
		"speed_slope: 0.25 %/min", "speed_slope: 1 %/min", "cool_egt: 120 degC", "cool_egt: 190 degC", "off_after: 30 s", "off_after: 1 s")
	cardFile := edited(t, t.TempDir(), "../../testdata/cards/example.yaml", "soak: 10 s", "soak: 2 s", "soak: 5 s", "soak: 2 s", "average: 10 s", "average: 3 s")
	data := filepath.Join(dir, "data")

	began := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
	d, rig := newDay(t, rigFile, data, rehearsal.Options{
		Seed: 3, Rate: 10, Start: began.UnixNano(), Plan: dayPlan(),
		Faults: parsedFaults(t, "pressure-zero-shift@0s:p_compressor", "probe-open@0s+20s:t_oil_return", "pressure-zero-shift@100s:p7_wall"),
	})
	var sheet string
	take := func() { d.do("card", "take", "--by", "Ida Holm") }
	program := []struct {
		at      float64 // s, at the earliest
		settled bool    // and once the engine is stabilised
		do      func()
	}{
		{1, false, func() { d.do("card", "load", cardFile, "--by", "Mara Lindqvist") }},
		{3, false, func() {
			d.post("/checks", `{"phase":"before","warmth":"cold","by":"Ida Holm","request_id":"b","ticks":{"alarm_sound":"Ida Holm","overtemperature_protection":"Ida Holm","overspeed_protection":"Ida Holm","fire_system":"Ida Holm","limits_version":"Ida Holm"}}`)
		}},
		{40, true, take},
		{0, false, func() {
			d.post("/swap", `{"channel":"t_oil_supply","serial":"TC-0917","reason":"connector","by":"Mara Lindqvist","request_id":"s"}`)
		}},
		{76, false, func() { d.do("card", "reject", "1", "--reason", "valve moved", "--by", "Mara Lindqvist") }},
		{0, true, take},
		{85, false, func() { d.do("card", "accept", "2", "--by", "Mara Lindqvist") }},
		{100, true, take},
		{140, true, take},
		{220, true, take},
		{250, false, func() {
			for _, n := range []string{"3", "4", "5", "6"} {
				d.do("card", "accept", n, "--by", "Mara Lindqvist")
			}
			sheet = d.do("handover", "--by", "Ida Holm")
		}},
		{300, false, func() { d.post("/checks", `{"phase":"after","warmth":"warm","by":"Ida Holm","request_id":"a"}`) }},
		{318, false, func() { d.post("/runs", `{"action":"end","by":"Ida Holm","request_id":"e"}`) }},
	}
	err := rehearsal.Run(t.Context(), rig, func(ctx context.Context, due int64) error {
		for len(program) > 0 && d.due(due, began, program[0].at, program[0].settled) {
			if err := d.feed.Until(ctx, due); err != nil {
				return err
			}
			program[0].do()
			program = program[1:]
		}
		return d.feed.Until(ctx, due)
	}, func(ctx context.Context, m rehearsal.Message) error {
		return d.feed.Take(ctx, watch.Input{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Topic: m.Topic, Payload: m.Payload}, m.At+m.Delay)
	})
	if err := errors.Join(err, d.feed.End(t.Context())); err != nil || len(program) != 0 {
		t.Fatalf("%v, %d things were not done", err, len(program))
	}
	shown := d.do("card")
	for _, want := range []string{"No point is open.", "rejected by Mara Lindqvist: valve moved", "accepted by Mara Lindqvist"} {
		if !strings.Contains(shown, want) {
			t.Errorf("the card lacks %q:\n%s", want, shown)
		}
	}
	for _, want := range []string{"by Ida Holm", "TC-042 A, Choking line; nothing is open", "TC-0917", "valve moved", "Not a clearance to start.", "Compressor delivery static pressure", "Oil return temperature"} {
		if !strings.Contains(sheet, want) {
			t.Errorf("the hand-over sheet lacks %q:\n%s", want, sheet)
		}
	}
	stored(t, d, data, rigFile)
}

// stored looks at what is left of the day.
func stored(t *testing.T, d *rehearsedDay, data, rigFile string) {
	t.Helper()
	runs := storedRuns(t, data)
	if len(runs) != 1 {
		t.Fatalf("%d runs", len(runs))
	}
	id := runs[0].ID
	type point struct {
		Number   int
		Name     string
		Status   string
		From, To string
		Values   []struct {
			Name       string
			Value, U95 float64
		}
	}
	pointsOf := func(run string) []point {
		t.Helper()
		code, stdout, stderr := invoke(t, "points", run, "--at", "card", "--format", "json", "--data", data)
		var table struct{ Points []point }
		if err := json.Unmarshal([]byte(stdout), &table); code != 0 || err != nil {
			t.Fatalf("points: exit code %d, %v: %s", code, err, stderr)
		}
		return table.Points
	}
	points := pointsOf(id)
	if len(points) != 6 || points[0].Status != "rejected by Mara Lindqvist: valve moved" || points[1].Name != points[0].Name || points[4].Status != "accepted, automatically by Mara Lindqvist" {
		t.Errorf("points %+v", points)
	}
	// What was computed while the day went on is what the stored columns give.
	for i, p := range points {
		live := d.core.State.Card.Taken[i]
		if p.Number != int(live.Number) || live.Status != card.Accepted && i != 0 {
			t.Errorf("point %d: taken as %+v", p.Number, live)
		}
		for _, v := range live.Values {
			for _, s := range p.Values {
				if s.Name == v.Name && (s.Value-v.Value.V)*(s.Value-v.Value.V) > 1e-16*v.Value.V*v.Value.V+1e-24 {
					t.Errorf("point %d: %s %g live, %g stored", p.Number, v.Name, v.Value.V, s.Value)
				}
			}
		}
	}
	for _, look := range []struct {
		args []string
		code int
		want []string
	}{
		{[]string{"log", id}, 0, []string{"TC-0917", "valve moved", "take"}},
		{[]string{"replay", id}, 0, []string{"the same as recorded live"}},
		{[]string{"checks", id}, 1, []string{"zero.p_compressor", "signal.t_oil_return", "shift.p7_wall", "Not a clearance to start."}},
		{[]string{"reduce", id, "--rig", edited(t, t.TempDir(), rigFile, "throat_area: 0.0250 m2", "throat_area: 0.0252 m2")}, 0, nil},
	} {
		code, stdout, stderr := invoke(t, append(look.args, "--data", data)...)
		if code != look.code {
			t.Errorf("%q: exit code %d: %s", look.args, code, stderr)
		}
		for _, want := range look.want {
			if !strings.Contains(stdout+stderr, want) {
				t.Errorf("%q lacks %q:\n%s", look.args, want, stdout+stderr)
			}
		}
	}
	again := pointsOf(id + "-r1")
	for i := range again {
		if len(again) != len(points) || again[i].Number != points[i].Number || again[i].From != points[i].From || again[i].Status != points[i].Status {
			t.Fatalf("points of the reduction %+v", again)
		}
	}
	page := filepath.Join(t.TempDir(), "report.html")
	if code, _, stderr := invoke(t, "report", id, "--out", page, "--data", data); code != 0 {
		t.Fatalf("report: exit code %d: %s", code, stderr)
	}
	text, err := os.ReadFile(page)
	if err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"Test card", "TC-042 A", "valve moved", "TC-0917", "Not a clearance to start."} {
		if !strings.Contains(string(text), want) {
			t.Errorf("the report lacks %q", want)
		}
	}
}

// dayPlan is a day of rest, five points and rest again. Speeds are those of the example card.
func dayPlan() []rehearsal.Segment {
	run := func(seconds, speed float64) rehearsal.Segment {
		return rehearsal.Segment{Name: "point", Seconds: seconds, Speed: speed, Fuel: true}
	}
	return []rehearsal.Segment{
		{Name: "off", Seconds: 24},
		{Name: "crank", Seconds: 2.5, Starter: true},
		{Name: "light-off", Seconds: 7, Speed: 0.432, Starter: true, Fuel: true},
		run(6.5, 0.432), run(45, 0.752), run(40, 0.812), run(40, 0.902), run(40, 0.95), run(40, 1), run(10, 0.432),
		{Name: "shutdown", Seconds: 32},
		{Name: "off", Seconds: 40},
	}
}

func parsedFaults(t *testing.T, texts ...string) (list []rehearsal.Fault) {
	t.Helper()
	for _, text := range texts {
		f, err := rehearsal.ParseFault(text)
		if err != nil {
			t.Fatal(err)
		}
		list = append(list, f)
	}
	return list
}

// edited writes a copy of a file with some texts in place of others.
func edited(t *testing.T, dir, from string, pairs ...string) string {
	t.Helper()
	text, err := os.ReadFile(from)
	if err != nil {
		t.Fatal(err)
	}
	for i := 0; i < len(pairs); i += 2 {
		if !strings.Contains(string(text), pairs[i]) {
			t.Fatalf("%s lacks %q", from, pairs[i])
		}
	}
	path := filepath.Join(dir, filepath.Base(from))
	if err := os.WriteFile(path, []byte(strings.NewReplacer(pairs...).Replace(string(text))), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// newDay gives a watch on a rig, and the rig that is rehearsed.
func newDay(t *testing.T, rigFile, data string, o rehearsal.Options) (*rehearsedDay, *rehearsal.Rig) {
	t.Helper()
	bundle, cfg, faults := config.Load(rigFile)
	if err := watch.Faults(faults); err != nil {
		t.Fatal(err)
	}
	store, err := watch.OpenStore(t.Context(), data, runfile.Options{}, slog.New(slog.DiscardHandler))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := store.Close(context.WithoutCancel(t.Context())); err != nil {
			t.Error(err)
		}
	})
	d := &rehearsedDay{t: t}
	if d.core, err = store.Restore(t.Context(), pipeline.NewMachine(watch.Parse), watch.Build(), runtime.GOARCH); err != nil {
		t.Fatal(err)
	}
	d.feed = watch.NewFeed(d.core, store)
	if err := d.feed.Begin(t.Context(), pipeline.Boot{Epoch: 1, Build: watch.Build(), GOARCH: runtime.GOARCH}, bundle.Marshal(), o.Start); err != nil {
		t.Fatal(err)
	}
	d.http = httptest.NewServer(dashboard.NewServer(dashboard.Config{
		Desk: d, Parse: watch.Parse, ParseCard: parseCard, OpenRole: access.Engineer, Log: slog.New(slog.DiscardHandler),
	}, dashboard.NewHub("day")))
	t.Cleanup(d.http.Close)
	rig, err := rehearsal.New(cfg, o)
	if err != nil {
		t.Fatal(err)
	}
	return d, rig
}
