package figures_test

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"throatwatch/rules"
	"throatwatch/rules/alarm"
	"throatwatch/rules/figures"
)

const (
	second = int64(time.Second)
	hour   = 3600 * second
	began  = 1_800_000_000 * second
)

// change reads "5m30s name state": a transition so long after the run began. The
// priority goes by the first letter of the name: w, c, a, n.
func change(tb testing.TB, line string) *rules.Alarm {
	tb.Helper()
	f := strings.Fields(line)
	at, err := time.ParseDuration(f[0])
	a := &rules.Alarm{Rule: f[1], Changed: rules.Time(began + int64(at))}
	if err != nil || a.State.UnmarshalText([]byte(f[2])) != nil {
		tb.Fatalf("%q: %v", line, err)
	}
	a.Priority = map[byte]rules.Priority{'w': rules.Warning, 'c': rules.Caution, 'a': rules.Advisory, 'n': rules.Note}[f[1][0]]
	return a
}

func tally(tb testing.TB, script string, to int64) figures.Figures {
	tb.Helper()
	t := figures.New(began)
	for line := range strings.Lines(script) {
		switch line = strings.TrimSpace(line); {
		case line == "":
		case line[0] == '-':
			t.Before(change(tb, line))
		default:
			t.Add(change(tb, line))
		}
	}
	return t.At(began + to)
}

func near(t *testing.T, what string, got *float64, want float64) {
	t.Helper()
	if got == nil && math.IsNaN(want) {
		return
	}
	if got == nil || math.Abs(*got-want) > 1e-9 {
		t.Errorf("%s: %v, want %g", what, got, want)
	}
}

func target(t *testing.T, f *figures.Figures, figure string) figures.Target {
	t.Helper()
	i := slices.IndexFunc(f.Targets, func(g figures.Target) bool { return g.Figure == figure })
	if i < 0 {
		t.Fatalf("no target for %s", figure)
	}
	return f.Targets[i]
}

// An hour and a half, counted by hand.
func TestCounted(t *testing.T) {
	f := tally(t, `
-20m   w_old unacknowledged
-10m   w_old acknowledged
-5m    a_gone unacknowledged
-1m    a_gone normal
0s     c_oil unacknowledged
30s    c_oil acknowledged
1m     c_oil normal
10m    w_old unacknowledged
10m10s w_old acknowledged
20m    a_probe unacknowledged
20m05s a_probe unacknowledged
21m    a_probe returned_unacknowledged
25m    a_probe normal
30m    n_flow unacknowledged
40m    w_hot unacknowledged
41m    w_hot latched_unacknowledged
44m    w_hot latched_acknowledged
50m    w_hot normal
60m    c_vib shelved
70m    c_vib normal
70m    c_vib suppressed_by_design
80m    a_repair out_of_service
`, hour+hour/2)
	// Annunciations: c_oil at 0, w_old worse at 10 min, a_probe at 20 min, w_hot at 40 min.
	if f.Raised != 4 || f.Peak10Min != 1 || int64(f.PeakAt) != began || f.Seconds != 5400 || !f.Graded || f.WhyNot != nil {
		t.Errorf("%+v", f)
	}
	near(t, "per 10 min", f.Per10Min, 4.0/9)
	// w_old stands for all 90 min, c_oil for 1, a_probe for 5, w_hot for 10: 106 min of 90.
	near(t, "standing", f.StandingMean, 106.0/90)
	if f.StandingNow != 1 || f.StandingPeak != 2 || f.Shelved != 1 || f.OutOfService != 1 || f.Stale != 0 || len(f.Chattering) != 0 {
		t.Errorf("%+v", f)
	}
	// Acknowledged after 30 s, 10 s, 300 s and 240 s: the median is between 30 and 240.
	near(t, "acknowledged", f.AckMedian, 135)
	for p, want := range map[string]int{"warning": 2, "caution": 1, "advisory": 1} {
		if s := f.ByPriority[p]; s.Raised != want {
			t.Errorf("%s: %d raised", p, s.Raised)
		}
		near(t, p, f.ByPriority[p].Share, float64(want)/4)
	}
	if len(f.ByPriority) != 3 {
		t.Errorf("priorities %v", f.ByPriority)
	}
	for figure, met := range map[string]bool{"per_10_min": true, "peak_10_min": true, "standing_mean": true, "chattering": true, "stale": true} {
		if g := target(t, &f, figure); g.Met == nil || *g.Met != met || g.Source == "" {
			t.Errorf("%s: %+v", figure, g)
		}
	}
	if g := target(t, &f, "share_warning"); g.Met != nil || g.Target != 0.05 {
		t.Errorf("shares of four alarms are graded: %+v", g)
	}
}

// Chattering is three raises in a minute, whatever is acknowledged in between; two
// are none, nor are three in longer, nor worsenings.
func TestChattering(t *testing.T) {
	raise := func(name string, at ...time.Duration) string {
		var b strings.Builder
		for _, d := range at {
			fmt.Fprintf(&b, "%v %s unacknowledged\n%v %s returned_unacknowledged\n", d, name, d+time.Second, name)
		}
		return b.String()
	}
	f := tally(t, raise("c_fast", 0, 10*time.Second, 59*time.Second, 100*time.Second)+
		raise("c_slow", 0, 30*time.Second, 60*time.Second)+
		raise("c_twice", 0, 5*time.Second)+
		raise("a_more", 0, 5*time.Second, 10*time.Second, 15*time.Second)+
		raise("n_note", 0, 1*time.Second, 2*time.Second, 3*time.Second)+`
0s a_worse unacknowledged
1s a_worse acknowledged
2s a_worse unacknowledged
3s a_worse acknowledged
4s a_worse unacknowledged
`, 2*hour)
	want := []figures.Chatter{{Rule: "a_more", Times: 4}, {Rule: "c_fast", Times: 3}}
	if !slices.Equal(f.Chattering, want) {
		t.Errorf("%v, want %v", f.Chattering, want)
	}
	if g := target(t, &f, "chattering"); g.Met == nil || *g.Met {
		t.Errorf("%+v", g)
	}
}

// The peak is that of any ten minutes, wherever they begin.
func TestPeak(t *testing.T) {
	var b strings.Builder
	for i, at := range []int{0, 300, 599, 600, 605, 610, 899, 900, 1500} {
		fmt.Fprintf(&b, "%ds c_%d unacknowledged\n", at, i)
	}
	f := tally(t, b.String(), hour)
	// From 300 s to 899 s there are 300, 599, 600, 605, 610 and 899; at 900 s that of
	// 300 s is ten minutes old.
	if f.Peak10Min != 6 || int64(f.PeakAt) != began+899*second || f.StandingNow != 9 || f.StandingPeak != 9 {
		t.Errorf("%+v", f)
	}
	near(t, "per 10 min", f.Per10Min, 1.5)
	if g := target(t, &f, "per_10_min"); g.Met == nil || *g.Met {
		t.Errorf("%+v", g)
	}
}

// Below an hour nothing is graded, and it is said why.
func TestNotGraded(t *testing.T) {
	f := tally(t, "1m c_oil unacknowledged", hour-second)
	if f.Graded || f.WhyNot == nil || !strings.Contains(*f.WhyNot, "59m59s") {
		t.Errorf("%+v", f)
	}
	for _, g := range f.Targets {
		if g.Met != nil {
			t.Errorf("%+v", g)
		}
	}
	f = tally(t, "", 0)
	if f.Per10Min != nil || f.StandingMean != nil || f.AckMedian != nil || f.PeakAt != 0 || f.ByPriority["caution"].Share != nil {
		t.Errorf("a run of no length: %+v", f)
	}
}

// What stands for a day is stale; shares of enough alarms are graded.
func TestStaleAndShares(t *testing.T) {
	var b strings.Builder
	b.WriteString("-2h c_before acknowledged\n1h a_day unacknowledged\n26h a_day normal\n1h a_short unacknowledged\n24h a_short normal\n")
	for i := range 20 {
		fmt.Fprintf(&b, "%dm a_%d unacknowledged\n%dm a_%d acknowledged\n%dm a_%d normal\n", 30*60+i*20, i, 30*60+i*20+1, i, 30*60+i*20+2, i)
	}
	f := tally(t, b.String(), 40*hour)
	if f.Stale != 2 || f.Raised != 22 { // c_before since before the run, a_day for 25 h
		t.Errorf("%+v", f)
	}
	for figure, met := range map[string]bool{"share_warning": true, "share_caution": true, "share_advisory": true, "stale": true} {
		if g := target(t, &f, figure); g.Met == nil || *g.Met != met {
			t.Errorf("%s: %+v", figure, g)
		}
	}
	near(t, "acknowledged", f.AckMedian, 60)
}

// An alarm that is put aside neither asks nor stands; one that is reset without
// having been acknowledged has not been seen.
func TestAside(t *testing.T) {
	f := tally(t, `
1m  c_x unacknowledged
2m  c_x shelved
5m  c_x normal
5m  c_x unacknowledged
6m  c_x out_of_service
10m w_y unacknowledged
11m w_y latched_unacknowledged
12m w_y returned_unacknowledged
13m w_y suppressed_by_design
`, hour)
	if f.Raised != 3 || f.AckMedian != nil || f.StandingNow != 0 || f.Shelved != 1 || f.OutOfService != 1 {
		t.Errorf("%+v", f)
	}
	near(t, "standing", f.StandingMean, 5.0/60)
}

// Every state of the table can be entered from every other without a figure below
// zero or above what was told.
func TestAnyOrder(t *testing.T) {
	for was := range alarm.NumStates {
		for is := range alarm.NumStates {
			f := tally(t, fmt.Sprintf("1m c_x %v\n2m c_x %v\n", was, is), hour)
			if f.Raised < 0 || f.Raised > 2 || f.StandingNow < 0 || f.StandingPeak > 1 || *f.StandingMean < 0 || *f.StandingMean > 1 {
				t.Errorf("%v to %v: %+v", was, is, f)
			}
		}
	}
}
