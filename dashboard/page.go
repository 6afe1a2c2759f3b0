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
func page() http.Handler {
	sub, err := fs.Sub(dist, "web/dist")
	if err != nil {
		panic("dashboard: embedded page: " + err.Error())
	}
	if _, err := fs.Stat(sub, "index.html"); err != nil {
		return http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) {
			http.Error(w, "This binary was compiled without its page. Run deploy/build.", http.StatusNotFound)
		})
	}
	return http.FileServerFS(sub)
}
