package dashboard

import (
	"embed"
	"io/fs"
	"net/http"
)

// The page as it was built: deploy/build puts it there before the binary is
// compiled. "all:" keeps files whose names begin with "_".
//
//go:embed all:web/dist
var dist embed.FS

// page serves the built page, or says how to build it.
func (s *Server) page() handler {
	sub, err := fs.Sub(dist, "web/dist")
	if err != nil {
		panic("dashboard: embedded page: " + err.Error())
	}
	_, missing := fs.Stat(sub, "index.html")
	files := http.FileServerFS(sub)
	refuse := notAllowed([]string{http.MethodGet})
	return func(w http.ResponseWriter, r *http.Request) error {
		switch {
		case r.Method != http.MethodGet && r.Method != http.MethodHead:
			return refuse(w, r)
		case missing != nil:
			return notFound("this binary was compiled without its page: run deploy/build")
		}
		files.ServeHTTP(w, r)
		return nil
	}
}
