package dashboard

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net/http"
	"time"

	"throatwatch/dashboard/report"
	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// ReportOptions say who writes a report.
type ReportOptions struct {
	Parse    func(bundle []byte) (pipeline.Config, error) // for stored runs
	Build    string
	At       int64              // ns UTC
	Progress func(part float64) // 0 to 1; nil = nobody asks
}

// WriteReport writes the report of a stored run as one HTML file. The error is
// report.ErrTooEarly, or that of the run file.
func WriteReport(ctx context.Context, w io.Writer, f *runfile.File, h *runfile.Header, o ReportOptions) error {
	checks, err := ReadChecks(ctx, f, h)
	if err != nil {
		return err
	}
	entries, err := ReadLog(ctx, f, h)
	if err != nil {
		return err
	}
	figures, err := ReadFigures(ctx, f, h)
	if err != nil {
		return err
	}
	engine, err := readExceedances(ctx, f, h)
	if err != nil {
		return err
	}
	s := report.Source{
		File: f, Run: *h, Parse: o.Parse, Log: entries, Checks: checks, Figures: figures, Exceedances: engine.Exceedances, Life: engine.Life, NozzleLife: engine.NozzleLife,
		Build: o.Build, At: o.At, Progress: o.Progress,
	}
	for _, e := range engine.Events {
		s.Engine = append(s.Engine, report.EngineEvent{T: e.at, EngineEvent: e.EngineEvent})
	}
	return report.Write(ctx, w, &s)
}

// reportPolicy lets the report show its own style; it has no script and loads nothing.
const reportPolicy = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'; sandbox"

// report answers with the report of a run. What was sent of one that fails on the way
// is broken off, so that nobody takes it for whole.
func (s *Server) report(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	release, err := s.heavy(w)
	if err != nil {
		return err
	}
	defer release()
	h := w.Header()
	out := &begun{ResponseWriter: w}
	h.Set("Content-Security-Policy", reportPolicy)
	h.Set("Content-Type", "text/html; charset=utf-8")
	h.Set("Content-Disposition", fmt.Sprintf("inline; filename=%q", run.ID+"-report.html"))
	h.Set("Cache-Control", "no-store")
	err = WriteReport(r.Context(), out, f, &run.Header, ReportOptions{Parse: s.cfg.Parse, Build: s.cfg.Build, At: time.Now().UnixNano()})
	switch {
	case err == nil:
		return nil
	case out.yes:
		if r.Context().Err() == nil {
			s.cfg.Log.Error("report", "path", r.URL.Path, "err", err)
		}
		panic(http.ErrAbortHandler)
	}
	h.Set("Content-Security-Policy", headers["Content-Security-Policy"])
	h.Del("Content-Disposition")
	if errors.Is(err, report.ErrTooEarly) {
		return &problem{http.StatusConflict, err.Error()}
	}
	return err
}

// begun tells whether an answer has begun.
type begun struct {
	http.ResponseWriter
	yes bool
}

func (b *begun) Write(p []byte) (int, error) {
	b.yes = true
	return b.ResponseWriter.Write(p)
}
