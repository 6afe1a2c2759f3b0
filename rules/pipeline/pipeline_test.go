package pipeline

import (
	"errors"
	"fmt"
	"math"
	"reflect"
	"slices"
	"strings"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/archive"
	"throatwatch/monitor/rake"
	"throatwatch/rules"
)

// A mark, the start and the end of a run are done at event time and told; each
// refusal says why and does nothing.
func TestRunActions(t *testing.T) {
	b := newBed(t)
	if err := b.act(Action{Do: DoRunStart, By: "A. Alder"}); !errors.Is(err, ErrNoData) {
		t.Errorf("a run without a scan: %v", err)
	}
	if err := b.act(Action{Do: DoRunEnd}); !errors.Is(err, ErrNoRun) {
		t.Errorf("the end of no run: %v", err)
	}
	b.play(atRest, 2*second)
	at := b.point().T
	if err := b.act(Action{Do: DoMark, Text: "zero check", By: "A. Alder"}); err != nil {
		t.Error(err)
	}
	mark := b.all[len(b.all)-3]
	if mark.Kind != OutcomeMark || mark.T != at || *mark.Mark != (monitor.Mark{T: at, Text: "zero check", By: "A. Alder"}) {
		t.Errorf("mark %+v at %d, want at %d", mark.Mark, mark.T, at)
	}
	if err := b.act(Action{Do: DoRunStart, By: "A. Alder"}); err != nil || !b.s.RunActive || b.s.Run.By != "A. Alder" || b.s.Run.Started != at {
		t.Errorf("run %+v: %v", b.s.Run, err)
	}
	if b.s.Run.Engine != "Merle 5 ML5-0042" || b.s.Run.Rig != "x" || b.s.Run.ID != "x-20251201T090000Z" && b.s.Run.ID != "x-20251201T090001Z" {
		t.Errorf("run %+v", b.s.Run)
	}
	if err := b.act(Action{Do: DoRunStart, By: "B. Birch"}); !errors.Is(err, ErrRunActive) || b.s.Run.By != "A. Alder" {
		t.Errorf("a second run: %v", err)
	}
	first := b.s.Run.ID
	if err := b.act(Action{Do: DoRunEnd}); err != nil || b.s.RunActive || b.s.Run.Ended != at {
		t.Errorf("end of the run: %v, %+v", err, b.s.Run)
	}
	// Another one in the same second has another id.
	if err := b.act(Action{Do: DoRunStart, By: "B. Birch"}); err != nil || b.s.Run.ID == first || b.s.Run.Number != 2 {
		t.Errorf("run %+v after %s: %v", b.s.Run, first, err)
	}
	b.expect(OutcomeRun, "started by A. Alder, ended by A. Alder, started by B. Birch")
	// A run that an operator began does not end by itself.
	b.play(atRest, 20*second)
	if !b.s.RunActive {
		t.Error("the run has ended by itself")
	}
	if err := b.act(Action{Do: "open_the_valve"}); !errors.Is(err, rules.ErrNotFound) {
		t.Errorf("an action that there is not: %v", err)
	}
	// What is no JSON is answered with an error too.
	answered := false
	for _, o := range b.record(ingest.KindAction, `{"do":`) {
		answered = answered || o.Kind == OutcomeAction && o.Action.Err != nil
	}
	if !answered {
		t.Error("an action that is no JSON is not answered")
	}
}

// An engine that turns begins a run, one that is off for long enough ends it; a
// run that was ended by hand begins again only after the engine was off.
func TestRunByEngine(t *testing.T) {
	b := newBed(t)
	b.play(atRest, 3*second)
	b.expect(OutcomeRun, "")
	b.play(turning, 3*second)
	b.expect(OutcomeRun, "started by engine")
	b.play(idling, 10*second)
	b.play(running, 5*second)
	b.play(atRest, 6*second) // cooling 2 s, then off 4 s: not yet the 5 s
	if b.point().Phase != monitor.Off || !b.s.RunActive {
		t.Fatalf("%v, run on %v", b.point().Phase, b.s.RunActive)
	}
	b.play(atRest, 3*second)
	b.expect(OutcomeRun, "ended by engine")
	if b.s.Run.Ended-b.s.OffSince < 5*second || b.s.Run.Ended-b.s.OffSince > 5*second+2*period {
		t.Errorf("ended %d ms after it was off", (b.s.Run.Ended-b.s.OffSince)/ms)
	}
	// By hand.
	b.play(turning, 3*second)
	b.play(idling, 3*second)
	if err := b.act(Action{Do: DoRunEnd}); err != nil {
		t.Fatal(err)
	}
	b.play(idling, 10*second)
	b.expect(OutcomeRun, "started by engine, ended by engine")
	b.play(atRest, 4*second)
	b.play(turning, 3*second)
	b.expect(OutcomeRun, "started by engine")
	// The data system is switched off with the run on: it ends after ten minutes of
	// event time without a known phase, once there is data again.
	b.wait(5 * 60 * second)
	b.expect(OutcomeRun, "")
	b.wait(6 * 60 * second)
	b.expect(OutcomeRun, "ended by engine")
}

// The actions on alarms go by the revision that the operator saw; a repeated request
// is done once; a refused one may be tried again.
func TestAlarmActions(t *testing.T) {
	b := newBed(t)
	b.play(running, 6*second)
	b.told(OutcomeAlarm)
	low := running
	low.oil = 10
	b.play(low, second)
	b.expect(OutcomeAlarm, "oil_low unacknowledged")
	a, ok := b.alarm("oil_low")
	if !ok {
		t.Fatal("the alarm does not stand")
	}
	// The id names run, rule and the event time of its begin.
	if want := fmt.Sprintf("%s/oil_low/%d", b.s.Run.ID, int64(a.Raised)); a.ID != want {
		t.Errorf("id %s, want %s", a.ID, want)
	}
	ack := Action{Do: rules.DoAcknowledge, Alarm: a.ID, Revision: a.Revision, By: "A. Alder", Role: "operator", RequestID: "r1"}
	wrong := ack
	wrong.Revision++
	if err := b.act(wrong); !errors.Is(err, rules.ErrMovedOn) {
		t.Errorf("a revision that is not: %v", err)
	}
	missing := ack
	missing.Alarm = "no_such_rule"
	if err := b.act(missing); !errors.Is(err, rules.ErrNotFound) {
		t.Errorf("an alarm that is not: %v", err)
	}
	b.expect(OutcomeAlarm, "")
	if err := b.act(ack); err != nil { // the very id that was refused before
		t.Errorf("acknowledge: %v", err)
	}
	b.expect(OutcomeAlarm, "oil_low acknowledged")
	if err := b.act(ack); err != nil {
		t.Errorf("the same request again: %v", err)
	}
	b.expect(OutcomeAlarm, "")
	again := ack
	again.RequestID = "r2"
	if err := b.act(again); !errors.Is(err, rules.ErrMovedOn) {
		t.Errorf("another request of the old revision: %v", err)
	}
	if a, _ := b.alarm("oil_low"); a.AcknowledgedBy != "A. Alder" || a.AcknowledgedAt == 0 {
		t.Errorf("acknowledged by %q at %d", a.AcknowledgedBy, a.AcknowledgedAt)
	}
	b.play(running, second)
	b.expect(OutcomeAlarm, "oil_low normal")

	// Shelving takes a reason and a time, and ends by event time.
	b.play(low, second)
	a, _ = b.alarm("oil_low")
	shelve := Action{Do: rules.DoShelve, Alarm: a.ID, Revision: a.Revision, By: "A. Alder", Role: "operator", Seconds: 2}
	if err := b.act(shelve); !errors.Is(err, rules.ErrRefused) {
		t.Errorf("shelved without a reason: %v", err)
	}
	shelve.Reason = "sensor is being changed"
	if err := b.act(shelve); err != nil {
		t.Error(err)
	}
	b.told(OutcomeAlarm)
	b.play(low, 1900*ms)
	b.expect(OutcomeAlarm, "")
	b.play(low, second)
	b.expect(OutcomeAlarm, "oil_low normal, oil_low unacknowledged")
	// A warning cannot be shelved, and a latched one is reset by hand.
	fast := low
	fast.speed = 23000
	b.play(fast, second)
	a, _ = b.alarm("over_speed")
	shelve.Alarm, shelve.Revision = a.ID, a.Revision
	if err := b.act(shelve); !errors.Is(err, rules.ErrRefused) {
		t.Errorf("a warning is shelved: %v", err)
	}
	b.play(low, second)
	b.expect(OutcomeAlarm, "over_speed unacknowledged, over_speed latched_unacknowledged")
	for _, do := range []string{rules.DoAcknowledge, rules.DoReset} {
		a, _ = b.alarm("over_speed")
		if err := b.act(Action{Do: do, Alarm: a.ID, Revision: a.Revision, By: "A. Alder"}); err != nil {
			t.Errorf("%s: %v", do, err)
		}
	}
	b.expect(OutcomeAlarm, "over_speed latched_acknowledged, over_speed normal")

	// Out of service only while the engine is known to be off.
	out := Action{Do: rules.DoOutOfService, Alarm: "clock", By: "C. Cedar", Role: "engineer", Reason: "time server moves"}
	if err := b.act(out); !errors.Is(err, rules.ErrRefused) || !strings.Contains(err.Error(), "engine off") {
		t.Errorf("out of service in a run: %v", err)
	}
	b.play(atRest, 10*second)
	b.told(OutcomeAlarm)
	if err := b.act(out); err != nil {
		t.Errorf("out of service at rest: %v", err)
	}
	b.expect(OutcomeAlarm, "clock out_of_service")

	// Of requests the last are known, not all there ever were.
	for i := range 3 * requestsKept {
		if err := b.act(Action{Do: DoMark, Text: "m", RequestID: fmt.Sprint("m", i)}); err != nil {
			t.Fatal(err)
		}
	}
	if len(b.s.Done) != requestsKept || b.s.Done[requestsKept-1] != fmt.Sprint("m", 3*requestsKept-1) {
		t.Errorf("%d requests are known, the last is %s", len(b.s.Done), b.s.Done[len(b.s.Done)-1])
	}
}

// A source is not silent because nobody listened. (Common practice, no source.)
func TestRestartSilencesNoSource(t *testing.T) {
	for _, tt := range []struct {
		name          string
		silent        int64 // before the daemon goes
		before, after string
		data          bool // after it is back
	}{
		{name: "live before and after", data: true},
		{name: "silent before and after", silent: 3 * second, before: "source_lost unacknowledged"},
		{name: "live before, silent after", after: "source_lost unacknowledged"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := newBed(t)
			b.play(running, 3*second)
			b.wait(tt.silent)
			b.expect(OutcomeAlarm, tt.before)
			b.r.Host += 60 * second
			b.record(ingest.KindBoot, `{"epoch":2}`)
			b.expect(OutcomeAlarm, "")
			if tt.data {
				b.play(running, 3*second)
			} else {
				b.wait(3 * second)
			}
			b.expect(OutcomeAlarm, tt.after)
		})
	}
}

// The daemon's own state has rules that speak without any scan, by host time.
func TestHealth(t *testing.T) {
	b := newBed(t)
	b.play(running, 3*second)
	b.told(OutcomeAlarm)
	host := b.r.Host
	b.wait(3 * second) // no data: no scan for the rules on data, silence for that on sources
	if got := b.told(OutcomeAlarm); got != "source_lost unacknowledged" {
		t.Errorf("told %q after 3 s of silence", got)
	}
	if a, _ := b.alarm("source_lost"); int64(a.Raised)-host < 2*second || int64(a.Raised)-host > 2200*ms {
		t.Errorf("a silent source is told after %d ms", (int64(a.Raised)-host)/ms)
	}
	b.record(ingest.KindHealth, `{"part":"recording","ok":false,"why":"disk full"}`)
	b.record(ingest.KindHealth, `{"part":"input_path","ok":false}`)
	since := b.r.Host
	b.wait(second)
	b.expect(OutcomeAlarm, "not_recording unacknowledged, deaf unacknowledged")
	b.record(ingest.KindHealth, `{"part":"recording","ok":false}`)
	if b.s.Health.NotRecordingSince != since || !b.s.Health.InputPathDeaf {
		t.Errorf("health %+v, not recording since %d", b.s.Health, since)
	}
	for _, damaged := range []string{"", "{", `{"part":"moon","ok":false}`, `[]`, "\xff"} {
		before := b.s.Health
		if b.record(ingest.KindHealth, damaged); b.s.Health != before {
			t.Errorf("%q changes the health", damaged)
		}
	}
	b.record(ingest.KindHealth, `{"part":"recording","ok":true}`)
	b.record(ingest.KindHealth, `{"part":"input_path","ok":true}`)
	b.wait(second)
	b.expect(OutcomeAlarm, "not_recording returned_unacknowledged, deaf returned_unacknowledged")
	b.record(ingest.KindClock, `{"by_ns":-3600000000000}`)
	b.record(ingest.KindClock, `{"by_ns":1000000000}`)
	b.record(ingest.KindClock, `{`)
	if b.s.Health.ClockStepped != -3599*second {
		t.Errorf("the clock was stepped by %d", b.s.Health.ClockStepped)
	}
	// A boot begins with a sound daemon and another epoch.
	b.record(ingest.KindHealth, `{"part":"input_path","ok":false}`)
	b.record(ingest.KindBoot, `{"epoch":7}`)
	if b.s.Epoch != 7 || b.s.Health != (Health{}) {
		t.Errorf("after a boot epoch %d, health %+v", b.s.Epoch, b.s.Health)
	}
	b.record(ingest.KindBoot, `{"epoch":3}`) // an epoch never falls
	b.record(ingest.KindBoot, `{`)
	if b.s.Epoch != 9 {
		t.Errorf("after two more boots epoch %d", b.s.Epoch)
	}
	for _, o := range b.record(ingest.KindTick, "") {
		if o.Epoch != 9 {
			t.Errorf("an outcome of epoch %d", o.Epoch)
		}
	}
}

// What is done about the daemon's own alarms goes by host time: scans may have
// stopped long ago.
func TestActionsWithoutData(t *testing.T) {
	b := newBed(t)
	b.play(running, 3*second)
	b.wait(60 * second)
	a, ok := b.alarm("source_lost")
	if !ok {
		t.Fatal("a lost source is not told")
	}
	if err := b.act(Action{Do: rules.DoAcknowledge, Alarm: a.ID, Revision: a.Revision, By: "A. Alder"}); err != nil {
		t.Fatal(err)
	}
	a, _ = b.alarm("source_lost")
	if int64(a.AcknowledgedAt) != b.r.Host || int64(a.Changed) != b.r.Host || a.Past {
		t.Errorf("acknowledged at %d, changed at %d, past %v; it is %d", a.AcknowledgedAt, a.Changed, a.Past, b.r.Host)
	}
	if err := b.act(Action{Do: rules.DoShelve, Alarm: a.ID, Revision: a.Revision, By: "A. Alder", Reason: "publisher is off", Seconds: 10}); err != nil {
		t.Fatal(err)
	}
	b.wait(9 * second)
	if a, _ = b.alarm("source_lost"); a.State.String() != "shelved" {
		t.Errorf("after 9 of 10 s it is %v", a.State)
	}
	b.wait(2 * second)
	if a, _ = b.alarm("source_lost"); a.State.String() != "unacknowledged" {
		t.Errorf("after 11 of 10 s it is %v", a.State)
	}
}

// Parts that take alarms and values to others tell by health records since when they
// do not, why and how far they are behind; a rule sees it, and a boot forgets it.
func TestHealthOfParts(t *testing.T) {
	b := newBed(t)
	b.play(running, second)
	frame := func(name string) (number float64, works rules.Tri) {
		names := Names(&b.m.prog.cfg)
		b.m.prog.frame.fillHealth(b.s)
		slot := slices.IndexFunc(names, func(n rules.Name) bool { return n.Name == name })
		return b.m.prog.frame.Numbers[slot], b.m.prog.frame.Bools[slot]
	}
	for _, tt := range []struct {
		record  string
		part    func() *Part
		flag    string
		number  string
		why     string
		behind  float64
		unknown bool // how far it is behind
	}{
		{`{"part":"webhook","ok":false,"why":"no route","behind":2}`, func() *Part { return &b.s.Health.Webhook }, "health.webhook", "webhook_waiting", "no route", 2, false},
		{`{"part":"database","ok":false,"why":"status 401"}`, func() *Part { return &b.s.Health.Database }, "health.database", "database_lag_s", "status 401", 0, true},
		{`{"part":"disk","ok":false,"why":"1.5 GB free","behind":1.5}`, func() *Part { return &b.s.Health.Disk }, "health.disk", "disk_free_gb", "1.5 GB free", 1.5, false},
	} {
		if n, works := frame(tt.number); n != 0 || works != rules.Unknown {
			t.Errorf("%s is %g before", tt.number, n)
		}
		if _, works := frame(tt.flag); works != rules.True {
			t.Errorf("%s is %v before", tt.flag, works)
		}
		b.record(ingest.KindHealth, tt.record)
		since := b.r.Host
		b.wait(second)
		b.record(ingest.KindHealth, tt.record)
		if p := tt.part(); p.Since != since || p.Why != tt.why || p.Behind != tt.behind {
			t.Errorf("%s: %+v", tt.record, *p)
		}
		if n, _ := frame(tt.number); math.IsNaN(n) != tt.unknown || !tt.unknown && n != tt.behind {
			t.Errorf("%s is %g", tt.number, n)
		}
		if _, works := frame(tt.flag); works != rules.False {
			t.Errorf("%s is %v", tt.flag, works)
		}
	}
	b.record(ingest.KindHealth, `{"part":"webhook","ok":true}`)
	if b.s.Health.Webhook != (Part{}) || b.s.Health.Database == (Part{}) {
		t.Errorf("%+v", b.s.Health)
	}
	b.record(ingest.KindBoot, `{"epoch":2}`)
	if b.s.Health != (Health{}) {
		t.Errorf("after a boot %+v", b.s.Health)
	}
}

// A status comes each second of host time, with or without data, and says how the
// data path stands.
func TestStatus(t *testing.T) {
	b := newBed(t)
	if st := b.m.Status(b.s); st.DataAge != -1 {
		t.Errorf("data age %d without data", st.DataAge)
	}
	// After a restart nothing is caught up with before something comes.
	again := newBed(t)
	connect := func() {
		again.r.Kind, again.r.Topic, again.r.Payload = ingest.KindConnect, topic, nil
		again.step()
	}
	connect()
	again.play(running, second)
	again.r.Kind = ingest.KindDisconnect
	again.step()
	again.wait(10 * second)
	again.record(ingest.KindBoot, `{"epoch":2}`)
	connect()
	if st := again.m.Status(again.s); st.CatchingUp || st.DataAge < 10*second {
		t.Errorf("before any data of this life: %+v", st)
	}
	again.message(topic, running.pack(again.r.Host-9*second))
	if st := again.m.Status(again.s); !st.CatchingUp {
		t.Errorf("with data of the past: %+v", st)
	}
	b.r.Kind, b.r.Topic, b.r.Payload = ingest.KindConnect, topic, nil
	b.step()
	n, last := 0, int64(0)
	count := func() {
		for _, o := range b.outs {
			if o.Kind != OutcomeStatus {
				continue
			}
			n++
			if last != 0 && o.Status.Host/second-last/second != 1 {
				t.Errorf("status %d s after the one before", (o.Status.Host-last)/second)
			}
			last = o.Status.Host
		}
	}
	for end := b.r.Host + 10*second; b.r.Host < end; {
		b.play(running, period)
		count()
	}
	st := b.m.Status(b.s)
	if st.DataAge < 0 || st.DataAge > 60*ms || st.CatchingUp || st.Lost != 0 || st.Samples < 1190 || st.Scans < 195 || st.Messages != uint64(len(st.Sources))*st.Sources[0].Messages ||
		len(st.Sources) != 1 || !st.Sources[0].Alive || st.Sources[0].Topic != topic || len(st.Sessions) != 1 || !st.Sessions[0].Connected {
		t.Errorf("status %+v", st)
	}
	for range 50 {
		b.wait(100 * ms)
		count()
	}
	st = b.m.Status(b.s)
	if n != 15 || st.Lost != 1 || st.Sources[0].Alive || st.DataAge < 5*second || st.DataAge > 5100*ms {
		t.Errorf("%d statuses in 15 s; after 5 s of silence %+v", n, st)
	}
	// A source that is silent for an hour is no longer listed.
	b.wait(forgotten)
	if st = b.m.Status(b.s); len(st.Sources) != 0 || st.Lost != 0 {
		t.Errorf("after an hour %+v", st.Sources)
	}
	b.r.Kind = ingest.KindDisconnect
	b.r.Topic = topic
	b.step()
	if st = b.m.Status(b.s); st.Sessions[0].Connected {
		t.Error("the session is still shown as connected")
	}
}

// Records follow each other without a hole, but for a gap record; outcomes are
// counted without one.
func TestSequence(t *testing.T) {
	b := newBed(t)
	var n uint64
	check := func(outs []Outcome) {
		for _, o := range outs {
			if o.N <= n {
				t.Errorf("outcome %d after %d", o.N, n)
			}
			n = o.N
		}
	}
	for range 50 {
		b.play(running, period)
		check(b.outs)
	}
	if n != b.s.N {
		t.Errorf("the last outcome is %d of %d", n, b.s.N)
	}
	b.r.Seq += 100
	check(b.record(ingest.KindGap, `{}`))
	check(b.record(ingest.KindTick, ""))
	if b.s.Seq != b.r.Seq {
		t.Errorf("at record %d, want %d", b.s.Seq, b.r.Seq)
	}
	defer func() {
		if recover() == nil {
			t.Error("a hole in the records is not noticed")
		}
	}()
	b.r.Seq++
	b.record(ingest.KindTick, "")
}

// What a message that cannot be used says goes to the quarantine, with topic and
// place; parts that are bad are counted only.
func TestQuarantine(t *testing.T) {
	b := newBed(t)
	b.play(running, second)
	for _, tt := range []struct {
		topic, payload string
		want           string // begin of the text, "" = none
	}{
		{topic, `[{"n":"p7","v":1},`, "rigs/x/senml: decode: syntax"},
		{topic, "", "rigs/x/senml: decode: syntax"},
		{topic, strings.Repeat(" ", 300<<10), "rigs/x/senml: decode: too_large"},
		{topic, `[{"n":"p7","v":1e999}]`, ""},
		{topic, `[{"n":"moon","v":1}]`, ""},
		{"rigs/x/channels/egt", "hot", "rigs/x/channels/egt: decode: syntax"},
		{"elsewhere", `{`, ""}, // counted by its topic: we do not know its format
	} {
		b.told(OutcomeQuarantine)
		b.message(tt.topic, []byte(tt.payload))
		if got := b.told(OutcomeQuarantine); (got == "") != (tt.want == "") || !strings.HasPrefix(got, tt.want) || len(got) > 400 {
			t.Errorf("%.30q: quarantine %q, want %q", tt.payload, got, tt.want)
		}
	}
	var want [ingest.NumReasons]uint64
	want[ingest.ReasonSyntax], want[ingest.ReasonTooLarge], want[ingest.ReasonNotFinite] = 3, 1, 1
	want[ingest.ReasonUnknownChannel], want[ingest.ReasonUnknownTopic] = 1, 1
	if b.s.Align.Counters != want {
		t.Errorf("counters %v, want %v", b.s.Align.Counters, want)
	}
	b.play(running, second)
	if b.point().Choke != monitor.Choked {
		t.Errorf("after all that %v", b.point().Choke)
	}
}

// Copies: a message with device time is used once, at whatever distance the copy
// comes within the window; one without is a reading each time.
func TestDuplicates(t *testing.T) {
	b := newBed(t)
	b.play(running, second)
	first := running.pack(b.r.Host)
	b.message(topic, first)
	samples, dup := b.s.Align.Samples, b.s.Align.Counters[ingest.ReasonDuplicate]
	for _, flags := range []ingest.Flags{0, ingest.FlagDuplicate, ingest.FlagQoS1} {
		b.r.Kind, b.r.Topic, b.r.Payload, b.r.Flags = ingest.KindMessage, topic, first, flags
		b.step()
	}
	if got := b.s.Align.Counters[ingest.ReasonDuplicate] - dup; got != 3 || b.s.Align.Samples != samples {
		t.Errorf("%d of 3 copies are known", got)
	}
	b.message("rigs/x/channels/egt", []byte("910"))
	b.message("rigs/x/channels/egt", []byte("910"))
	if b.s.Align.Samples != samples+2 {
		t.Error("an equal reading without time is taken for a copy")
	}
	b.r.Kind, b.r.Topic, b.r.Payload, b.r.Flags = ingest.KindMessage, "rigs/x/channels/egt", []byte("910"), ingest.FlagDuplicate
	b.step()
	if b.s.Align.Samples != samples+2 {
		t.Error("a copy that the broker owns up to is used")
	}
	// The same bytes on another topic are another message.
	b.message("rigs/x/channels/p7", []byte("910"))
	if b.s.Align.Samples != samples+3 {
		t.Error("an equal payload of another topic is taken for a copy")
	}
}

// What comes about more than 5 s behind host time is marked as past: it is listed,
// and makes no sound.
func TestPast(t *testing.T) {
	b := newBed(t)
	b.r.Kind, b.r.Topic, b.r.Payload = ingest.KindConnect, topic, nil
	b.step()
	b.play(running, 10*second)
	b.r.Kind, b.r.Topic, b.r.Payload = ingest.KindDisconnect, topic, nil
	b.step()
	from := b.r.Host
	b.wait(20 * second)
	b.told(OutcomeAlarm)
	b.r.Kind, b.r.Topic, b.r.Payload = ingest.KindConnect, topic, nil
	b.step()
	low := running
	low.oil = 10
	past, now := 0, 0
	for at := (from/period + 1) * period; at < b.r.Host; at += period {
		b.r.Host += ms
		if st := b.m.Status(b.s); st.CatchingUp != (b.s.Align.Heard && b.r.Host-b.s.Align.Next > second) {
			t.Fatalf("%d ms behind: catching up %v", (b.r.Host-b.s.Align.Next)/ms, st.CatchingUp)
		}
		for _, o := range b.message(topic, low.pack(at)) {
			if o.Kind != OutcomePoint && (o.Kind != OutcomeAlarm || o.Alarm.Rule != "oil_low") {
				continue
			}
			if o.Past != (b.r.Host-o.T > 5*second) || o.Kind == OutcomeAlarm && o.Alarm.Past != o.Past {
				t.Fatalf("an outcome %d ms behind: past %v", (b.r.Host-o.T)/ms, o.Past)
			}
			if o.Past {
				past++
			} else {
				now++
			}
		}
	}
	if past < 200 || now < 50 || !b.s.Align.Heard {
		t.Errorf("%d outcomes of the past, %d of now", past, now)
	}
	b.play(running, 3*second)
	if st := b.m.Status(b.s); st.CatchingUp {
		t.Error("still catching up, 3 s after the backlog")
	}
}

// A machine that is given a state of before the first configuration knows none.
func TestRestore(t *testing.T) {
	m := NewMachine(parser(t))
	if err := m.Restore(&State{}); err != nil {
		t.Error(err)
	}
	if _, ok := m.Config(); ok {
		t.Error("a configuration out of nothing")
	}
	if err := m.Restore(&State{Bundle: []byte("rig nine")}); err == nil {
		t.Error("a bundle that cannot be read is no error")
	}
	if err := m.Restore(&State{Bundle: []byte("rig two")}); err != nil {
		t.Error(err)
	}
	if cfg, ok := m.Config(); !ok || cfg.Hash != "two" {
		t.Errorf("configuration %q", cfg.Hash)
	}
	if err := m.Restore(&State{}); err != nil {
		t.Error(err)
	}
	if st := m.Status(&State{}); len(m.Alarms(&State{})) != 0 || st.Messages != 0 || m.Ledger(&State{}) != nil {
		t.Error("a state of before the first configuration has alarms")
	}
}

// Another configuration keeps channels, ledger and alarms; alarms of rules that are
// gone are told as normal; a bad one changes nothing.
func TestConfigChanges(t *testing.T) {
	b := newBed(t)
	hot := running
	hot.egt, hot.oil = 1000, 10
	b.play(hot, 6*second)
	rest := atRest
	rest.oil = 10
	b.play(rest, 6*second) // off: the run goes on for a while
	b.all = nil
	alarms, ledger := b.m.Alarms(b.s), b.m.Ledger(b.s)
	if len(alarms) != 2 || ledger[0].Exceedances != 1 {
		t.Fatalf("%d alarms, ledger %+v", len(alarms), ledger)
	}
	for _, bad := range []string{"", "rig nine", "rig with a bad rule", "rig with a bad nozzle"} {
		before, err := b.s.Encode(true)
		if err != nil {
			t.Fatal(err)
		}
		outs := b.record(ingest.KindConfig, bad)
		if len(outs) != 1 || outs[0].Kind != OutcomeConfig || outs[0].OK || outs[0].Text == "" {
			t.Errorf("%q: %+v", bad, outs)
		}
		old, err := Decode(before)
		if err != nil {
			t.Fatal(err)
		}
		old.Seq, old.N, old.Host = b.s.Seq, b.s.N, b.s.Host
		if !reflect.DeepEqual(old.Align, b.s.Align) || string(old.Bundle) != "rig one" {
			t.Errorf("%q changes the state", bad)
		}
	}
	b.told(OutcomeConfig)
	b.record(ingest.KindConfig, "rig one") // the same again
	b.expect(OutcomeConfig, "one")
	b.record(ingest.KindConfig, "rig two")
	b.expect(OutcomeConfig, "two")
	if cfg, ok := b.m.Config(); !ok || cfg.Rig.Title != "changed" || string(b.s.Bundle) != "rig two" {
		t.Errorf("configuration %+v, bundle %s", cfg.Rig, b.s.Bundle)
	}
	if got := b.m.Ledger(b.s); !reflect.DeepEqual(got, ledger) {
		t.Errorf("ledger %+v, before %+v", got, ledger)
	}
	b.play(rest, 100*ms)
	if p := b.point(); p.Choke != monitor.NoFlow || p.Phase != monitor.Off {
		t.Errorf("after the change %v, %v", p.Choke, p.Phase)
	}
	// "exceeded" is no longer a rule; "oil_low" stands as it did.
	b.expect(OutcomeAlarm, "exceeded normal")
	if got := b.m.Alarms(b.s); len(got) != 1 || got[0].ID != alarms[0].ID || got[0].Revision != alarms[0].Revision {
		t.Errorf("alarms %+v, before %+v", got, alarms)
	}
	if len(b.all) != 0 {
		t.Errorf("told besides: %+v", b.all)
	}
}

// The buffers of a long catch-up are given back.
func TestBuffersAreGivenBack(t *testing.T) {
	b := newBed(t)
	b.play(running, 2*second)
	b.r.Host += 100 * second // a hole that makes a scan for every period
	points := 0
	for _, o := range b.record(ingest.KindTick, "") {
		if o.Kind == OutcomePoint {
			points++
		}
	}
	if points < 1900 {
		t.Fatalf("%d scans in a step", points)
	}
	b.play(running, second)
	if n := len(b.m.prog.scans); n > scansKept {
		t.Errorf("%d scan buffers are kept", n)
	}
}

// Rows of points and channels come back from their chunks as they were.
func TestColumns(t *testing.T) {
	b := newBed(t)
	cfg, _ := b.m.Config()
	c := NewColumns(&cfg)
	var times []int64
	var npr, p7 []float64
	var choke, quality []byte
	for range 100 {
		b.play(running, period)
		for i := range b.outs {
			if o := &b.outs[i]; o.Kind == OutcomePoint {
				c.Add(o)
				times = append(times, o.T)
				npr, p7 = append(npr, o.Point.V[monitor.NPR]), append(p7, o.Scan.Value[0])
				choke, quality = append(choke, byte(o.Point.Choke)), append(quality, byte(o.Scan.Quality[0]))
			}
		}
	}
	codec := archive.NewCodec()
	chunks, err := c.Chunks(codec)
	if err != nil || len(chunks) != 2 || c.Rows() != len(times) || len(times) < 90 {
		t.Fatalf("%d chunks of %d rows, %d points: %v", len(chunks), c.Rows(), len(times), err)
	}
	floats := func(a, b []float64) bool {
		for i := range a {
			if math.Float64bits(a[i]) != math.Float64bits(b[i]) && !(math.IsNaN(a[i]) && math.IsNaN(b[i])) {
				return false
			}
		}
		return len(a) == len(b)
	}
	for _, ch := range chunks {
		var got archive.Chunk
		if err := codec.Decode(&got, ch.Bytes, nil); err != nil {
			t.Fatal(err)
		}
		if !reflect.DeepEqual(got.Times, times) || ch.Rows != len(times) || ch.FirstT != times[0] || ch.LastT != times[len(times)-1] {
			t.Errorf("%s: times differ", ch.Kind)
		}
		found := 0
		for _, col := range got.Columns {
			switch col.Name {
			case "npr":
				found++
				if !floats(col.Float, npr) {
					t.Error("npr differs")
				}
			case "channel.p7":
				found++
				if !floats(col.Float, p7) {
					t.Error("channel.p7 differs")
				}
			case "choke_state":
				found++
				if string(col.Byte) != string(choke) {
					t.Error("choke_state differs")
				}
			case "quality.p7":
				found++
				if string(col.Byte) != string(quality) {
					t.Error("quality.p7 differs")
				}
			}
		}
		want := map[string]int{ChunkPoints: int(monitor.NumQuantities) + len(stateColumns), ChunkChannels: 2 * len(cfg.Compute.Channels)}[ch.Kind]
		if found != 2 || len(got.Columns) != want {
			t.Errorf("%s: %d columns, want %d", ch.Kind, len(got.Columns), want)
		}
	}
}

// stamped writes the time into a pack of running in place.
type stamped struct {
	payload []byte
	digits  int
}

func newStamped() *stamped {
	p := decode.AppendSenMLJSON(nil, "", epoch, nil)
	return &stamped{payload: running.pack(epoch), digits: strings.Index(string(p), `"bt":`) + len(`"bt":`)}
}

func (s *stamped) at(t int64) []byte {
	for i, v := s.digits+16, t/1000; i >= s.digits; i-- {
		if i == s.digits+10 {
			continue // the point
		}
		s.payload[i] = byte('0' + v%10)
		v /= 10
	}
	return s.payload
}

// warmed gives a machine in a steady run, whose window of copies is full, and a
// function that steps the next message.
func warmed(tb testing.TB) (b *bed, next func()) {
	tb.Helper()
	b = newBed(tb)
	b.play(running, 10*second)
	for i := range uint64(windowSize) {
		b.s.window.push(i * 0x9e3779b97f4a7c15)
	}
	s := newStamped()
	at := (b.r.Host/period + 1) * period
	r := ingest.Record{Kind: ingest.KindMessage, Topic: topic, Seq: b.r.Seq}
	next = func() {
		r.Seq++
		r.Host, r.Payload = at+3*ms, s.at(at)
		b.outs = b.m.Step(b.s, &r)
		at += period
	}
	for range 100 {
		next()
	}
	if b.point().Choke != monitor.Choked || b.s.Align.Counters != [ingest.NumReasons]uint64{} {
		tb.Fatalf("%v, counters %v", b.point().Choke, b.s.Align.Counters)
	}
	return b, next
}

// In a steady run a message with its scan, its rules and, once a second, its status
// and ledger allocates nothing, the window of copies included.
func TestAllocations(t *testing.T) {
	b, next := warmed(t)
	scans := b.s.Align.N
	const n = 2000
	// What other goroutines of the process allocate counts too: the least of a few
	// tries is the step's own.
	got := math.Inf(1)
	for tries := 0; tries < 3 && got > n/1000; tries++ {
		got = min(got, testing.AllocsPerRun(1, func() {
			for range n {
				next()
			}
		}))
	}
	if b.s.Align.N-scans < 2*n-2 || len(b.m.Alarms(b.s)) != 0 {
		t.Fatalf("%d scans of %d messages", b.s.Align.N-scans, 2*n)
	}
	// The map behind the window may tidy itself up now and then.
	if got > n/1000 {
		t.Errorf("%g allocations in %d messages", got, n)
	}
	if got := testing.AllocsPerRun(1000, next); got != 0 {
		t.Errorf("%g allocations per message", got)
	}
}

// One message of six channels a scan.
func BenchmarkStep(b *testing.B) {
	bd, next := warmed(b)
	scans := bd.s.Align.N
	b.ReportAllocs()
	n := 0
	for b.Loop() {
		next()
		n++
	}
	b.ReportMetric(float64(n)/b.Elapsed().Seconds(), "messages/s")
	b.ReportMetric(float64(bd.s.Align.N-scans)/b.Elapsed().Seconds(), "scans/s")
	b.ReportMetric(float64(int64(n)*period)/float64(b.Elapsed()), "×real-time")
}

// A probe is taken back by a record of an engineer's wish, with effect from the next scan on,
// and stepped again the same comes out of the records.
func TestReadmit(t *testing.T) {
	b := newBed(t)
	b.play(running, 2*second)
	broken := running
	broken.p7 = 2e9 // beyond its range
	b.play(broken, 2*second)
	readmit := Action{Do: DoReadmit, Channel: "p7", Reason: "line purged", By: "A. Alder", Role: "engineer", RequestID: "r1"}
	if err := b.act(readmit); !errors.Is(err, rake.ErrProven) || !errors.Is(err, rules.ErrRefused) {
		t.Errorf("proven: %v", err)
	}
	b.play(running, 2*second)
	if p := b.point(); p.RakeProbesUsed != 0 || p.Choke != monitor.ChokeUnknown {
		t.Fatalf("before: %d probes, %v", p.RakeProbesUsed, p.Choke)
	}
	for _, tt := range []struct {
		name   string
		change func(*Action)
		want   string
	}{
		{"an operator", func(a *Action) { a.Role = "operator" }, "by an engineer"},
		{"no reason", func(a *Action) { a.Reason = " " }, "needs a reason"},
		{"no channel", func(a *Action) { a.Channel = "p9" }, "no such channel"},
		{"no probe", func(a *Action) { a.Channel = "speed" }, "no probe"},
		{"not out", func(a *Action) { a.Channel = "t7" }, "not excluded"},
	} {
		a := readmit
		tt.change(&a)
		if err := b.act(a); !errors.Is(err, rules.ErrRefused) && !errors.Is(err, ErrNoChannel) || !strings.Contains(err.Error(), tt.want) {
			t.Errorf("%s: %v", tt.name, err)
		}
	}
	b.expect(OutcomeLog, "")
	if err := b.act(readmit); err != nil {
		t.Error(err)
	}
	b.expect(OutcomeLog, "readmit by A. Alder")
	b.play(running, second/4)
	if p := b.point(); p.RakeProbesUsed != 1 || p.Choke != monitor.Choked {
		t.Errorf("after: %d probes, %v", p.RakeProbesUsed, p.Choke)
	}
	again, state := NewMachine(parser(t)), &State{}
	for i := range b.records {
		again.Step(state, &b.records[i])
	}
	if !reflect.DeepEqual(state.Compute, b.s.Compute) || state.N != b.s.N {
		t.Error("stepped again the state differs")
	}
}
