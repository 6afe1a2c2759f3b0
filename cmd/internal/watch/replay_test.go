package watch_test

import (
	"testing"
	"time"

	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// TestReplayOfEachFault records a test with each fault of the rehearsal once and steps
// the stored records again: the digest is that of the recording. TestKilledDaemon in
// cmd/throatwatch and TestCrashes here do the same across kills, TestFullDisk across a
// gap.
func TestReplayOfEachFault(t *testing.T) {
	t.Parallel()
	for _, kind := range rehearsal.FaultKinds() {
		t.Run(kind.String(), func(t *testing.T) {
			t.Parallel()
			r := newRecorder(t)
			rig, err := rehearsal.New(r.cfg, rehearsal.Options{
				Seed: 3, Scenario: rehearsal.Quick, Rate: 20, Start: r.core.State.Host + 1e9,
				Faults: []rehearsal.Fault{{Kind: kind, At: 25 * time.Second}},
			})
			r.must(err)
			var msgs []rehearsal.Message
			for more := true; more; {
				msgs, more = rig.Next(msgs)
			}
			r.play(msgs)
			r.act(pipeline.DoRunEnd, "")
			runs, err := r.store.Catalog().List(t.Context(), runfile.Filter{})
			r.must(err)
			if len(runs) != 1 || runs[0].State != runfile.StateEnded || len(runs[0].Digest) != 64 {
				t.Fatalf("one ended run is due: %+v", runs)
			}
			f, err := runfile.Open(t.Context(), r.store.Catalog().Path(runs[0]), runfile.ReadOnly, runfile.Options{})
			r.must(err)
			defer f.Close()
			p, err := pipeline.OpenReplay(t.Context(), f, pipeline.NewMachine(watch.Parse), 0)
			r.must(err)
			digest, points := "", 0
			r.must(p.Run(t.Context(), 0, func(_ *ingest.Record, outs []pipeline.Outcome) error {
				for i := range outs {
					switch o := &outs[i]; {
					case o.Kind == pipeline.OutcomePoint:
						points++
					case o.Kind == pipeline.OutcomeRun && o.Event != "started":
						digest = p.Digest.String()
					}
				}
				return nil
			}))
			if digest != runs[0].Digest || points < 1100 {
				t.Errorf("%d points with digest %.12s, recorded live was %.12s", points, digest, runs[0].Digest)
			}
		})
	}
}
