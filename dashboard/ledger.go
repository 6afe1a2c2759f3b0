package dashboard

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"net/http"

	"throatwatch/ingest/runfile"
	"throatwatch/rules/pipeline"
)

// exceedancesJSON is what a run has on record of its EGT limits and its engine.
type exceedancesJSON struct {
	Exceedances []pipeline.Exceedance `json:"exceedances"`
	Events      []engineEventJSON     `json:"events"`
	Life        *pipeline.Life        `json:"life"` // when the run ended; now while it is on
	NozzleLife  *pipeline.NozzleLife  `json:"nozzle_life"`
}

type engineEventJSON struct {
	T string `json:"t"`
	pipeline.EngineEvent

	at int64 // T in ns UTC
}

// exceedances answers with the excursions above EGT limits of a run, by their
// beginnings, each as it was last recorded.
func (s *Server) exceedances(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	out, err := readExceedances(r.Context(), f, &run.Header)
	if err != nil {
		return err
	}
	if run.State == runfile.StateRunning {
		if err := s.ask(r.Context(), "", func(cfg *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
			if life, ok := st.Life(cfg.Rig.EngineSerial); ok && st.Run.ID == run.ID {
				out.Life = &life
			}
			if life, ok := st.NozzleLife(cfg.Rig.NozzleSerial); ok && st.Run.ID == run.ID {
				out.NozzleLife = &life
			}
		}); err != nil {
			return err
		}
	}
	return reply(w, http.StatusOK, out)
}

// readExceedances reads what a run has on record of its EGT limits and its engine.
func readExceedances(ctx context.Context, f *runfile.File, h *runfile.Header) (exceedancesJSON, error) {
	out := exceedancesJSON{Exceedances: []pipeline.Exceedance{}, Events: []engineEventJSON{}}
	err := f.Events(ctx, h.Started, math.MaxInt64, func(e *runfile.Event) error {
		switch e.Kind {
		case "exceedance":
			var v pipeline.Exceedance
			err := json.Unmarshal(e.JSON, &v)
			out.enter(&v)
			return err
		case "engine":
			v := engineEventJSON{T: rfc3339(e.T), at: e.T}
			err := json.Unmarshal(e.JSON, &v.EngineEvent)
			out.Events = append(out.Events, v)
			return err
		case "life":
			out.Life = new(pipeline.Life)
			return json.Unmarshal(e.JSON, out.Life)
		}
		return nil
	})
	if err == nil && len(h.NozzleLife) > 0 {
		out.NozzleLife = new(pipeline.NozzleLife)
		err = json.Unmarshal(h.NozzleLife, out.NozzleLife)
	}
	if err != nil {
		return out, fmt.Errorf("exceedances: %w", err)
	}
	return out, nil
}

// enter puts a record in the place of an earlier one of the same excursion.
func (e *exceedancesJSON) enter(v *pipeline.Exceedance) {
	for i := range e.Exceedances {
		if old := &e.Exceedances[i]; old.Band == v.Band && old.Began == v.Began {
			*old = *v
			return
		}
	}
	e.Exceedances = append(e.Exceedances, *v)
}

// life answers with what an engine has been through.
func (s *Server) life(w http.ResponseWriter, r *http.Request) error {
	serial := r.PathValue("serial")
	var life pipeline.Life
	known := false
	if err := s.ask(r.Context(), "", func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		life, known = st.Life(serial)
	}); err != nil {
		return err
	}
	if !known {
		return notFound("no engine %q was watched here", serial)
	}
	return reply(w, http.StatusOK, life)
}

// nozzleLife answers with what a nozzle has been through.
func (s *Server) nozzleLife(w http.ResponseWriter, r *http.Request) error {
	serial := r.PathValue("serial")
	var life pipeline.NozzleLife
	known := false
	if err := s.ask(r.Context(), "", func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		life, known = st.NozzleLife(serial)
	}); err != nil {
		return err
	}
	if !known {
		return notFound("no nozzle %q was watched here", serial)
	}
	return reply(w, http.StatusOK, life)
}
