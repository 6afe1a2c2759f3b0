package influx_test

import (
	"io"
	"net/http"
	"net/http/httptest"
	"strings"
	"testing"
	"time"

	"throatwatch/monitor/influx"
)

// TestCheckOfVersion2 checks what is written and asked against the paths, the token
// and the annotated CSV of the InfluxDB 2 API (docs.influxdata.com, from memory).
// A real 1.8 is checked by the tests of the daemon.
func TestCheckOfVersion2(t *testing.T) {
	t.Parallel()
	const point = "#datatype,string,long,dateTime:RFC3339,boolean,string,string,string\r\n#group,false,false,false,false,true,true,true\r\n" +
		"#default,_result,,,,,,\r\n,result,table,_time,_value,_field,_measurement,rig\r\n,,0,2026-03-02T09:00:00Z,true,written,check,cell_2\r\n\r\n"
	for _, tt := range []struct {
		name           string
		write, query   int
		answer         string
		unread, failed string
	}{
		{"gives it back", http.StatusNoContent, http.StatusOK, point, "", ""},
		{"loses it", http.StatusNoContent, http.StatusOK, "\r\n", "not found again", ""},
		{"may not be read", http.StatusNoContent, http.StatusUnauthorized, `{"code":"unauthorized","message":"unauthorized access"}`, "unauthorized access", ""},
		{"may not be written", http.StatusUnauthorized, http.StatusOK, point, "", "401"},
		{"has no such bucket", http.StatusNotFound, http.StatusOK, point, "", "404"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			server := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
				if r.Header.Get("Authorization") != "Token secret" {
					t.Errorf("%s by %q", r.URL, r.Header.Get("Authorization"))
				}
				switch r.URL.Path {
				case "/api/v2/write":
					w.WriteHeader(tt.write)
				case "/api/v2/query":
					text, _ := io.ReadAll(r.Body)
					for _, want := range []string{"hall", "2026-03-02T09:00:00Z", "check", "cell_2"} {
						if !strings.Contains(string(text), want) {
							t.Errorf("%q is not asked for in %s", want, text)
						}
					}
					w.Header().Set("Content-Type", map[int]string{http.StatusOK: "text/csv"}[tt.query])
					w.WriteHeader(tt.query)
					_, _ = io.WriteString(w, tt.answer)
				default:
					t.Errorf("asked for %s", r.URL)
				}
			}))
			defer server.Close()
			unread, err := influx.Check(t.Context(), influx.Target{URL: server.URL, Org: "site", Bucket: "hall", Token: "secret"}, "cell_2",
				time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC))
			check := func(what string, got error, want string) {
				if (got == nil) != (want == "") || got != nil && !strings.Contains(got.Error(), want) {
					t.Errorf("%s: %v, want %q", what, got, want)
				}
				if got != nil && strings.Contains(got.Error(), "secret") {
					t.Errorf("%v shows the token", got)
				}
			}
			check("unread", unread, tt.unread)
			check("failed", err, tt.failed)
		})
	}
}
