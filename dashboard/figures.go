package dashboard

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"net/http"
	"slices"

	"throatwatch/ingest/runfile"
	"throatwatch/rules"
	"throatwatch/rules/figures"
	"throatwatch/rules/pipeline"
)

// ReadFigures gives the alarm figures of a run from its file: up to its end, or up to
// what is recorded while it is on.
func ReadFigures(ctx context.Context, f *runfile.File, h *runfile.Header) (figures.Figures, error) {
	tally, to := figures.New(h.Started), h.Ended
	if to == 0 {
		_, to = f.Durable()
	}
	done, err := standing(ctx, f, h.Started, tally)
	if err != nil {
		return figures.Figures{}, fmt.Errorf("alarm figures: %w", err)
	}
	type change struct {
		n     uint64
		alarm rules.Alarm
	}
	var changes []change
	err = f.Events(ctx, 0, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "alarm" || e.N <= done {
			return nil
		}
		c := change{n: e.N}
		if err := json.Unmarshal(e.JSON, &c.alarm); err != nil {
			return fmt.Errorf("alarm %d.%d: %w", e.Epoch, e.N, err)
		}
		changes = append(changes, c)
		return nil
	})
	if err != nil {
		return figures.Figures{}, fmt.Errorf("alarm figures: %w", err)
	}
	// As they came about: events lie by event time, which is host time for alarms on
	// the daemon.
	slices.SortFunc(changes, func(a, b change) int { return cmp.Compare(a.n, b.n) })
	for i := range changes {
		switch a := &changes[i].alarm; {
		case int64(a.Changed) < h.Started:
			tally.Before(a)
		case int64(a.Changed) <= to:
			tally.Add(a)
		}
	}
	return tally.At(to), nil
}

// standing tells the tally of the alarms as the file finds them, and gives the number
// of the outcome up to which that is so.
func standing(ctx context.Context, f *runfile.File, started int64, tally *figures.Tally) (n uint64, err error) {
	c, err := f.FirstCheckpoint(ctx)
	if errors.Is(err, runfile.ErrNoCheckpoint) || err == nil && c.Host > started {
		return 0, nil // the file goes back to the first record ever
	}
	if err != nil {
		return 0, err
	}
	state, err := pipeline.Decode(c.State)
	if err != nil {
		return 0, fmt.Errorf("checkpoint of record %d: %w", c.Seq, err)
	}
	for i := range state.Rules.Instances {
		in := &state.Rules.Instances[i]
		tally.Before(&rules.Alarm{Rule: in.Rule, Priority: in.Priority, State: rules.AlarmState(in.State), Changed: rules.Time(in.Changed)})
	}
	return state.N, nil
}

// runFigures answers with the alarm figures of a stored run.
func (s *Server) runFigures(w http.ResponseWriter, r *http.Request) error {
	return s.figuresOf(w, r, r.PathValue("id"))
}

// alarmFigures answers with the alarm figures of the run that is on.
func (s *Server) alarmFigures(w http.ResponseWriter, r *http.Request) error {
	id := ""
	if err := s.ask(r.Context(), "", func(_ *pipeline.Config, _ *pipeline.Machine, st *pipeline.State) {
		if st.RunActive {
			id = st.Run.ID
		}
	}); err != nil {
		return err
	}
	if id == "" {
		return notFound("no run is on; GET /api/runs/{id}/alarm-figures gives those of a stored one")
	}
	return s.figuresOf(w, r, id)
}

func (s *Server) figuresOf(w http.ResponseWriter, r *http.Request, id string) error {
	f, run, err := s.open(r.Context(), id)
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	figures, err := ReadFigures(r.Context(), f, &run.Header)
	if err != nil {
		return err
	}
	return reply(w, http.StatusOK, figures)
}
