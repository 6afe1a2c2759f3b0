package dashboard_test

import (
	"bytes"
	"encoding/json"
	"fmt"
	"mime"
	"net/http"
	"net/url"
	"regexp"
	"slices"
	"strings"
	"testing"

	"throatwatch/dashboard"
	"throatwatch/ingest"
	"throatwatch/monitor"
)

// operation finds the description of a request, "" when there is none.
func (d document) operation(method, path string) (template string, op map[string]any) {
	if item, ok := d.at("paths")[path].(map[string]any); ok { // before any path with a variable
		if op, ok := item[strings.ToLower(method)].(map[string]any); ok {
			return path, op
		}
	}
	for template, item := range d.at("paths") {
		op, ok := item.(map[string]any)[strings.ToLower(method)].(map[string]any)
		if !ok {
			continue
		}
		want, got := strings.Split(template, "/"), strings.Split(path, "/")
		if slices.EqualFunc(want, got, func(want, got string) bool {
			return want == got || got != "" && strings.HasPrefix(want, "{")
		}) {
			return template, op
		}
	}
	return "", nil
}

// parameters gives the parameters of an operation in a place, by name.
func (d document) parameters(op map[string]any, in string) map[string]map[string]any {
	out := map[string]map[string]any{}
	list, _ := op["parameters"].([]any)
	for _, p := range list {
		p := d.resolve(p.(map[string]any))
		if p["in"] == in {
			out[p["name"].(string)] = p
		}
	}
	return out
}

// response gives what is described for a status.
func (d document) response(op map[string]any, status int) map[string]any {
	responses := op["responses"].(map[string]any)
	r, ok := responses[fmt.Sprint(status)].(map[string]any)
	if !ok {
		if status < 400 {
			return nil
		}
		r = responses["default"].(map[string]any)
	}
	return d.resolve(r)
}

// checkDescribed checks a request and its answer against openapi.json: the path, the
// query, the body of a request that was accepted, the status, the content type and
// the body of the answer.
func checkDescribed(t *testing.T, method, path, body string, a answer) {
	t.Helper()
	doc := description()
	path, query, _ := strings.Cut(path, "?")
	template, op := doc.operation(method, path)
	if op == nil {
		t.Fatalf("%s %s is not described", method, path)
	}
	given, err := url.ParseQuery(query)
	if err != nil {
		t.Fatal(err)
	}
	for name := range given {
		if doc.parameters(op, "query")[name] == nil {
			t.Errorf("%s %s: the parameter %q is not described", method, template, name)
		}
	}
	if body != "" && a.status < 300 {
		schema := doc.resolve(op["requestBody"].(map[string]any)["content"].(map[string]any)["application/json"].(map[string]any)["schema"].(map[string]any))
		checkValue(t, schema, []byte(body), "body of "+template)
	}
	response := doc.response(op, a.status)
	if response == nil {
		t.Fatalf("%s %s: the status %d is not described", method, template, a.status)
	}
	if response["content"] == nil && len(a.body) == 0 {
		return
	}
	kind, _, err := mime.ParseMediaType(a.header.Get("Content-Type"))
	if err != nil {
		t.Fatalf("%s %s: %v", method, template, err)
	}
	content, ok := response["content"].(map[string]any)[kind].(map[string]any)
	if !ok {
		t.Fatalf("%s %s: the content type %q is not described for %d", method, template, kind, a.status)
	}
	schema := content["schema"].(map[string]any)
	switch kind {
	case "application/x-ndjson":
		for i, line := range lines(a.body) {
			checkValue(t, schema, line, fmt.Sprintf("line %d of %s", i+1, template))
		}
	case "text/plain", "text/csv", "text/html", "application/vnd.apache.parquet":
	default:
		checkValue(t, schema, a.body, template)
	}
	if a.status >= 400 && kind == "application/problem+json" {
		p := into[struct {
			Status   int
			Detail   string
			Instance string
		}](t, a)
		if p.Status != a.status || p.Detail == "" || p.Instance != path {
			t.Errorf("%s %s: the problem %s tells another status or path than %d, or nothing", method, path, a.body, a.status)
		}
	}
}

func checkValue(t *testing.T, schema map[string]any, text []byte, at string) {
	t.Helper()
	var v any
	if err := json.Unmarshal(text, &v); err != nil {
		t.Fatalf("%s: %v: %s", at, err, text)
	}
	for _, fault := range description().check(schema, v, at) {
		t.Error(fault)
	}
}

// lines gives the lines of an NDJSON answer.
func lines(body []byte) [][]byte {
	if len(body) == 0 {
		return nil
	}
	return bytes.Split(bytes.TrimSuffix(body, []byte("\n")), []byte("\n"))
}

// What is served is described, and what is described is served.
func TestOpenAPIRoutes(t *testing.T) {
	var described []string
	for path, item := range description().at("paths") {
		for method := range item.(map[string]any) {
			described = append(described, strings.ToUpper(method)+" "+path)
		}
	}
	served := dashboard.NewServer(dashboard.Config{}, dashboard.NewHub("")).Patterns()
	slices.Sort(described)
	slices.Sort(served)
	if !slices.Equal(described, served) {
		t.Errorf("described %q\nserved    %q", described, served)
	}
}

// Every operation is complete: an id of its own, a summary, each parameter of its path,
// examples that fit, and problems for refusals.
func TestOpenAPIOperations(t *testing.T) {
	doc := description()
	if doc["openapi"] != "3.1.0" {
		t.Errorf("openapi %v: the schemas are those of 3.1 [OpenAPI 3.1.0 4.8.24]", doc["openapi"])
	}
	ids := map[string]bool{}
	for path, item := range doc.at("paths") {
		for method, v := range item.(map[string]any) {
			op := v.(map[string]any)
			id, _ := op["operationId"].(string)
			if id == "" || ids[id] || op["summary"] == "" || op["summary"] == nil {
				t.Errorf("%s %s has no id of its own or no summary", method, path)
			}
			ids[id] = true
			var inPath []string
			for _, m := range regexp.MustCompile(`\{(\w+)\}`).FindAllStringSubmatch(path, -1) {
				inPath = append(inPath, m[1])
			}
			for _, in := range []string{"path", "query"} {
				for name, p := range doc.parameters(op, in) {
					if in == "path" && !slices.Contains(inPath, name) || p["description"] == "" {
						t.Errorf("%s %s: parameter %q is not in the path or not described", method, path, name)
					}
					if p["example"] == nil {
						continue
					}
					for _, fault := range doc.check(p["schema"].(map[string]any), p["example"], path+" "+name) {
						t.Error(fault)
					}
				}
			}
			if got := len(doc.parameters(op, "path")); got != len(inPath) {
				t.Errorf("%s %s describes %d parameters of its path", method, path, got)
			}
			for status, r := range op["responses"].(map[string]any) {
				r := doc.resolve(r.(map[string]any))
				content, _ := r["content"].(map[string]any)
				if r["description"] == nil || (status >= "4" && content["application/problem+json"] == nil) {
					t.Errorf("%s %s: the response %s has no description or is no problem", method, path, status)
				}
			}
		}
	}
	for name, s := range doc.at("components", "schemas") {
		doc.check(s.(map[string]any), map[string]any{}, name) // panics at a reference or keyword that is none
	}
}

// Every request that is described is answered as described, by the examples that the
// document itself gives.
func TestOpenAPIExamples(t *testing.T) {
	r := recorded()
	doc := description()
	for path, item := range doc.at("paths") {
		for method, v := range item.(map[string]any) {
			op := v.(map[string]any)
			if path == "/live" || path == "/openapi.json" || path == "/api/alarms/figures" {
				continue // a websocket; the document itself; and the run of these tests is over
			}
			t.Run(method+" "+path, func(t *testing.T) {
				target := path
				for name, p := range doc.parameters(op, "path") {
					value := fmt.Sprint(p["example"])
					if name == "id" && strings.HasPrefix(path, "/api/runs/") {
						value = r.id // the run is of these tests
					}
					target = strings.ReplaceAll(target, "{"+name+"}", url.PathEscape(value))
				}
				query := url.Values{}
				for name, p := range doc.parameters(op, "query") {
					switch p["example"] {
					case nil:
					case doc.at("components", "parameters", "run")["example"]:
						query.Set(name, r.id)
					default:
						query.Set(name, fmt.Sprint(p["example"]))
					}
				}
				if len(query) > 0 {
					target += "?" + query.Encode()
				}
				if method == "get" {
					if a := r.get(t, target); a.status != http.StatusOK {
						t.Errorf("status %d: %s", a.status, a.body)
					}
					return
				}
				var body []byte
				if request, ok := op["requestBody"].(map[string]any); ok {
					var err error
					if body, err = json.Marshal(request["content"].(map[string]any)["application/json"].(map[string]any)["example"]); err != nil {
						t.Fatal(err)
					}
				}
				d := newDesk(t)
				if a := d.call(t, strings.ToUpper(method), target, string(body)); a.status == http.StatusBadRequest {
					t.Errorf("the example is refused: %s", a.body)
				}
			})
		}
	}
}

// The document is served as it is, and its schema of the operating point has the very
// quantities there are.
func TestOpenAPIDocument(t *testing.T) {
	a := recorded().get(t, "/openapi.json")
	served := into[map[string]any](t, a)
	if a.status != http.StatusOK || served["openapi"] != "3.1.0" || len(served["paths"].(map[string]any)) != len(description().at("paths")) {
		t.Errorf("status %d, openapi %v", a.status, served["openapi"])
	}
	point := description().at("components", "schemas", "OperatingPointFrame", "properties")
	for q := range monitor.NumQuantities {
		info := q.Info()
		p, ok := point[info.Name].(map[string]any)
		if want := strings.TrimSuffix(info.Title+", "+info.Unit, ", ") + "."; !ok || p["description"] != want {
			t.Errorf("quantity %s: described as %v, want %q", info.Name, p["description"], want)
		}
	}
	counters := description().at("components", "schemas", "StatusFrame", "properties", "counters", "properties")
	for reason := ingest.ReasonNone + 1; reason < ingest.NumReasons; reason++ {
		if counters[reason.String()] == nil {
			t.Errorf("the counter %s is not described", reason)
		}
	}
}
