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

// ReadLog gives the operator log of a run from its file.
func ReadLog(ctx context.Context, f *runfile.File, h *runfile.Header) ([]pipeline.Entry, error) {
	list := []pipeline.Entry{}
	err := f.Events(ctx, h.Started, math.MaxInt64, func(e *runfile.Event) error {
		if e.Kind != "log" {
			return nil
		}
		var entry pipeline.Entry
		if err := json.Unmarshal(e.JSON, &entry); err != nil {
			return fmt.Errorf("entry %d.%d: %w", e.Epoch, e.N, err)
		}
		list = append(list, entry)
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("operator log: %w", err)
	}
	return list, nil
}

// logJSON is the operator log of a run.
type logJSON struct {
	Entries []pipeline.Entry `json:"entries"`
}

func (s *Server) operatorLog(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	entries, err := ReadLog(r.Context(), f, &run.Header)
	if err != nil {
		return err
	}
	return reply(w, http.StatusOK, logJSON{entries})
}
