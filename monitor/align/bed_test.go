package align_test

import (
	"math"
	"slices"
	"testing"

	"throatwatch/ingest"
	"throatwatch/ingest/decode"
	"throatwatch/monitor"
	"throatwatch/monitor/align"
	"throatwatch/monitor/unit"
)

const (
	ms     = int64(1e6)
	second = int64(1e9)
	hour   = 3600 * second
	period = 50 * ms
	// epoch is 2025-12-01 09:00 UTC, a multiple of the period.
	epoch = int64(1764579600e9)
)

// The topics of the rig of these tests.
const (
	fast  = "rigs/x/fast"
	other = "rigs/x/other"
	value = "rigs/x/channels/"
)

func mustUnit(tb testing.TB, name string) unit.Unit {
	tb.Helper()
	u, err := unit.Parse(name)
	if err != nil {
		tb.Fatal(err)
	}
	return u
}

// rig has two fast channels and one slow one, found on any input, in kPa, kPa
// and degC.
func rig(tb testing.TB) align.Config {
	tb.Helper()
	kpa, degc := mustUnit(tb, "kPa"), mustUnit(tb, "degC")
	return align.Config{
		Period: period, Lateness: 120 * ms, MaxFuture: 2 * second, MaxPast: 5 * second, Backlog: 65 * second,
		Inputs: []align.Input{
			{Filter: fast, Format: decode.SenMLJSON},
			{Filter: other, Format: decode.SenMLJSON},
			{Filter: value + "+", Format: decode.Value},
		},
		Channels: []align.Channel{
			{ID: "a", Name: "a", Raw: kpa, Hold: 250 * ms},
			{ID: "b", Name: "b", Raw: kpa, Hold: 250 * ms},
			{ID: "slow", Name: "slow", Raw: degc, Hold: 3 * second},
		},
	}
}

// row is a scan as it came out, with the host time at which it did.
type row struct {
	monitor.Scan
	host int64
}

// bed drives an aligner as the step does: scans are taken after each record.
type bed struct {
	tb    testing.TB
	cfg   align.Config
	a     *align.Aligner
	s     align.State
	host  int64
	rows  []row
	most  int // scans taken after one record, the most of all
	scan  *monitor.Scan
	keep  bool
	count uint64 // samples in scans
}

func newBed(tb testing.TB, cfg align.Config) *bed {
	tb.Helper()
	b := &bed{tb: tb, cfg: cfg, a: align.New(cfg), host: epoch, scan: monitor.NewScan(len(cfg.Channels)), keep: true}
	b.a.Reset(&b.s, nil)
	return b
}

// limit of scans after one record: 16384 rows of the table and some. What makes
// more is a runaway.
const limit = 20000

func (b *bed) scans() {
	b.tb.Helper()
	n := 0
	for b.a.Scan(&b.s, b.host, b.scan) {
		if n++; n > limit {
			b.tb.Fatalf("more than %d scans after one record, Next is %d s from host", limit, (b.s.Next-b.host)/second)
		}
		for _, k := range b.scan.Samples {
			b.count += uint64(k)
		}
		if b.keep {
			c := *b.scan
			c.Raw, c.Quality = slices.Clone(c.Raw), slices.Clone(c.Quality)
			c.Samples, c.Age = slices.Clone(c.Samples), slices.Clone(c.Age)
			b.rows = append(b.rows, row{c, b.host})
		}
	}
	b.most = max(b.most, n)
}

// to takes host time to t by ticks of 100 ms, as the sequencer makes them.
func (b *bed) to(t int64) {
	b.tb.Helper()
	for b.host+100*ms < t {
		b.host += 100 * ms
		b.scans()
	}
	b.host = max(b.host, t)
	b.scans()
}

// send takes a message at the present host time.
func (b *bed) send(topic string, payload []byte) {
	b.tb.Helper()
	b.message(&ingest.Record{Kind: ingest.KindMessage, Topic: topic, Payload: payload})
}

func (b *bed) message(r *ingest.Record) {
	b.tb.Helper()
	r.Host = b.host
	b.a.Message(&b.s, r, false)
	b.scans()
}

func (b *bed) connect(filter string, up bool) {
	b.tb.Helper()
	b.a.Connect(&b.s, filter, up, b.host)
	b.scans()
}

// pack is a SenML pack of device time t: names and values in turn.
func pack(t int64, nameValue ...any) []byte {
	var list []decode.Reading
	for i := 0; i < len(nameValue); i += 2 {
		list = append(list, decode.Reading{Name: nameValue[i].(string), Value: nameValue[i+1].(float64)})
	}
	return decode.AppendSenMLJSON(nil, "", t, list)
}

// at gives the scan of the interval that ends at t.
func (b *bed) at(t int64) *row {
	b.tb.Helper()
	for i := range b.rows {
		if b.rows[i].T == t {
			return &b.rows[i]
		}
	}
	b.tb.Fatalf("there is no scan at %d ms", (t-epoch)/ms)
	return nil
}

// between gives the scans of event times above from, up to to.
func (b *bed) between(from, to int64) []row {
	var out []row
	for _, r := range b.rows {
		if r.T > from && r.T <= to {
			out = append(out, r)
		}
	}
	return out
}

// usable gives the share of scans in which a channel has a usable value.
func usable(rows []row, channel int) float64 {
	n := 0
	for _, r := range rows {
		if r.Quality[channel].Usable() {
			n++
		}
	}
	return float64(n) / float64(max(len(rows), 1))
}

// check holds what is true of any sequence: scans follow each other by whole
// periods, times rise, no sample is lost or counted twice, ages agree with
// qualities.
func (b *bed) check() {
	b.tb.Helper()
	var open uint64
	for _, acc := range b.s.Table {
		open += uint64(acc.N)
	}
	if b.s.Samples != b.count+open {
		b.tb.Errorf("%d samples taken, %d in scans and %d still open", b.s.Samples, b.count, open)
	}
	for i := range b.rows {
		r := &b.rows[i]
		if r.T%b.cfg.Period != 0 || r.N != uint64(i)+1 {
			b.tb.Fatalf("scan %d has number %d and time %d", i+1, r.N, r.T)
		}
		if i > 0 && r.T <= b.rows[i-1].T {
			b.tb.Fatalf("scan at %d after one at %d", r.T, b.rows[i-1].T)
		}
		for ch, q := range r.Quality {
			missing := q == monitor.QualityMissing
			stale := r.Age[ch] > b.cfg.Channels[ch].Hold
			if missing != (r.Age[ch] == -1) || missing != math.IsNaN(r.Raw[ch]) || !missing && stale != (q == monitor.QualityStale) ||
				!stale && !missing && (r.Samples[ch] > 0) != (q == monitor.QualityGood) {
				b.tb.Fatalf("scan at %d ms, channel %s: %d samples, age %d ms, raw %g: %v",
					(r.T-epoch)/ms, b.cfg.Channels[ch].ID, r.Samples[ch], r.Age[ch]/ms, r.Raw[ch], q)
			}
		}
	}
}
