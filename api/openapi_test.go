package api_test

import (
	"bytes"
	"encoding/json"
	"flag"
	"fmt"
	"math"
	"net/http"
	"os"
	"regexp"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

var update = flag.Bool("update", false, "write golden files anew")

const goldenDescription = "testdata/openapi.json"

func TestDescriptionIsTheGoldenOne(t *testing.T) {
	b := openBench(t)
	got := b.want(200, request{method: "GET", path: "/openapi.json"}).Body
	if *update {
		b.must(os.MkdirAll("testdata", 0o755))
		b.must(os.WriteFile(goldenDescription, append(got, '\n'), 0o644))
	}
	want, err := os.ReadFile(goldenDescription)
	b.must(err)
	if diff := cmp.Diff(strings.Split(strings.TrimSpace(string(want)), "\n"), strings.Split(string(got), "\n")); diff != "" {
		t.Errorf("the API description differs from %s; if the change is meant, run the test with -update and say why (-want +got):\n%.4000s", goldenDescription, diff)
	}
	yaml := b.want(200, request{method: "GET", path: "/openapi.yaml"})
	if !bytes.Contains(yaml.Body, []byte("openapi: 3.1.0")) {
		t.Errorf("no 3.1 description in YAML: %.200s", yaml.Body)
	}
}

// A document is an OpenAPI description as far as the tests read it.
type document struct {
	OpenAPI    string                           `json:"openapi"`
	Paths      map[string]map[string]*operation `json:"paths"`
	Components struct {
		Schemas   map[string]*schema   `json:"schemas"`
		Responses map[string]*response `json:"responses"`
	} `json:"components"`
}

type response struct {
	Ref     string                              `json:"$ref"`
	Content map[string]struct{ Schema *schema } `json:"content"`
}

// response is what is described for a status, its reference resolved.
func (d document) response(op *operation, status int) *response {
	r := op.Responses[fmt.Sprint(status)]
	if r != nil && r.Ref != "" {
		return d.Components.Responses[strings.TrimPrefix(r.Ref, "#/components/responses/")]
	}
	return r
}

type operation struct {
	OperationID string `json:"operationId"`
	Parameters  []struct {
		Name, In string
		Required bool
	} `json:"parameters"`
	RequestBody *struct {
		Content map[string]struct{ Schema *schema } `json:"content"`
	} `json:"requestBody"`
	Responses map[string]*response  `json:"responses"`
	Security  []map[string][]string `json:"security"`
}

// A schema has the keywords that the description uses; a test below holds it
// to that.
type schema struct {
	Ref                  string             `json:"$ref"`
	AnyOf                []*schema          `json:"anyOf"`
	Type                 any                `json:"type"`
	Properties           map[string]*schema `json:"properties"`
	Required             []string           `json:"required"`
	AdditionalProperties any                `json:"additionalProperties"`
	Items                *schema            `json:"items"`
	Enum                 []any              `json:"enum"`
	Minimum              *float64           `json:"minimum"`
	Maximum              *float64           `json:"maximum"`
	MinItems             *int               `json:"minItems"`
	MaxItems             *int               `json:"maxItems"`
	MinLength            *int               `json:"minLength"`
	MaxLength            *int               `json:"maxLength"`
	Pattern              string             `json:"pattern"`
	Format               string             `json:"format"`
	ContentEncoding      string             `json:"contentEncoding"`
	Description          string             `json:"description"`
	Examples             []any              `json:"examples"`
	ReadOnly             bool               `json:"readOnly"`
	Default              any                `json:"default"`
}

func (b *bench) description() document {
	b.t.Helper()
	var d document
	decoder := json.NewDecoder(bytes.NewReader(b.want(200, request{method: "GET", path: "/openapi.json"}).Body))
	b.must(decoder.Decode(&d))
	return d
}

// check compares a value with a schema and names every difference.
func (d document) check(s *schema, place string, v any) []string {
	if s.Ref != "" {
		named := d.Components.Schemas[strings.TrimPrefix(s.Ref, "#/components/schemas/")]
		if named == nil {
			return []string{place + ": no schema " + s.Ref}
		}
		return d.check(named, place, v)
	}
	if len(s.AnyOf) > 0 {
		var first []string
		for i, one := range s.AnyOf {
			faults := d.check(one, place, v)
			if len(faults) == 0 {
				return nil
			}
			if i == 0 {
				first = faults
			}
		}
		return first
	}
	var faults []string
	add := func(format string, args ...any) { faults = append(faults, place+": "+fmt.Sprintf(format, args...)) }
	types := []string{}
	switch x := s.Type.(type) {
	case string:
		types = append(types, x)
	case []any:
		for _, one := range x {
			types = append(types, one.(string))
		}
	}
	found := typeOf(v)
	if len(types) > 0 && !slices.Contains(types, found) && !(found == "integer" && slices.Contains(types, "number")) {
		add("found %s, described as %v", found, types)
		return faults
	}
	if len(s.Enum) > 0 && v != nil && !slices.Contains(s.Enum, v) {
		add("found %v, described as one of %v", v, s.Enum)
	}
	switch x := v.(type) {
	case map[string]any:
		for _, name := range s.Required {
			if _, ok := x[name]; !ok {
				add("no %q, which is described as required", name)
			}
		}
		for name, member := range x {
			if p := s.Properties[name]; p != nil {
				faults = append(faults, d.check(p, place+"."+name, member)...)
			} else if s.AdditionalProperties == false {
				add("%q is not described", name)
			}
		}
	case []any:
		for i, member := range x {
			if s.Items != nil {
				faults = append(faults, d.check(s.Items, fmt.Sprintf("%s[%d]", place, i), member)...)
			}
		}
	case float64:
		if s.Minimum != nil && x < *s.Minimum || s.Maximum != nil && x > *s.Maximum {
			add("%v is outside what is described", x)
		}
	case string:
		if s.Pattern != "" && !regexp.MustCompile(s.Pattern).MatchString(x) {
			add("%q does not match %s", x, s.Pattern)
		}
	}
	return faults
}

func typeOf(v any) string {
	switch x := v.(type) {
	case nil:
		return "null"
	case bool:
		return "boolean"
	case string:
		return "string"
	case float64:
		if x == math.Trunc(x) {
			return "integer"
		}
		return "number"
	case []any:
		return "array"
	}
	return "object"
}

// find matches an address with a path of the description: the most literal wins.
func (d document) find(method, address string) (string, *operation) {
	var best string
	var found *operation
	for path, operations := range d.Paths {
		op := operations[strings.ToLower(method)]
		if op == nil || !matchPath(path, address) {
			continue
		}
		if found == nil || strings.Count(path, "{") < strings.Count(best, "{") {
			best, found = path, op
		}
	}
	return best, found
}

func matchPath(path, address string) bool {
	want, got := strings.Split(path, "/"), strings.Split(address, "/")
	if len(want) != len(got) {
		return false
	}
	for i := range want {
		if want[i] != got[i] && !strings.HasPrefix(want[i], "{") {
			return false
		}
	}
	return true
}

// checkAnswers holds every answer of a test against the description: the
// status is declared, the body has the shape that it says.
func (b *bench) checkAnswers() (operations map[string]bool) {
	b.t.Helper()
	d := b.description()
	operations = map[string]bool{}
	b.mu.Lock()
	watched := slices.Clone(b.watched)
	b.mu.Unlock()
	for _, e := range watched {
		if !strings.HasPrefix(e.path, "/v1/") {
			continue
		}
		path, op := d.find(e.method, e.path)
		if op == nil {
			if e.Status != http.StatusNotFound && e.Status != http.StatusMethodNotAllowed {
				b.t.Errorf("%s %s: status %d from what is not described", e.method, e.path, e.Status)
			}
			continue
		}
		name := e.method + " " + path
		response := d.response(op, e.Status)
		if response == nil {
			b.t.Errorf("%s: status %d is not described: %.300s", name, e.Status, e.Body)
			continue
		}
		media, _, _ := strings.Cut(e.Header.Get("Content-Type"), ";")
		content, ok := response.Content[media]
		if !ok {
			b.t.Errorf("%s: status %d has the media type %q, which is not described", name, e.Status, media)
			continue
		}
		if e.Status < 300 {
			operations[name] = true
		}
		if !strings.HasSuffix(media, "json") {
			continue
		}
		var v any
		if err := json.Unmarshal(e.Body, &v); err != nil {
			b.t.Errorf("%s: %v in %.300s", name, err, e.Body)
			continue
		}
		for i, fault := range d.check(content.Schema, "body", v) {
			if i == 5 {
				break
			}
			b.t.Errorf("%s, status %d: %s", name, e.Status, fault)
		}
	}
	return operations
}

// TestDescriptionUsesOnlyKeywordsThatTheTestsRead keeps the comparison above honest.
func TestDescriptionUsesOnlyKeywordsThatTheTestsRead(t *testing.T) {
	b := openBench(t)
	var raw struct {
		Components struct {
			Schemas map[string]json.RawMessage `json:"schemas"`
		} `json:"components"`
	}
	b.must(json.Unmarshal(b.want(200, request{method: "GET", path: "/openapi.json"}).Body, &raw))
	if len(raw.Components.Schemas) < 40 {
		t.Fatalf("only %d schemas", len(raw.Components.Schemas))
	}
	for name, text := range raw.Components.Schemas {
		decoder := json.NewDecoder(bytes.NewReader(text))
		decoder.DisallowUnknownFields()
		if err := decoder.Decode(new(schema)); err != nil {
			t.Errorf("schema %s: %v", name, err)
		}
	}
}
