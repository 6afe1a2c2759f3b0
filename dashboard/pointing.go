package dashboard

import (
	"errors"
	"net/http"

	"throatwatch/dashboard/points"
)

// testPoints answers with the test points of a stored run.
func (s *Server) testPoints(w http.ResponseWriter, r *http.Request) error {
	f, run, err := s.open(r.Context(), r.PathValue("id"))
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it is only read
	o, err := points.ParseOptions(r.URL.Query(), run.Started)
	if err != nil {
		return badRequest("%v", err)
	}
	table, err := points.Read(r.Context(), f, &run.Header, s.cfg.Parse, o)
	if errors.Is(err, points.ErrOption) {
		return badRequest("%v", err)
	}
	if err != nil {
		return err
	}
	return reply(w, http.StatusOK, table)
}
