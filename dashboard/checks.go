package dashboard

import (
	"cmp"
	"context"
	"encoding/json"
	"fmt"
	"maps"
	"math"
	"net/http"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/monitor/check"
	"throatwatch/rules/pipeline"
)

// checkBody is the body that begins a check of the data system.
type checkBody struct {
	Phase     string            `json:"phase"`
	Warmth    string            `json:"warmth"`
	Ticks     map[string]string `json:"ticks"` // id: who ticked it
	Planned   float64           `json:"planned_s"`
	Note      string            `json:"note"`
	RequestID string            `json:"request_id"`
	By        string            `json:"by"`
}

// checks answers with how the checks of a rig stand.
func (s *Server) checks(w http.ResponseWriter, r *http.Request) error {
	var v pipeline.ChecksView
	if err := s.ask(r.Context(), r.PathValue("rig"), func(_ *pipeline.Config, m *pipeline.Machine, st *pipeline.State) {
		v = m.Checks(st)
	}); err != nil {
		return err
	}
	return reply(w, http.StatusOK, v)
}

// check begins a check of the data system.
func (s *Server) check(w http.ResponseWriter, r *http.Request) error {
	var in checkBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if err := s.ask(r.Context(), r.PathValue("rig"), func(*pipeline.Config, *pipeline.Machine, *pipeline.State) {}); err != nil {
		return err
	}
	if !(in.Planned >= 0 && in.Planned <= mostPlanned) {
		return badRequest("planned_s %g: give the length of the run, up to a week", in.Planned)
	}
	q := pipeline.CheckRequest{Phase: in.Phase, Warmth: in.Warmth, Planned: in.Planned}
	for _, id := range slices.Sorted(maps.Keys(in.Ticks)) {
		q.Ticks = append(q.Ticks, check.Ticked{ID: id, By: in.Ticks[id]})
	}
	if s.cfg.Free != nil {
		q.Free = s.cfg.Free()
	}
	return s.act(w, r, pipeline.Action{Do: pipeline.DoCheck, Check: q, Text: in.Note, By: in.By, RequestID: in.RequestID})
}

// mostPlanned bounds the planned length of a run, s.
const mostPlanned = 7 * 86400.0

// ReadChecks gives the checks of the data system that are stored with a run: those before
// it that count for it, and those after it, in the order in which they were made.
func ReadChecks(ctx context.Context, f *runfile.File, h *runfile.Header) ([]check.Result, error) {
	run := h.Stepped()
	list := []check.Result{}
	err := f.Events(ctx, 0, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "checks" {
			return nil
		}
		var c check.Result
		if err := json.Unmarshal(e.JSON, &c); err != nil {
			return fmt.Errorf("event %d.%d: %w", e.Epoch, e.N, err)
		}
		if c.State == check.Done && c.Run == run {
			list = append(list, c)
		}
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("checks: %w", err)
	}
	slices.SortStableFunc(list, func(a, b check.Result) int { return cmp.Compare(a.Ended, b.Ended) })
	return list, nil
}

func (s *Server) runChecks(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	list, err := ReadChecks(r.Context(), f, &run.Header)
	if err != nil {
		return err
	}
	return reply(w, http.StatusOK, list)
}
