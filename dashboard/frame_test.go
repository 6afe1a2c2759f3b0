package dashboard_test

import (
	"bytes"
	"encoding/json"
	"math"
	"strings"
	"testing"
	"time"
	"unicode/utf8"

	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/monitor/check"
	"throatwatch/monitor/egt"
	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/card"
	"throatwatch/rules/pipeline"
)

// nasty is a text with everything that JSON escapes, and a byte that is no UTF-8.
const nasty = "a \"b\" \\ \n\x00 <c> 5 °C \u2028 \xff"

// nice is nasty as it comes out: the stray byte is the replacement character
// [RFC 8259 8.1 asks for UTF-8].
const nice = "a \"b\" \\ \n\x00 <c> 5 °C \u2028 \ufffd"

// outcomes gives an outcome of every kind that has a frame, filled with what is
// hardest to encode.
func outcomes() []pipeline.Outcome {
	t := time.Date(2026, 3, 2, 9, 0, 7, 50_000_000, time.UTC).UnixNano()
	p := &monitor.OperatingPoint{}
	p.Reset()
	p.V[monitor.NPR], p.V[monitor.PChoked], p.V[monitor.ChokeMarginPa], p.V[monitor.BackPressure] = 1.25, math.Inf(1), -1e-300, 100593.16666666667
	p.T, p.Scan, p.Choke, p.Phase, p.ChokeMarginal, p.Lit = t, 140, monitor.Choked, monitor.Steady, true, true
	p.Cause = monitor.Cause{Kind: monitor.ChannelBad, Channel: 3, Quality: monitor.QualityStale}
	p.EGTCause = monitor.Cause{Kind: monitor.NotEnoughProbes, Channel: -1}
	p.Warnings = monitor.WarnGasRange | monitor.WarnAssumedHumidity
	a := &rules.Alarm{
		ID: "r/" + nasty + "/1", Rule: "unchoke", Title: nasty, Text: nasty, Priority: rules.Caution, State: rules.AlarmState(alarm.Shelved),
		Raised: rules.Time(t), Changed: rules.Time(t + 1), Revision: 7, Value: rules.Reading{V: math.NaN()}, Peak: rules.Reading{V: 2.5, Known: true},
		Until: rules.Time(t + 2), Reason: nasty,
	}
	st := &pipeline.Status{
		Host: t, DataAge: -1, Health: pipeline.Health{NotRecordingSince: t - 1},
		Sources:  []pipeline.SourceStatus{{Topic: nasty, Age: 5e8, Messages: 9, Skew: -3e9, Skewed: true}, {Topic: "b", Alive: true}},
		Sessions: []pipeline.SessionStatus{{Filter: nasty, Connected: true}}, Messages: math.MaxInt64, Skew: 3e9,
	}
	for r := range st.Counters {
		st.Counters[r] = uint64(10 + r)
	}
	someCard := card.State{
		Card:     card.Card{Title: nasty, Number: nasty, Points: []card.Point{{Name: nasty, Targets: []card.Target{{Quantity: "npr", Low: rules.Reading{V: 2, Known: true}}}}}},
		Progress: []card.Progress{{Status: card.Open}}, Now: card.Now{T: rules.Time(t), Targets: make([]card.TargetNow, 1)},
		Taken: []card.Taken{{Number: 3, Name: nasty, From: rules.Time(t), Status: card.IsTaken, Doubts: []string{nasty}, Values: []card.Value{{Name: "npr"}}}},
	}
	ledger := []pipeline.Allowance{
		{Band: egt.Band{Name: nasty, Kind: egt.KindRun, Limit: 993.15, Allowance: 5e9, PerRun: 60e9}, BandState: egt.BandState{Over: true, Elapsed: 15e8, RunPeak: 1000.5, Excursions: 2}},
		{Band: egt.Band{Name: "start", Kind: egt.KindStart}},
	}
	outs := []pipeline.Outcome{
		{Kind: pipeline.OutcomePoint, Point: p, Scan: scan()},
		{Kind: pipeline.OutcomeChannels, Point: p, Scan: scan()},
		{Kind: pipeline.OutcomeAlarm, Alarm: a},
		{Kind: pipeline.OutcomeLedger, Ledger: ledger},
		{Kind: pipeline.OutcomeStatus, Status: st},
		{Kind: pipeline.OutcomeMark, Mark: &monitor.Mark{T: t, Text: nasty, By: nasty}},
		{Kind: pipeline.OutcomeLog, Entry: &pipeline.Entry{
			T: rules.Time(t), What: "swap", Channel: "egt_1", Serial: nasty, Reason: nasty, By: nasty, Role: "engineer", ValidFrom: rules.Time(t - 1),
		}},
		{Kind: pipeline.OutcomeChecks, Check: &check.Result{
			Phase: check.Before, State: check.Done, Began: rules.Time(t - 1e10), Ended: rules.Time(t), Warmth: check.Cold, By: nasty, Note: nasty, Passed: 1, Of: 2,
			Summary: "Data-system checks passed 1 of 2. Not a clearance to start.", Items: []check.Item{
				{ID: "zero.p7", Kind: check.KindZero, Channel: "p7", Title: nasty, Text: nasty, Value: rules.Reading{V: 2.5, Known: true}, Unit: "Pa"},
				{ID: "tick.alarm_sound", Kind: check.KindTick, Title: nasty, Passed: true, By: nasty},
			},
		}},
		{Kind: pipeline.OutcomeCard, Card: &someCard},
		{Kind: pipeline.OutcomeCardPoint, Taken: &someCard.Taken[0]},
		{Kind: pipeline.OutcomeRun, Event: "started", Run: &monitor.Run{ID: nasty, Number: 3, Rig: rigID, Engine: nasty, Started: t, By: nasty}},
	}
	for i := range outs {
		outs[i].Epoch, outs[i].N, outs[i].T = 3, math.MaxUint64-uint64(i), t
	}
	return outs
}

// scan gives a scan with a value, a missing one and one that was never there.
func scan() *monitor.Scan {
	cfg := rig("", "")
	s := monitor.NewScan(len(cfg.Compute.Channels))
	for i := range s.Value {
		s.Value[i], s.Raw[i], s.Age[i] = math.NaN(), math.NaN(), -1
	}
	s.Value[0], s.Raw[0], s.Age[0], s.Quality[0] = 100616, 1006.16, 4_085_000, monitor.QualityGood
	s.Raw[1], s.Age[1], s.Quality[1] = 99, 0, monitor.QualityOutOfRange
	return s
}

// Every kind of frame is valid JSON with the keys of its schema, all of them; what is
// not a number is null; texts come back as they were.
func TestFrames(t *testing.T) {
	cfg := rig("", "")
	for _, o := range outcomes() {
		body, ok := dashboard.EncodeStored(&o, &cfg)
		if !ok {
			t.Fatalf("outcome %d has no frame", o.Kind)
		}
		f := checkJSON(t, "Frame", body)
		if f["epoch"] != 3.0 || f["t"] != "2026-03-02T09:00:07.05Z" {
			t.Errorf("%s", body)
		}
		if h := headOf(body); h.N != o.N {
			t.Errorf("n %d, want %d", h.N, o.N)
		}
		switch f["kind"] {
		case "operating_point":
			checkPoint(t, f)
		case "channels":
			checkChannels(t, f, &cfg)
		case "alarm":
			a := f["alarm"].(map[string]any)
			if a["text"] != nice || a["value"] != nil || a["peak"] != 2.5 || a["state"] != "shelved" || a["priority"] != "caution" || a["acknowledged_at"] != nil {
				t.Errorf("alarm: %s", body)
			}
		case "ledger":
			b := f["bands"].([]any)
			first, second := b[0].(map[string]any), b[1].(map[string]any)
			if len(b) != 2 || first["name"] != nice || first["elapsed_s"] != 1.5 || first["peak_k"] != 1000.5 || second["peak_k"] != nil || second["kind"] != "start" {
				t.Errorf("ledger: %s", body)
			}
		case "status":
			source := f["sources"].([]any)[0].(map[string]any)
			counters := f["counters"].(map[string]any)
			if f["data_age_s"] != nil || f["recording"] != false || f["not_recording_since"] != "2026-03-02T09:00:07.049999999Z" || f["clock"] != false ||
				source["topic"] != nice || source["skew_s"] != -3.0 || counters["messages"] != float64(math.MaxInt64) {
				t.Errorf("status: %s", body)
			}
			for r := ingest.ReasonNone + 1; r < ingest.NumReasons; r++ {
				if counters[r.String()] != float64(10+int(r)) {
					t.Errorf("counter %s is %v", r, counters[r.String()])
				}
			}
		case "mark":
			if m := f["mark"].(map[string]any); m["text"] != nice || m["by"] != nice {
				t.Errorf("mark: %s", body)
			}
		case "log":
			e := f["entry"].(map[string]any)
			if _, value := e["value"]; value || e["serial"] != nice || e["by"] != nice || e["valid_from"] != "2026-03-02T09:00:07.049999999Z" || e["t"] != f["t"] {
				t.Errorf("log: %s", body)
			}
		case "run":
			if r := f["run"].(map[string]any); r["id"] != nice || r["ended"] != nil || r["number"] != 3.0 || f["event"] != "started" {
				t.Errorf("run: %s", body)
			}
		}
	}
}

func checkPoint(t *testing.T, f map[string]any) {
	t.Helper()
	want := map[string]any{
		"npr": 1.25, "choke_margin_pa": -1e-300, "back_pressure_pa": 100593.16666666667, // to the last digit
		"scan": 140.0, "choke_state": "choked", "phase": "steady", "choke_marginal": true, "choke_armed": false, "lit": true,
		"cause": "p7_2 stale", "egt_cause": "not_enough_probes",
	}
	for k, v := range want {
		if f[k] != v {
			t.Errorf("%s is %v, want %v", k, f[k], v)
		}
	}
	for _, name := range allQuantities() {
		if v, ok := f[name]; !ok || v != nil && want[name] == nil {
			t.Errorf("%s is %v, want null", name, v)
		}
	}
	if w := f["warnings"].([]any); len(w) != 2 || !strings.HasPrefix(w[1].(string), "humidity") {
		t.Errorf("warnings %v", w)
	}
}

func checkChannels(t *testing.T, f map[string]any, cfg *pipeline.Config) {
	t.Helper()
	channels := f["channels"].(map[string]any)
	if len(channels) != len(cfg.Compute.Channels) {
		t.Errorf("%d channels of %d", len(channels), len(cfg.Compute.Channels))
	}
	for id, want := range map[string]map[string]any{
		"p_baro": {"value": 100616.0, "raw": 1006.16, "quality": "good", "age_s": 0.004085},
		"p_exit": {"value": nil, "raw": 99.0, "quality": "out_of_range", "age_s": 0.0},
		"p7_1":   {"value": nil, "raw": nil, "quality": "missing", "age_s": nil},
	} {
		for k, v := range want {
			if got := channels[id].(map[string]any)[k]; got != v {
				t.Errorf("%s.%s is %v, want %v", id, k, got, v)
			}
		}
	}
}

// The frame of an outcome is the same every time, whatever the buffer held.
func TestFramesAreTheSame(t *testing.T) {
	cfg := rig("", "")
	for _, o := range outcomes() {
		first, kind, ok := dashboard.EncodeFrame(&o, &cfg)
		again, _, _ := dashboard.EncodeFrame(&o, &cfg)
		appended, _, _ := dashboard.AppendFrame([]byte("x"), &o, &cfg)
		if !bytes.Equal(first, again) || !bytes.Equal(append([]byte("x"), first...), appended) {
			t.Errorf("%s: the frame differs from time to time", kind)
		}
		if ok == (o.Kind == pipeline.OutcomeChannels) {
			t.Errorf("outcome %d: ok is %v", o.Kind, ok)
		}
	}
	for _, k := range []pipeline.OutcomeKind{pipeline.OutcomeQuarantine, pipeline.OutcomeAction} {
		if body, _, ok := dashboard.EncodeFrame(&pipeline.Outcome{Kind: k}, &cfg); ok || len(body) > 0 {
			t.Errorf("outcome %d has the frame %s", k, body)
		}
	}
}

// A cause that names a channel which the configuration has no more does not fail.
func TestFrameOfForeignCause(t *testing.T) {
	cfg := rig("", "")
	o := outcomes()[0]
	o.Point.Cause.Channel = 1000
	body, _, _ := dashboard.EncodeFrame(&o, &cfg)
	if f := checkJSON(t, "OperatingPointFrame", body); f["cause"] != "channel" {
		t.Errorf("cause %v", f["cause"])
	}
}

// Every frame of a whole test is as described, and its numbers are those of the
// outcomes that follow each other.
func TestFramesOfATest(t *testing.T) {
	r := recorded()
	seen := map[string]int{}
	last := headOf(r.hello).N
	for _, body := range r.live {
		h := headOf(body)
		checkJSON(t, "Frame", body)
		seen[h.Kind]++
		if h.Epoch != 3 || h.N <= last {
			t.Fatalf("frame %d.%d after %d", h.Epoch, h.N, last)
		}
		last = h.N
	}
	for kind, least := range map[string]int{"operating_point": 500, "channels": 500, "alarm": 8, "ledger": 25, "status": 25, "mark": 1, "run": 2} {
		if seen[kind] < least {
			t.Errorf("%d frames of kind %s, want %d", seen[kind], kind, least)
		}
	}
}

// Texts go through one escape: it gives what the standard library reads back.
func FuzzFrameText(f *testing.F) {
	for _, s := range []string{"", "plain", nasty, "\x7f", "\u2029", "😀", "\xed\xa0\x80"} {
		f.Add(s)
	}
	cfg := rig("", "")
	f.Fuzz(func(t *testing.T, s string) {
		o := pipeline.Outcome{Kind: pipeline.OutcomeStatus, T: 1, Status: &pipeline.Status{Sessions: []pipeline.SessionStatus{{Filter: s}}}}
		body, _, _ := dashboard.EncodeFrame(&o, &cfg)
		var got struct{ Sessions []struct{ Filter string } }
		if err := json.Unmarshal(body, &got); err != nil || !utf8.Valid(body) {
			t.Fatalf("%v: %q", err, body)
		}
		if want := string([]rune(s)); got.Sessions[0].Filter != want { // each stray byte is one replacement character
			t.Fatalf("%q came back as %q, want %q", s, got.Sessions[0].Filter, want)
		}
	})
}

// Numbers come back to the last bit; what is none is null.
func FuzzFrameNumber(f *testing.F) {
	for _, v := range []float64{0, math.Copysign(0, -1), 1, 0.1, 1e6, 1013250, 1e21, 1e-7, math.MaxFloat64, math.SmallestNonzeroFloat64, math.NaN(), math.Inf(-1)} {
		f.Add(v)
	}
	cfg := rig("", "")
	f.Fuzz(func(t *testing.T, v float64) {
		o := pipeline.Outcome{Kind: pipeline.OutcomePoint, T: 1, Point: &monitor.OperatingPoint{}}
		o.Point.V[monitor.NPR] = v
		body, _, _ := dashboard.EncodeFrame(&o, &cfg)
		var got struct{ NPR *float64 }
		if err := json.Unmarshal(body, &got); err != nil {
			t.Fatalf("%v: %q", err, body)
		}
		if finite := v-v == 0; finite != (got.NPR != nil) || finite && math.Float64bits(*got.NPR) != math.Float64bits(v) {
			t.Fatalf("%v came back as %v", v, got.NPR)
		}
	})
}
