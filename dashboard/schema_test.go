package dashboard_test

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"reflect"
	"regexp"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"
	"unicode/utf8"
)

// document is openapi.json, decoded.
type document map[string]any

var description = sync.OnceValue(func() document {
	text, err := os.ReadFile("openapi.json")
	must(err)
	var d document
	must(json.Unmarshal(text, &d))
	return d
})

// at follows keys into the document.
func (d document) at(keys ...string) map[string]any {
	v := map[string]any(d)
	for _, k := range keys {
		next, ok := v[k].(map[string]any)
		if !ok {
			panic(fmt.Sprintf("openapi.json has no object %q of %q", k, keys))
		}
		v = next
	}
	return v
}

// resolve follows a reference, if v is one.
func (d document) resolve(v map[string]any) map[string]any {
	ref, ok := v["$ref"].(string)
	if !ok {
		return v
	}
	path, ok := strings.CutPrefix(ref, "#/")
	if !ok {
		panic("openapi.json refers to " + ref)
	}
	return d.at(strings.Split(path, "/")...)
}

// check gives what is wrong with v by a schema, nothing when all is well. It knows
// the keywords that the document uses and no others. It is stricter than JSON
// Schema: a key that is not described is a fault too.
func (d document) check(schema map[string]any, v any, at string) (faults []string) {
	fault := func(format string, args ...any) {
		faults = append(faults, at+": "+fmt.Sprintf(format, args...))
	}
	schema = d.resolve(schema)
	for keyword, arg := range schema {
		switch keyword {
		case "description", "example", "properties":
		case "type":
			if !ofType(arg, v) {
				fault("%T is no %v", v, arg)
			}
		case "const":
			if !reflect.DeepEqual(v, arg) {
				fault("%v is not %v", v, arg)
			}
		case "enum":
			if !slices.Contains(arg.([]any), v) {
				fault("%v is none of %v", v, arg)
			}
		case "minimum":
			if n, ok := v.(float64); ok && n < arg.(float64) {
				fault("%v is below %v", v, arg)
			}
		case "maximum":
			if n, ok := v.(float64); ok && n > arg.(float64) {
				fault("%v is above %v", v, arg)
			}
		case "minLength":
			if s, ok := v.(string); ok && float64(len(s)) < arg.(float64) {
				fault("%q is too short", v)
			}
		case "pattern":
			if s, ok := v.(string); ok && !regexp.MustCompile(arg.(string)).MatchString(s) {
				fault("%q does not match %s", v, arg)
			}
		case "format":
			s, ok := v.(string)
			if _, err := time.Parse(time.RFC3339Nano, s); ok && (arg != "date-time" || err != nil || !strings.HasSuffix(s, "Z")) {
				fault("%q is no %s in UTC", v, arg)
			}
		case "required":
			if o, ok := v.(map[string]any); ok {
				for _, k := range arg.([]any) {
					if _, ok := o[k.(string)]; !ok {
						fault("lacks %q", k)
					}
				}
			}
		case "items":
			if list, ok := v.([]any); ok {
				for i, item := range list {
					faults = append(faults, d.check(arg.(map[string]any), item, fmt.Sprintf("%s[%d]", at, i))...)
				}
			}
		case "oneOf":
			faults = append(faults, d.checkOneOf(schema, v, at)...)
		case "discriminator", "additionalProperties": // with oneOf and below
		default:
			panic("openapi.json uses the keyword " + keyword)
		}
	}
	if o, ok := v.(map[string]any); ok {
		faults = append(faults, d.checkMembers(schema, o, at)...)
	}
	return faults
}

// checkMembers checks the members of an object that are described one by one or all
// alike. A schema that says nothing of members lets every object pass.
func (d document) checkMembers(schema map[string]any, o map[string]any, at string) (faults []string) {
	properties, listed := schema["properties"].(map[string]any)
	alike, same := schema["additionalProperties"].(map[string]any)
	if !listed && !same {
		return nil
	}
	for k, member := range o {
		if p, ok := properties[k].(map[string]any); ok {
			faults = append(faults, d.check(p, member, at+"."+k)...)
		} else if same {
			faults = append(faults, d.check(alike, member, at+"."+k)...)
		} else {
			faults = append(faults, fmt.Sprintf("%s: %q is not described", at, k))
		}
	}
	return faults
}

func (d document) checkOneOf(schema map[string]any, v any, at string) []string {
	if by, ok := schema["discriminator"].(map[string]any); ok {
		o, _ := v.(map[string]any)
		kind, _ := o[by["propertyName"].(string)].(string)
		ref, ok := by["mapping"].(map[string]any)[kind]
		if !ok {
			return []string{fmt.Sprintf("%s: kind %q is not described", at, kind)}
		}
		return d.check(map[string]any{"$ref": ref}, v, at)
	}
	var all []string
	fitting := 0
	for _, s := range schema["oneOf"].([]any) {
		if faults := d.check(s.(map[string]any), v, at); len(faults) > 0 {
			all = append(all, faults...)
		} else {
			fitting++
		}
	}
	if fitting != 1 {
		return append(all, fmt.Sprintf("%s: fits %d of the schemas", at, fitting))
	}
	return nil
}

func ofType(want, v any) bool {
	if list, ok := want.([]any); ok {
		return slices.ContainsFunc(list, func(one any) bool { return ofType(one, v) })
	}
	switch v := v.(type) {
	case nil:
		return want == "null"
	case string:
		return want == "string"
	case bool:
		return want == "boolean"
	case float64:
		return want == "number" || want == "integer" && v == math.Trunc(v)
	case []any:
		return want == "array"
	case map[string]any:
		return want == "object"
	}
	return false
}

// checkJSON checks a text against the schema of a name.
func checkJSON(t *testing.T, schema string, text []byte) map[string]any {
	t.Helper()
	if !utf8.Valid(text) { // a text message must be [RFC 6455 5.6]
		t.Errorf("%s is no UTF-8: %q", schema, text)
	}
	var v any
	if err := json.Unmarshal(text, &v); err != nil {
		t.Fatalf("%s is no JSON: %v\n%s", schema, err, text)
	}
	for _, fault := range description().check(description().at("components", "schemas", schema), v, schema) {
		t.Error(fault)
	}
	o, ok := v.(map[string]any)
	if !ok {
		t.Fatalf("%s is no object: %s", schema, text)
	}
	return o
}

// The checker finds each kind of fault: without this a test by it could not fail.
func TestSchemaChecker(t *testing.T) {
	d := document{"components": map[string]any{"schemas": map[string]any{
		"Inner": map[string]any{"type": "integer", "minimum": 1.0, "maximum": 9.0},
	}}}
	schema := func(text string) (s map[string]any) {
		must(json.Unmarshal([]byte(text), &s))
		return s
	}
	for _, tt := range []struct {
		name, schema, value string
		faults              int
	}{
		{"type", `{"type":"string"}`, `1`, 1},
		{"one of two types", `{"type":["number","null"]}`, `null`, 0},
		{"none of two types", `{"type":["number","null"]}`, `true`, 1},
		{"integer", `{"type":"integer"}`, `1.5`, 1},
		{"whole float", `{"type":"integer"}`, `2.0`, 0},
		{"const", `{"const":"a"}`, `"b"`, 1},
		{"enum", `{"enum":["a","b"]}`, `"c"`, 1},
		{"missing", `{"type":"object","required":["a"],"properties":{"a":{}}}`, `{}`, 1},
		{"not described", `{"type":"object","properties":{"a":{}}}`, `{"a":1,"b":2}`, 1},
		{"free", `{"type":"object"}`, `{"a":1}`, 0},
		{"alike", `{"type":"object","additionalProperties":{"type":"number"}}`, `{"a":1,"b":"x"}`, 1},
		{"reference", `{"$ref":"#/components/schemas/Inner"}`, `0`, 1},
		{"maximum", `{"$ref":"#/components/schemas/Inner"}`, `10`, 1},
		{"items", `{"type":"array","items":{"type":"boolean"}}`, `[true,1,2]`, 2},
		{"date", `{"type":"string","format":"date-time"}`, `"2026-03-02T09:00:00Z"`, 0},
		{"date with offset", `{"type":"string","format":"date-time"}`, `"2026-03-02T09:00:00+01:00"`, 1},
		{"pattern", `{"type":"string","pattern":"^a$"}`, `"ab"`, 1},
		{"length", `{"type":"string","minLength":1}`, `""`, 1},
		{"one of", `{"oneOf":[{"type":"null"},{"type":"string"}]}`, `"x"`, 0},
		{"none of", `{"oneOf":[{"type":"null"},{"type":"string"}]}`, `1`, 3},
	} {
		t.Run(tt.name, func(t *testing.T) {
			var v any
			must(json.Unmarshal([]byte(tt.value), &v))
			if got := d.check(schema(tt.schema), v, "v"); len(got) != tt.faults {
				t.Errorf("%d faults, want %d: %q", len(got), tt.faults, got)
			}
		})
	}
}
