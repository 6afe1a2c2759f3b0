package align_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"reflect"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/align"
)

// Scan k covers (T−P, T]: a sample at T belongs to it, one at T−P to the one
// before. The value is the mean of the samples.
func TestIntervals(t *testing.T) {
	b := newBed(t, rig(t))
	T := epoch + 10*period
	for _, sm := range []struct {
		at int64
		v  float64
	}{
		{T - period - 20*ms, 1},    // in the scan before
		{T - period, 2},            // its last instant
		{T - period + ms/1000, 10}, // the first microsecond of T's interval
		{T - 20*ms, 20}, {T, 60},   // and its last
		{T + ms/1000, 7}, {T + period, 9}, // the scan after
	} {
		b.host = max(b.host, sm.at)
		b.send(fast, pack(sm.at, "a", sm.v))
	}
	b.to(T + second)
	for _, tt := range []struct {
		at    int64
		n     uint16
		mean  float64
		age   int64
		exact string
	}{
		{T - period, 2, 1.5, 0, "(1 + 2)/2"},
		{T, 3, 30, 0, "(10 + 20 + 60)/3"},
		{T + period, 2, 8, 0, "(7 + 9)/2"},
	} {
		r := b.at(tt.at)
		if r.Samples[0] != tt.n || r.Raw[0] != tt.mean || r.Age[0] != tt.age || r.Quality[0] != monitor.QualityGood {
			t.Errorf("scan at %d ms: %d samples, mean %g, age %d, %v; want %d, %g = %s", (tt.at-epoch)/ms, r.Samples[0], r.Raw[0], r.Age[0], r.Quality[0], tt.n, tt.mean, tt.exact)
		}
	}
	b.check()
}

// However samples lie, each is in exactly one scan: the sums over the scans are
// the sums over the samples.
func TestEverySampleOnce(t *testing.T) {
	for _, step := range []int64{1 * ms, 7 * ms, 50 * ms, 51 * ms, 49 * ms, 333 * ms} {
		b := newBed(t, rig(t))
		want, n := 0.0, 0
		for at := epoch + 3*ms; at < epoch+20*second; at += step {
			b.to(at + 2*ms)
			v := float64(n % 97)
			b.send(fast, pack(at, "a", v, "b", -v))
			want += v
			n++
		}
		b.to(epoch + 22*second)
		got, gotB, samples := 0.0, 0.0, 0
		for _, r := range b.rows {
			if r.Samples[0] > 0 {
				got += r.Raw[0] * float64(r.Samples[0])
				gotB += r.Raw[1] * float64(r.Samples[1])
			}
			samples += int(r.Samples[0])
		}
		if samples != n || math.Abs(got-want) > 1e-6 || math.Abs(gotB+want) > 1e-6 {
			t.Errorf("each %d ms: %d samples with sums %g and %g, want %d with %g", step/ms, samples, got, gotB, n, want)
		}
		b.check()
	}
}

// Without a sample the last value holds for the hold time to the nanosecond, and
// is stale after it. A channel that never spoke is missing.
func TestHold(t *testing.T) {
	b := newBed(t, rig(t))
	last := epoch + 10*period - 250*ms // held for 250 ms: at epoch + 10 periods exactly
	for at := last - 20*period; at <= last; at += period {
		b.to(at)
		b.send(fast, pack(at, "a", 5.0))
	}
	b.to(epoch + 2*second)
	for _, tt := range []struct {
		at   int64
		want monitor.Quality
	}{
		{last, monitor.QualityGood},
		{last + period, monitor.QualityHeld},
		{last + 5*period, monitor.QualityHeld}, // 250 ms old: the hold time
		{last + 6*period, monitor.QualityStale},
		{last + 20*period, monitor.QualityStale},
	} {
		r := b.at(tt.at)
		if r.Quality[0] != tt.want || r.Age[0] != tt.at-last || r.Raw[0] != 5 {
			t.Errorf("%d ms after the last sample: %v, age %d ms, raw %g; want %v", (tt.at-last)/ms, r.Quality[0], r.Age[0]/ms, r.Raw[0], tt.want)
		}
		if r.Quality[1] != monitor.QualityMissing || r.Age[1] != -1 || !math.IsNaN(r.Raw[1]) {
			t.Errorf("a channel that never spoke is %v, age %d, raw %g", r.Quality[1], r.Age[1], r.Raw[1])
		}
	}
	b.check()

	// One nanosecond younger or older than the hold time decides.
	for _, d := range []int64{-1, 0, 1} {
		cfg := rig(t)
		cfg.Channels[0].Hold = 250*ms + d
		b := newBed(t, cfg)
		b.to(last)
		b.send(fast, pack(last, "a", 5.0))
		b.to(epoch + 2*second)
		want := monitor.QualityHeld
		if d < 0 {
			want = monitor.QualityStale
		}
		if got := b.at(last + 5*period).Quality[0]; got != want {
			t.Errorf("hold time 250 ms and %d ns, age 250 ms: %v, want %v", d, got, want)
		}
	}
}

// The message that makes a scan complete closes it at once; while a channel of
// it fails to come it is closed by host time, at Lateness to the nanosecond.
func TestCompleteness(t *testing.T) {
	b := newBed(t, rig(t))
	var T int64
	// Two publishers, each 4 ms after its sample; the second 3 ms after the first.
	for k := range int64(20) {
		T = epoch + (k+1)*period
		b.to(T + 4*ms)
		b.send(fast, pack(T, "a", 1.0))
		b.to(T + 7*ms)
		before := len(b.rows)
		b.send(other, pack(T, "b", 2.0))
		if k > 5 && (len(b.rows) != before+1 || b.rows[before].T != T || b.rows[before].host != T+7*ms) {
			t.Fatalf("scan %d is not closed by the message that completes it", k)
		}
	}
	// The second publisher is late, then not there.
	T += period
	b.to(T + 4*ms)
	b.send(fast, pack(T, "a", 1.0))
	n := len(b.rows)
	b.host = T + b.cfg.Lateness - 1
	if b.scans(); len(b.rows) != n {
		t.Fatal("a scan is closed before its lateness is over")
	}
	b.host++
	if b.scans(); len(b.rows) != n+1 || b.rows[n].T != T || b.rows[n].Quality[1] != monitor.QualityHeld {
		t.Fatal("a scan is not closed when its lateness is over")
	}
	// The other goes on: from now on it is not waited for, and closes scans alone.
	for k := range int64(10) {
		T += period
		b.to(T + 4*ms)
		b.send(fast, pack(T, "a", 1.0))
		if r := b.rows[len(b.rows)-1]; k > 2 && (r.T != T || r.host != T+4*ms) {
			t.Fatalf("scan %d after the loss is not closed by the channel that is left", k)
		}
	}
	b.check()
}

// A slow channel whose values come long after their scans were closed is not
// stale as long as they come within its hold time.
func TestSlowChannel(t *testing.T) {
	b := newBed(t, rig(t))
	type late struct{ at, due int64 }
	var queue []late
	for at := epoch; at < epoch+20*second; at += period {
		b.to(at + 3*ms)
		b.send(fast, pack(at, "a", 1.0, "b", 2.0))
		if at%second == 0 { // measured each second, sent 0.8 s later
			queue = append(queue, late{at, at + 800*ms})
		}
		for len(queue) > 0 && queue[0].due <= b.host {
			b.send(other, pack(queue[0].at, "slow", float64((queue[0].at-epoch)/second)))
			queue = queue[1:]
		}
	}
	rows := b.between(epoch+2*second, epoch+19*second)
	if u := usable(rows, 2); u != 1 {
		t.Errorf("the slow channel is usable in %.1f %% of the scans", 100*u)
	}
	for _, r := range rows {
		// The value is that of the newest second which has come: 0.8 to 1.8 s old.
		if age := float64(r.T-epoch)/1e9 - r.Raw[2]; age < 0.7 || age > 1.9 {
			t.Fatalf("at %d ms the value is that of %g s", (r.T-epoch)/ms, r.Raw[2])
		}
	}
	if b.s.Counters[ingest.ReasonLate] != 0 {
		t.Errorf("%d samples are late", b.s.Counters[ingest.ReasonLate])
	}
	b.check()
}

// Samples that overtake each other by less than Lateness are all used, each in its
// own scan: after the first that comes out of order scans wait for their lateness.
func TestOutOfOrder(t *testing.T) {
	b := newBed(t, rig(t))
	type sent struct{ at, due int64 }
	var queue []sent
	n := 0
	for at := epoch; at < epoch+30*second; at += 10 * ms {
		d := 2 * ms
		if n%3 == 0 && at > epoch+5*second && at < epoch+8*second {
			d = 90 * ms // overtaken by the next eight
		}
		n++
		queue = append(queue, sent{at, at + d})
		for changed := true; changed; {
			changed = false
			for i, q := range queue {
				if q.due <= at+2*ms {
					b.to(q.due)
					b.send(fast, pack(q.at, "a", float64((q.at-epoch)/ms), "b", 1.0))
					queue = append(queue[:i], queue[i+1:]...)
					changed = true
					break
				}
			}
		}
	}
	b.to(epoch + 32*second)
	if late := b.s.Counters[ingest.ReasonLate]; late != 0 {
		t.Errorf("%d samples are late", late)
	}
	// Five samples each 10 ms: the mean is 20 ms before the end of the scan. Before
	// patience begins a sample may be in the scan after its own.
	for _, r := range b.between(epoch+5200*ms, epoch+29*second) {
		if want := float64((r.T - epoch - 20*ms) / ms); r.Samples[0] != 5 || r.Raw[0] != want {
			t.Fatalf("scan at %d ms: %d samples, mean %g, want 5 with %g", (r.T-epoch)/ms, r.Samples[0], r.Raw[0], want)
		}
	}
	// Patience costs the lateness; it ends 10 s after the last sample out of order.
	if r := b.at(epoch + 12*second); r.host-r.T < b.cfg.Lateness {
		t.Errorf("4 s after samples came out of order a scan is closed %d ms after its end", (r.host-r.T)/ms)
	}
	if r := b.at(epoch + 25*second); r.host-r.T > 20*ms {
		t.Errorf("17 s after samples came out of order a scan is still closed %d ms after its end", (r.host-r.T)/ms)
	}
	b.check()
}

// A sample that comes later than Lateness behind a closed scan is counted and not
// used, unless it is the newest of its channel and younger than the hold time.
func TestLate(t *testing.T) {
	b := newBed(t, rig(t))
	var at int64
	for at = epoch; at < epoch+2*second; at += period {
		b.to(at + 3*ms)
		b.send(fast, pack(at, "a", 1.0, "b", 1.0))
	}
	b.to(epoch + 4*second)
	closed := b.rows[len(b.rows)-1].T
	for _, tt := range []struct {
		name    string
		at      int64
		channel string
		late    bool
	}{
		{"just closed", closed, "a", false},
		{"Lateness behind", closed - b.cfg.Lateness, "a", false},
		{"a microsecond more, and newer samples are there", closed - b.cfg.Lateness - ms/1000, "a", true},
		{"newest of its channel, younger than the hold time", closed - 240*ms, "b", false},
		{"newest of a channel, older than the hold time", closed - 260*ms, "b", true},
		{"of long ago", epoch, "a", true},
		{"a slow channel's first", closed - 2900*ms, "slow", false},
		{"a slow channel's, older than its newest", closed - 2950*ms, "slow", true},
	} {
		before, samples := b.s.Counters[ingest.ReasonLate], b.s.Samples
		b.a.Message(&b.s, &ingest.Record{Host: b.host, Topic: fast, Payload: pack(tt.at, tt.channel, 3.0)}, false)
		if got := b.s.Counters[ingest.ReasonLate] == before+1 && b.s.Samples == samples; got != tt.late {
			t.Errorf("%s: late %v, want %v", tt.name, got, tt.late)
		}
	}
	b.to(b.host + second)
	b.check()
}

// While no session is connected scans wait; with one connected, or none ever,
// they follow host time.
func TestWaiting(t *testing.T) {
	b := newBed(t, rig(t))
	play := func(from, to int64) {
		for at := from; at < to; at += period {
			b.to(at + 3*ms)
			b.send(fast, pack(at, "a", 1.0, "b", 1.0))
		}
	}
	play(epoch, epoch+2*second) // records fed without a broker
	if len(b.rows) < 35 {
		t.Fatalf("%d scans without a broker", len(b.rows))
	}
	b.connect(fast, true)
	b.connect(other, true)
	play(epoch+2*second, epoch+80*second)
	b.connect(fast, false)
	n := len(b.rows)
	if b.to(epoch + 85*second); len(b.rows) < n+90 {
		t.Errorf("%d scans in 5 s with one session left", len(b.rows)-n)
	}
	b.connect(other, false)
	n = len(b.rows)
	if b.to(epoch + 95*second); len(b.rows) != n || !b.s.Waiting() {
		t.Errorf("%d scans without a session", len(b.rows)-n)
	}
	b.connect(other, true)
	play(b.host, b.host+5*second)
	if got := len(b.rows) - n; got < 280 || b.s.Waiting() { // 10 s waited for and 5 s since
		t.Errorf("%d scans after the session is back", got)
	}
	b.check()
}

// After a restart no session is connected until one says so: scans wait for
// what the broker keeps, however long it takes to reach it.
func TestBootWaits(t *testing.T) {
	b := newBed(t, rig(t))
	b.connect(fast, true)
	for at := epoch; at < epoch+80*second; at += period {
		b.to(at + 3*ms)
		b.send(fast, pack(at, "a", float64((at-epoch)/ms), "b", 1.0))
	}
	b.a.Boot(&b.s, b.host)
	n := len(b.rows)
	b.to(b.host + 100*second) // the broker comes up later than the watch
	if len(b.rows) > n+1 {
		t.Errorf("%d scans between boot and the first connect", len(b.rows)-n)
	}
	b.connect(fast, true)
	for at := epoch + 80*second; at < b.host; at += period {
		b.send(fast, pack(at, "a", float64((at-epoch)/ms), "b", 1.0))
	}
	b.to(b.host + second)
	if late := b.s.Counters[ingest.ReasonLate]; late != 0 {
		t.Errorf("%d samples of the backlog are late", late)
	}
	if got := b.between(epoch+81*second, epoch+170*second); len(got) != 89*20 || usable(got, 0) != 1 {
		t.Errorf("%d scans of the 100 s, %.0f %% usable", len(got), 100*usable(got, 0))
	}
	b.check()
}

// What the broker kept comes in a burst after a reconnect: every sample is used,
// every scan is whole, and nothing counts as late or as a wrong clock.
func TestBacklogInOrder(t *testing.T) {
	for _, outage := range []int64{second, 10 * second, 100 * second, 1000 * second, 2 * hour} {
		t.Run(fmt.Sprintf("%d s", outage/second), func(t *testing.T) {
			b := newBed(t, rig(t))
			b.connect(fast, true)
			b.connect(other, true)
			at := epoch
			next := func() {
				b.send(fast, pack(at, "a", float64((at-epoch)/ms), "b", 1.0))
				at += period
			}
			for at < epoch+80*second {
				b.to(at + 3*ms)
				next()
			}
			b.connect(fast, false)
			b.connect(other, false)
			b.to(b.host + outage)
			b.connect(fast, true)
			b.connect(other, true)
			// 5000 messages per second until it has caught up.
			for at < b.host {
				b.to(b.host + ms/5)
				next()
			}
			for end := at + 10*second; at < end; {
				b.to(at + 3*ms)
				next()
			}
			if n := b.s.Counters[ingest.ReasonLate] + b.s.Counters[ingest.ReasonPast] + b.s.Counters[ingest.ReasonFuture]; n != 0 || b.s.Skipped != 0 {
				t.Errorf("%d late, %d past, %d future samples, %d scans skipped", b.s.Counters[ingest.ReasonLate], b.s.Counters[ingest.ReasonPast], b.s.Counters[ingest.ReasonFuture], b.s.Skipped)
			}
			for _, r := range b.between(epoch+period, at-second) {
				if r.Samples[0] != 1 || r.Raw[0] != float64((r.T-epoch)/ms) {
					t.Fatalf("scan at %d ms: %d samples, raw %g", (r.T-epoch)/ms, r.Samples[0], r.Raw[0])
				}
			}
			if r := b.rows[len(b.rows)-1]; r.host-r.T > 60*ms {
				t.Errorf("a scan is %d ms old after the backlog", (r.host-r.T)/ms)
			}
			b.check()
		})
	}
}

// Two sessions bring their backlogs in turns, each in order, one far ahead of the
// other for a while: no sample is lost.
func TestBacklogInterleaved(t *testing.T) {
	for _, tt := range []struct {
		name        string
		outage      int64
		chunk       int   // messages of a session at a time
		pause       int64 // host time between chunks
		fastFirst   bool
		afterTheTwo int64 // the second session connects this long after the first
	}{
		{"in chunks of 100", 60 * second, 100, 2 * ms, true, 0},
		{"in chunks of 100, the other first", 60 * second, 100, 2 * ms, false, 0},
		{"all of one, then all of the other", 60 * second, 1 << 20, 2 * ms, true, 0},
		{"all of the other, then all of one", 60 * second, 1 << 20, 2 * ms, false, 0},
		{"chunks of 1000 with pauses", 10 * 60 * second, 1000, 300 * ms, true, 0},
		{"the second session a second later", 60 * second, 200, 2 * ms, true, second},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := newBed(t, rig(t))
			b.connect(fast, true)
			b.connect(other, true)
			next := [2]int64{epoch, epoch}
			send := func(k int) {
				if k == 0 {
					b.send(fast, pack(next[0], "a", float64((next[0]-epoch)/ms)))
				} else {
					b.send(other, pack(next[1], "b", float64((next[1]-epoch)/ms)))
				}
				next[k] += period
			}
			for next[1] < epoch+80*second {
				b.to(next[0] + 3*ms)
				send(0)
				b.to(next[1] + 5*ms)
				send(1)
			}
			b.connect(fast, false)
			b.connect(other, false)
			b.to(b.host + tt.outage)
			k := 1
			if tt.fastFirst {
				k = 0
			}
			filters := [2]string{fast, other}
			b.connect(filters[k], true)
			if tt.afterTheTwo == 0 {
				b.connect(filters[1-k], true)
			}
			back, up := b.host, b.host+tt.afterTheTwo
			for next[0] < back || next[1] < back {
				for range tt.chunk {
					if next[k] >= back {
						break
					}
					b.to(b.host + ms/10)
					send(k)
				}
				b.to(b.host + tt.pause)
				k = 1 - k
				if b.host < up && tt.afterTheTwo > 0 {
					b.to(up)
					b.connect(filters[k], true)
				}
			}
			for next[0] < back+20*second {
				b.to(next[0] + 3*ms)
				send(0)
				for next[1] < next[0] {
					send(1)
				}
			}
			if n := b.s.Counters[ingest.ReasonLate] + b.s.Counters[ingest.ReasonPast] + b.s.Counters[ingest.ReasonFuture]; n != 0 {
				t.Errorf("%d samples are late or of a wrong clock", n)
			}
			whole := 0
			rows := b.between(epoch+period, next[0]-second)
			for _, r := range rows {
				if r.Samples[0] == 1 && r.Samples[1] == 1 && r.Raw[0] == r.Raw[1] && r.Raw[0] == float64((r.T-epoch)/ms) {
					whole++
				}
			}
			if whole != len(rows) || len(rows) == 0 {
				t.Errorf("%d of %d scans have both channels of their instant", whole, len(rows))
			}
			if r := b.rows[len(b.rows)-1]; r.host-r.T > 60*ms {
				t.Errorf("a scan is %d ms old after the backlog", (r.host-r.T)/ms)
			}
			b.check()
		})
	}
}

// What is no sample of the rig is counted by its reason and changes nothing else.
func TestCounters(t *testing.T) {
	cfg := rig(t)
	cfg.Channels = append(cfg.Channels, align.Channel{ID: "own", Name: "own", Topic: "site/PT-101", Raw: mustUnit(t, "kPa"), Hold: second})
	cfg.Inputs = append(cfg.Inputs, align.Input{Filter: "site/#", Format: decode.Value})
	for _, tt := range []struct {
		name    string
		record  ingest.Record
		seen    bool
		reason  ingest.Reason
		samples uint64
	}{
		{"good", ingest.Record{Topic: fast, Payload: pack(epoch, "a", 1.0)}, false, ingest.ReasonNone, 1},
		{"unknown topic", ingest.Record{Topic: "rigs/y/fast", Payload: pack(epoch, "a", 1.0)}, false, ingest.ReasonUnknownTopic, 0},
		{"retained", ingest.Record{Topic: fast, Payload: pack(epoch, "a", 1.0), Flags: ingest.FlagRetained}, false, ingest.ReasonRetained, 0},
		{"unknown channel", ingest.Record{Topic: fast, Payload: pack(epoch, "z", 1.0)}, false, ingest.ReasonUnknownChannel, 0},
		{"unknown channel beside a good one", ingest.Record{Topic: fast, Payload: pack(epoch, "z", 1.0, "a", 1.0)}, false, ingest.ReasonUnknownChannel, 1},
		{"a channel of another topic", ingest.Record{Topic: fast, Payload: pack(epoch, "own", 1.0)}, false, ingest.ReasonUnknownChannel, 0},
		{"unit of another dimension", ingest.Record{Topic: fast, Payload: []byte(`[{"n":"a","u":"V","v":1}]`)}, false, ingest.ReasonUnit, 0},
		{"unit that nobody knows", ingest.Record{Topic: fast, Payload: []byte(`[{"n":"a","u":"furlong","v":1}]`)}, false, ingest.ReasonUnit, 0},
		{"gauge pressure in kelvin", ingest.Record{Topic: fast, Payload: []byte(`[{"n":"a","u":"K","v":1}]`)}, false, ingest.ReasonUnit, 0},
		{"not JSON", ingest.Record{Topic: fast, Payload: []byte(`{"a":1}`)}, false, ingest.ReasonSyntax, 0},
		{"empty", ingest.Record{Topic: fast}, false, ingest.ReasonSyntax, 0},
		{"no number", ingest.Record{Topic: fast, Payload: []byte(`[{"n":"a","vs":"1"}]`)}, false, ingest.ReasonNotNumber, 0},
		{"not finite", ingest.Record{Topic: fast, Payload: []byte(`[{"n":"a","v":1e999}]`)}, false, ingest.ReasonNotFinite, 0},
		{"not finite in our unit", ingest.Record{Topic: fast, Payload: []byte(`[{"n":"slow","u":"degF","v":68},{"n":"a","u":"bar","v":1.7e308}]`)}, false, ingest.ReasonNotFinite, 1},
		{"too large", ingest.Record{Topic: fast, Payload: make([]byte, 300<<10)}, false, ingest.ReasonTooLarge, 0},
		{"a copy with device time", ingest.Record{Topic: fast, Payload: pack(epoch, "a", 1.0)}, true, ingest.ReasonDuplicate, 0},
		{"an equal payload without time is no copy", ingest.Record{Topic: value + "a", Payload: []byte("1")}, true, ingest.ReasonNone, 1},
		{"unless the broker says that it may be one", ingest.Record{Topic: value + "a", Payload: []byte("1"), Flags: ingest.FlagDuplicate}, true, ingest.ReasonDuplicate, 0},
		{"which alone proves nothing", ingest.Record{Topic: value + "a", Payload: []byte("1"), Flags: ingest.FlagDuplicate}, false, ingest.ReasonNone, 1},
		{"a value topic of one channel", ingest.Record{Topic: "site/PT-101", Payload: []byte(`{"v":1,"u":"bar"}`)}, false, ingest.ReasonNone, 1},
		{"a value topic of no channel", ingest.Record{Topic: "site/PT-102", Payload: []byte("1")}, false, ingest.ReasonUnknownChannel, 0},
	} {
		b := newBed(t, cfg)
		tt.record.Host = epoch
		b.a.Message(&b.s, &tt.record, tt.seen)
		var want [ingest.NumReasons]uint64
		if tt.reason != ingest.ReasonNone {
			want[tt.reason] = 1
		}
		if b.s.Counters != want || b.s.Samples != tt.samples || b.s.Messages != 1 {
			t.Errorf("%s: counters %v, %d samples; want %v by one, %d", tt.name, b.s.Counters, b.s.Samples, tt.reason, tt.samples)
		}
		b.to(epoch + second)
		b.check()
	}
}

// The unit that a sender names counts, not the one of the rig file; by the
// definitions of the units.
func TestUnits(t *testing.T) {
	for _, tt := range []struct {
		channel, unit string
		v, want       float64
	}{
		{"a", "kPa", 250, 250},
		{"a", "Pa", 250e3, 250},
		{"a", "bar", 2.5, 250},
		{"a", "mbar", 2500, 250},
		{"a", "psi", 14.5, 99.973980750936}, // 1 psi = 6894.757293168 Pa
		{"slow", "degC", 20, 20},
		{"slow", "Cel", 20, 20}, // the unit of RFC 8428
		{"slow", "K", 293.15, 20},
		{"slow", "degF", 68, 20}, // (68 − 32) · 5/9
		{"slow", "", 20, 20},
	} {
		b := newBed(t, rig(t))
		b.send(fast, decode.AppendSenMLJSON(nil, "", epoch, []decode.Reading{{Name: tt.channel, Unit: tt.unit, Value: tt.v}}))
		b.to(epoch + second)
		i := map[string]int{"a": 0, "slow": 2}[tt.channel]
		if got := b.rows[0].Raw[i]; math.Abs(got-tt.want) > 1e-12*tt.want {
			t.Errorf("%g %s is %.15g, want %.15g", tt.v, tt.unit, got, tt.want)
		}
	}
}

// TestOrderOfSamples: what is remembered of the order and the units of one message never
// changes what another means. The expectation is an aligner that remembers nothing.
func TestOrderOfSamples(t *testing.T) {
	cfg := rig(t)
	senders := [][]byte{
		[]byte(`[{"bt":1764579600,"n":"a","u":"kPa","v":1},{"n":"b","v":2},{"n":"slow","u":"Cel","v":3}]`),
		[]byte(`[{"bt":1764579600,"n":"b","u":"kPa","v":4},{"n":"a","u":"bar","v":5}]`),
		[]byte(`[{"bt":1764579600,"n":"a","v":6},{"n":"unknown","v":7},{"n":"slow","u":"K","v":300},{"n":"b","u":"Pa","v":8}]`),
		[]byte(`[{"bt":1764579600,"n":"slow","u":"degF","v":9},{"n":"a","u":"K","v":10},{"n":"a","u":"Pa","v":11}]`),
		[]byte(`[{"bt":1764579600,"n":"slow","u":"Cel","v":12},{"n":"a","u":"bar","v":13},{"n":"b","u":"furlong","v":14},{"n":"b","u":"bar","v":15}]`),
	}
	one, two := newBed(t, cfg), newBed(t, cfg)
	rnd := rand.New(rand.NewPCG(1, 1))
	for i := range 200 {
		p := senders[rnd.IntN(len(senders))]
		two.a = align.New(cfg)
		one.send(fast, p)
		two.send(fast, p)
		if !reflect.DeepEqual(one.s, two.s) {
			t.Fatalf("message %d, %s: the state differs", i, p)
		}
	}
	if one.s.Samples < 400 || one.s.Counters[ingest.ReasonUnknownChannel] == 0 || one.s.Counters[ingest.ReasonUnit] == 0 {
		t.Errorf("%d samples, counters %v: the messages test little", one.s.Samples, one.s.Counters)
	}
}

// The examples of MQTT 3.1.1, sections 4.7.1.2, 4.7.1.3 and 4.7.2, and what they
// say in words.
func TestMatch(t *testing.T) {
	for _, tt := range []struct {
		filter, topic string
		want          bool
	}{
		// 4.7.1.2
		{"sport/tennis/player1/#", "sport/tennis/player1", true},
		{"sport/tennis/player1/#", "sport/tennis/player1/ranking", true},
		{"sport/tennis/player1/#", "sport/tennis/player1/score/wimbledon", true},
		{"sport/#", "sport", true}, // the # includes the parent level
		{"#", "sport/tennis/player1", true},
		{"sport/tennis/#", "sport/tennis/player1", true},
		{"sport/tennis/player1/#", "sport/tennis/player2", false},
		// 4.7.1.3
		{"sport/tennis/+", "sport/tennis/player1", true},
		{"sport/tennis/+", "sport/tennis/player2", true},
		{"sport/tennis/+", "sport/tennis/player1/ranking", false},
		{"sport/+", "sport", false},
		{"sport/+", "sport/", true},
		{"+", "sport", true},
		{"+/tennis/#", "sport/tennis/player1", true},
		{"+/tennis/#", "sport/golf/player1", false},
		{"sport/+/player1", "sport/tennis/player1", true},
		{"sport/+/player1", "sport/tennis/player2", false},
		{"+/+", "/finance", true},
		{"/+", "/finance", true},
		{"+", "/finance", false},
		// 4.7.2
		{"#", "$SYS/monitor/Clients", false},
		{"+/monitor/Clients", "$SYS/monitor/Clients", false},
		{"$SYS/#", "$SYS/monitor/Clients", true},
		{"$SYS/monitor/+", "$SYS/monitor/Clients", true},
		// 4.7.3: names are case sensitive, a leading or trailing / is a level, and
		// without wildcards a filter is its topic.
		{"ACCOUNTS", "Accounts", false},
		{"Accounts payable", "Accounts payable", true},
		{"finance", "/finance", false},
		{"a/b", "a/b", true},
		{"a/b", "a/b/", false},
		{"a/b/", "a/b", false},
		{"a/+/c", "a//c", true},
		{"a/b", "a", false},
		{"a", "a/b", false},
	} {
		if got := align.Match(tt.filter, tt.topic); got != tt.want {
			t.Errorf("%q takes %q: %v, want %v", tt.filter, tt.topic, got, tt.want)
		}
	}
}

// A gap without any data at all of more than two minutes makes no scans, by
// host time and by event time alike; a shorter one makes them all.
func TestGaps(t *testing.T) {
	for _, tt := range []struct {
		name string
		gap  int64
		jump bool // host time jumps: the process was stopped
		skip bool
	}{
		{"a minute by host time", 60 * second, true, false},
		{"an hour by host time", hour, true, true},
		{"a year by host time", 365 * 24 * hour, true, true},
		{"an hour with ticks", hour, false, false},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := newBed(t, rig(t))
			at := epoch
			play := func(n int) {
				for range n {
					b.to(at + 3*ms)
					b.send(fast, pack(at, "a", 1.0, "b", 1.0))
					at += period
				}
			}
			play(40)
			b.to(b.host + second) // nothing is left open
			before := len(b.rows)
			at += tt.gap
			if tt.jump {
				b.host = at
			}
			play(40)
			b.to(b.host + second)
			scans := len(b.rows) - before
			if tt.skip && (scans > 200 || b.s.Skipped == 0) || !tt.skip && (scans < int(tt.gap/period) || b.s.Skipped != 0) {
				t.Errorf("%d scans, %d skipped", scans, b.s.Skipped)
			}
			// Skipped or made, every period is accounted for.
			if span := (b.rows[len(b.rows)-1].T-b.rows[0].T)/period + 1; span != int64(len(b.rows))+int64(b.s.Skipped) {
				t.Errorf("%d scans and %d skipped make not %d", len(b.rows), b.s.Skipped, span)
			}
			if u := usable(b.between(at-1500*ms, at-500*ms), 0); u != 1 {
				t.Errorf("after the gap %.0f %% of the scans are usable", 100*u)
			}
			b.check()
		})
	}
}

// The broker restarts and keeps nothing, so that after an outage of minutes or
// hours there is no backlog: scans go on at once, without a scan for each period
// of the outage when it is long.
func TestOutageWithoutBacklog(t *testing.T) {
	for _, outage := range []int64{second, 60 * second, 10 * 60 * second, hour, 24 * hour} {
		t.Run(fmt.Sprintf("%d s", outage/second), func(t *testing.T) {
			b := newBed(t, rig(t))
			b.connect(fast, true)
			at := epoch
			for ; at < epoch+80*second; at += period {
				b.to(at + 3*ms)
				b.send(fast, pack(at, "a", 1.0, "b", 1.0))
			}
			b.connect(fast, false) // some samples are in open scans
			b.to(b.host + outage)
			b.connect(fast, true)
			at = b.host
			before, n := b.s.Samples, len(b.rows)
			for end := at + 5*second; at < end; at += period {
				b.to(at + 3*ms)
				b.send(fast, pack(at, "a", 1.0, "b", 1.0))
			}
			if got := b.s.Samples - before; got < 198 { // 100 messages, the first may be lost
				t.Errorf("%d samples of 200 are used", got)
			}
			if scans := len(b.rows) - n; outage > 2*60*second && scans > 400 || outage <= 60*second && scans < int(outage/period) {
				t.Errorf("%d scans", scans)
			}
			rows := b.between(at-5*second+period, at-100*ms)
			if u := usable(rows, 0); u != 1 || len(rows) < 90 {
				t.Errorf("%.0f %% of %d scans after the outage are usable", 100*u, len(rows))
			}
			if r := b.rows[len(b.rows)-1]; r.host-r.T > 60*ms {
				t.Errorf("a scan is %d ms old", (r.host-r.T)/ms)
			}
			b.check()
		})
	}
}

// A source that is ahead of the others makes the table grow; what it brings is in
// the scan of its time, and memory is bounded.
func TestTableGrows(t *testing.T) {
	b := newBed(t, rig(t))
	b.connect(fast, true)
	b.connect(other, true)
	rows := b.s.Rows
	at := epoch
	a := func() { b.send(fast, pack(at, "a", float64((at-epoch)/ms))) }
	for ; at < epoch+10*second; at += period {
		b.to(at + 3*ms)
		a()
		b.send(other, pack(at, "b", float64((at-epoch)/ms)))
	}
	b.connect(fast, false)
	b.connect(other, false)
	n := len(b.rows)
	other0 := at
	b.to(b.host + 5*60*second)
	for ; at < epoch+5*60*second; at += period { // the broker brings the one, not yet the other
		b.host += ms / 5
		a()
	}
	if b.s.Rows <= rows || len(b.s.Table) != b.s.Rows*3 || len(b.rows) > n+2 {
		t.Fatalf("table of %d rows, %d entries, after %d scans", b.s.Rows, len(b.s.Table), len(b.rows)-n)
	}
	b.connect(fast, true)
	b.connect(other, true)
	for o := other0; o < at; o += period {
		b.host += ms / 5
		b.send(other, pack(o, "b", float64((o-epoch)/ms)))
	}
	for ; at < epoch+7*60*second; at += period {
		b.to(at + 3*ms)
		a()
		b.send(other, pack(at, "b", float64((at-epoch)/ms)))
	}
	for _, r := range b.between(epoch+period, epoch+7*60*second-second) {
		for ch := range 2 {
			if r.Samples[ch] != 1 || r.Raw[ch] != float64((r.T-epoch)/ms) {
				t.Fatalf("scan at %d ms: %d samples, raw %g", (r.T-epoch)/ms, r.Samples[ch], r.Raw[ch])
			}
		}
	}
	b.check()
	if b.s.Rows > rows {
		t.Errorf("the table keeps %d rows after the backlog, %d were enough before", b.s.Rows, rows)
	}
}

// No topic of however many makes the list of sources grow without bound, and every
// channel is found behind it.
func TestManyTopics(t *testing.T) {
	b := newBed(t, rig(t))
	for i := range 20000 {
		b.send(fmt.Sprintf("%sn%d", value, i), []byte("1"))
		b.send(fmt.Sprintf("elsewhere/%d", i), []byte("1"))
	}
	b.send(value+"a", []byte("1"))
	if len(b.s.Sources) > 1024 || b.s.Samples != 1 || b.s.Counters[ingest.ReasonUnknownTopic] != 20000 || b.s.Counters[ingest.ReasonUnknownChannel] != 20000 {
		t.Errorf("%d sources, %d samples, counters %v", len(b.s.Sources), b.s.Samples, b.s.Counters)
	}
}

// Another configuration keeps what is known of the channels that stay, with the
// samples of scans that are still open.
func TestReset(t *testing.T) {
	b := newBed(t, rig(t))
	at := epoch
	for ; at < epoch+2*second; at += period {
		b.to(at + 3*ms)
		b.send(fast, pack(at, "a", 1.0, "b", 2.0, "slow", 3.0))
	}
	cfg := rig(t)
	old := cfg.Channels
	cfg.Channels = []align.Channel{
		{ID: "new", Name: "new", Raw: old[0].Raw, Hold: second},
		old[2],
		old[0],
		{ID: "b", Name: "b", Raw: mustUnit(t, "bar"), Hold: 250 * ms}, // its raw values mean something else now
	}
	b.send(fast, pack(at, "a", 7.0, "b", 8.0)) // in a scan that is still open
	n, T := b.s.N, b.s.Next
	b.a = align.New(cfg)
	b.a.Reset(&b.s, old)
	b.cfg, b.rows, b.count = cfg, nil, 0
	b.scan = monitor.NewScan(4)
	b.to(epoch + 3*second)
	if b.s.N <= n || b.rows[0].T != T {
		t.Fatalf("scans do not go on at %d", T)
	}
	for _, r := range b.rows {
		if r.T == at && (r.Raw[2] != 7 || r.Quality[2] != monitor.QualityGood) {
			t.Errorf("the sample of the open scan is lost: %g, %v", r.Raw[2], r.Quality[2])
		}
	}
	first := b.rows[0]
	if first.Quality[0] != monitor.QualityMissing || first.Raw[1] != 3 || !first.Quality[1].Usable() || !first.Quality[2].Usable() || first.Quality[3] != monitor.QualityMissing {
		t.Errorf("first scan after the change: %v %v", first.Raw, first.Quality)
	}
	// With the same channels and another period it goes on as well.
	before := cfg.Channels
	cfg.Period = 100 * ms
	b.a = align.New(cfg)
	b.a.Reset(&b.s, before)
	b.cfg, b.rows = cfg, nil
	b.to(epoch + 4*second)
	if len(b.rows) < 8 || b.rows[0].T%(100*ms) != 0 {
		t.Errorf("%d scans of 100 ms in a second", len(b.rows))
	}
}

// A session of a filter that is no longer one does not keep scans waiting.
func TestResetForgetsSessions(t *testing.T) {
	b := newBed(t, rig(t))
	b.connect("rigs/x/gone", true)
	b.connect(fast, true)
	b.connect(fast, false)
	b.connect("rigs/x/gone", false)
	b.a.Reset(&b.s, b.cfg.Channels)
	if len(b.s.Sessions) != 1 || b.s.Sessions[0] != (align.Session{Filter: fast}) || !b.s.Waiting() {
		t.Errorf("sessions %v", b.s.Sessions)
	}
}

// The same records give the same state and scans, bit for bit.
func TestDeterminism(t *testing.T) {
	play := func() *bed {
		b := newBed(t, rig(t))
		b.connect(fast, true)
		for i := range int64(4000) {
			at := epoch + i*17*ms
			b.to(at)
			skew := int64(0)
			switch {
			case i > 1000 && i < 1500:
				skew = hour
			case i > 2000 && i < 2600:
				skew = -hour
			}
			b.send(fast, pack(at+skew-i%7*10*ms, "a", float64(i), "b", float64(i%13)))
			b.send(value+"slow", []byte("21.5"))
			if i == 3000 {
				b.connect(fast, false)
				b.to(b.host + 5*second)
				b.connect(fast, true)
			}
		}
		return b
	}
	x, y := play(), play()
	if !reflect.DeepEqual(x.s, y.s) {
		t.Error("two states of the same records differ")
	}
	if len(x.rows) != len(y.rows) || len(x.rows) < 1000 {
		t.Fatalf("%d and %d scans", len(x.rows), len(y.rows))
	}
	for i := range x.rows {
		if fmt.Sprint(x.rows[i]) != fmt.Sprint(y.rows[i]) { // NaN is not equal to itself
			t.Fatalf("scan %d differs", i+1)
		}
	}
	x.check()
}
