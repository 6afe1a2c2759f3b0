package main

import (
	"net/http"
	"slices"
	"strings"
	"testing"
)

// TestWatchTakesBadMessages: broken, oversized, doubled and wrong messages come
// while the throat unchokes and while the EGT is over its limit, messages of wrong
// clocks before and after. They are counted by reason, in the status and in
// /metrics alike, the run goes on, and the alarms come as fast as without them.
// What is counted follows from what the faults of a rehearsal do and from the
// limits of package decode; times are of the test: the chop is at 28.5 to 32.5 s,
// the over-temperature at 35.5 to 39 s.
func TestWatchTakesBadMessages(t *testing.T) {
	t.Parallel()
	data := dataFolder(t)
	args := []string{
		"watch", testRig(t), "--data", data, "--listen", "127.0.0.1:0", "--broker-listen", "127.0.0.1:0", "--rehearse", "--quick", "--speed", "2",
	}
	for _, fault := range []string{
		"clock-skew@15s+3s",
		"malformed@27s+6s", "huge@27s+6s", "duplicate@27s+6s",
		"truncated@34s+6s", "not-a-number@34s+6s:p_compressor", "wrong-unit@34s+6s:dp_bellmouth",
		"clock-past@41s+8s",
	} {
		args = append(args, "--fault", fault)
	}
	p := start(t, args...)
	page := p.page()
	live := follow(t, page, "")
	started := live.await("start of the run", isRun("started"))
	raised(t, live, "unchoke", "caution")
	raised(t, live, "egt_run_max_exceeded", "warning")
	raisedAdvisory(t, live)
	ended := live.await("end of the run", isRun("ended"))
	if started.Epoch != 1 || ended.Epoch != 1 {
		t.Errorf("the daemon has restarted: epochs %d and %d", started.Epoch, ended.Epoch)
	}

	status := live.await("status", func(f *frame) bool { return f.Kind == "status" && f.N > ended.N })
	code, body := fetch(t, http.MethodGet, page+"/metrics", nil)
	if code != http.StatusOK {
		t.Fatalf("/metrics: %d", code)
	}
	for _, tt := range []struct {
		reason      string
		least, most float64
		because     string
	}{
		{"syntax", 140, 150, "every second of 150 messages malformed, and every second of 150 truncated"},
		{"too_large", 6, 7, "a message of 400 kB for every 25 of 150"},
		{"duplicate", 70, 80, "150 messages again after 0.3 s, of which every second had come broken at first"},
		{"not_finite", 70, 80, "a number in each of 150 messages, of which every second is cut"},
		{"unit", 70, 80, "likewise"},
		{"future", 75 * 30, 75 * 40, "75 messages of 30 to 40 channels"},
		{"past", 50, 200 * 40, "200 messages of 30 to 40 channels, but for the 3 s that it takes to tell"},
		{"late", 1, 160 * 40, "those of these 3 s"},
		{"unknown_topic", 0, 0, "there was none"},
		{"retained", 0, 0, "there was none"},
	} {
		shown := status.Counters[tt.reason]
		if shown < tt.least || shown > tt.most {
			t.Errorf("%s: the status counts %v, due are %v to %v: %s", tt.reason, shown, tt.least, tt.most, tt.because)
		}
		if got := metric(t, string(body), `throatwatch_not_used_total{reason="`+tt.reason+`"}`); got != shown {
			t.Errorf("%s: /metrics counts %v, the status %v", tt.reason, got, shown)
		}
	}
	if n := metric(t, string(body), "throatwatch_recording"); n != 1 {
		t.Error("it does not record")
	}
	p.stop()
	if !strings.Contains(p.stdout.String(), "acknowledged by the broker") {
		t.Errorf("the rehearsal did not come to its end: %s", p.stdout.String())
	}
	_, lines := replayed(t, data)
	samePoints(t, live.seen(), lines, started.N, ended.N)
}

// raisedAdvisory waits until the wrong clock is told.
func raisedAdvisory(t *testing.T, f *frames) {
	t.Helper()
	got := f.await("alarm clock_skew", func(f *frame) bool { return f.Kind == "alarm" && f.Alarm.Rule == "clock_skew" })
	if got.Alarm.Priority != "advisory" || !slices.Contains([]string{"unacknowledged", "acknowledged"}, got.Alarm.State) {
		t.Errorf("the wrong clock is told as %+v", got.Alarm)
	}
}
