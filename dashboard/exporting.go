package dashboard

import (
	"errors"
	"fmt"
	"net/http"
	"net/url"
	"strings"

	"throatwatch/dashboard/export"
)

// exports is how many exports and reports are served at a time: one heavy reader beside
// a run that is on. Further ones are answered 503 with the time to wait.
const exports = 1

// heavy takes a slot of a heavy reader; release gives it back.
func (s *Server) heavy(w http.ResponseWriter) (release func(), err error) {
	select {
	case s.exporting <- struct{}{}:
		return func() { <-s.exporting }, nil
	default:
		w.Header().Set("Retry-After", "10")
		return nil, &problem{http.StatusServiceUnavailable, "another export or report is being written: try again when it is done"}
	}
}

// exportOptions reads what of a run is asked for. Its errors are ErrOption.
func exportOptions(q url.Values, started int64) (o export.Options, err error) {
	if o.What, err = export.ParseWhat(q.Get("what")); err != nil {
		return o, err
	}
	if o.Format, err = export.ParseFormat(q.Get("format")); err != nil {
		return o, err
	}
	if o.From, o.To, err = export.Stretch(q.Get("from"), q.Get("to"), started); err != nil {
		return o, err
	}
	if names := q.Get("columns"); names != "" {
		o.Columns = strings.Split(names, ",")
	}
	if o.Every, err = export.ParseEvery(q.Get("every")); err != nil {
		return o, err
	}
	o.Statistics, err = export.ParseStatistics(q.Get("statistics"))
	return o, err
}

// export answers with a table of a stored run as a file. One that fails on the way
// is broken off, so that the client does not take it for whole.
func (s *Server) export(w http.ResponseWriter, r *http.Request) error {
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
	o, err := exportOptions(r.URL.Query(), run.Started)
	var e *export.Export
	if err == nil {
		e, err = export.New(r.Context(), f, s.cfg.Parse, o)
	}
	if errors.Is(err, export.ErrOption) {
		return badRequest("%v", err)
	}
	if err != nil {
		return err
	}
	h := w.Header()
	h.Set("Content-Type", o.Format.MediaType())
	h.Set("Content-Disposition", fmt.Sprintf("attachment; filename=%q", e.Name()))
	h.Set("Cache-Control", "no-store")
	if _, err := e.Write(r.Context(), w); err != nil {
		if r.Context().Err() == nil {
			s.cfg.Log.Error("export", "path", r.URL.Path, "err", err)
		}
		panic(http.ErrAbortHandler)
	}
	return nil
}
