// Package report writes the report of a stored run: one HTML file that needs nothing
// beside it, to be read in a browser, printed on A4 and signed.
//
// It says what was recorded, not what should have been: numbers are those of the run
// file, printed with the digits that their 95 % uncertainty leaves. Where something is
// not stated or was not measured, it says so. Times are those of the facility; the head
// of the report gives them in UTC too.
//
// Memory does not depend on the length of the run: columns are thinned by buckets that
// keep their extremes, lists have a bound and say how much they leave out.
package report

import (
	"context"
	_ "embed"
	"errors"
	"fmt"
	"html/template"
	"io"
	"math"
	"time"

	"throatwatch/dashboard/points"
	"throatwatch/ingest/runfile"
	"throatwatch/monitor/check"
	"throatwatch/rules/figures"
	"throatwatch/rules/pipeline"
)

// ErrTooEarly is returned for a run that has no chunk yet: the first is closed after a
// minute.
var ErrTooEarly = errors.New("nothing is stored of the run yet: wait for a minute")

// Source is what a report is made of.
type Source struct {
	File  *runfile.File
	Run   runfile.Header
	Parse func(bundle []byte) (pipeline.Config, error)

	Log         []pipeline.Entry
	Checks      []check.Result // of the data system, the oldest first
	Figures     figures.Figures
	Exceedances []pipeline.Exceedance
	Engine      []EngineEvent
	Life        *pipeline.Life // when the run ended; nil = as of its last checkpoint
	NozzleLife  *pipeline.NozzleLife

	Build    string             // that writes the report
	At       int64              // when, ns UTC
	Progress func(part float64) // 0 to 1; nil = nobody asks
}

// EngineEvent is what happened to the engine, and when.
type EngineEvent struct {
	T int64 // ns UTC
	pipeline.EngineEvent
}

//go:embed report.html
var page string

// Write writes the report. The error is ErrTooEarly, or that of the run file.
func Write(ctx context.Context, w io.Writer, s *Source) error {
	tmpl, err := template.New("report").Parse(page)
	if err != nil {
		panic("report: template: " + err.Error())
	}
	d, err := s.read(ctx)
	if err != nil {
		return fmt.Errorf("report of %s: %w", s.Run.ID, err)
	}
	v, err := d.view()
	if err != nil {
		return fmt.Errorf("report of %s: %w", s.Run.ID, err)
	}
	if err := tmpl.Execute(w, v); err != nil {
		return fmt.Errorf("report of %s: %w", s.Run.ID, err)
	}
	return nil
}

// data is all that a report says, before it is put into words.
type data struct {
	*Source
	cfg    *pipeline.Config
	state  *pipeline.State
	to     int64 // end of what is reported, exclusive
	scans  *scans
	events *happenings
	points points.Table
	card   points.Card
	clock  clock
}

func (s *Source) read(ctx context.Context) (*data, error) {
	c, err := s.File.LastCheckpoint(ctx, math.MaxInt64)
	if errors.Is(err, runfile.ErrNoCheckpoint) {
		return nil, ErrTooEarly
	}
	if err != nil {
		return nil, err
	}
	d := &data{Source: s}
	if d.state, err = pipeline.Decode(c.State); err != nil {
		return nil, err
	}
	cfg, err := s.Parse(d.state.Bundle)
	if err != nil {
		return nil, err
	}
	d.cfg, d.clock = &cfg, clock{cfg.Rig.Zone()}
	if life, ok := d.state.Life(cfg.Rig.EngineSerial); ok && s.Life == nil {
		s.Life = &life // as of the checkpoint
	}
	if life, ok := d.state.NozzleLife(cfg.Rig.NozzleSerial); ok && s.NozzleLife == nil {
		s.NozzleLife = &life
	}
	// No row is behind the newest scan; the run of a later stretch is not this one.
	d.to = d.state.Align.Next
	if s.Run.Ended != 0 {
		d.to = min(d.to, s.Run.Ended+1)
	}
	d.to = max(d.to, s.Run.Started+1)
	if d.events, err = readEvents(ctx, s.File, s.Run.Started); err != nil {
		return nil, err
	}
	// Most of the time goes into the two kinds of chunk, and the rest into the points.
	const ofChunks = 0.9
	pass, before := 0.0, s.Run.Started
	tell := func(t int64) {
		if t < before {
			pass = 1
		}
		before = t
		if s.Progress != nil {
			part := float64(t-s.Run.Started) / float64(d.to-s.Run.Started)
			s.Progress(ofChunks * (pass + min(max(part, 0), 1)) / 2)
		}
	}
	if d.scans, err = gather(ctx, s.File, s.Run.Started, d.to, cfg.Align.Period, tell); err != nil {
		return nil, err
	}
	if d.card, err = points.ReadCard(ctx, s.File, &s.Run); err != nil {
		return nil, err
	}
	d.points, err = points.Read(ctx, s.File, &s.Run, s.Parse, points.Options{})
	return d, err
}

// scanRate is the number of scans per second.
func (d *data) scanRate() float64 { return float64(time.Second) / float64(d.cfg.Align.Period) }
