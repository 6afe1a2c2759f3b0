package bench

import (
	"context"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"strings"

	"throatwatch/cmd/internal/config"
	"throatwatch/cmd/internal/rehearsal"
	"throatwatch/cmd/internal/watch"
	"throatwatch/ingest"
	"throatwatch/monitor"
	"throatwatch/rules/pipeline"
)

// wanted is the number of channels of the rig that is measured.
const wanted = 60

// start is the device time at which rehearsals begin, 2025-12-01 09:00 UTC, ns.
const start = int64(1764579600e9)

const second = int64(1e9)

// wideRig writes the rig file with as many channels as are wanted, the further ones
// like its fuel temperature, into dir.
func wideRig(name, dir string, channels int) (path string, bundle config.Bundle, cfg pipeline.Config, err error) {
	text, err := os.ReadFile(name)
	if err != nil {
		return "", bundle, cfg, err
	}
	_, cfg, faults := config.Load(name)
	if err := watch.Faults(faults); err != nil {
		return "", bundle, cfg, err
	}
	var b strings.Builder
	b.Write(text)
	for i := len(cfg.Compute.Channels); i < channels; i++ {
		fmt.Fprintf(&b, "  - {id: further_%d, like: t_fuel, title: Further %d}\n", i, i)
	}
	path = filepath.Join(dir, fmt.Sprintf("rig-%d.yaml", channels))
	if err := os.WriteFile(path, []byte(b.String()), 0o600); err != nil {
		return "", bundle, cfg, err
	}
	bundle, cfg, faults = config.Load(path)
	return path, bundle, cfg, watch.Faults(faults)
}

// copyScan gives a scan that may be kept.
func copyScan(s *monitor.Scan) *monitor.Scan {
	c := monitor.NewScan(len(s.Raw))
	c.N, c.T = s.N, s.T
	copy(c.Raw, s.Raw)
	copy(c.Value, s.Value)
	copy(c.Quality, s.Quality)
	copy(c.Samples, s.Samples)
	copy(c.Age, s.Age)
	copy(c.Finding, s.Finding)
	return c
}

// running gives scans of a choked engine at steady speed, before they are computed.
func running(ctx context.Context, cfg *pipeline.Config, bundle config.Bundle) (scans []*monitor.Scan, err error) {
	rig, err := rehearsal.New(*cfg, rehearsal.Options{Seed: 1, Rate: 20, Start: start, Plan: []rehearsal.Segment{
		{Name: "light", Seconds: 12, Speed: 0.45, Starter: true, Fuel: true},
		{Name: "up", Seconds: 12, Speed: 0.95, Fuel: true},
		{Name: "hold", Seconds: 40, Speed: 0.95, Fuel: true},
	}})
	if err != nil {
		return nil, err
	}
	m, s := pipeline.NewMachine(watch.Parse), &pipeline.State{}
	take := func(r ingest.Record) {
		r.Seq = s.Seq + 1
		outs := m.Step(s, &r)
		for i := range outs {
			if o := &outs[i]; o.Kind == pipeline.OutcomePoint && o.Point.Choke == monitor.Choked && o.Point.Steady {
				scans = append(scans, copyScan(o.Scan))
			}
		}
	}
	boot, err := json.Marshal(pipeline.Boot{Epoch: 1, Build: "bench", GOARCH: runtime.GOARCH})
	if err != nil {
		return nil, err
	}
	take(ingest.Record{Kind: ingest.KindBoot, Host: start, Payload: boot})
	take(ingest.Record{Kind: ingest.KindConfig, Host: start, Payload: bundle.Marshal()})
	err = rehearsal.Run(ctx, rig, func(context.Context, int64) error { return nil },
		func(_ context.Context, msg rehearsal.Message) error {
			take(ingest.Record{Kind: ingest.KindMessage, Flags: ingest.FlagQoS1, Host: msg.At + msg.Delay, Topic: msg.Topic, Payload: msg.Payload})
			return nil
		})
	if err == nil && len(scans) < 100 {
		err = fmt.Errorf("only %d steady choked scans in the rehearsal", len(scans))
	}
	return scans, err
}
