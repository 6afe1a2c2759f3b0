package dashboard_test

import (
	"math/rand/v2"
	"testing"

	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// points gives scans of an engine at work: full numbers, as they come from a
// computation.
func points(n int) (outs []pipeline.Outcome) {
	pick := rand.New(rand.NewPCG(1, 2))
	cfg := rig("", "")
	for i := range n {
		p, s := &monitor.OperatingPoint{Choke: monitor.Choked, Phase: monitor.Steady, EGTProbesUsed: 4, RakeProbesUsed: 3}, monitor.NewScan(len(cfg.Compute.Channels))
		for q := range p.V {
			p.V[q] = 1e5 * pick.Float64()
		}
		for c := range s.Value {
			s.Value[c], s.Raw[c], s.Age[c], s.Quality[c] = 1e5*pick.Float64(), 100*pick.Float64(), int64(pick.IntN(4e7)), monitor.QualityGood
		}
		t := start + int64(i)*second/scans
		outs = append(outs,
			pipeline.Outcome{Kind: pipeline.OutcomePoint, Epoch: 3, N: uint64(2 * i), T: t, Point: p, Scan: s},
			pipeline.Outcome{Kind: pipeline.OutcomeChannels, Epoch: 3, N: uint64(2*i + 1), T: t, Point: p, Scan: s})
	}
	return outs
}

var sink int

func BenchmarkAppendPoint(b *testing.B) {
	cfg := rig("", "")
	outs := points(64)
	var buf []byte
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		buf, _, _ = dashboard.AppendFrame(buf[:0], &outs[i], &cfg)
		i = (i + 2) % len(outs)
	}
	b.SetBytes(int64(len(buf)))
	sink += len(buf)
}

func BenchmarkAppendChannels(b *testing.B) {
	cfg := rig("", "")
	outs := points(64)
	wanted := []int{0, 3, 5, 14}
	b.ReportAllocs()
	i := 1
	for b.Loop() {
		sink += len(dashboard.EncodeChannels(&outs[i], &cfg, wanted))
		i = (i + 2) % len(outs)
	}
}

// Publishing a scan, point and channels, to viewers that take it at once, and beside it
// the same bytes put into as many queues by nothing but a loop.
func BenchmarkPublish(b *testing.B) {
	for _, bm := range []struct {
		name    string
		viewers int
		bare    bool
	}{{"no viewer", 0, false}, {"200 viewers", 200, false}, {"bare broadcast to 200", 200, true}} {
		b.Run(bm.name, func(b *testing.B) {
			outs := points(64)
			run := published
			if bm.bare {
				run = broadcast
			}
			publish, drain := run(outs, bm.viewers)
			b.ReportAllocs()
			i, frames := 0, 0
			for b.Loop() {
				publish(i)
				frames += drain()
				i = (i + 2) % len(outs)
			}
			if frames != 2*bm.viewers*b.N {
				b.Fatalf("%d frames for %d viewers and %d scans", frames, bm.viewers, b.N)
			}
		})
	}
}

// published goes through the hub.
func published(outs []pipeline.Outcome, viewers int) (publish func(i int), drain func() int) {
	m, s := pipeline.NewMachine(parse), &pipeline.State{}
	m.Step(s, &ingest.Record{Seq: 1, Kind: ingest.KindConfig, Payload: []byte("rig")})
	hub := dashboard.NewHub(build)
	drain = hub.Attach(viewers, true)
	n := outs[len(outs)-1].N
	return func(i int) {
		two := outs[i : i+2]
		for k := range two { // time goes on
			n++
			two[k].N, two[k].T = n, start+int64(n/2)*second/scans
		}
		hub.Publish(two, m, s)
	}, drain
}

// broadcast puts frames that are made already into queues.
func broadcast(outs []pipeline.Outcome, viewers int) (publish func(i int), drain func() int) {
	cfg := rig("", "")
	bodies := make([][]byte, len(outs))
	for i := range outs {
		bodies[i], _ = dashboard.EncodeStored(&outs[i], &cfg)
	}
	queues := make([]chan []byte, viewers)
	for i := range queues {
		queues[i] = make(chan []byte, dashboard.ClientQueue)
	}
	publish = func(i int) {
		for _, body := range bodies[i : i+2] {
			for _, q := range queues {
				select {
				case q <- body:
				default:
				}
			}
		}
	}
	return publish, func() (frames int) {
		for _, q := range queues {
			for len(q) > 0 {
				<-q
				frames++
			}
		}
		return frames
	}
}
