package align_test

import (
	"math"
	"testing"

	"throatwatch/ingest"
	"throatwatch/monitor/align"
)

// Any sequence of jumps of time, topics, sessions, restarts and values makes no
// panic and no runaway, keeps scans in order, and loses count of no sample: what
// was taken is in a scan or still in the table.
func FuzzSequence(f *testing.F) {
	f.Add([]byte{0, 10, 1, 2, 3, 4, 0, 10, 1, 2, 3, 4})
	f.Add([]byte{1, 200, 9, 255, 255, 0, 5, 1, 0, 6, 2, 3, 7, 1, 255, 254})
	f.Add([]byte{5, 1, 0, 0, 60, 255, 3, 3, 127, 255, 255, 255, 255, 255, 255, 255, 6, 0, 0, 200})
	f.Fuzz(sequence)
}

// sequence plays what ops say.
func sequence(t *testing.T, ops []byte) {
	b := newBed(t, rig(t))
	next := func(n int) (v int64) { // n bytes, signed
		for range n {
			v <<= 8
			if len(ops) > 0 {
				v |= int64(ops[0])
				ops = ops[1:]
			}
		}
		return v << (64 - 8*n) >> (64 - 8*n)
	}
	names := []string{"a", "b", "slow", "z"}
	topics := []string{fast, other, value + "a", value + "b", "elsewhere"}
	filters := []string{fast, other, value + "+"}
	for i := 0; len(ops) > 0 && i < 500; i++ {
		topic := topics[uint64(next(1))%uint64(len(topics))]
		name := names[uint64(next(1))%uint64(len(names))]
		op := uint64(next(1)) % 12
		switch op {
		case 0, 1, 2: // live samples of any age within a second
			b.host += max(0, next(1)) * ms
			b.send(topic, pack(b.host-next(1)*8*ms, name, float64(next(2))))
		case 3: // any time that there is
			b.send(topic, pack(next(8), name, float64(next(2))))
		case 4: // days away
			b.send(topic, pack(b.host+next(2)*10*second, name, float64(next(2))))
		case 5: // any number
			b.send(topic, pack(b.host, name, math.Float64frombits(uint64(next(8)))))
		case 6: // without time
			b.send(topic, []byte("12.5"))
		case 7: // a burst of the past
			at := b.host - max(0, next(2))*100*ms
			for range 1 + next(1)&31 {
				b.send(topic, pack(at, "a", 1.0, "b", 2.0))
				at += period
			}
		case 8: // host time
			b.host += max(0, next(2)) * 100 * ms
			b.scans()
		case 9:
			b.connect(filters[uint64(next(1))%3], next(1)&1 == 0)
		case 10:
			b.a.Boot(&b.s, b.host)
		case 11: // another configuration; what its channels lose is counted
			if next(1)&7 != 0 {
				continue
			}
			lost := b.s.Counters[ingest.ReasonUnknownChannel]
			from := b.cfg.Channels
			b.cfg = rig(t)
			b.cfg.Period = []int64{50 * ms, 100 * ms, 20 * ms}[uint64(next(1))%3]
			b.a = align.New(b.cfg)
			b.a.Reset(&b.s, from)
			b.count += b.s.Counters[ingest.ReasonUnknownChannel] - lost
			b.rows = nil
			b.keep = false // numbers and periods change on the way
		}
	}
	b.check()
	if b.s.Rows > 1<<14 || len(b.s.Sources) > len(topics) {
		t.Errorf("table of %d rows, %d sources", b.s.Rows, len(b.s.Sources))
	}
	// Whatever went before, samples of now are in scans of now soon after.
	b.connect(fast, true)
	from := b.host
	for at := from + second; at < from+15*second; at += period {
		b.to(at)
		b.send(fast, pack(at, "a", 1.0))
	}
	if age := b.host - b.scan.T; age > second || !b.scan.Quality[0].Usable() {
		t.Errorf("after 14 s of good samples the newest scan is %d ms old, %v", age/ms, b.scan.Quality[0])
	}
}

// steady is an aligner in the middle of a run with the messages of the next
// second, to be sent again and again a second later.
type steady struct {
	*bed
	payloads [][]byte
	n        int64
}

func newSteady(tb testing.TB) *steady {
	tb.Helper()
	s := &steady{bed: newBed(tb, rig(tb))}
	s.keep = false
	for k := range int64(20) {
		s.payloads = append(s.payloads, pack(epoch+k*period, "a", 101.25+float64(k)/7, "b", 250.5-float64(k)/3, "slow", 21.5))
	}
	for range 400 {
		s.next()
	}
	return s
}

// next sends the next message: the digits of the seconds in its payload are
// written in place.
func (s *steady) next() {
	p := s.payloads[s.n%20]
	at := epoch + s.n*period
	const digits = `[{"bn":"","bt":`
	v := at / second
	for i := len(digits) + 9; i >= len(digits); i-- {
		p[i] = byte('0' + v%10)
		v /= 10
	}
	s.host = at + 3*ms
	r := ingest.Record{Kind: ingest.KindMessage, Host: s.host, Topic: fast, Payload: p}
	s.a.Message(&s.s, &r, false)
	s.scans()
	s.n++
}

// A message and the scan that it closes allocate nothing.
func TestAllocations(t *testing.T) {
	s := newSteady(t)
	scans, samples := s.s.N, s.s.Samples
	if n := testing.AllocsPerRun(1000, s.next); n != 0 {
		t.Errorf("%g allocations per message and scan", n)
	}
	if s.s.N-scans != 1001 || s.s.Samples-samples != 3003 { // AllocsPerRun runs once more
		t.Errorf("%d scans of %d samples", s.s.N-scans, s.s.Samples-samples)
	}
	// Neither do scans that the clock closes.
	if n := testing.AllocsPerRun(1000, func() { s.host += 100 * ms; s.scans() }); n != 0 {
		t.Errorf("%g allocations per tick", n)
	}
}

func BenchmarkMessage(b *testing.B) {
	s := newSteady(b)
	from := s.s.N
	b.ReportAllocs()
	for b.Loop() {
		s.next()
	}
	b.ReportMetric(float64(s.s.N-from)/b.Elapsed().Seconds(), "scans/s")
	if s.s.N == from {
		b.Fatal("no scans")
	}
}
