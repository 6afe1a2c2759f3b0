package dashboard

import (
	"errors"
	"net/http"
	"slices"

	"throatwatch/dashboard/compare"
)

// mostCompared is how many runs are compared at a time.
const mostCompared = 20

// compare answers with the differences of stored runs: a and b, or by an operating
// parameter any number of a and the last run b.
func (s *Server) compare(w http.ResponseWriter, r *http.Request) error {
	q := r.URL.Query()
	o := compare.Options{Mark: q.Get("mark"), All: q.Get("scans") == "all"}
	var err error
	if o.By, err = compare.ParseBy(q.Get("by")); err != nil {
		return badRequest("%v", err)
	}
	ids := append(slices.Clone(q["a"]), q["b"]...)
	if len(q["a"]) == 0 || len(q["b"]) != 1 || len(ids) > mostCompared {
		return badRequest("give a, up to %d times, and b once: ids of stored runs", mostCompared-1)
	}
	runs := make([]compare.Run, len(ids))
	for i, id := range ids {
		f, line, err := s.open(r.Context(), id)
		if err != nil {
			return err
		}
		defer f.Close() //nolint:errcheck // it is only read
		runs[i] = compare.Run{File: f, Header: line.Header}
	}
	var out any
	switch {
	case o.By == compare.NPR || o.By == compare.ReferredSpeed:
		out, err = compare.ByParameter(r.Context(), runs, s.cfg.Parse, o)
	case len(runs) != 2:
		return badRequest("more than two runs are compared by npr or referred_speed")
	default:
		out, err = compare.ByTime(r.Context(), &runs[0], &runs[1], o)
	}
	if errors.Is(err, compare.ErrOption) {
		return badRequest("%v", err)
	}
	if err != nil {
		return err
	}
	return reply(w, http.StatusOK, out)
}
