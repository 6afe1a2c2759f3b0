package align_test

import (
	"fmt"
	"testing"

	"throatwatch/ingest"
)

// bad is the topic of the publisher with the wrong clock. It sends a value per
// message: a small time in a SenML pack would mean one relative to now [RFC 8428
// 4.5.3].
const bad = value + "b"

func stamped(t int64, v float64) []byte {
	sign := ""
	if t < 0 {
		sign, t = "-", -t
	}
	return fmt.Appendf(nil, `{"t":%s%d.%06d,"v":%g}`, sign, t/second, t%second/1000, v)
}

// clocks plays two publishers, the second with a clock that is off by what skew
// gives for the time since the beginning. Both publish each 50 ms, 3 ms and 5 ms
// after their samples.
func clocks(t *testing.T, b *bed, from, to int64, badFirst bool, skew func(since int64) int64) {
	t.Helper()
	for at := from; at < to; at += period {
		bad := func() { b.send(bad, stamped(at+skew(at-epoch), float64((at-epoch)/ms))) }
		good := func() { b.send(fast, pack(at, "a", float64((at-epoch)/ms))) }
		b.to(at + 3*ms)
		if badFirst {
			bad()
		} else {
			good()
		}
		b.to(at + 5*ms)
		if badFirst {
			good()
		} else {
			bad()
		}
	}
}

func constant(d int64) func(int64) int64 { return func(int64) int64 { return d } }

// A publisher's wrong clock does not blind the scans: the other publisher is not
// touched, and the samples of this one count at receive time as soon as its clock
// is known to be wrong, which is flagged.
func TestWrongClock(t *testing.T) {
	year := 365 * 24 * hour
	for _, tt := range []struct {
		name   string
		skew   int64
		reason ingest.Reason
		known  int64 // after which it must be known
	}{
		{"an hour ahead", hour, ingest.ReasonFuture, 0},
		{"a second over the bound ahead", 3 * second, ingest.ReasonFuture, 0},
		{"30 years ahead", 30 * year, ingest.ReasonFuture, 0},
		{"an hour behind", -hour, ingest.ReasonPast, 3500 * ms},
		{"10 min behind", -600 * second, ingest.ReasonPast, 3500 * ms},
		{"a second over the bound behind", -6 * second, ingest.ReasonPast, 3500 * ms},
		{"4 s behind: believable, but too late for every scan", -4 * second, ingest.ReasonPast, 3500 * ms},
		{"a second behind", -second, ingest.ReasonPast, 3500 * ms},
		{"from 1970", -epoch, ingest.ReasonPast, 0},
		{"from 1903", -epoch - 67*year, ingest.ReasonPast, 0},
	} {
		for _, badFirst := range []bool{true, false} {
			for _, connected := range []bool{false, true} {
				t.Run(fmt.Sprintf("%s, first %v, after a connect %v", tt.name, badFirst, connected), func(t *testing.T) {
					b := newBed(t, rig(t))
					if connected {
						b.connect(fast, true)
						b.connect(value+"+", true)
					}
					clocks(t, b, epoch, epoch+30*second, badFirst, constant(tt.skew))
					b.to(epoch + 31*second)
					waited := int64(0)
					if connected {
						waited = tt.known
					}
					src := b.s.Sources[0]
					if src.Topic != bad {
						src = b.s.Sources[1]
					}
					if !src.Skewed || b.s.Counters[tt.reason] == 0 {
						t.Errorf("not flagged: %+v, counters %v", src, b.s.Counters)
					}
					for _, c := range []struct {
						name    string
						channel int
						from    int64
						least   float64
					}{
						// After a connect a source behind may be a backlog: the others wait for
						// it until that is known, and nothing of theirs is lost.
						{"the other publisher", 0, epoch + 500*ms + waited, 1},
						{"the publisher itself", 1, epoch + 500*ms + tt.known, 1},
					} {
						rows := b.between(c.from, epoch+30*second)
						if u := usable(rows, c.channel); u < c.least || len(rows) == 0 {
							t.Errorf("%s: %.1f %% of %d scans are usable", c.name, 100*u, len(rows))
						}
					}
					// Scans follow host time: they are not delayed once all is known.
					for _, r := range b.between(epoch+tt.known+500*ms, epoch+30*second) {
						if r.host-r.T > b.cfg.Lateness+100*ms+period {
							t.Fatalf("scan at %d ms comes %d ms after its end", (r.T-epoch)/ms, (r.host-r.T)/ms)
						}
					}
					if b.most > 200 {
						t.Errorf("%d scans after one record", b.most)
					}
					b.check()
				})
			}
		}
	}
}

// A clock that jumps back under a live source blinds nobody for longer than a channel
// is held. What was stored by a publisher and comes beside live samples, or after a
// silence, is no jump. (Expectations are those of the package comment.)
func TestClockJumpsBack(t *testing.T) {
	send := func(b *bed, at, clock int64) {
		b.to(at + 3*ms)
		b.send(fast, pack(clock, "a", 1.0, "b", 1.0))
	}
	b := newBed(t, rig(t))
	for at := epoch; at < epoch+20*second; at += period {
		clock := at
		if at >= epoch+10*second {
			clock -= 600 * second
		}
		send(b, at, clock)
	}
	blind := 0
	rows := b.between(epoch+second, epoch+19*second)
	for i := range rows {
		if !rows[i].Quality[0].Usable() {
			blind++
		}
	}
	if blind > 0 || !b.s.Sources[0].Skewed {
		t.Errorf("blind in %d scans of %d after a jump, source %+v", blind, len(rows), b.s.Sources[0])
	}
	b.check()

	for _, tt := range []struct {
		name    string
		silence int64
		live    bool // live samples come in between
		pace    int64
	}{
		{"stored samples beside live ones", 0, true, 1},
		{"stored samples in haste", 0, false, 5},
		{"what a cut line kept, slowly", 15 * second, false, 1},
	} {
		b := newBed(t, rig(t))
		at := epoch
		for ; at < epoch+10*second; at += period {
			send(b, at, at)
		}
		stored := at - 60*second
		if tt.silence > 0 {
			stored = at
		}
		at += tt.silence
		for end := at + 2*second; at < end; at += period {
			for range tt.pace {
				send(b, at, stored)
				stored += period
			}
			if tt.live {
				send(b, at, at)
			}
		}
		if n := b.s.Counters[ingest.ReasonPast]; n != 0 {
			t.Errorf("%s: %d samples are of a wrong clock", tt.name, n)
		}
		b.check()
	}
}

// A clock within the bounds is believed, and neither its samples nor those of
// the others are lost: not after a connect either.
func TestToleratedClock(t *testing.T) {
	for _, skew := range []int64{1900 * ms, 500 * ms, 60 * ms, -60 * ms, -200 * ms} {
		for _, connected := range []bool{false, true} {
			t.Run(fmt.Sprintf("%d ms, after a connect %v", skew/ms, connected), func(t *testing.T) {
				b := newBed(t, rig(t))
				if connected {
					b.connect(fast, true)
					b.connect(value+"+", true)
				}
				clocks(t, b, epoch, epoch+20*second, true, constant(skew))
				b.to(epoch + 23*second)
				n := b.s.Counters
				if n[ingest.ReasonFuture]+n[ingest.ReasonPast]+n[ingest.ReasonLate] != 0 {
					t.Errorf("counters %v", n)
				}
				rows := b.between(epoch+max(skew, 0)+500*ms, epoch+20*second)
				for ch := range 2 {
					if u := usable(rows, ch); u != 1 {
						t.Errorf("channel %d is usable in %.1f %% of %d scans", ch, 100*u, len(rows))
					}
				}
				b.check()
			})
		}
	}
}

// A clock that is set right is believed again, without losing a sample on the
// way, and is no longer flagged.
func TestClockRecovers(t *testing.T) {
	for _, skew := range []int64{hour, 3 * second, -hour, -6 * second, -second, -epoch} {
		t.Run(fmt.Sprintf("%d s", skew/second), func(t *testing.T) {
			b := newBed(t, rig(t))
			set := 15 * second
			clocks(t, b, epoch, epoch+30*second, true, func(since int64) int64 {
				if since < set {
					return skew
				}
				return 0
			})
			b.to(epoch + 31*second)
			for _, src := range b.s.Sources {
				if src.Skewed || src.Skew > 10*ms || src.Skew < 0 {
					t.Errorf("after it was set right: %+v", src)
				}
			}
			rows := b.between(epoch+5*second, epoch+30*second)
			if u := usable(rows, 1); u != 1 {
				t.Errorf("usable in %.1f %% of the scans", 100*u)
			}
			// Once it is right, event time is used again: the value at T is that of T.
			for _, r := range b.between(epoch+set+second, epoch+30*second-period) {
				if r.Samples[1] != 1 || r.Raw[1] != float64((r.T-epoch)/ms) {
					t.Fatalf("scan at %d ms: %d samples, raw %g", (r.T-epoch)/ms, r.Samples[1], r.Raw[1])
				}
			}
			b.check()
		})
	}
}

// A clock that drifts is believed up to the bound and flagged beyond it, and in
// no scan is its channel without a value.
func TestClockDrifts(t *testing.T) {
	for _, tt := range []struct {
		name   string
		perSec int64 // ns per second
		reason ingest.Reason
	}{
		{"50 ms/s ahead", 50 * ms, ingest.ReasonFuture},
		{"50 ms/s behind", -50 * ms, ingest.ReasonPast},
	} {
		t.Run(tt.name, func(t *testing.T) {
			b := newBed(t, rig(t))
			drift := func(since int64) int64 { return since / 1000 * (tt.perSec / 1000) / 1000 }
			clocks(t, b, epoch, epoch+120*second, true, drift)
			b.to(epoch + 121*second)
			flags := 0
			for _, src := range b.s.Sources {
				if src.Skewed {
					flags++
				}
			}
			if flags != 1 || b.s.Counters[tt.reason] == 0 {
				t.Errorf("%d sources flagged, counters %v", flags, b.s.Counters)
			}
			// On the way it may be too late for its scans until it is known, 3 s.
			lost := 0
			for _, r := range b.between(epoch+second, epoch+120*second) {
				if !r.Quality[1].Usable() {
					lost++
				}
				if !r.Quality[0].Usable() {
					t.Fatalf("the other publisher is lost at %d ms", (r.T-epoch)/ms)
				}
			}
			if most := int(3500 * ms / period); lost > most {
				t.Errorf("%d scans without a value, at most %d", lost, most)
			}
			b.check()
		})
	}
}

// Samples without a time of their own count at receive time, and a broker
// session that has just come up does not make scans wait for them.
func TestNoDeviceTime(t *testing.T) {
	b := newBed(t, rig(t))
	b.connect(value+"+", true)
	for at := epoch; at < epoch+10*second; at += period {
		b.to(at)
		b.send(value+"a", []byte("1.5"))
		b.to(at + ms)
		b.send(value+"b", []byte(`{"v":2.5}`))
	}
	rows := b.between(epoch+second, epoch+9*second)
	if len(rows) != 160 || usable(rows, 0) != 1 || usable(rows, 1) != 1 {
		t.Errorf("%d scans in 8 s after a connect, %.0f %% usable", len(rows), 100*usable(rows, 0))
	}
	if b.s.MaxEvent < b.host-100*ms {
		t.Error("the newest data is not the newest message")
	}
	// One of them stops: the scans go on at once.
	n := len(b.rows)
	for at := epoch + 10*second; at < epoch+12*second; at += period {
		b.to(at)
		b.send(value+"a", []byte("1.5"))
	}
	if got := len(b.rows) - n; got < 36 {
		t.Errorf("%d scans in 2 s after a channel is lost", got)
	}
	b.check()
}

// A reconnect while a channel is dead costs a short wait, not the whole time in
// which a broker may deliver what it kept.
func TestReconnectWithDeadChannel(t *testing.T) {
	b := newBed(t, rig(t))
	b.connect(fast, true)
	b.connect(other, true)
	clocks(t, b, epoch, epoch+80*second, false, constant(0))
	b.connect(fast, false)
	b.connect(other, false)
	b.to(b.host + second)
	b.connect(fast, true)
	b.connect(other, true)
	back := b.host
	for at := epoch + 80*second; at < back+10*second; at += period {
		b.to(at + 3*ms)
		b.send(fast, pack(at, "a", 1.0))
	}
	for _, r := range b.rows {
		if wait := r.host - r.T; r.host > back && wait > 3200*ms || r.host > back+3*second && wait > 300*ms {
			t.Fatalf("scan at %d ms comes %d ms after its end", (r.T-epoch)/ms, wait/ms)
		}
	}
	b.check()
}

// A backlog of a publisher that stored and forwards faster than it measures is no
// wrong clock.
func TestBacklogIsNoWrongClock(t *testing.T) {
	for _, pace := range []int64{2, 5, 50} {
		b := newBed(t, rig(t))
		b.connect(fast, true)
		at := epoch - hour/6
		for at < b.host {
			b.to(b.host + period/pace)
			b.send(fast, pack(at, "a", float64((at-epoch)/ms), "b", 1.0))
			at += period
		}
		if n := b.s.Counters[ingest.ReasonPast]; n != 0 || b.s.Sources[0].Skewed {
			t.Errorf("at %d times the pace of time %d samples are of a wrong clock", pace, n)
		}
		if n := b.s.Counters[ingest.ReasonLate]; n != 0 {
			t.Errorf("at %d times the pace of time %d samples are late", pace, n)
		}
		b.check()
	}
}

// A publisher that brings a long past slowly does not keep the live one from
// being watched: it is waited for 10 s after the connect, and then the rest of
// its past is counted as late.
func TestSlowBacklogBesideLive(t *testing.T) {
	b := newBed(t, rig(t))
	b.connect(fast, true)
	b.connect(other, true)
	past := epoch - hour/6
	for at := epoch; at < epoch+60*second; at += period {
		b.to(at + 3*ms)
		b.send(fast, pack(at, "a", 1.0))
		for range 3 {
			b.send(other, pack(past, "b", 2.0))
			past += period
		}
	}
	if b.s.Counters[ingest.ReasonLate] == 0 || b.s.Counters[ingest.ReasonPast] != 0 {
		t.Errorf("counters %v", b.s.Counters)
	}
	for _, r := range b.rows {
		if r.host > epoch+11*second && r.host-r.T > 300*ms {
			t.Fatalf("%d s after the connect a scan comes %d ms after its end", (r.host-epoch)/second, (r.host-r.T)/ms)
		}
	}
	if u := usable(b.between(epoch+11*second, epoch+59*second), 0); u != 1 {
		t.Errorf("the live publisher is usable in %.1f %% of the scans", 100*u)
	}
	b.check()
}
