package dashboard

import (
	_ "embed"
	"net/http"
)

//go:embed openapi.json
var openAPIDocument []byte

// openAPI answers with the description of the interface.
func (s *Server) openAPI(w http.ResponseWriter, _ *http.Request) error {
	return replyJSON(w, http.StatusOK, openAPIDocument)
}
