package dashboard

import (
	"errors"
	"fmt"
	"io/fs"
	"net/http"
	"slices"
	"strconv"
	"strings"

	"throatwatch/ingest/runfile"
)

// Bounds of what people write about a run, bytes and number.
const (
	maxNotes = 16 << 10
	maxTag   = 64
	maxTags  = 32
)

// keepBody is the body that changes what is noted about a run. A field that is not
// there stays as it is.
type keepBody struct {
	Keep  *bool     `json:"keep"`
	Notes *string   `json:"notes"`
	Tags  *[]string `json:"tags"`
}

func (b *keepBody) check() error {
	if b.Notes != nil && len(*b.Notes) > maxNotes {
		return badRequest("notes: more than %d bytes", maxNotes)
	}
	if b.Tags == nil {
		return nil
	}
	if len(*b.Tags) > maxTags {
		return badRequest("tags: more than %d", maxTags)
	}
	for i, t := range *b.Tags {
		t = strings.TrimSpace(t)
		if t == "" || len(t) > maxTag {
			return badRequest("tags: a tag has 1 to %d bytes", maxTag)
		}
		(*b.Tags)[i] = t
	}
	return nil
}

// annotate changes what is noted about a stored run.
func (s *Server) annotate(w http.ResponseWriter, r *http.Request) error {
	var in keepBody
	if err := command(w, r, &in); err != nil {
		return err
	}
	if err := in.check(); err != nil {
		return err
	}
	run, err := s.cfg.Runs.Annotate(r.Context(), r.PathValue("id"), func(h *runfile.Header) {
		if in.Keep != nil {
			h.Keep = *in.Keep
		}
		if in.Notes != nil {
			h.Notes = *in.Notes
		}
		if in.Tags != nil {
			h.Tags = slices.Compact(slices.Sorted(slices.Values(*in.Tags)))
		}
	})
	if err != nil {
		return keepingProblem(err)
	}
	return reply(w, http.StatusOK, viewRun(&run))
}

// remove deletes a stored run. The number of the run, which the page shows, has to
// be given: nobody deletes the run beside the one that they mean.
func (s *Server) remove(w http.ResponseWriter, r *http.Request) error {
	if err := sameSite(r); err != nil {
		return err
	}
	id, why := r.PathValue("id"), strings.TrimSpace(r.URL.Query().Get("reason"))
	who, err := s.actor(r, "")
	if err != nil {
		return err
	}
	f, run, err := s.open(r.Context(), id)
	if err != nil {
		return err
	}
	_ = f.Close() // it was only read
	switch {
	case r.URL.Query().Get("number") != strconv.FormatUint(run.Number, 10):
		return badRequest("number: give the number of the run, %d, to confirm", run.Number)
	case why == "" || len(why) > maxNotes:
		return badRequest("reason: say in a few words why the run is deleted")
	}
	if err := s.cfg.Runs.Remove(r.Context(), id, who.Name, why); err != nil {
		return keepingProblem(err)
	}
	w.WriteHeader(http.StatusNoContent)
	return nil
}

func keepingProblem(err error) error {
	switch {
	case errors.Is(err, runfile.ErrUnknownRun), errors.Is(err, fs.ErrNotExist):
		return notFound("%v", err)
	case errors.Is(err, runfile.ErrKept), errors.Is(err, ErrRunning):
		return &problem{http.StatusConflict, err.Error()}
	case errors.Is(err, runfile.ErrFull):
		return &problem{http.StatusInsufficientStorage, err.Error()}
	}
	return fmt.Errorf("runs: %w", err)
}
